"""Which step takes what: the most recent output of a kind it accepts, or what ``on`` names."""

import pytest

from recipe_stages import REGISTRY, with_chain
from waveassay.contract import Kind
from waveassay.recipe import Chain, check_recipe

READ = "load: {signals: [eeg, artery]}"
SMOOTH = "filter.smooth: {low_pass: 40 Hz}"
CUT = "epoch.cut: {length: 4 s}"
POWER = "feature.power: {bands: {a: [8 Hz, 13 Hz]}}"


def chain(*steps: str) -> Chain:
    checked = check_recipe(with_chain(*steps), "r", REGISTRY)
    assert checked.errors == ()
    assert checked.recipe is not None
    return checked.recipe.chains["c"]


def said(*steps: str) -> list[str]:
    return [str(p)[2:] for p in check_recipe(with_chain(*steps), "r", REGISTRY).problems]


def test_steps_in_a_row_take_from_one_another() -> None:
    steps = chain(READ, SMOOTH, CUT, "spectrum.plain", POWER, "export.table").steps
    assert [step.takes_from for step in steps] == [None, 0, 1, 2, 3, 4]
    assert [step.given for step in steps] == [
        Kind.SIGNALS,
        Kind.SIGNALS,
        Kind.EPOCHS,
        Kind.SPECTRA,
        Kind.FEATURES,
        Kind.TABLE,
    ]


def test_a_step_takes_the_most_recent_output_of_its_kind_past_others() -> None:
    steps = chain(READ, CUT, "spectrum.plain", POWER, "export.figure", POWER, "export.table").steps
    assert [step.takes_from for step in steps] == [None, 0, 1, 2, 2, 2, 5]


def test_what_is_given_may_depend_on_what_is_taken() -> None:
    steps = chain(READ, CUT, "spectrum.plain", "spectrum.mean", POWER, "export.table").steps
    assert (steps[4].taken, steps[4].given) == (Kind.AVERAGES, Kind.AVERAGE_FEATURES)


def test_a_stage_that_stands_again_gets_a_suffix() -> None:
    steps = chain(READ, SMOOTH, "resample: {rate: 100 Hz}", SMOOTH, SMOOTH).steps
    assert [step.name for step in steps] == [
        "load",
        "filter.smooth",
        "resample",
        "filter.smooth#2",
        "filter.smooth#3",
    ]


@pytest.mark.parametrize("named", ["short", "epoch.cut"])
def test_on_names_an_earlier_output_by_its_name_or_its_step(named: str) -> None:
    steps = chain(
        READ,
        "{epoch.cut: {length: 1 s}, as: short}",
        CUT,
        f"{{spectrum.plain: , on: {named}}}",
        "{spectrum.plain: , on: [epoch.cut#2, eeg]}",
    ).steps
    assert [step.takes_from for step in steps] == [None, 0, 0, 1, 2]
    assert steps[1].alias == "short"
    assert [step.signals for step in steps[3:]] == [None, ("eeg",)]


def test_an_epoch_step_before_a_filter_is_an_error_that_says_why() -> None:
    assert said(READ, CUT, SMOOTH) == [
        "10:7: R305 c.filter.smooth: stands after epoch.cut (line 9), which has already cut its "
        "epochs from the signal as it was before this step; move this step before epoch.cut, or "
        "say with 'on' what it is to take"
    ]


def test_signals_may_be_filtered_after_epochs_where_on_says_so() -> None:
    steps = chain(READ, CUT, "{filter.smooth: {low_pass: 9 Hz}, on: load}", CUT).steps
    assert [step.takes_from for step in steps] == [None, 0, 0, 2]


