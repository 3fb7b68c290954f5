"""The digest covers what can change a number, and nothing else; what is written reads back."""

import random
from typing import Any

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import TypeAdapter

from recipe_stages import REGISTRY, LimitParams
from waveassay.contract import Share
from waveassay.contract.quantity import Quantity
from waveassay.recipe import (
    Recipe,
    canonical_parameters,
    check_recipe,
    library,
    load_registry,
    parameters,
    resolved_yaml,
)
from waveassay.recipe.fields import normal_quantity

TEXT = """\
recipe: tried
edition: 1
title: A title
signals:
  eeg: {labels: [Fp1, "EEG Fp1"], unit: uV}
  artery: {labels: [ABP], unit: mmHg, optional: true}
conditions:
  calm: {start: {annotation: eyes closed, offset: 1 s}, length: 120 s}
chains:
  c:
    - load: {signals: [eeg, artery]}
    - filter.smooth: {low_pass: 30 Hz, order: 2, gain: 0.1}
      on: [eeg]
      as: smooth
    - exclude.range: {range: 0.25 mV}
      on: [load]
      keep: true
    - epoch.cut: {length: 4 s}
      on: smooth
    - spectrum.plain
    - feature.power:
        bands: {slow: [0.5 Hz, 4 Hz], alpha: [8 Hz, 13 Hz]}
        within: [0.5 Hz, 30 Hz]
    - export.table
    - epoch.cut: {length: 2 s}
      on: exclude.range
    - filter.smooth: {low_pass: 20 Hz}
      on: [smooth]
origins:
  c.epoch.cut.length: {origin: assumed, why: usual, alternatives: [2 s, 8 s]}
  c.feature.power.bands: {origin: stated, where: "p. 3: bands"}
"""


def sound(text: str) -> Recipe:
    checked = check_recipe(text, "r", REGISTRY)
    assert [str(p) for p in checked.errors] == []
    assert checked.recipe is not None
    return checked.recipe


DIGEST = sound(TEXT).digest


@pytest.mark.parametrize(
    ("written", "otherwise"),
    [
        ("30 Hz, order", "30.0 Hz, order"),
        ("low_pass: 30 Hz", "low_pass: 0.03 kHz"),
        ("low_pass: 30 Hz", "low_pass: '30Hz'"),
        ("low_pass: 30 Hz", "low_pass: +3.0e1 Hz"),
        ("0.25 mV", "250 uV"),
        ("0.25 mV", "250 µV"),
        ("0.25 mV", "0.00025 V"),
        ("unit: uV", "unit: µV"),
        ("4 s}", "4000 ms}"),
        ("120 s", "2 min"),
        ("gain: 0.1", "gain: 1e-1"),
        ("export.table\n", "export.table  # a comment\n\n# another\n"),
        ("order: 2", "order: 0x2"),
        ("{low_pass: 30 Hz, order: 2, gain: 0.1}", "{gain: 0.1, order: 2, low_pass: 30 Hz}"),
        ("{low_pass: 30 Hz, order: 2", "{careful: false, low_pass: 30 Hz, order: 2"),
        ("epoch.cut: {length: 4 s}", "epoch.cut: {length: 4 s, overlap: 50 %}"),
        (
            "slow: [0.5 Hz, 4 Hz], alpha: [8 Hz, 13 Hz]",
            "alpha: [8 Hz, 13 Hz], slow: [0.5 Hz, 4 Hz]",
        ),
        ("title: A title\n", "title: Another\npurpose: For something\n"),
        ("title: A title\n", "citation: {text: Somebody, doi: 10.1/x}\n"),
        ("title: A title\n", "precision: standard\n"),
        ("keep: true", "keep: false"),
        ("      keep: true\n", ""),
        ("origin: assumed", "origin: site"),
        ("    - export.table\n", "    - export.table:\n"),
        ("optional: true", "modality: null, optional: true"),
    ],
)
def test_what_changes_no_number_changes_no_digest(written: str, otherwise: str) -> None:
    assert written in TEXT
    assert sound(TEXT.replace(written, otherwise)).digest == DIGEST


def test_origins_change_no_digest() -> None:
    assert sound(TEXT[: TEXT.index("origins:")]).digest == DIGEST


