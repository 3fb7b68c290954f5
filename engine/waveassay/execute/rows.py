"""The task that cuts the epochs that start in a stretch, down to their features, and collects."""

from collections.abc import Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import Any

from waveassay.contract import Data, Features, Part, Signal
from waveassay.contract.kinds import exclusions_within
from waveassay.execute.arrays import Group, exclusions_to_json, group_writer
from waveassay.execute.feature_arrays import ROWS_OF, features_to_arrays
from waveassay.execute.moves import collect_move, run_move, starting_in
from waveassay.execute.prepare import States
from waveassay.execute.signals import OUTSIDE, SignalSource, as_held
from waveassay.plan.pass_parts import collected, rows_moves
from waveassay.plan.passage import Lane
from waveassay.plan.precision import held_in_rows
from waveassay.plan.program import Level, Move
from waveassay.plan.stretches import Stretch
from waveassay.recipe.model import Precision

FILE = "rows.arrays"
#: In the facts of a signal: number of a step -> masks where it cut epochs.
MASKS = "masks"


def make_rows(
    source: SignalSource, pass_no: int, stretch: Stretch, states: States, folder: Path
) -> dict[str, str]:
    """Run the steps on rows over a stretch; keep features, what is collected, and masks.

    Returns the SHA-256 of the file written, by its name.
    """
    with group_writer(folder / FILE) as writer:
        for lane_no, signals in source.by_lane(_wanted(source, pass_no, stretch)):
            lane = source.passage.lanes[lane_no]
            applied = {index: s for (owner, index), s in states.items() if owner == lane_no}
            precision = source.passage.precision
            bounds_s = lane.bounds_s(stretch)
            group = _lane_rows(lane, pass_no, precision, bounds_s, {**signals}, applied)
            writer.add(str(lane_no), group)
        writer.end({OUTSIDE: sorted(source.outside)})
    return {FILE: writer.sha256}


def _lane_rows(
    lane: Lane,
    pass_no: int,
    precision: Precision,
    bounds_s: tuple[Fraction, Fraction],
    values: dict[int, Data],
    states: Mapping[int, Part],
) -> Group:
    """Run one signal's steps on rows; ``values`` holds the signals that they take."""
    masks: dict[str, Any] = {}
    features: dict[int, Features] = {}
    moves, gathering = rows_moves(lane, pass_no), collected(lane, pass_no)
    in_rows = _as_rows_take(lane, [*moves, *gathering], values, precision)
    for move in moves:
        assert move.source is not None, "only a source takes nothing"
        taken = in_rows.get(move.source, values[move.source])
        made = starting_in(run_move(move, taken, states.get(move.index)), bounds_s)
        values[move.index] = made
        if move.pass_no != pass_no:
            continue
        if isinstance(taken, Signal):
            masks[str(move.index)] = exclusions_to_json(
                exclusions_within(taken.excluded, *bounds_s)
            )
        if isinstance(made, Features):
            features[move.index] = made
    arrays, rows_of = features_to_arrays(features)
    for move in gathering:
        assert move.source is not None, "only a source takes nothing"
        data = values[move.source]
        if move.level is Level.ROWS:
            data = in_rows.get(move.source, data)
        if isinstance(data, Signal):
            data = data.cut(*bounds_s)
        part = collect_move(move, data)
        arrays |= {f"{move.index}.part.{name}": x for name, x in part.items()}
    return Group(arrays, {MASKS: masks, ROWS_OF: rows_of})


def _as_rows_take(
    lane: Lane, takers: Sequence[Move], values: Mapping[int, Data], precision: Precision
) -> dict[int, Signal]:
    """Return the signals as steps on rows are given them; all other steps take them as they are."""
    sources = {move.source for move in takers if move.level is Level.ROWS}
    return {
        index: as_held(signal, held_in_rows(lane.program.moves[index], precision))
        for index, signal in values.items()
        if isinstance(signal, Signal) and index in sources
    }


def _wanted(
    source: SignalSource, pass_no: int, stretch: Stretch
) -> list[dict[int, tuple[Fraction, Fraction]]]:
    """Return for each lane the signals that the pass's steps take, with their windows."""
    wanted = []
    for lane in source.passage.lanes:
        start_s, stop_s = lane.bounds_s(stretch)
        reach = lane.program.rows_reach
        window = (start_s - reach.before_s, stop_s + reach.after_s)
        wanted.append(dict.fromkeys(_signals_taken(lane, pass_no), window))
    return wanted


def _signals_taken(lane: Lane, pass_no: int) -> list[int]:
    takers = [*rows_moves(lane, pass_no), *collected(lane, pass_no)]
    sources = {move.source for move in takers if move.source is not None}
    return sorted(i for i in sources if lane.program.moves[i].level is Level.SAMPLES)
