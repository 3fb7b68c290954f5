"""Run a stage as the engine does: whole, by stretches, on some rows; and compare what comes out."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import fields, is_dataclass, replace
from fractions import Fraction
from itertools import pairwise
from math import gcd, lcm
from typing import Any

import numpy as np

from waveassay.contract.kinds import (
    Data,
    Epochs,
    Features,
    Ints,
    Rows,
    Signal,
    Spectra,
    merged,
)
from waveassay.contract.params import Params
from waveassay.contract.spec import Findings, SignalSpec, Spec
from waveassay.contract.stage import Stage, Whole

InRows = Epochs | Spectra | Features


class Refused(ValueError):
    """The stage refuses what it is given."""


def announced(stage: Stage, params: Params, spec_in: Spec) -> Spec:
    """Return what the stage says will come out.

    Raises
    ------
    Refused
        With the stage's own messages, when it refuses.
    """
    refusals: list[str] = []

    def refuse(message: str, at: str) -> None:
        refusals.append(f"{at}: {message}" if at else message)

    try:
        spec_out = stage.spec(params, spec_in, Findings(refuse, lambda message, at: None))
    except (AttributeError, TypeError) as error:
        raise AssertionError(
            f"{stage.name}: its spec fails when given a {type(spec_in).__name__}, as its 'takes' "
            f"says: {type(error).__name__}: {error}"
        ) from error
    if refusals:
        raise Refused("; ".join(refusals))
    return spec_out


def run_whole(stage: Stage, params: Params, data: Data) -> Any:
    """Return the stage's output for data given at once."""
    context = stage.context
    if isinstance(context, Whole):
        state = context.combine(params, [context.collect(params, data)])
        return state if context.apply is None else context.apply(params, data, state)
    assert stage.run is not None, f"{stage.name} has nothing to run: write run=run"
    return stage.run(params, data)


