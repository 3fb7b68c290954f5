"""Claim a name that belongs to another."""

from fractions import Fraction

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Findings,
    Floats,
    Kind,
    Params,
    Reach,
    Seconds,
    Signal,
    SignalSpec,
    Stage,
    exact,
)


class SmoothParams(Params):
    """Parameters of `filter.notch`."""

    length: Seconds = Field(gt=0, description="Length of the average.")


def moving_average(x: Floats, samples: int) -> Floats:
    """Return the mean of an odd number of samples around each; the ends repeat."""
    half = samples // 2
    padded = np.pad(x, half, mode="edge")
    windows = np.lib.stride_tricks.sliding_window_view(padded, 2 * half + 1)
    return np.asarray(windows.mean(axis=-1), np.float64)


def spec(params: SmoothParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Say that the same signal comes out."""
    return given


def run(params: SmoothParams, signal: Signal) -> Signal:
    """Smooth one signal."""
    samples = max(1, round(params.length * float(signal.rate_hz)))
    return signal.with_samples(moving_average(signal.x, samples))


def context(params: SmoothParams, given: SignalSpec) -> Reach:
    """Return half the length on either side, and one sample for rounding."""
    rate_hz = given.rate_hz or Fraction(1)
    half = exact(params.length) / 2 + 1 / rate_hz
    return Reach(half, half)


STAGE = Stage(
    name="filter.notch",
    version=1,
    params=SmoothParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    example={"length": "50 ms"},
)
