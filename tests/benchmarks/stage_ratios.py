"""Single stages against their bound, from the benchmarks that measure each by itself."""

from benchmarks import full_recipe, fused, rows_steps
from benchmarks.measured import Spread

FILTER_TARGET = (fused.TARGETS["acceptable"], fused.TARGETS["excellent"])
MULTITAPER_TARGET = (3.0, 2.2)
FILTER, MULTITAPER = "filter and resample / bound", "multitaper / bound"
#: Of the chains that `fused` measures, the one of `full_recipe`.
_CASE = "512 to 128 Hz, 0.5 to 40 Hz"
_FLOATS = {"standard": "float32", "double": "float64"}


def targets() -> dict[str, tuple[float, float]]:
    """Return what each ratio may be at most: (acceptable, excellent)."""
    multitaper = {f"{MULTITAPER}, {p}": MULTITAPER_TARGET for p in full_recipe.PRECISIONS}
    return {FILTER: FILTER_TARGET, **multitaper}


def once(hours: float, rounds: int) -> dict[str, float]:
    """Return each ratio, the median of some rounds."""
    case = fused.measure(hours=hours, channels=1, rounds=rounds, cases=[_CASE])[_CASE]
    steps = rows_steps.measure(hours=hours, rounds=rounds)
    found = {FILTER: float(case["fused_over_bound"])}
    for precision in full_recipe.PRECISIONS:
        over = float(steps[_FLOATS[precision]]["multitaper over bound"])
        found[f"{MULTITAPER}, {precision}"] = over
    return found


def measure(hours: float, rounds: int, times: int) -> dict[str, Spread]:
    """Return the spread of each ratio over some times."""
    found = [once(hours, rounds) for _ in range(times)]
    return {name: Spread.of(one[name] for one in found) for name in found[0]}
