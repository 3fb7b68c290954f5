"""Run a fused group: overlap-save in the middle of a piece, the plain functions at its ends."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import lru_cache
from itertools import groupby
from math import ceil
from typing import Any

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from waveassay.contract import (
    REACH_TOLERANCE,
    Condition,
    Exclusion,
    Floats,
    Interval,
    Signal,
    SignalSpec,
)
from waveassay.execute.moves import gain_move, mask_move, run_move
from waveassay.execute.overlap_save import (
    Decimation,
    Fold,
    apply,
    decimation_of,
    fast_length,
    fold_of,
    support,
)
from waveassay.plan.blocks import BlockGrid, Span
from waveassay.plan.fusing import Unit, ratio_of
from waveassay.plan.program import Move

# Blocks that are transformed at once, which is faster for two than for one: vectors go across rows.
_AT_ONCE = 4


@dataclass(frozen=True)
class Filter:
    """A fused group made ready.

    Attributes
    ----------
    before, after : how far the response reaches, in steps of the grid.
    rest : how far the steps that follow each step look ahead in all, and back, in steps.
    in_step, out_step : samples of input and output in a step of the grid.
    reads : how much input a block has, in samples; zeros follow.
    length : samples in a block, zeros included.
    first, folds : what makes bins of a block's samples, and what follows on the bins.
    """

    grid: BlockGrid
    before: int
    after: int
    rest: tuple[tuple[int, int], ...]
    in_step: int
    out_step: int
    reads: int
    length: int
    first: Fold | Decimation
    folds: tuple[Fold, ...]


def run_unit(unit: Unit, signal: Signal, step_s: Fraction, span: Span, own: Span) -> Signal:
    """Return a fused group's output over a span of its piece.

    Parameters
    ----------
    signal : the input, over at least what `waveassay.plan.windows` says.
    step_s : the step of the grid of stretches.
    span : what is wanted, in steps of the grid from the start of the piece.
    own : what of it is kept.
    """
    piece, grid = signal.piece, unit.grid(step_s)
    start_s = piece.start_s + span[0] * grid.step_s
    stop_s = min(piece.stop_s, piece.start_s + span[1] * grid.step_s)
    ready = made_ready(unit, grid)
    whole = int(piece.length_s // grid.step_s)
    head, tail = ready.before, whole - ready.after
    if tail - head < ready.before + ready.after or not np.isfinite(np.sum(signal.x)):
        return _plain(unit.moves, signal).cut(start_s, stop_s)
    parts: list[Floats] = []
    if span[0] < head:
        parts.append(_head(unit, ready, signal, (span[0], min(span[1], head))))
    if span[0] < tail and span[1] > head:
        parts.extend(_middle(ready, signal, (max(span[0], head), min(span[1], tail)), own))
    if span[1] > tail:
        parts.append(_tail(unit, ready, signal, (max(span[0], tail), span[1])))
    return replace(
        signal,
        x=np.concatenate(parts) if parts else np.empty(0),
        rate_hz=Fraction(ready.out_step) / grid.step_s,
        start_s=start_s,
        excluded=_masks(unit, signal, start_s, stop_s),
    )


def _plain(moves: Sequence[Move], signal: Signal) -> Signal:
    for move in moves:
        made = run_move(move, signal)
        assert isinstance(made, Signal), f"{move.step.name} gives signals"
        signal = made
    return signal


def _head(unit: Unit, ready: Filter, signal: Signal, span: Span) -> Floats:
    """Return the output near the start of the piece, by the plain functions."""
    start_s, step_s = signal.piece.start_s, ready.grid.step_s
    made = replace(signal, excluded=())
    ahead = ready.after
    for move, (following, _) in zip(unit.moves, ready.rest, strict=True):
        # Always the same of it, and no more than the steps that are left look at.
        made = _plain([move], made.cut(start_s, start_s + (ready.before + ahead) * step_s))
        ahead = min(ahead, following)
    return made.cut(start_s + span[0] * step_s, start_s + span[1] * step_s).x


def _tail(unit: Unit, ready: Filter, signal: Signal, span: Span) -> Floats:
    """Return the output near the stop of the piece, likewise."""
    piece, step_s = signal.piece, ready.grid.step_s
    tail = int(piece.length_s // step_s) - ready.after
    made = replace(signal, excluded=())
    back = ready.before
    for move, (_, following) in zip(unit.moves, ready.rest, strict=True):
        made = _plain([move], made.cut(piece.start_s + (tail - back) * step_s, piece.stop_s))
        back = min(back, following)
    return made.cut(piece.start_s + span[0] * step_s, piece.start_s + span[1] * step_s).x


def _middle(ready: Filter, signal: Signal, span: Span, own: Span) -> list[Floats]:
    """Return the output over a span in which neither end of the piece is felt."""
    grid, (low, high) = ready.grid, span
    kept = (min(max(own[0], low), high), min(max(own[1], low), high))
    blocks = grid.covering(span, kept)
    offset = int((signal.start_s - signal.piece.start_s) * signal.rate_hz)
    starts = [grid.border(k) - grid.margin - ready.before for k in blocks]
    parts: list[Floats] = []
    for i in range(0, len(blocks), _AT_ONCE):
        some = starts[i : i + _AT_ONCE]
        rows = _rows(ready, signal, [start * ready.in_step - offset for start in some])
        out = apply(rows, ready.first, ready.folds)
        for k, start, row in zip(blocks[i : i + _AT_ONCE], some, out, strict=True):
            first = low if k == blocks[0] else grid.border(k)
            stop = high if k == blocks[-1] else grid.border(k + 1)
            parts.append(row[(first - start) * ready.out_step : (stop - start) * ready.out_step])
    return parts


def _rows(ready: Filter, signal: Signal, firsts: Sequence[int]) -> Sequence[Floats] | Floats:
    """Return blocks of input that begin at some samples, zeros where the piece has none.

    Where all is there they are views, which overlap: copies cost a tenth of all.
    """
    x, length, apart = signal.x, ready.length, np.diff(firsts)
    inside = firsts[0] >= 0 and firsts[-1] + ready.reads <= x.size
    if inside and ready.reads == length and np.all(apart == apart[:1]):
        several = sliding_window_view(x[firsts[0] :], length)
        return several[:: int(apart[0]) if len(firsts) > 1 else 1][: len(firsts)]
    rows = []
    starts_with_piece = signal.start_s == signal.piece.start_s
    for first in firsts:
        begin, stop = max(0, first), min(first + ready.reads, x.size)
        assert first >= 0 or starts_with_piece, "a block's input is there, or begins with the piece"
        assert stop == first + ready.reads or signal.stop_s == signal.piece.stop_s, "likewise"
        row = x[begin:stop]
        if row.size < length:
            row = np.zeros(length)
            row[begin - first : stop - first] = x[begin:stop]
        rows.append(row)
    return rows


@dataclass(frozen=True)
class _Masked:
    """A group, all of a signal that its masks may depend on (no sample, and no name), and times."""

    group: "_Group"
    start_s: Fraction
    stop_s: Fraction
    unit: str
    rate_hz: Fraction
    first_s: Fraction
    size: int
    piece: Interval
    excluded: tuple[Exclusion, ...]
    conditions: tuple[Condition, ...]


def _masks(
    unit: Unit, signal: Signal, start_s: Fraction, stop_s: Fraction
) -> tuple[Exclusion, ...]:
    """Return masks from start to stop as the plain functions leave them; made once if alike."""
    return _made_masks(
        _Masked(
            _Group(unit),
            start_s,
            stop_s,
            signal.unit,
            signal.rate_hz,
            signal.start_s,
            signal.x.size,
            signal.piece,
            signal.excluded,
            signal.conditions,
        )
    )


@lru_cache(maxsize=4)
def _made_masks(given: _Masked) -> tuple[Exclusion, ...]:
    def blank(count: int) -> Floats:
        return np.broadcast_to(np.float64(0), (count,))

    signal = Signal(
        "",
        given.unit,
        given.rate_hz,
        given.first_s,
        blank(given.size),
        given.piece,
        given.excluded,
        given.conditions,
    )
    for move in given.group.unit.moves:
        signal = mask_move(move, signal)
        ratio = ratio_of(move)
        if ratio != 1:
            count = -(-signal.x.size * ratio.numerator // ratio.denominator)
            signal = signal.with_samples(blank(count), rate_hz=signal.rate_hz * ratio)
    return signal.cut(given.start_s, given.stop_s).excluded


class _Group:
    """A group, known by its steps, their parameters and what they take, but for its name."""

    def __init__(self, unit: Unit) -> None:
        self.unit = unit

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Group) and self.unit.identity == other.unit.identity

    def __hash__(self) -> int:
        return hash(self.unit.identity)


def made_ready(unit: Unit, grid: BlockGrid) -> Filter:
    """Return a group's response in blocks, remembered from the last time."""
    return _made_ready(_Group(unit), grid)


