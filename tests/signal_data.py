"""Signals for tests of the stages that work on samples."""

from collections.abc import Sequence
from fractions import Fraction

import numpy as np

from waveassay.contract import Condition, Exclusion, Floats, Interval, Signal, SignalSpec, merged


def signal_of(
    x: Floats | Sequence[float],
    rate_hz: Fraction | int = 250,
    *,
    start_s: Fraction | int = 0,
    masks: Sequence[tuple[float, float, str]] = (),
    conditions: Sequence[tuple[float, float, str]] = (),
    unit: str = "uV",
) -> Signal:
    """Return a whole piece; times of masks and conditions are decimals, in s."""
    samples = np.array(x, np.float64)
    start, rate = Fraction(start_s), Fraction(rate_hz)
    piece = Interval(start, start + samples.size / rate)
    return Signal(
        name="frontal",
        unit=unit,
        rate_hz=rate,
        start_s=start,
        x=samples,
        piece=piece,
        excluded=merged(Exclusion(_time(a), _time(b), reason) for a, b, reason in masks),
        conditions=tuple(Condition(_time(a), _time(b), name) for a, b, name in conditions),
    )


def _time(value: float) -> Fraction:
    return Fraction(str(value))


def spec_of(rate_hz: Fraction | int | None = 250, unit: str = "uV") -> SignalSpec:
    """Return the spec of such a signal."""
    return SignalSpec("frontal", unit, "eeg", None if rate_hz is None else Fraction(rate_hz))


def masked_s(signal: Signal, reason: str) -> list[tuple[float, float]]:
    """Return the masked time of one reason."""
    return [(float(m.start_s), float(m.stop_s)) for m in signal.excluded if m.reason == reason]


def is_masked(signal: Signal) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Tell which samples lie in masked time, shape (n,)."""
    found = np.zeros(signal.x.size, np.bool_)
    for item in signal.excluded:
        first = max(0, signal.index_at(item.start_s))
        found[first : max(first, signal.index_at(item.stop_s))] = True
    return found


def tone(freq_hz: float, rate_hz: float, count: int, phase: float = 0.0) -> Floats:
    """Return a sine of amplitude 1."""
    return np.asarray(np.sin(2 * np.pi * freq_hz * np.arange(count) / rate_hz + phase), np.float64)
