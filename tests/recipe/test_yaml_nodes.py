"""YAML keeps the meaning of version 1.2, and nothing hostile or careless passes unnamed."""

import math
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.recipe.problems import RecipeError, Report
from waveassay.recipe.yaml_nodes import (
    MAX_ALIASES,
    MAX_BYTES,
    MAX_DEPTH,
    decode,
    read_document,
    value_of,
)


def read(text: str) -> Any:
    report = Report("r.yaml")
    root = read_document(text, report)
    assert report.problems == []
    assert root is not None
    return value_of(root)


def problems(text: str) -> list[str]:
    report = Report("r.yaml")
    read_document(text, report)
    return [str(problem) for problem in report.problems]


# YAML 1.2.2, section 10.3.2: tag resolution of the core schema.
@pytest.mark.parametrize(
    ("written", "meant"),
    [
        ("no", "no"),
        ("yes", "yes"),
        ("on", "on"),
        ("off", "off"),
        ("y", "y"),
        ("true", True),
        ("False", False),
        ("TRUE", True),
        ("tRUE", "tRUE"),
        ("null", None),
        ("~", None),
        ("", None),
        ("Null", None),
        ("010", 10),
        ("0o17", 15),
        ("0xfF", 255),
        ("-12", -12),
        ("+3", 3),
        ("0b11", "0b11"),
        ("1_000", "1_000"),
        ("12:30", "12:30"),
        ("1:30:00", "1:30:00"),
        ("1e-6", 1e-6),
        ("1e3", 1000.0),
        ("1.", 1.0),
        (".5", 0.5),
        ("-.5E+2", -50.0),
        (".", "."),
        ("1e", "1e"),
        ("2020-01-01", "2020-01-01"),
        ("2020-01-01 10:00:00", "2020-01-01 10:00:00"),
        (".inf", math.inf),
        ("-.Inf", -math.inf),
        ("'10'", "10"),
        ('"true"', "true"),
        ("0.5 Hz", "0.5 Hz"),
        ("=", "="),
        ("<<", "<<"),
    ],
)
def test_scalars_follow_the_core_schema(written: str, meant: Any) -> None:
    value = read(f"k: {written}\n")["k"]
    assert value == meant
    assert type(value) is type(meant)


def test_not_a_number_is_one() -> None:
    assert math.isnan(read("k: .nan\n")["k"])


def test_keys_are_text() -> None:
    assert read("{on: 1, 1: 2, null: 3, true: 4, 12:30: 5}") == {
        "on": 1,
        "1": 2,
        "null": 3,
        "true": 4,
        "12:30": 5,
    }


@pytest.mark.parametrize("newline", ["\n", "\r\n", "\r"])
def test_lines_count_alike_with_every_newline(newline: str) -> None:
    text = newline.join(["a: 1", "b: 2", "a: 3", ""])
    assert problems(text) == [
        "r.yaml:3:1: Y108 key 'a' stands twice; first at line 1, column 1",
    ]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("", "r.yaml:1:1: Y103"),
        ("# only a comment\n", "r.yaml:1:1: Y103"),
        ("---\n", "r.yaml:1:1: Y103"),
        ("- a\n", "r.yaml:1:1: Y107"),
        ("text\n", "r.yaml:1:1: Y107"),
        ("a: 1\n---\nb: 2\n", "r.yaml:2:1: Y106"),
        ("a: {b: 1, c: 2, b: 3}\n", "r.yaml:1:17: Y108"),
        ("a:\n\tb: 1\n", "r.yaml:2:1: Y105"),
        ("a:\n  b: 1\n \tc: 1\n", "r.yaml:3:2: Y105"),
        ("a: &x {b: 1}\nc:\n  <<: *x\n", "r.yaml:3:3: Y110"),
        ("a: !!str 12\n", "r.yaml:1:4: Y111"),
        ("a: !!python/object/apply:os.system [echo]\n", "r.yaml:1:4: Y111"),
        ("a: *b\n", "r.yaml:1:4: Y109"),
        ("a: &b {c: *b}\n", "r.yaml:1:11: Y109"),
        ("? [a, b]\n: 1\n", "r.yaml:1:3: Y113"),
        ("k" * 201 + ": 1\n", "r.yaml:1:1: Y113"),
        ("a: [1, 2\nb: 3\n", "r.yaml:2:2: Y104"),
        ("a: {b: 1\n", "r.yaml:2:1: Y104"),
        ("a: b: c\n", "r.yaml:1:5: Y104"),
        ("a: 'b\n", "r.yaml:2:1: Y104"),
        ("a: 1\nbc\nd: 2\n", "r.yaml:2:1: Y104"),
        ("a: @b\n", "r.yaml:1:4: Y104"),
        ("a: %b\n", "r.yaml:1:4: Y104"),
        ('a: "\\q"\n', "r.yaml:1:6: Y104"),
        ('a: "\\UFFFFFFFF"\n', "r.yaml:1:"),
        ('a: "\\ud800"\n', "r.yaml:1:4: Y101"),
        ("a: " + "9" * 5000 + "\n", "r.yaml:1:4: Y114"),
        ("a: 1\nb: \x00\n", "r.yaml:2:4: Y101"),
        ("a: 1\u2028b: 2\n", "r.yaml:1:5: Y101"),
        ("a: 1\n  b: 2\n", "r.yaml:2:4: Y104"),
    ],
)
def test_each_fault_has_its_place(text: str, expected: str) -> None:
    assert [p[: len(expected)] for p in problems(text)] == [expected]