@lru_cache(maxsize=8)
def _made_ready(group: _Group, grid: BlockGrid) -> Filter:
    unit = group.unit
    runs = [list(run) for _, run in groupby(unit.moves, lambda move: ratio_of(move) == 1)]
    before = after = 0
    for run in runs:
        sides = _reach(run, grid)
        before, after = before + sides[0], after + sides[1]
    in_step = _samples(unit.moves[0], grid)
    least = grid.reads(before + after)
    down = _down(unit.moves)
    steps = fast_length(least, in_step // down)
    # What is read for a block by its steps' reaches, which are longer than its own, may fill it.
    fills = steps + unit.before - before <= grid.reads(unit.before + unit.after)
    first, folds = _applied(unit.moves, steps * in_step, down)
    return Filter(
        grid,
        before,
        after,
        _rest(unit.moves, grid),
        in_step,
        (first, *folds)[-1].length_out // steps,
        (steps if fills else least) * in_step,
        steps * in_step,
        first,
        folds,
    )


def _applied(
    moves: Sequence[Move], length: int, down: int
) -> tuple[Fold | Decimation, tuple[Fold, ...]]:
    """Return what makes the bins of a block of samples, and what follows on them."""
    first: Decimation | None = None
    folds: list[Fold] = []
    waiting: list[Move] = []
    rate_hz = _rate_hz(moves[0])
    for move in moves:
        ratio = ratio_of(move)
        if ratio == 1:
            waiting.append(move)
            continue
        if down > 1 and first is None:
            first = decimation_of(length, down, gain_of([*waiting, move], length, rate_hz))
            length = first.length_out
        else:
            between = gain_of([move], length * ratio.numerator, rate_hz * ratio.numerator)
            after_it = np.ones(length * ratio.numerator // ratio.denominator // 2 + 1)
            before_it = gain_of(waiting, length, rate_hz)
            folds.append(fold_of(length, ratio, before_it, between, after_it))
            length = folds[-1].length_out
        rate_hz, waiting = rate_hz * ratio, []
    if waiting or (first is None and not folds):
        ones = np.ones(length // 2 + 1)
        folds.append(fold_of(length, Fraction(1), gain_of(waiting, length, rate_hz), ones, ones))
    return first or folds[0], tuple(folds if first else folds[1:])


def _down(moves: Sequence[Move]) -> int:
    """Return D where the first change of rate is by 1 / D, and otherwise 1."""
    ratios = (ratio_of(move) for move in moves)
    ratio = next((ratio for ratio in ratios if ratio != 1), Fraction(1))
    return ratio.denominator if ratio.numerator == 1 else 1


def _rest(moves: Sequence[Move], grid: BlockGrid) -> tuple[tuple[int, int], ...]:
    """Return for each step how far those that follow it look ahead in all, and back."""
    rest = []
    ahead = back = 0
    for move in reversed(moves):
        rest.append((ahead, back))
        reach = move.reach()
        ahead += ceil(reach.after_s / grid.step_s)
        back += ceil(reach.before_s / grid.step_s)
    return tuple(reversed(rest))


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


def _rate_hz(move: Move) -> Fraction:
    assert isinstance(move.spec_in, SignalSpec), "a fused step takes a signal"
    rate_hz = move.spec_in.rate_hz
    assert rate_hz is not None, "rates are known before anything is run"
    return rate_hz


def _samples(move: Move, grid: BlockGrid) -> int:
    return int(_rate_hz(move) * grid.step_s)
