"""A stage that is not put together right is told so in plain words, with what to write."""

from collections.abc import Callable
from dataclasses import replace
from typing import Annotated, Any

import pytest
from pydantic import BaseModel, Field

from contract_stages import HONEST, HONEST_ROWS, HONEST_WHOLE, SmoothParams, caught
from waveassay.contract import (
    Derived,
    EachRow,
    Hertz,
    Kind,
    Params,
    Reach,
    Seconds,
    Stage,
    Whole,
    checks,
)
from waveassay.contract.checks_form import why_unfit

REACH = Reach(1, 1)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("stage", "changes", "said"),
    [
        (HONEST, {"context": REACH}, r"context is .*: write EachRow\(\), Whole.* or a function"),
        (HONEST_ROWS, {"context": EachRow}, "context is the class EachRow: write EachRow"),
        (HONEST_ROWS, {"context": HONEST.context}, "takes epochs: write EachRow"),
        (HONEST, {"context": EachRow()}, "signals have no rows: write a function"),
        (HONEST_ROWS, {"takes": Kind.EPOCHS}, r"not a tuple: write takes=\(Kind.EPOCHS,\)"),
        (HONEST_ROWS, {"takes": ("epochs",)}, "takes holds 'epochs'"),
        (HONEST_ROWS, {"takes": (Kind.TABLE,)}, "which no step can take"),
        (HONEST_ROWS, {"gives": (Kind.FEATURES,)}, "write one kind, such as gives=Kind.FEATURES"),
        (HONEST, {"needs": lambda params: ("eeg",)}, "takes something: leave needs out"),
        (HONEST, {"takes": ()}, "needs is missing: write the kinds that it takes"),
        (HONEST, {"run": None}, "nothing to run: write run=run"),
        (HONEST, {"run": "smooth"}, "run is 'smooth'.*write the function"),
        (HONEST, {"spec": None}, "spec is None.*write the function"),
        (HONEST_WHOLE, {"context": Whole(None, None)}, "collect of its Whole"),  # type: ignore[arg-type]
        (HONEST, {"params": BaseModel}, "write a class derived from Params"),
        (HONEST, {"version": "1"}, "write a whole number from 1"),
        (HONEST, {"name": "too.many.dots"}, "no stage name"),
        (HONEST, {"name": 7}, "no stage name"),
        (HONEST, {"example": ["weight"]}, "write a mapping"),
    ],
)
def test_what_cannot_serve_as_a_stage(stage: Stage, changes: dict[str, Any], said: str) -> None:
    unfit = replace(stage, **changes)
    caught(checks.check_form, said, unfit)
    assert why_unfit(stage) is None


def test_a_check_that_runs_the_stage_says_the_same() -> None:
    for check in (checks.check_context, checks.check_same_twice, checks.check_spec_without_rate):
        caught(check, "write run=run", replace(HONEST, run=None))
        caught(check, "write takes=", replace(HONEST_ROWS, takes=Kind.EPOCHS))  # type: ignore[arg-type]


def test_what_is_no_stage_at_all() -> None:
    assert "begin the name of a helper module with '_'" in str(why_unfit(None))
    assert "write STAGE = Stage(...)" in str(why_unfit(Stage))
    assert "write STAGE = Stage(...)" in str(why_unfit("filter.smooth"))


def test_a_stage_that_takes_another_kind_than_its_spec_reads() -> None:
    wrong = replace(HONEST_ROWS, takes=(Kind.SPECTRA,), spec=lambda p, given, f: given.length_s)
    caught(checks.check_context, "given a SpectraSpec, as its 'takes' says", wrong)


class Text(Params):
    """A default as a recipe would write it."""

    length: Seconds = Field(default="0.05 s", description="Length.")  # type: ignore[assignment]


class Rounded(SmoothParams):
    """A whole number for a number is no fault, nor is a default that was made."""

    share: float = Field(default=1, description="Share.")
    length: Seconds = Field(default=2, description="Length.")
    names: tuple[str, ...] = Field(default_factory=tuple, description="Names.")


class Beyond(SmoothParams):
    """A default that no recipe could give."""

    length: Seconds = Field(default=-1.0, gt=0, description="Length.")


class Other(SmoothParams):
    """A default of another type than what is read."""

    ends: tuple[float, float] = Field(default=[0, 1], description="Ends.")  # type: ignore[assignment]


class Inner(Params):
    """Parameters within."""

    top: Annotated[Hertz, Field(gt=0)] = Field(default=0.0, description="Top.")


class Outer(SmoothParams):
    """Holds parameters."""

    inner: Inner | None = Field(default=None, description="More.")


@pytest.mark.parametrize(
    ("params", "said"),
    [
        (Text, "'length' is '0.05 s', which is not of its type: write the value as held"),
        (Beyond, r"'length' is -1.0, which a recipe could not give: .*greater than 0"),
        (Other, r"'ends' is \[0, 1\], and reads back as \(0.0, 1.0\)"),
        (Outer, "'top' is 0.0, which a recipe could not give"),
    ],
)
def test_defaults_that_a_recipe_could_not_give(params: type[Params], said: str) -> None:
    caught(checks.check_defaults, said, replace(HONEST, params=params))


def test_defaults_that_a_recipe_could_give() -> None:
    checks.check_defaults(replace(HONEST, params=Rounded))


def derived(*items: object) -> Callable[[Any, Any], Any]:
    return lambda params, given: list(items)


@pytest.mark.parametrize(
    ("derive", "said"),
    [
        (lambda params, given: Derived("gain", 1.0), "no list"),
        (derived(("gain", 1.0)), "no Derived"),
        (derived(Derived("gain", float("nan"))), "'gain' is nan: give a finite"),
        (derived(Derived("gain", None)), "'gain' is None"),  # type: ignore[arg-type]
        (derived(Derived(" ", 1.0)), "no name"),
    ],
)
def test_what_is_derived(derive: Any, said: str) -> None:
    caught(checks.check_derive, said, replace(HONEST, derive=derive))


def test_what_is_derived_is_asked_at_known_rates() -> None:
    rates = []

    def derive(params: Any, given: Any) -> list[Derived]:
        rates.append(given.rate_hz)
        return [Derived("nyquist", float(given.rate_hz / 2), "Hz"), Derived("how", "plain")]

    checks.check_derive(replace(HONEST, derive=derive))
    assert len(rates) > 1
    assert None not in rates
