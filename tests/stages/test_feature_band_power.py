from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from feature_data import Collected, bins, some_rows, spectra, spectra_spec
from waveassay.contract import Kind
from waveassay_stages.feature._bands import band_weights
from waveassay_stages.feature.band_power import (
    STAGE,
    BandPowerParams,
    band_power,
    run,
    spec,
)

FREQ = bins(257, 0.25)


def params(**given: object) -> BandPowerParams:
    bands = {"delta": ("0.5 Hz", "4 Hz"), "alpha": ("8 Hz", "13 Hz")}
    return BandPowerParams.model_validate({"bands": bands, **given})


@pytest.mark.parametrize("rule", ["rectangle", "trapezoid"])
@pytest.mark.parametrize(("low", "high"), [(0.5, 4.0), (8.1, 12.9), (0.6, 63.9), (3.01, 3.02)])
def test_partial_bins_integrate_a_flat_density_exactly(rule, low, high):  # type: ignore[no-untyped-def]
    power = band_power(FREQ, np.full((1, 257), 3.0), low, high, integration=rule, edges="partial")
    assert power[0] == pytest.approx(3.0 * (high - low), rel=1e-12)


def test_trapezoids_in_parts_of_bins_integrate_a_straight_line_exactly() -> None:
    power = band_power(
        FREQ, (2 + 5 * FREQ)[None], 1.1, 17.3, integration="trapezoid", edges="partial"
    )
    assert power[0] == pytest.approx(2 * 16.2 + 2.5 * (17.3**2 - 1.1**2), rel=1e-12)


@pytest.mark.parametrize("top", [12.0, 12.25])
def test_simpson_integrates_a_parabola_exactly(top: float) -> None:
    # An odd number of intervals is still exact: the last one follows the same parabola.
    power = band_power(FREQ, (FREQ**2)[None], 2.0, top, integration="simpson", edges="both_in")
    assert power[0] == pytest.approx((top**3 - 8) / 3, rel=1e-12)


@pytest.mark.parametrize("rule", ["trapezoid", "simpson"])
@settings(deadline=None)  # the first import of scipy takes its time
@given(first=st.integers(0, 20), bins=st.integers(2, 40), seed=st.integers(0, 2**31))
def test_rules_agree_with_an_independent_integrator(
    rule: str, first: int, bins: int, seed: int
) -> None:
    from scipy import integrate

    density = np.random.default_rng(seed).gamma(2.0, size=(1, 257))
    span = slice(first, first + bins)
    y = density[0, span]
    by = integrate.trapezoid(y, dx=0.25) if rule == "trapezoid" else integrate.simpson(y, dx=0.25)
    weights = band_weights(
        FREQ,
        FREQ[first],
        FREQ[first + bins - 1],
        rule,  # type: ignore[arg-type]
        "both_in",
    )
    assert np.sum(density * weights) == pytest.approx(float(by), rel=1e-12)


@given(
    limits=st.lists(st.floats(0, 63.9), min_size=1, max_size=6, unique=True),
    edges=st.sampled_from(["lower_in", "partial"]),
    seed=st.integers(0, 2**31),
)
def test_adjacent_bands_add_up_to_the_mean_square(
    limits: list[float], edges: str, seed: int
) -> None:
    density = np.random.default_rng(seed).gamma(2.0, size=(1, 257))
    borders = [0.0, *(v for v in sorted(limits) if 0 < v < 64), 64.0]
    parts = [
        band_weights(FREQ, low, high, "rectangle", edges)  # type: ignore[arg-type]
        for low, high in pairwise(borders)
    ]
    total = sum(float(np.sum(density * weights)) for weights in parts)
    assert total == pytest.approx(float(np.sum(density) * 0.25), rel=1e-9)


def test_a_bin_on_a_limit_lies_where_the_edge_rule_says() -> None:
    density = np.zeros((1, 601))
    density[0, 80] = 1.0  # 8.000000000000002 Hz, by repeated tenths
    freq = bins(601, 0.1)

    def below_and_above(edges: str) -> list[float]:
        return [
            float(band_power(freq, density, *band, edges=edges)[0])  # type: ignore[arg-type]
            for band in ((4.0, 8.0), (8.0, 13.0))
        ]

    assert below_and_above("lower_in") == pytest.approx([0.0, 0.1])
    assert below_and_above("both_in") == pytest.approx([0.1, 0.1])
    assert below_and_above("partial") == pytest.approx([0.05, 0.05])


