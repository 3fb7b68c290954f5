"""The checks for authors catch a stage that does not keep its word, each by its own check."""

from collections.abc import Callable, Sequence
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from pydantic import ConfigDict

from contract_stages import (
    HONEST,
    HONEST_ROWS,
    HONEST_WHOLE,
    LENGTH,
    SmoothParams,
    caught,
    less_mean,
    levels,
    mean_level,
    size,
    smooth,
    smooth_context,
)
from waveassay.contract import (
    Epochs,
    EpochsSpec,
    Exclusion,
    Features,
    Findings,
    Floats,
    Params,
    Part,
    Reach,
    Response,
    Signal,
    SignalSpec,
    Stage,
    Whole,
    checks,
    kernel_gain,
)
from waveassay.contract.checks import CHECKS


def smooth_gain(params: Any, given: SignalSpec, freq_hz: Floats) -> Any:
    assert given.rate_hz is not None
    kernel = np.full(LENGTH, params.weight / LENGTH)
    return kernel_gain(kernel, LENGTH // 2, freq_hz, float(given.rate_hz))


def smooth_mask(params: Any, signal: Signal) -> Signal:
    half_s = LENGTH // 2 / signal.rate_hz
    return signal.widened(half_s, half_s).excluding_edges(half_s, half_s)


HONEST_RESPONSE = replace(HONEST, response=Response(smooth_gain, smooth_mask))


@pytest.mark.parametrize("check", CHECKS, ids=lambda check: check.__name__)
@pytest.mark.parametrize(
    "stage",
    [HONEST, HONEST_RESPONSE, HONEST_ROWS, HONEST_WHOLE],
    ids=["reach", "response", "rows", "all"],
)
def test_an_honest_stage_passes(stage: Stage, check: Callable[[Stage], None]) -> None:
    check(stage)


class Loose(SmoothParams):
    """Takes anything."""

    model_config = ConfigDict(extra="ignore")


class Bare(Params):
    """Says nothing of its parameter."""

    weight: float = 1.0


class Forgetful(SmoothParams):
    """Writes out something else than it read."""

    def model_dump(self, **options: Any) -> dict[str, Any]:
        """Lose the value."""
        return {"weight": 1.0}


@pytest.mark.parametrize(
    ("check", "said", "changes"),
    [
        (checks.check_form, "lower case", {"name": "Filter Smooth"}),
        (checks.check_form, "a whole number from 1", {"version": 0}),
        (checks.check_is_described, "no source", {"source": " "}),
        (checks.check_parameters_are_described, "weight", {"params": Bare}),
        (checks.check_refuses_unknown_parameters, "silently", {"params": Loose}),
        (checks.check_example, "its example is refused", {"example": {"weight": "heavy"}}),
        (checks.check_example, "reads back", {"params": Forgetful}),
    ],
)
def test_what_it_says_of_itself(
    check: Callable[[Stage], None], said: str, changes: dict[str, Any]
) -> None:
    caught(check, said, replace(HONEST, **changes))


@pytest.mark.parametrize("short", [1, 5])
@pytest.mark.parametrize("side", ["before_s", "after_s"])
def test_a_reach_that_is_too_short(short: int, side: str) -> None:
    def context(params: Any, given: SignalSpec) -> Reach:
        assert given.rate_hz is not None
        reach = smooth_context(params, given)
        return replace(reach, **{side: (LENGTH // 2 - short) / given.rate_hz})

    caught(checks.check_context, "too short", replace(HONEST, context=context))


def test_a_reach_too_short_for_the_masks_alone() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        return smooth(params, signal).widened(Fraction(1), Fraction(0))

    caught(checks.check_context, "excluded", replace(HONEST, run=run))


def test_a_response_that_is_not_the_function() -> None:
    def wider(params: Any, given: SignalSpec, freq_hz: Floats) -> Any:
        assert given.rate_hz is not None
        kernel = np.full(LENGTH + 2, params.weight / (LENGTH + 2))
        return kernel_gain(kernel, LENGTH // 2 + 1, freq_hz, float(given.rate_hz))

    def late(params: Any, given: SignalSpec, freq_hz: Floats) -> Any:
        assert given.rate_hz is not None
        delay = np.exp(-2j * np.pi * freq_hz / float(given.rate_hz))
        return smooth_gain(params, given, freq_hz) * delay

    def slightly(params: Any, given: SignalSpec, freq_hz: Floats) -> Any:
        return smooth_gain(params, given, freq_hz) * (1 + 1e-7)

    for gain in (wider, late, slightly):
        lying = replace(HONEST, response=Response(gain, smooth_mask))
        caught(checks.check_response, "not the same", lying)


def test_a_response_of_what_is_not_linear() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        return smooth(params, signal.with_samples(np.clip(signal.x, -500, 500)))

    caught(checks.check_response, "not the same", replace(HONEST_RESPONSE, run=run))


def test_a_mask_that_is_not_the_function_s() -> None:
    def none(params: Any, signal: Signal) -> Signal:
        return signal

    def more(params: Any, signal: Signal) -> Signal:
        return smooth_mask(params, signal.with_samples(2 * signal.x))

    for mask, said in ((none, "exclude other times"), (more, "changes more")):
        lying = replace(HONEST, response=Response(smooth_gain, mask))
        caught(checks.check_response, said, lying)


def test_a_response_without_a_reach() -> None:
    caught(checks.check_response, "goes with a reach", replace(HONEST_RESPONSE, context=None))


def test_a_reach_on_a_stage_that_needs_the_whole() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        return signal.with_samples(signal.x - np.mean(signal.x))

    caught(checks.check_context, "too short", replace(HONEST, run=run))


def test_a_grid_that_begins_with_what_is_given() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        x = signal.x.copy()
        x[::100] = 0.0
        return signal.with_samples(x)

    caught(checks.check_context, "where its input begins", replace(HONEST, run=run))


def test_an_input_that_is_written() -> None:
    def through_the_view(params: Any, signal: Signal) -> Signal:
        signal.x[0] = 1.0
        return signal

    def by_force(params: Any, signal: Signal) -> Signal:
        signal.x.flags.writeable = True
        signal.x[0] += 1.0
        return smooth(params, signal)

    for run in (through_the_view, by_force):
        caught(checks.check_input_is_not_written, "writes its input", replace(HONEST, run=run))


def test_a_state_between_calls() -> None:
    calls: list[int] = []

    def run(params: Any, signal: Signal) -> Signal:
        calls.append(1)
        return signal.with_samples(signal.x + 1e-15 * len(calls) * signal.x)

    caught(checks.check_same_twice, "run twice", replace(HONEST, run=run))


def test_a_spec_that_says_something_else() -> None:
    def other_rate(params: Any, given: SignalSpec, findings: Findings) -> SignalSpec:
        return replace(given, rate_hz=Fraction(100))

    def other_unit(params: Any, given: SignalSpec, findings: Findings) -> SignalSpec:
        return replace(given, unit="V")

    def epochs(params: Any, given: SignalSpec, findings: Findings) -> EpochsSpec:
        return EpochsSpec(given, 4.0, 4.0)

    check = checks.check_spec_agrees_with_data
    caught(check, "rate 100", replace(HONEST, spec=other_rate))
    caught(check, "unit V", replace(HONEST, spec=other_unit))
    caught(check, "Signal comes", replace(HONEST, spec=epochs))


def test_a_spec_that_wants_the_rate() -> None:
    def spec(params: Any, given: SignalSpec, findings: Findings) -> SignalSpec:
        assert given.rate_hz is not None, "no rate"
        return given

    caught(checks.check_spec_without_rate, "no rate", replace(HONEST, spec=spec))


def test_an_example_that_is_refused() -> None:
    def spec(params: Any, given: SignalSpec, findings: Findings) -> SignalSpec:
        findings.refuse("never", "weight")
        return given

    caught(checks.check_context, "never", replace(HONEST, spec=spec))


def test_columns_that_were_not_announced() -> None:
    def run(params: Any, epochs: Epochs) -> Features:
        out = size(params, epochs)
        return replace(out, columns={"top": out.columns["top"], "rms": out.columns["rms"]})

    caught(checks.check_spec_agrees_with_data, "columns", replace(HONEST_ROWS, run=run))


def test_values_that_are_missing_without_a_reason_or_there_without_an_epoch() -> None:
    def silent(params: Any, epochs: Epochs) -> Features:
        out = size(params, epochs)
        gaps = {part: np.where(values > 30, np.nan, values) for part, values in out.columns.items()}
        return replace(out, columns=gaps)

    def filled(params: Any, epochs: Epochs) -> Features:
        out = size(params, epochs)
        return replace(out, columns={k: np.nan_to_num(v) for k, v in out.columns.items()})

    check = checks.check_spec_agrees_with_data
    caught(check, "says no reason", replace(HONEST_ROWS, run=silent))
    caught(check, "in rows that are not kept", replace(HONEST_ROWS, run=filled))


def test_a_row_that_depends_on_another() -> None:
    def run(params: Any, epochs: Epochs) -> Features:
        out = size(params, epochs)
        rms = out.columns["rms"]
        top = np.nanmax(rms, initial=0)
        return replace(out, columns={**out.columns, "rms": rms * (1 + 1e-15 * top)})

    caught(checks.check_context, "no other row", replace(HONEST_ROWS, run=run))


def test_what_depends_on_the_cuts() -> None:
    def unweighted(params: Any, parts: Sequence[Part]) -> Part:
        means = [float(p["sum"][0]) / max(1, int(p["count"][0])) for p in parts]
        return {"mean": np.array([sum(means) / len(means) * (1 + 1e-6 * len(means))])}

    def per_part(params: Any, signal: Signal, state: Part) -> Signal:
        return signal.with_samples(signal.x - signal.x[0])

    lying = replace(HONEST_WHOLE, context=Whole(levels, unweighted, less_mean))
    caught(checks.check_context, "combined from", lying)
    lying = replace(HONEST_WHOLE, context=Whole(levels, mean_level, per_part))
    caught(checks.check_context, "applied to one", lying)


def test_heavy_imports(tmp_path: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    import importlib
    import sys

    text = (
        '"""A stage that is slow to list."""\n'
        "import scipy\n"
        "from waveassay.contract import Params\n"
        "class SlowParams(Params):\n"
        "    pass\n"
    )
    (tmp_path / "slow_to_list.py").write_text(text, encoding="utf-8")
    monkeypatch.syspath_prepend(tmp_path)
    monkeypatch.setenv("PYTHONPATH", str(tmp_path))
    module = importlib.import_module("slow_to_list")
    try:
        stage = replace(HONEST, params=module.SlowParams)
        caught(checks.check_is_light_to_import, "imports scipy", stage)
    finally:
        del sys.modules["slow_to_list"]


def test_by_stretches_is_whole_to_the_letter_of_the_masks() -> None:
    from waveassay.contract.checks_data import random_signal

    signal = random_signal("uV", Fraction(250), 100)
    params = checks.example_params(HONEST)
    spec = SignalSpec("random", "uV", "eeg", Fraction(250))
    joined = checks.run_by_stretches(HONEST, params, signal, Fraction(9), spec)
    whole = checks.run_whole(HONEST, params, signal)
    assert isinstance(joined, Signal)
    assert joined.excluded == whole.excluded
    assert any(isinstance(item, Exclusion) for item in joined.excluded)
    assert np.array_equal(joined.x, whole.x)
