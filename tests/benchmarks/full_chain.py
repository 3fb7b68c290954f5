"""The whole chain through the command, beside two scripts by hand and the least work possible.

512 to 128 Hz, band-pass, notch, mask, epochs, Welch, multitaper, features: `full_recipe.py`. Whole
processes, in turn within a round; a run's start is that of the same recipe on a recording of a
few seconds.
"""

import shutil
import tempfile
from functools import partial
from pathlib import Path
from typing import Any

from benchmarks import full_check, full_data, full_recipe
from benchmarks.full_bound import STAGES
from benchmarks.measured import Spread, Timed, child, command, ratios

#: What a ratio must reach: (acceptable, excellent).
SCRIPT_TARGETS = {"vectorised": (5.0, 8.0), "loop": (10.0, 15.0)}
BOUND_TARGET = (4.0, 2.5)
SHORT_S = 8


def measure(
    channels: int, length_s: int, rounds: int, loop_rounds: int | None = None
) -> dict[str, Any]:
    """Return wall and CPU seconds, memory, and ratios, each within a round.

    Raises
    ------
    full_check.DifferentJobError
        When a script does not find what the run finds.
    """
    found: dict[str, list[Timed]] = {}
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        long = full_data.write(folder / "long.edf", channels, length_s)
        short = full_data.write(folder / "short.edf", channels, SHORT_S)
        apart = {}
        for number in range(rounds):
            ways = {
                **{f"ours {p}": partial(run, long, folder, p) for p in full_recipe.PRECISIONS},
                **{f"start {p}": partial(run, short, folder, p) for p in full_recipe.PRECISIONS},
                "as given": partial(run, long, folder, full_recipe.DEFAULT, workers=None),
                "vectorised": partial(script, "vectorised", long, folder),
                "bound": partial(child, "full_bound", long, channels, length_s),
            }
            if number < (rounds if loop_rounds is None else loop_rounds):
                ways["loop"] = partial(script, "loop", long, folder)
            for name, way in ways.items():
                found.setdefault(name, []).append(way())
        for precision in full_recipe.PRECISIONS:
            run(long, folder, precision)
            ours = full_check.ours(folder / "into")
            for name in SCRIPT_TARGETS:
                others = full_check.scripts(folder / f"{name}.csv")
                apart[f"{name} {precision}"] = full_check.require_same_job(ours, others)
    return {
        "channels": channels,
        "hours": length_s / 3600,
        "rounds": rounds,
        "size_mb": full_data.size_mb(channels, length_s),
        "apart": apart,
        **summary(found),
    }


def summary(found: dict[str, list[Timed]]) -> dict[str, Any]:
    """Return spreads of what was measured, and of ratios."""
    bounds: dict[str, list[dict[str, float]]] = {
        precision: [bound.json[precision] for bound in found["bound"]]
        for precision in found["bound"][0].json
    }
    totals = {precision: [sum(b.values()) for b in known] for precision, known in bounds.items()}
    timed = {name: times for name, times in found.items() if name != "bound"}
    own_s = {
        p: [a.cpu_s - b.cpu_s for a, b in zip(found[f"ours {p}"], found[f"start {p}"], strict=True)]
        for p in full_recipe.PRECISIONS
    }
    one_worker = found[f"ours {full_recipe.DEFAULT}"]
    return {
        "wall_s": {name: Spread.of(t.wall_s for t in times) for name, times in timed.items()},
        "cpu_s": {name: Spread.of(t.cpu_s for t in times) for name, times in timed.items()},
        "peak_mb": {name: Spread.of(t.peak_mb for t in times) for name, times in timed.items()},
        "bound_s": {precision: Spread.of(values) for precision, values in totals.items()},
        "bound_stages_s": {
            precision: {stage: Spread.of(b[stage] for b in known) for stage in STAGES}
            for precision, known in bounds.items()
        },
        "own_cpu_s": {p: Spread.of(values) for p, values in own_s.items()},
        "over_bound": {p: ratios(values, totals[p]) for p, values in own_s.items()},
        "times_faster": _times_faster(found, found["as given"]),
        "times_faster_one_worker": _times_faster(found, one_worker),
    }


def _times_faster(found: dict[str, list[Timed]], ours: list[Timed]) -> dict[str, Spread]:
    """Return the wall of each script over ours."""
    return {
        name: ratios((t.wall_s for t in found[name]), (t.wall_s for t in ours[: len(found[name])]))
        for name in SCRIPT_TARGETS
    }


def run(recording: Path, folder: Path, precision: str, workers: int | None = 1) -> Timed:
    """Run the command from a fresh store; what it leaves is in ``folder/into`` until the next.

    Without ``workers`` it is given as users give it: there is one a core then.
    """
    shutil.rmtree(folder / "into", ignore_errors=True)
    recipe = folder / "recipe.yaml"
    recipe.write_text(full_recipe.chain(precision), encoding="utf-8")
    asked = () if workers is None else ("--workers", workers)
    return command("run", recipe, recording, "--into", folder / "into", *asked)


def script(way: str, recording: Path, folder: Path) -> Timed:
    """Run a script; what it leaves is in a table of its name."""
    return child("full_script", way, recording, folder / f"{way}.csv")
