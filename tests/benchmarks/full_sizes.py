"""What the whole chain costs from small recordings on: CPU seconds of ours, a script, the bound."""

import statistics
import tempfile
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from benchmarks import full_chain, full_data, full_recipe
from benchmarks.measured import child


def measure(sizes: Sequence[tuple[int, float]], rounds: int) -> list[dict[str, float]]:
    """Return medians for each size (channels, hours)."""
    return [_measure(channels, round(hours * 3600), rounds) for channels, hours in sizes]


def _measure(channels: int, length_s: int, rounds: int) -> dict[str, float]:
    times: dict[str, list[float]] = {"ours": [], "vectorised": [], "bound": []}
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        path = full_data.write(folder / "some.edf", channels, length_s)
        for _ in range(rounds):
            times["ours"].append(full_chain.run(path, folder, full_recipe.DEFAULT).cpu_s)
            times["vectorised"].append(full_chain.script("vectorised", path, folder).cpu_s)
            bound = child("full_bound", path, channels, length_s, full_recipe.DEFAULT)
            times["bound"].append(sum(bound.json[full_recipe.DEFAULT].values()))
    return {"megasamples": megasamples(channels, length_s)} | {
        name: statistics.median(values) for name, values in times.items()
    }


def points(found: dict[str, Any]) -> dict[str, list[tuple[float, float]]]:
    """Return (million samples, CPU seconds) by way, from all parts that measured one."""
    ways: dict[str, list[tuple[float, float]]] = {"ours": [], "vectorised": [], "bound": []}
    for point in found["full_sizes"]:
        for way, known in ways.items():
            known.append((point["megasamples"], point[way]))
    chain = found["full_chain"]
    size = megasamples(chain["channels"], chain["hours"] * 3600)
    ways["ours"].append((size, chain["cpu_s"][f"ours {full_recipe.DEFAULT}"].median))
    ways["vectorised"].append((size, chain["cpu_s"]["vectorised"].median))
    ways["bound"].append((size, chain["bound_s"][full_recipe.DEFAULT].median))
    for long in found["full_long"]:
        size = megasamples(long["channels"], long["hours"] * 3600)
        ways["ours"].append((size, long["cpu_s"]["1"].median))
        ways["bound"].append((size, long["bound_s"].median))
    return {way: sorted(known) for way, known in ways.items()}


def megasamples(channels: int, length_s: float) -> float:
    """Return the size of a recording: hours x channels x rate, in millions of samples."""
    return channels * length_s * full_data.RATE_HZ / 1e6