@pytest.mark.parametrize(
    ("written", "otherwise"),
    [
        ("recipe: tried", "recipe: tried-again"),
        ("edition: 1", "edition: 2"),
        ("edition: 1", "edition: 1\nprecision: double"),
        ("30 Hz, order", "30.000000000000004 Hz, order"),
        ("order: 2", "order: 3"),
        ("gain: 0.1", "gain: 0.10000000000000002"),
        ("0.25 mV", "0.251 mV"),
        ("0.25 mV", "0.25 mmHg"),
        ("4 s}", "4 s, overlap: 25 %}"),
        ("4 Hz]", "4.5 Hz]"),
        ("alpha:", "alfa:"),
        ("within: [0.5 Hz, 30 Hz]", "within: all"),
        ("120 s", "121 s"),
        ("offset: 1 s", "offset: -1 s"),
        ("eyes closed", "eyes open"),
        ("calm:", "quiet:"),
        ("Fp1, ", "Fp2, "),
        ("unit: mmHg", "unit: kPa"),
        ("optional: true", "optional: false"),
        ("  c:\n", "  d:\n"),
        ("on: [eeg]", "on: [artery]"),
        ("on: smooth", "on: load"),
        ("    - spectrum.plain\n", "    - spectrum.plain: {window: boxcar}\n"),
    ],
)
def test_what_can_change_a_number_changes_the_digest(written: str, otherwise: str) -> None:
    assert written in TEXT
    changed = TEXT[: TEXT.index("origins:")].replace(written, otherwise)
    assert sound(changed).digest != DIGEST


def _shuffled(value: Any, order: random.Random) -> Any:
    if isinstance(value, dict):
        items = list(value.items())
        order.shuffle(items)
        return {key: _shuffled(item, order) for key, item in items}
    if isinstance(value, list):
        return [_shuffled(item, order) for item in value]
    return value


@settings(deadline=None, max_examples=30)
@given(st.randoms(use_true_random=False))
def test_the_order_of_keys_changes_neither_digest_nor_resolved_text(order: random.Random) -> None:
    full = resolved_yaml(sound(TEXT))
    document = _shuffled(yaml.safe_load(full), order)
    # A step's stage may stand behind its 'on'; the order of steps themselves is kept.
    recipe = sound(yaml.safe_dump(document, sort_keys=False))
    assert recipe.digest == DIGEST
    assert resolved_yaml(recipe) == full


_POSITIVE = st.floats(min_value=1e-6, max_value=1e6).map(lambda v: v + 0.0)


@settings(deadline=None)
@given(_POSITIVE, _POSITIVE)
def test_two_recipes_have_one_digest_if_and_only_if_the_number_is_one(a: float, b: float) -> None:
    def digest(gain: float) -> str:
        return sound(TEXT.replace("gain: 0.1", f"gain: {gain!r}")).digest

    assert (digest(a) == digest(b)) is (a == b)


@settings(deadline=None)
@given(st.floats(min_value=0.03, max_value=1e6))
def test_a_value_in_any_unit_has_the_digest_of_the_value_it_is_held_as(value: float) -> None:
    given_khz = sound(TEXT.replace("low_pass: 30 Hz", f"low_pass: {value!r} kHz"))
    held = given_khz.chains["c"].steps[1].params.model_dump()["low_pass"]
    assert given_khz.digest == sound(TEXT.replace("low_pass: 30 Hz", f"low_pass: {held}")).digest


def test_the_resolved_recipe_is_sound_has_the_same_digest_and_is_a_fixed_point() -> None:
    recipe = sound(TEXT)
    text = resolved_yaml(recipe)
    again = sound(text)
    assert again.digest == recipe.digest
    assert resolved_yaml(again) == text
    assert [s.takes_from for s in again.chains["c"].steps] == [
        s.takes_from for s in recipe.chains["c"].steps
    ]
    assert again.origins == recipe.origins
    assert again.title == recipe.title
    assert [s.keep for s in again.chains["c"].steps] == [s.keep for s in recipe.chains["c"].steps]


@pytest.mark.parametrize("name", library.names())
def test_every_shipped_recipe_resolves_to_itself(name: str) -> None:
    recipe = check_recipe(library.text(name), name, load_registry()).recipe
    assert recipe is not None
    text = resolved_yaml(recipe)
    again = check_recipe(text, name, load_registry()).recipe
    assert again is not None
    assert again.digest == recipe.digest
    assert resolved_yaml(again) == text


