"""The tasks that see a whole recording: combining for the next pass, and finishing a passage."""

import json
from collections import defaultdict
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from waveassay.contract import (
    Data,
    Features,
    FeaturesSpec,
    Figure,
    Kind,
    Part,
    Rows,
    Spectra,
    Table,
)
from waveassay.execute.arrays import Arrays, load_arrays, save_arrays
from waveassay.execute.gathered import Gathered, LaneRows
from waveassay.execute.moves import collect_move, combine_move, run_move
from waveassay.execute.rows import features_from_arrays
from waveassay.execute.store import Store
from waveassay.execute.tables import (
    Block,
    excluded_rows,
    feature_table,
    spectra_table,
    summary_rows,
)
from waveassay.plan.columns import column_name
from waveassay.plan.passage import Lane, Passage
from waveassay.plan.program import Level, Move
from waveassay.plan.tasks import barriers
from waveassay.provenance.tables import write_parquet

STATE_FILE = "state.npz"
FACTS_FILE = "passage.json"


def combine(passage: Passage, pass_no: int, gathered: Gathered, folder: Path) -> None:
    """Turn what the pass before collected into what this pass applies."""
    state: Arrays = {}
    for lane_no, lane in enumerate(passage.lanes):
        rows = gathered.lane(lane_no)
        for move in barriers(lane, pass_no):
            parts = rows.parts(f"{move.index}.part.")
            made: Part = combine_move(move, parts)
            state |= {f"{lane_no}.{move.index}.{name}": array for name, array in made.items()}
    save_arrays(folder / STATE_FILE, state, {})


def read_states(store: Store, keys: Sequence[str]) -> dict[tuple[int, int], Part]:
    """Read what `combine` wrote: (lane, move) -> named arrays."""
    states: dict[tuple[int, int], dict[str, Any]] = defaultdict(dict)
    for key in keys:
        for place, array in load_arrays(store.read(key).path(STATE_FILE)).items():
            lane, move, name = place.split(".", 2)
            states[int(lane), int(move)][name] = array
    return dict(states)


def finish(passage: Passage, gathered: Gathered, folder: Path) -> None:
    """Write a passage's tables, figures, summary and excluded time."""
    blocks: list[Block] = []
    average_blocks: list[Block] = []
    averages: list[tuple[str, Spectra]] = []
    excluded: list[list[Any]] = []
    figures: list[dict[str, str]] = []
    units: dict[tuple[str, str], str] = {}
    for lane_no, lane in enumerate(passage.lanes):
        rows = gathered.lane(lane_no)
        values = _recording_values(passage.recording, lane, rows)
        blocks += _epoch_blocks(lane, rows)
        average_blocks += _average_blocks(lane, values)
        figures += _save_figures(lane, values, folder)
        averages += [
            (lane.program.moves[index].step.name, data)
            for index, data in values.items()
            if isinstance(data, Spectra)
        ]
        units |= _units(lane)
        masks = gathered.excluded(lane_no)
        excluded += excluded_rows(
            passage.recording, passage.chain.name, lane.signal, masks, passage.pieces,
            passage.conditions,
        )  # fmt: skip
    facts: dict[str, Any] = {
        "warnings": [
            *(
                f"{passage.lanes[lane].label}: some samples lie outside the digital limits of the "
                "header; they are used as they are"
                for lane in sorted(gathered.outside)
            ),
            *_without_epochs(passage, blocks),
        ],
        "excluded": excluded,
        "figures": figures,
        "summary": [],
        "csv": _csv_choice(passage),
    }
    tabled = {lane.signal for lane in passage.lanes if _table_moves(lane)}
    if tabled:
        blocks = [block for block in blocks if block.signal in tabled]
        average_blocks = [block for block in average_blocks if block.signal in tabled]
        own = [c for c in passage.columns if not c.averaged]
        for averaged, name, some in (
            (False, "epochs.parquet", blocks),
            (True, "averages.parquet", average_blocks),
        ):
            wanted = [c for c in passage.columns if c.averaged is averaged]
            if wanted:
                table = feature_table(
                    passage.recording, some, wanted, passage.conditions, averaged=averaged
                )
                write_parquet(folder / name, table)
        facts["summary"] = list(
            summary_rows(
                passage.recording, passage.chain.name, blocks, own, units, passage.conditions
            )
        )
    if averages:
        write_parquet(folder / "spectra.parquet", spectra_table(passage.recording, averages))
    (folder / FACTS_FILE).write_text(json.dumps(facts, sort_keys=True))


