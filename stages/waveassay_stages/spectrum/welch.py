"""Spectral density of each epoch from overlapping windowed segments, averaged.

Segments lie one hop apart from the epoch's first sample on; what is left at its end and does not
fill a segment is not used (and said, when the recipe is checked).
"""

from fractions import Fraction
from functools import lru_cache
from math import floor
from typing import Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Derived,
    EachRow,
    Epochs,
    EpochsSpec,
    Findings,
    Floats,
    Ints,
    Kind,
    Params,
    Seconds,
    Share,
    Spectra,
    SpectraSpec,
    Stage,
    exact,
)
from waveassay_stages.spectrum import _density
from waveassay_stages.spectrum._order_statistics import exponential_median
from waveassay_stages.spectrum._windows import (
    WindowName,
    noise_bandwidth_bins,
    overlap_correlation,
    resolution_hz,
    scaled_window,
    window,
)

Average = Literal["mean", "median"]


class WelchParams(Params):
    """Parameters of `welch`."""

    segment: Seconds = Field(
        gt=0, description="Length of a segment, to the nearest sample; sets the resolution."
    )
    overlap: Share = Field(
        default=0.5,
        ge=0,
        lt=1,
        description="Share of a segment that the next one covers, rounded down to whole samples.",
    )
    window: WindowName = Field(default="hann", description="Window, in its periodic form.")
    detrend: _density.Detrend = Field(
        default="constant", description=f"In each segment. {_density.DETREND_TEXT}"
    )
    average: Average = Field(
        default="mean",
        description="Mean over segments, or median with its bias for that many segments removed.",
    )
    zero_padding: _density.ZeroPadding = Field(default="none", description=_density.PADDING_TEXT)


@lru_cache(maxsize=64)
def segment_starts(samples: int, segment: int, overlap: float) -> range:
    """Return where segments start in a row: all that fit, ``segment - floor(overlap)`` apart."""
    hop = segment - floor(exact(overlap) * segment)
    return range(0, samples - segment + 1, hop)


def welch(
    x: Floats,
    rate_hz: float | Fraction,
    *,
    segment: int,
    overlap: float = 0.5,
    window_name: WindowName = "hann",
    detrend: _density.Detrend = "constant",
    average: Average = "mean",
    zero_padding: _density.ZeroPadding = "none",
) -> tuple[Floats, Floats]:
    r"""Return bin centres (Hz) and the one-sided density of each row (unit squared per Hz).

    .. math::

        P[q] = \frac{1}{b} \operatorname*{average}_{s = 1 .. S} \frac{c_q}{f_s \sum_n w_n^2}
               \Bigl| \sum_n w_n x_{s,n} e^{-2 \pi i q n / N} \Bigr|^2

    with ``fs`` the rate, ``w`` the window, ``x_s`` the segments with their trend taken out, N the
    length of the transform, ``c`` = 2 but 1 at 0 Hz and at the Nyquist frequency (even N), and b
    the bias of the average: 1 for a mean; for a median the mean of the median of S independent
    exponential variables (1 - 1/2 + 1/3 - ... to the S-th term, S odd; to the one before, S even).

    Parameters
    ----------
    x : shape (rows, n).
    rate_hz : fs, Hz.
    segment : samples in a segment, at most n.
    overlap : share of a segment that the next one covers, at least 0 and below 1.
    window_name, detrend, average, zero_padding : as in `WelchParams`.

    Returns
    -------
    Bin centres, shape (f,), Hz; densities, shape (rows, f).

    Raises
    ------
    ValueError
        When a row is shorter than a segment.

    References
    ----------
    P. D. Welch, IEEE Trans. Audio Electroacoust. 15(2), 70-73, 1967. The median's bias: B. Allen
    et al., Phys. Rev. D 85, 122006, 2012, appendix B.
    """
    rows, samples = x.shape
    first = np.arange(rows, dtype=np.int64) * samples
    return _of_rows(
        np.ascontiguousarray(x).reshape(-1),
        first,
        samples,
        _density.as_rate(rate_hz),
        segment,
        overlap,
        window_name,
        detrend,
        average,
        zero_padding,
    )


def _of_rows(
    x: Floats,
    first: Ints,
    samples: int,
    rate_hz: Fraction,
    segment: int,
    overlap: float,
    window_name: WindowName,
    detrend: _density.Detrend,
    average: Average,
    zero_padding: _density.ZeroPadding,
) -> tuple[Floats, Floats]:
    """Do the work on rows given as places in one stretch of samples.

    A segment that overlapping rows share is transformed once.
    """
    if segment > samples:
        raise ValueError(f"a segment of {segment} samples does not fit a row of {samples}")
    n_fft = _density.transform_length(segment, zero_padding)
    freq_hz = _density.bin_centres_hz(rate_hz, n_fft)
    if first.size == 0:
        return freq_hz, np.empty((0, freq_hz.size), _density.precision_of(x))
    starts, places = _segments(first.tobytes(), samples, segment, overlap)
    taper = scaled_window(window_name, segment, rate_hz)
    each = _density.density(_density.sliding(x, segment), taper, n_fft, detrend, starts)
    count = len(places)
    if average == "median":
        bias, _ = exponential_median(count)
        return freq_hz, np.median(each[places], axis=0) / bias
    total = each[places[0]]
    for further in places[1:]:  # in the order of time, whatever the number of rows
        total += each[further]
    total /= count
    return freq_hz, total


