"""Run a fused group: overlap-save in the middle of a piece, the plain functions at its ends."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import lru_cache
from itertools import groupby
from math import ceil
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import REACH_TOLERANCE, Floats, Signal, SignalSpec
from waveassay.execute.moves import gain_move, mask_move, run_move
from waveassay.execute.overlap_save import Fold, apply, fast_length, fold_of, support
from waveassay.plan.blocks import BlockGrid, Span
from waveassay.plan.fusing import Unit, ratio_of
from waveassay.plan.program import Move

# Samples in the blocks that are transformed at once: what a core's memory takes.
_AT_ONCE = 1 << 20


@dataclass(frozen=True)
class Filter:
    """A fused group made ready.

    Attributes
    ----------
    before, after : how far the response reaches, in steps of the grid.
    in_step, out_step : samples of input and output in a step of the grid.
    length : samples in a block's transform.
    """

    grid: BlockGrid
    before: int
    after: int
    in_step: int
    out_step: int
    length: int
    folds: tuple[Fold, ...]


def run_unit(unit: Unit, signal: Signal, grid: BlockGrid, span: Span, own: Span) -> Signal:
    """Return a fused group's output over a span of its piece.

    Parameters
    ----------
    signal : the input, over at least what `waveassay.plan.windows` says.
    span : what is wanted, in steps of the grid from the start of the piece.
    own : what of it is kept.
    """
    piece = signal.piece
    start_s = piece.start_s + span[0] * grid.step_s
    stop_s = min(piece.stop_s, piece.start_s + span[1] * grid.step_s)
    ready = made_ready(unit, grid)
    whole = int(piece.length_s // grid.step_s)
    head, tail = ready.before, whole - ready.after
    if tail - head < ready.before + ready.after or not np.isfinite(np.sum(signal.x)):
        return _plain(unit.moves, signal).cut(start_s, stop_s)
    parts: list[Floats] = []
    if span[0] < head:
        stop = piece.start_s + (head + ready.after) * grid.step_s
        made = _plain(unit.moves, signal.cut(piece.start_s, stop))
        parts.append(_within(made, grid, span[0], min(span[1], head)))
    if span[0] < tail and span[1] > head:
        parts.extend(_middle(ready, signal, (max(span[0], head), min(span[1], tail)), own))
    if span[1] > tail:
        start = piece.start_s + (tail - ready.before) * grid.step_s
        made = _plain(unit.moves, signal.cut(start, piece.stop_s))
        parts.append(_within(made, grid, max(span[0], tail), span[1]))
    masked = _masked(unit.moves, signal)
    made = replace(
        masked,
        x=np.concatenate(parts),
        rate_hz=Fraction(ready.out_step) / grid.step_s,
        start_s=start_s,
    )
    return made.cut(start_s, stop_s)


def _plain(moves: Sequence[Move], signal: Signal) -> Signal:
    for move in moves:
        made = run_move(move, signal)
        assert isinstance(made, Signal), f"{move.step.name} gives signals"
        signal = made
    return signal


def _within(signal: Signal, grid: BlockGrid, low: int, high: int) -> Floats:
    start_s = signal.piece.start_s
    return signal.cut(start_s + low * grid.step_s, start_s + high * grid.step_s).x


def _masked(moves: Sequence[Move], signal: Signal) -> Signal:
    """Return the input with its masks as the plain functions leave them, and some samples."""
    for move in moves:
        signal = mask_move(move, signal)
        ratio = ratio_of(move)
        if ratio != 1:
            count = -(-signal.x.size * ratio.numerator // ratio.denominator)
            blank = np.broadcast_to(np.float64(0), (count,))
            signal = signal.with_samples(blank, rate_hz=signal.rate_hz * ratio)
    return signal


def _middle(ready: Filter, signal: Signal, span: Span, own: Span) -> list[Floats]:
    """Return the output over a span in which neither end of the piece is felt."""
    grid, (low, high) = ready.grid, span
    kept = (min(max(own[0], low), high), min(max(own[1], low), high))
    blocks = grid.covering(span, kept)
    reads = grid.reads(ready.before + ready.after) * ready.in_step
    offset = int((signal.start_s - signal.piece.start_s) * signal.rate_hz)
    at_once = max(1, min(4, _AT_ONCE // ready.length))
    parts: list[Floats] = []
    for some in (blocks[i : i + at_once] for i in range(0, len(blocks), at_once)):
        rows = np.empty((len(some), ready.length))
        starts = [grid.border(k) - grid.margin - ready.before for k in some]
        for row, start in zip(rows, starts, strict=True):
            first = start * ready.in_step - offset
            stop = min(first + reads, signal.x.size)
            assert first >= 0 or offset == 0, "a block's input is there, or begins with the piece"
            assert stop == first + reads or signal.stop_s == signal.piece.stop_s, "likewise its end"
            begin = max(0, first)
            row[: begin - first] = 0
            row[begin - first : stop - first] = signal.x[begin:stop]
            row[stop - first :] = 0
        out = apply(rows, ready.folds)
        for k, start, row in zip(some, starts, out, strict=True):
            first = low if k == blocks[0] else grid.border(k)
            stop = high if k == blocks[-1] else grid.border(k + 1)
            parts.append(row[(first - start) * ready.out_step : (stop - start) * ready.out_step])
    return parts


def made_ready(unit: Unit, grid: BlockGrid) -> Filter:
    """Return a group's response in blocks, remembered from the last time."""
    return _made_ready(_Known(unit, grid))


