"""The task that cuts the epochs that start in a stretch, down to their features, and collects."""

from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

from waveassay.contract import Data, Features, Part, Signal
from waveassay.execute.arrays import Group, exclusions_to_json, save_groups
from waveassay.execute.feature_arrays import ROWS_OF, features_to_arrays
from waveassay.execute.moves import collect_move, run_move, starting_in
from waveassay.execute.prepare import States
from waveassay.execute.signals import SignalSource
from waveassay.plan.passage import Lane
from waveassay.plan.program import Level
from waveassay.plan.stretches import Stretch
from waveassay.plan.tasks import collected, rows_moves

FILE = "rows.arrays"
#: In the facts of a signal: number of a step -> masks where it cut epochs.
MASKS = "masks"
#: In the facts of the whole: signals with samples outside the digital limits of their header.
OUTSIDE = "outside"


def make_rows(
    source: SignalSource, pass_no: int, stretch: Stretch, states: States, folder: Path
) -> None:
    """Run the steps on rows over a stretch; keep features, what is collected, and masks."""
    signals = source.over(_wanted(source, pass_no, stretch))
    groups: dict[str, Group] = {}
    for lane_no, lane in enumerate(source.passage.lanes):
        values: dict[int, Data] = {
            move_no: signal for (owner, move_no), signal in signals.items() if owner == lane_no
        }
        groups[str(lane_no)] = _lane_rows(
            lane,
            pass_no,
            lane.bounds_s(stretch),
            values,
            {index: state for (owner, index), state in states.items() if owner == lane_no},
        )
    save_groups(folder / FILE, groups, {OUTSIDE: sorted(source.outside)})


def _lane_rows(
    lane: Lane,
    pass_no: int,
    bounds_s: tuple[Fraction, Fraction],
    values: dict[int, Data],
    states: Mapping[int, Part],
) -> Group:
    """Run one signal's steps on rows; ``values`` holds the signals that they take."""
    masks: dict[str, Any] = {}
    features: dict[int, Features] = {}
    for move in rows_moves(lane, pass_no):
        assert move.source is not None, "only a source takes nothing"
        taken = values[move.source]
        made = starting_in(run_move(move, taken, states.get(move.index)), bounds_s)
        values[move.index] = made
        if move.pass_no != pass_no:
            continue
        if isinstance(taken, Signal):
            masks[str(move.index)] = exclusions_to_json(taken.cut(*bounds_s).excluded)
        if isinstance(made, Features):
            features[move.index] = made
    arrays, rows_of = features_to_arrays(features)
    for move in collected(lane, pass_no):
        assert move.source is not None, "only a source takes nothing"
        data = values[move.source]
        if isinstance(data, Signal):
            data = data.cut(*bounds_s)
        part = collect_move(move, data)
        arrays |= {f"{move.index}.part.{name}": x for name, x in part.items()}
    return Group(arrays, {MASKS: masks, ROWS_OF: rows_of})


def _wanted(
    source: SignalSource, pass_no: int, stretch: Stretch
) -> Mapping[tuple[int, int], tuple[Any, Any]]:
    """Return the signals that the pass's rows and collecting steps take, with their windows."""
    wanted = {}
    for lane_no, lane in enumerate(source.passage.lanes):
        start_s, stop_s = lane.bounds_s(stretch)
        reach = lane.program.rows_reach
        for index in _signals_taken(lane, pass_no):
            wanted[lane_no, index] = (start_s - reach.before_s, stop_s + reach.after_s)
    return wanted


def _signals_taken(lane: Lane, pass_no: int) -> list[int]:
    takers = [*rows_moves(lane, pass_no), *collected(lane, pass_no)]
    sources = {move.source for move in takers if move.source is not None}
    return sorted(i for i in sources if lane.program.moves[i].level is Level.SAMPLES)
