"""A context that is not true is found, however little it is off."""

from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from contract_stages import HONEST, HONEST_ROWS, HONEST_WHOLE, caught, less_mean, levels
from waveassay.contract import (
    Epochs,
    EpochsSpec,
    Features,
    FeaturesSpec,
    Findings,
    Floats,
    Part,
    Reach,
    Signal,
    SignalError,
    SignalSpec,
    Stage,
    Whole,
    checks,
)
from waveassay.contract.spec import ColumnSpec


def one_column(params: Any, given: EpochsSpec, findings: Findings) -> FeaturesSpec:
    return FeaturesSpec(given.signal, (ColumnSpec("", given.signal.unit, "something"),))


def feature(values: Any) -> Stage:
    """Return a stage on epochs of which each value is what a function of the epochs says."""

    def run(params: Any, epochs: Epochs) -> Features:
        found = np.full(len(epochs), np.nan)
        found[epochs.kept] = values(epochs)[epochs.kept]
        return Features(epochs.signal.name, epochs.rows, {"": found}, ("",) * len(epochs))

    return replace(HONEST_ROWS, spec=one_column, run=run)


def before(epochs: Epochs) -> Floats:
    return epochs.signal.x[np.maximum(epochs.first - 1, 0)]


def after(epochs: Epochs) -> Floats:
    last = epochs.signal.x.size - 1
    return epochs.signal.x[np.minimum(epochs.first + epochs.length, last)]


def place(epochs: Epochs) -> Floats:
    return epochs.first.astype(np.float64)


def above_the_mean(epochs: Epochs) -> Floats:
    return epochs.signal.x[epochs.first] - np.mean(epochs.signal.x)


@pytest.mark.parametrize("values", [before, after, place, above_the_mean])
def test_a_row_that_knows_more_than_its_epoch(values: Any) -> None:
    caught(checks.check_context, "no sample outside its epoch", feature(values))


def test_a_row_that_knows_its_epoch_alone() -> None:
    checks.check_context(feature(lambda epochs: epochs.signal.x[epochs.first]))
    checks.check_context(feature(lambda epochs: epochs.rows.start_s))


def decaying(share: float) -> tuple[Any, Any]:
    """Return run and context of a filter whose past is felt by this share beyond its reach."""
    ratio = 0.5

    def run(params: Any, signal: Signal) -> Signal:
        from scipy.signal import lfilter

        # Zeros before the start: what is not given is not felt.
        return signal.with_samples(lfilter([1 - ratio], [1, -ratio], signal.x))

    def context(params: Any, given: SignalSpec) -> Reach:
        assert given.rate_hz is not None
        return Reach(int(np.ceil(np.log(share) / np.log(ratio))) / given.rate_hz, Fraction(0))

    return run, context


@pytest.mark.parametrize("share", [1e-6, 1e-8, 1e-9])
def test_a_reach_that_leaves_out_ten_times_what_it_may(share: float) -> None:
    run, context = decaying(share)
    caught(checks.check_context, "too short", replace(HONEST, run=run, context=context))


def test_a_reach_that_leaves_out_less_than_it_may() -> None:
    run, context = decaying(1e-12)
    checks.check_context(replace(HONEST, run=run, context=context))


def test_samples_that_are_not_finite() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        x = np.cumsum(signal.x)
        x[x.size // 2] = np.inf
        return signal.with_samples(x)

    def nowhere(params: Any, given: SignalSpec) -> Reach:
        return Reach(Fraction(0), Fraction(0))

    stage = replace(HONEST, run=run, context=nowhere)
    caught(checks.check_context, "inf comes out", stage)
    caught(checks.check_spec_agrees_with_data, "inf comes out", stage)


@pytest.mark.parametrize(
    ("reach", "said"),
    [
        (None, "return Reach"),
        ((1, 1), "return Reach"),
        (Reach(0.5, Fraction(0)), "before_s .* 0.5, a float: write an exact time"),  # type: ignore[arg-type]
        (Reach(Fraction(0), Fraction(-1)), "after_s .* -1 s; 0 is the least"),
    ],
)
def test_a_reach_that_is_none(reach: Any, said: str) -> None:
    caught(checks.check_context, said, replace(HONEST, context=lambda params, given: reach))


def collect_open(params: Any, signal: Signal) -> Part:
    return levels(params, signal.with_samples(signal.x[~signal.masked()]))


def strict_mean(params: Any, parts: Sequence[Part]) -> Part:
    total, count = (float(np.sum([part[key][0] for part in parts])) for key in ("sum", "count"))
    if count == 0:
        raise SignalError("nothing is left of the signal")
    return {"mean": np.array([total / count])}


def test_a_recording_of_which_nothing_is_left_may_be_refused() -> None:
    checks.check_context(replace(HONEST_WHOLE, context=Whole(collect_open, strict_mean, less_mean)))


def test_a_recording_of_which_nothing_is_left_may_not_fail() -> None:
    def combine(params: Any, parts: Sequence[Part]) -> Part:
        total, count = (sum(part[key][0].item() for part in parts) for key in ("sum", "count"))
        return {"mean": np.array([total / count])}

    stage = replace(HONEST_WHOLE, context=Whole(collect_open, combine, less_mean))
    caught(checks.check_context, "recording that is excluded.*ZeroDivisionError", stage)


def test_a_part_of_which_nothing_is_left_fails_no_recording() -> None:
    def collect(params: Any, signal: Signal) -> Part:
        open_ = signal.x[~signal.masked()]
        if signal.x.size and not open_.size:
            raise SignalError("nothing is left of the signal")
        return levels(params, signal.with_samples(open_))

    stage = replace(HONEST_WHOLE, context=Whole(collect, strict_mean, less_mean))
    caught(checks.check_context, "a part that is excluded.*SignalError", stage)


def test_a_state_that_is_no_number_is_not_applied() -> None:
    def combine(params: Any, parts: Sequence[Part]) -> Part:
        total, count = (np.sum([part[key][0] for part in parts]) for key in ("sum", "count"))
        with np.errstate(invalid="ignore"):
            return {"mean": np.array([total / count])}

    stage = replace(HONEST_WHOLE, context=Whole(collect_open, combine, less_mean))
    caught(checks.check_context, "nan comes out", stage)
