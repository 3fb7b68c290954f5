"""A run over many short recordings, given again: unchanged, and with one recording more."""

import re
import tempfile
import time
from datetime import datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from benchmarks.measured import Spread, Timed, command, ratios
from benchmarks.plain_chain import LABEL, RECIPE

LENGTH_S, RATE_HZ = 30, 256
TARGET_S = 3.0
#: Of a file that changed less than 2.5 s before it was read, the store remembers nothing yet.
SETTLED_S = 3.0
_TASKS = re.compile(r"([\d,]+) tasks? computed, ([\d,]+) taken from the store")


def measure(recordings: int, rounds: int) -> dict[str, Any]:
    """Return wall seconds of the first run, of identical ones, and of ones with one more.

    The first run is given once. Then, in each round, the same command is given again, and once
    more after a recording was added.
    """
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        write(folder, range(recordings))
        recipe = folder / "recipe.yaml"
        recipe.write_text(RECIPE, encoding="utf-8")
        time.sleep(SETTLED_S)
        first = _run(folder)
        done = tasks_done(first)
        again: list[Timed] = []
        added: list[Timed] = []
        for number in range(rounds):
            again.append(_run(folder))
            if "Nothing to compute" not in again[-1].text:
                raise RuntimeError(f"an identical run computed something: {again[-1].text}")
            write(folder, [recordings + number])
            added.append(_run(folder))
            if tasks_done(added[-1]) * recordings != done:
                raise RuntimeError(f"more than the new recording was computed: {added[-1].text}")
    return {
        "recordings": recordings,
        "length_s": LENGTH_S,
        "tasks": done,
        "first_s": first.wall_s,
        "again_s": Spread.of(t.wall_s for t in again),
        "added_s": Spread.of(t.wall_s for t in added),
        "again_ratio": ratios((t.wall_s for t in again), [first.wall_s] * rounds),
        "added_ratio": ratios((t.wall_s for t in added), [first.wall_s] * rounds),
    }


def write(folder: Path, numbers: Any) -> None:
    """Write short recordings of noise, each with its own."""
    from waveassay.recording.write import WrittenSignal, write_recording

    (folder / "recordings").mkdir(exist_ok=True)
    for number in numbers:
        noise = np.random.default_rng([5, number])
        x = np.cumsum(noise.standard_normal(LENGTH_S * RATE_HZ))
        x = 40 * (x - np.mean(x)) / np.std(x)
        signal = WrittenSignal(LABEL, "uV", Fraction(RATE_HZ), x, -3276.8, 3276.7)
        path = folder / "recordings" / f"r{number:04}.edf"
        write_recording(path, [signal], datetime(2031, 4, 5, 9, 30))


def tasks_done(run: Timed) -> int:
    """Return how many tasks a run says that it has computed."""
    found = _TASKS.search(run.text)
    if found is None:
        raise RuntimeError(f"the run does not say what it computed: {run.text}")
    return int(found[1].replace(",", ""))


def _run(folder: Path) -> Timed:
    return command("run", folder)
