"""The recipe grammar as JSON Schema (draft 2020-12), with each installed stage's parameters."""

import warnings
from typing import Any

from pydantic import BaseModel
from pydantic.json_schema import PydanticJsonSchemaWarning

from waveassay.contract import Params, Stage
from waveassay.recipe.fields import plain
from waveassay.recipe.grammar import RESERVED_CHAINS, SECTIONS, Head
from waveassay.recipe.model import NAME_PATTERN, ConditionRule, Origin, SignalRule
from waveassay.recipe.registry import Registry, load_registry

DIALECT = "https://json-schema.org/draft/2020-12/schema"


def recipe_schema(
    registry: Registry | None = None, left_out: list[str] | None = None
) -> dict[str, Any]:
    """Return the schema of a recipe as an editor wants it.

    It says what each key means and takes. What needs more than one place to be seen (a band above
    the filter, a signal that is not described) only `check_recipe` finds. A stage whose parameters
    have no schema is left out.

    Parameters
    ----------
    left_out : a line is added for each stage that is left out, with the reason.
    """
    registry = load_registry() if registry is None else registry
    definitions: dict[str, Any] = {}
    head = _model(Head, "head", definitions)
    sections = {
        "signals": _named("signals", _model(SignalRule, "signal", definitions), least=1),
        "conditions": _named("conditions", _model(ConditionRule, "condition", definitions)),
        "chains": _named(
            "chains",
            {"type": "array", "minItems": 1, "items": {"$ref": "#/$defs/step"}},
            least=1,
        ),
        "origins": _named("origins", _model(Origin, "origin", definitions)),
    }
    definitions["step"] = _step(registry, definitions, [] if left_out is None else left_out)
    return {
        "$schema": DIALECT,
        "title": "A waveassay recipe",
        **{key: head[key] for key in ("type", "additionalProperties")},
        "properties": {**head["properties"], **sections},
        "required": [*head["required"], "signals", "chains"],
        "$defs": dict(sorted(definitions.items())),
    }


def _named(section: str, item: dict[str, Any], least: int = 0) -> dict[str, Any]:
    names: dict[str, Any] = {"pattern": NAME_PATTERN, "maxLength": 64}
    if section in ("conditions", "origins"):
        names = {"minLength": 1}
    if section == "chains":
        names["not"] = {"enum": list(RESERVED_CHAINS)}
    schema = {
        "type": "object" if least else ["object", "null"],
        "description": SECTIONS[section],
        "propertyNames": names,
        "additionalProperties": item,
    }
    return {**schema, "minProperties": least} if least else schema


def _step(registry: Registry, definitions: dict[str, Any], left_out: list[str]) -> dict[str, Any]:
    stages = {}
    for name, stage in sorted(registry.stages.items()):
        try:
            made, own = _stage(stage)
        except Exception as error:  # a stranger's parameters
            left_out.append(f"{name} ({registry.owners.get(name, 'unknown')}): {no_schema(error)}")
            continue
        stages[name] = made
        definitions |= own
    bare = [name for name in stages if not _needs(registry.stages[name].params)]
    beside = {
        "on": {
            "description": "Signals that the step is limited to, or an earlier output to take.",
            "anyOf": [
                {"type": "string", "minLength": 1},
                {
                    "type": "array",
                    "minItems": 1,
                    "items": {"type": "string", "minLength": 1},
                },
            ],
        },
        "as": {
            "description": "A name for the step's output.",
            "type": "string",
            "pattern": NAME_PATTERN,
        },
        "keep": {
            "description": "Keep the output in the store; no number depends on it.",
            "type": "boolean",
        },
    }
    one_stage: list[dict[str, Any]] = [{"required": [name]} for name in stages]
    as_mapping = {
        "type": "object",
        "description": "One stage with its parameters.",
        "properties": {**stages, **beside},
        "additionalProperties": False,
        "oneOf": one_stage or [{"not": {}}],
    }
    return {"anyOf": [as_mapping, {"description": "A stage as it stands.", "enum": bare}]}


def no_schema(error: Exception) -> str:
    """Return in one line that a stage's parameters have no schema, and what its author does."""
    text = " ".join(str(error).split())
    return (
        f"no schema of its parameters can be made ({type(error).__name__}: {text}); its author's "
        "to mend: run waveassay.contract.checks on it"
    )


def _stage(stage: Stage) -> tuple[dict[str, Any], dict[str, Any]]:
    """Return what stands for a stage among a step's keys, and its definitions."""
    definitions: dict[str, Any] = {}
    params = _model(stage.params, stage.name, definitions)
    params["description"] = stage.summary
    params["examples"] = [dict(stage.example)]
    definitions[stage.name] = params
    reference = {"$ref": f"#/$defs/{stage.name}"}
    if _needs(stage.params):
        return reference, definitions
    return {"anyOf": [reference, {"type": "null"}]}, definitions


def _needs(params: type[Params]) -> bool:
    return any(field.is_required() for field in params.model_fields.values())


def _model(model: type[BaseModel], prefix: str, definitions: dict[str, Any]) -> dict[str, Any]:
    """Return a model's schema; the models within go to the definitions, under its name."""
    with warnings.catch_warnings():
        # Of a default that cannot be written out; what is made of it below says so.
        warnings.simplefilter("ignore", PydanticJsonSchemaWarning)
        schema = model.model_json_schema(ref_template=f"#/$defs/{prefix}.{{model}}")
    for name, inner in schema.pop("$defs", {}).items():
        definitions[f"{prefix}.{name}"] = _tidied(inner)
    schema = dict(_tidied(schema))
    shown = plain(model.model_construct())  # raises where a default is not of the field's type
    for name, field in model.model_fields.items():
        if not field.is_required() and name in shown:
            schema["properties"][name]["default"] = shown[name]  # as a recipe writes it
    return schema


def _tidied(schema: Any) -> Any:
    """Drop the titles that pydantic makes of names."""
    if isinstance(schema, dict):
        return {
            key: _tidied(value)
            for key, value in schema.items()
            if not (key == "title" and isinstance(value, str))
        }
    if isinstance(schema, list):
        return [_tidied(item) for item in schema]
    return schema
