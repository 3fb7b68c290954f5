"""Parameters and grammar: what is wrong is said in plain words, with what was found."""

import pytest

from recipe_stages import HEAD, REGISTRY, registry_of, with_chain
from waveassay.contract import Hertz, Kind, Params, Stage
from waveassay.recipe import check_recipe, load_registry

READ = "load: {signals: [eeg]}"


def said(text: str) -> list[str]:
    return [str(p).removeprefix("r:") for p in check_recipe(text, "r", REGISTRY).problems]


def of_step(step: str) -> list[str]:
    """Return what is said of the second step of a chain, which stands in line 9."""
    problems = check_recipe(with_chain(READ, step), "r", REGISTRY).problems
    return [str(p).removeprefix("r:") for p in problems if p.severity == "error"]


@pytest.mark.parametrize(
    ("step", "expected"),
    [
        (
            "filter.smooth: {low_pass: -1 Hz}",
            "9:33: R206 c.filter.smooth.low_pass: must be greater than 0 Hz (found -1 Hz)",
        ),
        (
            "filter.smooth: {low_pass: 1 Hz, order: 9}",
            "9:46: R206 c.filter.smooth.order: must be at most 8 (found 9)",
        ),
        (
            "filter.smooth: {low_pass: 1 Hz, order: 2.5}",
            "9:46: R203 c.filter.smooth.order: a whole number is expected (found 2.5)",
        ),
        (
            "filter.smooth: {low_pass: 1 Hz, gain: true}",
            "9:45: R203 c.filter.smooth.gain: a number is expected (found true)",
        ),
        (
            "filter.smooth: {low_pass: 1 Hz, gain: 1e999}",
            "9:45: R203 c.filter.smooth.gain: a finite number is expected (found 1e999)",
        ),
        (
            "filter.smooth: {low_pass: 1 Hz, gain: '2'}",
            "9:45: R203 c.filter.smooth.gain: a number is expected (found '2')",
        ),
        (
            "filter.smooth: {low_pass: 1 Hz, careful: no}",
            "9:48: R203 c.filter.smooth.careful: true or false is expected (found no)",
        ),
        (
            "filter.smooth: {}",
            "9:22: R202 c.filter.smooth.low_pass: is missing: Upper end of what passes",
        ),
        (
            "filter.smooth:",
            "9:7: R202 c.filter.smooth.low_pass: is missing: Upper end of what passes",
        ),
        (
            "filter.smooth: 40 Hz",
            "9:22: R203 c.filter.smooth: a mapping of names to values is expected (found 40 Hz)",
        ),
        (
            "exclude.range: {range: 250}",
            "9:30: R204 c.exclude.range.range: a value with the signal's unit is expected, "
            "such as '250 uV' (found 250)",
        ),
        (
            "epoch.cut: {length: 4 s, overlap: 0.5}",
            "9:41: R204 c.epoch.cut.overlap: a share with its unit is expected, such as '50 %' "
            "(found 0.5)",
        ),
        (
            "epoch.cut: {length: 4 s, overlap: 100 %}",
            "9:41: R206 c.epoch.cut.overlap: must be less than 100 % (found 100 %)",
        ),
        (
            "{epoch.cut: {length: 4 s}, onn: [eeg]}",
            "9:34: R103 c.epoch.cut: unknown key 'onn' beside 'epoch.cut'; did you mean 'on'? "
            "(allowed: on, as, keep)",
        ),
    ],
)
def test_one_fault_gives_one_line(step: str, expected: str) -> None:
    assert of_step(step) == [expected]


def test_every_fault_of_a_nested_parameter_has_its_own_place() -> None:
    text = with_chain(
        READ,
        "epoch.cut: {length: 4 s}",
        "spectrum.plain",
        "feature.power: {bands: {a: [8, 13 s], b: [1 Hz], c: [1 Hz, 2 Hz, 3 Hz], d: x}}",
    )
    assert [line.split(" ")[:3] for line in said(text)] == [
        ["11:35:", "R204", "c.feature.power.bands.a.0:"],
        ["11:38:", "R205", "c.feature.power.bands.a.1:"],
        ["11:48:", "R202", "c.feature.power.bands.b.1:"],
        ["11:59:", "R206", "c.feature.power.bands.c:"],
        ["11:82:", "R203", "c.feature.power.bands.d:"],
    ]


