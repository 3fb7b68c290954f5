"""Drawing of spectra over time, with excluded time and conditions marked."""

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import groupby, pairwise
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Bools, Floats
from waveassay_stages.export._draw import (
    EXCLUDED_FACE,
    EXCLUDED_LINES,
    INK,
    QUIET,
    STRIP_COLOURS,
    canvas,
    png,
    reference_label,
    shortened,
    title,
)
from waveassay_stages.export._rows import Gathered

if TYPE_CHECKING:
    from matplotlib.axes import Axes

COLUMNS = 1200  # about the width of the axes in pixels
_MOST_LANES = 3
_WHOLE_RECORDING = "all"  # the one condition of a recipe that names none


@dataclass(frozen=True)
class Raster:
    """Levels on equal columns of time: ``border_s`` (columns + 1,), ``level_db`` (columns, f).

    ``excluded`` marks columns with epochs of which none is kept; a column with neither level nor
    mark lies in a gap or outside all conditions.
    """

    border_s: Floats
    level_db: NDArray[np.float32]
    excluded: Bools


@dataclass(frozen=True)
class Stretch:
    """Time that epochs of one condition cover without a break."""

    condition: str
    start_s: float
    stop_s: float


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


def stretches(data: Gathered) -> tuple[Stretch, ...]:
    """Return where each condition's epochs lie, in order of time; a gap starts a new stretch."""
    found: list[Stretch] = []
    for name in dict.fromkeys(data.condition):
        rows = [i for i, condition in enumerate(data.condition) if condition == name]
        spans = sorted((data.start_s[i], data.start_s[i] + data.duration_s[i]) for i in rows)
        start, stop = spans[0]
        for (_, _), (next_start, next_stop) in pairwise(spans):
            if next_start > stop + (next_stop - next_start) / 2:
                found.append(Stretch(name, float(start), float(stop)))
                start = next_start
            stop = max(stop, next_stop)
        found.append(Stretch(name, float(start), float(stop)))
    return tuple(sorted(found, key=lambda s: (s.start_s, s.stop_s, s.condition)))


def time_unit(length_s: float) -> tuple[str, float]:
    """Return the unit of the time axis and its length in seconds."""
    if length_s > 3 * 3600:
        return "h", 3600.0
    return ("min", 60.0) if length_s > 180 else ("s", 1.0)


def draw_spectrogram(
    data: Gathered, level_range: tuple[float, float] | None, colours: str
) -> bytes:
    """Draw levels over time and frequency, and return the picture."""
    import matplotlib
    from matplotlib.ticker import MaxNLocator

    raster = rastered(data)
    low, high = level_range or colour_limits(raster.level_db)
    unit, seconds = time_unit(float(raster.border_s[-1] - raster.border_s[0]))
    border = raster.border_s / seconds
    strips = stretches(data)
    named = {s.condition for s in strips} != {_WHOLE_RECORDING}
    lanes = _lanes(strips) if named else []
    with canvas() as figure:
        ratios = [0.055 * max(1, len(lanes)), 1.0] if named else [1.0]
        grid = figure.add_gridspec(len(ratios), 1, height_ratios=ratios, hspace=0.0)
        axes = figure.add_subplot(grid[-1])
        mesh = axes.pcolormesh(
            border,
            _borders(data.freq_hz),
            raster.level_db.T,
            cmap=matplotlib.colormaps[colours],
            vmin=low,
            vmax=high,
            shading="flat",
            rasterized=True,
        )
        for first, last in _runs(raster.excluded):
            axes.axvspan(
                border[first],
                border[last],
                facecolor=EXCLUDED_FACE,
                edgecolor=EXCLUDED_LINES,
                hatch="////",
                linewidth=0,
            )
        axes.set_xlim(border[0], border[-1])
        axes.set_ylim(*(_borders(data.freq_hz)[[0, -1]]))
        axes.xaxis.set_major_locator(MaxNLocator(nbins=12, steps=[1, 2, 2.5, 5, 10]))
        axes.set_xlabel(f"Time from the recording's start ({unit})")
        axes.set_ylabel("Frequency (Hz)")
        finite = raster.level_db[np.isfinite(raster.level_db)]
        beyond = (bool(np.any(finite < low)), bool(np.any(finite > high)))
        bar = figure.colorbar(
            mesh,
            ax=axes,
            pad=0.015,
            fraction=0.05,
            aspect=26,
            extend={(True, True): "both", (True, False): "min", (False, True): "max"}.get(
                beyond, "neither"
            ),
        )
        bar.set_label(f"Power density ({reference_label(data.unit)})")
        bar.outline.set_linewidth(0.5)
        top = axes
        if named:
            top = figure.add_subplot(grid[0], sharex=axes)
            _draw_strip(top, lanes, seconds)
        title(top, data.signal, "spectrogram")
        _draw_note(top, raster)
        if named:
            figure.draw_without_rendering()
            _label_strip(top, lanes, seconds)
        return png(figure)


