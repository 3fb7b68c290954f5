"""Spectral density of each epoch averaged over Slepian tapers (Thomson's multitaper estimate)."""

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
    Hertz,
    Ints,
    Kind,
    Params,
    Spectra,
    SpectraSpec,
    Stage,
    exact,
    number_text,
)
from waveassay_stages.spectrum import _density
from waveassay_stages.spectrum._slepian import slepian_tapers

Weights = Literal["equal", "eigenvalue"]


class MultitaperParams(Params):
    """Parameters of `multitaper`."""

    half_bandwidth: Hertz = Field(
        gt=0,
        description="W: power is averaged over W to either side, so the resolution is 2 W. "
        "W times the epoch's length is NW, at least 1.",
    )
    tapers: int | None = Field(
        default=None,
        ge=1,
        description="Number of tapers, at most 2 NW - 1; floor(2 NW) - 1 where not given.",
    )
    weights: Weights = Field(
        default="equal",
        description="Weights of the tapers: all alike, or by their concentration (eigenvalue).",
    )
    detrend: _density.Detrend = Field(default="constant", description=_density.DETREND_TEXT)
    zero_padding: _density.ZeroPadding = Field(default="none", description=_density.PADDING_TEXT)


#: More independent estimates than this are better had from shorter epochs, and far sooner.
MOST_TAPERS = 200


def taper_count(time_bandwidth: Fraction) -> int:
    """Return how many tapers are used where none are asked: floor(2 NW) - 1, at least 1."""
    return max(1, floor(2 * time_bandwidth) - 1)


def taper_weights(concentrations: Floats, weights: Weights) -> Floats:
    """Return the weight of each taper; they sum to 1."""
    plain = np.ones_like(concentrations) if weights == "equal" else concentrations
    return plain / np.sum(plain)


@lru_cache(maxsize=32)
def scaled_tapers(
    samples: int, time_bandwidth: Fraction, count: int, weights: Weights, rate_hz: Fraction
) -> Floats:
    """Return the tapers, each scaled for its share of the density, shape (K, N); read-only."""
    v, concentrations = slepian_tapers(samples, time_bandwidth, count)
    weight = taper_weights(concentrations, weights)
    scaled = np.stack([_density.scaled(v[k], rate_hz, float(weight[k])) for k in range(count)])
    scaled.flags.writeable = False
    return scaled


def degrees_of_freedom(weight: Floats) -> float:
    """Return ``2 / sum(d^2)`` for weights d that sum to 1: 2 K for K equal ones.

    Source: Percival & Walden 1993, chapter 7 (independent chi-square estimates, weighted). At 0 Hz
    and at the Nyquist frequency it is half of that.
    """
    if np.all(weight == weight[0]):
        return 2.0 * weight.size  # without the rounding of 1 / K
    return float(2 / np.sum(weight * weight))


@lru_cache(maxsize=32)
def _dof_of(samples: int, time_bandwidth: Fraction, count: int, weights: Weights) -> float:
    _, concentrations = slepian_tapers(samples, time_bandwidth, count)
    return degrees_of_freedom(taper_weights(concentrations, weights))


def multitaper(
    x: Floats,
    rate_hz: float | Fraction,
    *,
    half_bandwidth_hz: float | Fraction,
    tapers: int | None = None,
    weights: Weights = "equal",
    detrend: _density.Detrend = "constant",
    zero_padding: _density.ZeroPadding = "none",
    places: Ints | None = None,
) -> tuple[Floats, Floats]:
    r"""Return bin centres (Hz) and the one-sided density of each row (unit squared per Hz).

    .. math::

        P[q] = \frac{c_q}{f_s} \sum_{k=0}^{K-1} d_k
               \Bigl| \sum_n v_{k,n} x_n e^{-2 \pi i q n / N} \Bigr|^2, \qquad \sum_k d_k = 1

    with ``fs`` the rate, ``v_k`` Slepian's tapers of energy 1 (`slepian_tapers`) for
    NW = half bandwidth times length, ``d`` equal or in proportion to the tapers' concentrations,
    N the length of the transform, and ``c`` = 2 but 1 at 0 Hz and at the Nyquist frequency
    (even N).

    Parameters
    ----------
    x : shape (rows, n).
    rate_hz : fs, Hz.
    half_bandwidth_hz : W, Hz.
    tapers : K; floor(2 NW) - 1 where None.
    weights, detrend, zero_padding : as in `MultitaperParams`.
    places : which rows of x to take, in this order; all where None.

    Returns
    -------
    Bin centres, shape (f,), Hz; densities, shape (rows, f).

    Raises
    ------
    ValueError
        When W is not below half the rate.

    References
    ----------
    D. J. Thomson, Proc. IEEE 70(9), 1055-1096, 1982. D. B. Percival, A. T. Walden, Spectral
    Analysis for Physical Applications, Cambridge University Press 1993, chapter 7.
    """
    rate, samples = _density.as_rate(rate_hz), x.shape[-1]
    time_bandwidth = _density.as_rate(half_bandwidth_hz) * samples / rate
    count = taper_count(time_bandwidth) if tapers is None else tapers
    scaled = scaled_tapers(samples, time_bandwidth, count, weights, rate)
    n_fft = _density.transform_length(samples, zero_padding)
    freq_hz = _density.bin_centres_hz(rate, n_fft)
    return freq_hz, _density.density(x, scaled, n_fft, detrend, places)


