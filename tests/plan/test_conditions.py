"""Conditions are found where the recipe says, or the recording fails by name."""

import time
from datetime import datetime
from fractions import Fraction
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from waveassay.contract import Condition, SignalError
from waveassay.plan.conditions import resolve_conditions
from waveassay.recipe.model import ConditionRule
from waveassay.recording.facts import Annotation

START = datetime(2031, 2, 3, 23, 59, 30)
DURATION_S = Fraction(600)
NOTES = (
    ("eyes closed", 10),
    ("Stable level ", "60.5"),
    ("end of level", 200),
    ("stable LEVEL", 300),
    ("end of level", 400),
    ("stop", 500),
)


def notes(*pairs: tuple[str, Any]) -> tuple[Annotation, ...]:
    return tuple(Annotation(Fraction(at), None, text) for text, at in pairs)


def rule(**fields: Any) -> ConditionRule:
    return ConditionRule.model_validate(fields)


def found(
    one: ConditionRule,
    annotations: tuple[Annotation, ...] = notes(*NOTES),
    start: datetime | None = START,
    duration_s: Fraction = DURATION_S,
) -> list[tuple[float, float]]:
    resolved = resolve_conditions({"level": one}, annotations, start, duration_s)
    assert {condition.name for condition in resolved} == {"level"}
    return [(float(c.start_s), float(c.stop_s)) for c in resolved]


def note(text: str, **more: Any) -> dict[str, Any]:
    return {"annotation": text, **more}


def test_without_rules_the_whole_recording_is_one_condition() -> None:
    assert resolve_conditions({}, (), None, DURATION_S) == (
        Condition(Fraction(0), DURATION_S, "all"),
    )


@pytest.mark.parametrize(
    ("fields", "spans"),
    [
        ({}, [(0, 600)]),
        ({"length": "90 s"}, [(0, 90)]),
        ({"start": note("eyes closed")}, [(10, 600)]),
        ({"start": note("  EYES closed")}, [(10, 600)]),
        ({"start": note("eyes closed"), "length": "2 min"}, [(10, 130)]),
        ({"start": note("eyes closed", offset="-5 s"), "length": "5 s"}, [(5, 10)]),
        ({"end": note("stop")}, [(0, 500)]),
        ({"end": note("stop", offset="-0.1 s")}, [(0, 499.9)]),
        ({"start": note("eyes closed"), "end": note("stop")}, [(10, 500)]),
        ({"start": {"time": "20 s", "offset": "1 s"}, "end": {"time": "30 s"}}, [(21, 30)]),
        ({"start": note("stable level", which="first"), "length": "10 s"}, [(60.5, 70.5)]),
        ({"start": note("stable level", which="last"), "length": "10 s"}, [(300, 310)]),
        (
            {
                "start": note("stable level", which="last"),
                "end": note("end of level", which="first"),
            },
            [(300, 400)],
        ),
        (
            {
                "start": note("stable level", which="first"),
                "end": note("end of level", which="last"),
            },
            [(60.5, 400)],
        ),
        (
            {"start": note("stable level", which="each"), "length": "20 s"},
            [(60.5, 80.5), (300, 320)],
        ),
        ({"end": note("end of level", which="last")}, [(0, 400)]),
        (
            {
                "start": note("stable level", which="each", offset="30 s"),
                "end": note("end of level", offset="-1 s"),
            },
            [(90.5, 199), (330, 399)],
        ),
        (
            {
                "start": note("stable level", which="each"),
                "end": note("end of level", which="each"),
            },
            [(60.5, 200), (300, 400)],
        ),
        ({"start": {"clock": "23:59:30"}, "length": "10 s"}, [(0, 10)]),
        ({"start": {"clock": "0:01"}, "end": {"clock": "00:02:30.25"}}, [(90, 180.25)]),
        ({"start": {"clock": "23:59:40", "offset": "5 s"}, "end": note("stop")}, [(15, 500)]),
    ],
)
def test_where_a_condition_lies(fields: dict[str, Any], spans: list[tuple[float, float]]) -> None:
    assert found(rule(**fields)) == spans


def test_a_time_of_day_counts_from_the_first_sample_to_the_microsecond() -> None:
    start = START.replace(microsecond=250_000)
    assert found(rule(start={"clock": "00:00:00"}), start=start) == [(29.75, 600)]


