"""Filtering and resampling as one response, against the functions in turn and the bound.

Run as a script: ``python tests/benchmarks/fused.py [hours] [channels] [rounds]``. CPU milliseconds
per channel-hour: medians of rounds in which every way takes its turn. All are run by stretches on
signals in memory. The bound is the transforms that must be done, four blocks at once, with
6 s / cut-off of each kept for the response on either side; of the lengths that a case names, the
cheapest.
"""

import json
import statistics
import sys
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[1]))

from chains import borders_s, program_of, run_by_form, run_plainly
from waveassay.contract import Interval, Signal
from waveassay.execute.memory import keep_freed_memory
from waveassay.plan import fusing
from waveassay.plan.program import Program
from waveassay.plan.stretches import STRETCH_S
from waveassay.plan.windows import Form

#: Fused filter and resampling over the bound: what is acceptable, and what would be excellent.
TARGETS = {"acceptable": 3.0, "excellent": 1.6}


@dataclass(frozen=True)
class Case:
    """A chain on samples, and its bound.

    Attributes
    ----------
    kept_s : what of a block is kept for the response, to each side.
    lengths : samples of a block's transform from which the bound takes the cheapest.
    """

    rate_hz: int
    steps: tuple[str, ...]
    kept_s: int
    lengths: tuple[int, ...]


BAND = "filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}"
NOTCH, DOWN = "filter.notch: {line: 50 Hz}", "resample: {rate: 128 Hz}"
CASES = {
    "512 to 128 Hz, 0.5 to 40 Hz": Case(512, (BAND, NOTCH, DOWN), 12, (65_536,)),
    "500 to 128 Hz, 0.5 to 40 Hz": Case(500, (BAND, NOTCH, DOWN), 12, (64_000,)),
    "512 to 128 Hz, from 0.1 Hz": Case(
        512,
        ("filter.butterworth: {high_pass: 0.1 Hz}", DOWN),
        60,
        tuple(65_536 << k for k in range(1, 5)),
    ),
    "512 to 128 Hz, from 0.02 Hz": Case(
        512,
        ("filter.butterworth: {high_pass: 0.02 Hz}", DOWN),
        300,
        tuple(65_536 << k for k in range(3, 7)),
    ),
}
NEW_RATE_HZ = 128


def measure(
    hours: float, channels: int, rounds: int, cases: Iterable[str] = tuple(CASES)
) -> dict[str, Any]:
    """Return milliseconds per channel-hour of each way, ratios, and the error of the fused."""
    keep_freed_memory()  # as every worker does
    found = {name: _compare(CASES[name], hours, channels, rounds) for name in cases}
    return {"hours": hours, "channels": channels, **found}


def _compare(case: Case, hours: float, channels: int, rounds: int) -> dict[str, float]:
    program = program_of(case.steps, case.rate_hz)
    signals = [_signal(hours, case.rate_hz, seed) for seed in range(channels)]
    samples = sum(signal.x.size for signal in signals)
    length = min(case.lengths, key=lambda length: _timed_bound(case, length, samples))
    plain = _one_by_one(program, channels)
    fused = [Form(program, 0) for _ in signals]  # as in a task, each channel has its own
    ways: dict[str, Callable[[], float]] = {
        "fused": lambda: _timed(lambda: _by_stretches(fused, signals)),
        "in turn": lambda: _timed(lambda: _by_stretches(plain, signals)),
        "bound": lambda: _timed_bound(case, length, samples),
    }
    times: dict[str, list[float]] = {name: [] for name in ways}
    for _ in range(rounds + 1):
        for name, way in ways.items():
            times[name].append(way())
    # The first round warms up: designs and gains are made once a process.
    found = {n: 1e3 * statistics.median(v[1:]) / (hours * len(signals)) for n, v in times.items()}
    made = np.concatenate(_by_stretches(fused[:1], signals[:1]))
    expected = run_plainly(program, signals[0]).x
    ratios = [a / b for a, b in zip(times["fused"][1:], times["bound"][1:], strict=True)]
    return {
        **{f"{name}_ms": value for name, value in found.items()},
        "fused_over_bound": statistics.median(ratios),
        "error_over_rms": float(np.max(np.abs(made - expected)) / np.std(signals[0].x)),
    }


def _by_stretches(forms: list[Form], signals: list[Signal]) -> list[np.ndarray[Any, Any]]:
    """Run all channels over a stretch before the next, as tasks do."""
    borders = borders_s(signals[0].piece, forms[0].program, STRETCH_S)
    return [
        run_by_form(form, signal, *pair).x
        for pair in pairwise(borders)
        for form, signal in zip(forms, signals, strict=True)
    ]


def _one_by_one(program: Program, channels: int) -> list[Form]:
    """Return forms in which no step is fused with another."""
    known = fusing.why_not
    fusing.why_not = lambda moves, reach, step_s: "measured one by one"
    try:
        forms = [Form(program, 0) for _ in range(channels)]
        assert all(not unit.fused for form in forms for unit in form.units)
    finally:
        fusing.why_not = known
    return forms


def _timed(way: Callable[[], object]) -> float:
    start = time.process_time()
    way()
    return time.process_time() - start


def _timed_bound(case: Case, length: int, samples: int) -> float:
    """Return how long the transforms of so many samples take, s; of long blocks, a share."""
    from scipy import fft

    made = length * NEW_RATE_HZ // case.rate_hz
    blocks = np.zeros((4, length))
    bins = np.zeros((4, made // 2 + 1), np.complex128)
    gained = 4 * (length - 2 * case.kept_s * case.rate_hz)
    times = max(1, round(samples / gained))

    def transform() -> None:
        for _ in range(times):
            fft.rfft(blocks, axis=-1)
            fft.irfft(bins, n=made, axis=-1)

    return _timed(transform) * samples / (times * gained)


def _signal(hours: float, rate_hz: int, seed: int) -> Signal:
    count = int(hours * 3600 * rate_hz)
    x = 30 * np.random.default_rng(seed).standard_normal(count)
    zero = Fraction(0)
    piece = Interval(zero, Fraction(count, rate_hz))
    return Signal("frontal", "uV", Fraction(rate_hz), zero, x, piece)


def main() -> None:
    """Print what was measured as JSON."""
    given = sys.argv[1:]
    hours = float(given[0]) if given else 2.0
    channels = int(given[1]) if len(given) > 1 else 4
    rounds = int(given[2]) if len(given) > 2 else 7
    print(json.dumps(measure(hours, channels, rounds), indent=1))


if __name__ == "__main__":
    main()
