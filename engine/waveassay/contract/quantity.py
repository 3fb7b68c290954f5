"""Quantities: numbers that carry their unit in the recipe and in the type.

A recipe says ``4 s``, ``0.5 Hz``, ``50 %``, ``-3 dB`` or ``250 uV``. A parameter declared with
one of the types below holds a plain float in the unit that the type names (`Hertz`, `Seconds`,
`Share`, `Decibel`), or, where the unit is that of the signal, a `Quantity`.
"""

import re
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import inf, nextafter
from typing import TYPE_CHECKING, Annotated, Any

from pydantic_core import PydanticCustomError, core_schema

if TYPE_CHECKING:
    from pint import UnitRegistry

NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_QUANTITY = re.compile(rf"\s*({NUMBER})\s*([^\d\s.+\-].*?)\s*\Z")

# What people and devices write -> the symbol used throughout. Micro signs: U+00B5 and U+03BC.
_SPELLINGS = {"µ": "u", "μ": "u"}
_ALIASES = {
    "sec": "s",
    "secs": "s",
    "second": "s",
    "seconds": "s",
    "hz": "Hz",
    "percent": "%",
    "mmhg": "mmHg",
    "MMHG": "mmHg",
    "mmHG": "mmHg",
    "cmh2o": "cmH2O",
    "uv": "uV",
    "UV": "uV",
    "mv": "mV",
}
_FAMILIAR = frozenset({"uV", "mV", "V", "mmHg", "cmH2O", "s", "Hz", "%", "dB"})
_KINDS = {"s": "a time", "Hz": "a frequency", "%": "a share", "dB": "decibels"}


class UnitError(ValueError):
    """A unit is unknown, or two units measure different things."""


def unit_symbol(text: str) -> str:
    """Return the one spelling of a unit that is used throughout (``µV`` becomes ``uV``)."""
    text = text.strip()
    for spelling, symbol in _SPELLINGS.items():
        text = text.replace(spelling, symbol)
    return _ALIASES.get(text, text)


@lru_cache(maxsize=1)
def _registry() -> "UnitRegistry[Any]":
    import pint  # a third of a second: only recipes that mix units pay for it

    registry: UnitRegistry[Any] = pint.UnitRegistry(non_int_type=Fraction, cache_folder=None)
    return registry


@lru_cache(maxsize=256)
def unit_factor(given: str, wanted: str) -> Fraction:
    """Return the exact factor that turns a value in ``given`` into one in ``wanted``.

    Raises
    ------
    UnitError
        When a unit is unknown, or the two measure different things.
    """
    given, wanted = unit_symbol(given), unit_symbol(wanted)
    if given == wanted:
        return Fraction(1)
    if "dB" in (given, wanted) or not given or not wanted:
        raise UnitError(f"'{given}' cannot be turned into '{wanted}'")
    import pint

    registry = _registry()
    try:
        nothing = registry.Quantity(Fraction(0), given).to(wanted).magnitude
        magnitude = registry.Quantity(Fraction(1), given).to(wanted).magnitude
    except pint.UndefinedUnitError:
        raise UnitError(f"'{given}' is not a known unit") from None
    except (pint.DimensionalityError, pint.OffsetUnitCalculusError):
        raise UnitError(f"'{given}' cannot be turned into '{wanted}'") from None
    except Exception:  # pint's parser raises whatever its tokenizer meets
        raise UnitError(f"'{given}' is not a known unit") from None
    if nothing != 0:  # degrees Celsius and kelvin: no factor turns one into the other
        raise UnitError(f"'{given}' cannot be turned into '{wanted}'")
    return Fraction(magnitude)


def require_known_unit(text: str) -> None:
    """Raise UnitError unless the text is a unit (of any kind)."""
    symbol = unit_symbol(text)
    if symbol in _FAMILIAR:
        return
    try:
        _registry().parse_units(symbol)
    except Exception:  # pint's parser raises whatever its tokenizer meets
        raise UnitError(f"'{text}' is not a known unit") from None


@lru_cache(maxsize=1024)
def exact(value: float) -> Fraction:
    """Return the decimal that a person wrote: ``exact(0.1)`` is 1/10, not the nearest double."""
    return Fraction(repr(float(value)))


def number_text(value: float) -> str:
    """Return the shortest text that reads back to the same double (``4``, not ``4.0``)."""
    text = repr(float(value))
    return text.removesuffix(".0")


