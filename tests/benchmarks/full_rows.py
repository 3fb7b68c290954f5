"""Lines of the page that are about the whole chain."""

from collections.abc import Iterator, Mapping
from typing import Any

from benchmarks import full_chain, full_check, full_long, full_recipe, many_recordings, stage_ratios
from benchmarks.measured import Spread
from benchmarks.rows import Row


def full_target_rows(found: Mapping[str, Any]) -> Iterator[Row]:
    """Yield what has a target."""
    chain = found["full_chain"]
    for name, (limit, excellent) in full_chain.SCRIPT_TARGETS.items():
        spread = chain["times_faster"][name]
        yield Row(
            f"whole chain: {name} script / ours, wall", spread, "", limit, excellent, at_least=True
        )
    for precision, spread in chain["over_bound"].items():
        what = f"whole chain without start / bound, CPU, {precision} precision"
        yield Row(what, spread, "", *full_chain.BOUND_TARGET)
    known = stage_ratios.targets()
    for name, spread in found["stage_ratios"].items():
        yield Row(f"{name}, CPU", spread, "", *known[name])
    for precision, errors in found["psd_errors"].items():
        for name, error in errors.items():
            what = f"largest error of a bin, {name}, {precision} precision"
            limit, excellent = full_check.PSD_TARGETS.values()
            yield Row(what, Spread.of([error]), "", limit, excellent)
    yield from _many_rows(found["many_recordings"])
    for long in found["full_long"]:
        if long["asked_hours"] != long["hours"]:
            continue
        size = _size(long)
        if long["hours"] == full_long.TARGET_HOURS:
            wall_s, peak_mb = long["wall_s"]["1"], long["peak_mb"]["1"]
            yield Row(f"{size}, one worker", wall_s, "s", *full_long.WALL_TARGET_S)
            what = f"{size}, one worker, wall / bound"
            yield Row(what, long["over_bound"], "", *full_long.BOUND_TARGET)
            yield Row(f"{size}, largest process", peak_mb, "MB", *full_long.MEMORY_TARGET_MB)
        limits = full_long.SPEED_UP_TARGETS.get(long["asked_hours"])
        if limits:
            what = f"{size}, one worker / two workers, wall"
            yield Row(what, long["speed_up"], "", *limits, at_least=True)


def _many_rows(many: Mapping[str, Any]) -> Iterator[Row]:
    count, plan = many["recordings"], many["plan"]
    yield Row(f"plan of {count} recordings", plan["wall_s"], "s", many_recordings.PLAN_S)
    yield Row("its memory, all of the process", plan["peak_mb"], "MB", many_recordings.PLAN_MB)
    again, more = many["again_s"], many["one_more_beyond_s"]
    yield Row(f"identical second run of {count}", again, "s", many_recordings.AGAIN_S)
    what = f"one recording more than {count}, beyond that one alone"
    yield Row(what, more, "s", many_recordings.ONE_MORE_S)


def full_more_rows(found: Mapping[str, Any]) -> Iterator[Row]:
    """Yield what else was measured."""
    chain = found["full_chain"]
    for name, spread in chain["wall_s"].items():
        yield Row(f"whole chain: {_way(name)}, wall", spread, "s")
        yield Row(f"whole chain: {_way(name)}, CPU", chain["cpu_s"][name], "s")
        yield Row(f"whole chain: {_way(name)}, largest process", chain["peak_mb"][name], "MB")
    for name, spread in chain["times_faster_one_worker"].items():
        yield Row(f"whole chain: {name} script / ours by one worker, wall", spread)
    for precision, spread in chain["bound_s"].items():
        yield Row(f"whole chain: bound, CPU, {precision} precision", spread, "s")
    for stage, spread in chain["bound_stages_s"][full_recipe.DEFAULT].items():
        yield Row(f"of the bound ({full_recipe.DEFAULT} precision): {stage}", spread, "s")
    for part, share in found["full_stages"].items():
        yield Row(f"share of CPU: {part}", share)
    for long in found["full_long"]:
        for workers in ("1", "2"):
            what = f"{_size(long)}, {'one worker' if workers == '1' else 'two workers'}"
            yield Row(f"{what}, wall", long["wall_s"][workers], "s")
            yield Row(f"{what}, largest process", long["peak_mb"][workers], "MB")
        if full_long.SPEED_UP_TARGETS.get(long["asked_hours"]) is None or (
            long["asked_hours"] != long["hours"]
        ):
            yield Row(f"{_size(long)}, one worker / two workers, wall", long["speed_up"])
    many = found["many_recordings"]
    yield Row(f"first run of {many['recordings']} recordings", Spread.of([many["first_s"]]), "s")
    yield Row("one recording alone, as the one more", many["one_alone_s"], "s")
    for own in found["backend_own"]:
        what = f"the backend's own, {own['recordings']} recordings"
        yield Row(what, Spread.of([own["own_s"]]), "s")


def full_facts(found: Mapping[str, Any]) -> dict[str, str]:
    """Return what the page's text says of the whole chain."""
    chain = found["full_chain"]
    cut = [long for long in found["full_long"] if long["asked_hours"] != long["hours"]]
    said = "".join(
        f" The disk had no room for {long['asked_hours']} h: {long['hours']:g} h were measured."
        for long in cut
    )
    return {
        "full_channels": str(chain["channels"]),
        "full_hours": f"{chain['hours']:g}",
        "full_size": f"{chain['size_mb']:.0f}",
        "full_short_s": str(full_chain.SHORT_S),
        "full_apart": f"{max(chain['apart'].values()):.1g}",
        "full_tolerance": f"{full_check.TOLERANCE:g}",
        "full_long": ", ".join(f"{_size(long)}" for long in found["full_long"]),
        "full_cut": said,
        "full_default": full_recipe.DEFAULT,
    }


def _way(name: str) -> str:
    if name == "as given":
        return "ours, a worker a core"
    way, _, precision = name.partition(" ")
    if not precision:
        return f"{way} script"
    return f"{'ours, one worker' if way == 'ours' else 'start alone'} ({precision} precision)"


def _size(long: Mapping[str, Any]) -> str:
    return f"{long['hours']:g} h x {long['channels']} channels"
