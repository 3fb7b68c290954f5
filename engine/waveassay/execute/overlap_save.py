"""Apply frequency responses and changes of rate to blocks of samples: numerics alone.

A block of n samples has n // 2 + 1 bins. A response multiplies them. A change of rate by U / D
(lowest terms) puts U - 1 zeros after each sample, which repeats the spectrum U times, multiplies
it by the kernel's gain, and keeps every D-th sample, which lays D parts of the spectrum over one
another. With n = D Q, and output bin m = Q u + q,

    Y[m] = U / D * sum over j = 0 .. D - 1 of X[Q j + q] * G[Q i + q],
    i = u + U k,  k = (j - u) / U modulo D

where X and G are whole spectra, negative frequencies included: real n has X[n - i] = conj X[i].

Where U is 1 and the change of rate comes first, the same sum is taken in another order. Of the D
sequences x[D s + p], each D-th sample of a block, the spectra P have Q bins each, and

    Y[m] = sum over p = 0 .. D - 1 of P[p, m] * H[p, m],
    H[p, m] = 1 / D * exp(-2 pi i p m / n) * sum over j of G[Q j + m] * exp(-2 pi i p j / D)

since X[k] is the sum over p of P[p, k modulo Q] * exp(-2 pi i p k / n). D short transforms, which
a core's own memory holds, cost less than a long one, and no part is left out.

The outcome is the circular convolution, so it is right where the response does not reach beyond
the block. Each block is treated alike whatever stands beside it: same block, same bytes.

Most parts of a spectrum lie in the kernel's stop band. What leaks through there is so small that
single precision gives it well below `NEGLIGIBLE`, in half the memory, which is what the sum costs.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from math import gcd
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Floats

#: Parts of the spectrum whose gain lies below this share everywhere are left out of the sum: of
#: an input of rms 1, what is left out of D parts has an rms of at most sqrt(D) times this.
NEGLIGIBLE = 1e-10
#: Where there are many, parts whose gain lies below this everywhere are taken in single precision,
#: which is right to about 3e-7 of what they give: 3e-11 of the input.
LEAKING = 1e-4

_TWOS = 32
# So few leaks are not worth another precision.
_FEW = 6
# Parts that stand up to so far apart are taken together.
_NEAR = 3

Gain = NDArray[Any]
Complex = NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True)
class _Part:
    """Consecutive parts j of the input's spectrum that go into one part u of the output's.

    Attributes
    ----------
    first : the first j, below 0 for negative frequencies.
    gain : shape (parts, bins) where complex; where real, each value stands twice, for the real and
        the imaginary part of a bin, shape (parts, 2 * bins).
    """

    u: int
    first: int
    gain: Gain


@dataclass(frozen=True)
class Fold:
    """One change of rate, with all responses before and after it: n samples to n * U / D.

    Attributes
    ----------
    part : Q, bins in a part.
    parts : those that pass, in order of u.
    leaks : those that are taken in single precision, likewise.
    """

    length_in: int
    length_out: int
    part: int
    parts: tuple[_Part, ...]
    leaks: tuple[_Part, ...]

    def of_blocks(self, blocks: Sequence[Floats] | Floats) -> Complex:
        """Return the output's bins of blocks of samples, shape (blocks, bins)."""
        from scipy import fft

        return self(fft.rfft(blocks, axis=-1))

    def __call__(self, bins: Complex) -> Complex:
        """Return the output's bins of each block, from its bins, shape (blocks, bins)."""
        made = self._sum(bins, self.parts)
        if self.leaks:
            with np.errstate(over="ignore", invalid="ignore"):
                few = bins[:, : self._heard(self.leaks)].astype(np.complex64)
                large = ~np.isfinite(np.sum(few.view(np.float32), axis=-1))
            few[large] = 0
            made += self._sum(few, self.leaks)
            for row in np.flatnonzero(large):  # single precision does not hold them
                made[row] += self._sum(bins[row : row + 1], self.leaks)[0]
        return made

    def _heard(self, parts: Sequence[_Part]) -> int:
        """Return how many bins of the input, from 0 Hz, are all that some parts take."""
        low = -min(0, *(part.first * self.part for part in parts))
        high = max(self._stop(part) for part in parts)
        half = self.length_in // 2 + 1
        return min(half, max(low + 1, high))

    def _stop(self, part: _Part) -> int:
        """Return the bin of the input after the last that a part takes."""
        count, size = (int(number) for number in part.gain.shape)
        last = size if np.iscomplexobj(part.gain) else size // 2
        return (part.first + count - 1) * self.part + last

    def _sum(self, bins: Complex, parts: Sequence[_Part]) -> Complex:
        made = np.empty((bins.shape[0], self.length_out // 2 + 1), bins.dtype)
        kind, filled = bins.real.dtype, 0
        negative = [part for part in parts if part.first < 0]
        if negative:
            lowest = self.part * min(part.first for part in negative)
            from_lowest = self._from(bins, lowest, max(self._stop(part) for part in negative))
        for part in parts:
            start, low = part.first * self.part, part.u * self.part
            taken, to = bins, made
            if part.first < 0:
                start, taken = start - lowest, from_lowest
            wide = 1 if np.iscomplexobj(part.gain) else 2
            if wide == 2:
                taken, to = taken.view(kind), made.view(kind)
            count, size = part.gain.shape
            row, item = taken.strides
            several = np.ndarray(
                (taken.shape[0], count, size),
                taken.dtype,
                taken,
                offset=wide * start * item,
                strides=(row, wide * self.part * item, item),
            )
            to = to[:, wide * low : wide * low + size]
            if low < filled:
                to += np.einsum("bjq,jq->bq", several, part.gain)
                continue
            made[:, filled:low] = 0
            np.einsum("bjq,jq->bq", several, part.gain, out=to)
            filled = low + size // wide
        made[:, filled:] = 0
        return made

    def _from(self, bins: Complex, lowest: int, stop: int) -> Complex:
        """Return the spectrum from a negative frequency on: bin -i is conj of bin i."""
        half, below = self.length_in // 2 + 1, min(0, stop)
        whole = np.empty((bins.shape[0], stop - lowest), bins.dtype)
        direct = max(0, 1 - half - lowest)  # beyond the lowest, bins are those from above again
        first = self.length_in + lowest
        whole[:, :direct] = bins[:, first : first + direct]
        turned = bins[:, -lowest - direct : -below : -1]
        np.conj(turned, out=whole[:, direct : below - lowest])
        whole[:, below - lowest :] = bins[:, : stop - below]
        return whole


@dataclass(frozen=True)
class Decimation:
    """A change of rate by 1 / D, with all responses before and after it, of samples.

    Attributes
    ----------
    gain : H, shape (D, Q // 2 + 1).
    """

    length_in: int
    length_out: int
    gain: Complex

    def of_blocks(self, blocks: Sequence[Floats] | Floats) -> Complex:
        """Return the output's bins of blocks of samples, shape (blocks, bins)."""
        from scipy import fft

        made = np.empty((len(blocks), self.gain.shape[1]), np.complex128)
        for block, out in zip(blocks, made, strict=True):
            parts = fft.rfft(block.reshape(self.length_out, -1).T, axis=-1)
            np.multiply(parts[0], self.gain[0], out=out)
            for part, gain in zip(parts[1:], self.gain[1:], strict=True):
                part *= gain
                out += part
        return made


def decimation_of(length: int, down: int, gain: Gain) -> Decimation:
    """Return a change of rate by 1 / D with all responses before and after it.

    Parameters
    ----------
    length : n, samples of a block of input; a multiple of D.
    gain : of all of them but for repeats of the output's bins, at the input's rate, shape
        (n // 2 + 1,).
    """
    assert length % down == 0, "a block is whole samples at both rates"
    from scipy import fft

    part = length // down
    turns = np.outer(np.arange(down), np.arange(part // 2 + 1)) / length
    parts = _whole(gain, length).reshape(down, part)[:, : part // 2 + 1]
    made = fft.fft(parts, axis=0) * np.exp(-2j * np.pi * turns)
    return Decimation(length, part, made / down)


def fold_of(length: int, ratio: Fraction, before: Gain, between: Gain, after: Gain) -> Fold:
    """Return a change of rate with the responses on either side of it.

    Parameters
    ----------
    length : n, samples of a block of input; a multiple of D.
    ratio : U / D.
    before : gain at the input's rate, shape (n // 2 + 1,).
    between : gain of the kernel at U times that rate, shape (n * U // 2 + 1,).
    after : gain at the output's rate, shape (n * U // D // 2 + 1,).
    """
    up, down = ratio.numerator, ratio.denominator
    assert length % down == 0, "a block is whole samples at both rates"
    part, length_out = length // down, length * up // down
    whole_before, whole_between = _whole(before, length), _whole(between, length * up)
    back = pow(up, -1, down) if down > 1 else 0
    half = length // 2 + 1
    parts: list[_Part] = []
    leaks: list[_Part] = []
    for u in range(length_out // 2 // part + 1):
        bins = min(part, length_out // 2 + 1 - u * part)
        here = slice(u * part, u * part + bins)
        rows = {}
        for j in range(down):
            i = u + up * ((j - u) * back % down)
            taken = whole_before[j * part : j * part + bins]
            row = taken * whole_between[i * part : i * part + bins] * after[here] * float(ratio)
            rows[j if j * part + bins <= half else j - down] = row
        sizes = {j: float(np.max(np.abs(row))) / float(ratio) for j, row in rows.items()}
        leaking = [j for j in sorted(rows) if NEGLIGIBLE < sizes[j] < LEAKING]
        if len(leaking) <= _FEW:
            leaking = []
        passing = [j for j in sorted(rows) if sizes[j] > NEGLIGIBLE and j not in leaking]
        for side in (True, False):
            parts.extend(_parts(u, rows, [j for j in passing if (j < 0) is side]))
        single = {np.dtype(np.float64): np.float32, np.dtype(np.complex128): np.complex64}
        for found in _parts(u, rows, leaking):
            leaks.append(replace(found, gain=found.gain.astype(single[found.gain.dtype])))
    return Fold(length, length_out, part, tuple(parts), tuple(leaks))


def _parts(u: int, rows: Mapping[int, Gain], chosen: Sequence[int]) -> list[_Part]:
    """Return runs of the chosen rows; rows between two that are near have no gain."""
    runs: list[list[int]] = []
    for j in chosen:
        if runs and j - runs[-1][-1] <= _NEAR:
            runs[-1].append(j)
        else:
            runs.append([j])
    found = []
    for run in runs:
        taken = range(run[0], run[-1] + 1)
        gain = np.array([rows[j] if j in run else np.zeros_like(rows[run[0]]) for j in taken])
        found.append(_Part(u, run[0], gain if np.iscomplexobj(gain) else np.repeat(gain, 2, 1)))
    return found


def _whole(gain: Gain, length: int) -> Gain:
    """Return a gain at all frequencies, those above half the rate from those below."""
    back = gain[-2:0:-1] if length % 2 == 0 else gain[:0:-1]
    return np.concatenate((gain, np.conj(back)))


def apply(
    blocks: Sequence[Floats] | Floats, first: Fold | Decimation, more: Sequence[Fold] = ()
) -> Floats:
    """Return blocks of output; input of n samples each, zeros where there is none."""
    from scipy import fft

    bins, length = first.of_blocks(blocks), first.length_out
    for fold in more:
        bins, length = fold(bins), fold.length_out
    return np.asarray(fft.irfft(bins, n=length, axis=-1), np.float64)


def support(gain: Gain, length: int, share: float) -> tuple[int, int]:
    """Return how far ahead and back a response reaches, to a share of its input, in samples.

    The least b and a such that what lies more than b samples before a moment, or more than a
    after it, is felt by at most ``share``: by the absolute sum of the impulse response's ends.
    Half of ``length`` must exceed both.

    Parameters
    ----------
    gain : shape (length // 2 + 1,).
    """
    from scipy import fft

    size = np.abs(fft.irfft(gain, n=length))
    middle = length // 2
    past = np.cumsum(size[middle - 1 :: -1])[::-1]  # past[i]: felt of what lies i or more before
    future = np.cumsum(size[middle:])[::-1]  # reversed: [i] felt of what lies i + 1 or more after
    before = int(np.count_nonzero(past > share))
    after = int(np.count_nonzero(future > share))
    return before, after


def fast_length(least: int, step: int) -> int:
    """Return the smallest number from ``least`` on, of steps whose samples are a fast length.

    Fast is a multiple of 32 without prime factors above 5 but those of ``step``, the samples of a
    step: without some factors of two a transform takes half as long again (measured).
    """
    best = 0
    two = _TWOS // gcd(step, _TWOS)
    while not best or two < best:
        three = two
        while not best or three < best:
            five = three
            while five < least:
                five *= 5
            best = min(best, five) if best else five
            three *= 3
        two *= 2
    return best
