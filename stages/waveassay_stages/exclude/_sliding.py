"""What a window that slides sample by sample sees, and the time that such windows cover."""

from dataclasses import replace
from fractions import Fraction

import numpy as np

from waveassay.contract import Bools, Exclusion, Floats, Signal, exact, exclusions_of


def sliding_max(x: Floats, width: int) -> Floats:
    """Return the greatest of each ``width`` samples in a row, shape (n - width + 1,).

    The greatest of 2, 4, 8 ... in a row come from those of half as many; two windows of the last
    power of two, which overlap, make up the width.
    """
    return _sliding(np.maximum, x, width)


def sliding_min(x: Floats, width: int) -> Floats:
    """Return the least of each ``width`` samples in a row, likewise."""
    return _sliding(np.minimum, x, width)


def _sliding(extreme: np.ufunc, x: Floats, width: int) -> Floats:
    found, reach = x, 1
    while reach < width:
        apart = min(reach, width - reach)
        found = extreme(found[:-apart], found[apart:])
        reach += apart
    return found


def covered(signal: Signal, windows: Bools, width: int, reason: str) -> list[Exclusion]:
    """Return as masked time all samples of the marked windows; window i starts at sample i."""
    if not np.any(windows):
        return []
    first = np.zeros(signal.x.size, np.bool_)
    first[: windows.size] = windows
    rest_s = (width - 1) / signal.rate_hz
    return [
        replace(item, stop_s=item.stop_s + rest_s) for item in exclusions_of(signal, first, reason)
    ]


def window_samples(length_s: float, rate_hz: Fraction) -> int:
    """Return a window's length in whole samples, rounded, at least 1."""
    return max(1, round(exact(length_s) * rate_hz))
