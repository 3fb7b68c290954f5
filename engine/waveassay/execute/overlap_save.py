"""Apply frequency responses and changes of rate to blocks of samples: numerics alone.

A block of n samples has n // 2 + 1 bins. A response multiplies them. A change of rate by U / D
(lowest terms) puts U - 1 zeros after each sample, which repeats the spectrum U times, multiplies
it by the kernel's gain, and keeps every D-th sample, which lays D parts of the spectrum over one
another. With n = D Q, and output bin m = Q u + q,

    Y[m] = U / D * sum over j = 0 .. D - 1 of X[Q j + q] * G[Q i + q],
    i = u + U k,  k = (j - u) / U modulo D

where X and G are whole spectra, negative frequencies included: real n has X[n - i] = conj X[i].

The outcome is the circular convolution, so it is right where the response does not reach beyond
the block. Each block is treated alike whatever stands beside it: same block, same bytes.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Floats

#: Parts of the spectrum whose gain lies below this share everywhere are left out of the sum: of
#: an input of rms 1, what is left out of D parts has an rms of at most sqrt(D) times this.
NEGLIGIBLE = 1e-10

Gain = NDArray[Any]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class _Part:
    """Consecutive parts j of the input's spectrum that go into one part u of the output's.

    Attributes
    ----------
    gain : shape (parts, bins) where complex; where real, each value stands twice, for the real and
        the imaginary part of a bin, shape (parts, 2 * bins).
    below : they lie below half the rate.
    """

    u: int
    first: int
    gain: Gain
    below: bool


@dataclass(frozen=True)
class Fold:
    """One change of rate, with all responses before and after it: n samples to n * U / D.

    Attributes
    ----------
    part : Q, bins in a part.
    above : the first part that is taken from negative frequencies; D where none is.
    """

    length_in: int
    length_out: int
    part: int
    above: int
    parts: tuple[_Part, ...]

    def __call__(self, bins: Complex) -> Complex:
        """Return the output's bins of each block, shape (blocks, bins)."""
        known = {True: bins, False: self._from_above(bins)}
        made = np.empty((bins.shape[0], self.length_out // 2 + 1), np.complex128)
        filled = 0  # parts come in order of u
        for part in self.parts:
            taken = known[part.below]
            start = (part.first - (0 if part.below else self.above)) * self.part
            low = part.u * self.part
            if np.iscomplexobj(part.gain):
                to, wide = made, 1
            else:
                taken, to, wide = taken.view(np.float64), made.view(np.float64), 2
            count, size = part.gain.shape
            row, item = taken.strides
            several = np.lib.stride_tricks.as_strided(
                taken[:, wide * start :],
                (taken.shape[0], count, size),
                (row, wide * self.part * item, item),
                writeable=False,
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

    def _from_above(self, bins: Complex) -> Complex:
        """Return the whole spectrum from part ``above`` on."""
        first, half = self.above * self.part, bins.shape[1]
        whole = np.empty((bins.shape[0], max(0, self.length_in - first)), np.complex128)
        if whole.size:
            direct = max(0, half - first)
            whole[:, :direct] = bins[:, first:]
            last = self.length_in - first - direct  # bin n - i stands for i
            np.conj(bins[:, last:0:-1], out=whole[:, direct:])
        return whole


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
    for u in range(length_out // 2 // part + 1):
        bins = min(part, length_out // 2 + 1 - u * part)
        here = slice(u * part, u * part + bins)
        rows = []
        for j in range(down):
            i = u + up * ((j - u) * back % down)
            taken = whole_before[j * part : j * part + bins]
            rows.append(taken * whole_between[i * part : i * part + bins] * after[here])
        heard = [bool(np.max(np.abs(row)) > NEGLIGIBLE) for row in rows]
        below = [j * part + bins <= half for j in range(down)]
        parts.extend(_parts(u, np.array(rows) * float(ratio), heard, below))
    above = min((p.first for p in parts if not p.below), default=down)
    return Fold(length, length_out, part, above, tuple(parts))


def _parts(u: int, rows: Gain, heard: Sequence[bool], below: Sequence[bool]) -> list[_Part]:
    """Return runs of consecutive rows that are heard, those below half the rate first."""
    found = []
    for side in (True, False):
        chosen = [int(h and b is side) for h, b in zip(heard, below, strict=True)]
        edges = np.flatnonzero(np.diff([0, *chosen, 0])).tolist()
        for first, stop in zip(edges[::2], edges[1::2], strict=True):
            gain = rows[first:stop]
            gain = gain.copy() if np.iscomplexobj(gain) else np.repeat(gain, 2, axis=1)
            found.append(_Part(u, first, gain, side))
    return found


def _whole(gain: Gain, length: int) -> Gain:
    """Return a gain at all frequencies, those above half the rate from those below."""
    back = gain[-2:0:-1] if length % 2 == 0 else gain[:0:-1]
    return np.concatenate((gain, np.conj(back)))


def apply(blocks: Floats, folds: Sequence[Fold]) -> Floats:
    """Return blocks of output; input of shape (blocks, n), zeros where there is none."""
    from scipy import fft

    bins = fft.rfft(blocks, axis=-1)
    for fold in folds:
        bins = fold(bins)
    return np.asarray(fft.irfft(bins, n=folds[-1].length_out, axis=-1), np.float64)


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
    """Return the smallest number from ``least`` on, of steps whose samples are a fast even length.

    Fast is a length without prime factors above 5 but those of ``step``, the samples of a step.
    """
    best = 0
    two = 1 if step % 2 == 0 else 2
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
