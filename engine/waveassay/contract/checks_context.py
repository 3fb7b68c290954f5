"""Proof, on random data, of what a stage declares of its context."""

from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np

from waveassay.contract.checks_data import Given, calm_signal, random_signal
from waveassay.contract.checks_running import (
    InRows,
    arrays_in,
    difference,
    in_parts,
    run_by_stretches,
    run_whole,
    take_rows,
)
from waveassay.contract.errors import SignalError
from waveassay.contract.kinds import Data, Epochs, Exclusion, Floats, Ints, Signal, Spectra
from waveassay.contract.params import Params
from waveassay.contract.spec import SignalSpec, Spec
from waveassay.contract.stage import REACH_TOLERANCE, Reach, Stage, Whole

#: What a recording's parts are combined to may depend on where it was cut by rounding alone.
COMBINE_TOLERANCE = 1e-9

RECORDING = "a recording"

STRETCHES_S = (Fraction(7), Fraction(41, 2))


def reach_of(stage: Stage, params: Params, spec: Spec) -> Reach:
    """Return the reach that a stage declares at a known rate.

    Raises
    ------
    AssertionError
        When it is no `Reach` of exact times, none of them negative.
    """
    assert callable(stage.context), f"{stage.name} declares no reach"
    reach: object = stage.context(params, spec)
    assert isinstance(reach, Reach), (
        f"{stage.name}: its context gives {reach!r}: return Reach(before_s, after_s)"
    )
    for name in ("before_s", "after_s"):
        value: object = getattr(reach, name)
        assert isinstance(value, Fraction | int), (
            f"{stage.name}: {name} of its reach is {value!r}, a {type(value).__name__}: write an "
            "exact time, such as samples / spec.rate_hz or exact(params.length)"
        )
        assert value >= 0, f"{stage.name}: {name} of its reach is {value} s; 0 is the least"
    return reach


def require_finite(stage: Stage, out: object) -> None:
    """Require that finite samples give finite samples."""
    if isinstance(out, Signal) and not np.all(np.isfinite(out.x)):
        at = int(np.flatnonzero(~np.isfinite(out.x))[0])
        raise AssertionError(
            f"{stage.name}: {out.x[at]} comes out at sample {at}, and every sample that went in is "
            "a finite number. Mask such time and give some number there"
        )


def length_for(reach: Reach) -> int:
    """Return a length, s, in which stretches in the middle see neither end (at most 600)."""
    return min(600, max(100, int(3 * (reach.before_s + reach.after_s)) + 60))


def prove_reach(stage: Stage, params: Params, case: Given) -> None:
    """Require that run by stretches equals run whole, masks to the letter.

    Where there are no artefacts, a sample may be `REACH_TOLERANCE` of the root mean square apart
    (of input or output, whichever is larger; of the output where the unit changes); beside
    artefacts, that share of the largest sample.
    """
    assert isinstance(case.spec, SignalSpec), f"{stage.name}: a reach is for stages on signals"
    assert case.spec.rate_hz is not None, "cases have a rate"
    reach = reach_of(stage, params, case.spec)
    planted = random_signal(case.spec.unit, case.spec.rate_hz, length_for(reach))
    calm = calm_signal(case.spec.unit, case.spec.rate_hz, length_for(reach))
    for data, size in ((planted, _largest), (replace(calm, excluded=planted.excluded), _rms)):
        whole = run_whole(stage, params, data)
        require_finite(stage, whole)
        tolerance = REACH_TOLERANCE * size(data.x)
        if isinstance(whole, Signal):
            whole = whole.cut(data.piece.start_s, data.piece.stop_s)
            of_out = REACH_TOLERANCE * size(whole.x)
            tolerance = of_out if whole.unit != data.unit else max(tolerance, of_out)
        for stretch_s in STRETCHES_S:
            joined = run_by_stretches(stage, params, data, stretch_s, case.spec)
            found = difference(joined, whole, tolerance)
            assert not found, (
                f"{stage.name}: run by stretches of {float(stretch_s):g} s and whole, {found}. "
                "Its context is too short, or it depends on where its input begins"
            )


def _largest(x: Floats) -> float:
    return float(np.max(np.abs(x), initial=0))


def _rms(x: Floats) -> float:
    return float(np.sqrt(np.mean(x**2))) if x.size else 0.0


