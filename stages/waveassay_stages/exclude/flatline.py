"""Masks time in which the signal does not move, as when an electrode or a line is disconnected."""

from typing import Annotated

import numpy as np
from pydantic import AfterValidator, Field

from waveassay.contract import (
    Bools,
    Findings,
    Floats,
    Kind,
    Params,
    Quantity,
    Reach,
    Seconds,
    Signal,
    SignalAmount,
    SignalSpec,
    Stage,
    UnitError,
    unit_factor,
)
from waveassay_stages.exclude import _sliding


def _not_negative(amount: Quantity) -> Quantity:
    if amount.value < 0:
        raise ValueError(f"{amount} is below 0")
    return amount


class FlatlineParams(Params):
    """Parameters of `flat`."""

    at_least: Annotated[Seconds, Field(gt=0)] = Field(
        default=1.0,
        description="How long the signal must stay flat to be masked; rounded to whole samples, "
        "at least two.",
    )
    tolerance: Annotated[SignalAmount, AfterValidator(_not_negative)] | None = Field(
        default=None,
        description="How much it may still move, between the largest and the smallest sample, in "
        "a unit of the signal's kind. Default: not at all.",
    )


def flat(x: Floats, width: int, tolerance: float) -> Bools:
    r"""Tell which windows of ``width`` samples stay within the tolerance.

    .. math:: \max_k x_{i+k} - \min_k x_{i+k} \le T, \qquad 0 \le k < w

    Parameters
    ----------
    x : samples, shape (n,).
    width : samples a window, at most n.
    tolerance : in the unit of ``x``.

    Returns
    -------
    One truth value for each window, shape (n - width + 1,). A window that holds a sample that is
    not a finite number is not flat.
    """
    windows = np.zeros(x.size - width + 1, np.bool_)
    # A window holds a whole block of half its length: where that moves, the window does.
    half = (width + 1) // 2
    low, high = _sliding.block_extremes(x, half)
    with np.errstate(invalid="ignore"):  # between two infinities
        still = high - low <= tolerance
    for first, stop in _sliding.runs(still):
        begin = max(0, (first + 1) * half - width)
        near = x[begin : (stop - 1) * half + width]
        if near.size >= width:
            found = _each_flat(near, width, tolerance)
            windows[begin : begin + found.size] = found
    return windows


def _each_flat(x: Floats, width: int, tolerance: float) -> Bools:
    """Return the same by looking at each window."""
    finite = np.isfinite(x)
    every = bool(np.all(finite))
    highest = _sliding.sliding_max(x if every else np.where(finite, x, np.inf), width)
    lowest = _sliding.sliding_min(x if every else np.where(finite, x, -np.inf), width)
    return highest - lowest <= tolerance


def spec(params: FlatlineParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Return the signal as it is; refuse a tolerance in a unit of another kind."""
    if params.tolerance is not None:
        try:
            unit_factor(params.tolerance.unit, given.unit)
        except UnitError as error:
            findings.refuse(f"the signal is in {given.unit}: {error}", "tolerance")
    elif given.pass_hz != (None, None):
        findings.warn(
            "a filter stands before it, and a filtered signal is hardly ever quite flat: put it "
            "before the filter, or give a tolerance"
        )
    return given


def context(params: FlatlineParams, given: SignalSpec) -> Reach:
    """Return one window before and after: it may be masked by any that holds the moment."""
    if given.rate_hz is None:
        raise ValueError("the rate must be known")
    span_s = max(2, _sliding.window_samples(params.at_least, given.rate_hz)) / given.rate_hz
    return Reach(span_s, span_s)


def run(params: FlatlineParams, signal: Signal) -> Signal:
    """Mask every stretch that stays flat for long enough."""
    width = max(2, _sliding.window_samples(params.at_least, signal.rate_hz))
    if signal.x.size < width:
        return signal
    tolerance = 0.0 if params.tolerance is None else params.tolerance.to(signal.unit)
    windows = flat(signal.x, width, tolerance)
    return signal.excluding(_sliding.covered(signal, windows, width, "flatline"))


STAGE = Stage(
    name="exclude.flatline",
    version=1,
    params=FlatlineParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    example={"at_least": "1 s"},
)
