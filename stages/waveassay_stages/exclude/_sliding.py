"""What a window that slides sample by sample sees, and the time that such windows cover."""

from dataclasses import replace
from fractions import Fraction

import numpy as np

from waveassay.contract import Bools, Exclusion, Floats, Signal, exact, exclusions_of


def sliding_max(x: Floats, width: int) -> Floats:
    """Return the greatest of each ``width`` samples in a row, shape (n - width + 1,).

    Two running maxima, forward and backward in blocks of ``width``, meet in each window.

    References
    ----------
    M. van Herk, Pattern Recognition Letters 13, 517-521, 1992.
    """
    count = x.size - width + 1
    blocks = -(-x.size // width)
    padded = np.full(blocks * width, -np.inf)
    padded[: x.size] = x
    tiles = padded.reshape(blocks, width)
    ahead = np.maximum.accumulate(tiles, axis=1).ravel()
    behind = np.maximum.accumulate(tiles[:, ::-1], axis=1)[:, ::-1].ravel()
    return np.maximum(behind[:count], ahead[width - 1 : width - 1 + count])


def covered(signal: Signal, windows: Bools, width: int, reason: str) -> list[Exclusion]:
    """Return as masked time all samples of the marked windows; window i starts at sample i."""
    first = np.zeros(signal.x.size, np.bool_)
    first[: windows.size] = windows
    rest_s = (width - 1) / signal.rate_hz
    return [
        replace(item, stop_s=item.stop_s + rest_s) for item in exclusions_of(signal, first, reason)
    ]


def window_samples(length_s: float, rate_hz: Fraction) -> int:
    """Return a window's length in whole samples, rounded, at least 1."""
    return max(1, round(exact(length_s) * rate_hz))
