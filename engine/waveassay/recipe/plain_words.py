"""Values -> a pydantic model, and its complaints in plain words at their lines."""

import json
import re
from collections.abc import Callable, Iterable
from typing import Any, TypeVar

import yaml
from pydantic import BaseModel, ValidationError

from waveassay.contract import number_text
from waveassay.contract.quantity import InUnit
from waveassay.recipe.fields import Loc, names_at, types_at, unit_at
from waveassay.recipe.model import Place
from waveassay.recipe.problems import Report, nearest
from waveassay.recipe.yaml_nodes import entries, found, is_null, place_of, value_of

Model = TypeVar("Model", bound=BaseModel)

_BOUNDS = {
    "greater_than": ("gt", "must be greater than {}"),
    "greater_than_equal": ("ge", "must be at least {}"),
    "less_than": ("lt", "must be less than {}"),
    "less_than_equal": ("le", "must be at most {}"),
    "multiple_of": ("multiple_of", "must be a whole multiple of {}"),
}
_TYPES = {
    "string_type": "a text is expected",
    "int_type": "a whole number is expected",
    "int_from_float": "a whole number is expected",
    "int_parsing": "a whole number is expected",
    "float_type": "a number is expected",
    "float_parsing": "a number is expected",
    "bool_type": "true or false is expected",
    "finite_number": "a finite number is expected",
    "tuple_type": "a list is expected",
    "list_type": "a list is expected",
    "set_type": "a list is expected",
    "frozen_set_type": "a list is expected",
    "dict_type": "a mapping of names to values is expected",
    "model_type": "a mapping of names to values is expected",
    "model_attributes_type": "a mapping of names to values is expected",
    "none_required": "null is expected",
}


def to_json(values: Any) -> str:
    """Return values as pydantic is to read them: JSON is strict, yet its lists fit tuples.

    Keys are sorted, so that the order in which a recipe names things cannot reach any output.
    """
    return json.dumps(values, sort_keys=True)


def validated(
    model: type[Model],
    node: yaml.Node | None,
    at: Place,
    where: str,
    report: Report,
    *,
    unknown: str = "R102",
    missing: str = "R101",
) -> Model | None:
    """Return the model of what stands at a node, or None once its problems are reported.

    Parameters
    ----------
    node : a mapping; None, or null in the recipe, for no values at all.
    at : the place to name for what does not stand in the file.
    where : the dotted name of the whole, for messages.
    unknown, missing : codes for a key too many, and for one too few.
    """
    if node is not None and not isinstance(node, yaml.MappingNode) and not is_null(node):
        message = f"a mapping of names to values is expected (found {found(node)})"
        report.error(place_of(node, report.path), "R203", message, where)
        return None
    if node is not None and is_null(node):
        node = None  # nothing stands there, so that no place there can be named
    values = {} if node is None else value_of(node)
    try:
        return model.model_validate_json(to_json(values))
    except ValidationError as error:
        complaints = error.errors(include_url=False, include_input=False)
    codes = {"extra_forbidden": unknown, "missing": missing}
    for loc, at_key, group in _grouped(node, complaints):
        target, key = _descend(node, loc)
        shown = key if at_key and key is not None else target
        place = at if shown is None else place_of(shown, report.path)
        said = list(dict.fromkeys(_in_words(item, loc, model) for item in group))
        message = "; or ".join(said)
        kind = group[0]["type"]
        if kind not in codes and loc and shown is not None:
            message += f" (found {found(shown)})"
        if len(said) == 1 and kind in ("literal_error", "enum") and target is not None:
            message += nearest(str(value_of(target)), _options(group[0]))
        about = (*loc, *group[0]["loc"][-1:]) if kind == "missing" else loc
        dotted = ".".join(map(str, (where, *about) if where else about))
        report.error(place, _code(kind, codes), message, dotted)
    return None


def _grouped(
    node: yaml.Node | None, complaints: Iterable[Any]
) -> list[tuple[Loc, bool, list[Any]]]:
    """Gather complaints about one value, for the options of a union complain one by one.

    Each group comes with its place in the file and whether its key is meant. Pydantic's own
    places hold names of options, which the file does not have.
    """
    groups: dict[tuple[Loc, bool], list[Any]] = {}
    missing: list[tuple[Loc, bool, list[Any]]] = []
    for item in complaints:
        loc: Loc = ()
        current = node
        for part in item["loc"]:
            child = _child(current, part)
            if child is not None:
                loc, current = (*loc, part), child[1]
        if item["type"] == "missing":
            missing.append((loc, False, [item]))
        else:
            at_key = item["type"] == "extra_forbidden" or item["loc"][-1:] == ("[key]",)
            groups.setdefault((loc, at_key), []).append(item)
    return [(loc, at_key, group) for (loc, at_key), group in groups.items()] + missing


