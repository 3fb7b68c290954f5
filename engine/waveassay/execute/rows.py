"""The task that cuts the epochs that start in a stretch, down to their features, and collects."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from waveassay.contract import Data, Features, Kind, Rows, Signal
from waveassay.execute.arrays import Arrays, exclusions_to_json, save_arrays
from waveassay.execute.moves import collect_move, run_move, starting_in
from waveassay.execute.prepare import States
from waveassay.execute.signals import SignalSource
from waveassay.plan.passage import Lane
from waveassay.plan.program import Level
from waveassay.plan.stretches import Stretch
from waveassay.plan.tasks import collected, rows_moves

FILE = "rows.npz"


def make_rows(
    source: SignalSource, pass_no: int, stretch: Stretch, states: States, folder: Path
) -> None:
    """Run the steps on rows over a stretch; keep features, what is collected, and masks."""
    signals = source.over(_wanted(source, pass_no, stretch))
    arrays: Arrays = {}
    facts: dict[str, Any] = {}
    for lane_no, lane in enumerate(source.passage.lanes):
        values: dict[int, Data] = {
            move_no: signal for (owner, move_no), signal in signals.items() if owner == lane_no
        }
        bounds = lane.bounds_s(stretch)
        masks = {}
        for move in rows_moves(lane, pass_no):
            assert move.source is not None, "only a source takes nothing"
            taken = values[move.source]
            made = starting_in(run_move(move, taken, states.get((lane_no, move.index))), bounds)
            values[move.index] = made
            if move.pass_no != pass_no:
                continue
            place = f"{lane_no}.{move.index}"
            if isinstance(taken, Signal):
                masks[str(move.index)] = exclusions_to_json(taken.cut(*bounds).excluded)
            if isinstance(made, Features):
                arrays |= features_to_arrays(f"{place}.feature", made)
        for move in collected(lane, pass_no):
            assert move.source is not None, "only a source takes nothing"
            data = values[move.source]
            if isinstance(data, Signal):
                data = data.cut(*bounds)
            part = collect_move(move, data)
            arrays |= {f"{lane_no}.{move.index}.part.{name}": x for name, x in part.items()}
        facts[str(lane_no)] = masks
    save_arrays(folder / FILE, arrays, {"masks": facts, "outside": sorted(source.outside)})


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


def features_to_arrays(prefix: str, features: Features) -> Arrays:
    """Return features and what their rows say, as named arrays."""
    rows = features.rows
    named: Arrays = {
        "start_s": rows.start_s,
        "duration_s": rows.duration_s,
        "condition": np.array(rows.condition, np.str_),
        "kept": rows.kept,
        "reason": np.array(rows.reason, np.str_),
        "epochs": rows.epochs,
        "missing": np.array(features.missing, np.str_),
    }
    named |= {f"column.{part}": values for part, values in features.columns.items()}
    return {f"{prefix}.{name}": array for name, array in named.items()}


def features_from_arrays(signal: str, named: Mapping[str, list[Any]]) -> Features:
    """Join features that several stretches gave; each value of ``named`` lists their arrays."""
    whole = {name: np.concatenate(parts) for name, parts in named.items()}
    rows = Rows(
        start_s=whole["start_s"],
        duration_s=whole["duration_s"],
        condition=tuple(str(text) for text in whole["condition"]),
        kept=whole["kept"],
        reason=tuple(str(text) for text in whole["reason"]),
        epochs=whole["epochs"],
    )
    prefix = "column."
    columns = {
        name.removeprefix(prefix): values
        for name, values in whole.items()
        if name.startswith(prefix)
    }
    missing = tuple(str(text) for text in whole["missing"])
    return Features(signal, rows, columns, missing)


KINDS_OF_FEATURES = (Kind.FEATURES, Kind.AVERAGE_FEATURES)