@pytest.mark.parametrize(
    ("steps", "expected"),
    [
        ((SMOOTH,), "8:7: R301 c.filter.smooth: a chain begins with a step that reads signals"),
        (
            (READ, POWER),
            "9:7: R302 c.feature.power: needs spectra or averaged spectra; no step before it "
            "gives them; spectrum.mean and spectrum.plain do",
        ),
        ((READ, CUT, "export.figure"), "10:7: R302 c.export.figure: needs spectra or"),
        ((READ, "{filter.smooth: {low_pass: 9 Hz}, on: [egg]}"), "9:46: R303 c.filter.smooth.on"),
        (
            (READ, f"{{{CUT}, on: later}}", f"{{{CUT}, as: later}}"),
            "9:38: R303 c.epoch.cut.on: 'la",
        ),
        ((READ, f"{{{CUT}, on: [load, load]}}"), "9:45: R303 c.epoch.cut.on: a step takes one"),
        ((READ, CUT, f"{{{CUT}, on: epoch.cut}}"), "10:38: R307 c.epoch.cut#2.on: epoch.cut gives"),
        ((READ, "{load: {signals: [eeg]}, on: load}"), "9:36: R307 c.load#2.on: a source"),
        ((READ, f"{{{CUT}, as: eeg}}"), "9:38: R304 c.epoch.cut.as: 'eeg' already names a signal"),
        ((READ, f"{{{CUT}, as: load}}"), "9:38: R304 c.epoch.cut.as: 'load' is the name of a"),
        ((READ, f"{{{CUT}, as: Short}}"), "9:38: R105 c.epoch.cut.as"),
        ((READ, f"{{{CUT}, as: on}}"), "9:38: R105 c.epoch.cut.as"),
        ((READ, f"{{{CUT}, on: []}}"), "9:38: R203 c.epoch.cut.on"),
        ((READ, f"{{{CUT}, on: [1]}}"), "9:39: R203 c.epoch.cut.on"),
        (("load: {signals: [eeg]}", f"{{{CUT}, on: artery}}"), "9:38: R303 c.epoch.cut.on: signal"),
        (("load: {signals: [eeg, egg]}",), "8:29: R306 c.load: the recipe describes no signal"),
    ],
)
def test_what_does_not_fit_is_placed(steps: tuple[str, ...], expected: str) -> None:
    found = [line for line in said(*steps) if " W" not in line]
    assert len(found) == 1
    assert found[0].startswith(expected)


def test_an_export_is_no_input() -> None:
    steps = (
        READ,
        CUT,
        "spectrum.plain",
        POWER,
        "export.table",
        "{export.table: , on: export.table}",
    )
    assert said(*steps)[0].startswith("13:28: R307 c.export.table#2.on: export.table gives a table")


def test_one_fault_does_not_draw_others_behind_it() -> None:
    found = said(READ, "epoch.kut: {length: 4 s}", "spectrum.plain", POWER, "export.table")
    assert [line.split(" ")[1] for line in found] == ["R104"]


def test_outputs_and_signals_that_nothing_uses_are_warned_of() -> None:
    assert said("load: {signals: [eeg]}", CUT, "spectrum.plain", POWER, "spectrum.mean", POWER) == [
        "5:3: W403 signals.artery: no chain reads this signal",
        "11:7: W402 c.feature.power: gives features that no later step uses"
        "; put an export.table behind it, or leave it out",
        "13:7: W402 c.feature.power#2: gives average features that no later step uses"
        "; put an export.table behind it, or leave it out",
    ]


def test_a_table_uses_every_feature_before_it() -> None:
    assert said(READ, CUT, "spectrum.plain", POWER, POWER, "export.table", POWER) == [
        "14:7: W402 c.feature.power#3: gives features that no later step uses"
        "; put an export.table behind it, or leave it out"
    ]


def test_a_name_that_another_steps_columns_have_already_is_refused() -> None:
    """Two steps under one name would share a column, and one of them would be lost."""
    from waveassay.recipe import check_recipe

    text = """\
recipe: clash
edition: 1
title: A clash of names
purpose: None
signals:
  frontal: {labels: [Fp1], unit: uV}
chains:
  c:
    - load: {signals: [frontal]}
    - epoch.consecutive: {length: 4 s}
    - spectrum.periodogram: {}
    - feature.spectral_edge: {within: [1 Hz, 30 Hz]}
    - feature.spectral_entropy: {within: [1 Hz, 30 Hz]}
      as: spectral_edge
    - export.table: {}
"""
    (problem,) = check_recipe(text, "r.yaml").errors
    assert str(problem).startswith("r.yaml:14:11: R304 ")
    assert "feature.spectral_edge (line 12)" in str(problem)