def test_columns_stand_in_order_of_frequency_whatever_the_order_in_the_recipe() -> None:
    forward = params()
    backward = params(bands=dict(reversed(list(forward.model_dump()["bands"].items()))))
    for each in (forward, backward):
        assert list(run(each, spectra(np.ones(257))).columns) == ["delta", "alpha"]
        parts = [c.part for c in spec(each, spectra_spec(), Collected().findings).columns]
        assert parts == ["delta", "alpha"]


def test_express_relates_the_three_ways() -> None:
    data = spectra(np.random.default_rng(5).gamma(2.0, size=(4, 257)))
    absolute = run(params(), data).columns
    whole = run(params(bands={"all": ("0.5 Hz", "40 Hz")}), data).columns["all"]
    relative = run(params(express="relative", relative_to=("0.5 Hz", "40 Hz")), data).columns
    decibel = run(params(express="decibel"), data).columns
    for name in ("delta", "alpha"):
        np.testing.assert_allclose(relative[name], absolute[name] / whole, rtol=1e-12)
        np.testing.assert_allclose(10 ** (decibel[name] / 10), absolute[name], rtol=1e-12)


def test_rows_without_a_value_say_why_only_where_they_are_kept() -> None:
    density = np.ones((3, 257))
    density[1] = 0.0
    data = spectra(density, kept=[True, True, False])
    relative = run(params(express="relative", relative_to=("0.5 Hz", "40 Hz")), data)
    assert np.isnan(relative.columns["alpha"][1:]).all()
    assert relative.missing == ("", "no power in relative_to", "")
    decibel = run(params(express="decibel"), data)
    assert np.isnan(decibel.columns["alpha"][1:]).all()
    assert decibel.missing == ("", "no power in delta; no power in alpha", "")
    absolute = run(params(), data)
    assert absolute.columns["alpha"][1] == 0.0
    assert absolute.missing == ("", "", "")


def test_a_row_does_not_depend_on_its_neighbours() -> None:
    data = spectra(np.random.default_rng(6).gamma(2.0, size=(9, 257)))
    whole = run(params(express="decibel"), data).columns["alpha"]
    single = [
        run(params(express="decibel"), some_rows(data, slice(i, i + 1))).columns["alpha"][0]
        for i in range(9)
    ]
    assert whole.tolist() == single


def test_no_rows_give_no_values() -> None:
    assert run(params(), spectra(np.empty((0, 257)))).columns["alpha"].shape == (0,)


@pytest.mark.parametrize(
    ("given", "at"),
    [
        ({"bands": {"gamma": ("30 Hz", "80 Hz")}}, "bands.gamma"),
        ({"bands": {"alpha": ("13 Hz", "8 Hz")}}, "bands.alpha"),
        ({"bands": {"line": ("8.05 Hz", "8.2 Hz")}}, "bands.line"),
        ({"express": "relative"}, "express"),
        ({"express": "relative", "relative_to": ("0.5 Hz", "90 Hz")}, "relative_to"),
        ({"relative_to": ("0.5 Hz", "40 Hz")}, "relative_to"),
        ({"integration": "simpson", "edges": "partial"}, "edges"),
    ],
)
def test_unsound_parameters_are_refused_at_their_place(given: dict[str, object], at: str) -> None:
    found = Collected()
    spec(params(**given), spectra_spec(), found.findings)
    assert found.refused_at == [at]


def test_a_band_outside_the_filter_is_refused_and_one_that_touches_its_edge_is_not() -> None:
    found = Collected()
    given = spectra_spec(pass_hz=(0.5, 12.0))
    spec(params(), given, found.findings)
    assert found.refused_at == ["bands.alpha"]


@pytest.mark.parametrize("name", ["Alpha", "8_to_13", "al-pha", ""])
def test_names_of_bands_are_held_to_what_a_column_may_be_called(name: str) -> None:
    with pytest.raises(ValueError, match="pattern"):
        params(bands={name: ("8 Hz", "13 Hz")})


def test_units_and_kinds_follow_from_parameters_and_input() -> None:
    def unit(**given: object) -> str:
        return spec(params(**given), spectra_spec(), Collected().findings).columns[0].unit

    assert unit() == "uV^2"
    assert unit(express="decibel") == "dB re 1 uV^2"
    assert unit(express="relative", relative_to=("0.5 Hz", "40 Hz")) == "1"
    assert STAGE.kind_given(Kind.AVERAGES) is Kind.AVERAGE_FEATURES
    assert spec(params(), spectra_spec(averaged=True), Collected().findings).averaged
