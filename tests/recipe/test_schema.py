"""The JSON Schema of the grammar takes what is sound and refuses what an editor can see is not."""

import json
from dataclasses import replace
from typing import Any

import jsonschema
import pytest
from pydantic import Field

from recipe_stages import CUT, HEAD, REGISTRY, with_chain
from waveassay.contract import Params, Seconds
from waveassay.recipe import Registry, library, load_registry, recipe_schema
from waveassay.recipe.problems import Report
from waveassay.recipe.yaml_nodes import read_document, value_of

SCHEMA = recipe_schema(REGISTRY)


def document(text: str) -> Any:
    root = read_document(text, Report("r"))
    assert root is not None
    return value_of(root)


def valid(text: str, schema: dict[str, Any] = SCHEMA) -> bool:
    return jsonschema.Draft202012Validator(schema).is_valid(document(text))


GOOD = with_chain(
    "load: {signals: [eeg]}",
    "{epoch.cut: {length: 4 s}, as: short, keep: true}",
    "{spectrum.plain: , on: [short]}",
    "feature.power: {bands: {a: [8 Hz, 13 Hz]}, within: all}",
    "export.table",
    "export.table: {}",
    tail="conditions: {calm: {start: {clock: '12:30'}, length: 3 s}}\norigins:\n"
    "  c.epoch.cut.length: {origin: assumed, alternatives: [1 s, [2]]}\n",
)


def test_the_schemas_are_schemas() -> None:
    jsonschema.Draft202012Validator.check_schema(SCHEMA)
    jsonschema.Draft202012Validator.check_schema(recipe_schema())


@pytest.mark.parametrize("name", library.names())
def test_every_shipped_recipe_is_valid(name: str) -> None:
    errors = jsonschema.Draft202012Validator(recipe_schema()).iter_errors(
        document(library.text(name))
    )
    assert [error.message for error in errors] == []


def test_a_recipe_that_uses_all_of_the_grammar_is_valid() -> None:
    assert valid(GOOD)


@pytest.mark.parametrize(
    ("written", "otherwise"),
    [
        ("recipe: tried", "recipe: Not a Name"),
        ("edition: 1", "edition: 0"),
        ("edition: 1\n", ""),
        ("edition: 1\n", "edition: 1\nprecision: single\n"),
        ("recipe: tried", "recip: tried"),
        ("unit: uV", "units: uV"),
        ("epoch.cut: {length: 4 s}", "epoch.cut: {length: 4}"),
        ("epoch.cut: {length: 4 s}", "epoch.cut: {lenght: 4 s}"),
        ("epoch.cut: {length: 4 s}", "epoch.cut: {}"),
        ("epoch.cut: {length: 4 s}", "epoch.cut: null"),
        ("epoch.cut: {length: 4 s}", "epoch.kut: {length: 4 s}"),
        ("- export.table\n", "- epoch.cut\n"),
        ("as: short", "as: Short"),
        ("keep: true", "keep: yes"),
        ("as: short", "spectrum.plain: {}"),
        ("{spectrum.plain: , on", "{on"),
        ("[8 Hz, 13 Hz]", "[8 Hz]"),
        ("within: all", "within: some"),
        ("clock: '12:30'", "clock: '25:30'"),
        ("origin: assumed", "origin: guessed"),
        ("  c:\n", "  signals:\n"),
    ],
)
def test_what_is_not_sound_is_not_valid(written: str, otherwise: str) -> None:
    assert written in GOOD
    assert not valid(GOOD.replace(written, otherwise))


def test_the_precision_is_one_of_two_and_may_be_left_out() -> None:
    for value in ("standard", "double"):
        assert valid(GOOD.replace("edition: 1\n", f"edition: 1\nprecision: {value}\n"))
    precision = SCHEMA["properties"]["precision"]
    assert precision["default"] == "standard"
    assert "float32" in precision["description"]
    assert "precision" not in SCHEMA["required"]


def test_chains_are_needed() -> None:
    assert not valid(HEAD)


def test_each_parameter_says_what_it_means_its_unit_and_its_default_as_a_recipe_writes_it() -> None:
    cut = SCHEMA["$defs"]["epoch.cut"]
    overlap = cut["properties"]["overlap"]
    assert overlap["default"] == "50 %"
    assert overlap["unit"] == "%"
    assert overlap["description"] == "Shared by neighbours."
    assert cut["required"] == ["length"]
    assert cut["examples"] == [{"length": "4 s"}]


class TextParams(Params):
    """A default as a recipe writes it, where the value as held is due."""

    length: Seconds = Field(default="0.05 s", description="Length.")  # type: ignore[assignment]


def test_a_stage_without_a_schema_is_left_out_and_named() -> None:
    stages = {"acme.text": replace(CUT, name="acme.text", params=TextParams), "epoch.cut": CUT}
    left_out: list[str] = []
    schema = recipe_schema(Registry(stages, {"acme.text": "acme 1.2"}), left_out)
    jsonschema.Draft202012Validator.check_schema(schema)
    assert "epoch.cut" in schema["$defs"]
    assert "acme.text" not in json.dumps(schema)
    (text,) = left_out
    assert text.startswith("acme.text (acme 1.2): no schema of its parameters can be made")


def test_every_installed_stage_is_in_the_schema() -> None:
    registry = load_registry()
    left_out: list[str] = []
    schema = recipe_schema(registry, left_out)
    assert left_out == []
    for name, stage in registry.stages.items():
        assert set(schema["$defs"][name]["properties"]) == set(stage.params.model_fields)
        for field in schema["$defs"][name]["properties"].values():
            assert field["description"]
