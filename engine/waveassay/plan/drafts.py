"""Drafts of tasks: all that recordings which are alike have in common, worked out once.

A draft is a task without what is one recording's own: the digest of its bytes, its name, and the
keys that follow from these. Signals of a passage that go the same way are counted, not gone through
one by one.
"""

import json
from collections import Counter
from collections.abc import Hashable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property, lru_cache
from hashlib import sha256
from typing import Any, Literal

from waveassay.contract import Kind
from waveassay.contract.digests import digest
from waveassay.plan.blocks import MARGIN
from waveassay.plan.fusing import FORM
from waveassay.plan.pass_parts import barriers, collected, overlapping, rows_moves, window_s
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
class Draft:
    """A task of every recording that is like another one.

    Attributes
    ----------
    identity : digest of all that can change what it makes, but for the recording's bytes and what
        it needs.
    needs : places of other drafts, which come before it.
    """

    action: Action
    pass_no: int
    stretch: Stretch | None
    identity: str
    needs: tuple[int, ...]
    cost_s: float


def drafts_of(passage: Passage) -> tuple[Draft, ...]:
    """Return the drafts of a passage's tasks, each after those that it needs; none without lanes.

    They hold for the passages of all recordings that are alike.
    """
    shared = passage.shared
    if shared.drafts is None:
        shared.drafts = tuple(_Drafter(passage).drafts()) if passage.lanes else ()
    return shared.drafts


def holders_of(passage: Passage) -> tuple[tuple[str, tuple[int, ...]], ...]:
    """Return for each step that concerns a signal of the passage which drafts hold its work."""
    shared = passage.shared
    if shared.holders is None:
        shared.holders = tuple(_holders(passage))
    return shared.holders


def _holders(passage: Passage) -> Iterator[tuple[str, tuple[int, ...]]]:
    drafts = drafts_of(passage)
    for index, step in enumerate(passage.chain.steps):
        programs = [lane.program for lane in passage.lanes if index in lane.program.moves]
        if not programs:
            continue
        move = programs[0].moves[index]
        prepares = any(lane.program.prepares(move.pass_no) for lane in passage.lanes)
        action: Action = "rows"
        if move.level is Level.RECORDING:
            action = "finish"
        elif move.level is Level.SAMPLES and prepares:
            action = "prepare"
        held = (
            place
            for place, draft in enumerate(drafts)
            if draft.action == action and draft.pass_no in (move.pass_no, 0)
        )
        yield step.name, tuple(held)


