"""Tasks: what is computed at once, each with the key of what it makes.

``prepare``  filters, resamples and masks a stretch of every signal of a passage;
``rows``     cuts epochs that start in a stretch, down to their features, and collects;
``combine``  turns what a pass collected into what the next pass applies;
``finish``   turns all rows of a passage into tables, averages and figures.

A key is the digest of all that can change a byte of what a task makes, and of nothing else.
"""

import hashlib
import json
from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from functools import cached_property, lru_cache
from typing import Any, Literal

from waveassay.contract import Kind
from waveassay.contract.digests import digest
from waveassay.plan.blocks import MARGIN
from waveassay.plan.fusing import FORM
from waveassay.plan.passage import Lane, Passage
from waveassay.plan.program import Level, Move
from waveassay.plan.sources import engine, stage_source, writers
from waveassay.plan.stretches import Stretch

Action = Literal["prepare", "rows", "combine", "finish"]

# Rough CPU seconds, only to balance jobs: they change no byte.
_READ_COST_S = 2.0e-9  # a sample
_PLAIN_COST_S = 1.5e-8  # a sample and step
_FUSED_COST_S = 1.0e-8  # a sample and fused group
_ROWS_COST_S = 8.0e-9  # a sample and step
_TASK_COST_S = 0.01
_FINISH_COST_S = 0.02
_FIGURE_COST_S = 0.13


@dataclass(frozen=True)
class Task:
    """One task of a passage. ``needs`` are keys of tasks whose artefacts it reads."""

    action: Action
    recording: str
    chain: str
    pass_no: int
    stretch: Stretch | None
    key: str
    needs: tuple[str, ...]
    cost_s: float


