import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from feature_data import Collected, bins, some_rows, spectra, spectra_spec
from waveassay_stages.feature.spectral_peak import (
    SpectralPeakParams,
    run,
    spec,
    spectral_peaks,
)

FREQ = bins(257, 0.25)


def params(**given: object) -> SpectralPeakParams:
    return SpectralPeakParams.model_validate({"within": ("6 Hz", "14 Hz"), **given})


@given(centre=st.floats(7, 13), width=st.floats(0.2, 3), height=st.floats(1e-3, 1e6))
def test_the_vertex_of_a_gaussian_peak_is_found_exactly(
    centre: float, width: float, height: float
) -> None:
    density = height * np.exp(-0.5 * ((FREQ - centre) / width) ** 2)
    peaks = spectral_peaks(FREQ, density[None], 6.0, 14.0)
    assert peaks.found[0]
    assert peaks.frequency_hz[0] == pytest.approx(centre, abs=1e-6)
    assert peaks.level_db[0] == pytest.approx(10 * np.log10(height), abs=1e-6)


def test_the_bin_rule_gives_the_highest_bin_and_its_density() -> None:
    density = np.ones(257)
    density[40:43] = (4.0, 9.0, 5.0)
    columns = run(params(method="bin"), spectra(density)).columns
    assert columns["frequency"][0] == 10.25
    assert columns["power"][0] == pytest.approx(9.0, rel=1e-12)
    assert columns["prominence"][0] == pytest.approx(10 * np.log10(9.0), rel=1e-12)
    decibel = run(params(method="bin", express="decibel"), spectra(density)).columns["power"]
    assert decibel[0] == pytest.approx(10 * np.log10(9.0), rel=1e-12)


def test_a_line_with_nothing_beside_it_keeps_its_bin() -> None:
    density = np.zeros(257)
    density[40] = 2.0
    columns = run(params(), spectra(density)).columns
    assert columns["frequency"][0] == 10.0
    assert columns["power"][0] == pytest.approx(2.0, rel=1e-12)


def test_a_slope_through_the_range_is_no_peak() -> None:
    slope = 100 / np.maximum(FREQ, 0.25)
    for density in (slope, slope[::-1], np.ones(257), np.zeros(257)):
        features = run(params(), spectra(density))
        assert all(np.isnan(values[0]) for values in features.columns.values())
        assert features.missing == ("no peak in the range",)


def test_a_peak_on_a_limit_counts_when_the_bin_outside_is_lower() -> None:
    density = np.ones(257)
    density[24] = 5.0  # 6 Hz, the lower limit
    assert run(params(method="bin"), spectra(density)).columns["frequency"][0] == 6.0


def test_a_peak_below_the_prominence_asked_is_missing() -> None:
    density = np.ones(257)
    density[40] = 2.5  # 4 dB above the median of the range
    assert run(params(prominence="3 dB"), spectra(density)).missing == ("",)
    low = run(params(prominence="5 dB"), spectra(density))
    assert np.isnan(low.columns["frequency"][0])
    assert low.missing == ("no peak of that prominence",)


@given(exponent=st.floats(0.5, 3), scale=st.floats(1e-3, 1e3), height=st.floats(2, 50))
def test_a_power_law_background_frees_a_peak_from_its_slope(
    exponent: float, scale: float, height: float
) -> None:
    background = scale / np.maximum(FREQ, 0.25) ** exponent
    density = background * (1 + height * np.exp(-0.5 * ((FREQ - 10.0) / 0.5) ** 2))
    peaks = spectral_peaks(FREQ, density[None], 2.0, 20.0, background="power_law")
    assert peaks.found[0]
    assert peaks.frequency_hz[0] == pytest.approx(10.0, abs=0.02)
    # The foot of the peak moves the line a little.
    assert peaks.prominence_db[0] == pytest.approx(10 * np.log10(1 + height), abs=0.3)
    assert peaks.level_db[0] == pytest.approx(10 * np.log10(density[40]), abs=0.05)


def test_the_median_background_loses_that_peak() -> None:
    background = 100 / np.maximum(FREQ, 0.25) ** 2
    density = background * (1 + 5 * np.exp(-0.5 * ((FREQ - 10.0) / 0.5) ** 2))
    assert not spectral_peaks(FREQ, density[None], 2.0, 20.0).found[0]


def test_a_row_does_not_depend_on_its_neighbours() -> None:
    data = spectra(np.random.default_rng(6).gamma(2.0, size=(9, 257)), kept=[True] * 8 + [False])
    for background in ("median", "power_law"):
        chosen = params(background=background)
        whole = run(chosen, data)
        for i in range(9):
            single = run(chosen, some_rows(data, slice(i, i + 1)))
            for part, values in whole.columns.items():
                assert np.array_equal(values[i], single.columns[part][0], equal_nan=True)
    assert whole.missing[8] == ""


def test_a_power_law_needs_nine_bins() -> None:
    found = Collected()
    narrow = params(within=("9 Hz", "10.75 Hz"), background="power_law")
    spec(narrow, spectra_spec(), found.findings)
    assert found.refused_at == ["within"]
    spec(params(within=("9 Hz", "11 Hz"), background="power_law"), spectra_spec(), found.findings)
    assert len(found.refused) == 1


def test_columns_are_those_that_the_spec_promises() -> None:
    promised = spec(params(), spectra_spec(), Collected().findings).columns
    assert [c.part for c in promised] == list(run(params(), spectra(np.ones(257))).columns)
    assert [c.unit for c in promised] == ["Hz", "uV^2/Hz", "dB"]
