"""What the estimators share: detrending, transforms in blocks, one-sided density, specs.

They work in the precision of the samples: float32 or float64. Trends are taken out in float64
either way, so that an offset costs no digit.
"""

from fractions import Fraction
from functools import lru_cache
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import (
    Epochs,
    EpochsSpec,
    Findings,
    Floats,
    Ints,
    Spectra,
    SpectraSpec,
    exact,
)

Detrend = Literal["none", "constant", "linear"]
ZeroPadding = Literal["none", "next_power_of_two", "twice", "four_times"]

DETREND_TEXT = "What is subtracted first: nothing, the mean, or the least-squares line."
PADDING_TEXT = (
    "Zeros added before the transform: bins stand closer, and the resolution stays what it was."
)

#: Fewer samples make no spectrum worth the name.
FEWEST_SAMPLES = 8
#: Bytes that are transformed in one call: with what comes out they fit a processor's cache (1 MB),
#: and there are few calls. No number depends on it.
BLOCK_BYTES = 1 << 19


@lru_cache(maxsize=64)
def samples_in(length_s: float, rate_hz: Fraction) -> int:
    """Return the nearest whole number of samples in a time."""
    return round(exact(length_s) * rate_hz)


def length_of(given: EpochsSpec) -> Fraction:
    """Return the exact length of an epoch, s: a whole number of samples where the rate is known."""
    rate_hz = given.signal.rate_hz
    if rate_hz is None:
        return exact(given.length_s)
    return samples_in(given.length_s, rate_hz) / rate_hz


def transform_length(samples: int, padding: ZeroPadding) -> int:
    """Return the length of the transform after zero padding."""
    if padding == "twice":
        return 2 * samples
    if padding == "four_times":
        return 4 * samples
    if padding == "next_power_of_two":
        return 1 << max(0, samples - 1).bit_length()
    return samples