@dataclass
class _Planner:
    """Makes a passage's tasks from the end backwards, so that only what is needed is planned."""

    passage: Passage
    tasks: dict[tuple[str, int, Stretch | None], Task] = field(default_factory=dict)
    _steps: dict[tuple[str, int], list[str]] = field(default_factory=dict)

    @cached_property
    def conditions(self) -> str:
        """A digest of the recording's conditions, of which there may be thousands."""
        return digest([[c.name, c.start_s, c.stop_s] for c in self.passage.conditions])

    def finish(self) -> Task:
        passes = range(self.passage.passes)
        needs = [self.rows(p, s).key for p in passes for s in self._selected(p)]
        needs += [self.combine(p).key for p in passes if p > 0]
        identity = {
            "recording": self.passage.recording,
            "chain": self.passage.chain.name,
            "columns": [column.name for column in self.passage.columns],
            "writers": _digest_of_writers(),
            "pieces": [[p.start_s, p.stop_s] for p in self.passage.pieces],
            "conditions": self.conditions,
            "lanes": self._lanes("finish", 0),
        }
        figures = sum(
            move.step.given is Kind.FIGURE
            for lane in self.passage.lanes
            for move in lane.program.moves.values()
        )
        cost_s = _FINISH_COST_S + figures * _FIGURE_COST_S
        return self._task("finish", 0, None, identity, needs, cost_s)

    def combine(self, pass_no: int) -> Task:
        """Plan the state that pass ``pass_no`` applies."""
        known = self.tasks.get(("combine", pass_no, None))
        if known is not None:
            return known
        needs = [self.rows(pass_no - 1, s).key for s in self._selected(pass_no - 1)]
        identity = {"lanes": self._lanes("combine", pass_no)}
        return self._task("combine", pass_no, None, identity, needs, _FINISH_COST_S)

    def rows(self, pass_no: int, stretch: Stretch) -> Task:
        known = self.tasks.get(("rows", pass_no, stretch))
        if known is not None:
            return known
        bounds = [lane.bounds_s(stretch) for lane in self.passage.lanes]
        windows = []
        cost = 0.0
        for lane, (start, stop) in zip(self.passage.lanes, bounds, strict=True):
            reach = lane.program.rows_reach
            windows.append((start - reach.before_s, stop + reach.after_s))
            steps = max(1, len(rows_moves(lane, pass_no)))
            cost += _samples(lane, start, stop) * steps * _ROWS_COST_S
        identity = {
            "piece": _piece(self.passage, stretch),
            "conditions": self.conditions,
            "bounds": bounds,
            "lanes": self._lanes("rows", pass_no),
        }
        needs = self._needs(range(pass_no + 1), pass_no, stretch, windows)
        return self._task("rows", pass_no, stretch, identity, needs, cost)

    def prepare(self, pass_no: int, stretch: Stretch) -> Task:
        known = self.tasks.get(("prepare", pass_no, stretch))
        if known is not None:
            return known
        lanes = self.passage.lanes
        windows = [window_s(self.passage, lane, pass_no, stretch) for lane in lanes]
        cost = 0.0
        for lane, (low, high) in zip(lanes, windows, strict=True):
            cost += _samples(lane, low, high) * _sample_cost_s(lane, pass_no)
        identity = {
            "piece": _piece(self.passage, stretch),
            "bounds": [lane.bounds_s(stretch) for lane in lanes],
            "windows": windows,
            "lanes": self._lanes("prepare", pass_no),
        }
        needs = self._needs(range(pass_no), pass_no, stretch, windows)
        return self._task("prepare", pass_no, stretch, identity, needs, cost)

    def _needs(
        self,
        passes: Iterable[int],
        pass_no: int,
        stretch: Stretch,
        windows: Sequence[tuple[Fraction, Fraction]],
    ) -> list[str]:
        """Return the keys of what other tasks prepared within the windows, and of states."""
        wanted: dict[tuple[int, Stretch], None] = {}
        for p in passes:
            for lane, window in zip(self.passage.lanes, windows, strict=True):
                if lane.program.prepares(p) and lane.program.kept_signals(p):
                    for other in overlapping(lane, stretch.piece, *window):
                        wanted[p, other] = None
        needs = [self.prepare(p, other).key for p, other in wanted]
        return needs + [self.combine(p).key for p in range(1, pass_no + 1)]

    def _lanes(self, action: Action, pass_no: int) -> list[str]:
        """Return a digest of each lane's part in a task, but for the stretch."""
        if (action, pass_no) not in self._steps:
            self._steps[action, pass_no] = [
                _lane_digest(lane, action, pass_no) for lane in self.passage.lanes
            ]
        return self._steps[action, pass_no]

    def _selected(self, pass_no: int) -> Iterator[Stretch]:
        """Yield the stretches a pass looks at: all, or those that meet a condition."""
        everywhere = self.passage.passes > 1
        for stretch in self.passage.stretches:
            if everywhere or any(
                _meets(self.passage, lane, stretch) for lane in self.passage.lanes
            ):
                yield stretch

    def _task(
        self,
        action: Action,
        pass_no: int,
        stretch: Stretch | None,
        identity: dict[str, Any],
        needs: Iterable[str],
        cost_s: float,
    ) -> Task:
        unique = tuple(dict.fromkeys(needs))
        key = _digest(
            {
                "action": action,
                "pass": pass_no,
                "engine": _digest_of_engine(),
                "precision": self.passage.precision,
                "sha256": self.passage.sha256,
                "needs": list(unique),
                **identity,
            }
        )
        task = Task(
            action,
            self.passage.recording,
            self.passage.chain.name,
            pass_no,
            stretch,
            key,
            unique,
            cost_s + _TASK_COST_S,
        )
        self.tasks[(action, pass_no, stretch)] = task
        return task


def tasks_of(passage: Passage) -> tuple[Task, ...]:
    """Return the tasks of a passage, each after those that it needs; none without signals."""
    if not passage.lanes:
        return ()
    planner = _Planner(passage)
    planner.finish()
    return tuple(planner.tasks.values())


def rows_moves(lane: Lane, pass_no: int) -> list[Move]:
    """Return the moves on rows that a pass computes: its own and those they rest on."""
    return [
        m for m in lane.program.moves.values() if m.level is Level.ROWS and m.pass_no <= pass_no
    ]


def barriers(lane: Lane, pass_no: int) -> list[Move]:
    """Return the barriers whose state pass ``pass_no`` applies."""
    return [
        m
        for m in lane.program.moves.values()
        if m.barrier is not None and m.level is not Level.RECORDING and m.pass_no == pass_no
    ]


def gathers(lane: Lane, pass_no: int) -> list[Move]:
    """Return the steps that need nothing but the whole and whose input this pass has first."""
    return [
        m
        for m in lane.program.moves.values()
        if m.gather is not None
        and m.source is not None
        and lane.program.moves[m.source].level is not Level.RECORDING
        and lane.program.moves[m.source].pass_no == pass_no
    ]


def collected(lane: Lane, pass_no: int) -> list[Move]:
    """Return the steps for which a pass collects: barriers of the next pass, and gathers."""
    return [*barriers(lane, pass_no + 1), *gathers(lane, pass_no)]


