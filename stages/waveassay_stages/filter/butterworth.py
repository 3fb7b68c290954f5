"""Butterworth high-pass, low-pass or band-pass, run both ways or forward."""

from functools import lru_cache
from typing import Annotated, Literal, Self

import numpy as np
from pydantic import Field, model_validator

from waveassay.contract import (
    Derived,
    Findings,
    Floats,
    Hertz,
    Kind,
    Params,
    Seconds,
    SignalSpec,
    Stage,
)
from waveassay_stages.filter import _iir

#: Cut-offs below this share of the Nyquist frequency are refused: there, the coefficients' own
#: rounding moves the gain at the cut-off by more than a ten-thousandth.
SLOWEST = 1e-6


class ButterworthParams(Params):
    """Parameters of `butterworth`."""

    high_pass: Annotated[Hertz, Field(gt=0)] | None = Field(
        default=None, description="Lower cut-off frequency: what lies below is removed."
    )
    low_pass: Annotated[Hertz, Field(gt=0)] | None = Field(
        default=None, description="Upper cut-off frequency: what lies above is removed."
    )
    order_per_pass: int = Field(
        default=4,
        ge=1,
        le=12,
        description="Order of the prototype in one pass: the slope of each cut-off is 6 dB per "
        "octave times order times passes. A band-pass has twice as many poles.",
    )
    passes: _iir.Passes = Field(
        default="both_ways",
        description="both_ways: forward, then backward, without any delay; forward: causal.",
    )
    cutoff_at: Literal["-3 dB", "-6 dB"] = Field(
        default="-3 dB",
        description="Gain at the cut-offs after all passes: half the power (-3 dB, so that a "
        "cut-off means the same run forward or both ways) or half the amplitude (-6 dB).",
    )
    edges: _iir.Edges = Field(
        default="odd",
        description="What is put beyond the ends of a piece when run both ways: the signal "
        "mirrored through its end sample (odd), mirrored (even), or its end sample (constant).",
    )
    widen: Annotated[Seconds, Field(ge=0)] | None = Field(
        default=None,
        description="How far masked time is widened, and how much is masked at the ends of a "
        "piece. Default: as long as the filter's response stays above 1 %.",
    )

    @model_validator(mode="after")
    def _sound(self) -> Self:
        if self.high_pass is None and self.low_pass is None:
            raise ValueError("give high_pass, low_pass or both")
        if (
            self.high_pass is not None
            and self.low_pass is not None
            and self.high_pass >= self.low_pass
        ):
            raise ValueError(
                f"high_pass ({self.high_pass:g} Hz) must be below low_pass ({self.low_pass:g} Hz): "
                "high_pass is the lower cut-off"
            )
        if self.passes == "forward" and self.edges != "odd":
            raise ValueError("edges applies to passes: both_ways; leave it out")
        return self


def butterworth(x: Floats, rate_hz: float, params: ButterworthParams) -> Floats:
    r"""Return the filtered samples.

    One pass of order n has, at the analogue frequency :math:`\Omega = \tan(\pi f / f_s)`,

    .. math::

        |H|^2 = \frac{1}{1 + \varepsilon^{2n}}, \qquad
        \varepsilon = \frac{\Omega}{\Omega_c}, \quad \frac{\Omega_c}{\Omega}, \quad
        \frac{|\Omega^2 - \Omega_h \Omega_l|}{\Omega B}

    for a low-pass, a high-pass and a band-pass. :math:`\Omega_c` and B are such that the gain
    after all passes is exactly as asked at the cut-offs: with P passes and a power gain of G there,
    :math:`\varepsilon_{cut} = (G^{-1/P} - 1)^{1/2n}`, which is 1 for one pass to -3 dB and
    :math:`(\sqrt 2 - 1)^{1/2n}` for two.

    Parameters
    ----------
    x : samples, shape (n,), any unit.
    rate_hz : sampling rate, Hz, above twice each cut-off.

    Returns
    -------
    Samples in the unit of ``x``, shape (n,). Forward, the filter starts from the steady state of
    the first sample. Both ways, the ends are padded by the length of the 1 % response, at most
    n - 1 samples, see `run_sections`.

    Raises
    ------
    ValueError
        When a cut-off is not below half the rate.

    References
    ----------
    S. Butterworth, On the theory of filter amplifiers, Wireless Engineer 7, 536-541, 1930.
    D. A. Winter, Biomechanics and Motor Control of Human Movement, 4th ed., section 3.4, 2009
    (the correction for two passes; from memory).
    """
    return _FILTER.filtered(x, rate_hz, params)


