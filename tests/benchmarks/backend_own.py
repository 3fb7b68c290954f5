"""What the backend costs by itself, against the number of short recordings of a run."""

import statistics
import tempfile
import time
from pathlib import Path
from typing import Any

from benchmarks import second_run
from benchmarks.measured import child, command
from benchmarks.plain_chain import RECIPE


def measure(rounds: dict[int, int]) -> list[dict[str, Any]]:
    """Return medians of wall seconds: with Snakemake and one worker, and in process.

    Parameters
    ----------
    rounds : recordings -> how often.
    """
    return [_measure(recordings, count) for recordings, count in rounds.items()]


def _measure(recordings: int, rounds: int) -> dict[str, Any]:
    walls: dict[str, list[float]] = {"snakemake": [], "in_process": []}
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        second_run.write(folder, range(recordings))
        (folder / "recipe.yaml").write_text(RECIPE, encoding="utf-8")
        time.sleep(second_run.SETTLED_S)
        for number in range(rounds):
            to = ("--into", folder / f"one{number}", "--workers", 1)
            walls["snakemake"].append(command("run", folder, *to).wall_s)
            to = ("--into", folder / f"two{number}", "--workers", 1)
            walls["in_process"].append(child("in_process", "run", folder, *to).wall_s)
    found = {name: statistics.median(values) for name, values in walls.items()}
    own_s = statistics.median(
        a - b for a, b in zip(walls["snakemake"], walls["in_process"], strict=True)
    )
    return {"recordings": recordings, "rounds": rounds, "own_s": own_s, **found}