def run_by_stretches(
    stage: Stage, params: Params, signal: Signal, stretch_s: Fraction, spec_in: SignalSpec
) -> Signal | Epochs:
    """Return the output of a stage that declares a reach, run by stretches and joined.

    Each stretch is given with the declared context on either side and no more; what comes out is
    cut to the stretch, and epochs to those that start in it. Stretches begin where both the old
    and the new rate have a sample.
    """
    assert stage.run is not None, f"{stage.name} has a reach, and nothing to run"
    assert callable(stage.context), f"{stage.name} declares no reach"
    reach = stage.context(params, spec_in)
    spec_out = announced(stage, params, spec_in)
    rates = [signal.rate_hz]
    if isinstance(spec_out, SignalSpec) and spec_out.rate_hz is not None:
        rates.append(spec_out.rate_hz)
    piece, step_s = signal.piece, common_step_s(rates)

    def aligned(time_s: Fraction) -> Fraction:
        inside_s = max(Fraction(0), time_s - piece.start_s)
        return piece.start_s + inside_s // step_s * step_s

    count = max(1, int(piece.length_s // stretch_s))
    borders = [aligned(piece.start_s + k * stretch_s) for k in range(count)] + [piece.stop_s]
    parts: list[Signal | Epochs] = []
    for start_s, stop_s in pairwise(borders):
        window_stop_s = min(piece.stop_s, stop_s + reach.after_s)
        part = signal.cut(aligned(start_s - reach.before_s), window_stop_s)
        out = stage.run(params, part)
        if isinstance(out, Signal):
            parts.append(out.cut(start_s, stop_s))
        elif isinstance(out, Epochs):
            parts.append(out.starting_in(start_s, stop_s))
        else:
            raise TypeError(f"{stage.name} has a reach, and gives {type(out).__name__}")
    return _joined(parts, signal)


def common_step_s(rates_hz: Sequence[Fraction]) -> Fraction:
    """Return the shortest time that is a whole number of samples at each of the rates."""
    return Fraction(
        lcm(*(rate.denominator for rate in rates_hz)), gcd(*(rate.numerator for rate in rates_hz))
    )


def _joined(parts: Sequence[Signal | Epochs], whole: Signal) -> Signal | Epochs:
    signals = [part for part in parts if isinstance(part, Signal)]
    if signals:
        masks = merged(item for part in signals for item in part.excluded)
        return replace(signals[0], x=np.concatenate([s.x for s in signals]), excluded=masks)
    epochs = [part for part in parts if isinstance(part, Epochs)]
    moved = []
    for part in epochs:
        offset = (part.signal.start_s - whole.start_s) * whole.rate_hz
        assert offset.denominator == 1, "epochs do not begin on a sample of the signal"
        moved.append(replace(part, signal=whole, first=part.first + int(offset)))
        same = np.array_equal(moved[-1].samples(), part.samples())
        assert same, "the epochs hold other samples than the signal they were cut from"
    return Epochs(
        signal=whole,
        length=epochs[0].length,
        first=np.concatenate([part.first for part in moved]),
        condition=tuple(name for part in moved for name in part.condition),
        kept=np.concatenate([part.kept for part in moved]),
        reason=tuple(text for part in moved for text in part.reason),
    )


def take_rows(data: InRows, places: Ints) -> InRows:
    """Return some rows of data, in the order given."""
    if isinstance(data, Epochs):
        return replace(
            data,
            first=data.first[places],
            condition=tuple(data.condition[i] for i in places),
            kept=data.kept[places],
            reason=tuple(data.reason[i] for i in places),
        )
    rows = Rows(
        start_s=data.rows.start_s[places],
        duration_s=data.rows.duration_s[places],
        condition=tuple(data.rows.condition[i] for i in places),
        kept=data.rows.kept[places],
        reason=tuple(data.rows.reason[i] for i in places),
        epochs=data.rows.epochs[places],
    )
    if isinstance(data, Spectra):
        return replace(data, rows=rows, density=data.density[places], dof=data.dof[places])
    return replace(
        data,
        rows=rows,
        columns={part: values[places] for part, values in data.columns.items()},
        missing=tuple(data.missing[i] for i in places),
    )


def in_parts(data: Data, count: int) -> list[Data]:
    """Cut data into parts in order of time, some of them possibly empty."""
    if isinstance(data, Signal):
        borders_s = [data.time_s(data.x.size * k // count) for k in range(count + 1)]
        return [data.cut(a, b) for a, b in pairwise(borders_s)]
    assert isinstance(data, InRows)
    size = len(data) if isinstance(data, Epochs) else len(data.rows)
    places = np.arange(size, dtype=np.int64)
    return [take_rows(data, part) for part in np.array_split(places, count)]


def arrays_in(value: Any) -> Iterator[np.ndarray[Any, Any]]:
    """Yield every array that data hold."""
    if isinstance(value, np.ndarray):
        yield value
    elif isinstance(value, Mapping):
        for item in value.values():
            yield from arrays_in(item)
    elif is_dataclass(value) and not isinstance(value, type):
        for item in fields(value):
            yield from arrays_in(getattr(value, item.name))


def difference(one: Any, other: Any, tolerance: float = 0.0, at: str = "output") -> str:
    """Return where two outputs first differ, or an empty text.

    Numbers with a fraction may be ``tolerance`` apart; with 0 they are equal to the bit (and NaN
    equals NaN). All else must be equal.
    """
    if type(one) is not type(other):
        return f"{at} is a {type(one).__name__} and a {type(other).__name__}"
    if isinstance(one, np.ndarray):
        return _array_difference(one, other, tolerance, at)
    if isinstance(one, float):
        return _array_difference(np.array(one), np.array(other), tolerance, at)
    if isinstance(one, Mapping):
        if list(one) != list(other):
            return f"{at} has the names {list(one)} and {list(other)}"
        pairs = [(f"{at}[{name!r}]", one[name], other[name]) for name in one]
    elif is_dataclass(one) and not isinstance(one, type):
        names = [item.name for item in fields(one)]
        pairs = [(f"{at}.{name}", getattr(one, name), getattr(other, name)) for name in names]
    elif one == other:
        return ""
    else:
        return f"{at} is {_short(one)} and {_short(other)}"
    for place, a, b in pairs:
        if found := difference(a, b, tolerance, place):
            return found
    return ""


def _array_difference(
    one: np.ndarray[Any, Any], other: np.ndarray[Any, Any], tolerance: float, at: str
) -> str:
    if one.shape != other.shape or one.dtype != other.dtype:
        return f"{at} has {one.shape} {one.dtype} and {other.shape} {other.dtype}"
    if one.dtype.kind != "f":
        unequal = np.flatnonzero(one.ravel() != other.ravel())
        return f"{at} differs at {unequal[0]}" if unequal.size else ""
    with np.errstate(invalid="ignore"):
        apart = np.abs(one - other)
    same = (one == other) | (np.isnan(one) & np.isnan(other)) | (apart <= tolerance)
    if np.all(same):
        return ""
    place = int(np.flatnonzero(~same.ravel())[0])
    return (
        f"{at} differs at {place}: {one.ravel()[place]!r} and {other.ravel()[place]!r}, "
        f"{tolerance:g} apart at most"
    )


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) < 200 else f"{text[:200]} ..."
