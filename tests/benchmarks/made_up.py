"""Findings in the shape that the measurements have, for tests of what is made of them."""

from typing import Any

from benchmarks import full_bound, full_recipe, full_stages, stage_ratios
from benchmarks.measured import Spread

S = Spread(0.1, 0.2, 0.3)


def findings() -> dict[str, Any]:
    """Return findings that meet every target."""
    file = {
        name: S for name in ("plain_s", "decode_all_ratio", "decode_two_ratio", "memory_growth_mb")
    }
    ways = {name: S for name in ("two_workers", "one_worker", "in_process")}
    both = {"help": S, "check": S}
    sides = {"recipe": S, "jobs": S, "script": S}
    return {
        "reader": {"signals": 64, "hours": 1.0, "EDF": file, "BDF": file},
        "start_up": {
            "wall_s": {**both, "python": S, "numpy": S},
            "to_python": both,
            "to_numpy": both,
        },
        "example": {
            "wall_s": ways,
            "cpu_s": ways,
            "peak_mb": ways,
            "backend_s": S,
            "backend_cpu_s": S,
            "backend_share": S,
            "second_worker": S,
        },
        "second_run": {
            "recordings": 200,
            "length_s": 30,
            "tasks": 600,
            "first_s": 8.0,
            "again_s": S,
            "added_s": S,
            "again_ratio": S,
            "added_ratio": S,
        },
        "plain_chain": {
            "hours": 1.0,
            "rate_hz": 512,
            "cpu_s": sides,
            "peak_mb": sides,
            "ratio": S,
            "jobs_ratio": S,
            "largest_relative_difference": 1e-12,
            "numbers_compared": 5145,
        },
        **_whole_chain(),
        "loads": [0.1, 1.0],
        "took_s": 240.0,
    }


def _whole_chain() -> dict[str, Any]:
    precisions = full_recipe.PRECISIONS
    ways = [
        *(f"{kind} {p}" for kind in ("ours", "start") for p in precisions),
        "vectorised",
        "as given",
    ]
    timed = {name: S for name in (*ways, "loop")}
    stages = {stage: S for stage in full_bound.STAGES}
    workers = {"1": S, "2": S}
    return {
        "full_chain": {
            "channels": 32,
            "hours": 2.0,
            "rounds": 3,
            "size_mb": 236.0,
            "apart": {"loop double": 0.002},
            "wall_s": timed,
            "cpu_s": timed,
            "peak_mb": timed,
            "bound_s": {precision: S for precision in full_bound.PRECISIONS},
            "bound_stages_s": {precision: stages for precision in full_bound.PRECISIONS},
            "own_cpu_s": {precision: S for precision in precisions},
            "over_bound": {precision: S for precision in precisions},
            "times_faster": {"vectorised": Spread(6, 7, 9), "loop": Spread(11, 12, 16)},
            "times_faster_one_worker": {"vectorised": S, "loop": S},
        },
        "psd_errors": {p: {"welch": 1e-6, "multitaper": 2e-6} for p in precisions},
        "stage_ratios": {name: Spread(1, 2.5, 3) for name in stage_ratios.targets()},
        "full_stages": {part: S for part in full_stages.PARTS},
        "full_sizes": [
            {"megasamples": 0.9, "ours": 2.0, "vectorised": 1.0, "bound": 0.01},
            {"megasamples": 14.7, "ours": 2.5, "vectorised": 3.0, "bound": 0.1},
        ],
        "full_long": [
            {
                "asked_hours": hours,
                "hours": float(hours),
                "channels": 64,
                "rounds": 1,
                "size_mb": 236.0 * hours,
                "wall_s": workers,
                "cpu_s": workers,
                "peak_mb": workers,
                "bound_s": S,
                "speed_up": Spread(1.6, 1.7, 1.9),
                "over_bound": Spread.of([3.0]),
            }
            for hours in (4, 24)
        ],
        "many_recordings": {
            "recordings": 5000,
            "plan": {"wall_s": S, "peak_mb": S},
            "first_s": 40.0,
            "again_s": S,
            "one_alone_s": S,
            "one_more_beyond_s": S,
        },
        "backend_own": [
            {"recordings": n, "rounds": 1, "own_s": 1.0, "snakemake": 2.0, "in_process": 1.0}
            for n in (1, 10, 100)
        ],
    }
