"""Drawing of averaged spectra with their confidence bands."""

from typing import TYPE_CHECKING, Any

import numpy as np

from waveassay.contract import Floats
from waveassay_stages.export._draw import (
    BOTTOM,
    LEFT,
    TOP,
    WIDTH,
    axes_at,
    canvas,
    png,
    reference_label,
    rule,
    shortened,
    title,
    width_of,
)
from waveassay_stages.export._rows import Gathered

if TYPE_CHECKING:
    from matplotlib.axes import Axes

# Distinct for the common colour deficiencies, and in lightness, so that they survive greyscale.
COLOURS = ("#1b4f8a", "#c8501e", "#3f8f5b", "#8c3b7a", "#b58900", "#4c9fc4", "#5b5b5b")
STYLES: tuple[Any, ...] = ("-", (0, (6, 2)), (0, (2, 1.5)), (0, (7, 2, 1.5, 2)))

_RIGHT = WIDTH - 40
_MOST_INSIDE, _MOST_NAMES = 6, 22  # more names stand beside the axes; more still are counted
_LARGE, _SMALL = 9.5, 8.0  # font sizes of the two, points


def confidence_band(level_db: Floats, dof: float, share: float) -> tuple[Floats, Floats]:
    """Return the lower and upper limits of a level in decibels, from its degrees of freedom.

    NaN where the degrees of freedom are not known.
    """
    from waveassay.contract.statistics import confidence_factors

    lower, upper = confidence_factors(dof if dof > 0 else np.nan, share)
    return level_db + 10 * np.log10(lower), level_db + 10 * np.log10(upper)


def level_limits(levels: Floats) -> tuple[float, float]:
    """Return limits, multiples of 5 dB, that hold all but the lowest 2 % of the levels."""
    finite = levels[np.isfinite(levels)]
    low, high = np.percentile(finite, 2), np.max(finite)
    return float(5 * np.floor((low - 1) / 5)), float(5 * np.ceil((high + 1) / 5))


def draw_spectra(
    data: Gathered, confidence: float, level_range: tuple[float, float] | None
) -> bytes:
    """Draw one line a row, with its band, and return the picture."""
    rows = np.flatnonzero(data.kept)
    labels = _labels(data, rows.tolist())
    inside = len(labels) <= _MOST_INSIDE
    beside = 0 if inside else int(max(width_of(label, _SMALL) for label in labels)) + 70
    with canvas() as figure:
        axes = axes_at(figure, LEFT, BOTTOM, _RIGHT - beside, TOP)
        shown = []
        for place, row in enumerate(rows):
            level = data.level_db[row].astype(np.float64)
            lower, upper = confidence_band(level, float(data.dof[row]), confidence)
            shown += [level, lower, upper]
            colour, style = COLOURS[place % len(COLOURS)], STYLES[place % len(STYLES)]
            axes.fill_between(data.freq_hz, lower, upper, color=colour, alpha=0.16, linewidth=0)
            axes.plot(data.freq_hz, level, color=colour, linestyle=style, linewidth=1.6)
        axes.set_xlim(float(data.freq_hz[0]), float(data.freq_hz[-1]))
        axes.set_ylim(*(level_range or level_limits(np.concatenate(shown))))
        rule(axes.xaxis, "Frequency (Hz)")
        rule(axes.yaxis, f"Power density ({reference_label(data.unit)})")
        axes.grid(color="#e3e3e3", linewidth=0.7)
        axes.set_axisbelow(True)
        axes.spines[["top", "right"]].set_visible(False)
        what = f"average spectrum with {confidence * 100:g} % confidence band"
        title(figure, data.name, what, _RIGHT)
        _draw_legend(axes, labels, inside)
        return png(figure)


def _labels(data: Gathered, rows: list[int]) -> list[str]:
    """Return the names of the lines; very many end in how many more there are."""
    named = rows if len(rows) <= _MOST_NAMES else rows[: _MOST_NAMES - 1]
    labels = []
    for row in named:
        count = int(data.epochs[row])
        labels.append(f"{shortened(data.condition[row], 28)} ({count} epoch{'s' * (count != 1)})")
    if len(named) < len(rows):
        labels.append(f"and {len(rows) - len(named)} more")
    return labels


def _draw_legend(axes: "Axes", labels: list[str], inside: bool) -> None:
    """Name the lines over the curves where they are few, beside the axes where they are many."""
    from matplotlib.lines import Line2D

    lines = list(axes.lines)
    if len(labels) < len(lines):
        lines[len(labels) - 1] = Line2D([], [], linestyle="none")
    axes.legend(
        lines[: len(labels)],
        labels,
        loc="upper right" if inside else "center left",
        bbox_to_anchor=(1.0, 1.0) if inside else (1.0, 0.5),
        fontsize=_LARGE if inside else _SMALL,
        framealpha=0.7,
        edgecolor="none",
    )
