"""Filtering and resampling as one response, against the functions in turn and the bound.

Run as a script: ``python tests/benchmarks/fused.py [hours] [channels] [rounds]``. CPU milliseconds
per channel-hour from 512 Hz: medians of rounds in which every way takes its turn. All are run by
stretches on signals in memory. The bound is the transforms that must be done, as they are
cheapest: four blocks of 65,536 samples at once, 12 s of each kept for the response on either side.
"""

import json
import statistics
import sys
import time
from collections.abc import Callable
from fractions import Fraction
from itertools import pairwise
from typing import Any

import numpy as np

from chains import borders_s, program_of, run_by_form, run_plainly
from waveassay.contract import Interval, Signal
from waveassay.plan import fusing
from waveassay.plan.program import Program

RATE_HZ = 512
#: Fused filter and resampling over the bound: what is acceptable, and what would be excellent.
TARGETS = {"acceptable": 3.0, "excellent": 1.6}
BAND = "filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}"
CHAINS = {
    "band-pass, resample": [BAND, "resample: {rate: 128 Hz}"],
    "band-pass, notch, resample": [BAND, "filter.notch: {line: 50 Hz}", "resample: {rate: 128 Hz}"],
}
_BLOCK, _HALF = 65_536, 6144


def measure(hours: float, channels: int, rounds: int) -> dict[str, Any]:
    """Return milliseconds per channel-hour of each way, ratios, and the error of the fused."""
    signals = [_signal(hours, seed) for seed in range(channels)]
    return {
        "hours": hours,
        "channels": channels,
        **{name: _compare(program_of(steps, RATE_HZ), signals, rounds, hours)
           for name, steps in CHAINS.items()},
    }  # fmt: skip


def _compare(
    program: Program, signals: list[Signal], rounds: int, hours: float
) -> dict[str, float]:
    ways: dict[str, Callable[[], object]] = {
        "fused": lambda: [_by_stretches(program, signal) for signal in signals],
        "in turn": lambda: _in_turn(program, signals),
        "bound": lambda: _bound(sum(signal.x.size for signal in signals)),
    }
    times: dict[str, list[float]] = {name: [] for name in ways}
    for _ in range(rounds + 1):
        for name, way in ways.items():
            start = time.process_time()
            way()
            times[name].append(time.process_time() - start)
    # The first round warms up: designs and gains are made once a process.
    found = {n: 1e3 * statistics.median(v[1:]) / (hours * len(signals)) for n, v in times.items()}
    made = np.concatenate(_by_stretches(program, signals[0]))
    expected = run_plainly(program, signals[0]).x
    ratios = [a / b for a, b in zip(times["fused"][1:], times["bound"][1:], strict=True)]
    return {
        **{f"{name}_ms": value for name, value in found.items()},
        "fused_over_bound": statistics.median(ratios),
        "error_over_rms": float(np.max(np.abs(made - expected)) / np.std(signals[0].x)),
    }


def _by_stretches(program: Program, signal: Signal) -> list[np.ndarray[Any, Any]]:
    borders = borders_s(signal.piece, program, Fraction(600))
    return [run_by_form(program, signal, *pair).x for pair in pairwise(borders)]


def _in_turn(program: Program, signals: list[Signal]) -> None:
    known = fusing.why_not
    fusing.why_not = lambda moves, reach, step_s: "measured one by one"
    try:
        for signal in signals:
            _by_stretches(program, signal)
    finally:
        fusing.why_not = known


def _bound(samples: int) -> None:
    from scipy import fft

    blocks = np.zeros((4, _BLOCK))
    bins = np.zeros((4, _BLOCK // 8 + 1), np.complex128)
    for _ in range(-(-samples // (4 * (_BLOCK - 2 * _HALF)))):
        fft.rfft(blocks, axis=-1)
        fft.irfft(bins, n=_BLOCK // 4, axis=-1)


def _signal(hours: float, seed: int) -> Signal:
    count = int(hours * 3600 * RATE_HZ)
    x = 30 * np.random.default_rng(seed).standard_normal(count)
    zero = Fraction(0)
    piece = Interval(zero, Fraction(count, RATE_HZ))
    return Signal("frontal", "uV", Fraction(RATE_HZ), zero, x, piece)


def main() -> None:
    """Print what was measured as JSON."""
    given = sys.argv[1:]
    hours = float(given[0]) if given else 2.0
    channels = int(given[1]) if len(given) > 1 else 1
    rounds = int(given[2]) if len(given) > 2 else 7
    print(json.dumps(measure(hours, channels, rounds), indent=1))


if __name__ == "__main__":
    main()
