"""A run folder: begun, filled when the work is done, and closed by its manifest."""

import csv
import json
import shutil
from collections.abc import Iterable, Sequence
from contextlib import suppress
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from waveassay.contract.errors import RefusedError
from waveassay.plan.columns import columns_by_chain
from waveassay.provenance.copies import Copies
from waveassay.provenance.environment import environment_id
from waveassay.provenance.files import machine_errors, write_text
from waveassay.provenance.log import Log
from waveassay.provenance.manifest import LOG, MANIFEST, read_manifest, write_manifest
from waveassay.provenance.manifest_check import Finding, verify_manifest
from waveassay.provenance.recording_digests import RecordingDigests
from waveassay.provenance.result_tables import write_result_tables
from waveassay.provenance.results import Result
from waveassay.provenance.tables import Column, write_csv
from waveassay.recipe.canonical import parameters, resolved_yaml
from waveassay.recipe.model import Recipe

#: Earlier runs that a new one looks at: to look at all would take longer from run to run.
_LAST_FEW = 3
_OF_THE_RUN = '"run_'

SOURCE, RESOLVED = "recipe.source.yaml", "recipe.resolved.yaml"
RECORDINGS = "recordings.csv"

_RECORDING_COLUMNS = (
    Column("recording", "text"),
    Column("path", "text"),
    Column("sha256", "text"),
    Column("start", "text"),
    Column("duration_s", "number"),
    Column("status", "text"),
    Column("chain", "text"),
    Column("step", "text"),
    Column("message", "text"),
)
_PARAMETER_COLUMNS = tuple(
    Column(name, "text") for name in ("step", "parameter", "value", "unit", "origin", "where")
)
_STEP_COLUMNS = (
    Column("recording", "text"),
    Column("chain", "text"),
    Column("step", "text"),
    Column("key", "text"),
    Column("digest", "text"),
    Column("reused", "flag"),
    Column("environment", "text"),
)


@dataclass
class RunFolder:
    """The folder of one run, and its log."""

    path: Path
    log: Log

    @classmethod
    def open(cls, runs: Path, recipe: Recipe) -> "RunFolder":
        """Go on with the newest unfinished run of the same recipe, or make a new folder."""
        for folder in reversed(_folders(runs, recipe)):
            if not (folder / MANIFEST).exists() and _same_recipe(folder, recipe):
                with suppress(RefusedError, OSError):  # else what is left of it is left alone
                    _clear(folder)
                    return cls(folder, Log(folder / LOG))
        stamp = datetime.now(UTC).strftime("%Y%m%dT%H%M%SZ")
        name = f"{recipe.name}-{recipe.edition}-{stamp}"
        for number in range(1, 1000):
            folder = runs / (name if number == 1 else f"{name}-{number}")
            with machine_errors(folder):
                try:
                    folder.mkdir(parents=True)
                except FileExistsError:
                    continue
            write_text(folder / SOURCE, recipe.text)
            return cls(folder, Log(folder / LOG))
        raise RuntimeError(f"{runs}: a thousand runs in one second")

    def begin(
        self,
        recipe: Recipe,
        run_digest: str,
        environment: dict[str, Any],
        *,
        workers: int,
        recordings: int,
    ) -> None:
        """Write what is known before anything is computed."""
        known = {"id": environment_id(environment), **environment}
        text = json.dumps(known, indent=1, ensure_ascii=False)
        write_text(self.path / "environment.json", text + "\n")
        self.log.append(
            "run_started",
            run_digest=run_digest,
            precision=recipe.precision,
            workers=workers,
            recordings=recordings,
        )

    def complete(
        self,
        recipe: Recipe,
        results: Sequence[Result],
        steps: Sequence[Sequence[Any]],
        environments: Iterable[Path],
    ) -> str:
        """Write every table and figure, then the manifest; return the results digest.

        Parameters
        ----------
        environments : the records of all environments that ``steps`` name.
        """
        with machine_errors(self.path):
            with Copies(self.path) as copies:  # begun first: the rest is written meanwhile
                _copy_figures(self.path, results, copies)
                write_result_tables(self.path, columns_by_chain(recipe), results, copies)
                write_text(self.path / RESOLVED, resolved_yaml(recipe))
                self._write_parameters(recipe)
                self._write_recordings(results)
                write_csv(self.path / "steps.csv", _STEP_COLUMNS, steps)
                copies.done()
            for record in environments:
                (self.path / "environments").mkdir(exist_ok=True)
                shutil.copyfile(record, self.path / "environments" / record.name)
        told = ("recording", "sha256", "status", "chain", "step", "message")
        lines = [{name: getattr(result, name) for name in told} for result in results]
        self.log.append_all("recording", lines)
        failed = sum(result.status == "failed" for result in results)
        self.log.append("run_finished", recipe_digest=recipe.digest, failed=failed)
        self.log.close()
        return write_manifest(self.path, self.log.head, copies.digests).results_digest

    def _write_parameters(self, recipe: Recipe) -> None:
        rows = [
            [row.step, row.parameter, row.value, row.unit, row.origin, row.where]
            for row in parameters(recipe)
        ]
        write_csv(self.path / "parameters.csv", _PARAMETER_COLUMNS, rows)

    def _write_recordings(self, results: Sequence[Result]) -> None:
        names = [column.name for column in _RECORDING_COLUMNS]
        rows = [[getattr(result, name) for name in names] for result in results]
        write_csv(self.path / RECORDINGS, _RECORDING_COLUMNS, rows)


