"""Amplitude limits: every window beyond them is masked whole, and nothing else."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from signal_data import is_masked, masked_s, signal_of, spec_of
from spectrum_epochs import Found
from waveassay_stages.exclude._sliding import sliding_max
from waveassay_stages.exclude.amplitude import AmplitudeParams, beyond, run, spec


def params(**values: Any) -> AmplitudeParams:
    return AmplitudeParams.model_validate(values)


NUMBERS = st.floats(-1000, 1000, width=32)


@settings(deadline=None)
@given(st.lists(st.one_of(NUMBERS, st.just(-np.inf)), min_size=1, max_size=80), st.data())
def test_the_greatest_of_every_window(values: list[float], data: st.DataObject) -> None:
    width = data.draw(st.integers(1, len(values)))
    found = sliding_max(np.array(values, np.float64), width)
    expected = [max(values[i : i + width]) for i in range(len(values) - width + 1)]
    assert found.tolist() == expected


@settings(deadline=None)
@given(
    st.lists(st.one_of(NUMBERS, st.just(np.nan), st.just(np.inf)), min_size=1, max_size=60),
    st.integers(1, 12),
    st.sampled_from(["peak_to_peak", "absolute"]),
)
def test_masked_is_what_lies_in_a_window_beyond_the_range(
    values: list[float], width: int, criterion: str
) -> None:
    """Against the definition, window by window."""
    asked = params(range="300 uV", window=f"{width * 8} ms", criterion=criterion)
    out = run(asked, signal_of(values, 125))
    expected = ~np.isfinite(values)
    width = min(width, len(values))
    for i in range(len(values) - width + 1):
        window = np.array([v for v in values[i : i + width] if np.isfinite(v)])
        if window.size == 0:
            continue
        size = np.ptp(window) if criterion == "peak_to_peak" else np.max(np.abs(window))
        if size > 300:
            expected[i : i + width] = True
    assert is_masked(out).tolist() == expected.tolist()
    assert np.array_equal(out.x, values, equal_nan=True)


@settings(deadline=None)
@given(
    st.lists(st.integers(-2, 2), min_size=1, max_size=120),
    st.dictionaries(st.integers(0, 119), st.sampled_from([3, -3, np.nan, np.inf, -np.inf])),
    st.sampled_from([2.0, 3.0, 4.0, 5.0]),
    st.sampled_from(["peak_to_peak", "absolute"]),
    st.data(),
)
def test_quiet_time_is_passed_over_and_nothing_in_it_is_missed(
    quiet: list[int], events: dict[int, float], limit: float, criterion: str, data: st.DataObject
) -> None:
    """Window by window, where most keep within the limit and some lie on it."""
    x = np.array(quiet, np.float64)
    for place, value in events.items():
        x[place % x.size] = value
    width = data.draw(st.integers(1, x.size))
    expected = []
    for i in range(x.size - width + 1):
        window = x[i : i + width][np.isfinite(x[i : i + width])]
        if criterion == "absolute":
            window = np.append(np.abs(window), 0.0)
        expected.append(window.size > 0 and bool(np.max(window) - np.min(window) > limit))
    assert beyond(x, width, limit, criterion).tolist() == expected


def test_a_range_that_is_just_reached_is_not_exceeded() -> None:
    x = np.zeros(1000)
    x[500] = 250.0
    assert run(params(range="250 uV", window="1 s"), signal_of(x)).excluded == ()
    found = run(params(range="249.9 uV", window="1 s"), signal_of(x))
    # All windows of 250 samples that hold sample 500: from 251 to 749.
    assert masked_s(found, "amplitude") == [(251 / 250, 750 / 250)]


def test_the_range_is_brought_to_the_unit_of_the_signal() -> None:
    x = np.zeros(1000)
    x[500] = 0.3
    found = run(params(range="250 uV", window="4 ms"), signal_of(x, unit="mV"))
    assert masked_s(found, "amplitude") == []
    found = run(params(range="250 uV", window="8 ms"), signal_of(x, unit="mV"))
    assert masked_s(found, "amplitude") == [(499 / 250, 502 / 250)]


def test_reasons_stand_apart_from_what_was_masked_before() -> None:
    x = np.zeros(1000)
    x[500] = np.nan
    found = run(params(range="1 uV", window="1 s"), signal_of(x, masks=[(1, 3, "edge")]))
    assert masked_s(found, "edge") == [(1, 3)]
    assert masked_s(found, "not finite") == [(2.0, 2.004)]


def test_a_piece_shorter_than_the_window_is_one_window() -> None:
    found = run(params(range="10 uV", window="60 s"), signal_of([0.0, 11.0, 0.0]))
    assert masked_s(found, "amplitude") == [(0.0, 0.012)]
    assert run(params(range="10 uV", window="60 s"), signal_of([])).excluded == ()


@pytest.mark.parametrize(("unit", "refused"), [("uV", False), ("V", False), ("mmHg", True)])
def test_a_range_of_another_kind_is_refused(unit: str, refused: bool) -> None:
    found = Found()
    spec(params(range="250 uV", window="1 s"), spec_of(250, unit), found.findings)
    assert [at for at, _ in found.errors] == (["range"] if refused else [])


@pytest.mark.parametrize(
    "values",
    [
        {"range": "0 uV", "window": "1 s"},
        {"range": "-5 uV", "window": "1 s"},
        {"range": "250", "window": "1 s"},
        {"range": "250 uV", "window": "0 s"},
        {"range": "250 uV"},
        {"window": "1 s"},
    ],
)
def test_unsound_parameters(values: dict[str, str]) -> None:
    with pytest.raises(ValidationError):
        params(**values)