def prove_each_row(stage: Stage, params: Params, case: Given) -> None:
    """Require that some rows alone give what they give among the others, to the bit.

    Epochs are also given on a signal that is cut to them, and on one that holds other samples
    everywhere else.
    """
    data = case.data
    assert isinstance(data, InRows), f"{stage.name}: signals have no rows"
    whole = run_whole(stage, params, data)
    if not isinstance(whole, InRows):
        return  # a request for a table holds no rows
    count = len(data) if isinstance(data, Epochs) else len(data.rows)
    every = np.arange(count, dtype=np.int64)
    for places in (every[1::2], every[: count // 3], every[-1:], every[:0]):
        _same_rows(stage, params, take_rows(data, places), whole, places, "alone")
    if not isinstance(data, Epochs):
        return
    kept = np.flatnonzero(data.kept)
    one = kept[kept.size // 2 :][:1]  # in the middle, so that there are samples on both sides
    for places in (every[count // 3 : count // 2], one):
        some = take_rows(data, places)
        assert isinstance(some, Epochs), "some epochs are epochs"
        _same_rows(stage, params, _scrambled(some), whole, places, "with other samples around")
        _same_rows(stage, params, _cut_to(some), whole, places, "on a signal cut to them")


def _same_rows(
    stage: Stage, params: Params, some: InRows, whole: InRows, places: Ints, how: str
) -> None:
    out, expected = run_whole(stage, params, some), take_rows(whole, places)
    if isinstance(out, Epochs) and isinstance(expected, Epochs):
        # Places are counted from where the signal begins.
        moved = (out.signal.start_s - expected.signal.start_s) * expected.signal.rate_hz
        out = replace(out, signal=expected.signal, first=out.first + int(moved))
    found = difference(out, expected)
    assert not found, (
        f"{stage.name}: {places.size} rows {how} and among the others, {found}. A row may depend "
        "on no other row, on no sample outside its epoch, and not on where the signal begins, not "
        "even in the last bit"
    )


def _inside(epochs: Epochs) -> tuple[int, int]:
    return int(epochs.first.min()), int(epochs.first.max()) + epochs.length


def _cut_to(epochs: Epochs) -> Epochs:
    first, last = _inside(epochs)
    signal = epochs.signal
    cut = signal.cut(signal.time_s(first), signal.time_s(last))
    return replace(epochs, signal=cut, first=epochs.first - first)


def _scrambled(epochs: Epochs) -> Epochs:
    x = np.random.default_rng(len(epochs)).permutation(epochs.signal.x) * 3 - 50
    for first in epochs.first.tolist():
        x[first : first + epochs.length] = epochs.signal.x[first : first + epochs.length]
    return replace(epochs, signal=replace(epochs.signal, x=x))


def prove_whole(stage: Stage, params: Params, case: Given, context: Whole) -> None:
    """Require that what is combined does not depend on the cuts, nor what is applied.

    A part, and a recording, may also have nothing that is kept.
    """
    _prove_cuts(stage, params, case.data, context, (3, 64))  # some of 64 are empty
    for what, data in _little_kept(case.data):
        try:
            _prove_cuts(stage, params, data, context, (3,))
        except AssertionError:
            raise
        except Exception as error:
            if isinstance(error, SignalError) and what.startswith(RECORDING):
                continue  # the stage says that such a recording cannot go on
            raise AssertionError(
                f"{stage.name}: given {what}, it fails: {type(error).__name__}: {error}. Such "
                "recordings come: leave the part out, and raise SignalError where nothing is left"
            ) from error


def _prove_cuts(
    stage: Stage, params: Params, data: Data, context: Whole, counts: tuple[int, ...]
) -> None:
    collected = context.collect(params, data)
    state = context.combine(params, [collected])
    whole = state if context.apply is None else context.apply(params, data, state)
    require_finite(stage, whole)
    scale = max((float(np.nanmax(np.abs(a), initial=0)) for a in _numbers(state)), default=0.0)
    for count in counts:
        parts = in_parts(data, count)
        again = context.combine(params, [context.collect(params, part) for part in parts])
        found = difference(again, state, COMBINE_TOLERANCE * scale)
        assert not found, f"{stage.name}: combined from {count} parts and from one, {found}"
        if context.apply is None:
            continue
        outs = [context.apply(params, part, state) for part in parts]
        for out, part in zip(outs, in_parts(whole, count), strict=True):
            found = difference(out, part)
            assert not found, f"{stage.name}: applied to one of {count} parts and whole, {found}"


def _little_kept(data: Data) -> Iterator[tuple[str, Data]]:
    """Yield data of which one part of three, or all, is excluded or not kept; and none at all."""
    if isinstance(data, Signal):
        first, last = (data.time_s(data.x.size * k // 3) for k in (1, 2))
        part = Exclusion(first, last, "planted")
        yield "a part that is excluded from end to end", data.excluding([part])
        whole = Exclusion(data.start_s, data.stop_s, "planted")
        yield f"{RECORDING} that is excluded from end to end", data.excluding([whole])
        return
    assert isinstance(data, InRows), "a table or a figure is taken by no step"
    count = len(data) if isinstance(data, Epochs) else len(data.rows)
    every = np.arange(count, dtype=np.int64)
    yield "a part without any kept row", _dropped(data, np.array_split(every, 3)[1])
    yield f"{RECORDING} without any kept row", _dropped(data, every)
    yield f"{RECORDING} without any row", take_rows(data, every[:0])


def _dropped(data: InRows, places: Ints) -> InRows:
    """Return the data with some rows not kept."""
    kept = (data if isinstance(data, Epochs) else data.rows).kept.copy()
    kept[places] = False
    old = (data if isinstance(data, Epochs) else data.rows).reason
    reason = tuple("" if keep else text or "planted" for keep, text in zip(kept, old, strict=True))
    if isinstance(data, Epochs):
        return replace(data, kept=kept, reason=reason)
    rows = replace(data.rows, kept=kept, reason=reason)
    if isinstance(data, Spectra):
        density, dof = data.density.copy(), data.dof.copy()
        density[~kept], dof[~kept] = np.nan, np.nan
        return replace(data, rows=rows, density=density, dof=dof)
    columns = {part: np.where(kept, values, np.nan) for part, values in data.columns.items()}
    return replace(data, rows=rows, columns=columns)


def _numbers(value: object) -> Iterator[np.ndarray[Any, Any]]:
    return (array for array in arrays_in(value) if array.dtype.kind == "f" and array.size)
