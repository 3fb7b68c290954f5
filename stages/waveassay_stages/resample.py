"""Changes the sampling rate by an exact ratio, with an anti-alias filter and without delay."""

from dataclasses import replace
from fractions import Fraction
from functools import lru_cache
from math import ceil
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Decibel,
    Derived,
    Findings,
    Floats,
    Hertz,
    Kind,
    Params,
    Reach,
    Response,
    Share,
    Signal,
    SignalSpec,
    Stage,
    exact,
    kernel_gain,
)
from waveassay_stages._finite import require_finite

#: A ratio with a larger factor would need a kernel out of proportion.
LARGEST_FACTOR = 1000

# How far a nominal rate may lie from the recording's own: farther is another rate.
_NEARBY = Fraction(1, 100)


class ResampleParams(Params):
    """Parameters of `resample`."""

    rate: Annotated[Hertz, Field(gt=0)] = Field(description="The new sampling rate.")
    nominal_rate: Annotated[Hertz, Field(gt=0)] | None = Field(
        default=None,
        description="For a recording whose exact rate is odd (499.907 Hz): the round rate near it "
        "(500 Hz) from which the ratio is taken. The new rate is then off by as much.",
    )
    attenuation: Annotated[Decibel, Field(ge=40, le=200)] = Field(
        default=100.0,
        description="How far what would be mirrored into the new band is put down. 100 dB lies "
        "below the rounding of 16 bits (98 dB).",
    )
    transition: Annotated[Share, Field(ge=0.01, le=0.9)] = Field(
        default=0.2,
        description="Share of the lower of the two Nyquist frequencies, at its top, that the "
        "anti-alias filter takes to fall: with 20 %, what lies below 80 % of it is unchanged.",
    )
    edges: Literal["odd", "even", "constant", "zero"] = Field(
        default="odd",
        description="What is put beyond the ends of a piece: the signal mirrored through its end "
        "sample (odd), mirrored (even), its end sample (constant), or zeros.",
    )


def kaiser_beta(attenuation_db: float) -> float:
    r"""Return the shape of the Kaiser window for a stop-band attenuation A.

    .. math::

        \beta = 0.1102 (A - 8.7) \;\text{above 50 dB}, \qquad
        0.5842 (A - 21)^{0.4} + 0.07886 (A - 21) \;\text{from 21 to 50 dB}

    References
    ----------
    J. F. Kaiser, Nonrecursive digital filter design using the I0-sinh window function, Proc. IEEE
    Int. Symp. Circuits and Systems, 20-23, 1974.
    """
    if attenuation_db > 50:
        return 0.1102 * (attenuation_db - 8.7)
    if attenuation_db >= 21:
        return float(0.5842 * (attenuation_db - 21) ** 0.4 + 0.07886 * (attenuation_db - 21))
    return 0.0


def kaiser_order(attenuation_db: float, width_rad: float) -> int:
    r"""Return the order of a Kaiser-windowed low-pass with a transition of ``width_rad``.

    .. math:: M = \lceil (A - 8) / (2.285 \, \Delta\omega) \rceil

    References
    ----------
    J. F. Kaiser, as in `kaiser_beta`.
    """
    return ceil((attenuation_db - 8) / (2.285 * width_rad))


def low_pass_kernel(half: int, cutoff: float, beta: float) -> Floats:
    r"""Return a symmetric low-pass of ``2 * half + 1`` taps and gain 1 at 0 Hz.

    .. math:: h[n] \propto \frac{\sin \pi c n}{\pi n} w_\beta[n], \qquad |n| \le M/2

    Parameters
    ----------
    cutoff : c, the middle of the transition as a share of the Nyquist frequency.
    """
    places = np.arange(-half, half + 1)
    kernel = cutoff * np.sinc(cutoff * places) * np.kaiser(2 * half + 1, beta)
    return np.asarray(kernel / np.sum(kernel), np.float64)