def test_the_options_of_a_union_are_said_in_one_line() -> None:
    text = with_chain(
        READ,
        "epoch.cut: {length: 4 s}",
        "spectrum.plain",
        "feature.power: {bands: {a: [8 Hz, 13 Hz]}, within: some}",
    )
    assert said(text) == [
        "11:58: R203 c.feature.power.within: a list is expected; or must be 'all' (found some)"
    ]


def test_a_step_without_parameters_may_be_a_text_a_null_or_an_empty_mapping() -> None:
    digests = set()
    for table in ("export.table", "export.table:", "export.table: {}"):
        text = with_chain(
            READ,
            "epoch.cut: {length: 4 s}",
            "spectrum.plain",
            "feature.power: {bands: {a: [8 Hz, 13 Hz]}}",
            table,
        )
        recipe = check_recipe(text, "r", REGISTRY).recipe
        assert recipe is not None
        digests.add(recipe.digest)
    assert len(digests) == 1


def test_yaml_faults_and_faults_of_the_recipe_are_told_together() -> None:
    text = with_chain("load: {signals: [eeg], signals: [artery]}", "filter.smoth: {}")
    assert [line.split(" ")[:2] for line in said(text)] == [["8:30:", "Y108"], ["9:7:", "R104"]]


def test_a_check_of_two_parameters_by_the_stage_is_told_at_the_step() -> None:
    from pydantic import model_validator

    class Both(Params):
        low: Hertz
        high: Hertz

        @model_validator(mode="after")
        def in_order(self) -> "Both":
            if self.low >= self.high:
                raise ValueError("low comes before high")
            return self

    stage = Stage("acme.both", 1, Both, (Kind.SIGNALS,), Kind.SIGNALS, lambda p, g, f: g)
    text = with_chain(READ, "acme.both: {low: 2 Hz, high: 1 Hz}")
    problems = check_recipe(text, "r", registry_of(stage)).problems
    assert [str(p) for p in problems] == ["r:9:18: R207 c.acme.both: low comes before high"]


def test_a_validator_that_crashes_is_laid_to_its_author() -> None:
    from pydantic import field_validator

    class Crash(Params):
        low: Hertz

        @field_validator("low")
        @classmethod
        def crash(cls, value: float) -> float:
            raise RuntimeError("oh")

    stage = Stage("acme.crash", 1, Crash, (Kind.SIGNALS,), Kind.SIGNALS, lambda p, g, f: g)
    text = with_chain(READ, "acme.crash: {low: 2 Hz}")
    (problem,) = check_recipe(text, "r", registry_of(stage)).problems
    assert problem.code == "R310"
    assert "testing 1.0" in problem.message
    assert "RuntimeError: oh" in problem.message


@pytest.mark.parametrize(
    ("condition", "expected"),
    [
        ("{start: {annotation: a, time: 3 s}}", "7:14: R106"),
        ("{end: {clock: '12:00', time: 3 s}}", "7:12: R106"),
        ("{start: {}}", "7:14: R106"),
        ("{start: {annotation: ''}}", "7:27: R206"),
        ("{start: {time: 3 s, which: last}}", "7:33: R106"),
        ("{start: {annotation: a, which: frist}}", "7:37: R203"),
        ("{start: {time: -3 s}}", "7:21: R206"),
        ("{start: {clock: 12:60}}", "7:22: R105"),
        ("{length: 0 s}", "7:15: R206"),
        ("{strat: {time: 1 s}}", "7:7: R102"),
        ("[]", "7:6: R203"),
    ],
)
def test_a_condition_that_contradicts_itself_is_placed(condition: str, expected: str) -> None:
    head = HEAD + f"conditions:\n  a: {condition}\n"
    assert said(with_chain(READ, head=head))[0].startswith(expected)


@pytest.mark.parametrize("name", ["''", "' a'", "'a '", ".a"])
def test_a_condition_has_a_name(name: str) -> None:
    head = HEAD + f"conditions:\n  {name}: {{length: 3 s}}\n"
    assert said(with_chain(READ, head=head))[0].startswith("7:3: R105")


