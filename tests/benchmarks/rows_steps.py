"""Steps on rows against the transforms that they cannot do without, in both precisions.

Run as a script: ``python tests/benchmarks/rows_steps.py [hours] [rounds]``. CPU milliseconds per
channel-hour at 128 Hz: 4 s epochs with 50 % overlap, run by stretches as a worker
runs them, on signals in memory; medians of rounds in which every step takes its turn. The bound is
the transforms alone, of the same precision, on a block that stays in the cache: one for each taper
and epoch, or for each segment of Welch's estimate, which overlapping epochs share.
"""

import json
import statistics
import sys
import time
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[1]))

from chains import borders_s, program_of
from waveassay.contract import Condition, Epochs, Exclusion, Interval, Signal
from waveassay.execute.memory import keep_freed_memory
from waveassay.execute.moves import run_move, starting_in
from waveassay.plan.program import Level, Move
from waveassay.plan.stretches import STRETCH_S

RATE_HZ = 128
PRECISIONS = ("float32", "float64")
_BANDS = (
    "{delta: [0.5 Hz, 4 Hz], theta: [4 Hz, 8 Hz], alpha: [8 Hz, 13 Hz], beta: [13 Hz, 30 Hz], "
    "gamma: [30 Hz, 40 Hz]}"
)
_WITHIN = "within: [0.5 Hz, 40 Hz]"
EPOCHS = "epoch.consecutive: {length: 4 s, overlap: 50 %}"
MULTITAPER = "spectrum.multitaper: {half_bandwidth: 0.75 Hz}"
WELCH = "spectrum.welch: {segment: 2 s}"
SPECTRA = ("multitaper", "welch")
FEATURES = {
    "absolute power": f"feature.band_power: {{bands: {_BANDS}}}",
    "relative power": f"feature.band_power: {{bands: {_BANDS}, express: relative, "
    "relative_to: [0.5 Hz, 40 Hz]}",
    "spectral edge": f"feature.spectral_edge: {{fraction: 95 %, {_WITHIN}}}",
    "median frequency": f"feature.spectral_edge: {{fraction: 50 %, {_WITHIN}}}",
    "entropy": f"feature.spectral_entropy: {{{_WITHIN}}}",
}
#: Over the bound: what is acceptable, and what would be excellent.
TARGETS = {"multitaper": (3.0, 2.2), "welch": (3.0, 2.2)}
#: Milliseconds per channel-hour: all features above together, and epochs with their rows.
TARGETS_MS = {"features": 2.5, "epochs": 0.6}
_EPOCH_S = Fraction(4)
_EPOCH, _STEP, _SEGMENT, _HOP, _TAPERS, _BLOCK = 512, 256, 256, 128, 5, 32

Times = dict[str, float]


def measure(hours: float, rounds: int) -> dict[str, Any]:
    """Return milliseconds per channel-hour of each step, and its ratio to the bound."""
    keep_freed_memory()  # as every worker does
    signals = {name: _signal(hours, name) for name in PRECISIONS}
    times: dict[str, list[Times]] = {name: [] for name in signals}
    for _ in range(rounds + 1):
        for name, signal in signals.items():
            times[name].append(_bounds(signal) | _by_stretches(signal))
    # The first round warms up: tapers and tables are made once a process.
    found = {name: _said(rounds_of[1:], hours) for name, rounds_of in times.items()}
    return {"hours": hours, **found}


def _said(rounds: list[Times], hours: float) -> dict[str, float]:
    for one in rounds:
        one["features"] = sum(one[name] for name in FEATURES)
    found = {
        name: 1e3 * statistics.median(one[name] for one in rounds) / hours for name in rounds[0]
    }
    for name in SPECTRA:
        ratios = [one[name] / one[f"{name} bound"] for one in rounds]
        found[f"{name} over bound"] = statistics.median(ratios)
    return found


def _by_stretches(signal: Signal) -> Times:
    """Return CPU seconds of each step, run one after another over each stretch."""
    moves = _moves()
    times = dict.fromkeys(moves, 0.0)
    for bounds in pairwise(borders_s(signal.piece, program_of([], RATE_HZ), STRETCH_S)):
        values: dict[int, Any] = {0: signal.cut(bounds[0], bounds[1] + _EPOCH_S)}
        for name, move in moves.items():
            assert move.source is not None, "a step takes something"
            start = time.process_time()
            made = starting_in(run_move(move, values[move.source]), bounds)
            if isinstance(made, Epochs):
                assert len(made.rows), "a stretch holds epochs"
            times[name] += time.process_time() - start
            values[move.index] = made
    return times


def _bounds(signal: Signal) -> Times:
    """Return CPU seconds of the transforms of each estimate."""
    epochs = (signal.x.size - _EPOCH) // _STEP + 1
    segments = (signal.x.size - _SEGMENT) // _HOP + 1
    transforms = {"multitaper": (_TAPERS * epochs, _EPOCH), "welch": (segments, _SEGMENT)}
    found = {}
    for name, (count, length) in transforms.items():
        start = time.process_time()
        _bound(count, length, signal.x.dtype)
        found[f"{name} bound"] = time.process_time() - start
    return found


def _moves() -> dict[str, Move]:
    """Return each step as it is planned in a chain."""
    steps = {"epochs": EPOCHS, "multitaper": MULTITAPER, **FEATURES, "welch": WELCH}
    planned = program_of(list(steps.values()), RATE_HZ).moves.values()
    rows = [move for move in planned if move.level is not Level.SAMPLES]
    return dict(zip(steps, rows, strict=False))


def _bound(transforms: int, length: int, kind: np.dtype[Any]) -> None:
    from scipy import fft

    block = np.zeros((_BLOCK * _TAPERS, length), kind)
    for _ in range(-(-transforms // block.shape[0])):
        fft.rfft(block, axis=-1)


def _signal(hours: float, kind: str) -> Signal:
    """Return noise between pink and brown, with a second excluded every three minutes."""
    from scipy import fft

    count = int(hours * 3600 * RATE_HZ)
    transform = fft.rfft(np.random.default_rng(1).standard_normal(count))
    transform /= np.maximum(fft.rfftfreq(count, 1 / RATE_HZ), 0.2) ** 0.75
    x = fft.irfft(transform, count)
    x *= 20 / np.std(x)
    zero, stop = Fraction(0), Fraction(count, RATE_HZ)
    piece = Interval(zero, stop)
    masks = tuple(
        Exclusion(Fraction(at), Fraction(at + 1), "amplitude") for at in range(90, int(stop), 180)
    )
    whole = (Condition(zero, stop, "whole"),)
    return Signal("frontal", "uV", Fraction(RATE_HZ), zero, x.astype(kind), piece, masks, whole)


def main() -> None:
    """Print what was measured as JSON."""
    given = sys.argv[1:]
    hours = float(given[0]) if given else 4.0
    rounds = int(given[1]) if len(given) > 1 else 7
    print(json.dumps(measure(hours, rounds), indent=1))


if __name__ == "__main__":
    main()
