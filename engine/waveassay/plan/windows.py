"""What each step on samples must give so that a stretch comes out right: from its end backwards.

All is counted in steps of the grid of stretches from the start of the piece.
"""

from collections.abc import Hashable, Mapping
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from math import ceil

from waveassay.contract import Interval
from waveassay.plan.blocks import Span
from waveassay.plan.fusing import Unit, units_of
from waveassay.plan.program import Program

Window = tuple[Fraction, Fraction]

_MOST_WINDOWS = 10_000
_windows: dict[Hashable, Window] = {}


@dataclass(frozen=True)
class Form:
    """How one pass over the samples of one signal is carried out."""

    program: Program
    pass_no: int

    @cached_property
    def step_s(self) -> Fraction:
        """The step of the grid of stretches."""
        return self.program.grid_step_s

    @cached_property
    def units(self) -> tuple[Unit, ...]:
        """What is run at once, in order."""
        return units_of(self.program, self.pass_no)

    @cached_property
    def kept(self) -> tuple[int, ...]:
        """The steps whose signals are kept."""
        return tuple(self.program.kept_signals(self.pass_no))

    def own(self, piece: Interval, start_s: Fraction, stop_s: Fraction) -> Span:
        """Return the span from start to stop."""
        low = int((start_s - piece.start_s) // self.step_s)
        return low, ceil((stop_s - piece.start_s) / self.step_s)

    def spans(self, piece: Interval, own: Span) -> Mapping[int, Span]:
        """Return by step what is needed of its output, for a stretch with this span."""
        total = ceil(piece.length_s / self.step_s)
        wanted: dict[int, Span] = dict.fromkeys(self.kept, own)
        for unit in reversed(self.units):
            span = wanted.setdefault(unit.index, own)
            taken = self._input(unit, span, own, total)
            known = wanted.get(unit.source, taken)
            wanted[unit.source] = (min(known[0], taken[0]), max(known[1], taken[1]))
        return wanted

    @cached_property
    def alike(self) -> Hashable:
        """What two forms have in common that need the same of every stretch."""
        units = tuple((u.index, u.source, u.before, u.after, u.block_s) for u in self.units)
        return self.step_s, self.kept, units

    def window_s(self, piece: Interval, start_s: Fraction, stop_s: Fraction) -> Window:
        """Return what must be read for all that lies from start to stop."""
        # The signals of a recording are mostly alike, and each is asked for every stretch.
        key = (self.alike, piece, start_s, stop_s)
        if key not in _windows:
            if len(_windows) > _MOST_WINDOWS:
                _windows.clear()
            _windows[key] = self._window_s(piece, start_s, stop_s)
        return _windows[key]

    def _window_s(self, piece: Interval, start_s: Fraction, stop_s: Fraction) -> Window:
        spans = self.spans(piece, self.own(piece, start_s, stop_s))
        given = {unit.index for unit in self.units}
        inputs = [span for index, span in spans.items() if index not in given]
        if not inputs:
            return start_s, stop_s
        return self.time_s(piece, (min(s[0] for s in inputs), max(s[1] for s in inputs)))

    def time_s(self, piece: Interval, span: Span) -> Window:
        """Return a span's start and stop."""
        low, high = (piece.start_s + count * self.step_s for count in span)
        return low, min(piece.stop_s, high)

    def _input(self, unit: Unit, span: Span, own: Span, total: int) -> Span:
        """Return what a unit needs of its input to give a span of its output."""
        low, high = span[0] - unit.before, span[1] + unit.after
        if unit.fused:
            reach = unit.before + unit.after
            grid = unit.grid(self.step_s)
            blocks = grid.covering(span, own)
            first = grid.border(blocks[0]) - grid.margin - unit.before
            last = grid.border(blocks[-1]) - grid.margin - unit.before
            low, high = min(low, first), max(high, last + grid.reads(reach))
            # Near an end of the piece the plain functions are run on that end, always the same.
            if span[0] < unit.before:
                low, high = 0, max(high, reach)
            if span[1] > total - unit.after - 1:
                low, high = min(low, total - 1 - reach), total
        return max(0, low), min(total, high)
