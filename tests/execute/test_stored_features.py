"""Rows come back from the store as they were: their texts, as numbers, say the same."""

from fractions import Fraction

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from waveassay.contract import Condition, Exclusion, Features, Interval, Rows
from waveassay.execute.arrays import Group
from waveassay.execute.feature_arrays import ROWS_OF, features_to_arrays
from waveassay.execute.stored_features import CodedTexts, StoredFeatures, features_from_groups
from waveassay.execute.tables import Block, TableOfFeatures, excluded_rows
from waveassay.plan.columns import FeatureColumn

TEXTS = st.sampled_from(["", "awake", "deep", "flat; edge"])
STRETCHES = st.lists(
    st.lists(st.tuples(TEXTS, TEXTS, TEXTS, TEXTS, st.booleans()), max_size=6),
    min_size=1,
    max_size=4,
)
Row = tuple[str, str, str, str, bool]


def rows_of(given: list[Row]) -> Rows:
    start_s = np.arange(len(given), dtype=np.float64)
    return Rows(
        start_s,
        np.full(len(given), 4.0),
        tuple(row[0] for row in given),
        np.array([row[4] for row in given], np.bool_),
        tuple(row[1] for row in given),
        np.ones(len(given), np.int64),
    )


def group(given: list[Row]) -> Group:
    """Return what a stretch leaves: two features of the same rows."""
    rows = rows_of(given)
    features = {
        place: Features(
            "frontal",
            rows,
            {"": np.arange(len(given)) * 1.0},
            tuple(row[of] for row in given),  # type: ignore[misc]
        )
        for place, of in ((4, 2), (5, 3))
    }
    arrays, rows_of_step = features_to_arrays(features)
    return Group(arrays, {ROWS_OF: rows_of_step})


def texts(coded: CodedTexts) -> list[str]:
    return [coded.known[code] for code in coded.codes.tolist()]


@given(STRETCHES)
def test_texts_of_all_stretches_are_those_that_were_stored(stretches: list[list[Row]]) -> None:
    found = features_from_groups([group(given) for given in stretches])
    every = [row for given in stretches for row in given]
    for step, of in ((4, 2), (5, 3)):
        features = found[step]
        assert texts(features.rows.condition) == [row[0] for row in every]
        assert texts(features.rows.reason) == [row[1] for row in every]
        assert features.rows.condition.are("deep").tolist() == [row[0] == "deep" for row in every]
        missing = texts(features.missing) if features.missing else [""] * len(every)
        assert missing == [row[of] for row in every]


@given(st.lists(st.tuples(TEXTS, TEXTS, TEXTS, TEXTS, st.booleans()), max_size=12))
def test_a_table_tells_of_every_feature_why_it_is_missing(given: list[Row]) -> None:
    columns = [
        FeatureColumn(name, False, step, f"c.feature.{name}", "", "Hz", "")
        for step, name in ((4, "edge"), (5, "peak"))
    ]
    found = features_from_groups([group(given)])
    conditions = [Condition(Fraction(0), Fraction(9), "all")]
    table = TableOfFeatures("r", columns, conditions, averaged=False).of(Block("frontal", found))
    expected = [
        "; ".join(f"{name}: {row[of]}" for name, of in (("edge", 2), ("peak", 3)) if row[of])
        for row in given
    ]
    assert table.column("missing_reason").to_pylist() == [text or None for text in expected]
    assert table.column("reason").to_pylist() == [row[1] or None for row in given]


def test_features_that_were_never_stored_are_taken_alike() -> None:
    given: list[Row] = [("awake", "", "no peak", "", True), ("deep", "", "", "", False)]
    features = Features("frontal", rows_of(given), {"": np.zeros(2)}, ("no peak", ""))
    stored = StoredFeatures.of(features)
    assert texts(stored.rows.condition) == ["awake", "deep"]
    assert stored.missing is not None
    assert texts(stored.missing) == ["no peak", ""]
    assert StoredFeatures.of(Features("f", rows_of(given), {}, ("", ""))).missing is None


TENTHS = st.tuples(st.integers(0, 60), st.integers(1, 30))


@given(
    st.lists(st.tuples(TENTHS, st.sampled_from(["flat", "high"])), max_size=6),
    st.lists(st.tuples(TENTHS, st.sampled_from(["awake", "deep"])), min_size=1, max_size=3),
    st.sampled_from([Fraction(1, 10), Fraction(1, 7), Fraction(3, 1000)]),
)
def test_excluded_time_is_that_of_the_moments_it_holds(
    masks: list[tuple[tuple[int, int], str]],
    windows: list[tuple[tuple[int, int], str]],
    step_s: Fraction,
) -> None:
    """Law: counted moment by moment, on a grid on which all begins and ends."""
    excluded = [Exclusion(a * step_s, (a + n) * step_s, why) for (a, n), why in masks]
    conditions = [Condition(a * step_s, (a + n) * step_s, name) for (a, n), name in windows]
    pieces = [Interval(Fraction(0), 50 * step_s), Interval(60 * step_s, 200 * step_s)]
    out = {why: {a + i for (a, n), w in masks if w == why for i in range(n)} for _, why in masks}
    out["gap"] = set(range(50, 60))
    out["any"] = set().union(*out.values())
    expected = {}
    for name in {name for _, name in windows}:
        moments = [a + i for (a, n), own in windows if own == name for i in range(n)]
        for why, those in out.items():
            count = sum(moment in those for moment in moments)
            if count or why == "any":
                expected[name, why] = (float(count * step_s), count / len(moments))
    rows = excluded_rows("r", "c", "frontal", excluded, pieces, conditions)
    assert {(row[3], row[4]): tuple(row[5:]) for row in rows} == expected
