"""The example from a fresh store: by two workers, by one, and without a backend at all."""

import re
import shutil
import tempfile
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

from benchmarks.measured import Spread, Timed, child, command, in_turn, ratios

EXAMPLE = Path(__file__).parents[2] / "workdir_example"
TARGET_S = 8.0
_PARTS = re.compile(r"\(reading ([\d.]+) s, planning ([\d.]+) s, jobs ([\d.]+) s, tables ([\d.]+)")
_DIGEST = re.compile(r"Results digest: (\w+)")


def measure(rounds: int, recordings: int | None = None) -> dict[str, Any]:
    """Return wall seconds of the three ways, and what the backend costs and gains.

    The same command each time; ``in_process`` does the same jobs one after another in its own
    process, where the others hand them to Snakemake.

    Parameters
    ----------
    recordings : only so many of the example's, for a short form.
    """
    ways: dict[str, Callable[[Path], Timed]] = {
        "two_workers": lambda folder: command(*_arguments(folder, 2)),
        "one_worker": lambda folder: command(*_arguments(folder, 1)),
        "in_process": lambda folder: child("in_process", *_arguments(folder, 1)),
    }
    found = in_turn({n: partial(_fresh, way, recordings) for n, way in ways.items()}, rounds)
    digests = {_found(_DIGEST, t)[0] for times in found.values() for t in times}
    if len(digests) != 1:
        raise RuntimeError(f"the ways gave different results: {digests}")
    walls = {name: [t.wall_s for t in times] for name, times in found.items()}
    one, alone = walls["one_worker"], walls["in_process"]
    return {
        "wall_s": {name: Spread.of(times) for name, times in walls.items()},
        "cpu_s": {name: Spread.of(t.cpu_s for t in times) for name, times in found.items()},
        "peak_mb": {name: Spread.of(t.peak_mb for t in times) for name, times in found.items()},
        "jobs_s": {
            name: Spread.of(float(_found(_PARTS, t)[2]) for t in times)
            for name, times in found.items()
        },
        "backend_cpu_s": Spread.of(
            a.cpu_s - b.cpu_s for a, b in zip(found["one_worker"], found["in_process"], strict=True)
        ),
        "backend_s": Spread.of(a - b for a, b in zip(one, alone, strict=True)),
        "backend_share": Spread.of((a - b) / a for a, b in zip(one, alone, strict=True)),
        "second_worker": ratios(one, walls["two_workers"]),
    }


def _fresh(way: Callable[[Path], Timed], recordings: int | None) -> Timed:
    """Run in a new copy of the example's folder, without what an earlier run left there."""
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place, "example")
        folder.mkdir()
        shutil.copy(EXAMPLE / "recipe.yaml", folder)
        shutil.copytree(EXAMPLE / "recordings", folder / "recordings")
        for path in sorted(folder.rglob("*.edf"))[recordings:] if recordings else ():
            path.unlink()
        return way(folder)


def _arguments(folder: Path, workers: int) -> tuple[str | Path | int, ...]:
    return ("run", folder, "--workers", workers)


def _found(pattern: re.Pattern[str], run: Timed) -> tuple[str, ...]:
    found = pattern.search(run.text)
    if found is None:
        raise RuntimeError(f"not in what the run printed: {pattern.pattern}\n{run.text}")
    return found.groups()
