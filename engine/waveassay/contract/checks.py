"""Checks that every stage passes; its author runs the same ones as ours.

In a test file of your own, with any test runner::

    for check in CHECKS:
        check(STAGE)

A check says nothing when all is well, and raises AssertionError with what is wrong.
"""

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from importlib.util import find_spec
from math import isfinite

from pydantic import ValidationError

from waveassay.contract.agreement import disagreements
from waveassay.contract.checks_context import (
    prove_each_row,
    prove_reach,
    prove_whole,
    require_finite,
)
from waveassay.contract.checks_data import RATES_HZ, UNITS, Given, given
from waveassay.contract.checks_defaults import unsound_defaults
from waveassay.contract.checks_form import why_unfit
from waveassay.contract.checks_masks import prove_masks
from waveassay.contract.checks_precision import SINGLE_TOLERANCE, in_single, prove_single
from waveassay.contract.checks_response import RESPONSE_TOLERANCE, prove_response
from waveassay.contract.checks_running import (
    Refused,
    announced,
    arrays_in,
    difference,
    run_by_stretches,
    run_whole,
)
from waveassay.contract.params import Params
from waveassay.contract.spec import Derived, Findings, SignalSpec, Spec, SpectraSpec
from waveassay.contract.stage import EachRow, Stage, Whole

__all__ = [
    "CHECKS",
    "RESPONSE_TOLERANCE",
    "SINGLE_TOLERANCE",
    "example_params",
    "run_by_stretches",
    "run_whole",
]

#: Slow to import; listing stages and checking a recipe must stay fast.
HEAVY = ("scipy", "pandas", "pyarrow", "matplotlib", "pint")


def example_params(stage: Stage) -> Params:
    """Return the parameters of the stage's example, read as from a recipe."""
    return stage.params.model_validate_json(json.dumps(dict(stage.example)))


def cases(stage: Stage) -> Iterator[Given]:
    """Yield random data of each kind that the stage takes, at each rate that it accepts.

    The signal's unit is the first one that the example accepts.
    """
    check_form(stage)
    params = example_params(stage)
    for kind in stage.kinds_taken(params):
        refusals = []
        for unit in UNITS:
            accepted = []
            for rate_hz in RATES_HZ:
                case = given(kind, unit, rate_hz)
                try:
                    announced(stage, params, case.spec)
                except Refused as refusal:
                    refusals.append(f"{unit}, {rate_hz} Hz: {refusal}")
                else:
                    accepted.append(case)
            if accepted:
                yield from accepted
                break
        else:
            raise AssertionError(f"{stage.name}: its example is refused: {refusals}")


def _one_case_a_kind(stage: Stage) -> Iterator[Given]:
    seen = set()
    for case in cases(stage):
        if type(case.data) not in seen:
            seen.add(type(case.data))
            yield case


def _is_source(stage: Stage) -> bool:
    return stage.needs is not None


def check_form(stage: Stage) -> None:
    """Require what can be said of a stage as it stands: its name, kinds, functions, context."""
    why = why_unfit(stage)
    assert why is None, why


def check_is_described(stage: Stage) -> None:
    """Require the sentence that help shows, and the method's source."""
    assert stage.summary.strip(), f"{stage.name}: its module has no docstring"
    assert stage.source.strip(), f"{stage.name}: no source; 'common practice, no source' is one"


def check_parameters_are_described(stage: Stage) -> None:
    """Require a sentence for each parameter."""
    bare = [name for name, f in stage.params.model_fields.items() if not f.description]
    assert not bare, f"{stage.name}: no description for {', '.join(bare)}"


def check_refuses_unknown_parameters(stage: Stage) -> None:
    """Require that a misspelt parameter is an error, never a silent default."""
    values = {**stage.example, "no_such_parameter": 1}
    wrong: list[tuple[int | str, ...]] = []
    try:
        stage.params.model_validate_json(json.dumps(values))
    except ValidationError as error:
        wrong = [item["loc"] for item in error.errors()]
    assert ("no_such_parameter",) in wrong, f"{stage.name}: it takes unknown parameters silently"


def check_example(stage: Stage) -> None:
    """Require that the example is accepted, and reads back the same once written out."""
    try:
        params = example_params(stage)
    except ValidationError as error:
        raise AssertionError(f"{stage.name}: its example is refused: {error}") from None
    text = json.dumps(params.model_dump(mode="json"))
    again = stage.params.model_validate_json(text)
    assert again == params, f"{stage.name}: {text} reads back as {again!r}, not {params!r}"


def check_defaults(stage: Stage) -> None:
    """Require that each default is a value as held, and would be accepted in a recipe."""
    for text in unsound_defaults(stage.params, stage.example):
        raise AssertionError(f"{stage.name}: {text}")


def check_is_light_to_import(stage: Stage) -> None:
    """Require that heavy libraries are imported inside functions.

    A stage in a module that a new interpreter cannot find (a test's own) is not looked at.
    """
    module = stage.params.__module__
    try:
        found = find_spec(module)
    except (ImportError, ValueError):
        return
    if found is None or module == "__main__":
        return
    code = f"import {module}, sys; print(*({set(HEAVY)!r} & set(sys.modules)))"
    env = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, sys.path))}
    child = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=env)
    assert child.returncode == 0, f"{stage.name}: {module} cannot be imported: {child.stderr}"
    loaded = child.stdout.split()
    assert not loaded, f"{stage.name}: importing it imports {', '.join(sorted(loaded))}"