def _borders(freq_hz: Floats) -> Floats:
    """Return the borders of the frequency lines, the first not below 0."""
    if freq_hz.size == 1:
        return np.array([max(0.0, freq_hz[0] - 0.5), freq_hz[0] + 0.5])
    half = (freq_hz[1] - freq_hz[0]) / 2
    return np.concatenate(([max(0.0, freq_hz[0] - half)], freq_hz + half))


def _runs(marks: Bools) -> Iterator[tuple[int, int]]:
    place = 0
    for marked, group in groupby(marks):
        length = len(list(group))
        if marked:
            yield place, place + length
        place += length


def _lanes(strips: tuple[Stretch, ...]) -> list[list[Stretch]]:
    """Put overlapping stretches in lanes; what finds no room in the last lane stays there."""
    lanes: list[list[Stretch]] = []
    for strip in strips:
        free = [lane for lane in lanes if lane[-1].stop_s <= strip.start_s + 1e-9]
        if free:
            free[0].append(strip)
        elif len(lanes) < _MOST_LANES:
            lanes.append([strip])
        else:
            lanes[-1].append(strip)
    return lanes


def _draw_strip(axes: "Axes", lanes: list[list[Stretch]], seconds: float) -> None:
    names = list(dict.fromkeys(strip.condition for lane in lanes for strip in lane))
    for level, lane in enumerate(lanes):
        for strip in lane:
            axes.broken_barh(
                [(strip.start_s / seconds, (strip.stop_s - strip.start_s) / seconds)],
                (len(lanes) - 1 - level + 0.1, 0.8),
                facecolor=STRIP_COLOURS[names.index(strip.condition) % len(STRIP_COLOURS)],
                edgecolor=QUIET,
                linewidth=0.6,
            )
    axes.set_ylim(0, len(lanes))
    axes.set_yticks([])
    axes.tick_params(axis="x", bottom=False, labelbottom=False)
    axes.spines[:].set_visible(False)


def _label_strip(axes: "Axes", lanes: list[list[Stretch]], seconds: float) -> None:
    """Write each condition's name in its box, cut to what fits; a narrow box stays empty."""
    for level, lane in enumerate(lanes):
        for strip in lane:
            left, right = strip.start_s / seconds, strip.stop_s / seconds
            corners = axes.transData.transform([(left, 0), (right, 0)])
            room = corners[1][0] - corners[0][0] - 6
            label = axes.text(
                (left + right) / 2,
                len(lanes) - 0.5 - level,
                strip.condition,
                ha="center",
                va="center",
                fontsize=8.5,
                color=INK,
                clip_on=True,
            )
            label.set_in_layout(False)
            length = len(strip.condition)
            while label.get_window_extent().width > room and length > 3:
                length -= 1
                label.set_text(shortened(strip.condition, length))
            if label.get_window_extent().width > room:
                label.set_visible(False)


def _draw_note(axes: "Axes", raster: Raster) -> None:
    notes = []
    if np.any(raster.excluded):
        notes.append("hatched: excluded")
    if not np.all(raster.excluded | np.any(np.isfinite(raster.level_db), axis=-1)):
        notes.append("blank: no data")
    note = "   ".join(notes)
    axes.set_title(note, loc="right", fontsize=8.5, fontweight="normal", color=QUIET, pad=8)
