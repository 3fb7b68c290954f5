"""What a window that slides sample by sample sees, and the time that such windows cover."""

from collections.abc import Iterator
from fractions import Fraction

import numpy as np

from waveassay.contract import Bools, Exclusion, Floats, Signal, exact


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


def runs(marked: Bools) -> Iterator[tuple[int, int]]:
    """Yield start and stop of each run of marked places."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], marked, [False])).astype(np.int8)))
    for start, stop in edges.reshape(-1, 2):
        yield int(start), int(stop)


def covered(signal: Signal, windows: Bools, width: int, reason: str) -> list[Exclusion]:
    """Return as masked time all samples of the marked windows; window i starts at sample i."""
    return [
        Exclusion(signal.time_s(start), signal.time_s(stop - 1 + width), reason)
        for start, stop in runs(windows)
    ]


def window_samples(length_s: float, rate_hz: Fraction) -> int:
    """Return a window's length in whole samples, rounded, at least 1."""
    return max(1, round(exact(length_s) * rate_hz))
