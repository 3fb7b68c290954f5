"""Conditions above a spectrogram: where each lies, in lanes where they overlap."""

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from waveassay_stages.export._draw import NOTE, QUIET, fitted
from waveassay_stages.export._raster import COLUMNS
from waveassay_stages.export._rows import Gathered

if TYPE_CHECKING:
    from matplotlib.axes import Axes

COLOURS = ("#dbe4ee", "#f0dfd3", "#dcebe0", "#e8dce6", "#eee6cc", "#dcebf2", "#e4e4e4")
_MOST_LANES = 5
_WHOLE_RECORDING = "all"  # the one condition of a recipe that names none


@dataclass(frozen=True)
class Stretch:
    """Time that epochs of one condition cover without a break."""

    condition: str
    start_s: float
    stop_s: float


def stretches(data: Gathered) -> tuple[Stretch, ...]:
    """Return where each condition's epochs lie, in order of time; a gap starts a new stretch."""
    found: list[Stretch] = []
    conditions = np.array(data.condition, np.str_)
    for name in dict.fromkeys(data.condition):
        rows = np.flatnonzero(conditions == name)
        start, length = data.start_s[rows], data.duration_s[rows]
        order = np.lexsort((start + length, start))
        start, stop = start[order], (start + length)[order]
        reached = np.maximum.accumulate(stop)
        breaks = start[1:] > reached[:-1] + (stop[1:] - start[1:]) / 2
        first = np.flatnonzero(np.concatenate(([True], breaks)))
        last = np.flatnonzero(np.concatenate((breaks, [True])))
        ends = zip(start[first].tolist(), reached[last].tolist(), strict=True)
        found += (Stretch(name, *both) for both in ends)
    return tuple(sorted(found, key=lambda s: (s.start_s, s.stop_s, s.condition)))


def lanes(strips: tuple[Stretch, ...]) -> list[list[Stretch]]:
    """Put overlapping stretches in lanes; what finds no room in the last lane stays there.

    There is no lane where a recipe names no conditions.
    """
    if {strip.condition for strip in strips} == {_WHOLE_RECORDING}:
        return []
    found: list[list[Stretch]] = []
    for strip in strips:
        free = [lane for lane in found if lane[-1].stop_s <= strip.start_s + 1e-9]
        if free:
            free[0].append(strip)
        elif len(found) < _MOST_LANES:
            found.append([strip])
        else:
            found[-1].append(strip)
    return found


def draw_lanes(axes: "Axes", filled: list[list[Stretch]], start_s: float, stop_s: float) -> None:
    """Draw each condition as a box with its name; a box too narrow for a name stays empty."""
    names = list(dict.fromkeys(strip.condition for lane in filled for strip in lane))
    colour = {name: COLOURS[place % len(COLOURS)] for place, name in enumerate(names)}
    axes.set_axis_off()
    axes.set_xlim(start_s, stop_s)
    axes.set_ylim(len(filled), 0)
    for level, lane in enumerate(filled):
        axes.broken_barh(
            [(strip.start_s, strip.stop_s - strip.start_s) for strip in lane],
            (level + 0.08, 0.84),
            facecolors=[colour[strip.condition] for strip in lane],
            edgecolor=QUIET,
            linewidth=0.6,
        )
        reached = start_s
        for strip in lane:
            room = (strip.stop_s - strip.start_s) / (stop_s - start_s) * COLUMNS - 8
            middle = (strip.start_s + strip.stop_s) / 2
            if strip.start_s >= reached - 1e-9:  # not so where the last lane is over-full
                label = fitted(strip.condition, room, NOTE)
                axes.text(
                    middle, level + 0.5, label, fontsize=NOTE, ha="center", va="center_baseline"
                )
            reached = max(reached, strip.stop_s)
