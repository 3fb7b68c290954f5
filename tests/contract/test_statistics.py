"""Confidence factors of spectral estimates (published values: tests/checks)."""

from math import isnan, nan

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.contract.statistics import confidence_factors


@settings(deadline=None)
@given(dof=st.floats(1, 1e5), level=st.floats(0.8, 0.999))
def test_the_band_holds_the_estimate_and_narrows_with_more_data(dof: float, level: float) -> None:
    low, high = confidence_factors(dof, level)
    more_low, more_high = confidence_factors(2 * dof, level)
    assert 0 < low < more_low < 1 < more_high < high


@pytest.mark.parametrize("dof", [2.0, 5.8, 20.0])
def test_the_band_covers_as_often_as_it_says(dof: float) -> None:
    estimate = np.random.default_rng(5).chisquare(dof, 200_000) / dof  # of a true density of 1
    low, high = confidence_factors(dof, 0.9)
    assert np.mean((estimate * low < 1) & (estimate * high > 1)) == pytest.approx(0.9, abs=0.004)


def test_no_estimate_no_band() -> None:
    low, high = confidence_factors(nan, 0.95)
    assert isnan(low)
    assert isnan(high)


@pytest.mark.parametrize(("dof", "level"), [(0.0, 0.9), (-2.0, 0.9), (2.0, 0.0), (2.0, 95.0)])
def test_nonsense_is_refused(dof: float, level: float) -> None:
    with pytest.raises(ValueError, match="must"):
        confidence_factors(dof, level)
