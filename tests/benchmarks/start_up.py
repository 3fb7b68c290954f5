"""How long the command takes to start, beside the interpreter alone and numpy alone."""

import sys
from collections.abc import Callable
from typing import Any

from benchmarks.example_run import EXAMPLE
from benchmarks.measured import Spread, Timed, command, in_turn, ratios, timed

TARGETS_S = {"help": 0.3, "check": 1.0}


def measure(rounds: int) -> dict[str, Any]:
    """Return wall seconds of ``--help`` and of ``check`` on the example's recipe, and ratios."""
    ways: dict[str, Callable[[], Timed]] = {
        "python": lambda: timed([sys.executable, "-c", "pass"]),
        "numpy": lambda: timed([sys.executable, "-c", "import numpy"]),
        "help": lambda: command("--help"),
        "check": lambda: command("check", EXAMPLE / "recipe.yaml"),
    }
    for way in ways.values():
        way()  # compiles what is not yet compiled
    found = in_turn(ways, rounds)
    walls = {name: [t.wall_s for t in times] for name, times in found.items()}
    return {
        "wall_s": {name: Spread.of(times) for name, times in walls.items()},
        "to_python": {name: ratios(walls[name], walls["python"]) for name in TARGETS_S},
        "to_numpy": {name: ratios(walls[name], walls["numpy"]) for name in TARGETS_S},
    }