@lru_cache(maxsize=8)
def _segments(first: bytes, samples: int, segment: int, overlap: float) -> tuple[Ints, Ints]:
    """Return where segments start, each once and rising, and which of them each row has.

    Rows are given as the bytes of the places where they begin, which signals side by side mostly
    have in common. The second has shape (segments of a row, rows); both are read-only.
    """
    inside = np.array(segment_starts(samples, segment, overlap), np.int64)
    asked = inside[:, None] + np.frombuffer(first, np.int64)
    rising = np.sort(asked, axis=None)
    new = np.ones(rising.size, np.bool_)
    np.not_equal(rising[1:], rising[:-1], out=new[1:])
    starts = rising[new]
    places = np.searchsorted(starts, asked)
    for array in (starts, places):
        array.flags.writeable = False
    return starts, places


@lru_cache(maxsize=64)
def degrees_of_freedom(
    samples: int, segment: int, overlap: float, window_name: WindowName, average: Average = "mean"
) -> float:
    r"""Return the equivalent degrees of freedom of `welch` on white noise.

    .. math::

        \nu = \frac{2 S}{1 + 2 \sum_{m=1}^{S-1} (1 - m/S) \rho_m}, \qquad
        \rho_m = \Bigl( \frac{\sum_n w_n w_{n + mh}}{\sum_n w_n^2} \Bigr)^2

    for S segments h samples apart. At 0 Hz and at the Nyquist frequency it is half of that. For
    the median it is multiplied by what the median of S independent segments costs in variance
    (exact without overlap, an approximation with it).

    References
    ----------
    P. D. Welch 1967. D. B. Percival, A. T. Walden, Spectral Analysis for Physical Applications,
    Cambridge University Press 1993, section 6.17.
    """
    starts = segment_starts(samples, segment, overlap)
    count = len(starts)
    w = window(window_name, segment)
    shared = sum(
        (1 - m / count) * overlap_correlation(w, m * starts.step) ** 2 for m in range(1, count)
    )
    dof = 2 * count / (1 + 2 * shared)
    if average == "median":
        mean, variance = exponential_median(count)
        dof *= mean**2 / variance / count
    return dof


def spec(params: WelchParams, given: EpochsSpec, findings: Findings) -> SpectraSpec:
    """Refuse segments that do not fit; say bins and resolution, and what is left unused."""
    rate_hz = given.signal.rate_hz
    if rate_hz is None:
        too_long = params.segment > given.length_s
    else:  # both are rounded to samples
        samples = _density.samples_in(given.length_s, rate_hz)
        too_long = _density.samples_in(params.segment, rate_hz) > samples
    if too_long:
        findings.refuse(
            f"a segment of {params.segment:g} s does not fit an epoch of {given.length_s:g} s; "
            "shorten the segment or lengthen the epochs",
            "segment",
        )
    _density.refuse_too_short("a segment", params.segment, given, findings, "segment")
    resolution = None
    if rate_hz is not None:
        count = max(1, _density.samples_in(params.segment, rate_hz))
        resolution = resolution_hz(params.window, count, rate_hz)
        starts = segment_starts(samples, count, params.overlap)
        unused = samples - starts[-1] - count if starts else 0
        if unused:
            findings.warn(
                f"the last {float(unused / rate_hz):g} s of each epoch of {given.length_s:g} s are "
                f"not used: segments of {params.segment:g} s, {float(starts.step / rate_hz):g} s "
                "apart, do not fill it",
                "segment",
            )
    return _density.spectra_spec(given, params.segment, resolution, params.zero_padding)


def run(params: WelchParams, epochs: Epochs) -> Spectra:
    """Return Welch's estimate of each kept epoch."""
    rate_hz = epochs.signal.rate_hz
    segment = _density.samples_in(params.segment, rate_hz)
    freq_hz, kept = _of_rows(
        epochs.signal.x,
        epochs.first[epochs.kept],
        epochs.length,
        rate_hz,
        segment,
        params.overlap,
        params.window,
        params.detrend,
        params.average,
        params.zero_padding,
    )
    dof = degrees_of_freedom(epochs.length, segment, params.overlap, params.window, params.average)
    resolution = resolution_hz(params.window, segment, rate_hz)
    return _density.as_spectra(epochs, freq_hz, kept, resolution, dof)


def derive(params: WelchParams, given: EpochsSpec) -> list[Derived]:
    """Return segments, resolution and degrees of freedom of each epoch's estimate."""
    rate_hz = given.signal.rate_hz
    if rate_hz is None:
        return []
    samples = _density.samples_in(given.length_s, rate_hz)
    segment = _density.samples_in(params.segment, rate_hz)
    noise_bandwidth = noise_bandwidth_bins(window(params.window, segment))
    dof = degrees_of_freedom(samples, segment, params.overlap, params.window, params.average)
    return [
        Derived("segments in an epoch", len(segment_starts(samples, segment, params.overlap))),
        Derived("equivalent noise bandwidth", noise_bandwidth, "bins"),
        Derived("resolution", resolution_hz(params.window, segment, rate_hz), "Hz"),
        Derived("degrees of freedom", dof),
    ]


STAGE = Stage(
    name="spectrum.welch",
    version=1,
    params=WelchParams,
    takes=(Kind.EPOCHS,),
    gives=Kind.SPECTRA,
    spec=spec,
    run=run,
    context=EachRow(),
    derive=derive,
    example={"segment": "2 s"},
    source="P. D. Welch, IEEE Trans. Audio Electroacoust. 15(2), 70-73, 1967",
)