def window_s(
    passage: Passage, lane: Lane, pass_no: int, stretch: Stretch
) -> tuple[Fraction, Fraction]:
    """Return what a stretch reads: itself and the context of the pass's steps on samples."""
    if pass_no >= len(lane.forms):
        return lane.bounds_s(stretch)
    piece = passage.pieces[stretch.piece]
    return lane.forms[pass_no].window_s(piece, *lane.bounds_s(stretch))


def overlapping(lane: Lane, piece: int, start_s: Fraction, stop_s: Fraction) -> list[Stretch]:
    """Return the stretches of a piece that share time with an interval, for one signal."""
    borders = lane.borders_s[piece]
    first = max(0, bisect_right(borders, start_s) - 1)
    last = min(len(borders) - 1, bisect_left(borders, stop_s))
    return [Stretch(piece, number) for number in range(first, last)]


def _meets(passage: Passage, lane: Lane, stretch: Stretch) -> bool:
    start, stop = lane.bounds_s(stretch)
    return any(c.start_s < stop and start < c.stop_s for c in passage.conditions)


def _lane_digest(lane: Lane, action: Action, pass_no: int) -> str:
    # The route knows the rest: the signal's name, unit, kind and rate, and the chain's steps.
    digests, key = lane.route.digests, (action, pass_no, lane.channel, lane.scale)
    if key not in digests:
        digests[key] = digest(_lane(lane, action, pass_no))
    return digests[key]


def _lane(lane: Lane, action: Action, pass_no: int) -> dict[str, Any]:
    """Return all of a signal and its steps that can change what a task makes of it."""
    known: dict[str, Any] = {
        "signal": lane.signal,
        "channel": lane.channel,
        "scale": lane.scale,
        "unit": lane.spec.unit,
        "modality": lane.spec.modality,
        "rate_hz": lane.spec.rate_hz,
    }
    if action == "prepare":
        known["steps"] = [_step(move) for move in lane.program.samples_moves(pass_no)]
        known["kept"] = lane.program.kept_signals(pass_no)
        if pass_no < len(lane.forms):
            known["fused"] = [
                [FORM, [move.index for move in unit.moves], unit.block_s, MARGIN]
                for unit in lane.forms[pass_no].units
                if unit.fused
            ]
    elif action == "rows":
        known["steps"] = [_step(move) for move in rows_moves(lane, pass_no)]
        known["collected"] = [_step(move) for move in collected(lane, pass_no)]
    elif action == "combine":
        known["steps"] = [_step(move) for move in barriers(lane, pass_no)]
    else:
        known["steps"] = [_step(move, named=True) for move in lane.program.moves.values()]
    return known


def _step(move: Move, *, named: bool = False) -> dict[str, Any]:
    known: dict[str, Any] = {
        "index": move.index,
        "source": move.source,
        "stage": move.step.stage.name,
        "version": move.step.stage.version,
        "code": stage_source(move.step.stage),
        "params": move.step.params.model_dump(mode="json"),
    }
    if named:
        known |= {"name": move.step.name, "alias": move.step.alias}
    return known


def _digest(known: dict[str, Any]) -> str:
    """Return the digest of a task's identity: texts, whole numbers, fractions, and lists of them.

    `digest` does the same for more kinds of values, in four times the time: a run over thousands
    of recordings has tens of thousands of tasks.
    """
    text = json.dumps(known, sort_keys=True, separators=(",", ":"), default=_fraction_text)
    return hashlib.sha256(text.encode("ascii")).hexdigest()


def _fraction_text(value: object) -> str:
    if not isinstance(value, Fraction):
        raise TypeError(f"{value!r} has no place in a key")
    return f"{value.numerator}/{value.denominator}"


@lru_cache(maxsize=1)
def _digest_of_engine() -> str:
    return digest(engine())


@lru_cache(maxsize=1)
def _digest_of_writers() -> str:
    return digest(writers())


def _piece(passage: Passage, stretch: Stretch) -> list[Fraction]:
    piece = passage.pieces[stretch.piece]
    return [piece.start_s, piece.stop_s]


def _sample_cost_s(lane: Lane, pass_no: int) -> float:
    units = lane.forms[pass_no].units if pass_no < len(lane.forms) else ()
    return _READ_COST_S + sum(_FUSED_COST_S if u.fused else _PLAIN_COST_S for u in units)


def _samples(lane: Lane, start_s: Fraction, stop_s: Fraction) -> float:
    return float((stop_s - start_s) * (lane.spec.rate_hz or 1))
