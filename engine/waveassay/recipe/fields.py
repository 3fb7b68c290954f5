"""Walk parameters by their types and values: which unit is held where, what the leaves are."""

import types
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import Annotated, Any, Union, get_args, get_origin

from pydantic import BaseModel

from waveassay.contract import Quantity, exact, number_text
from waveassay.contract.quantity import InUnit, unit_symbol

Loc = tuple[str | int, ...]


def types_at(owner: Any, loc: Loc) -> Iterator[Any]:
    """Yield what a type allows at a place in it: types, and `InUnit` marks."""
    origin = get_origin(owner)
    if origin is Annotated:
        inner, *marks = get_args(owner)
        if not loc:
            yield from (mark for mark in marks if isinstance(mark, InUnit))
        yield from types_at(inner, loc)
    elif origin in (Union, types.UnionType):
        for option in get_args(owner):
            yield from types_at(option, loc)
    elif not loc:
        yield owner
    elif isinstance(owner, type) and issubclass(owner, BaseModel):
        field = owner.model_fields.get(str(loc[0]))
        if field is not None:
            if len(loc) == 1:
                yield from (mark for mark in field.metadata if isinstance(mark, InUnit))
            yield from types_at(field.annotation, loc[1:])
    elif origin is not None:
        args = get_args(owner)
        if issubclass(origin, Mapping):
            yield from types_at(args[1], loc[1:])
        elif origin is tuple and Ellipsis not in args and isinstance(loc[0], int):
            if loc[0] < len(args):
                yield from types_at(args[loc[0]], loc[1:])
        elif args:
            yield from types_at(args[0], loc[1:])


def unit_at(owner: Any, loc: Loc) -> InUnit | None:
    """Return the unit in which a float is held at a place, if it is held in one."""
    return next((mark for mark in types_at(owner, loc) if isinstance(mark, InUnit)), None)


def names_at(owner: Any, loc: Loc) -> list[str]:
    """Return the names of the parameters that may stand at a place."""
    return [
        name
        for option in types_at(owner, loc)
        if isinstance(option, type) and issubclass(option, BaseModel)
        for name in option.model_fields
    ]


# Volts are the one unit that recipes and files commonly write with different prefixes.
_POWERS_OF_TEN = {"V": Fraction(10**6), "mV": Fraction(10**3), "nV": Fraction(1, 10**3)}


def normal_quantity(given: Quantity) -> Quantity:
    """Return the quantity in the unit that the canonical form uses (volts as uV), if exact."""
    unit = unit_symbol(given.unit)
    factor = _POWERS_OF_TEN.get(unit)
    if factor is not None:
        wanted = exact(given.value) * factor
        value = float(wanted)
        if exact(value) == wanted:  # never at the cost of a digit
            return Quantity(value + 0.0, "uV")
    return Quantity(given.value + 0.0, unit)


def plain(params: BaseModel) -> dict[str, Any]:
    """Return parameters as a recipe would write them in full, in normal units.

    Defaults are written out; texts, numbers, bools, None, lists and dicts are all there is.
    """
    dumped: dict[str, Any] = _plain(params, params.model_dump(mode="json", by_alias=False))
    return dumped


def _plain(value: Any, dumped: Any) -> Any:
    if isinstance(value, Quantity):
        return str(normal_quantity(value))
    if isinstance(value, BaseModel) and isinstance(dumped, dict):
        return {name: _plain(getattr(value, name, None), item) for name, item in dumped.items()}
    if isinstance(value, Mapping) and isinstance(dumped, dict):
        pairs = zip(sorted(value, key=str), sorted(dumped), strict=True)
        return {text: _plain(value[key], dumped[text]) for key, text in pairs}
    if isinstance(value, (list, tuple)) and isinstance(dumped, list):
        return [_plain(item, shown) for item, shown in zip(value, dumped, strict=True)]
    if isinstance(value, (set, frozenset)) and isinstance(dumped, list):
        return sorted(dumped, key=str)
    if isinstance(dumped, float):
        return dumped + 0.0  # no negative zero
    return dumped


@dataclass(frozen=True)
class Leaf:
    """One parameter that has no parameters below it. A list of plain values is one leaf."""

    loc: Loc
    value: str
    unit: str

    @property
    def dotted(self) -> str:
        """The parameter's name (``bands.alpha``)."""
        return ".".join(map(str, self.loc))


def leaves(params: BaseModel) -> Iterator[Leaf]:
    """Yield every parameter, defaults included, in the order of the class."""
    if shown := plain(params):
        yield from _leaves(type(params), params, shown, ())


def _leaves(owner: Any, value: Any, shown: Any, loc: Loc) -> Iterator[Leaf]:
    if isinstance(shown, dict) and shown:
        for name, item in shown.items():
            below = getattr(value, name, None) if isinstance(value, BaseModel) else None
            if isinstance(value, Mapping):
                below = next(kept for key, kept in value.items() if str(key) == name)
            yield from _leaves(owner, below, item, (*loc, name))
    elif isinstance(shown, list) and any(isinstance(item, (dict, list)) for item in shown):
        for index, item in enumerate(shown):
            yield from _leaves(owner, value[index], item, (*loc, index))
    elif isinstance(shown, list):
        held = list(value) if isinstance(value, (list, tuple)) else [None] * len(shown)
        parts = [
            _scalar(owner, one, item, (*loc, index))
            for index, (one, item) in enumerate(zip(held, shown, strict=True))
        ]
        units = {unit for _, unit in parts}
        if len(units) == 1:
            yield Leaf(loc, f"[{', '.join(text for text, _ in parts)}]", units.pop())
        else:
            whole = ", ".join(f"{text} {unit}".strip() for text, unit in parts)
            yield Leaf(loc, f"[{whole}]", "")
    else:
        text, unit = _scalar(owner, value, shown, loc)
        yield Leaf(loc, text, unit)


def _scalar(owner: Any, value: Any, shown: Any, loc: Loc) -> tuple[str, str]:
    """Return a value's text and its unit."""
    if isinstance(shown, str):
        held = isinstance(value, float) and unit_at(owner, loc) is not None
        if held or isinstance(value, Quantity):
            number, _, unit = shown.partition(" ")
            return number, unit
        return shown, ""
    if shown is None:
        return "null", ""
    if isinstance(shown, bool):
        return str(shown).lower(), ""
    if isinstance(shown, float):
        return number_text(shown), ""
    return ("{}" if shown == {} else str(shown)), ""
