"""``waveassay stages``."""

import inspect
import warnings
from typing import Any

from pydantic.json_schema import PydanticJsonSchemaWarning

from waveassay.cli.screen import console
from waveassay.contract import Stage
from waveassay.contract.errors import UsageError
from waveassay.recipe.registry import Registry, load_registry
from waveassay.recipe.schema import no_schema


def show_stages(name: str | None) -> int:
    """List all stages, or show one in full."""
    registry = load_registry()
    screen = console()
    if name is not None:
        if name not in registry.stages:
            raise UsageError(registry.unknown(name))
        _show(registry.stages[name], registry)
        return 0
    width = max(map(len, registry.stages), default=0)
    for known, stage in sorted(registry.stages.items()):
        screen.print(f"{known:{width}}  {stage.summary}")
    for broken in registry.broken:
        screen.print(f"\n{broken}")
    screen.print("\nwaveassay stages NAME shows one with its parameters.")
    return 0


def _show(stage: Stage, registry: Registry) -> None:
    screen = console()
    screen.print(f"{stage.name} (version {stage.version}, {registry.owners.get(stage.name, '')})")
    module = inspect.getmodule(stage.params)
    screen.print(inspect.cleandoc((module and module.__doc__) or ""))
    screen.print("\nParameters")
    try:
        lines = parameter_lines(stage)
    except Exception as error:  # a stranger's parameters
        lines = []
        screen.print(f"  {no_schema(error)}")
    for field, text in lines:
        screen.print(f"  {field}")
        screen.print(f"      {text}")
    screen.print(f"\nSource: {stage.source}")
    if stage.example:
        screen.print("\nExample")
        screen.print(f"  - {stage.name}: {_as_flow(stage.example)}")


def parameter_lines(stage: Stage) -> list[tuple[str, str]]:
    """Return each parameter with its form and default, and what it means."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", PydanticJsonSchemaWarning)
        schema = stage.params.model_json_schema()
    definitions = schema.get("$defs", {})
    defaults = stage.params.model_construct().model_dump(mode="json", warnings=False)
    required = set(schema.get("required", ()))
    lines = []
    for name, known in schema.get("properties", {}).items():
        form = _form(known, definitions)
        if name in required:
            state = "required"
        elif defaults.get(name) is None:
            state = "optional"
        else:
            state = f"default {_as_flow(defaults[name])}"
        lines.append((f"{name}: {form}; {state}", str(known.get("description", ""))))
    return lines


def _form(known: dict[str, Any], definitions: dict[str, Any]) -> str:
    if "$ref" in known:
        known = definitions[known["$ref"].rsplit("/", 1)[-1]]
    if "anyOf" in known:
        forms = [_form(item, definitions) for item in known["anyOf"]]
        return " or ".join(form for form in forms if form != "null")
    if "enum" in known:
        return " | ".join(map(str, known["enum"]))
    if "const" in known:
        return str(known["const"])
    if "unit" in known:
        return f"a value in {known['unit']}, such as {known['examples'][0]}"
    if known.get("type") == "array":
        items = known.get("prefixItems") or [known.get("items", {})]
        forms = list(dict.fromkeys(_form(item, definitions) for item in items))
        return f"[{', '.join(forms)}]" if len(items) == 1 else f"{len(items)} of {forms[0]}"
    if known.get("type") == "object":
        inner = known.get("additionalProperties")
        return f"name: {_form(inner, definitions)}" if isinstance(inner, dict) else "mapping"
    words = {
        "integer": "whole number",
        "number": "number",
        "string": "text",
        "boolean": "yes or no",
    }
    return words.get(str(known.get("type")), str(known.get("type", "value")))


def _as_flow(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{k}: {_as_flow(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_as_flow(v) for v in value) + "]"
    if isinstance(value, bool):
        return "true" if value else "false"
    return "null" if value is None else str(value)
