"""What a window that slides sample by sample sees, and the time that such windows cover."""

from fractions import Fraction

import numpy as np

from waveassay.contract import Bools, Exclusion, Floats, Signal, exact


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


def block_extremes(x: Floats, width: int) -> tuple[Floats, Floats]:
    """Return the least and the greatest of each ``width`` samples side by side, and of the rest.

    NaN where a sample is. One pass each, where sliding takes one for each doubling of the reach.
    """
    first = np.arange(0, x.size, width)
    return np.minimum.reduceat(x, first), np.maximum.reduceat(x, first)


def with_next(extreme: np.ufunc, of_blocks: Floats) -> Floats:
    """Return the extreme of each block and the next: bounds of the windows that start in it."""
    found = of_blocks.copy()
    extreme(of_blocks[:-1], of_blocks[1:], out=found[:-1])
    return found


def runs(marks: Bools) -> list[tuple[int, int]]:
    """Return where marks lie that follow one another: start included and stop not."""
    framed = np.zeros(marks.size + 2, np.bool_)
    framed[1:-1] = marks
    edges = np.flatnonzero(framed[1:] != framed[:-1])
    return [(start, stop) for start, stop in edges.reshape(-1, 2).tolist()]


def covered(signal: Signal, windows: Bools, width: int, reason: str) -> list[Exclusion]:
    """Return as masked time all samples of the marked windows; window i starts at sample i."""
    if not np.any(windows):
        return []
    spans: list[tuple[int, int]] = []
    for start, stop in runs(windows):
        if spans and start <= spans[-1][1]:
            start = spans.pop()[0]
        spans.append((start, stop + width - 1))
    return [Exclusion(signal.time_s(start), signal.time_s(stop), reason) for start, stop in spans]


def window_samples(length_s: float, rate_hz: Fraction) -> int:
    """Return a window's length in whole samples, rounded, at least 1."""
    return max(1, round(exact(length_s) * rate_hz))
