"""What the recipe writer writes, readers of YAML 1.1 and of YAML 1.2 read back alike."""

from typing import Any

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.recipe.problems import Report
from waveassay.recipe.yaml_nodes import read_document, value_of
from waveassay.recipe.yaml_writer import scalar, written

_TRAPS = (
    *("", "no", "Yes", "on", "y", "null", "~", "=", "<<", "12:30", "2020-01-01", "1_000", "0x1F"),
    *(
        "010",
        "1e3",
        ".5",
        "1.",
        "0.5 Hz",
        "-3 dB",
        "50 %",
        "a: b",
        "a #b",
        "- a",
        " a",
        "a ",
        "a\nb",
    ),
    *("[a]", "{a}", "a, b", "&a", "*a", "!a", "%a", "@a", "`a", "'a", '"a', "EEG *", "µV", "\x85"),
)
_TEXT = st.text(st.characters(exclude_categories=["Cs"]), max_size=20) | st.sampled_from(_TRAPS)
_VALUE = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(10**20), 10**20)
    | st.floats(allow_nan=False, allow_infinity=False)
    | _TEXT,
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(st.text("abc_", min_size=1, max_size=9), inner, max_size=3)
    ),
    max_leaves=6,
)


@settings(deadline=None)
@given(st.dictionaries(_TEXT.filter(bool), _VALUE, min_size=1, max_size=4))
def test_what_is_written_reads_back_to_the_same(document: dict[str, Any]) -> None:
    text = written(document)
    report = Report("r")
    root = read_document(text, report)
    assert report.problems == []
    assert root is not None
    assert value_of(root) == document
    assert yaml.safe_load(text) == document


@pytest.mark.parametrize("text", ["0.5 Hz", "-3 dB", "50 %", "eeg", "250 uV", "cortex.a#2.rate"])
def test_quantities_and_words_stay_plain(text: str) -> None:
    assert scalar(text) == text
