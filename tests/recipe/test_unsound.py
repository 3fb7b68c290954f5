"""Unsound recipes: each fault at its exact line and column, all at once, in file order.

The files in ``unsound/`` differ from a sound recipe by what their names say.
"""

from pathlib import Path

import pytest

from waveassay.recipe import Problem, RecipeError, check_recipe, find, read_recipe
from waveassay.recipe.problems import in_file_order

FOLDER = Path(__file__).parent / "unsound"

# name -> (line:column, code, part of the message) of every problem, in file order
EXPECTED: dict[str, list[tuple[str, str, str]]] = {
    "alias_bomb": [("5:37", "Y109", "more than 16 aliases")],
    "alias_of_itself": [("7:27", "Y109", "'*x' contains itself")],
    "alias_twice": [("15:11", "R304", "already names the output of feature.band_power")],
    "bad_escape": [("4:27", "Y104", "single quotes leave backslashes alone")],
    "bad_indent": [("9:4", "Y104", "indentation")],
    "band_above_nyquist": [
        ("12:66", "R309", "above the Nyquist frequency 64 Hz"),
        ("12:66", "R309", "the filters before it pass only up to"),
    ],
    "band_outside_filter": [("12:66", "R309", "pass only up to 40 Hz")],
    "bare_number": [("8:39", "R204", "such as '0.5 Hz' (found 0.5)")],
    "binary": [("1:1", "Y101", "byte 0x89")],
    "boolean_for_number": [
        ("2:10", "R203", "a whole number is expected (found yes)"),
        ("8:80", "R203", "a whole number is expected (found true)"),
    ],
    "comments_only": [("1:1", "Y103", "empty")],
    "conditions": [
        ("6:72", "R106", "'end' and 'length' cannot both be given"),
        ("7:20", "R106", "exactly one of annotation, time and clock"),
        ("8:41", "R106", "ends at 30 s, not after its start at 60 s"),
        ("9:26", "R105", "such as 14:30:00"),
        ("9:44", "R204", "such as '4 s' (found 60)"),
    ],
    "control_character": [("4:54", "Y101", "U+0007")],
    "deep_nesting": [("3:33", "Y112", "24 levels")],
    "duplicate_chain": [("14:3", "Y108", "'cortex' stands twice; first at line 6, column 3")],
    "duplicate_key": [("10:40", "Y108", "'length' stands twice; first at line 10, column 27")],
    "empty": [("1:1", "Y103", "empty")],
    "epoch_before_filter": [("9:7", "R305", "stands after epoch.consecutive (line 8)")],
    "latin_1": [("4:39", "Y101", "byte 0xb5")],
    "list_not_mapping": [("1:1", "Y107", "found a list of 1")],
    "many_at_once": [
        ("1:9", "R105", "(found Not Sound)"),
        ("2:10", "R206", "must be greater than 0 (found 0)"),
        ("4:12", "R101", "is missing"),
        ("4:33", "R102", "did you mean 'unit'?"),
        ("8:80", "R203", "(found four)"),
        ("9:7", "R104", "did you mean 'resample'?"),
        ("10:49", "R206", "must be less than 100 % (found 150 %)"),
    ],
    "merge_key": [("15:3", "Y110", "write the values out")],
    "missing_required": [
        ("1:1", "R101", "is missing"),
        ("10:28", "R202", "is missing"),
    ],
    "misspelt_option": [("8:91", "R203", "(found both_way); did you mean 'both_ways'?")],
    "misspelt_parameter": [("8:64", "R201", "did you mean 'order_per_pass'?")],
    "misspelt_stage": [("8:7", "R104", "did you mean 'filter.butterworth'?")],
    "misspelt_top_key": [("2:1", "R102", "did you mean 'conditions'?")],
    "no_source": [("7:7", "R301", "such as load")],
    "not_finite": [
        ("8:80", "R203", "(found .inf)"),
        ("10:35", "R205", "'.inf s' is not a number followed by its unit"),
        ("11:45", "R204", "(found .nan)"),
    ],
    "nothing_read": [("3:1", "R101", "names none"), ("4:1", "R101", "names none")],
    "nothing_to_take": [("11:7", "R302", "no step before it gives them; spectrum.average,")],
    "number_for_text": [("1:9", "R203", "a text is expected (found 12)")],
    "octal_meant": [("8:80", "R203", "a whole number is expected (found 04.5)")],
    "on_unknown": [("13:31", "R303", "did you mean 'feature.band_power'?")],
    "origins": [
        ("15:3", "R107", "did you mean 'high_pass'?"),
        ("16:87", "R108", "such as '0.5 Hz' (found 1)"),
        ("17:51", "R203", "(found guessed)"),
    ],
    "parameters_not_indented": [("10:7", "R103", "'rate' is a parameter of resample; indent")],
    "precision": [("3:12", "R203", "must be one of 'standard' or 'double' (found doubel)")],
    "precision_alternative": [
        ("16:64", "R108", "must be one of 'standard' or 'double' (found single)"),
        ("17:3", "R107", "recipe has no parameter 'precison'; did you mean 'precision'?"),
    ],
    "reserved_chain": [("6:3", "R105", "names a section")],
    "tab_indent": [("9:1", "Y105", "indent with spaces")],
    "tag": [("2:10", "Y111", "'!!int'")],
    "too_many_tapers": [("11:62", "R309", "2 NW - 1")],
    "two_documents": [("14:1", "Y106", "one document")],
    "two_stages_in_a_step": [("10:7", "R103", "'resample' is named already")],
    "unclosed_bracket": [("12:78", "Y104", "opened at line 12, column 43")],
    "unknown_signal": [("7:24", "R306", "did you mean 'frontal'?")],
    "wrong_dimension": [("8:57", "R205", "'s' cannot be turned into 'Hz' (found 40 s)")],
    "wrong_signal_unit": [("4:39", "R205", "'uVolt' is not a known unit")],
    "wrong_unit": [("8:57", "R205", "'Hx' is not a known unit (found 40 Hx)")],
}


def test_every_file_is_in_the_table() -> None:
    assert {path.stem for path in FOLDER.glob("*.yaml")} == set(EXPECTED)


def problems_of(path: Path) -> tuple[Problem, ...]:
    try:
        text, shown = find(str(path))
        return check_recipe(text, shown).problems
    except RecipeError as error:
        return error.problems


@pytest.mark.parametrize("name", sorted(EXPECTED))
def test_each_problem_has_its_place_code_and_message(name: str) -> None:
    path = FOLDER / f"{name}.yaml"
    found = problems_of(path)
    assert [(f"{p.place.line}:{p.place.column}", p.code) for p in found] == [
        (place, code) for place, code, _ in EXPECTED[name]
    ]
    for problem, (place, code, part) in zip(found, EXPECTED[name], strict=True):
        assert part in problem.message
        assert str(problem).startswith(f"{path}:{place}: {code} ")
    assert found == in_file_order(found)
    with pytest.raises(RecipeError) as caught:
        read_recipe(str(path))
    assert caught.value.exit_code == 2
    assert str(caught.value).splitlines() == [str(p) for p in found]
