"""The tables of results: epochs, averages, summary, excluded time, and what every column means."""

from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from waveassay.plan.columns import FeatureColumn
from waveassay.provenance.copies import Copies
from waveassay.provenance.results import Result
from waveassay.provenance.tables import Column, concat_to_csv, write_csv, write_csv_lines

#: Above so many rows, the CSV of all recordings is written only when a recipe asks.
CSV_ROWS = 1_000_000

_SUMMARY = (
    Column("recording", "text"),
    Column("chain", "text"),
    Column("signal", "text"),
    Column("signal_2", "text"),
    Column("condition", "text"),
    Column("feature", "text"),
    Column("unit", "text"),
    Column("n", "count"),
    Column("mean", "number"),
    Column("sd", "number"),
    Column("median", "number"),
    Column("q25", "number"),
    Column("q75", "number"),
)
_EXCLUDED = (
    Column("recording", "text"),
    Column("chain", "text"),
    Column("signal", "text"),
    Column("condition", "text"),
    Column("reason", "text"),
    Column("excluded_s", "number"),
    Column("share_of_condition", "number"),
)

_DERIVED = tuple(
    Column(name, "text")
    for name in ("recording", "chain", "step", "signal", "quantity", "value", "unit")
)

# Where the tables of each kind stand.
_PLACES = {
    "epochs": "epochs/{chain}",
    "averages": "averages/{chain}",
    "spectra": "averages/{chain}-spectra",
}

# Table -> column -> (unit, meaning): the columns that every run has.
_MEANINGS: dict[str, dict[str, tuple[str, str]]] = {
    "epochs": {
        "recording": ("", "name of the recording: its path below the folder given"),
        "signal": ("", "name of the signal"),
        "signal_2": ("", "second signal, where a number is of a pair"),
        "condition": ("", "condition that the epoch lies in entirely"),
        "epoch": ("", "number of the epoch within its condition, from 0"),
        "start_s": ("s", "start of the epoch, from the recording's start"),
        "duration_s": ("s", "length of the epoch"),
        "kept": ("", "whether the epoch was computed on"),
        "reason": ("", "why it was not kept"),
        "missing_reason": ("", "why a kept epoch lacks a feature"),
    },
    "averages": {
        "recording": ("", "name of the recording: its path below the folder given"),
        "signal": ("", "name of the signal"),
        "signal_2": ("", "second signal, where a number is of a pair"),
        "condition": ("", "condition averaged over"),
        "epochs": ("", "how many kept epochs were averaged"),
        "start_s": ("s", "start of the first epoch averaged"),
        "duration_s": ("s", "from there to the end of the last"),
        "kept": ("", "whether any epoch was kept"),
        "reason": ("", "why there is no average"),
        "missing_reason": ("", "why a feature is lacking"),
    },
    "spectra": {
        "recording": ("", "name of the recording"),
        "signal": ("", "name of the signal"),
        "condition": ("", "condition averaged over"),
        "step": ("", "step that averaged"),
        "epochs": ("", "how many epochs were averaged"),
        "dof": ("", "equivalent degrees of freedom of the average"),
        "frequency_hz": ("Hz", "centre of the bin"),
        "density": ("see unit", "one-sided power spectral density"),
        "unit": ("", "unit of the density"),
    },
    "summary": {
        "recording": ("", "name of the recording"),
        "chain": ("", "chain of the recipe"),
        "signal": ("", "name of the signal"),
        "signal_2": ("", "second signal, where a number is of a pair"),
        "condition": ("", "condition"),
        "feature": ("", "column of the epoch table"),
        "unit": ("", "unit of mean, sd, median and quartiles"),
        "n": ("", "kept epochs that have a value"),
        "mean": ("see unit", "arithmetic mean"),
        "sd": ("see unit", "standard deviation, dividing by n - 1"),
        "median": ("see unit", "median"),
        "q25": ("see unit", "lower quartile, linear between order statistics"),
        "q75": ("see unit", "upper quartile, linear between order statistics"),
    },
    "excluded": {
        "recording": ("", "name of the recording"),
        "chain": ("", "chain of the recipe"),
        "signal": ("", "name of the signal"),
        "condition": ("", "condition"),
        "reason": ("", "why time is masked; 'gap' between pieces; 'any' for all of it together"),
        "excluded_s": ("s", "masked time within the condition"),
        "share_of_condition": ("1", "the same as a share of the condition's length"),
    },
}