class _Drafter:
    """Makes drafts from the end backwards, so that only what is needed is planned.

    ``ways`` are lanes that stand for all that go the same way.
    """

    def __init__(self, passage: Passage) -> None:
        self.passage = passage
        self._made: list[Draft] = []
        self._places: dict[tuple[Action, int, Stretch | None], int] = {}
        self._parts: dict[tuple[Action, int], str] = {}
        first: dict[Hashable, int] = {}
        lanes = passage.lanes
        self._way_of = [first.setdefault(lane.route.outline, len(first)) for lane in lanes]
        counts = Counter(self._way_of)
        lane_of = dict(zip(reversed(self._way_of), reversed(lanes), strict=True))
        self.ways: list[tuple[Lane, int]] = [(lane_of[way], counts[way]) for way in sorted(counts)]

    def drafts(self) -> list[Draft]:
        self._finish()
        return self._made

    @cached_property
    def _conditions(self) -> str:
        """A digest of the recording's conditions, of which there may be thousands."""
        return plain_digest([[c.name, c.start_s, c.stop_s] for c in self.passage.conditions])

    def _finish(self) -> int:
        passes = range(self.passage.passes)
        needs = [self._rows(p, s) for p in passes for s in self._selected(p)]
        needs += [self._combine(p) for p in passes if p > 0]
        identity = {
            "chain": self.passage.chain.name,
            "columns": [column.name for column in self.passage.columns],
            "writers": _digest_of_writers(),
            "pieces": [[p.start_s, p.stop_s] for p in self.passage.pieces],
            "conditions": self._conditions,
        }
        figures = sum(
            count * sum(move.step.given is Kind.FIGURE for move in lane.program.moves.values())
            for lane, count in self.ways
        )
        cost_s = _FINISH_COST_S + figures * _FIGURE_COST_S
        return self._draft("finish", 0, None, identity, needs, cost_s)

    def _combine(self, pass_no: int) -> int:
        """Draft the state that pass ``pass_no`` applies."""
        known = self._places.get(("combine", pass_no, None))
        if known is not None:
            return known
        needs = [self._rows(pass_no - 1, s) for s in self._selected(pass_no - 1)]
        return self._draft("combine", pass_no, None, {}, needs, _FINISH_COST_S)

    def _rows(self, pass_no: int, stretch: Stretch) -> int:
        known = self._places.get(("rows", pass_no, stretch))
        if known is not None:
            return known
        bounds = [lane.bounds_s(stretch) for lane, _ in self.ways]
        windows = []
        cost = 0.0
        for (lane, count), (start, stop) in zip(self.ways, bounds, strict=True):
            reach = lane.program.rows_reach
            windows.append((start - reach.before_s, stop + reach.after_s))
            steps = max(1, len(rows_moves(lane, pass_no)))
            cost += count * _samples(lane, start, stop) * steps * _ROWS_COST_S
        identity = {
            "piece": _piece(self.passage, stretch),
            "conditions": self._conditions,
            "bounds": bounds,
        }
        needs = self._needs(range(pass_no + 1), pass_no, stretch, windows)
        return self._draft("rows", pass_no, stretch, identity, needs, cost)

    def _prepare(self, pass_no: int, stretch: Stretch) -> int:
        known = self._places.get(("prepare", pass_no, stretch))
        if known is not None:
            return known
        windows = [window_s(self.passage, lane, pass_no, stretch) for lane, _ in self.ways]
        cost = 0.0
        for (lane, count), (low, high) in zip(self.ways, windows, strict=True):
            cost += count * _samples(lane, low, high) * _sample_cost_s(lane, pass_no)
        identity = {
            "piece": _piece(self.passage, stretch),
            "bounds": [lane.bounds_s(stretch) for lane, _ in self.ways],
            "windows": windows,
        }
        needs = self._needs(range(pass_no), pass_no, stretch, windows)
        return self._draft("prepare", pass_no, stretch, identity, needs, cost)

    def _needs(
        self,
        passes: Iterable[int],
        pass_no: int,
        stretch: Stretch,
        windows: Sequence[tuple[Fraction, Fraction]],
    ) -> list[int]:
        """Return the places of what other tasks prepare within the windows, and of states."""
        wanted: dict[tuple[int, Stretch], None] = {}
        for p in passes:
            for (lane, _), window in zip(self.ways, windows, strict=True):
                if lane.program.prepares(p) and lane.program.kept_signals(p):
                    for other in overlapping(lane, stretch.piece, *window):
                        wanted[p, other] = None
        needs = [self._prepare(p, other) for p, other in wanted]
        return needs + [self._combine(p) for p in range(1, pass_no + 1)]

    def _lanes(self, action: Action, pass_no: int) -> str:
        """Return a digest of all lanes' part in a task, but for the stretch."""
        if (action, pass_no) not in self._parts:
            lanes = zip(self.passage.lanes, self._way_of, strict=True)
            known = {
                "lanes": [[lane.signal, lane.channel, lane.scale, way] for lane, way in lanes],
                "ways": [_way_digest(lane, action, pass_no) for lane, _ in self.ways],
            }
            self._parts[action, pass_no] = plain_digest(known)
        return self._parts[action, pass_no]

    def _selected(self, pass_no: int) -> Iterator[Stretch]:
        """Yield the stretches a pass looks at: all, or those that meet a condition."""
        everywhere = self.passage.passes > 1
        for stretch in self.passage.stretches:
            if everywhere or any(_meets(self.passage, lane, stretch) for lane, _ in self.ways):
                yield stretch

    def _draft(
        self,
        action: Action,
        pass_no: int,
        stretch: Stretch | None,
        identity: dict[str, Any],
        needs: Iterable[int],
        cost_s: float,
    ) -> int:
        known = {
            "action": action,
            "pass": pass_no,
            "engine": _digest_of_engine(),
            "precision": self.passage.precision,
            "lanes": self._lanes(action, pass_no),
            **identity,
        }
        unique = tuple(dict.fromkeys(needs))
        made = Draft(action, pass_no, stretch, plain_digest(known), unique, cost_s + _TASK_COST_S)
        self._made.append(made)
        return self._places.setdefault((action, pass_no, stretch), len(self._made) - 1)


def _meets(passage: Passage, lane: Lane, stretch: Stretch) -> bool:
    start, stop = lane.bounds_s(stretch)
    return any(c.start_s < stop and start < c.stop_s for c in passage.conditions)


def _way_digest(lane: Lane, action: Action, pass_no: int) -> str:
    digests, key = lane.route.digests, (action, pass_no)
    if key not in digests:
        digests[key] = digest(_way(lane, action, pass_no))
    return digests[key]


def _way(lane: Lane, action: Action, pass_no: int) -> dict[str, Any]:
    """Return all of a signal's way that can change what a task makes of it."""
    known: dict[str, Any] = {
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


def _fraction_text(value: object) -> str:
    if not isinstance(value, Fraction):
        raise TypeError(f"{value!r} has no place in a key")
    return f"{value.numerator}/{value.denominator}"


_ENCODER = json.JSONEncoder(sort_keys=True, separators=(",", ":"), default=_fraction_text)


def plain_digest(known: Any) -> str:
    """Return a digest of texts, finite numbers, fractions, and lists and mappings of them.

    `digest` does the same for more kinds of values, in four times the time: a run over thousands
    of recordings has tens of thousands of tasks.
    """
    return sha256(_ENCODER.encode(known).encode("ascii")).hexdigest()


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
