"""Drawing of spectra over time, with excluded time and conditions marked."""

from itertools import groupby
from typing import TYPE_CHECKING

import numpy as np

from waveassay.contract import Floats
from waveassay_stages.export._conditions import draw_lanes, lanes, stretches
from waveassay_stages.export._draw import (
    BOTTOM,
    LEFT,
    TOP,
    axes_at,
    canvas,
    png,
    reference_label,
    rule,
    title,
)
from waveassay_stages.export._raster import COLUMNS, Raster, colour_limits, rastered
from waveassay_stages.export._rows import Gathered

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.image import AxesImage

_RIGHT = LEFT + COLUMNS
_LANE, _GAP = 33, 6  # height of a condition's box, and what separates it from the axes
_BAR, _BAR_GAP = 24, 20  # width of the colour bar, and what separates it from the axes


def time_unit(length_s: float) -> tuple[str, float]:
    """Return the unit of the time axis and its length in seconds."""
    if length_s > 3 * 3600:
        return "h", 3600.0
    return ("min", 60.0) if length_s > 180 else ("s", 1.0)


def draw_spectrogram(
    data: Gathered, level_range: tuple[float, float] | None, colours: str
) -> bytes:
    """Draw levels over time and frequency, and return the picture."""
    raster = rastered(data)
    low, high = level_range or colour_limits(raster.level_db)
    start_s, stop_s = float(raster.border_s[0]), float(raster.border_s[-1])
    unit, seconds = time_unit(stop_s - start_s)
    filled = lanes(stretches(data))
    top = TOP - (_LANE * len(filled) + _GAP if filled else 0)
    with canvas() as figure:
        axes = axes_at(figure, LEFT, BOTTOM, _RIGHT, top)
        image = axes.imshow(
            raster.level_db.T,
            extent=(start_s / seconds, stop_s / seconds, *_frequency_limits(data.freq_hz)),
            origin="lower",
            aspect="auto",
            interpolation="nearest",
            cmap=colours,
            vmin=low,
            vmax=high,
        )
        axes.set_ylim(bottom=max(0.0, axes.get_ylim()[0]))
        _draw_excluded(axes, raster, seconds)
        most = 10 if stop_s / seconds < 1e5 else 5  # long numbers need more room
        rule(axes.xaxis, f"Time from the recording's start ({unit})", most)
        rule(axes.yaxis, "Frequency (Hz)")
        bar = axes_at(figure, _RIGHT + _BAR_GAP, BOTTOM, _RIGHT + _BAR_GAP + _BAR, top)
        _draw_bar(bar, image, raster, f"Power density ({reference_label(data.unit)})")
        if filled:
            strip = axes_at(figure, LEFT, top + _GAP, _RIGHT, TOP)
            draw_lanes(strip, filled, start_s, stop_s)
        title(figure, data.name, _note(raster, bool(filled)), _RIGHT)
        return png(figure)


def _frequency_limits(freq_hz: Floats) -> tuple[float, float]:
    """Return the outer borders of the frequency lines."""
    half = float(freq_hz[1] - freq_hz[0]) / 2 if freq_hz.size > 1 else 0.5
    return float(freq_hz[0]) - half, float(freq_hz[-1]) + half


def _draw_excluded(axes: "Axes", raster: Raster, seconds: float) -> None:
    """Hatch the columns of which no epoch is kept."""
    spans = []
    for marked, group in groupby(range(COLUMNS), key=raster.excluded.tolist().__getitem__):
        places = list(group)
        if marked:
            first, last = raster.border_s[[places[0], places[-1] + 1]] / seconds
            spans.append((float(first), float(last - first)))
    axes.broken_barh(
        spans,
        (0, 1),
        transform=axes.get_xaxis_transform(),
        facecolor="#ededed",
        edgecolor="#a3a3a3",
        hatch="////",
        linewidth=0,
    )


def _draw_bar(axes: "Axes", image: "AxesImage", raster: Raster, name: str) -> None:
    """Draw the colours with their levels, pointed where levels lie beyond them."""
    finite = raster.level_db[np.isfinite(raster.level_db)]
    low, high = image.get_clim()
    below, above = bool(np.any(finite < low)), bool(np.any(finite > high))
    extend = ("both" if above else "min") if below else ("max" if above else "neither")
    axes.figure.colorbar(image, cax=axes, extend=extend)
    rule(axes.yaxis, name)


def _note(raster: Raster, named: bool) -> str:
    notes = ["spectrogram"]
    if np.any(raster.excluded):
        notes.append("hatched: excluded")
    if not np.all(raster.excluded | np.any(np.isfinite(raster.level_db), axis=-1)):
        notes.append("blank: outside conditions, or a gap" if named else "blank: no data")
    return "; ".join(notes)