def check_spec_without_rate(stage: Stage) -> None:
    """Require that the recipe alone can be checked: a rate that is not known is no error."""
    params = example_params(stage)
    specs = [SignalSpec("random", "uV")] if _is_source(stage) else [c.spec for c in cases(stage)]
    for spec in specs:
        findings = Findings(lambda message, at: None, lambda message, at: None)
        try:
            stage.spec(params, _without_rate(spec), findings)
        except Exception as error:
            raise AssertionError(
                f"{stage.name}: its spec fails where only the recipe is known, and rate_hz is "
                f"None: {type(error).__name__}: {error}"
            ) from error


def _without_rate(spec: Spec) -> Spec:
    if isinstance(spec, SignalSpec):
        return replace(spec, rate_hz=None)
    unknown = replace(spec, signal=replace(spec.signal, rate_hz=None))
    if isinstance(unknown, SpectraSpec):
        return replace(unknown, resolution_hz=None, bin_hz=None, top_hz=None)
    return unknown


def check_derive(stage: Stage) -> None:
    """Require that what is derived at a known rate is a list of `Derived`, each number finite."""
    if stage.derive is None:
        return
    params = example_params(stage)
    specs = [SignalSpec("random", "uV", None, rate_hz) for rate_hz in RATES_HZ]
    for spec in specs if _is_source(stage) else [case.spec for case in cases(stage)]:
        items: object = stage.derive(params, spec)
        assert isinstance(items, list | tuple), f"{stage.name}: derive gives {items!r}, no list"
        for item in items:
            assert isinstance(item, Derived), f"{stage.name}: derive gives {item!r}, no Derived"
            assert item.quantity.strip(), f"{stage.name}: a derived value has no name: {item!r}"
            value: object = item.value
            known = isinstance(value, str | int | float) and not isinstance(value, bool)
            finite = known and (isinstance(value, str) or isfinite(value))  # type: ignore[arg-type]
            assert finite, (
                f"{stage.name}: derived '{item.quantity}' is {value!r}: give a finite float, an "
                "int or a text"
            )


def check_spec_agrees_with_data(stage: Stage) -> None:
    """Require that what was announced comes out: rate, unit, length, frequencies, columns."""
    if _is_source(stage):
        return
    params = example_params(stage)
    for case in cases(stage):
        spec, out = announced(stage, params, case.spec), run_whole(stage, params, case.data)
        for text in disagreements(spec, case.data, out):
            raise AssertionError(f"{stage.name}: {text}")
        require_finite(stage, out)


def check_input_is_not_written(stage: Stage) -> None:
    """Require that the input is the same after the run as before."""
    if _is_source(stage):
        return
    params = example_params(stage)
    for case in _one_case_a_kind(stage):
        arrays = list(arrays_in(case.data))
        before = [array.tobytes() for array in arrays]
        for array in arrays:
            array.flags.writeable = False
        try:
            run_whole(stage, params, case.data)
        except ValueError as error:
            if "read-only" in str(error):
                raise AssertionError(f"{stage.name}: it writes its input: {error}") from error
            raise
        after = [array.tobytes() for array in arrays]
        assert after == before, f"{stage.name}: it writes its input"


def check_same_twice(stage: Stage) -> None:
    """Require that the same input gives the same bytes again."""
    if _is_source(stage):
        return
    params = example_params(stage)
    for case in _one_case_a_kind(stage):
        one, other = (run_whole(stage, params, case.data) for _ in range(2))
        found = difference(one, other)
        assert not found, f"{stage.name}: run twice on the same input, {found}"


def check_context(stage: Stage) -> None:
    """Prove what the stage declares of its context, on random data."""
    if _is_source(stage) or stage.context is None:
        return
    params = example_params(stage)
    for case in cases(stage):
        if isinstance(stage.context, EachRow):
            prove_each_row(stage, params, case)
        elif isinstance(stage.context, Whole):
            prove_whole(stage, params, case, stage.context)
        else:
            prove_reach(stage, params, case)


def check_single_precision(stage: Stage) -> None:
    """Prove that samples or densities in float32 give the same result, but for their rounding.

    Each row still depends on itself alone, to the bit.
    """
    if _is_source(stage):
        return
    params = example_params(stage)
    for case in _one_case_a_kind(stage):
        single = in_single(case)
        if single is not None:
            prove_single(stage, params, case, single)
            if isinstance(stage.context, EachRow):
                prove_each_row(stage, params, single)


def check_response(stage: Stage) -> None:
    """Prove a declared frequency response against the stage's own function, masks to the letter."""
    if stage.response is None:
        return
    for case in cases(stage):
        assert isinstance(case.spec, SignalSpec), f"{stage.name}: a response is for signals"
        prove_response(stage, example_params(stage), case.spec)


def check_masks(stage: Stage) -> None:
    """Prove that a filter widens masks, and masks the ends of a piece, by its response."""
    params = example_params(stage)
    if _is_source(stage) or not callable(stage.context):
        return
    for case in cases(stage):
        prove_masks(stage, params, case)


CHECKS: tuple[Callable[[Stage], None], ...] = (
    check_form,
    check_is_described,
    check_parameters_are_described,
    check_refuses_unknown_parameters,
    check_example,
    check_defaults,
    check_is_light_to_import,
    check_spec_without_rate,
    check_derive,
    check_spec_agrees_with_data,
    check_input_is_not_written,
    check_same_twice,
    check_context,
    check_single_precision,
    check_masks,
    check_response,
)