def prototype_poles(order: int) -> list[complex]:
    r"""Return the poles of the analogue low-pass of cut-off 1 rad/s.

    .. math:: s_k = e^{i \pi (2k + n + 1) / 2n}, \quad k = 0 \ldots n - 1
    """
    angles = [np.pi * (2 * k + order + 1) / (2 * order) for k in range(order)]
    poles = [complex(np.cos(a), np.sin(a)) for a in angles]
    if order % 2:
        poles[order // 2] = complex(-1.0)
    return poles


@lru_cache(maxsize=256)
def design(params: ButterworthParams, rate_hz: float) -> _iir.Cascade:
    """Return the second-order sections of one pass.

    Raises
    ------
    ValueError
        When a cut-off is not below half the rate.
    """
    for cutoff_hz in (params.high_pass, params.low_pass):
        if cutoff_hz is not None and cutoff_hz >= rate_hz / 2:
            raise ValueError(f"{cutoff_hz:g} Hz is not below half of {rate_hz:g} Hz")
    order = params.order_per_pass
    passes = 2 if params.passes == "both_ways" else 1
    power = 0.5 if params.cutoff_at == "-3 dB" else 0.25
    at_cutoff = (power ** (-1 / passes) - 1) ** (1 / (2 * order))
    upper = [p for p in prototype_poles(order) if p.imag > 0]
    real = order % 2 == 1

    def warped(freq_hz: float) -> float:
        return float(np.tan(np.pi * freq_hz / rate_hz))

    def to_z(s: complex) -> complex:
        return (1 + s) / (1 - s)

    sections: list[tuple[complex, complex, complex, complex]] = []
    if params.high_pass is None or params.low_pass is None:
        if params.low_pass is not None:
            scale, zero = warped(params.low_pass) / at_cutoff, complex(-1)
            analogue = [scale * p for p in upper]
        else:
            scale, zero = warped(params.high_pass or 0.0) * at_cutoff, complex(1)
            analogue = [scale / p for p in upper]
        if real:
            sections.append((to_z(complex(-scale)), 0j, zero, 0j))
        for s in analogue:
            sections.append((to_z(s), to_z(s).conjugate(), zero, zero))
        return _iir.cascade(sections, -zero)

    low, high = warped(params.high_pass), warped(params.low_pass)
    width, centre = (high - low) / at_cutoff, float(np.sqrt(low * high))
    for s in [complex(-1.0)] * real + upper:
        middle = s * width / 2
        root = np.sqrt(middle * middle - centre * centre)
        outer = max(middle + root, middle - root, key=abs)
        inner = centre * centre / outer  # not by difference, which would cancel for a wide band
        if s.imag == 0:
            sections.append((to_z(inner), to_z(outer), complex(1), complex(-1)))
        else:
            # Each slow pole with the zero at 0 Hz, each fast one with that at Nyquist.
            sections.append((to_z(inner), to_z(inner).conjugate(), complex(1), complex(1)))
            sections.append((to_z(outer), to_z(outer).conjugate(), complex(-1), complex(-1)))
    return _iir.cascade(sections, to_z(1j * centre))


_FILTER: _iir.Filter[ButterworthParams] = _iir.Filter("filter.butterworth", design)
gain_at, response_s = _FILTER.gain_at, _FILTER.response_s
run, context = _FILTER.run, _FILTER.context


def spec(params: ButterworthParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Return the signal between the cut-offs; refuse a cut-off at or above Nyquist."""
    sound = True
    for name in ("high_pass", "low_pass"):
        cutoff_hz = getattr(params, name)
        if cutoff_hz is not None and given.nyquist_hz is not None:
            if cutoff_hz >= given.nyquist_hz:
                sound = False
                findings.refuse(
                    f"{name} is {cutoff_hz:g} Hz, not below the Nyquist frequency "
                    f"{given.nyquist_hz:g} Hz",
                    name,
                )
            elif cutoff_hz < SLOWEST * given.nyquist_hz:
                sound = False
                findings.refuse(
                    f"{name} is {cutoff_hz:g} Hz, too slow for a rate of "
                    f"{2 * given.nyquist_hz:g} Hz: rounding would show; resample first",
                    name,
                )
    known = sound and given.rate_hz is not None
    length_s = float(response_s(params, given.rate_hz)) if known and given.rate_hz else 0.0
    return given.passing(params.high_pass, params.low_pass, length_s)


def derive(params: ButterworthParams, given: SignalSpec) -> list[Derived]:
    """Return the gains measured at the cut-offs after all passes, and how long it rings."""
    if given.rate_hz is None:
        return []
    known = []
    for name in ("high_pass", "low_pass"):
        cutoff_hz = getattr(params, name)
        if cutoff_hz is not None:
            gain = float(gain_at(params, float(given.rate_hz), cutoff_hz))
            known.append(Derived(f"gain at {name}", 20 * float(np.log10(gain)), "dB"))
    length_s = float(response_s(params, given.rate_hz))
    return [*known, Derived("response above 1 %", length_s, "s")]


STAGE = Stage(
    name="filter.butterworth",
    version=1,
    params=ButterworthParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    response=_FILTER.response(),
    derive=derive,
    example={"high_pass": "0.5 Hz", "low_pass": "40 Hz"},
    source="S. Butterworth, On the theory of filter amplifiers, Wireless Engineer 7, 536-541, 1930",
)