def spec(params: MultitaperParams, given: EpochsSpec, findings: Findings) -> SpectraSpec:
    """Refuse a half bandwidth or a number of tapers that the epoch cannot carry."""
    length = _density.length_of(given)
    time_bandwidth = exact(params.half_bandwidth) * length
    if time_bandwidth < 1:
        findings.refuse(
            f"a half bandwidth of {params.half_bandwidth:g} Hz times an epoch of "
            f"{given.length_s:g} s is NW = {number_text(float(time_bandwidth))}, below 1; ask for "
            f"at least {float(1 / length):g} Hz or lengthen the epochs",
            "half_bandwidth",
        )
    elif (params.tapers or taper_count(time_bandwidth)) > MOST_TAPERS:
        findings.refuse(
            f"{params.tapers or taper_count(time_bandwidth)} tapers an epoch are asked for (NW = "
            f"{number_text(float(time_bandwidth))}), and at most {MOST_TAPERS} make sense: shorten "
            "the epochs, narrow half_bandwidth, or use spectrum.welch",
            "half_bandwidth" if params.tapers is None else "tapers",
        )
    elif params.tapers is not None and params.tapers > 2 * time_bandwidth - 1:
        findings.refuse(
            f"{params.tapers} tapers are more than 2 NW - 1 = "
            f"{number_text(float(2 * time_bandwidth - 1))} (NW = {params.half_bandwidth:g} Hz "
            f"times {given.length_s:g} s = {number_text(float(time_bandwidth))}); the others leak. "
            f"Use at most {taper_count(time_bandwidth)}, or widen half_bandwidth",
            "tapers",
        )
    rate_hz = given.signal.rate_hz
    if rate_hz is not None and exact(params.half_bandwidth) >= rate_hz / 2:
        findings.refuse(
            f"a half bandwidth of {params.half_bandwidth:g} Hz is not below the Nyquist frequency "
            f"{float(rate_hz / 2):g} Hz",
            "half_bandwidth",
        )
    _density.refuse_too_short("an epoch", given.length_s, given, findings)
    resolution = float(2 * exact(params.half_bandwidth))
    return _density.spectra_spec(given, given.length_s, resolution, params.zero_padding)


def run(params: MultitaperParams, epochs: Epochs) -> Spectra:
    """Return the multitaper estimate of each kept epoch."""
    rate_hz = epochs.signal.rate_hz
    half_bandwidth = exact(params.half_bandwidth)
    time_bandwidth = half_bandwidth * epochs.length / rate_hz
    count = taper_count(time_bandwidth) if params.tapers is None else params.tapers
    freq_hz, kept = multitaper(
        _density.sliding(epochs.signal.x, epochs.length),
        rate_hz,
        half_bandwidth_hz=half_bandwidth,
        tapers=count,
        weights=params.weights,
        detrend=params.detrend,
        zero_padding=params.zero_padding,
        places=epochs.first[epochs.kept],
    )
    dof = _dof_of(epochs.length, time_bandwidth, count, params.weights)
    return _density.as_spectra(epochs, freq_hz, kept, float(2 * half_bandwidth), dof)


def derive(params: MultitaperParams, given: EpochsSpec) -> list[Derived]:
    """Return the time-bandwidth product, the number of tapers and what they make of noise."""
    rate_hz = given.signal.rate_hz
    if rate_hz is None:
        return []
    samples = _density.samples_in(given.length_s, rate_hz)
    time_bandwidth = exact(params.half_bandwidth) * samples / rate_hz
    count = taper_count(time_bandwidth) if params.tapers is None else params.tapers
    dof = _dof_of(samples, time_bandwidth, count, params.weights)
    return [
        Derived("time-bandwidth product NW", float(time_bandwidth)),
        Derived("tapers", count),
        Derived("resolution 2W", float(2 * exact(params.half_bandwidth)), "Hz"),
        Derived("degrees of freedom", dof),
    ]


STAGE = Stage(
    name="spectrum.multitaper",
    version=1,
    params=MultitaperParams,
    takes=(Kind.EPOCHS,),
    gives=Kind.SPECTRA,
    spec=spec,
    run=run,
    context=EachRow(),
    derive=derive,
    example={"half_bandwidth": "0.75 Hz"},
    source="D. J. Thomson, Proc. IEEE 70(9), 1055-1096, 1982",
)
