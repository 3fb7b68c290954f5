"""The task that turns all rows of a passage into its tables, averages and figures."""

import json
from collections import defaultdict
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from waveassay.contract import (
    Data,
    Derived,
    Features,
    FeaturesSpec,
    Figure,
    Kind,
    Spectra,
    Table,
    number_text,
)
from waveassay.execute.gathered import Gathered, LaneRows
from waveassay.execute.moves import collect_move, combine_move, run_move
from waveassay.execute.stored_features import CodedTexts, StoredFeatures, StoredRows
from waveassay.execute.tables import (
    Block,
    TableOfFeatures,
    excluded_rows,
    spectra_table,
    summary_rows,
)
from waveassay.plan.columns import column_name
from waveassay.plan.passage import Lane, Passage
from waveassay.plan.precision import takers_of_rows
from waveassay.plan.program import Level, Move
from waveassay.provenance.tables import SHORT_ROWS, csv_lines, parquet_writer, write_short_csv

if TYPE_CHECKING:
    import pyarrow as pa

#: What a run folder is told of a passage beside its tables and figures: warnings; rows of the
#: tables of excluded time and of the summary; lines of the table of derived quantities; figures
#: with captions; how many rows each table has, and when to write all recordings' as CSV.
FACTS_FILE = "passage.json"


@dataclass
class _Told:
    """What is told of a passage beside its tables; grows signal by signal."""

    warnings: list[str] = field(default_factory=list)
    excluded: list[list[Any]] = field(default_factory=list)
    figures: list[dict[str, str]] = field(default_factory=list)
    summary: list[list[Any]] = field(default_factory=list)
    derived: list[list[str]] = field(default_factory=list)
    averages: list[tuple[str, Spectra]] = field(default_factory=list)
    table_rows: dict[str, int] = field(default_factory=dict)


def finish(passage: Passage, gathered: Gathered, folder: Path) -> None:
    """Write a passage's tables, figures, summary and excluded time, one signal after another."""
    told = _Told(
        [
            f"{passage.lanes[lane].label}: some samples lie outside the digital limits of the "
            "header; they are used as they are"
            for lane in sorted(gathered.outside)
        ]
    )
    csv = _csv_choice(passage)
    texts = csv != "never"
    with ExitStack() as stack:
        tables = {}
        if any(_table_moves(lane) for lane in passage.lanes):
            for averaged, name in ((False, "epochs.parquet"), (True, "averages.parquet")):
                columns = [c for c in passage.columns if c.averaged is averaged]
                if columns:
                    table = TableOfFeatures(
                        passage.recording, columns, passage.conditions, averaged
                    )
                    file = _table_file(folder / name, table.schema, told.table_rows, texts)
                    write = stack.enter_context(file)
                    tables[averaged] = (table, write)
        for lane_no, lane in enumerate(passage.lanes):
            rows = gathered.lane(lane_no)
            values = _recording_values(passage.recording, lane, rows)
            blocks = {False: _epoch_blocks(lane, rows), True: _average_blocks(lane, values)}
            if _table_moves(lane):
                for averaged, (table, write) in tables.items():
                    for block in blocks[averaged]:
                        write(table.of(block))
            _tell(told, passage, lane, rows, values, blocks[False], folder)
    if told.averages:
        spectra = spectra_table(passage.recording, told.averages)
        path = folder / "spectra.parquet"
        with _table_file(path, spectra.schema, told.table_rows, texts) as write:
            write(spectra)
    facts: dict[str, Any] = {
        "warnings": told.warnings,
        "excluded": told.excluded,
        "figures": told.figures,
        "summary": told.summary,
        "derived": csv_lines(told.derived),
        "rows": told.table_rows,
        "csv": csv,
    }
    (folder / FACTS_FILE).write_text(json.dumps(facts, sort_keys=True))


@contextmanager
def _table_file(
    path: Path, schema: "pa.Schema", table_rows: dict[str, int], texts: bool
) -> Iterator[Callable[["pa.Table"], None]]:
    """Give a function that adds rows to a Parquet file, and count them.

    With ``texts`` a short table is written as CSV, too: a run joins thousands of them as text.
    """
    rows = 0
    short: list[pa.Table] = []
    with parquet_writer(path, schema) as write:

        def add(table: "pa.Table") -> None:
            nonlocal rows
            rows += table.num_rows
            short.append(table)
            if rows > SHORT_ROWS:
                short.clear()
            write(table)

        yield add
    table_rows[path.name] = rows
    if texts and rows <= SHORT_ROWS:
        write_short_csv(path.with_suffix(".csv"), schema, short)