@lru_cache(maxsize=32)
def bin_centres_hz(rate_hz: Fraction, n_fft: int) -> Floats:
    """Return ``k fs / N`` for k = 0 .. floor(N / 2), Hz, each rounded once; read-only."""
    spacing = rate_hz / n_fft
    centres = np.array([float(k * spacing) for k in range(n_fft // 2 + 1)])
    centres.flags.writeable = False
    return centres


def as_rate(rate_hz: float | Fraction) -> Fraction:
    """Return an exact rate: a float stands for the decimal that a person wrote."""
    return rate_hz if isinstance(rate_hz, Fraction) else exact(rate_hz)


def scaled(taper: Floats, rate_hz: Fraction, share: float = 1.0) -> Floats:
    """Return a taper whose squared transform is its share of the one-sided density.

    The factor is ``sqrt(2 share / (fs sum(w^2)))``: 2 for one side, fs for density per Hz,
    ``sum(w^2)`` for the taper's own energy.
    """
    energy = float(np.sum(taper * taper))
    return np.asarray(taper * np.sqrt(2 * share / (float(rate_hz) * energy)), np.float64)


def precision_of(x: NDArray[Any]) -> np.dtype[Any]:
    """Return the type of float in which samples are worked on: their own, float64 for others."""
    return np.dtype(np.float32 if x.dtype == np.float32 else np.float64)


def _remove_trend(x: Floats, how: Detrend) -> None:
    """Take the trend out of each row, in place."""
    if how == "none":
        return
    n = x.shape[-1]
    x -= np.add.reduce(x, axis=-1, keepdims=True) / x.dtype.type(n)
    if x.dtype == np.float32:  # a mean that is large is rounded: what it leaves is small
        x -= np.add.reduce(x, axis=-1, keepdims=True) / x.dtype.type(n)
    if how == "linear":
        t = np.arange(n) - (n - 1) / 2
        slope = np.sum(x * t, axis=-1, keepdims=True) / (n * (n * n - 1) / 12)
        x -= slope * t


def _gather(x: Floats, places: Ints, into: Floats) -> None:
    """Copy some rows, run by run where most of them stand one step apart."""
    steps = places[1:] - places[:-1]
    step = int(steps[0]) if steps.size else 1
    breaks = np.flatnonzero(steps != step) + 1
    if step < 1 or 8 * breaks.size > places.size:
        into[...] = x[places]
        return
    first = 0
    for stop in (*breaks.tolist(), places.size):
        into[first:stop] = x[places[first] : places[stop - 1] + 1 : step]
        first = stop


def density(
    x: Floats,
    tapers: Floats,
    n_fft: int,
    detrend: Detrend,
    places: Ints | None = None,
) -> Floats:
    r"""Return the one-sided density of each row, shape (rows, n_fft // 2 + 1).

    .. math:: P[r, q] = c_q \sum_k \Bigl| \sum_n h_{k,n} x_{r,n} e^{-2 \pi i q n / N} \Bigr|^2

    with tapers ``h`` from `scaled`; ``c`` is 1, but 1/2 at 0 Hz and, for even N, at the Nyquist
    frequency, which have no mirror image. Squares are summed over tapers in their order, real and
    imaginary parts apart, which are added last.

    Every row is worked on alone, so neither the other rows nor the block size change a bit of it.

    Samples in float32 give densities in float32, with an error of

    .. math:: |\sqrt{P_{32}} - \sqrt{P_{64}}| < 4 \cdot 10^{-6} \sqrt{\bar P}

    against the same samples in float64, the mean being over all frequencies: a small share of a
    density, unless it lies far below that mean (which leakage limits anyway, or an epoch happens
    to have next to nothing at a frequency). A sample a thousand times the rest, where a window is
    next to 0, is felt through the mean that is taken out alone: the error is below 1e-5 then.

    Parameters
    ----------
    x : shape (rows, n), any unit; not written. May be a view.
    tapers : shape (tapers, n).
    n_fft : N, at least n; zeros make up the difference.
    detrend : what is taken out of each row first.
    places : which rows of x, in this order; all of them where None. With x a sliding view of a
        signal, its epochs are gathered block by block and never copied as a whole.
    """
    from scipy import fft

    kind = precision_of(x)
    n, many = x.shape[1], tapers.shape[0]
    rows = x.shape[0] if places is None else places.size
    out = np.empty((rows, n_fft // 2 + 1), kind)
    group, step = _block(many, n_fft * out.itemsize)
    tapers = tapers.astype(kind, copy=False)[:, None]
    # A slope times time is rounded by as much as a large drift is large.
    plain = np.empty((min(step, rows), n), np.float64 if detrend == "linear" else kind)
    if many == 1 and n == n_fft and plain.dtype == kind:
        tapered = plain[None]
    else:
        tapered = np.zeros((group, min(step, rows), n_fft), kind)
    for first in range(0, rows, step):
        stop = min(first + step, rows)
        part = plain[: stop - first]
        if places is None:
            part[...] = x[first:stop]
        else:
            _gather(x, places[first:stop], part)
        _remove_trend(part, detrend)
        ready = part.astype(kind, copy=False)
        total = None
        for k in range(0, many, group):
            some = tapered[: min(group, many - k), : stop - first]
            np.multiply(ready, tapers[k : k + group], out=some[..., :n])
            squares = fft.rfft(some, axis=-1).view(kind)
            np.square(squares, out=squares)
            for of_taper in squares:
                if total is None:
                    total = of_taper
                else:
                    total += of_taper
        assert total is not None, "there is a taper"
        np.add(total[:, 0::2], total[:, 1::2], out=out[first:stop])
    out[:, 0] *= 0.5
    if n_fft % 2 == 0:
        out[:, -1] *= 0.5
    return out


def _block(tapers: int, bytes_each: int) -> tuple[int, int]:
    """Return how many tapers, and how many rows, are transformed in one call."""
    group = min(tapers, max(1, BLOCK_BYTES // bytes_each))
    rows = max(1, BLOCK_BYTES // (group * bytes_each))
    return group, rows - rows % 8 if rows > 8 else rows


def sliding(x: Floats, length: int) -> Floats:
    """Return every stretch of ``length`` samples as a row of a view; none where x is shorter."""
    if x.size < length:
        return np.empty((0, length), x.dtype)
    # What numpy's sliding_window_view gives, which takes as long as a transform of some epochs.
    x, (step,) = np.ascontiguousarray(x), (x.itemsize,)
    return np.ndarray((x.size - length + 1, length), x.dtype, x.data, 0, (step, step))


def as_spectra(
    epochs: Epochs, freq_hz: Floats, kept_density: Floats, resolution_hz: float, dof: float
) -> Spectra:
    """Put the densities of the kept epochs among the others, which are NaN."""
    rows = epochs.rows
    full = kept_density
    if not np.all(rows.kept):
        full = np.empty((len(rows), freq_hz.size), kept_density.dtype)
        full[rows.kept] = kept_density
        full[~rows.kept] = np.nan
    return Spectra(
        signal=epochs.signal.name,
        unit=epochs.signal.unit,
        rows=rows,
        freq_hz=freq_hz,
        density=full,
        resolution_hz=resolution_hz,
        dof=np.where(rows.kept, dof, np.nan),
    )


def spectra_spec(
    given: EpochsSpec, window_s: float, resolution_hz: float | None, padding: ZeroPadding
) -> SpectraSpec:
    """Return what comes out of a transform of ``window_s``; None for what the rate decides."""
    rate_hz = given.signal.rate_hz
    bin_hz = top_hz = None
    if rate_hz is not None:
        n_fft = transform_length(max(1, samples_in(window_s, rate_hz)), padding)
        bin_hz, top_hz = float(rate_hz / n_fft), float(n_fft // 2 * rate_hz / n_fft)
    return SpectraSpec(
        signal=given.signal,
        window_s=window_s,
        resolution_hz=resolution_hz,
        bin_hz=bin_hz,
        top_hz=top_hz,
    )


def refuse_too_short(
    what: str, length_s: float, given: EpochsSpec, findings: Findings, at: str = ""
) -> None:
    """Refuse an epoch or a segment of too few samples, where the rate is known."""
    rate_hz = given.signal.rate_hz
    if rate_hz is None:
        return
    count = samples_in(length_s, rate_hz)
    if count < FEWEST_SAMPLES:
        findings.refuse(
            f"{what} of {length_s:g} s has {count} samples at {float(rate_hz):g} Hz; a spectrum "
            f"needs at least {FEWEST_SAMPLES}, so make it at least "
            f"{float(FEWEST_SAMPLES / rate_hz):g} s long",
            at,
        )
