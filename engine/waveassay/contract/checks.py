"""Checks that every stage passes; its author runs the same ones as ours.

In a test file of your own, with any test runner::

    for check in CHECKS:
        check(STAGE)

A check says nothing when all is well, and raises AssertionError with what is wrong.
"""

import json
import re
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from fractions import Fraction
from importlib.util import find_spec
from typing import Any

import numpy as np
from pydantic import ValidationError

from waveassay.contract.agreement import disagreements
from waveassay.contract.checks_data import RATES_HZ, UNITS, Given, given, random_signal
from waveassay.contract.checks_response import RESPONSE_TOLERANCE, prove_response
from waveassay.contract.checks_running import (
    InRows,
    Refused,
    announced,
    arrays_in,
    difference,
    in_parts,
    run_by_stretches,
    run_whole,
    take_rows,
)
from waveassay.contract.kinds import Epochs, Signal
from waveassay.contract.params import Params
from waveassay.contract.spec import (
    Findings,
    SignalSpec,
    SpectraSpec,
)
from waveassay.contract.stage import EachRow, Reach, Stage, Whole

__all__ = [
    "CHECKS",
    "RESPONSE_TOLERANCE",
    "STRETCH_TOLERANCE",
    "example_params",
    "run_by_stretches",
    "run_whole",
]

#: Run by stretches and run whole may be this share of the largest sample (in or out) apart:
#: ten times what the declared reach may leave out, for what rounding adds.
STRETCH_TOLERANCE = 1e-9

#: What a recording's parts are combined to may depend on where it was cut by rounding alone.
COMBINE_TOLERANCE = 1e-9

STRETCHES_S = (Fraction(7), Fraction(41, 2))

#: Slow to import; listing stages and checking a recipe must stay fast.
HEAVY = ("scipy", "pandas", "pyarrow", "matplotlib", "pint")

_NAME = re.compile(r"[a-z][a-z0-9_]*(\.[a-z][a-z0-9_]*)?\Z")


def example_params(stage: Stage) -> Params:
    """Return the parameters of the stage's example, read as from a recipe."""
    return stage.params.model_validate_json(json.dumps(dict(stage.example)))


def cases(stage: Stage) -> Iterator[Given]:
    """Yield random data of each kind that the stage takes, at each rate that it accepts.

    The signal's unit is the first one that the example accepts.
    """
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


def check_name(stage: Stage) -> None:
    """Require a name such as ``family.method`` in lower case, and a version from 1."""
    assert _NAME.match(stage.name), f"'{stage.name}': lower case, such as 'family.method'"
    assert stage.version >= 1, f"{stage.name}: its version is {stage.version}, and starts at 1"


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
    child = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert child.returncode == 0, f"{stage.name}: {module} cannot be imported: {child.stderr}"
    loaded = child.stdout.split()
    assert not loaded, f"{stage.name}: importing it imports {', '.join(sorted(loaded))}"


def check_spec_without_rate(stage: Stage) -> None:
    """Require that the recipe alone can be checked: a rate that is not known is no error."""
    findings = Findings(lambda message, at: None, lambda message, at: None)
    params = example_params(stage)
    if _is_source(stage):
        stage.spec(params, SignalSpec("random", "uV"), findings)
        return
    for case in cases(stage):
        spec = case.spec
        if isinstance(spec, SignalSpec):
            stage.spec(params, replace(spec, rate_hz=None), findings)
            continue
        unknown = replace(spec, signal=replace(spec.signal, rate_hz=None))
        if isinstance(unknown, SpectraSpec):
            unknown = replace(unknown, resolution_hz=None, bin_hz=None, top_hz=None)
        stage.spec(params, unknown, findings)


def check_spec_agrees_with_data(stage: Stage) -> None:
    """Require that what was announced comes out: rate, unit, length, frequencies, columns."""
    if _is_source(stage):
        return
    params = example_params(stage)
    for case in cases(stage):
        spec, out = announced(stage, params, case.spec), run_whole(stage, params, case.data)
        for text in disagreements(spec, case.data, out):
            raise AssertionError(f"{stage.name}: {text}")


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
            _prove_each_row(stage, params, case)
        elif isinstance(stage.context, Whole):
            _prove_whole(stage, params, case, stage.context)
        else:
            _prove_reach(stage, params, case)