@dataclass(frozen=True)
class Quantity:
    """A value with its unit, for parameters in the unit of the signal itself."""

    value: float
    unit: str

    def to(self, unit: str) -> float:
        """Return the value in another unit, exactly converted and rounded once."""
        return float(exact(self.value) * unit_factor(self.unit, unit))

    def __str__(self) -> str:
        return f"{number_text(self.value)} {self.unit}"


def parse_quantity(text: str) -> Quantity:
    """Read ``4 s`` or ``250uV``; raise ValueError when there is no number followed by a unit."""
    match = _QUANTITY.match(text)
    if match is None:
        raise ValueError(f"'{text}' is not a number followed by its unit")
    value = float(match[1])
    if value in (float("inf"), float("-inf")):
        raise ValueError(f"'{text}' is too large")
    return Quantity(value, unit_symbol(match[2]))


class InUnit:
    """Annotation: a float held in this unit, written in the recipe with any unit of its kind.

    ``Share`` is the one case where number and text differ: ``50 %`` is held as 0.5.
    """

    def __init__(self, unit: str, example: str) -> None:
        self.unit = unit
        self.example = example
        self.kind = _KINDS[unit]

    def parse(self, value: object) -> float:
        """Turn the recipe's text into a float in this unit."""
        if not isinstance(value, str):
            raise PydanticCustomError(
                "unit_missing",
                "{kind} with its unit is expected, such as '{example}'",
                {"kind": self.kind, "example": self.example},
            )
        try:
            quantity = parse_quantity(value)
            factor = unit_factor(quantity.unit, self.unit)
        except ValueError as error:
            raise PydanticCustomError(
                "unit_wrong",
                "{kind} such as '{example}' is expected: {why}",
                {"kind": self.kind, "example": self.example, "why": str(error)},
            ) from None
        scale = Fraction(1, 100) if self.unit == "%" else Fraction(1)
        return float(exact(quantity.value) * factor * scale)

    def text(self, value: float) -> str:
        """Return the canonical text of a value held in this field; it reads back to the same."""
        shown = value + 0.0  # no negative zero
        if self.unit == "%":
            near = float(exact(shown) * 100)
            # Times 100 and back may miss by one unit in the last place.
            tries = (near, nextafter(near, -inf), nextafter(near, inf))
            shown = next((n for n in tries if float(exact(n) / 100) == value), near)
        return f"{number_text(shown)} {self.unit}"

    def __get_pydantic_core_schema__(
        self, source: object, handler: Callable[[object], core_schema.CoreSchema]
    ) -> Any:
        # The inner schema carries the field's bounds (``Field(gt=0)``), in the held unit.
        return core_schema.no_info_before_validator_function(
            self.parse,
            handler(source),
            serialization=core_schema.plain_serializer_function_ser_schema(self.text),
        )

    def __get_pydantic_json_schema__(self, schema: object, handler: object) -> dict[str, Any]:
        return {
            "type": "string",
            "pattern": rf"^\s*{NUMBER}\s*\S+.*$",
            "examples": [self.example],
            "unit": self.unit,
        }


class _SignalAmount:
    """Annotation: a value with a unit that must fit the signal's own (checked by the stage)."""

    example = "250 uV"

    def parse(self, value: object) -> Quantity:
        if isinstance(value, Quantity):
            return value
        if not isinstance(value, str):
            raise PydanticCustomError(
                "unit_missing",
                "a value with the signal's unit is expected, such as '{example}'",
                {"example": self.example},
            )
        try:
            quantity = parse_quantity(value)
            require_known_unit(quantity.unit)
        except ValueError as error:
            raise PydanticCustomError(
                "unit_wrong",
                "a value with the signal's unit is expected, such as '{example}': {why}",
                {"example": self.example, "why": str(error)},
            ) from None
        return quantity

    def __get_pydantic_core_schema__(self, source: object, handler: object) -> Any:
        return core_schema.no_info_plain_validator_function(
            self.parse, serialization=core_schema.plain_serializer_function_ser_schema(str)
        )

    def __get_pydantic_json_schema__(self, schema: object, handler: object) -> dict[str, Any]:
        return {
            "type": "string",
            "pattern": rf"^\s*{NUMBER}\s*\S+.*$",
            "examples": [self.example],
            "unit": "that of the signal",
        }


Hertz = Annotated[float, InUnit("Hz", "0.5 Hz")]
Seconds = Annotated[float, InUnit("s", "4 s")]
Share = Annotated[float, InUnit("%", "50 %")]
Decibel = Annotated[float, InUnit("dB", "-3 dB")]
SignalAmount = Annotated[Quantity, _SignalAmount()]
