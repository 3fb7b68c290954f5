"""Notch at the mains frequency and its harmonics, run both ways or forward."""

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


class NotchParams(Params):
    """Parameters of `notch`."""

    line: Annotated[Hertz, Field(gt=0)] = Field(description="The mains frequency, 50 or 60 Hz.")
    harmonics: Annotated[int, Field(ge=1)] | Literal["all"] = Field(
        default=1,
        description="How many multiples of the line frequency are removed, itself being the "
        "first; all: every one below the Nyquist frequency.",
    )
    width: Annotated[Hertz, Field(gt=0)] = Field(
        default=2.0,
        description="Width of each notch between the frequencies of half the power (-3 dB), "
        "after all passes. A quality factor Q is line / width.",
    )
    passes: _iir.Passes = Field(
        default="both_ways",
        description="both_ways: forward, then backward, without any delay; forward: causal.",
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
        if self.width >= self.line:
            raise ValueError(
                f"width ({self.width:g} Hz) must be below the line frequency ({self.line:g} Hz)"
            )
        if self.passes == "forward" and self.edges != "odd":
            raise ValueError("edges applies to passes: both_ways; leave it out")
        return self


def notch(x: Floats, rate_hz: float, params: NotchParams) -> Floats:
    r"""Return the samples without the line frequency and its harmonics.

    Each notch is a second-order section of gain 1 at 0 Hz and 0 at :math:`\omega_0`,

    .. math::

        H(z) = \frac{1}{1 + \beta} \,
               \frac{1 - 2 \cos\omega_0 z^{-1} + z^{-2}}
                    {1 - 2 \frac{\cos\omega_0}{1 + \beta} z^{-1}
                       + \frac{1 - \beta}{1 + \beta} z^{-2}}, \qquad
        \beta = \tan\frac{\Delta\omega}{2} \sqrt{2^{1/P} - 1}

    so that after P passes the power is halved exactly :math:`\Delta\omega` apart. The two
    frequencies lie around the line by the geometric mean of their tangents.

    Parameters
    ----------
    x : samples, shape (n,), any unit.
    rate_hz : sampling rate, Hz.

    Returns
    -------
    Samples in the unit of ``x``, shape (n,); start, ends and padding as for `run_sections`.

    Raises
    ------
    ValueError
        When a notch does not lie below half the rate entirely.

    References
    ----------
    S. J. Orfanidis, Introduction to Signal Processing, section 11.3, 1996. The correction for two
    passes: derived.
    """
    return _FILTER.filtered(x, rate_hz, params)


def notched_hz(params: NotchParams, rate_hz: float) -> tuple[float, ...]:
    """Return the frequencies that are removed."""
    if params.harmonics == "all":
        count = int((rate_hz - params.width) / 2 / params.line)
        if params.line * count + params.width / 2 >= rate_hz / 2:
            count -= 1
    else:
        count = params.harmonics
    return tuple(params.line * k for k in range(1, count + 1))


@lru_cache(maxsize=256)
def design(params: NotchParams, rate_hz: float) -> _iir.Cascade:
    """Return the second-order sections of one pass, one a notch.

    Raises
    ------
    ValueError
        When a notch does not lie below half the rate entirely, or none does.
    """
    lines_hz = notched_hz(params, rate_hz)
    if not lines_hz or lines_hz[-1] + params.width / 2 >= rate_hz / 2:
        raise ValueError(f"the notch does not lie below half of {rate_hz:g} Hz")
    passes = 2 if params.passes == "both_ways" else 1
    beta = float(np.tan(np.pi * params.width / rate_hz) * np.sqrt(2 ** (1 / passes) - 1))
    sections = []
    for freq_hz in lines_hz:
        omega = 2 * np.pi * freq_hz / rate_hz
        zero = complex(np.cos(omega), np.sin(omega))
        middle = complex(np.cos(omega) / (1 + beta))
        root = np.sqrt(middle * middle - (1 - beta) / (1 + beta))
        sections.append((middle + root, middle - root, zero, zero.conjugate()))
    return _iir.cascade(sections, complex(1))


_FILTER: _iir.Filter[NotchParams] = _iir.Filter("filter.notch", design)
gain_at, response_s = _FILTER.gain_at, _FILTER.response_s
run, context = _FILTER.run, _FILTER.context


def spec(params: NotchParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Return the signal, what it passes unchanged; refuse a notch at or above Nyquist."""
    if given.rate_hz is None or given.nyquist_hz is None:
        return given
    lines_hz = notched_hz(params, float(given.rate_hz))
    if lines_hz and lines_hz[-1] + params.width / 2 < given.nyquist_hz:
        return given.passing(None, None, float(response_s(params, given.rate_hz)))
    highest_hz = max((*lines_hz, params.line))
    findings.refuse(
        f"a notch of {params.width:g} Hz at {highest_hz:g} Hz does not lie below the Nyquist "
        f"frequency {given.nyquist_hz:g} Hz",
        "harmonics" if highest_hz > params.line else "line",
    )
    return given


def derive(params: NotchParams, given: SignalSpec) -> list[Derived]:
    """Return the frequencies removed, and how long the filter rings."""
    if given.rate_hz is None:
        return []
    lines = ", ".join(f"{line_hz:g}" for line_hz in notched_hz(params, float(given.rate_hz)))
    length_s = float(response_s(params, given.rate_hz))
    return [Derived("notches", lines, "Hz"), Derived("response above 1 %", length_s, "s")]


STAGE = Stage(
    name="filter.notch",
    version=1,
    params=NotchParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    response=_FILTER.response(),
    derive=derive,
    example={"line": "50 Hz"},
    source="S. J. Orfanidis, Introduction to Signal Processing, section 11.3, 1996",
)
