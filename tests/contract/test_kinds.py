"""Laws of masks and of cutting signals."""

from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.contract import (
    Condition,
    Epochs,
    Exclusion,
    Interval,
    Signal,
    exclusions_of,
    merged,
)

TIMES = st.fractions(0, 20, max_denominator=12)
REASONS = st.sampled_from(["a", "b"])
MASKS = st.lists(
    st.builds(
        lambda start, length, reason: Exclusion(start, start + length, reason),
        TIMES,
        st.fractions(-1, 6, max_denominator=12),
        REASONS,
    ),
    max_size=8,
)
RATE = Fraction(8)


def signal(masks: list[Exclusion], start: Fraction = Fraction(0)) -> Signal:
    x = np.arange(160, dtype=np.float64)
    piece = Interval(start, start + 160 / RATE)
    return Signal("s", "uV", RATE, start, x, piece, merged(masks))


def masked(masks: object, reason: str, time: Fraction) -> bool:
    assert isinstance(masks, tuple | list)
    return any(m.reason == reason and m.start_s <= time < m.stop_s for m in masks)


@settings(deadline=None)
@given(MASKS, TIMES, REASONS)
def test_merging_changes_no_moment(masks: list[Exclusion], time: Fraction, reason: str) -> None:
    assert masked(merged(masks), reason, time) == masked(masks, reason, time)


@settings(deadline=None)
@given(MASKS, st.randoms(use_true_random=False))
def test_merging_knows_no_order_and_is_done_once(masks: list[Exclusion], random: object) -> None:
    once = merged(masks)
    assert merged(once) == once == tuple(sorted(once))
    assert merged(reversed(masks)) == once


@settings(deadline=None)
@given(MASKS)
def test_merged_masks_of_one_reason_lie_apart(masks: list[Exclusion]) -> None:
    for reason in ("a", "b"):
        found = [m for m in merged(masks) if m.reason == reason]
        assert all(m.start_s < m.stop_s for m in found)
        assert all(one.stop_s < other.start_s for one, other in pairwise(found))


@settings(deadline=None)
@given(MASKS, TIMES, TIMES)
def test_cut_takes_what_starts_inside_and_its_masks(
    masks: list[Exclusion], start: Fraction, stop: Fraction
) -> None:
    whole = signal(masks)
    part = whole.cut(start, stop)
    times = [whole.time_s(i) for i in range(whole.x.size)]
    expected = [v for v, t in zip(whole.x, times, strict=True) if start <= t < stop]
    assert part.x.tolist() == expected
    assert all(start <= m.start_s < m.stop_s <= stop for m in part.excluded)
    for i in range(part.x.size):
        time = part.time_s(i)
        assert part.x[i] == whole.x[whole.index_at(time)]
        for reason in ("a", "b"):
            assert masked(part.excluded, reason, time) == masked(whole.excluded, reason, time)


@settings(deadline=None)
@given(MASKS, TIMES)
def test_parts_that_touch_make_the_whole(masks: list[Exclusion], border: Fraction) -> None:
    whole = signal(masks)
    start, stop = whole.piece.start_s, whole.piece.stop_s
    border = min(max(border, start), stop)
    parts = [whole.cut(start, border), whole.cut(border, stop)]
    assert np.array_equal(np.concatenate([p.x for p in parts]), whole.x)
    joined = merged(m for part in parts for m in part.excluded)
    assert joined == whole.cut(start, stop).excluded


@settings(deadline=None)
@given(MASKS, st.fractions(0, 3, max_denominator=8), st.fractions(0, 3, max_denominator=8))
def test_widening_reaches_as_far_as_asked_and_not_beyond_the_piece(
    masks: list[Exclusion], before: Fraction, after: Fraction
) -> None:
    # A mask that lies in the piece; `merged` has no other from the stages.
    inside = [m for m in merged(masks) if m.stop_s <= 20]
    wide = signal(inside).widened(before, after)
    for i in range(wide.x.size):
        time = wide.time_s(i)
        for reason in ("a", "b"):
            near = any(
                m.reason == reason and m.start_s - before <= time < m.stop_s + after for m in inside
            )
            assert masked(wide.excluded, reason, time) == near
    assert all(m.start_s >= 0 and m.stop_s <= 20 for m in wide.excluded)


def test_edges_are_masked_behind_the_start_and_ahead_of_the_stop() -> None:
    found = signal([]).excluding_edges(Fraction(2), Fraction(3)).excluded
    assert found == (
        Exclusion(Fraction(0), Fraction(3), "edge"),
        Exclusion(Fraction(18), Fraction(20), "edge"),
    )


