"""A short form that fails when a ratio falls below what is acceptable by more than noise.

``python tests/benchmarks/run.py --gate``. CPU seconds of one process, never wall, and ratios within
a round, so that a busy machine slows both sides alike. Of each ratio's rounds the more favourable
quartile must reach the acceptable value but for `NOISE`; if it does not, all is measured once more
with twice the rounds before the gate fails.
"""

import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path

from benchmarks import full_bound, full_chain, full_data, full_recipe, in_process, stage_ratios
from benchmarks.measured import child

CHANNELS, LENGTH_S, SHORT_S, ROUNDS = 8, 3600, 8, 5
#: The loop takes long, and as much for each epoch: a part of the recording will do.
LOOP_LENGTH_S = 300
STAGES_HOURS = 0.5
#: Share by which the favourable quartile of a ratio may miss: what it varies by from run to run of
#: the same code on a busy machine. Single rounds lie further off; that is what the quartile is for.
NOISE = 0.15


@dataclass(frozen=True)
class Limit:
    """What a ratio must reach: at most, or at least, a value."""

    what: str
    acceptable: float
    at_least: bool = False

    @property
    def allowed(self) -> float:
        """The value with the allowance for noise."""
        return self.acceptable / (1 + NOISE) if self.at_least else self.acceptable * (1 + NOISE)

    def reached(self, rounds: Sequence[float]) -> bool:
        """Tell whether the favourable quartile of some rounds reaches it."""
        favourable = self.favourable(rounds)
        if self.at_least:
            return favourable >= self.allowed
        return 0 < favourable <= self.allowed  # what is below 0 drowned in noise

    def favourable(self, rounds: Sequence[float]) -> float:
        """Return the quartile of the rounds that is on the better side."""
        lower, _, upper = statistics.quantiles(rounds, n=4, method="inclusive")
        return upper if self.at_least else lower

    def told(self, rounds: Sequence[float]) -> str:
        """Return a line for the screen."""
        side = "least" if self.at_least else "most"
        verdict = "reached" if self.reached(rounds) else "NOT REACHED"
        shown = ", ".join(f"{value:.2f}" for value in sorted(rounds))
        return (
            f"{verdict}: {self.what}: at {side} {self.acceptable:g} (with noise {self.allowed:.2f})"
            f"; favourable quartile {self.favourable(rounds):.2f} of {shown}"
        )


Rounds = Mapping[Limit, Sequence[float]]


def gate(measure: Callable[[int], Rounds], rounds: int = ROUNDS) -> bool:
    """Measure, once more with twice the rounds where need be, and say what was not reached."""
    missed: list[str] = []
    for count in (rounds, 2 * rounds):
        found = measure(count)
        for limit, values in found.items():
            print(limit.told(values), flush=True)
        still = [limit.what for limit, values in found.items() if not limit.reached(values)]
        # What was reached once is reached: the second time is for what was not.
        missed = still if count == rounds else [what for what in missed if what in still]
        if not missed:
            return True
        print(f"{count} rounds: {len(missed)} not reached\n", flush=True)
    print(
        "The speed gate fails: " + "; ".join(missed) + ".\n"
        "A change made this slower than is acceptable. Profile it on the chain of "
        "tests/benchmarks/full_recipe.py (`python tests/benchmarks/run.py` measures in full; "
        "full_stages.py shows which part it is)."
    )
    return False


def measure(rounds: int) -> Rounds:
    """Return ratios of the whole chain and of its stages, a number a round."""
    found: dict[Limit, list[float]] = {}
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        lengths_s = {"long": LENGTH_S, "loop": LOOP_LENGTH_S, "short": SHORT_S}
        for name, length_s in lengths_s.items():
            full_data.write(folder / f"{name}.edf", CHANNELS, length_s)
        _own_s(folder, full_recipe.DEFAULT)  # warms up
        for _ in range(rounds):
            for limit, value in {**_whole_chain(folder), **_stages()}.items():
                found.setdefault(limit, []).append(value)
    return found


def _whole_chain(folder: Path) -> dict[Limit, float]:
    """Return ratios of one round."""
    bounds = full_bound.bounds(folder / "long.edf", CHANNELS, LENGTH_S, full_recipe.PRECISIONS)
    own_s = {precision: _own_s(folder, precision) for precision in full_recipe.PRECISIONS}
    acceptable, _ = full_chain.BOUND_TARGET
    ratios = {
        Limit(f"whole chain / bound, {precision}", acceptable): taken_s
        / sum(bounds[precision].values())
        for precision, taken_s in own_s.items()
    }
    if find_spec("pyedflib") is None:
        print("pyedflib is not installed: the scripts by hand cannot read, and are left out")
        return ratios
    scripts_s = {
        "vectorised": _script_s(folder, "vectorised", "long"),
        "loop": _script_s(folder, "loop", "loop") * LENGTH_S / LOOP_LENGTH_S,
    }
    for name, (acceptable, _) in full_chain.SCRIPT_TARGETS.items():
        limit = Limit(f"{name} script / whole chain", acceptable, at_least=True)
        ratios[limit] = scripts_s[name] / own_s[full_recipe.DEFAULT]
    return ratios


def _own_s(folder: Path, precision: str) -> float:
    """Return CPU seconds of a run less those of one over a few seconds: what grows with data."""
    text = full_recipe.chain(precision)
    took_s = {}
    for name in ("short", "long"):
        with tempfile.TemporaryDirectory(dir=folder) as into:
            took_s[name] = in_process.run(text, folder / f"{name}.edf", Path(into))["all_s"]
    return took_s["long"] - took_s["short"]


def _script_s(folder: Path, way: str, recording: str) -> float:
    """Return CPU seconds of a script without its imports, in a process of its own.

    In this one it would find memory that the system has given already.
    """
    recording_path, table = folder / f"{recording}.edf", folder / f"{way}.csv"
    return float(child("full_script", way, recording_path, table).json["cpu_s"])


def _stages() -> dict[Limit, float]:
    """Return ratios of single stages to their bound, each from a round of its own."""
    known = stage_ratios.targets()
    found = stage_ratios.once(hours=STAGES_HOURS, rounds=1)
    return {Limit(what, known[what][0]): value for what, value in found.items()}


def main() -> None:
    """Exit with 1 when a ratio is not acceptable."""
    start = time.perf_counter()
    passed = gate(measure)
    print(f"The speed gate took {time.perf_counter() - start:.0f} s.")
    sys.exit(0 if passed else 1)
