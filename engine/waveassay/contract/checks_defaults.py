"""Whether the defaults of parameters are values that a recipe could give."""

import json
from collections.abc import Iterator, Mapping
from typing import Any, get_args

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo


def unsound_defaults(
    params: type[BaseModel],
    example: Mapping[str, Any] | None = None,
    above: frozenset[type[BaseModel]] = frozenset(),
) -> Iterator[str]:
    """Yield what is wrong with the defaults of parameters, and of the parameters within.

    A default is written out as in a recipe and read back. It must come out the same.

    Parameters
    ----------
    example : parameters to read it back among.
    above : the parameters that hold these, which are looked at already.
    """
    for name, field in params.model_fields.items():
        if not field.is_required() and (why := _why_unsound(params, name, field, example or {})):
            yield f"the default of '{name}' {why}"
        for inner in _models(field.annotation):
            if inner not in above | {params}:
                yield from unsound_defaults(inner, None, above | {params})


def _why_unsound(
    params: type[BaseModel], name: str, field: FieldInfo, example: Mapping[str, Any]
) -> str:
    default = field.get_default(call_default_factory=True, validated_data={})
    try:
        held = params.model_construct(**{name: default})
        text = json.loads(held.model_dump_json(include={name}, warnings="none"))
    except Exception:  # whatever a serializer raises of what it was not made for
        return (
            f"is {default!r}, which is not of its type: write the value as held (0.05), not the "
            "recipe's text ('0.05 s')"
        )
    try:
        again = params.model_validate_json(json.dumps({**example, **text}))
    except ValidationError as error:
        mine = [item["msg"] for item in error.errors() if item["loc"][:1] == (name,)]
        return f"is {default!r}, which a recipe could not give: {'; '.join(mine)}" if mine else ""
    back = getattr(again, name)
    return "" if back == default else f"is {default!r}, and reads back as {back!r}"


def _models(annotation: Any) -> Iterator[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    for part in get_args(annotation):
        yield from _models(part)
