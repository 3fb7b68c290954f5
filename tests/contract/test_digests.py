"""One value has one text; values that differ have texts that differ."""

import hashlib
import json
import random
from enum import Enum, IntEnum, StrEnum
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.contract.digests import canonical_json, digest

FINITE = st.floats(allow_nan=False, allow_infinity=False)
VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | FINITE | st.text(),
    lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
    max_leaves=20,
)


def shuffled(value: Any, order: random.Random) -> Any:
    if isinstance(value, dict):
        items = [(key, shuffled(item, order)) for key, item in value.items()]
        order.shuffle(items)
        return dict(items)
    return [shuffled(item, order) for item in value] if isinstance(value, list) else value


def typed(value: Any) -> Any:
    """Return a value that equals another only where types and signs of zero are equal too."""
    if isinstance(value, dict):
        return {key: typed(item) for key, item in value.items()}
    if isinstance(value, list):
        return [typed(item) for item in value]
    return (type(value).__name__, repr(value))


@settings(deadline=None)
@given(VALUES)
def test_the_text_reads_back_to_the_same_value_and_type(value: Any) -> None:
    assert typed(json.loads(canonical_json(value))) == typed(value)


@settings(deadline=None)
@given(VALUES, st.randoms(use_true_random=False))
def test_the_order_of_keys_is_irrelevant(value: Any, order: random.Random) -> None:
    assert canonical_json(shuffled(value, order)) == canonical_json(value)


@settings(deadline=None)
@given(VALUES, VALUES)
def test_two_values_share_a_digest_only_if_they_are_the_same(one: Any, other: Any) -> None:
    assert (digest(one) == digest(other)) == (typed(one) == typed(other))


def test_what_is_told_apart() -> None:
    values = [1, 1.0, True, "1", "1.0", "true", None, "null", 0.0, -0.0, 0, False, [], {}, "", [1]]
    assert len({digest(value) for value in values}) == len(values)


class Colour(Enum):
    RED = "red"


class Word(StrEnum):
    RED = "red"


class Number(IntEnum):
    TWO = 2


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ((1, (2,)), [1, [2]]),
        (Fraction(2, 4), "1/2"),
        (Fraction(4), "4/1"),
        (Fraction(-1, 3), "-1/3"),
        (Colour.RED, "red"),
        (Word.RED, "red"),
        (Number.TWO, 2),
        ({Word.RED: 1}, {"red": 1}),
        (np.float64(0.1), 0.1),
    ],
)
def test_what_is_one_and_the_same(one: object, other: object) -> None:
    assert canonical_json(one) == canonical_json(other)


def test_the_text_is_compact_sorted_utf8() -> None:
    assert canonical_json({"b": [1, 0.5], "a": "µV"}) == '{"a":"µV","b":[1,0.5]}'.encode()


def test_the_digest_is_the_sha256_of_the_text() -> None:
    # The SHA-256 of "abc" is an example of FIPS 180-4; here the text carries JSON's quotes.
    abc = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert hashlib.sha256(b"abc").hexdigest() == abc
    assert digest("abc") == hashlib.sha256(b'"abc"').hexdigest()


def test_a_name_that_is_not_utf8_survives() -> None:
    name = b"p\xe903".decode("utf-8", "surrogateescape")
    text = canonical_json({"path": name})
    text.decode("utf-8")
    assert json.loads(text) == {"path": name}


@pytest.mark.parametrize(
    "value",
    [b"x", {1, 2}, Path("x"), 1j, np.int64(1), np.zeros(2), object(), {1: 2}, {None: 1}, [b"x"]],
)
def test_anything_else_is_refused(value: object) -> None:
    with pytest.raises(TypeError):
        canonical_json(value)


@pytest.mark.parametrize("value", [float("nan"), float("inf"), -float("inf"), {"a": [np.nan]}])
def test_numbers_that_are_not_finite_are_refused(value: object) -> None:
    with pytest.raises(ValueError, match="no canonical form"):
        canonical_json(value)
