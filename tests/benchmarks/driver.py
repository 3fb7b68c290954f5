"""All measurements one after another, and what becomes of them."""

import argparse
import sys
import time
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from benchmarks import example_run, plain_chain, reader, second_run, start_up
from benchmarks.machine import load, machine
from benchmarks.page import more_rows, page, table, target_rows

PAGE = Path(__file__).with_name("README.md")

_FULL: dict[str, Callable[[], dict[str, Any]]] = {
    "reader": lambda: reader.measure(hours=1, rounds=7),
    "start_up": lambda: start_up.measure(rounds=11),
    "example": lambda: example_run.measure(rounds=5),
    "second_run": lambda: second_run.measure(recordings=200, rounds=5),
    "plain_chain": lambda: plain_chain.measure(hours=1, rounds=11),
}
_QUICK: dict[str, Callable[[], dict[str, Any]]] = {
    "reader": lambda: reader.measure(hours=0.1, rounds=3),
    "start_up": lambda: start_up.measure(rounds=3),
    "example": lambda: example_run.measure(rounds=1, recordings=2),
    "second_run": lambda: second_run.measure(recordings=20, rounds=1),
    "plain_chain": lambda: plain_chain.measure(hours=0.25, rounds=3),
}


def main(arguments: Sequence[str]) -> None:
    """Measure, print the page, and write it where asked."""
    parser = argparse.ArgumentParser(
        prog="python tests/benchmarks/run.py",
        description="Measure speed and memory, as ratios in one run, and print a page of results.",
    )
    form = parser.add_mutually_exclusive_group()
    form.add_argument("--quick", action="store_true", help="a short form, under a minute")
    form.add_argument("--page", action="store_true", help="rewrite tests/benchmarks/README.md")
    asked = parser.parse_args(arguments)
    parts = _QUICK if asked.quick else _FULL
    found: dict[str, Any] = {}
    start, loads = time.perf_counter(), [load()]
    for name, part in parts.items():
        print(f"{time.perf_counter() - start:5.0f} s  {name}", file=sys.stderr, flush=True)
        found[name] = part()
        loads.append(load())
    found["loads"] = loads
    found["took_s"] = time.perf_counter() - start
    if asked.quick:
        print("Short form: less data and fewer rounds than the targets are meant for.\n")
        print(table(target_rows(found), targets=True))
        print(f"\n{table(more_rows(found), targets=False)}")
        return
    text = page(found, machine(), datetime.now(UTC).date().isoformat())
    print(text)
    if asked.page:
        PAGE.write_text(text, encoding="utf-8")
