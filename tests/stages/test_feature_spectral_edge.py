import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from feature_data import Collected, bins, some_rows, spectra, spectra_spec
from waveassay_stages.feature.spectral_edge import (
    SpectralEdgeParams,
    cumulative_power,
    run,
    spec,
    spectral_edges,
)

FREQ = bins(257, 0.25)
RULES = st.sampled_from(["rectangle", "trapezoid"])


def params(**given: object) -> SpectralEdgeParams:
    return SpectralEdgeParams.model_validate({"within": ("0.5 Hz", "30 Hz"), **given})


@given(low=st.floats(0, 30), width=st.floats(0.6, 30), share=st.floats(0.01, 0.99), rule=RULES)
def test_a_flat_density_is_cut_at_the_share_of_its_range(
    low: float, width: float, share: float, rule: str
) -> None:
    if rule == "rectangle" and low == 0:
        low = 0.3  # the bin at 0 is not doubled, so all of it counts and the density is not flat
    edge = spectral_edges(
        FREQ,
        np.full((1, 257), 2.0),
        low,
        low + width,
        share,
        integration=rule,  # type: ignore[arg-type]
    )
    assert edge[0] == pytest.approx(low + share * width, abs=1e-9)


@given(seed=st.integers(0, 2**31), scale=st.floats(1e-6, 1e6), rule=RULES)
def test_the_edge_rises_with_the_share_and_stays_in_the_range_at_any_scale(
    seed: int, scale: float, rule: str
) -> None:
    density = np.random.default_rng(seed).gamma(0.5, size=(1, 257)) * scale
    edges = [
        spectral_edges(FREQ, density, 0.5, 30.0, p, integration=rule)[0]  # type: ignore[arg-type]
        for p in (0.05, 0.5, 0.9, 0.95)
    ]
    assert edges == sorted(edges)
    assert edges[0] >= 0.5
    assert edges[-1] <= 30.0
    again = spectral_edges(FREQ, density / scale, 0.5, 30.0, 0.5, integration=rule)  # type: ignore[arg-type]
    assert again[0] == pytest.approx(edges[1], rel=1e-9)


@given(seed=st.integers(0, 2**31), share=st.floats(0.02, 0.98), rule=RULES)
def test_the_power_below_the_edge_is_the_share(seed: int, share: float, rule: str) -> None:
    density = np.random.default_rng(seed).gamma(0.5, size=(1, 257)) + 1e-3
    edge = spectral_edges(FREQ, density, 0.6, 29.9, share, integration=rule)[0]  # type: ignore[arg-type]
    points, power = cumulative_power(FREQ, density, 0.6, 29.9, integration=rule)  # type: ignore[arg-type]
    assert np.interp(edge, points, power[0]) == pytest.approx(share * power[0, -1], rel=1e-9)


def test_the_bin_rule_takes_the_first_bin_that_reaches_the_share() -> None:
    # Bins at 1, 2, ..., 10 Hz with equal power: half is reached with the fifth.
    density = np.zeros((1, 65))
    density[0, 1:11] = 0.1
    freq = bins(65, 1.0)
    assert spectral_edges(freq, density, 1.0, 10.0, 0.5, interpolation="bin")[0] == 5.0
    assert spectral_edges(freq, density, 1.0, 10.0, 0.51, interpolation="bin")[0] == 6.0


@given(seed=st.integers(0, 2**31), share=st.floats(0.02, 0.98))
def test_the_bin_rule_is_within_a_bin_of_the_other(seed: int, share: float) -> None:
    density = np.random.default_rng(seed).gamma(2.0, size=(1, 257))
    # Limits half-way between bins, so that both rules see the same power.
    by_bin = spectral_edges(FREQ, density, 0.625, 29.875, share, interpolation="bin")[0]
    smooth = spectral_edges(FREQ, density, 0.625, 29.875, share)[0]
    assert abs(by_bin - smooth) <= 0.125 + 1e-9


def test_the_median_of_one_line_is_the_line() -> None:
    density = np.zeros((1, 257))
    density[0, 40] = 7.0
    for rule in ("rectangle", "trapezoid"):
        edge = spectral_edges(FREQ, density, 0.5, 30.0, 0.5, integration=rule)
        assert edge[0] == pytest.approx(10.0, abs=1e-12)


def test_a_range_up_to_the_highest_bin_ends_there() -> None:
    edge = spectral_edges(FREQ, np.ones((1, 257)), 0.5, 64.0, 0.999999)
    assert 63.9 < edge[0] <= 64.0


def test_rows_without_power_are_missing_with_the_reason() -> None:
    density = np.ones((3, 257))
    density[1] = 0.0
    features = run(params(), spectra(density, kept=[True, True, False]))
    assert np.isnan(features.columns[""]).tolist() == [False, True, True]
    assert features.missing == ("", "no power in within", "")


def test_a_row_does_not_depend_on_its_neighbours() -> None:
    data = spectra(np.random.default_rng(6).gamma(2.0, size=(9, 257)))
    for interpolation in ("linear", "bin"):
        chosen = params(interpolation=interpolation)
        whole = run(chosen, data).columns[""]
        single = [run(chosen, some_rows(data, slice(i, i + 1))).columns[""][0] for i in range(9)]
        assert whole.tolist() == single


def test_unsound_ranges_are_refused() -> None:
    found = Collected()
    spec(params(within=("0.5 Hz", "70 Hz")), spectra_spec(), found.findings)
    spec(params(within=("8.05 Hz", "8.4 Hz")), spectra_spec(), found.findings)
    assert found.refused_at == ["within", "within"]


@pytest.mark.parametrize("share", ["0 %", "100 %", "95"])
def test_a_share_must_lie_between_0_and_100_percent(share: str) -> None:
    with pytest.raises(ValueError, match="fraction"):
        params(fraction=share)