@pytest.mark.parametrize(
    "condition",
    [
        "{start: {annotation: eyes closed, which: each}, length: 2 min}",
        "{start: {clock: 14:30:00, offset: -1 s}}",
        "{end: {time: 0 s}}",
        "{}",
        "",
    ],
)
def test_a_sound_condition_is_taken(condition: str) -> None:
    head = HEAD + f"conditions:\n  Eyes closed: {condition}\n"
    recipe = check_recipe(with_chain(READ, head=head), "r", REGISTRY).recipe
    assert recipe is not None
    assert list(recipe.conditions) == ["Eyes closed"]


GOOD = (READ, "epoch.cut: {length: 4 s}", "spectrum.plain")


@pytest.mark.parametrize(
    ("origin", "expected"),
    [
        ("c.epoch.cut.length: {origin: site}", None),
        ("c.epoch.cut.overlap: {origin: default}", None),
        ("c.epoch.cut.overlap: {origin: assumed, alternatives: [25 %, 75 %]}", None),
        ("signals.eeg.unit: {origin: stated, where: p. 2}", None),
        ("c.load.signals: {origin: site, alternatives: [[artery]]}", None),
        ("c.epoch.cut.overlap: {origin: assumed, alternatives: [25 %, 175 %]}", "12:63: R108"),
        ("c.epoch.cut.overlap: {origin: assumed, alternatives: [25]}", "12:57: R108"),
        ("c.spectrum.plain.window: {origin: assumed, alternatives: [han]}", "12:61: R108"),
        ("c.epoch.cut.overlp: {origin: site}", "12:3: R107"),
        ("c.epoch.cut: {origin: site}", "12:3: R107"),
        ("d.epoch.cut.overlap: {origin: site}", "12:3: R107"),
        ("c.epoch.cut#2.overlap: {origin: site}", "12:3: R107"),
        ("c.epoch.cut.overlap: {}", "12:24: R101"),
    ],
)
def test_an_origin_names_a_parameter_and_its_alternatives_fit(
    origin: str, expected: str | None
) -> None:
    problems = check_recipe(with_chain(*GOOD, tail=f"origins:\n  {origin}\n"), "r", REGISTRY).errors
    assert len(problems) == (expected is not None)
    assert all(str(p).startswith(f"r:{expected} ") for p in problems)


def test_an_origin_in_a_faulty_chain_is_not_called_wrong() -> None:
    tail = "origins:\n  c.epoch.kut.length: {origin: site}\n  e.x.y: {origin: site}\n"
    found = said(with_chain(READ, "epoch.kut: {length: 4 s}", tail=tail))
    assert [line.split(" ")[1] for line in found] == ["R104", "R107"]
    assert found[1].startswith("12:3:")


def test_what_holds_for_all_chains_has_a_name_that_a_chain_may_have_too() -> None:
    """An address of three parts or more is of the chain, one of two of the recipe."""
    chain = with_chain(*GOOD).replace("  c:\n", "  recipe:\n")
    right = (
        "origins:\n  recipe.precision: {origin: site}\n  recipe.epoch.cut.length: {origin: site}\n"
    )
    checked = check_recipe(chain + right, "r", REGISTRY)
    assert checked.errors == ()
    wrong = "origins:\n  recipe.epoch.kut.length: {origin: site}\n"
    (line,) = (text for text in said(chain + wrong) if "R107" in text)
    assert "no such step; did you mean 'recipe.epoch.cut.length'?" in line


def test_a_recipe_knows_where_its_parameters_stand() -> None:
    recipe = check_recipe(with_chain(*GOOD), "r", REGISTRY).recipe
    assert recipe is not None
    places = recipe.chains["c"].steps[1].places
    assert {name: str(place) for name, place in places.items()} == {
        "": "r:9:7",
        "length": "r:9:27",
    }


def test_the_shipped_recipes_are_sound() -> None:
    from waveassay.recipe import library

    assert library.names()
    for name in library.names():
        checked = check_recipe(library.text(name), name, load_registry())
        assert checked.errors == ()
        assert checked.recipe is not None
        assert checked.recipe.name == name
