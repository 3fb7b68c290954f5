"""Smooth a signal by a moving average."""

from fractions import Fraction
from typing import Any

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Findings,
    Floats,
    Kind,
    Params,
    Reach,
    Response,
    Seconds,
    Signal,
    SignalSpec,
    Stage,
    exact,
    kernel_gain,
)


class SmoothParams(Params):
    """Parameters of `acme.smooth`."""

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


def gain(params: SmoothParams, given: SignalSpec, freq_hz: Floats) -> Any:
    """Return what the average leaves of each frequency."""
    rate_hz = float(given.rate_hz or 1)
    half = max(1, round(params.length * rate_hz)) // 2
    return kernel_gain(np.full(2 * half + 1, 1 / (2 * half + 1)), half, freq_hz, rate_hz)


def mask(params: SmoothParams, signal: Signal) -> Signal:
    """Exclude nothing more."""
    return signal


STAGE = Stage(
    name="acme.smooth",
    version=1,
    params=SmoothParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
    context=context,
    response=Response(gain, mask),
    example={"length": "50 ms"},
)