def _child(node: yaml.Node | None, part: str | int) -> tuple[yaml.Node | None, yaml.Node] | None:
    if isinstance(node, yaml.SequenceNode) and isinstance(part, int):
        return (None, node.value[part]) if part < len(node.value) else None
    for name, key, value in entries(node):
        if name == str(part):
            return key, value
    return None


def _descend(node: yaml.Node | None, loc: Loc) -> tuple[yaml.Node | None, yaml.Node | None]:
    """Return the value at a place and its key, as far as the file has them."""
    key: yaml.Node | None = None
    for part in loc:
        child = _child(node, part)
        if child is None:
            break
        key, node = child
    return node, key


def _code(kind: str, codes: dict[str, str]) -> str:
    if kind in codes:
        return codes[kind]
    if kind == "unit_missing":
        return "R204"
    if kind == "unit_wrong":
        return "R205"
    if kind in _BOUNDS or kind in ("too_short", "too_long", "string_too_short", "string_too_long"):
        return "R206"
    if kind in ("value_error", "assertion_error"):
        return "R207"
    if kind == "string_pattern_mismatch":
        return "R105"
    return "R203"


def _options(item: Any) -> list[str]:
    return re.findall(r"'([^']*)'", str(item.get("ctx", {}).get("expected", "")))


def _in_words(item: Any, loc: Loc, model: type[BaseModel]) -> str:
    kind: str = item["type"]
    context: dict[str, Any] = item.get("ctx", {})
    words: Callable[[], str] | None = {
        "missing": lambda: _missing(item["loc"], model),
        "extra_forbidden": lambda: _extra(loc, model),
        "literal_error": lambda: f"must be {_one_of(context)}",
        "enum": lambda: f"must be {_one_of(context)}",
        "too_short": lambda: _length(context, "at least", "min_length"),
        "too_long": lambda: _length(context, "at most", "max_length"),
        "string_too_short": lambda: (
            "a text that is not empty is expected"
            if context.get("min_length") == 1
            else f"a text of at least {context.get('min_length')} characters is expected"
        ),
        "string_too_long": lambda: (
            f"a text of at most {context.get('max_length')} characters is expected"
        ),
        "string_pattern_mismatch": lambda: _ill_formed(loc, context, model),
        "value_error": lambda: str(context.get("error", item["msg"])),
        "assertion_error": lambda: str(context.get("error", item["msg"])),
    }.get(kind)
    if words is not None:
        return words()
    if kind in _BOUNDS:
        name, pattern = _BOUNDS[kind]
        return pattern.format(_bound(context.get(name), unit_at(model, loc)))
    if kind in _TYPES:
        return _TYPES[kind]
    said = str(item["msg"])
    return said if kind.startswith("unit_") else said[:1].lower() + said[1:]


def _one_of(context: dict[str, Any]) -> str:
    expected = str(context.get("expected", ""))
    return f"one of {expected}" if " or " in expected else expected


def _bound(value: Any, unit: InUnit | None) -> str:
    if unit is not None and isinstance(value, (int, float)):
        return unit.text(float(value))
    return number_text(value) if isinstance(value, float) else str(value)


def _length(context: dict[str, Any], how: str, name: str) -> str:
    count = context.get(name)
    return f"{how} {count} {'value is' if count == 1 else 'values are'} expected"


def _missing(loc: Loc, model: type[BaseModel]) -> str:
    if loc and isinstance(loc[-1], int):
        return f"value {loc[-1] + 1} of the list is missing"
    described = _description(loc, model)
    return f"is missing: {described}" if described else "is missing"


def _ill_formed(loc: Loc, context: dict[str, Any], model: type[BaseModel]) -> str:
    described = _description(loc, model)
    return f"not well formed: {described}" if described else f"must match {context.get('pattern')}"


def _description(loc: Loc, model: type[BaseModel]) -> str:
    """Return what a parameter says of itself, without its full stop."""
    for owner in types_at(model, loc[:-1]) if loc else ():
        if isinstance(owner, type) and issubclass(owner, BaseModel):
            field = owner.model_fields.get(str(loc[-1]))
            if field is not None and field.description:
                return field.description.rstrip(".")
    return ""


def _extra(loc: Loc, model: type[BaseModel]) -> str:
    allowed = names_at(model, loc[:-1])
    known = f"allowed: {', '.join(allowed)}" if allowed else "none is allowed here"
    return f"unknown key{nearest(str(loc[-1]), allowed)} ({known})"
