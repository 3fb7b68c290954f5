"""Refusal of samples that are not numbers, for stages that would spread them."""

import numpy as np

from waveassay.contract import Signal, SignalError


def require_finite(signal: Signal, step: str) -> None:
    """Raise SignalError when a sample is not a finite number."""
    bad = np.flatnonzero(~np.isfinite(signal.x))
    if bad.size:
        raise SignalError(
            f"{step}: signal {signal.name} has {bad.size} samples that are not finite numbers, the "
            f"first at {float(signal.time_s(int(bad[0]))):g} s, and would spread them. Mend the "
            "recording, or leave this signal out"
        )