def resample(x: Floats, up: int, down: int, params: ResampleParams) -> Floats:
    r"""Return the samples at up / down times their rate.

    .. math:: y[m] = U \sum_n x[n] \, h[m D - n U]

    with h a Kaiser-windowed low-pass at U times the rate of ``x``, symmetric about 0: no delay,
    and y[0] lies at the time of x[0].

    Parameters
    ----------
    x : samples, shape (n,), any unit.
    up, down : U and D, without a common factor.

    Returns
    -------
    Samples in the unit of ``x``, shape (ceil(n * up / down),).

    References
    ----------
    J. F. Kaiser, as in `kaiser_beta`. R. E. Crochiere, L. R. Rabiner, Multirate Digital Signal
    Processing, chapter 3, 1983 (polyphase form; from memory).
    """
    if up == down or x.size == 0:
        return x.copy()
    from scipy.signal import upfirdn

    kernel = _kernel(up, down, params.attenuation, params.transition)
    half = kernel.size // 2
    pad = -(-half // up)
    if params.edges in ("odd", "even"):
        padded = np.pad(x, pad, mode="reflect", reflect_type=params.edges)
    else:
        padded = np.pad(x, pad, mode="edge" if params.edges == "constant" else "constant")
    # Zeros before the kernel bring its centre over x[0] to a place that is kept.
    shift = -(pad * up + half) % down
    shifted = np.concatenate((np.zeros(shift), kernel)) * up
    first = (pad * up + half + shift) // down
    count = -(-x.size * up // down)
    return np.ascontiguousarray(upfirdn(shifted, padded, up, down)[first : first + count])


def _asked_db(attenuation_db: float) -> float:
    """Return what to ask of Kaiser's formulas, which fall short by up to this (measured)."""
    return attenuation_db + 1.5 + 0.13 * max(0.0, attenuation_db - 120)


@lru_cache(maxsize=32)
def _kernel(up: int, down: int, attenuation_db: float, transition: float) -> Floats:
    lower_nyquist = 1 / max(up, down)  # as a share of half the rate at which the kernel stands
    asked_db = _asked_db(attenuation_db)
    half = -(-kaiser_order(asked_db, np.pi * lower_nyquist * transition) // 2)
    kernel = low_pass_kernel(half, lower_nyquist * (1 - transition / 2), kaiser_beta(asked_db))
    kernel.flags.writeable = False
    return kernel


def ratio(params: ResampleParams, rate_hz: Fraction) -> Fraction:
    """Return the new rate over the old one, as it is carried out."""
    nominal = rate_hz if params.nominal_rate is None else exact(params.nominal_rate)
    return exact(params.rate) / nominal


def half_length_s(params: ResampleParams, rate_hz: Fraction) -> Fraction:
    """Return how far the kernel extends to either side, s."""
    factor = ratio(params, rate_hz)
    up, down = factor.numerator, factor.denominator
    if up == down:
        return Fraction(0)
    kernel = _kernel(up, down, params.attenuation, params.transition)
    return kernel.size // 2 / (rate_hz * up)


def spec(params: ResampleParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Return the signal at its new rate; refuse a ratio that is out of proportion."""
    new_rate = exact(params.rate)
    keep = 1 - params.transition
    if given.rate_hz is None:
        return replace(given.passing(None, keep * params.rate / 2, 0.0), rate_hz=new_rate)
    if not _sound(params, given.rate_hz, findings):
        return replace(given, rate_hz=new_rate)
    factor = ratio(params, given.rate_hz)
    out = replace(given, rate_hz=given.rate_hz * factor)
    if factor == 1:
        return out
    lower_nyquist_hz = float(given.rate_hz * min(Fraction(1), factor) / 2)
    length_s = float(half_length_s(params, given.rate_hz))
    return out.passing(None, keep * lower_nyquist_hz, length_s)


def _sound(params: ResampleParams, rate_hz: Fraction, findings: Findings) -> bool:
    factor = ratio(params, rate_hz)
    if params.nominal_rate is not None:
        drift = exact(params.nominal_rate) / rate_hz - 1
        if abs(drift) > _NEARBY:
            findings.refuse(
                f"the nominal rate {params.nominal_rate:g} Hz is not near the recording's rate "
                f"{float(rate_hz):.10g} Hz; they may be 1 % apart",
                "nominal_rate",
            )
            return False
        if drift:
            findings.warn(
                f"the recording's rate is {float(rate_hz):.10g} Hz, not {params.nominal_rate:g} "
                f"Hz: the new rate is {float(rate_hz * factor):.10g} Hz, off by "
                f"{float(-drift / (1 + drift)) * 1e6:.3g} ppm. Times stay exact",
                "nominal_rate",
            )
    if max(factor.numerator, factor.denominator) > LARGEST_FACTOR:
        findings.refuse(
            f"from {float(rate_hz):.10g} Hz to {params.rate:g} Hz is a ratio of {factor.numerator} "
            f"to {factor.denominator}; up to {LARGEST_FACTOR} is allowed. Name a round rate near "
            "the recording's as nominal_rate, or choose another rate",
            "rate" if params.nominal_rate is None else "nominal_rate",
        )
        return False
    return True


def context(params: ResampleParams, given: SignalSpec) -> Reach:
    """Return half the kernel to either side."""
    if given.rate_hz is None:
        raise ValueError("the rate must be known")
    span_s = half_length_s(params, given.rate_hz) + 1 / given.rate_hz
    return Reach(span_s, span_s)


def response_gain(params: ResampleParams, given: SignalSpec, freq_hz: Floats) -> Any:
    """Return the gain of the anti-alias kernel at U times the input's rate."""
    assert given.rate_hz is not None, "it is asked for once the rate is known"
    factor = ratio(params, given.rate_hz)
    if factor == 1:
        return np.ones(freq_hz.shape)
    kernel = _kernel(factor.numerator, factor.denominator, params.attenuation, params.transition)
    return kernel_gain(kernel, kernel.size // 2, freq_hz, float(given.rate_hz * factor.numerator))


def mask(params: ResampleParams, signal: Signal) -> Signal:
    """Mask each moment whose kernel touches masked time or an end."""
    half_s = half_length_s(params, signal.rate_hz)
    return signal.widened(half_s, half_s).excluding_edges(half_s, half_s)


def run(params: ResampleParams, signal: Signal) -> Signal:
    """Resample one signal, masking each sample whose kernel touches masked time or an end.

    Sample m lies exactly at ``signal.start_s + m / rate``.

    Raises
    ------
    ValueError
        When a part of a piece does not start on the new rate's grid, which begins with the piece.
    """
    require_finite(signal, "resample")
    factor = ratio(params, signal.rate_hz)
    rate_hz = signal.rate_hz * factor
    place = (signal.start_s - signal.piece.start_s) * rate_hz
    if place.denominator != 1:
        raise ValueError(
            f"resample: the part starts {place} samples of {rate_hz} Hz after its piece; it must "
            "start on a whole sample"
        )
    samples = resample(signal.x, factor.numerator, factor.denominator, params)
    return mask(params, signal).with_samples(samples, rate_hz=rate_hz)


def derive(params: ResampleParams, given: SignalSpec) -> list[Derived]:
    """Return the ratio that is carried out, the kernel's length and the true new rate."""
    if given.rate_hz is None:
        return []
    factor = ratio(params, given.rate_hz)
    length_s = float(2 * half_length_s(params, given.rate_hz))
    return [
        Derived("ratio", f"{factor.numerator}/{factor.denominator}"),
        Derived("rate", float(given.rate_hz * factor), "Hz"),
        Derived("kernel length", length_s, "s"),
    ]


STAGE = Stage(
    name="resample",
    version=1,
    params=ResampleParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    response=Response(gain=response_gain, mask=mask),
    derive=derive,
    example={"rate": "128 Hz"},
    source="J. F. Kaiser, Nonrecursive digital filter design using the I0-sinh window function, "
    "Proc. IEEE ISCAS, 20-23, 1974",
)
