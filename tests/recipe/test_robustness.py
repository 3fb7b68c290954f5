"""Whatever is done to a recipe, checking it ends in a recipe or in placed problems."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.recipe import check_recipe, library, load_registry, resolved_yaml

_TEXTS = [library.text(name) for name in library.names()]
_LINES = [line for text in _TEXTS for line in text.splitlines()]
_BITS = st.sampled_from(
    (
        *("{", "}", "[", "]", ":", ": ", "- ", "#2", "\t", "null", "true", "-1", ".nan", "1e999"),
        *("*a", "&a ", "  ", "\n", "'", '"', "0 Hz", "1 s", "50 %", "on: x", "as: y", "keep: 1"),
        *("?", "~", "[[]]", "{}", "? "),
    )
)


@st.composite
def damaged(draw: st.DrawFn) -> str:
    """Draw a shipped recipe with a few places overwritten, or lines moved about."""
    text = draw(st.sampled_from(_TEXTS))
    for _ in range(draw(st.integers(1, 4))):
        if draw(st.booleans()):
            at = draw(st.integers(0, len(text)))
            length = draw(st.integers(0, 12))
            text = text[:at] + draw(_BITS) + text[at + length :]
        else:
            lines = text.splitlines()
            at = draw(st.integers(0, len(lines)))
            lines[at : at + draw(st.integers(0, 2))] = [draw(st.sampled_from(_LINES))]
            text = "\n".join(lines) + "\n"
    return text


@settings(deadline=None, max_examples=60)
@given(damaged())
def test_a_damaged_recipe_gives_problems_and_no_crash(text: str) -> None:
    checked = check_recipe(text, "r", load_registry())
    assert (checked.recipe is None) is bool(checked.errors)
    lines = text.count("\n") + text.count("\r") + 1
    for problem in checked.problems:
        assert 1 <= problem.place.line <= lines
        assert problem.place.column >= 1
        assert "\n" not in str(problem)
    if checked.recipe is not None:
        again = check_recipe(resolved_yaml(checked.recipe), "r", load_registry())
        assert again.recipe is not None
        assert again.recipe.digest == checked.recipe.digest


@pytest.mark.parametrize("value", ["", "3", "x", "[]", "{}", "[{}]", "{a: {}}", "[[x]]", "null"])
@pytest.mark.parametrize(
    "key",
    ["recipe", "edition", "title", "citation", "signals", "conditions", "chains", "origins", "on"],
)
def test_any_kind_of_value_anywhere_is_taken_or_told(key: str, value: str) -> None:
    base = {
        "recipe": "r",
        "edition": "1",
        "signals": "{e: {labels: [E], unit: uV}}",
        "chains": "{c: [{load: {signals: [e]}}]}",
    }
    text = "".join(f"{k}: {v}\n" for k, v in {**base, key: value}.items())
    checked = check_recipe(text, "r", load_registry())
    assert (checked.recipe is None) is bool(checked.errors)
