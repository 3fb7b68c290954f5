"""Lines of the page: what has a target, and what else was measured."""

from collections.abc import Iterator, Mapping
from typing import Any

from benchmarks import example_run, reader, second_run, start_up
from benchmarks.full_rows import full_more_rows, full_target_rows
from benchmarks.rows import Row


def target_rows(found: Mapping[str, Any]) -> Iterator[Row]:
    """Yield what has a target."""
    for kind, limit in reader.TARGETS.items():
        known = found["reader"][kind]
        yield Row(f"decode all of {kind} / plain read", known["decode_all_ratio"], "", limit)
        growth = known["memory_growth_mb"]
        yield Row(f"growth of memory meanwhile, {kind}", growth, "MB", reader.MEMORY_TARGET_MB)
    for name, words in (("help", "`waveassay --help`"), ("check", "`waveassay check`")):
        yield Row(words, found["start_up"]["wall_s"][name], "s", start_up.TARGETS_S[name])
    wall = found["example"]["wall_s"]["two_workers"]
    yield Row("the example, two workers", wall, "s", example_run.TARGET_S)
    again = found["second_run"]["again_s"]
    yield Row("identical second run", again, "s", second_run.TARGET_S)
    yield from full_target_rows(found)


def more_rows(found: Mapping[str, Any]) -> Iterator[Row]:
    """Yield what else was measured."""
    start, example, second = found["start_up"], found["example"], found["second_run"]
    chain = found["plain_chain"]
    for kind in reader.TARGETS:
        known = found["reader"][kind]
        yield Row(f"decode two signals of {kind} / plain read", known["decode_two_ratio"])
    yield Row("`python -c pass`", start["wall_s"]["python"], "s")
    yield Row('`python -c "import numpy"`', start["wall_s"]["numpy"], "s")
    for name, words in (("help", "`--help`"), ("check", "`check`")):
        yield Row(f"{words} / `python -c pass`", start["to_python"][name])
        yield Row(f'{words} / `python -c "import numpy"`', start["to_numpy"][name])
    yield Row("the example, one worker", example["wall_s"]["one_worker"], "s")
    yield Row("the example, in process", example["wall_s"]["in_process"], "s")
    yield Row("the backend's own, wall: one worker - in process", example["backend_s"], "s")
    yield Row("the backend's own, share of one worker's wall", example["backend_share"])
    yield Row("the backend's own, CPU: one worker - in process", example["backend_cpu_s"], "s")
    yield Row("one worker / two workers", example["second_worker"])
    yield Row(
        "the example, two workers, CPU of all processes", example["cpu_s"]["two_workers"], "s"
    )
    yield Row("its largest process", example["peak_mb"]["two_workers"], "MB")
    yield Row("identical second run / first run", second["again_ratio"])
    yield Row("run with one recording more", second["added_s"], "s")
    yield Row("run with one recording more / first run", second["added_ratio"])
    yield Row("plain chain: recipe / script, CPU", chain["ratio"])
    yield Row("plain chain: the recipe's jobs alone / script, CPU", chain["jobs_ratio"])
    yield Row("plain chain: recipe, CPU", chain["cpu_s"]["recipe"], "s")
    yield Row("plain chain: script, CPU", chain["cpu_s"]["script"], "s")
    yield Row("plain chain: recipe, peak memory", chain["peak_mb"]["recipe"], "MB")
    yield Row("plain chain: script, peak memory", chain["peak_mb"]["script"], "MB")
    yield from full_more_rows(found)