def _without_epochs(passage: Passage, blocks: Sequence[Block]) -> Iterator[str]:
    """Yield a warning for each condition of a signal that gave nothing."""
    for block in blocks:
        kept = dict.fromkeys((c.name for c in passage.conditions), 0)
        rows = dict(kept)
        for name, is_kept in zip(block.rows.condition, block.rows.kept, strict=True):
            rows[name] += 1
            kept[name] += int(is_kept)
        for name, count in kept.items():
            if count == 0:
                why = (
                    "no epoch fits in it"
                    if rows[name] == 0
                    else f"none of {rows[name]} epochs is kept"
                )
                yield f"{passage.chain.name}: condition {name} of {block.signal}: {why}"


def _recording_values(recording: str, lane: Lane, rows: LaneRows) -> dict[int, Data]:
    """Run the steps that need the whole, and those that follow, as far as there is anything."""
    values: dict[int, Data] = {}
    for move in lane.program.moves.values():
        if move.level is not Level.RECORDING or move.step.given is Kind.TABLE:
            continue
        assert move.source is not None, "only a source takes nothing"
        if lane.program.moves[move.source].level is not Level.RECORDING:
            parts = rows.parts(f"{move.index}.part.")
        elif move.source not in values:  # no condition meets a piece
            continue
        elif move.gather is None:
            values[move.index] = run_move(move, values[move.source])
            continue
        else:
            parts = [collect_move(move, values[move.source])]
        if move.step.given is Kind.FIGURE:
            parts = [{**part, "recording": np.array(recording)} for part in parts]
        if parts:
            values[move.index] = combine_move(move, parts)
    return values


def _epoch_blocks(lane: Lane, rows: LaneRows) -> list[Block]:
    cut = lane.program.rows_step
    by_cut: dict[int, dict[int, Features]] = defaultdict(dict)
    for move in lane.program.moves.values():
        if move.step.given is not Kind.FEATURES or move.level is not Level.ROWS:
            continue
        named = rows.named(f"{move.index}.feature.")
        by_cut[cut[move.index]][move.index] = (
            features_from_arrays(lane.signal, named) if named else _no_features(lane, move)
        )
    return [Block(lane.signal, features) for _, features in sorted(by_cut.items())]


def _no_features(lane: Lane, move: Move) -> Features:
    """Return the features of a signal none of whose time lies in a condition."""
    spec = move.spec_out
    parts = [column.part for column in spec.columns] if isinstance(spec, FeaturesSpec) else []
    none = np.empty(0)
    whole, flags = np.empty(0, np.int64), np.empty(0, np.bool_)
    rows = Rows(none, none, (), flags, (), whole)
    return Features(lane.signal, rows, {part: np.empty(0) for part in parts}, ())


def _average_blocks(lane: Lane, values: Mapping[int, Data]) -> list[Block]:
    by_source: dict[int, dict[int, Features]] = defaultdict(dict)
    for index, data in values.items():
        if isinstance(data, Features):
            by_source[lane.program.moves[index].source or 0][index] = data
    return [Block(lane.signal, features) for _, features in sorted(by_source.items())]


def _save_figures(lane: Lane, values: Mapping[int, Data], folder: Path) -> list[dict[str, str]]:
    saved: list[dict[str, str]] = []
    for index, data in values.items():
        if isinstance(data, Figure):
            alike = sum(known["show"] == data.show for known in saved)
            name = f"figure-{lane.channel}-{index}.png"
            (folder / name).write_bytes(data.png)
            step = lane.program.moves[index].step
            saved.append(
                {
                    "file": name,
                    "signal": data.signal,
                    "show": data.show,
                    "name": step.alias or (f"{data.show}-{alike + 1}" if alike else data.show),
                    "caption": data.caption,
                }
            )
    return saved


def _units(lane: Lane) -> dict[tuple[str, str], str]:
    return {
        (lane.signal, column_name(move.step.alias or move.step.name, column.part)): column.unit
        for move in lane.program.moves.values()
        if isinstance(move.spec_out, FeaturesSpec)
        for column in move.spec_out.columns
    }


def _table_moves(lane: Lane) -> list[Move]:
    return [move for move in lane.program.moves.values() if move.step.given is Kind.TABLE]


def _csv_choice(passage: Passage) -> str:
    """Return what the table steps ask for; the most eager one decides.

    Without one there are averaged spectra at most, written as the sizes suggest.
    """
    asked = set()
    for step in (move.step for lane in passage.lanes for move in _table_moves(lane)):
        if step.stage.run is not None:
            table = step.stage.run(step.params, None)
            assert isinstance(table, Table), f"{step.name} gives a table"
            asked.add(table.csv)
    return next((choice for choice in ("always", "auto", "never") if choice in asked), "auto")
