"""Spectral density of each epoch from one windowed transform."""

from fractions import Fraction

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
    Spectra,
    SpectraSpec,
    Stage,
)
from waveassay_stages.spectrum import _density
from waveassay_stages.spectrum._windows import (
    WindowName,
    noise_bandwidth_bins,
    resolution_hz,
    scaled_window,
    window,
)


class PeriodogramParams(Params):
    """Parameters of `periodogram`."""

    window: WindowName = Field(default="hann", description="Window, in its periodic form.")
    detrend: _density.Detrend = Field(default="constant", description=_density.DETREND_TEXT)
    zero_padding: _density.ZeroPadding = Field(default="none", description=_density.PADDING_TEXT)


def periodogram(
    x: Floats,
    rate_hz: float | Fraction,
    *,
    window_name: WindowName = "hann",
    detrend: _density.Detrend = "constant",
    zero_padding: _density.ZeroPadding = "none",
    places: Ints | None = None,
) -> tuple[Floats, Floats]:
    r"""Return bin centres (Hz) and the one-sided density of each row (unit squared per Hz).

    .. math::

        P[q] = \frac{c_q}{f_s \sum_n w_n^2} \Bigl| \sum_n w_n x_n e^{-2 \pi i q n / N} \Bigr|^2

    with ``fs`` the rate, ``w`` the window, N the length of the transform (that of the row, or
    more with zero padding), and ``c`` = 2 but 1 at 0 Hz and at the Nyquist frequency (even N).
    An estimate has 2 degrees of freedom (1 at 0 Hz and at the Nyquist frequency).

    Parameters
    ----------
    x : shape (rows, n).
    rate_hz : fs, Hz.
    window_name, detrend, zero_padding : as in `PeriodogramParams`.
    places : which rows of x to take, in this order; all where None.

    Returns
    -------
    Bin centres, shape (f,), Hz; densities, shape (rows, f).

    References
    ----------
    A. Schuster, Terrestrial Magnetism 3, 13-41, 1898. D. B. Percival, A. T. Walden, Spectral
    Analysis for Physical Applications, Cambridge University Press 1993, chapter 6.
    """
    rate = _density.as_rate(rate_hz)
    samples = x.shape[-1]
    n_fft = _density.transform_length(samples, zero_padding)
    taper = scaled_window(window_name, samples, rate)
    freq_hz = _density.bin_centres_hz(rate, n_fft)
    return freq_hz, _density.density(x, taper, n_fft, detrend, places)


def spec(params: PeriodogramParams, given: EpochsSpec, findings: Findings) -> SpectraSpec:
    """Refuse an epoch that is too short; say bins and resolution."""
    _density.refuse_too_short("an epoch", given.length_s, given, findings)
    rate_hz = given.signal.rate_hz
    resolution = None
    if rate_hz is not None:
        samples = max(1, _density.samples_in(given.length_s, rate_hz))
        resolution = resolution_hz(params.window, samples, rate_hz)
    return _density.spectra_spec(given, given.length_s, resolution, params.zero_padding)


def run(params: PeriodogramParams, epochs: Epochs) -> Spectra:
    """Return the periodogram of each kept epoch."""
    rate_hz = epochs.signal.rate_hz
    freq_hz, kept = periodogram(
        _density.sliding(epochs.signal.x, epochs.length),
        rate_hz,
        window_name=params.window,
        detrend=params.detrend,
        zero_padding=params.zero_padding,
        places=epochs.first[epochs.kept],
    )
    resolution = resolution_hz(params.window, epochs.length, rate_hz)
    return _density.as_spectra(epochs, freq_hz, kept, resolution, dof=2.0)


def derive(params: PeriodogramParams, given: EpochsSpec) -> list[Derived]:
    """Return what the window makes of noise, and the resolution."""
    rate_hz = given.signal.rate_hz
    if rate_hz is None:
        return []
    samples = _density.samples_in(given.length_s, rate_hz)
    noise_bandwidth = noise_bandwidth_bins(window(params.window, samples))
    return [
        Derived("equivalent noise bandwidth", noise_bandwidth, "bins"),
        Derived("resolution", noise_bandwidth * float(rate_hz / samples), "Hz"),
    ]


STAGE = Stage(
    name="spectrum.periodogram",
    version=1,
    params=PeriodogramParams,
    takes=(Kind.EPOCHS,),
    gives=Kind.SPECTRA,
    spec=spec,
    run=run,
    context=EachRow(),
    derive=derive,
    example={"window": "hann"},
    source="A. Schuster, Terrestrial Magnetism 3, 13-41, 1898",
)
