"""Masks time in which the signal's amplitude goes beyond a limit."""

from typing import Annotated, Literal

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
    exclusions_of,
    unit_factor,
)
from waveassay_stages.exclude import _sliding


def _positive(amount: Quantity) -> Quantity:
    if not amount.value > 0:
        raise ValueError(f"{amount} is not above 0")
    return amount


class AmplitudeParams(Params):
    """Parameters of `beyond`."""

    range: Annotated[SignalAmount, AfterValidator(_positive)] = Field(
        description="The largest amplitude that is accepted, in a unit of the signal's kind."
    )
    window: Annotated[Seconds, Field(gt=0)] = Field(
        description="Length of the window that slides sample by sample and is masked whole; "
        "rounded to whole samples."
    )
    criterion: Literal["peak_to_peak", "absolute"] = Field(
        default="peak_to_peak",
        description="What may not exceed the range: the difference between the largest and the "
        "smallest sample of a window, or the size of any sample.",
    )


def beyond(
    x: Floats,
    width: int,
    limit: float,
    criterion: str,
    bounds: tuple[Floats, Floats] | None = None,
) -> Bools:
    r"""Tell which windows of ``width`` samples go beyond the limit.

    .. math::

        \max_{k} x_{i+k} - \min_{k} x_{i+k} > L \quad\text{or}\quad \max_{k} |x_{i+k}| > L,
        \qquad 0 \le k < w

    Parameters
    ----------
    x : samples, shape (n,).
    width : samples a window, at most n.
    limit : in the unit of ``x``. Equal to it is not beyond it.
    criterion : ``peak_to_peak`` or ``absolute``.
    bounds : `block_extremes` of x for this width, where they are known already.

    Returns
    -------
    One truth value for each window, shape (n - width + 1,). Samples that are not finite numbers
    take no part.
    """
    windows = np.zeros(x.size - width + 1, np.bool_)
    if bounds is None:
        bounds = _sliding.block_extremes(x, width)
    # A window lies within the block in which it starts and the next: where those keep within the
    # limit, so does it.
    low = _sliding.with_next(np.minimum, bounds[0])
    high = _sliding.with_next(np.maximum, bounds[1])
    with np.errstate(invalid="ignore"):  # between two infinities
        size = np.maximum(high, -low) if criterion == "absolute" else high - low
    for first, stop in _sliding.runs(~(size <= limit)):
        near = x[first * width : (stop + 1) * width]
        if near.size >= width:
            found = _each_beyond(near, width, limit, criterion)
            windows[first * width : first * width + found.size] = found
    return windows


def _each_beyond(x: Floats, width: int, limit: float, criterion: str) -> Bools:
    """Return the same by looking at each window."""
    finite = np.isfinite(x)
    if criterion == "absolute":
        return _sliding.sliding_max(np.where(finite, np.abs(x), -np.inf), width) > limit
    every = bool(np.all(finite))
    highest = _sliding.sliding_max(x if every else np.where(finite, x, -np.inf), width)
    lowest = _sliding.sliding_min(x if every else np.where(finite, x, np.inf), width)
    return highest - lowest > limit


def spec(params: AmplitudeParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Return the signal as it is; refuse a range in a unit of another kind."""
    try:
        unit_factor(params.range.unit, given.unit)
    except UnitError as error:
        findings.refuse(f"the signal is in {given.unit}: {error}", "range")
    return given


def context(params: AmplitudeParams, given: SignalSpec) -> Reach:
    """Return one window before and after: it may be masked by any that holds the moment."""
    if given.rate_hz is None:
        raise ValueError("the rate must be known")
    span_s = _sliding.window_samples(params.window, given.rate_hz) / given.rate_hz
    return Reach(span_s, span_s)


def run(params: AmplitudeParams, signal: Signal) -> Signal:
    """Mask every window beyond the limit, and every sample that is not a finite number.

    A piece shorter than the window is one window.
    """
    if signal.x.size == 0:
        return signal
    width = min(signal.x.size, _sliding.window_samples(params.window, signal.rate_hz))
    bounds = _sliding.block_extremes(signal.x, width)
    limit = params.range.to(signal.unit)
    windows = beyond(signal.x, width, limit, params.criterion, bounds)
    found = _sliding.covered(signal, windows, width, "amplitude")
    if not np.all(np.isfinite(bounds)):
        found.extend(exclusions_of(signal, ~np.isfinite(signal.x), "not finite"))
    return signal.excluding(found) if found else signal


STAGE = Stage(
    name="exclude.amplitude",
    version=1,
    params=AmplitudeParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    example={"range": "250 uV", "window": "1 s"},
)
