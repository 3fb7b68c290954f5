"""Thousands of short recordings: the plan, a finished run given again, and one recording more."""

import json
import sys
import tempfile
import time
from collections.abc import Iterable
from datetime import datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from benchmarks.measured import Spread, Timed, child, command, own_peak_mb

LENGTH_S, RATE_HZ = 20, 128
LABELS = ("EEG Fp1-F7", "EEG Fp2-F8")
#: What is to hold for 5,000 recordings.
PLAN_S, PLAN_MB, AGAIN_S, ONE_MORE_S = 10.0, 500.0, 5.0, 5.0
#: Of a file that changed less than 2.5 s before it was read, the store remembers nothing yet.
SETTLED_S = 3.0
RECIPE = """\
recipe: many-recordings
edition: 1
title: Many short recordings
signals:
  frontal: {labels: ["EEG Fp1*", "EEG Fp2*"], many: true, unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - exclude.flatline: {at_least: 1 s}
    - exclude.amplitude: {range: 500 uV, window: 1 s}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz, order_per_pass: 4}
    - epoch.consecutive: {length: 4 s, overlap: 50 %}
    - spectrum.multitaper: {half_bandwidth: 0.75 Hz}
    - feature.band_power:
        bands: {delta: [0.5 Hz, 4 Hz], theta: [4 Hz, 8 Hz], alpha: [8 Hz, 13 Hz]}
        express: relative
        relative_to: [0.5 Hz, 40 Hz]
    - feature.spectral_edge: {fraction: 95 %, within: [0.5 Hz, 30 Hz]}
    - export.table: {}
"""


def measure(recordings: int = 5000, rounds: int = 3) -> dict[str, Any]:
    """Return what a plan and runs over many recordings take.

    Parameters
    ----------
    recordings : over how many the plan is made, and to how many one more is added.
    rounds : how often each is measured, but for the first run.
    """
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        write(folder / "all", range(recordings))
        (folder / "recipe.yaml").write_text(RECIPE, encoding="utf-8")
        time.sleep(SETTLED_S)
        planned = _planned(folder, rounds)
        first = _run(folder, "all", "into")
        again = [_run(folder, "all", "into") for _ in range(rounds)]
        alone, more = [], []
        for number in range(recordings, recordings + rounds):
            write(folder / "all", [number])
            write(folder / f"one{number}", [number])
            time.sleep(SETTLED_S)
            more.append(_run(folder, "all", "into"))
            alone.append(_run(folder, f"one{number}", f"alone{number}"))
    beyond = [(a.wall_s - b.wall_s, a.cpu_s - b.cpu_s) for a, b in zip(more, alone, strict=True)]
    return {
        "recordings": recordings,
        "plan": {name: Spread.of(one[name] for one in planned) for name in planned[0]},
        "first_s": first.wall_s,
        "again_s": Spread.of(run.wall_s for run in again),
        "one_alone_s": Spread.of(run.wall_s for run in alone),
        "one_more_beyond_s": Spread.of(wall_s for wall_s, _ in beyond),
        "one_more_beyond_cpu_s": Spread.of(cpu_s for _, cpu_s in beyond),
    }


def _planned(folder: Path, rounds: int) -> list[dict[str, float]]:
    """Plan in processes of their own; the headers are known from the second time on."""
    to = ("plan", folder / "recipe.yaml", folder / "all", folder / "plan")
    return [child("many_recordings", *to).json for _ in range(rounds + 1)][1:]


def write(folder: Path, numbers: Iterable[int]) -> None:
    """Write short recordings of noise in two signals, each with its own."""
    from waveassay.recording.write import WrittenSignal, write_recording

    folder.mkdir(exist_ok=True)
    for number in numbers:
        noise = np.random.default_rng([7, number])
        signals = []
        for label in LABELS:
            x = np.cumsum(noise.standard_normal(LENGTH_S * RATE_HZ))
            x = 40 * (x - np.mean(x)) / np.std(x)
            signals.append(WrittenSignal(label, "uV", Fraction(RATE_HZ), x, -3276.8, 3276.7))
        path = folder / f"r{number:05}.edf"
        write_recording(path, signals, datetime(2031, 4, 5, 9, 30))


def plan(recipe_path: Path, recordings: Path, store_folder: Path) -> dict[str, float]:
    """Plan a run whose headers are known, to the work folder; return seconds and megabytes."""
    from waveassay.execute.bundles import installed_bundles
    from waveassay.execute.handover import read_recording, write_work
    from waveassay.execute.store import Store
    from waveassay.plan.jobs import group_into_jobs, missing_tasks
    from waveassay.plan.plan import make_plan
    from waveassay.plan.recordings import find_recordings
    from waveassay.provenance.environment import environment
    from waveassay.provenance.recording_digests import RecordingDigests

    recipe = _recipe(recipe_path)
    found, store = find_recordings([recordings]), Store(store_folder)
    with RecordingDigests(store.root) as digests:
        read = {item.name: read_recording(item, digests, recipe.truncated) for item in found}
    env = environment(installed_bundles())
    wall_s, cpu_s = time.perf_counter(), time.process_time()
    planned = make_plan(recipe, found, read)
    todo = [missing_tasks(item.tasks, store.has) for item in planned.recordings]
    jobs = group_into_jobs(todo, 2)
    write_work(store, planned, jobs, env, store_folder / "run")
    return {
        "wall_s": time.perf_counter() - wall_s,
        "cpu_s": time.process_time() - cpu_s,
        "peak_mb": own_peak_mb(),
        "jobs": len(jobs),
        "shortest_job_s": min(job.cost_s for job in jobs),
        "longest_job_s": max(job.cost_s for job in jobs),
    }


def _recipe(path: Path) -> Any:
    from waveassay.recipe import check_recipe

    recipe = check_recipe(path.read_text(encoding="utf-8"), str(path)).recipe
    assert recipe is not None, "the recipe is sound"
    return recipe


def _run(folder: Path, recordings: str, into: str) -> Timed:
    return command("run", folder / "recipe.yaml", folder / recordings, "--into", folder / into)


if __name__ == "__main__":
    _, *places = sys.argv[1:]
    print(json.dumps(plan(*map(Path, places))))