_MEANINGS |= {
    "recordings": {
        "recording": ("", "name of the recording: its path below the folder given"),
        "path": ("", "its file, as it was named"),
        "sha256": ("", "digest of the file's bytes"),
        "start": ("", "date and time of the first sample, as the file has it"),
        "duration_s": ("s", "from the first sample to the last, gaps included"),
        "status": ("", "done, done_with_warnings or failed"),
        "chain": ("", "chain in which it failed"),
        "step": ("", "step at which it failed"),
        "message": ("", "why it failed, or what to be warned of"),
    },
    "parameters": {
        "step": ("", "chain and step; or the signal or condition of the recipe"),
        "parameter": ("", "its name; a dot leads into a mapping"),
        "value": ("", "its value; null where the stage chooses, see derived.csv"),
        "unit": ("", "unit of the value"),
        "origin": ("", "recipe, default, or what the recipe's origins say: stated, assumed ..."),
        "where": ("", "where the source states it, or why it was assumed"),
    },
    "derived": {
        "recording": ("", "name of the recording"),
        "chain": ("", "chain of the recipe"),
        "step": ("", "step"),
        "signal": ("", "name of the signal"),
        "quantity": ("", "what follows from the parameters and the signal's rate"),
        "value": ("see unit", "its value"),
        "unit": ("", "unit of the value"),
    },
    "steps": {
        "recording": ("", "name of the recording"),
        "chain": ("", "chain of the recipe"),
        "step": ("", "step"),
        "key": ("", "digest of all that could change what the step's result holds"),
        "digest": ("", "digest of what the result holds"),
        "reused": ("", "whether all of it was in the store before this run"),
        "environment": ("", "id of the environment that made it, see environment.json"),
    },
}


def write_result_tables(
    folder: Path,
    columns: Mapping[str, Sequence[FeatureColumn]],
    results: Sequence[Result],
    copies: Copies,
) -> None:
    """Write all tables of a run.

    Parameters
    ----------
    columns : chain -> its feature columns.
    results : in order of the recordings' names.
    copies : makes the copies of every recording's own tables.
    """
    written = []
    for chain in columns:
        for kind, place in _PLACES.items():
            place = place.format(chain=chain)
            if _wide_table(folder, place, chain, results, f"{kind}.parquet", copies):
                written.append((chain, kind))
    write_csv(folder / "summary.csv", _SUMMARY, list(_rows(results, "summary")))
    write_csv(folder / "excluded.csv", _EXCLUDED, list(_rows(results, "excluded")))
    derived = (output.facts["derived"] for result in results for output in result.outputs)
    write_csv_lines(folder / "derived.csv", _DERIVED, derived)
    dictionary = list(_dictionary(columns, written))
    names = ("table", "column", "unit", "meaning", "step")
    write_csv(folder / "columns.csv", [Column(name, "text") for name in names], dictionary)


def _rows(results: Sequence[Result], table: str) -> Iterator[list[Any]]:
    for result in results:
        for output in result.outputs:
            yield from output.facts[table]


def _wide_table(
    folder: Path, place: str, chain: str, results: Sequence[Result], file: str, copies: Copies
) -> bool:
    """Copy every recording's table, and join them as CSV where they are few; tell if any is."""
    parts: list[str] = []
    text = f"{file.removesuffix('.parquet')}.csv"
    rows = 0
    choices = set()
    for result in results:
        for output in result.outputs:
            if output.chain == chain and file in output.digests:
                copies.take(output, file, f"{place}/{result.recording}.parquet")
                parts.append(f"{output.folder}/{text if text in output.digests else file}")
                rows += output.facts["rows"][file]
                choices.add(output.facts["csv"])
    if not parts:
        return False
    if choices != {"never"} and ("always" in choices or rows < CSV_ROWS):
        concat_to_csv(parts, folder / f"{place}.csv")
    return True


def _dictionary(
    columns: Mapping[str, Sequence[FeatureColumn]], written: Sequence[tuple[str, str]]
) -> Iterator[list[str]]:
    for chain, kind in written:
        place = _PLACES[kind].format(chain=chain)
        first, last = list(_MEANINGS[kind].items()), []
        if kind != "spectra":
            first, last = first[:-1], first[-1:]
        for name, (unit, meaning) in first:
            yield [place, name, unit, meaning, ""]
        for column in columns[chain]:
            if kind != "spectra" and column.averaged == (kind == "averages"):
                yield [place, column.name, column.unit, column.meaning, column.step]
        for name, (unit, meaning) in last:
            yield [place, name, unit, meaning, ""]
    for table in ("summary", "excluded", "recordings", "parameters", "derived", "steps"):
        for name, (unit, meaning) in _MEANINGS[table].items():
            yield [table, name, unit, meaning, ""]
