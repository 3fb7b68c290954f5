"""Cuts each condition into consecutive epochs of equal length, with or without overlap."""

from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import floor
from typing import Annotated, Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Bools,
    Derived,
    Epochs,
    EpochsSpec,
    Exclusion,
    Findings,
    Ints,
    Kind,
    Params,
    Reach,
    Seconds,
    Share,
    Signal,
    SignalSpec,
    Stage,
    exact,
)


class ConsecutiveParams(Params):
    """Parameters of `consecutive`."""

    length: Annotated[Seconds, Field(gt=0)] = Field(
        description="Length of an epoch; rounded to whole samples."
    )
    overlap: Annotated[Share, Field(ge=0, lt=1)] = Field(
        default=0.0,
        description="Share of an epoch that the next one has too; the step from one to the next "
        "is rounded to whole samples.",
    )
    anchor: Literal["piece", "condition"] = Field(
        default="piece",
        description="Where the grid of epochs begins. piece: with each piece of the recording, so "
        "that overlapping conditions share epochs; condition: with each condition, or with the "
        "piece where that begins later.",
    )
    ignore: tuple[str, ...] = Field(
        default=(),
        description="Reasons of exclusion that do not count, such as edge.",
    )
    allow_excluded: Annotated[Share, Field(ge=0, lt=1)] = Field(
        default=0.0,
        description="Share of an epoch that may be excluded; with more it is not kept.",
    )


@dataclass(frozen=True)
class Span:
    """Places of samples, counted from the piece's start: start included and stop not."""

    start: int
    stop: int


