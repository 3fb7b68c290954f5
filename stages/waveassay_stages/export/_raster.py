"""Levels of epochs laid on equal columns of time, about a pixel each."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Bools, Floats
from waveassay_stages.export._rows import Gathered

COLUMNS = 1240  # the width of the axes in pixels


@dataclass(frozen=True)
class Raster:
    """Levels on equal columns of time: ``border_s`` (columns + 1,), ``level_db`` (columns, f).

    ``excluded`` marks columns with epochs of which none is kept; a column with neither level nor
    mark lies in a gap or outside all conditions.
    """

    border_s: Floats
    level_db: NDArray[np.float32]
    excluded: Bools


def rastered(data: Gathered, columns: int = COLUMNS) -> Raster:
    """Lay the epochs on columns of time.

    An epoch stands for its own time, and half-way to its neighbour where the two overlap. Where
    several kept epochs have their middle in one column, their mean power is shown.
    """
    order = np.argsort(data.start_s, kind="stable")
    begin, length = data.start_s[order], data.duration_s[order]
    middle = begin + length / 2
    kept, level = data.kept[order], data.level_db[order]
    start, stop = float(begin[0]), float(np.max(begin + length))
    border = start + (stop - start) * np.arange(columns + 1) / columns
    place = np.clip(np.searchsorted(border, middle, side="right") - 1, 0, columns - 1)

    shown = np.full((columns, data.freq_hz.size), np.nan, np.float32)
    seen = np.zeros(columns, np.bool_)
    seen[place] = True
    counts = np.bincount(place[kept], minlength=columns)
    rows = np.flatnonzero(kept)
    by_column = np.split(rows, np.cumsum(counts)[:-1])
    for column in np.flatnonzero(counts):
        here = level[by_column[column]]
        shown[column] = here[0] if len(here) == 1 else _mean_db(here)
    excluded = seen & (counts == 0)

    # A column without the middle of any takes the nearest epoch, if that reaches to it.
    centre = (border[1:] + border[:-1]) / 2
    after = np.clip(np.searchsorted(middle, centre), 1, max(1, middle.size - 1))
    before = after - 1
    after = np.minimum(after, middle.size - 1)
    nearest = np.where(centre - middle[before] <= middle[after] - centre, before, after)
    covered = ~seen & (np.abs(centre - middle[nearest]) <= length[nearest] / 2)
    take = covered & kept[nearest]
    shown[take] = level[nearest[take]]
    excluded |= covered & ~kept[nearest]
    return Raster(border, shown, excluded)


def _mean_db(level_db: NDArray[np.float32]) -> Floats:
    power = np.where(np.isfinite(level_db), 10.0 ** (level_db.astype(np.float64) / 10), 0.0)
    total = np.zeros(power.shape[1])
    for row in power:
        total += row
    level = np.full(total.shape, np.nan)
    np.log10(total / len(power), out=level, where=total > 0)
    return 10 * level


def colour_limits(level_db: NDArray[np.float32]) -> tuple[float, float]:
    """Return the 2nd and 99th percentile of what is shown, outward to whole decibels."""
    finite = level_db[np.isfinite(level_db)].astype(np.float64)
    low, high = np.floor(np.percentile(finite, 2)), np.ceil(np.percentile(finite, 99))
    return float(low), float(max(high, low + 1))