def check_response(stage: Stage) -> None:
    """Prove a declared frequency response against the stage's own function, masks to the letter."""
    if stage.response is None:
        return
    for case in cases(stage):
        assert isinstance(case.spec, SignalSpec), f"{stage.name}: a response is for signals"
        prove_response(stage, example_params(stage), case.spec)


def _prove_reach(stage: Stage, params: Params, case: Given) -> None:
    """Require that run by stretches equals run whole, masks to the letter."""
    assert isinstance(case.spec, SignalSpec), f"{stage.name}: a reach is for stages on signals"
    assert callable(stage.context)
    reach = stage.context(params, case.spec)
    assert isinstance(reach, Reach), f"{stage.name}: its context is no Reach but {reach!r}"
    # Long enough that stretches in the middle see neither end.
    long_s = min(600, max(100, int(3 * (reach.before_s + reach.after_s)) + 60))
    assert case.spec.rate_hz is not None
    data = random_signal(case.spec.unit, case.spec.rate_hz, long_s)
    whole = run_whole(stage, params, data)
    tolerance = STRETCH_TOLERANCE * float(np.max(np.abs(data.x)))
    if isinstance(whole, Signal):
        whole = whole.cut(data.piece.start_s, data.piece.stop_s)
        tolerance = max(tolerance, STRETCH_TOLERANCE * float(np.max(np.abs(whole.x), initial=0)))
    for stretch_s in STRETCHES_S:
        joined = run_by_stretches(stage, params, data, stretch_s, case.spec)
        found = difference(joined, whole, tolerance)
        assert not found, (
            f"{stage.name}: run by stretches of {float(stretch_s):g} s and whole, {found}. "
            "Its context is too short, or it depends on where its input begins"
        )


def _prove_each_row(stage: Stage, params: Params, case: Given) -> None:
    """Require that some rows alone give what they give among the others, to the bit."""
    data = case.data
    assert isinstance(data, InRows), f"{stage.name}: signals have no rows"
    whole = run_whole(stage, params, data)
    if not isinstance(whole, InRows):
        return  # a request for a table holds no rows
    count = len(data) if isinstance(data, Epochs) else len(data.rows)
    every = np.arange(count, dtype=np.int64)
    for places in (every[1::2], every[: count // 3], every[-1:], every[:0]):
        some = run_whole(stage, params, take_rows(data, places))
        found = difference(some, take_rows(whole, places))
        assert not found, (
            f"{stage.name}: {places.size} of {count} rows alone and among the others, {found}. "
            "A row may depend on no other row, not even in the last bit"
        )


def _prove_whole(stage: Stage, params: Params, case: Given, context: Whole) -> None:
    """Require that what is combined does not depend on the cuts, nor what is applied."""
    state = context.combine(params, [context.collect(params, case.data)])
    whole = run_whole(stage, params, case.data)
    for count in (3, 64):  # some of 64 are empty
        parts = in_parts(case.data, count)
        again = context.combine(params, [context.collect(params, part) for part in parts])
        scale = max((float(np.nanmax(np.abs(a), initial=0)) for a in _numbers(state)), default=0.0)
        found = difference(again, state, COMBINE_TOLERANCE * scale)
        assert not found, f"{stage.name}: combined from {count} parts and from one, {found}"
        if context.apply is None:
            continue
        outs = [context.apply(params, part, state) for part in parts]
        for out, part in zip(outs, in_parts(whole, count), strict=True):
            found = difference(out, part)
            assert not found, f"{stage.name}: applied to one of {count} parts and whole, {found}"


def _numbers(value: object) -> Iterator[np.ndarray[Any, Any]]:
    return (array for array in arrays_in(value) if array.dtype.kind == "f" and array.size)


CHECKS: tuple[Callable[[Stage], None], ...] = (
    check_name,
    check_is_described,
    check_parameters_are_described,
    check_refuses_unknown_parameters,
    check_example,
    check_is_light_to_import,
    check_spec_without_rate,
    check_spec_agrees_with_data,
    check_input_is_not_written,
    check_same_twice,
    check_context,
    check_response,
)