def epoch_starts(within: Span, anchor: int, length: int, step: int) -> Ints:
    """Return where the epochs of a grid begin that lie entirely within a span.

    Epoch k takes the samples from ``anchor + k * step``, k not negative, for ``length`` samples.

    Parameters
    ----------
    within : where epochs may lie.
    anchor : place of the grid's first epoch.
    length, step : samples, at least 1.

    Returns
    -------
    Places of first samples, rising, shape (epochs,).
    """
    first = max(0, -(-(within.start - anchor) // step))
    count = max(0, (within.stop - length - anchor) // step - first + 1)
    return anchor + step * (first + np.arange(count, dtype=np.int64))


def masked_samples(starts: Ints, length: int, masks: Iterable[Span]) -> Ints:
    """Return how many samples of each epoch lie in any of the masks, shape (epochs,)."""
    joined: list[list[int]] = []
    for mask in sorted(masks, key=lambda span: span.start):
        if joined and mask.start <= joined[-1][1]:
            joined[-1][1] = max(joined[-1][1], mask.stop)
        elif mask.start < mask.stop:
            joined.append([mask.start, mask.stop])
    if not joined:
        return np.zeros(starts.size, np.int64)
    edges = np.array(joined, np.int64)
    # Masked samples ahead of a place: it rises by one a sample within a mask, else stands still.
    ahead = np.zeros(edges.shape, np.int64)
    ahead[:, 1] = np.cumsum(edges[:, 1] - edges[:, 0])
    ahead[1:, 0] = ahead[:-1, 1]
    knots, values = edges.ravel(), ahead.ravel()
    found = np.interp(starts + length, knots, values) - np.interp(starts, knots, values)
    return np.asarray(found, np.int64)


def judge(
    starts: Ints, length: int, masks: dict[str, list[Span]], allowed: Fraction
) -> tuple[Bools, tuple[str, ...]]:
    """Tell which epochs are kept, and why the others are not.

    Parameters
    ----------
    masks : reason -> masked samples.
    allowed : share of an epoch that may be masked, by whatever reason.

    Returns
    -------
    One truth value, and one text an epoch: the reasons in alphabetical order, joined by ``; ``.
    """
    if not masks:
        return np.ones(starts.size, np.bool_), ("",) * starts.size
    every = [span for spans in masks.values() for span in spans]
    kept = masked_samples(starts, length, every) <= floor(allowed * length)
    texts = [""] * starts.size
    lost = np.flatnonzero(~kept)
    for reason in sorted(masks) if lost.size else ():
        touched = masked_samples(starts[lost], length, masks[reason]) > 0
        for index in lost[touched].tolist():
            texts[index] = f"{texts[index]}; {reason}" if texts[index] else reason
    return kept, tuple(texts)


def _samples(params: ConsecutiveParams, rate_hz: Fraction) -> tuple[int, int]:
    return _length_and_step(params.length, params.overlap, rate_hz)


@lru_cache(maxsize=64)
def _length_and_step(length_s: float, overlap: float, rate_hz: Fraction) -> tuple[int, int]:
    length = exact(length_s) * rate_hz
    step = length * (1 - exact(overlap))
    return max(1, round(length)), max(1, round(step))


def spec(params: ConsecutiveParams, given: SignalSpec, findings: Findings) -> EpochsSpec:
    """Return the epochs, with the length and step that whole samples give."""
    length_s, step_s = exact(params.length), exact(params.length) * (1 - exact(params.overlap))
    if given.rate_hz is None:
        return EpochsSpec(given, float(length_s), float(step_s))
    length, step = _samples(params, given.rate_hz)
    for name, wanted_s, samples in (("length", length_s, length), ("overlap", step_s, step)):
        if samples != wanted_s * given.rate_hz:
            what = "epoch" if name == "length" else "step from one epoch to the next"
            findings.warn(
                f"at {float(given.rate_hz):.10g} Hz the {what} of {float(wanted_s):.10g} s is no "
                f"whole number of samples; {float(samples / given.rate_hz):.10g} s is taken",
                name,
            )
    return EpochsSpec(given, float(length / given.rate_hz), float(step / given.rate_hz))


def context(params: ConsecutiveParams, given: SignalSpec) -> Reach:
    """Return one epoch ahead: an epoch is known once its last sample is."""
    if given.rate_hz is None:
        raise ValueError("the rate must be known")
    return Reach(Fraction(0), _samples(params, given.rate_hz)[0] / given.rate_hz)


def run(params: ConsecutiveParams, signal: Signal) -> Epochs:
    """Return the epochs that lie entirely in a condition and in the samples given.

    Sorted by start, then by the order of the conditions. An epoch is kept when no more of it than
    ``allow_excluded`` touches masked time.

    Raises
    ------
    ValueError
        When the samples do not lie on the grid that begins with their piece.
    """
    origin_s, rate_hz = signal.piece.start_s, signal.rate_hz
    offset = (signal.start_s - origin_s) * rate_hz
    if offset.denominator != 1:
        raise ValueError(
            f"epoch.consecutive: the part starts {offset} samples after its piece; it must start "
            "on a whole sample"
        )
    here = Span(int(offset), int(offset) + signal.x.size)
    length, step = _samples(params, rate_hz)
    groups = []
    for condition in signal.conditions:
        begins = _ceil(condition.start_s, origin_s, rate_hz)
        within = Span(
            max(here.start, begins),
            min(here.stop, _floor(condition.stop_s, origin_s, rate_hz)),
        )
        anchor = max(0, begins) if params.anchor == "condition" else 0
        groups.append(epoch_starts(within, anchor, length, step))
    names = tuple(condition.name for condition in signal.conditions)
    if len(groups) == 1:
        (starts,) = groups
        owners = names * starts.size
    else:
        starts = np.concatenate(groups) if groups else np.empty(0, np.int64)
        owner = np.repeat(np.arange(len(groups)), [group.size for group in groups])
        order = np.lexsort((owner, starts))
        starts = starts[order]
        owners = tuple(map(names.__getitem__, owner[order].tolist()))
    masks: dict[str, list[Span]] = {}
    for item in signal.excluded:
        if item.reason not in params.ignore:
            masks.setdefault(item.reason, []).append(_touched(item, origin_s, rate_hz))
    kept, reasons = judge(starts, length, masks, exact(params.allow_excluded))
    return Epochs(
        signal=signal,
        length=length,
        first=starts - here.start,
        condition=owners,
        kept=kept,
        reason=reasons,
    )


def _touched(item: Exclusion, origin_s: Fraction, rate_hz: Fraction) -> Span:
    """Return the samples that masked time touches; a sample lasts until the next."""
    return Span(_floor(item.start_s, origin_s, rate_hz), _ceil(item.stop_s, origin_s, rate_hz))


def _floor(time_s: Fraction, origin_s: Fraction, rate_hz: Fraction) -> int:
    """Return ``floor((time - origin) * rate)``."""
    ahead, each = _ratio(time_s, origin_s, rate_hz)
    return ahead // each


def _ceil(time_s: Fraction, origin_s: Fraction, rate_hz: Fraction) -> int:
    ahead, each = _ratio(time_s, origin_s, rate_hz)
    return -(-ahead // each)


def _ratio(time_s: Fraction, origin_s: Fraction, rate_hz: Fraction) -> tuple[int, int]:
    """Return ``(time - origin) * rate`` as two whole numbers, which are quicker."""
    time, per_time = time_s.as_integer_ratio()
    origin, per_origin = origin_s.as_integer_ratio()
    rate, per_rate = rate_hz.as_integer_ratio()
    return (time * per_origin - origin * per_time) * rate, per_time * per_origin * per_rate


def derive(params: ConsecutiveParams, given: SignalSpec) -> list[Derived]:
    """Return length and step of the epochs in samples."""
    if given.rate_hz is None:
        return []
    length, step = _samples(params, given.rate_hz)
    return [Derived("length", length, "samples"), Derived("step", step, "samples")]


STAGE = Stage(
    name="epoch.consecutive",
    version=1,
    params=ConsecutiveParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.EPOCHS,
    spec=spec,
    run=run,
    context=context,
    derive=derive,
    example={"length": "4 s", "overlap": "50 %"},
)
