"""All measurements one after another, and what becomes of them."""

import argparse
import sys
import time
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from typing import Any

from benchmarks import (
    backend_own,
    example_run,
    figure,
    full_chain,
    full_check,
    full_long,
    full_recipe,
    full_sizes,
    full_stages,
    gate,
    many_recordings,
    plain_chain,
    reader,
    second_run,
    stage_ratios,
    start_up,
)
from benchmarks.machine import load, machine
from benchmarks.page import PAGE, README, page, with_table
from benchmarks.page_rows import more_rows, target_rows
from benchmarks.rows import table

Parts = dict[str, Callable[[], Any]]

_FULL: Parts = {
    "reader": lambda: reader.measure(hours=1, rounds=7),
    "start_up": lambda: start_up.measure(rounds=11),
    "example": lambda: example_run.measure(rounds=5),
    "second_run": lambda: second_run.measure(recordings=200, rounds=5),
    "plain_chain": lambda: plain_chain.measure(hours=1, rounds=11),
    "full_chain": lambda: full_chain.measure(32, 7200, rounds=5, loop_rounds=3),
    "psd_errors": lambda: _psd_errors(length_s=900),
    "stage_ratios": lambda: stage_ratios.measure(hours=1, rounds=3, times=3),
    "full_stages": lambda: full_stages.measure(32, 3600, rounds=3),
    "full_sizes": lambda: full_sizes.measure([(1, 0.5), (4, 0.5), (16, 0.5)], rounds=3),
    "full_long": lambda: full_long.measure({4: 3, 24: 1}),
    "many_recordings": lambda: many_recordings.measure(recordings=5000, rounds=3),
    "backend_own": lambda: backend_own.measure({1: 5, 10: 5, 100: 3, 1000: 1}),
}
_QUICK: Parts = {
    "reader": lambda: reader.measure(hours=0.1, rounds=3),
    "start_up": lambda: start_up.measure(rounds=3),
    "example": lambda: example_run.measure(rounds=1, recordings=2),
    "second_run": lambda: second_run.measure(recordings=20, rounds=1),
    "plain_chain": lambda: plain_chain.measure(hours=0.25, rounds=3),
    "full_chain": lambda: full_chain.measure(4, 1800, rounds=2, loop_rounds=1),
    "psd_errors": lambda: _psd_errors(length_s=300),
    "stage_ratios": lambda: stage_ratios.measure(hours=0.25, rounds=1, times=2),
    "full_stages": lambda: full_stages.measure(4, 1800, rounds=1),
    "full_sizes": lambda: full_sizes.measure([(1, 0.1), (2, 0.25)], rounds=1),
    "full_long": lambda: full_long.measure({1: 1}, channels=8),
    "many_recordings": lambda: many_recordings.measure(recordings=20, rounds=1),
    "backend_own": lambda: backend_own.measure({1: 1, 10: 1}),
}


def main(arguments: Sequence[str]) -> None:
    """Measure, print the page, and write it, its figure and the README's table where asked."""
    parser = argparse.ArgumentParser(
        prog="python tests/benchmarks/run.py",
        description="Measure speed and memory, as ratios in one run, and print a page of results.",
    )
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--quick", action="store_true", help="a short form of two minutes")
    form.add_argument(
        "--gate",
        action="store_true",
        help="a short form that fails when a ratio is not acceptable",
    )
    form.add_argument(
        "--page",
        action="store_true",
        help="rewrite tests/benchmarks/README.md, its figure and the README's table",
    )
    asked = parser.parse_args(arguments)
    if asked.gate:
        gate.main()
    found = _measured(_QUICK if asked.quick else _FULL)
    if asked.quick:
        print("Short form: less data and fewer rounds than the targets are meant for.\n")
        print(table(target_rows(found), targets=True))
        print(f"\n{table(more_rows(found), targets=False)}")
        return
    text = page(found, machine(), datetime.now(UTC).date().isoformat())
    print(text)
    if asked.page:
        PAGE.write_text(text, encoding="utf-8")
        figure.draw(found, PAGE.with_name("cost.png"))
        readme = README.read_text(encoding="utf-8")
        README.write_text(with_table(readme, text), encoding="utf-8")


def _measured(parts: Parts) -> dict[str, Any]:
    found: dict[str, Any] = {}
    start, loads = time.perf_counter(), [load()]
    for name, part in parts.items():
        print(f"{time.perf_counter() - start:5.0f} s  {name}", file=sys.stderr, flush=True)
        found[name] = part()
        loads.append(load())
    return {**found, "loads": loads, "took_s": time.perf_counter() - start}


def _psd_errors(length_s: int) -> dict[str, dict[str, float]]:
    return {p: full_check.psd_errors(p, length_s=length_s) for p in full_recipe.PRECISIONS}
