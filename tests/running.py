"""Run recipes in tests, and read what they leave."""

import csv
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from waveassay.execute.in_process import run_in_process
from waveassay.execute.run import RunOutcome, run_recipe
from waveassay.execute.runner import Runner
from waveassay.plan.recordings import find_recordings
from waveassay.recipe import RecipeError, check_recipe


def run(
    recipe_text: str,
    recordings: Sequence[Path],
    into: Path,
    *,
    runner: Runner = run_in_process,
    workers: int = 2,
    store: Path | None = None,
) -> RunOutcome:
    """Run a recipe's text over recordings, in this process unless told otherwise."""
    checked = check_recipe(recipe_text, "recipe.yaml")
    if checked.recipe is None:
        raise RecipeError(checked.problems)
    found = find_recordings(recordings)
    return run_recipe(
        checked.recipe, found, into, store_folder=store, workers=workers, runner=runner
    )


def command(*arguments: object, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    """Run the command line in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "waveassay", *map(str, arguments)],
        cwd=cwd,
        capture_output=True,
        text=True,
        timeout=300,
    )


def rows(run_folder: Path, table: str) -> list[dict[str, str]]:
    """Return the rows of a CSV of a run, such as ``epochs/cortex`` or ``summary``."""
    with (run_folder / f"{table}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def numbers(table: Sequence[dict[str, str]], column: str) -> list[float]:
    """Return a column as floats, NaN where missing."""
    return [float(row[column] or "nan") for row in table]


def only_run(into: Path) -> Path:
    """Return the one run folder of a place."""
    folders = [path for path in (into / "runs").iterdir() if path.is_dir()]
    assert len(folders) == 1, folders
    return folders[0]


def write_eeg(path: Path, x: Any, rate_hz: int, **more: Any) -> Path:
    """Write one signal, ``EEG Fp1-F7`` in uV, between -3276.8 and 3276.7 in steps of 0.1."""
    from datetime import datetime
    from fractions import Fraction

    from waveassay.recording.write import WrittenSignal, write_recording

    signal = WrittenSignal("EEG Fp1-F7", "uV", Fraction(rate_hz), x, -3276.8, 3276.7)
    path.parent.mkdir(parents=True, exist_ok=True)
    write_recording(path, [signal], datetime(2031, 4, 5, 9, 30), **more)
    return path