def finished_run(
    runs: Path, recipe: Recipe, run_digest: str, checked: Path
) -> tuple[Path, list[Result], str] | None:
    """Return the newest finished run that a new one would only repeat: folder, results, digest.

    One in which a recording failed is not taken: a new run tries that recording again. Nor is one
    that was changed after it was finished.

    Parameters
    ----------
    checked : where is remembered which files of finished runs were found unchanged, and when.
    """
    for folder in reversed(_folders(runs, recipe)):
        if not (folder / MANIFEST).exists() or not _same_recipe(folder, recipe):
            continue
        events = _events(folder)
        started = [event for event in events if event["event"] == "run_started"]
        ended = [event for event in events if event["event"] == "run_finished"]
        if started and ended and started[-1]["run_digest"] == run_digest:
            if ended[-1]["failed"] or _changes(folder, checked):
                continue
            digest = read_manifest(folder).results_digest
            return folder, _read_results(folder), digest
    return None


def notes_on(runs: Path, recipe: Recipe, checked: Path) -> list[str]:
    """Return what a user should know of the last few runs of this name and edition.

    Only the newest is read for changes: each was, when the next one began.

    ``checked`` is as in `finished_run`.
    """
    notes = []
    finished = [folder for folder in _folders(runs, recipe) if (folder / MANIFEST).exists()]
    for folder in finished[-_LAST_FEW:]:
        if folder == finished[-1] and (found := _changes(folder, checked)):
            notes.append(f"{folder.name} was changed after it was finished: {found[0].message}")
        digests = [event.get("recipe_digest", "") for event in _events(folder)]
        if digests and digests[-1] and digests[-1] != recipe.digest:
            notes.append(
                f"edition {recipe.edition} of {recipe.name} was run here with other content "
                f"({folder.name}). Raise the edition when a number can change."
            )
    return notes[-_LAST_FEW:]


def _changes(folder: Path, checked: Path) -> list[Finding]:
    """Return what was changed in a finished run.

    A file is read once: then it is known by its size, times of change and inode, as recordings are.
    """
    with RecordingDigests(checked, f"{folder.name}.sqlite") as digests:
        return verify_manifest(folder, digests.digest)


def _events(folder: Path) -> list[dict[str, Any]]:
    """Return a log's events of the run itself, and none of its thousands of recordings.

    None where it cannot be read, which is told elsewhere.
    """
    try:
        lines = (folder / LOG).read_text(encoding="utf-8").splitlines()
        events = [json.loads(line) for line in lines if _OF_THE_RUN in line]
        return [event for event in events if event["event"].startswith("run_")]
    except (OSError, ValueError):
        return []


def _read_results(folder: Path) -> list[Result]:
    with (folder / RECORDINGS).open(encoding="utf-8", newline="") as file:
        return [
            Result(**{**row, "duration_s": float(row["duration_s"] or "nan")})  # type: ignore[arg-type]
            for row in csv.DictReader(file)
        ]


def _folders(runs: Path, recipe: Recipe) -> list[Path]:
    prefix = f"{recipe.name}-{recipe.edition}-"
    if not runs.is_dir():
        return []
    return sorted(path for path in runs.iterdir() if path.name.startswith(prefix) and path.is_dir())


def _same_recipe(folder: Path, recipe: Recipe) -> bool:
    try:
        return (folder / SOURCE).read_bytes() == recipe.text.encode()
    except OSError:
        return False


def _clear(folder: Path) -> None:
    """Remove what a run that was cut off had written, but its recipe and its log."""
    for path in folder.iterdir():
        if path.name not in (SOURCE, LOG):
            shutil.rmtree(path) if path.is_dir() and not path.is_symlink() else path.unlink()


def _free(path: Path, taken: set[Path]) -> Path:
    """Return the path, numbered where another figure has it already; note it as taken."""
    number, free = 1, path
    while free in taken:
        number += 1
        free = path.with_name(f"{path.stem}-{number}{path.suffix}")
    taken.add(free)
    return free


def _copy_figures(folder: Path, results: Sequence[Result], copies: Copies) -> None:
    rows = []
    taken: set[Path] = set()
    for result in results:
        for output in result.outputs:
            for figure in output.facts["figures"]:
                # The whole name stands in the file's: figures are sent on one by one.
                file = f"{Path(result.recording).name}.{figure['signal']}.{figure['name']}.png"
                safe = "".join(c if c.isalnum() or c in "-_." else "_" for c in file)
                path = _free(Path("figures", output.chain, result.recording).with_name(safe), taken)
                copies.take(output, figure["file"], path.as_posix())
                rows.append([path.as_posix(), figure["caption"]])
    if rows:
        columns = (Column("figure", "text"), Column("caption", "text"))
        write_csv(folder / "figures" / "captions.csv", columns, rows)