def test_a_causal_filter_masks_no_stop() -> None:
    found = signal([]).excluding_edges(Fraction(0), Fraction(3)).excluded
    assert found == (Exclusion(Fraction(0), Fraction(3), "edge"),)


def test_edges_longer_than_the_piece_mask_it_whole() -> None:
    found = signal([]).excluding_edges(Fraction(99), Fraction(99)).excluded
    assert found == (Exclusion(Fraction(0), Fraction(20), "edge"),)


def test_samples_cannot_be_written() -> None:
    with pytest.raises(ValueError, match="read-only"):
        signal([]).x[0] = 1.0


def test_epochs_are_places_and_only_the_kept_are_copied() -> None:
    first = np.array([0, 8, 16])
    kept = np.array([True, False, True])
    epochs = Epochs(signal([], Fraction(5)), 8, first, ("c",) * 3, kept, ("", "bad", ""))
    assert epochs.samples().tolist() == [list(range(8)), list(range(16, 24))]
    assert epochs.rows.start_s.tolist() == [5.0, 6.0, 7.0]
    assert epochs.rows.duration_s.tolist() == [1.0, 1.0, 1.0]


@settings(deadline=None)
@given(
    st.fractions(0, 10**6, max_denominator=10**9),
    st.one_of(
        st.fractions(1, 5000, max_denominator=1000), st.fractions(1, 5000, max_denominator=10**12)
    ),
    st.lists(st.integers(0, 10**7), max_size=5),
)
def test_rows_start_at_the_float_nearest_to_their_time(
    start: Fraction, rate: Fraction, places: list[int]
) -> None:
    """Whether or not the whole numbers behind it fit a float."""
    x = np.zeros(8)
    given_signal = Signal("s", "uV", rate, start, x, Interval(start, start + 8 / rate))
    count = len(places)
    first, kept = np.array(sorted(places), np.int64), np.ones(count, np.bool_)
    rows = Epochs(given_signal, 8, first, ("c",) * count, kept, ("",) * count).rows
    assert rows.start_s.tolist() == [float(start + k / rate) for k in sorted(places)]


@settings(deadline=None)
@given(TIMES, TIMES)
def test_epochs_starting_in_an_interval(start: Fraction, stop: Fraction) -> None:
    first = np.arange(0, 150, 7)
    kept = np.ones(first.size, np.bool_)
    names = tuple(str(i) for i in first)
    epochs = Epochs(signal([]), 8, first, names, kept, ("",) * first.size)
    found = epochs.starting_in(start, stop)
    expected = [str(i) for i in first if start <= int(i) / RATE < stop]
    assert list(found.condition) == expected == [str(i) for i in found.first]


def test_conditions_and_intervals() -> None:
    one = Condition(Fraction(0), Fraction(2), "one")
    assert one.length_s == 2
    assert one.contains(Interval(Fraction(0), Fraction(2)))
    assert not one.contains(Interval(Fraction(1), Fraction(3)))
    assert not one.overlaps(Interval(Fraction(2), Fraction(3)))
    assert one.overlaps(Interval(Fraction(1), Fraction(3)))


@settings(deadline=None)
@given(MASKS, REASONS)
def test_masked_samples_are_those_whose_time_is_masked(masks: list[Exclusion], other: str) -> None:
    found = signal(masks, Fraction(3))
    times = [found.time_s(i) for i in range(found.x.size)]
    for ignoring, reasons in (((), ("a", "b")), ((other,), {"a", "b"} - {other})):
        expected = [any(masked(masks, reason, time) for reason in reasons) for time in times]
        assert found.masked(ignoring).tolist() == expected


@settings(deadline=None)
@given(st.lists(st.booleans(), min_size=160, max_size=160))
def test_marked_samples_become_time_and_time_marks_the_same_samples(marks: list[bool]) -> None:
    where = np.array(marks)
    found = exclusions_of(signal([], Fraction(1, 3)), where, "a")
    assert found == merged(found)  # one for each run
    again = signal([], Fraction(1, 3)).excluding(found)
    assert again.masked().tolist() == marks
    assert sum(item.length_s for item in found) * RATE == sum(marks)


def test_marks_of_another_length_are_refused() -> None:
    with pytest.raises(ValueError, match="160 samples"):
        exclusions_of(signal([]), np.ones(159, np.bool_), "a")
