"""Flat stretches are masked, if long enough."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from signal_data import is_masked, masked_s, signal_of, spec_of
from spectrum_epochs import Found
from waveassay_stages.exclude.flatline import FlatlineParams, flat, run, spec


def params(**values: Any) -> FlatlineParams:
    return FlatlineParams.model_validate(values)


@settings(deadline=None)
@given(
    st.lists(st.one_of(st.integers(0, 2).map(float), st.just(np.nan)), max_size=60),
    st.integers(2, 10),
    st.sampled_from([0.0, 1.0]),
)
def test_masked_is_what_lies_in_a_flat_window(
    values: list[float], width: int, tolerance: float
) -> None:
    """Against the definition, window by window."""
    asked = params(at_least=f"{width * 8} ms", tolerance=f"{tolerance} uV")
    out = run(asked, signal_of(values, 125))
    expected = np.zeros(len(values), np.bool_)
    for i in range(len(values) - width + 1):
        window = values[i : i + width]
        if np.all(np.isfinite(window)) and max(window) - min(window) <= tolerance:
            expected[i : i + width] = True
    assert is_masked(out).tolist() == expected.tolist()


@pytest.mark.parametrize("width", range(2, 10))
def test_a_stretch_just_long_enough_is_found_wherever_it_lies(width: int) -> None:
    for first in range(30 - width + 1):
        x = np.arange(30.0)
        x[first : first + width] = x[first]
        assert np.flatnonzero(flat(x, width, 0.0)).tolist() == [first]


def test_a_disconnected_electrode() -> None:
    x = np.random.default_rng(1).standard_normal(5000)
    x[1000:1249] = x[1000]  # one sample short of a second
    x[2000:2250] = x[2000]
    found = run(params(), signal_of(x))
    assert masked_s(found, "flatline") == [(8.0, 9.0)]


def test_a_little_noise_is_tolerated_if_asked() -> None:
    rng = np.random.default_rng(2)
    x = 20 * rng.standard_normal(5000)
    x[2000:3000] = 3 + 0.2 * rng.uniform(-1, 1, 1000)
    assert run(params(), signal_of(x)).excluded == ()
    found = run(params(tolerance="0.0005 mV"), signal_of(x))
    ((start, stop),) = masked_s(found, "flatline")
    assert (start, stop) == pytest.approx((8, 12), abs=0.02)


def test_behind_a_filter_it_warns() -> None:
    filtered = spec_of(250).passing(0.5, 40, 3)
    for asked, before, warned in (
        (params(), spec_of(250), False),
        (params(), filtered, True),
        (params(tolerance="1 uV"), filtered, False),
    ):
        found = Found()
        assert spec(asked, before, found.findings) == before
        assert found.errors == []
        assert bool(found.warnings) == warned


def test_a_tolerance_of_another_kind_is_refused() -> None:
    found = Found()
    spec(params(tolerance="1 mmHg"), spec_of(250), found.findings)
    assert [at for at, _ in found.errors] == ["tolerance"]


@pytest.mark.parametrize("values", [{"at_least": "0 s"}, {"tolerance": "-1 uV"}, {"length": "1 s"}])
def test_unsound_parameters(values: dict[str, str]) -> None:
    with pytest.raises(ValidationError):
        params(**values)
