"""Quantities keep what a person wrote, whatever unit it was written in."""

from fractions import Fraction
from typing import Annotated

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import Field, ValidationError

from waveassay.contract import (
    Decibel,
    Hertz,
    Params,
    Quantity,
    Seconds,
    Share,
    SignalAmount,
    UnitError,
    exact,
    number_text,
    unit_factor,
)
from waveassay.contract.quantity import parse_quantity, unit_symbol


class Everything(Params):
    rate: Annotated[Hertz, Field(gt=0)] = Field(default=1.0, description="A rate.")
    length: Seconds = Field(default=1.0, description="A length.")
    share: Share = Field(default=0.5, description="A share.")
    level: Decibel = Field(default=0.0, description="A level.")
    range: SignalAmount | None = Field(default=None, description="An amount.")


FINITE = st.floats(allow_nan=False, allow_infinity=False, width=64)


@pytest.mark.parametrize(
    ("field", "text", "held"),
    [
        ("rate", "30 Hz", 30.0),
        ("rate", "0.1Hz", 0.1),
        ("rate", "1 kHz", 1000.0),
        ("length", "2 min", 120.0),
        ("length", "250 ms", 0.25),
        ("length", "1e-1 s", 0.1),
        ("share", "50 %", 0.5),
        ("share", "29 %", 0.29),
        ("level", "-3 dB", -3.0),
    ],
)
def test_text_is_held_in_the_unit_of_the_type(field: str, text: str, held: float) -> None:
    assert getattr(Everything.model_validate({field: text}), field) == held


@pytest.mark.parametrize(
    ("field", "value", "said"),
    [
        ("rate", 30, "with its unit"),
        ("rate", True, "with its unit"),
        ("rate", "30", "not a number followed by its unit"),
        ("rate", "30 s", "cannot be turned into"),
        ("rate", "30 Hertzz", "not a known unit"),
        ("rate", "-1 Hz", "greater than 0"),
        ("length", "1e999 s", "too large"),
        ("length", "nan s", "not a number"),
        ("share", "0.5", "not a number followed by its unit"),
        ("level", "3 Hz", "cannot be turned into"),
        ("range", "250", "not a number followed by its unit"),
        ("range", "250 furlongz", "not a known unit"),
    ],
)
def test_wrong_quantities_say_what_is_wrong(field: str, value: object, said: str) -> None:
    with pytest.raises(ValidationError, match=said):
        Everything.model_validate({field: value})


@settings(deadline=None)
@given(FINITE)
def test_exact_is_the_decimal_that_a_person_reads(value: float) -> None:
    assert float(exact(value)) == value
    assert exact(value) == Fraction(number_text(value))


def test_exact_is_not_the_nearest_double() -> None:
    assert exact(0.1) == Fraction(1, 10) != Fraction(0.1)


@settings(deadline=None)
@given(FINITE, st.sampled_from(["uV", "mmHg", "Hz", "s"]))
def test_a_quantity_reads_back_from_its_text(value: float, unit: str) -> None:
    quantity = Quantity(value, unit)
    assert parse_quantity(str(quantity)) == quantity


@settings(deadline=None)
@given(
    st.floats(1e-3, 1e6), st.floats(-1e6, 1e6), st.decimals(0, 100, places=2), st.floats(-99, 99)
)
def test_parameters_survive_being_written_out(
    rate: float, length: float, percent: object, level: float
) -> None:
    params = Everything.model_validate(
        {
            "rate": f"{rate!r} Hz",
            "length": f"{length!r} s",
            "share": f"{percent} %",
            "level": f"{level!r} dB",
        }
    )
    assert Everything.model_validate_json(params.model_dump_json()) == params


@pytest.mark.parametrize(
    ("given_unit", "wanted", "factor"),
    [
        ("mV", "uV", Fraction(1000)),
        ("µV", "uV", Fraction(1)),
        ("V", "uV", Fraction(10**6)),
        ("uV", "mV", Fraction(1, 1000)),
        ("kPa", "Pa", Fraction(1000)),
        ("min", "s", Fraction(60)),
    ],
)
def test_factors_are_exact(given_unit: str, wanted: str, factor: Fraction) -> None:
    assert unit_factor(given_unit, wanted) == factor


@pytest.mark.parametrize(
    ("given_unit", "wanted"), [("mV", "mmHg"), ("dB", "Hz"), ("", "uV"), ("degC", "K")]
)
def test_units_of_other_kinds_are_refused(given_unit: str, wanted: str) -> None:
    with pytest.raises(UnitError):
        unit_factor(given_unit, wanted)


def test_one_millimetre_of_mercury_in_pascal() -> None:
    """133.322 Pa: ISO 80000-4, conventional millimetre of mercury."""
    assert float(unit_factor("mmHg", "Pa")) == pytest.approx(133.322, abs=5e-4)


@pytest.mark.parametrize("text", ["uV", "µV", "μV", " uV ", "UV"])
def test_a_unit_has_one_spelling(text: str) -> None:
    assert unit_symbol(text) == "uV"


def test_an_amount_is_converted_once_and_exactly() -> None:
    assert Quantity(0.25, "mV").to("uV") == 250.0
    assert Quantity(0.1, "mV").to("uV") == 100.0