class _Known:
    """A group, known by its steps, their parameters and what they take, but for its name."""

    def __init__(self, unit: Unit, grid: BlockGrid) -> None:
        self.unit, self.grid = unit, grid
        steps = [
            (m.step.stage.name, m.step.stage.version, m.step.params.model_dump_json(), _given(m))
            for m in unit.moves
        ]
        self.key: tuple[Any, ...] = (*steps, grid, unit.before, unit.after)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Known) and self.key == other.key

    def __hash__(self) -> int:
        return hash(self.key)


@lru_cache(maxsize=8)
def _made_ready(known: _Known) -> Filter:
    unit, grid = known.unit, known.grid
    runs = [list(run) for _, run in groupby(unit.moves, lambda move: ratio_of(move) == 1)]
    before = after = 0
    for run in runs:
        sides = _reach(run, grid)
        before, after = before + sides[0], after + sides[1]
    in_step = _samples(unit.moves[0], grid)
    steps = fast_length(grid.reads(before + after), in_step)
    folds: list[Fold] = []
    waiting: list[Move] = []
    rate_hz = _rate_hz(unit.moves[0])
    length = steps * in_step
    for move in unit.moves:
        ratio = ratio_of(move)
        if ratio == 1:
            waiting.append(move)
            continue
        between = gain_of([move], length * ratio.numerator, rate_hz * ratio.numerator)
        after_it = np.ones(length * ratio.numerator // ratio.denominator // 2 + 1)
        folds.append(fold_of(length, ratio, gain_of(waiting, length, rate_hz), between, after_it))
        length, rate_hz, waiting = folds[-1].length_out, rate_hz * ratio, []
    if waiting or not folds:
        ones = np.ones(length // 2 + 1)
        folds.append(fold_of(length, Fraction(1), gain_of(waiting, length, rate_hz), ones, ones))
    return Filter(grid, before, after, in_step, length // steps, steps * in_step, tuple(folds))


def gain_of(moves: Sequence[Move], length: int, rate_hz: Fraction) -> NDArray[Any]:
    """Return the product of some steps' gains in the bins of a block, at one rate."""
    freq_hz = np.arange(length // 2 + 1, dtype=np.float64) * float(rate_hz / length)
    total: NDArray[Any] = np.ones(freq_hz.shape)
    for move in moves:
        total = total * gain_move(move, freq_hz)
    return total


def _reach(run: Sequence[Move], grid: BlockGrid) -> tuple[int, int]:
    """Return how far some steps at one rate reach, in steps of the grid.

    Their reaches add up to far more than what their response shows of itself, where it can be seen.
    """
    reaches = [move.reach() for move in run]
    before = sum(ceil(reach.before_s / grid.step_s) for reach in reaches)
    after = sum(ceil(reach.after_s / grid.step_s) for reach in reaches)
    if any(ratio_of(move) != 1 for move in run):
        return before, after
    in_step, rate_hz = _samples(run[0], grid), _rate_hz(run[0])
    length = fast_length(2 * (before + after + 1), in_step) * in_step
    gain, longest = gain_of([], length, rate_hz), (0, 0)
    # What a step does at an end of a piece is felt through it and those that follow, which may be
    # longer than through all of them.
    for move in reversed(run):
        gain = gain * gain_of([move], length, rate_hz)
        past, future = support(gain, length, REACH_TOLERANCE)
        longest = max(longest[0], past), max(longest[1], future)
    return min(before, -(-longest[0] // in_step)), min(after, -(-longest[1] // in_step))


def _given(move: Move) -> SignalSpec:
    assert isinstance(move.spec_in, SignalSpec), "a fused step takes a signal"
    return replace(move.spec_in, name="")


def _rate_hz(move: Move) -> Fraction:
    rate_hz = _given(move).rate_hz
    assert rate_hz is not None, "rates are known before anything is run"
    return rate_hz


def _samples(move: Move, grid: BlockGrid) -> int:
    return int(_rate_hz(move) * grid.step_s)