def test_several_faults_of_keys_are_all_named() -> None:
    assert [p.split()[1] for p in problems("a: 1\na: 2\nb: !t 3\nc: {d: 1, d: 2}\n")] == [
        "Y111",
        "Y108",
        "Y108",
    ]


def test_a_few_aliases_are_read() -> None:
    assert read("a: &x [1, 2]\nb: *x\n") == {"a": [1, 2], "b": [1, 2]}


def test_one_alias_too_many_is_refused() -> None:
    text = "a: &x 1\nb: [" + ", ".join(["*x"] * MAX_ALIASES) + "]\n"
    assert read(text)["b"] == [1] * MAX_ALIASES
    assert problems(text.replace("]", ", *x]"))[0].startswith("r.yaml:2:")


def test_a_bomb_of_aliases_is_refused_before_it_is_written_out() -> None:
    """Twelve aliases that each double what came before, and lists of ten, would give 10^7."""
    rows = [f"a0: &a0 [{', '.join(['x'] * 9)}]"]
    rows += [f"a{i}: &a{i} [*a{i - 1}, *a{i - 1}, {', '.join(['x'] * 2000)}]" for i in range(1, 8)]
    found = problems("\n".join(rows) + "\n")
    assert len(found) == 1
    assert ": Y109 more than" in found[0]


@pytest.mark.parametrize("opening", ["[", "{a: "])
def test_deep_nesting_is_refused_and_does_not_exhaust_the_stack(opening: str) -> None:
    found = problems("k: " + opening * 20_000)
    assert len(found) == 1
    assert f": Y112 nested more than {MAX_DEPTH}" in found[0]


def test_a_large_file_is_refused_unread() -> None:
    assert problems("a" * (MAX_BYTES + 1))[0].startswith("r.yaml:1:1: Y102")
    with pytest.raises(RecipeError, match=r"^r\.yaml:1:1: Y102"):
        decode(b"#" * (MAX_BYTES + 1), "r.yaml")


def test_a_byte_order_mark_is_no_part_of_the_text() -> None:
    assert decode(b"\xef\xbb\xbfa: 1\n", "r") == "a: 1\n"
    assert read("\ufeffa: 1\n") == {"a": 1}


@pytest.mark.parametrize(
    ("data", "place"),
    [
        (b"\x89PNG\r\n", "r:1:1"),
        (b"a: 1\nb: \xb5V\n", "r:2:4"),
        (b"\xef\xbb\xbf\xff", "r:1:1"),
        ("a: µV \n".encode() + b"\xe9", "r:2:1"),
        ("a: 1".encode("utf-16"), "r:1:1"),
    ],
)
def test_bytes_that_are_no_text_are_placed(data: bytes, place: str) -> None:
    with pytest.raises(RecipeError) as caught:
        decode(data, "r")
    (problem,) = caught.value.problems
    assert (str(problem.place), problem.code) == (place, "Y101")


@settings(deadline=None)
@given(
    st.text(st.sampled_from("ab:-[]{},&*!|>'\"%@`#?~\t\n\r 0.\\xuU<\x85\ufeff\u2028"), max_size=60)
)
def test_no_text_whatever_crashes_the_reader(text: str) -> None:
    report = Report("r")
    root = read_document(text, report)
    assert root is not None or report.problems
    for problem in report.problems:
        assert problem.place.line >= 1
        assert problem.place.column >= 1
