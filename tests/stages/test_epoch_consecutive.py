"""Epochs: where they lie, whose they are, which are kept."""

import json
from dataclasses import replace
from fractions import Fraction
from time import process_time
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from signal_data import signal_of, spec_of
from spectrum_epochs import Found
from waveassay.contract import Condition, Epochs, Exclusion, Interval, Signal, merged
from waveassay_stages.epoch.consecutive import (
    ConsecutiveParams,
    Span,
    context,
    masked_samples,
    run,
    spec,
)


def params(**values: Any) -> ConsecutiveParams:
    return ConsecutiveParams.model_validate_json(json.dumps(values))


def starts_s(epochs: Epochs, condition: str | None = None) -> list[float]:
    start = [float(s) for s in epochs.rows.start_s]
    if condition is None:
        return start
    return [s for s, c in zip(start, epochs.condition, strict=True) if c == condition]


TIMES = st.fractions(0, 30, max_denominator=16)
LENGTHS = st.fractions(Fraction(1, 16), 8, max_denominator=16)


@settings(deadline=None)
@given(
    st.lists(st.tuples(TIMES, LENGTHS, st.sampled_from(["a", "b", "edge"])), max_size=6),
    st.lists(st.tuples(TIMES, LENGTHS), min_size=1, max_size=3),
    st.integers(1, 24),
    st.sampled_from([0, 25, 50, 75]),
    st.sampled_from(["piece", "condition"]),
    st.sampled_from([[], ["edge"]]),
    st.sampled_from([0, 20, 99]),
    st.tuples(st.integers(0, 100), st.integers(0, 140)),
)
def test_against_the_definition_on_any_part_of_a_piece(
    masks: list[tuple[Fraction, Fraction, str]],
    conditions: list[tuple[Fraction, Fraction]],
    length: int,
    overlap: int,
    anchor: str,
    ignore: list[str],
    allowed: int,
    part: tuple[int, int],
) -> None:
    """Each epoch by itself, from times alone."""
    rate, origin = Fraction(8), Fraction(7, 3)
    count = 180
    piece = Interval(origin, origin + count / rate)
    named = tuple(
        Condition(start, start + span, f"c{i}") for i, (start, span) in enumerate(conditions)
    )
    excluded = merged(Exclusion(start, start + span, why) for start, span, why in masks)
    x = np.arange(count, dtype=np.float64)
    whole = Signal("s", "uV", rate, origin, x, piece, excluded, named)
    low, high = part[0], min(count, part[0] + part[1])
    given_part = whole.cut(whole.time_s(low), whole.time_s(high))
    asked = params(
        length=f"{length * 125} ms",
        overlap=f"{overlap} %",
        anchor=anchor,
        ignore=ignore,
        allow_excluded=f"{allowed} %",
    )
    step = max(1, round(Fraction(length) * (100 - overlap) / 100))
    expected = []
    for number, condition in enumerate(named):
        late = max(origin, condition.start_s)
        grid = 0 if anchor == "piece" else -(-(late - origin) * rate // 1)
        for first in range(int(grid), count, step):
            start, stop = whole.time_s(first), whole.time_s(first + length)
            inside = low <= first and first + length <= high
            if not (inside and condition.start_s <= start and stop <= condition.stop_s):
                continue
            touched: set[int] = set()
            reasons = set()
            for m in excluded:
                hit = [
                    k
                    for k in range(first, first + length)
                    if m.start_s < whole.time_s(k + 1) and whole.time_s(k) < m.stop_s
                ]
                if hit and m.reason not in ignore:
                    touched.update(hit)
                    reasons.add(m.reason)
            kept = 100 * len(touched) <= allowed * length
            text = "" if kept else "; ".join(sorted(reasons))
            expected.append((first - low, number, condition.name, kept, text))
    expected.sort()
    found = run(asked, given_part)
    assert found.first.tolist() == [e[0] for e in expected]
    assert list(found.condition) == [e[2] for e in expected]
    assert found.kept.tolist() == [e[3] for e in expected]
    assert list(found.reason) == [e[4] for e in expected]


@settings(deadline=None)
@given(
    st.lists(st.tuples(st.integers(0, 60), st.integers(1, 20)), max_size=6),
    st.lists(st.integers(0, 60), min_size=1, max_size=10),
    st.integers(1, 12),
)
def test_masked_samples_are_counted_once(
    masks: list[tuple[int, int]], starts: list[int], length: int
) -> None:
    spans = [Span(start, start + size) for start, size in masks]
    found = masked_samples(np.array(starts, np.int64), length, spans)
    for start, count in zip(starts, found, strict=True):
        places = range(start, start + length)
        assert count == sum(any(s.start <= k < s.stop for s in spans) for k in places)


@pytest.mark.parametrize("stop_s", [11.0, 1000.0])
def test_half_overlap_and_a_rest_that_is_left_out(stop_s: float) -> None:
    given_signal = signal_of(np.zeros(250 * 11), conditions=[(0.0, stop_s, "all")])
    assert starts_s(run(params(length="4 s", overlap="50 %"), given_signal)) == [0, 2, 4, 6]


def test_conditions_share_a_grid_or_have_their_own() -> None:
    conditions = [(1.0, 9.0, "one"), (2.5, 11.0, "two")]
    given_signal = signal_of(np.zeros(250 * 12), conditions=conditions)
    shared = run(params(length="2 s"), given_signal)
    assert starts_s(shared, "one") == [2, 4, 6]
    assert starts_s(shared, "two") == [4, 6, 8]
    assert list(shared.condition) == ["one", "one", "two", "one", "two", "two"]
    own = run(params(length="2 s", anchor="condition"), given_signal)
    assert starts_s(own, "one") == [1, 3, 5, 7]
    assert starts_s(own, "two") == [2.5, 4.5, 6.5, 8.5]


def test_a_condition_that_began_before_the_piece_has_its_grid_from_the_piece() -> None:
    x = np.zeros(250 * 8)
    given_signal = signal_of(x, start_s=5, conditions=[(0.0, 13.0, "c")])
    out = run(params(length="2 s", anchor="condition"), given_signal)
    assert starts_s(out) == [5, 7, 9, 11]


def test_reasons_are_named_in_order_and_may_be_ignored() -> None:
    masks = [(3.0, 3.5, "flatline"), (3.25, 5.0, "amplitude"), (0.0, 0.5, "edge")]
    given_signal = signal_of(np.zeros(2000), masks=masks, conditions=[(0, 8, "all")])
    out = run(params(length="2 s"), given_signal)
    assert out.reason == ("edge", "amplitude; flatline", "amplitude", "")
    assert out.kept.tolist() == [False, False, False, True]
    out = run(params(length="2 s", ignore=["edge", "amplitude"]), given_signal)
    assert out.reason == ("", "flatline", "", "")


def test_a_mask_that_only_abuts_does_not_touch() -> None:
    masks = [(0.0, 2.0, "a"), (4.0, 6.0, "a")]
    given_signal = signal_of(np.zeros(2000), masks=masks, conditions=[(0, 8, "all")])
    out = run(params(length="2 s"), given_signal)
    assert out.kept.tolist() == [False, True, False, True]


def test_lengths_that_are_no_whole_samples_are_rounded_and_said() -> None:
    found = Found()
    out = spec(params(length="1.1 s", overlap="33 %"), spec_of(128), found.findings)
    assert out.length_s == 141 / 128
    assert out.step_s == 94 / 128
    assert [at for at, _ in found.warnings] == ["length", "overlap"]
    found = Found()
    out = spec(params(length="4 s", overlap="75 %"), spec_of(128), found.findings)
    assert (out.length_s, out.step_s, found.warnings) == (4, 1, [])
    unknown = spec(params(length="4 s"), spec_of(None), found.findings)
    assert (unknown.length_s, unknown.step_s) == (4, 4)


def test_an_epoch_is_known_once_its_last_sample_is() -> None:
    reach = context(params(length="4 s", overlap="50 %"), spec_of(128))
    assert (reach.before_s, reach.after_s) == (Fraction(0), Fraction(4))


def test_a_night_with_many_masks_takes_milliseconds() -> None:
    """Common practice, no source: 8 h in epochs of 4 s with 75 % overlap, 5,000 masks."""
    rate = Fraction(128)
    count = 8 * 3600 * 128
    rng = np.random.default_rng(1)
    masks = [
        Exclusion(Fraction(int(at)), Fraction(int(at)) + 1, "amplitude")
        for at in rng.integers(0, 8 * 3600, 5000)
    ]
    night = Condition(Fraction(0), Fraction(8 * 3600), "night")
    x = np.zeros(count)
    piece = Interval(Fraction(0), Fraction(8 * 3600))
    given_signal = Signal("s", "uV", rate, Fraction(0), x, piece, merged(masks), (night,))
    began = process_time()
    out = run(params(length="4 s", overlap="75 %"), given_signal)
    assert process_time() - began < 0.5
    assert len(out) == 8 * 3600 - 3


@pytest.mark.parametrize(
    "values",
    [
        {},
        {"length": "0 s"},
        {"length": "4 s", "overlap": "100 %"},
        {"length": "4 s", "overlap": "-1 %"},
        {"length": "4 s", "allow_excluded": "100 %"},
        {"length": "4 s", "anchor": "clock"},
    ],
)
def test_unsound_parameters(values: dict[str, str]) -> None:
    with pytest.raises(ValidationError):
        params(**values)


def test_a_part_must_begin_on_a_sample_of_its_piece() -> None:
    shifted = replace(signal_of(np.zeros(1000)), start_s=Fraction(1, 1000))
    with pytest.raises(ValueError, match="whole sample"):
        run(params(length="1 s"), shifted)