def _tell(
    told: _Told,
    passage: Passage,
    lane: Lane,
    rows: LaneRows,
    values: Mapping[int, Data],
    blocks: Sequence[Block],
    folder: Path,
) -> None:
    """Add what one signal gave beside its rows of tables."""
    recording, chain, conditions = passage.recording, passage.chain.name, passage.conditions
    told.figures += _save_figures(lane, values, folder)
    told.averages += [
        (lane.program.moves[index].step.name, data)
        for index, data in values.items()
        if isinstance(data, Spectra)
    ]
    told.excluded += excluded_rows(
        recording, chain, lane.signal, rows.excluded, passage.pieces, conditions
    )
    told.warnings += _without_epochs(passage, blocks)
    told.derived += _derived(passage, lane)
    if _table_moves(lane):
        own = [c for c in passage.columns if not c.averaged]
        told.summary += summary_rows(recording, chain, blocks, own, _units(lane), conditions)


def _derived(passage: Passage, lane: Lane) -> Iterator[list[str]]:
    """Yield what follows from a signal's parameters and rates.

    A row is: recording, chain, step, signal, quantity, value, unit.
    """
    given = {
        move.index: [Derived("samples given as", held)]
        for move, held in takers_of_rows(lane.program, passage.precision)
    }
    for move in lane.program.moves.values():
        for known in (*move.derived, *given.get(move.index, ())):
            value = known.value
            text = value if isinstance(value, str) else number_text(value)
            row = [passage.recording, passage.chain.name, move.step.name, lane.signal]
            yield [*row, known.quantity, text, known.unit]


def _without_epochs(passage: Passage, blocks: Sequence[Block]) -> Iterator[str]:
    """Yield a warning for each condition of a signal that gave nothing."""
    for block in blocks:
        for name in dict.fromkeys(c.name for c in passage.conditions):
            of_it = block.rows.condition.are(name)
            rows, kept = np.count_nonzero(of_it), np.count_nonzero(of_it & block.rows.kept)
            if kept == 0:
                why = "no epoch fits in it" if rows == 0 else f"none of {rows} epochs is kept"
                yield f"{passage.chain.name}: condition {name} of {block.signal}: {why}"


def _recording_values(recording: str, lane: Lane, rows: LaneRows) -> dict[int, Data]:
    """Run the steps that need the whole, and those that follow, as far as there is anything."""
    values: dict[int, Data] = {}
    for move in lane.program.moves.values():
        if move.level is not Level.RECORDING or move.step.given is Kind.TABLE:
            continue
        assert move.source is not None, "only a source takes nothing"
        if lane.program.moves[move.source].level is not Level.RECORDING:
            parts = rows.parts(move.index)
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
    by_cut: dict[int, dict[int, StoredFeatures]] = defaultdict(dict)
    for move in lane.program.moves.values():
        if move.step.given is Kind.FEATURES and move.level is Level.ROWS:
            features = rows.features.get(move.index)
            by_cut[cut[move.index]][move.index] = features or _no_features(move)
    return [Block(lane.signal, features) for _, features in sorted(by_cut.items())]


def _no_features(move: Move) -> StoredFeatures:
    """Return the features of a signal none of whose time lies in a condition."""
    spec = move.spec_out
    parts = [column.part for column in spec.columns] if isinstance(spec, FeaturesSpec) else []
    none, texts = np.empty(0), CodedTexts.of(())
    whole, flags = np.empty(0, np.int64), np.empty(0, np.bool_)
    rows = StoredRows(none, none, texts, flags, texts, whole)
    return StoredFeatures(rows, {part: none for part in parts})


def _average_blocks(lane: Lane, values: Mapping[int, Data]) -> list[Block]:
    by_source: dict[int, dict[int, StoredFeatures]] = defaultdict(dict)
    for index, data in values.items():
        if isinstance(data, Features):
            by_source[lane.program.moves[index].source or 0][index] = StoredFeatures.of(data)
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