def test_offsets_are_exact() -> None:
    (one,) = resolve_conditions(
        {"level": rule(start=note("eyes closed", offset="0.1 s"), length="0.2 s")},
        notes(*NOTES),
        START,
        DURATION_S,
    )
    assert (one.start_s, one.stop_s) == (Fraction(101, 10), Fraction(103, 10))


def test_conditions_come_in_the_recipes_order_and_may_overlap() -> None:
    rules = {
        "late": rule(start=note("stable level", which="each"), length="10 s"),
        "early": rule(start=note("eyes closed")),
    }
    resolved = resolve_conditions(rules, notes(*NOTES), START, DURATION_S)
    assert [(c.name, float(c.start_s)) for c in resolved] == [
        ("late", 60.5),
        ("late", 300),
        ("early", 10),
    ]


@pytest.mark.parametrize(
    ("fields", "says"),
    [
        (
            {"start": note("eyes close")},
            "condition level: its start, annotation 'eyes close', is not in the file; the file "
            "has 'eyes closed', 'Stable level', 'end of level' (2 times), 'stable LEVEL', 'stop', "
            "nearest 'eyes closed'; write it in the recipe as the file has it",
        ),
        ({"end": note("eyes")}, "its end, annotation 'eyes', is not in the file"),
        ({"start": note("level")}, "is not in the file"),
        (
            {"start": note("stable level")},
            "condition level: its start, annotation 'stable level', stands 2 times in the file, "
            "at 60.5 s, 300 s; say which: first, last or each",
        ),
        (
            {"start": note("eyes closed"), "end": note("end of level")},
            "its end, annotation 'end of level', stands 2 times in the file, at 200 s, 400 s",
        ),
        (
            {"start": note("stop"), "end": note("end of level", which="first")},
            "stands only before its start at 500 s: at 200 s, 400 s",
        ),
        (
            {"start": note("stop"), "end": note("eyes closed")},
            "condition level is reversed: it starts at 500 s and ends at 10 s",
        ),
        (
            {"start": note("stop"), "end": note("stop")},
            "condition level is empty: it starts at 500 s and ends at 500 s",
        ),
        (
            {"start": note("stop"), "length": "101.5 s"},
            "condition level, from 500 s to 601.5 s, lies outside the recording, which is 600 s",
        ),
        ({"start": note("eyes closed", offset="-12 s")}, "from -2 s to 600 s, lies outside"),
        ({"start": {"time": "600 s"}, "length": "0.5 s"}, "lies outside the recording"),
        ({"start": {"time": "700 s"}}, "reversed"),
        ({"start": {"clock": "23:59:29"}}, "reversed"),
        ({"start": {"offset": "3 s"}}, "its start needs one of annotation, time and clock"),
        ({"start": {"clock": "12:00", "time": "1 s"}}, "needs one of annotation, time and clock"),
        (
            {"start": note("stop"), "end": note("stop"), "length": "3 s"},
            "has both end and length; leave one out",
        ),
        ({"end": note("stop"), "length": "3 s"}, "has both end and length; leave one out"),
        ({"end": note("stop", which="each")}, "its end says which: each, but its start does not"),
        (
            {"start": note("stable level", which="each")},
            "which: each needs an end that is an annotation, or a length",
        ),
        (
            {"start": note("eyes closed"), "end": note("end of level", which="each")},
            "its end says which: each, but its start does not",
        ),
        (
            {"start": note("stable level", which="each"), "end": {"time": "30 s"}},
            "which: each needs an end that is an annotation, or a length",
        ),
        (
            {
                "start": note("stable level", which="each"),
                "end": note("end of level", which="last"),
            },
            "leave which: last out of its end",
        ),
        (
            {"start": note("stable level", which="each"), "end": note("stable level")},
            "start and end are the same annotation",
        ),
        (
            {"start": note("stable level", which="each"), "end": note("stop")},
            "'stable level' at 60.5 s has no 'stop' before the next at 300 s",
        ),
        (
            {"start": note("stop", which="each"), "end": note("end of level")},
            "'stop' at 500 s has no 'end of level' before the file ends",
        ),
        (
            {"start": note("eyes closed", which="each"), "end": note("end of level")},
            "'end of level' at 400 s ends nothing that 'eyes closed' has started",
        ),
    ],
)
def test_what_cannot_be_found_is_said_plainly(fields: dict[str, Any], says: str) -> None:
    with pytest.raises(SignalError) as caught:
        found(rule(**fields))
    assert says in str(caught.value)