@settings(deadline=None)
@given(st.floats(min_value=-1e9, max_value=1e9))
def test_a_share_reads_back_to_the_float_it_came_from(percent: float) -> None:
    share: TypeAdapter[float] = TypeAdapter(Share)
    held = share.validate_python(f"{percent!r} %")
    text = share.dump_python(held)
    assert share.validate_python(text) == held
    assert share.dump_python(share.validate_python(text)) == text


@settings(deadline=None)
@given(st.floats(min_value=1e-9, max_value=1e9), st.sampled_from(["V", "mV", "uV", "nV", "mmHg"]))
def test_a_normal_quantity_is_the_same_amount_and_stays_as_it_is(value: float, unit: str) -> None:
    quantity = Quantity(value, unit)
    normal = normal_quantity(quantity)
    assert normal_quantity(normal) == normal
    assert normal.to(unit) == value


def test_negative_zero_is_zero() -> None:
    zero, minus = (LimitParams.model_validate({"range": f"{v} uV"}) for v in ("0", "-0"))
    assert canonical_parameters(zero) == canonical_parameters(minus)


def test_every_parameter_has_a_row_with_its_origin() -> None:
    rows = {
        (r.step, r.parameter): (r.value, r.unit, r.origin, r.where) for r in parameters(sound(TEXT))
    }
    assert rows["c.filter.smooth", "low_pass"] == ("30", "Hz", "recipe", "")
    assert rows["c.filter.smooth", "careful"] == ("false", "", "default", "")
    assert rows["c.filter.smooth", "gain"] == ("0.1", "", "recipe", "")
    assert rows["c.filter.smooth", "on"] == ("[eeg]", "", "recipe", "")
    assert rows["c.filter.smooth#2", "on"] == ("[smooth]", "", "recipe", "")
    assert rows["c.exclude.range", "range"] == ("250", "uV", "recipe", "")
    assert rows["c.exclude.range", "window"] == ("null", "", "default", "")
    assert rows["c.epoch.cut", "length"] == ("4", "s", "assumed", "usual")
    assert rows["c.epoch.cut", "overlap"] == ("50", "%", "default", "")
    assert rows["c.feature.power", "bands.slow"] == ("[0.5, 4]", "Hz", "stated", "p. 3: bands")
    assert rows["c.feature.power", "within"] == ("[0.5, 30]", "Hz", "recipe", "")
    assert rows["c.load", "signals"] == ("[eeg, artery]", "", "recipe", "")
    assert rows["signals.artery", "optional"] == ("true", "", "recipe", "")
    assert rows["signals.eeg", "optional"] == ("false", "", "default", "")
    assert rows["conditions.calm", "start.offset"] == ("1", "s", "recipe", "")
    assert rows["conditions.calm", "start.which"] == ("null", "", "default", "")
    assert rows["conditions.calm", "length"] == ("120", "s", "recipe", "")


@pytest.mark.parametrize(
    ("written", "origins", "row"),
    [
        ("", "", ("standard", "default", "")),
        ("precision: standard\n", "", ("standard", "recipe", "")),
        ("precision: double\n", "", ("double", "recipe", "")),
        (
            "precision: double\n",
            "  recipe.precision: {origin: stated, where: p. 4}\n",
            ("double", "stated", "p. 4"),
        ),
    ],
)
def test_the_precision_is_written_out_with_its_origin(
    written: str, origins: str, row: tuple[str, str, str]
) -> None:
    recipe = sound(TEXT.replace("title:", f"{written}title:") + origins)
    (found,) = (r for r in parameters(recipe) if r.step == "recipe")
    assert (found.parameter, found.value, found.origin, found.where) == ("precision", *row)
    assert f"\nprecision: {row[0]}\n" in resolved_yaml(recipe)
    assert recipe.precision == row[0]


def test_the_rows_name_each_field_of_every_stage_of_the_recipe() -> None:
    recipe = sound(TEXT)
    rows = parameters(recipe)
    for chain, _, step in recipe.steps():
        named = {r.parameter.split(".")[0] for r in rows if r.step == f"{chain.name}.{step.name}"}
        assert set(type(step.params).model_fields) <= named


@settings(deadline=None)
@given(_POSITIVE)
def test_a_number_in_the_table_reads_back_to_the_same_float(gain: float) -> None:
    rows = parameters(sound(TEXT.replace("gain: 0.1", f"gain: {gain!r}")))
    (row,) = (r for r in rows if r.parameter == "gain" and r.step == "c.filter.smooth")
    assert float(row.value) == gain