def test_a_file_without_annotations_or_start_time_says_so() -> None:
    with pytest.raises(SignalError, match="the file has no annotations"):
        found(rule(start=note("stop")), annotations=())
    with pytest.raises(SignalError, match="the file states no start time"):
        found(rule(start={"clock": "12:00"}), start=None)


def test_up_to_a_second_outside_the_recording_is_cut_off() -> None:
    assert found(rule(start=note("stop"), length="101 s")) == [(500, 600)]
    assert found(rule(start={"time": "0.5 s", "offset": "-1 s"}, length="20 s")) == [(0, 19.5)]


def test_all_conditions_that_fail_are_said_at_once() -> None:
    rules = {"one": rule(start=note("x")), "two": rule(start=note("stop")), "three": rule(end={})}
    with pytest.raises(SignalError) as caught:
        resolve_conditions(rules, notes(*NOTES), START, DURATION_S)
    assert "condition one" in str(caught.value)
    assert "condition three" in str(caught.value)
    assert "condition two" not in str(caught.value)


EVENTS = st.lists(
    st.tuples(st.sampled_from(["on", "off"]), st.integers(0, 600)), min_size=1, max_size=10
)


@given(EVENTS)
def test_each_pairs_exactly_when_starts_and_ends_come_in_turn(
    events: list[tuple[str, int]],
) -> None:
    """Law: pairs come out when, sorted by time, on and off alternate from an on to an off.

    At one moment an off stands before an on, since a level may start as another ends.
    """
    in_turn = sorted(events, key=lambda e: (e[1], e[0] == "on"))
    alternate = [text for text, _ in in_turn] == ["on", "off"] * (len(events) // 2)
    each = rule(start=note("on", which="each"), end=note("off"))
    try:
        spans = found(each, annotations=notes(*events))
    except SignalError:
        assert not alternate
    else:
        assert alternate
        times = [float(at) for _, at in in_turn]
        assert spans == list(zip(times[::2], times[1::2], strict=True))


@given(
    st.fractions(0, 86_399, max_denominator=1000),
    st.integers(0, 86_399),
    st.integers(1, 172_800),
)
def test_a_time_of_day_is_the_first_one_after_the_start(
    begun_s: Fraction, wanted_s: int, duration_s: int
) -> None:
    """Law: start plus the time found is the wanted time of day, and lies within one day."""
    micros = round(begun_s * 1_000_000)
    start = datetime(
        2031,
        2,
        3,
        micros // 3_600_000_000,
        micros // 60_000_000 % 60,
        micros // 1_000_000 % 60,
        micros % 1_000_000,
    )
    clock = f"{wanted_s // 3600}:{wanted_s // 60 % 60:02d}:{wanted_s % 60:02d}"
    wanted = rule(start={"clock": clock})
    try:
        ((begin, _),) = found(wanted, start=start, duration_s=Fraction(duration_s))
    except SignalError:
        begin = float((wanted_s - Fraction(micros, 1_000_000)) % 86_400)
        assert begin >= duration_s
    else:
        assert 0 <= begin < 86_400
        assert (micros / 1e6 + begin) % 86_400 == pytest.approx(wanted_s, abs=1e-6)


def test_thousands_of_pairs_are_found_in_about_the_time_of_as_many_lengths() -> None:
    """A stimulus every few seconds of a night: the time must not grow with the square."""
    events = [(text, 4 * k + at) for k in range(4000) for text, at in (("on", 1), ("off", 3))]
    marks = notes(*events)
    began_s = time.process_time()
    lengths = found(
        rule(start=note("on", which="each"), length="2 s"), marks, duration_s=Fraction(16_000)
    )
    between_s = time.process_time()
    pairs = found(
        rule(start=note("on", which="each"), end=note("off")), marks, duration_s=Fraction(16_000)
    )
    took_s = time.process_time() - between_s
    assert pairs == lengths == [(4 * k + 1, 4 * k + 3) for k in range(4000)]
    assert took_s < 20 * (between_s - began_s)
