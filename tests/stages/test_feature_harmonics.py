import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from feature_data import Collected, epochs, epochs_spec
from waveassay.contract import Floats
from waveassay_stages.feature._harmonic_fit import EpochFitter, solved
from waveassay_stages.feature.harmonics import (
    ABOVE,
    ABSENT,
    NOT_REBUILT,
    WEAK,
    HarmonicsParams,
    harmonics_needed,
    pulse_wave,
    relative_phase_deg,
    run,
    spec,
    wrapped_deg,
)

RATE = 125
AMPLITUDE = np.array([14.0, 8.0, 4.5, 2.6, 1.5, 0.9, 0.55, 0.33, 0.2, 0.12])  # invented
PHASE = np.array([20.0, -60.0, -110.0, -150.0, 160.0, 110.0, 60.0, 10.0, -40.0, -90.0])


def pulse(fundamental_hz: float, length_s: float = 10.0, delay_s: float = 0.0) -> Floats:
    t = np.arange(round(length_s * RATE)) / RATE - delay_s
    k = np.arange(1, 11)[:, None]
    waves = AMPLITUDE[:, None] * np.cos(
        2 * np.pi * k * fundamental_hz * t + np.deg2rad(PHASE)[:, None]
    )
    return np.asarray(80.0 + np.sum(waves, axis=0), np.float64)


def params(**given: object) -> HarmonicsParams:
    return HarmonicsParams.model_validate({"fundamental_within": ("0.7 Hz", "3 Hz"), **given})


@settings(deadline=None, max_examples=30)
@given(fundamental=st.floats(0.75, 2.9), delay=st.floats(0, 1))
def test_a_planted_series_is_found_to_rounding(fundamental: float, delay: float) -> None:
    wave = pulse_wave(pulse(fundamental, delay_s=delay), RATE, 0.7, 3.0)
    assert wave is not None
    assert wave.fundamental_hz == pytest.approx(fundamental, abs=1e-12)
    assert wave.mean == pytest.approx(80.0, abs=1e-10)
    np.testing.assert_allclose(wave.amplitude[:10], AMPLITUDE, atol=1e-10)
    np.testing.assert_allclose(wave.amplitude[10:], 0.0, atol=1e-10)
    turned = PHASE - 360 * np.arange(1, 11) * fundamental * delay
    np.testing.assert_allclose(wrapped_deg(wave.phase_deg[:10] - turned), 0.0, atol=1e-6)
    assert wave.explained == pytest.approx(1.0, abs=1e-12)


@settings(deadline=None, max_examples=15)
@given(fundamental=st.floats(0.8, 2.5), delay=st.floats(0, 2))
def test_phases_from_the_fundamental_do_not_depend_on_where_the_epoch_starts(
    fundamental: float, delay: float
) -> None:
    wave = pulse_wave(pulse(fundamental, delay_s=delay), RATE, 0.7, 3.0)
    assert wave is not None
    relative = relative_phase_deg(wave.phase_deg[:10])
    expected = PHASE - np.arange(1, 11) * PHASE[0]
    np.testing.assert_allclose(wrapped_deg(relative - expected), 0.0, atol=1e-2)
    assert relative[0] == 0.0


@pytest.mark.parametrize("fundamental", [0.8, 1.17, 1.67, 2.4])
def test_a_ventilator_and_a_drift_do_not_disturb_the_pulse(fundamental: float) -> None:
    t = np.arange(10 * RATE) / RATE
    slow = 5 * np.sin(2 * np.pi * 0.2 * t + 1) + 1.5 * np.cos(2 * np.pi * 0.4 * t) + 2 * t
    wave = pulse_wave(pulse(fundamental) + slow, RATE, 0.7, 3.0)
    plain = pulse_wave(pulse(fundamental) + slow, RATE, 0.7, 3.0, trend_below_hz=0.0)
    assert wave is not None
    assert plain is not None
    assert abs(wave.fundamental_hz - fundamental) < 5e-4
    np.testing.assert_allclose(wave.amplitude[:5], AMPLITUDE[:5], atol=0.25)
    assert abs(wave.fundamental_hz - fundamental) < abs(plain.fundamental_hz - fundamental)


@pytest.mark.parametrize(("noise", "bound_hz"), [(0.5, 3e-4), (2.0, 1e-3), (5.0, 3e-3)])
def test_the_fundamental_stands_noise(noise: float, bound_hz: float) -> None:
    rng = np.random.default_rng(11)
    for fundamental in (0.9, 1.3, 1.9, 2.6):
        x = pulse(fundamental) + rng.normal(0, noise, 10 * RATE)
        wave = pulse_wave(x, RATE, 0.7, 3.0)
        assert wave is not None
        assert abs(wave.fundamental_hz - fundamental) < bound_hz


@pytest.mark.parametrize("fundamental", [0.75, 1.2, 1.45, 2.2, 2.9])
@pytest.mark.parametrize("shape", ["pulse", "narrow", "sine"])
def test_neither_half_nor_double_the_pulse_is_taken(fundamental: float, shape: str) -> None:
    t = np.arange(12 * RATE) / RATE
    if shape == "pulse":
        x = pulse(fundamental, 12.0)
    elif shape == "sine":
        x = np.sin(2 * np.pi * fundamental * t)
    else:  # all harmonics nearly equal, as in an electrocardiogram
        x = np.exp(-0.5 * (np.mod(fundamental * t + 0.5, 1.0) - 0.5) ** 2 / 0.02**2)
    # Beats that alternate a little in height have a weak true period of twice the length.
    x = x * (1 + 0.04 * np.cos(np.pi * fundamental * t))
    wave = pulse_wave(x, RATE, 0.36, 4.0, trend_below_hz=0.1)
    assert wave is not None
    assert wave.fundamental_hz == pytest.approx(fundamental, abs=2e-3)


@settings(deadline=None, max_examples=25)
@given(
    cycles=st.floats(0.008, 0.03),
    count=st.integers(1, 12),
    terms=st.integers(1, 9),
    seed=st.integers(0, 2**31),
)
def test_the_fit_agrees_with_an_independent_least_squares(
    cycles: float, count: int, terms: int, seed: int
) -> None:
    n = np.arange(600)
    x = 50 + np.random.default_rng(seed).normal(size=600)
    angle = 2 * np.pi * cycles * np.arange(1, count + 1) * (n[:, None] - 299.5)
    trend = np.cos(np.pi * np.arange(terms) * (n[:, None] + 0.5) / 600)
    design = np.hstack([trend, np.cos(angle), np.sin(angle)])
    solution, *_ = np.linalg.lstsq(design, x, rcond=None)
    trend_only, *_ = np.linalg.lstsq(trend, x, rcond=None)
    fit = EpochFitter(x, terms).fit(cycles, count)
    np.testing.assert_allclose(fit.cosine, solution[terms : terms + count], atol=1e-8)
    np.testing.assert_allclose(fit.sine, solution[terms + count :], atol=1e-8)
    assert fit.mean == pytest.approx(solution[0], abs=1e-8)
    left = np.sum((x - trend @ trend_only) ** 2)
    assert fit.left == pytest.approx(left, rel=1e-9)
    assert fit.left - fit.gained == pytest.approx(np.sum((x - design @ solution) ** 2), rel=1e-8)


@settings(deadline=None, max_examples=25)
@given(
    cycles=st.floats(0.008, 0.03),
    count=st.integers(1, 12),
    terms=st.integers(1, 9),
    size=st.sampled_from((600, 601)),
    seed=st.integers(0, 2**31),
)
def test_the_slope_is_that_of_the_gain(
    cycles: float, count: int, terms: int, size: int, seed: int
) -> None:
    """Against differences of the gain, a 1e-3 of a lobe apart, and a half of that."""
    fitter = EpochFitter(50 + np.random.default_rng(seed).normal(size=size), terms)
    step = 1e-3 / (count * size)
    wide, narrow = (
        (fitter.gain(cycles + h, count) - fitter.gain(cycles - h, count)) / (2 * h)
        for h in (step, step / 2)
    )
    slope = (4 * narrow - wide) / 3  # without what grows as the square of the step
    largest = fitter.left * 2 * np.pi * count * size
    assert fitter.slope(cycles, count) == pytest.approx(slope, abs=1e-8 * largest)


def test_gains_side_by_side_are_those_of_each() -> None:
    fitter = EpochFitter(pulse(1.2), 5)
    cycles = (0.0095, 0.0096, 0.0101)
    assert fitter.gains(cycles, 7) == [fitter.gain(one, 7) for one in cycles]


@given(size=st.integers(1, 30), seed=st.integers(0, 2**31))
def test_elimination_agrees_with_an_independent_solver_and_leaves_its_input(
    size: int, seed: int
) -> None:
    rng = np.random.default_rng(seed)
    factor = rng.normal(size=(2, size, size))
    matrix = factor @ factor.transpose(0, 2, 1) + size * np.eye(size)
    right = rng.normal(size=(2, size, 1))
    systems = np.concatenate((matrix, right), axis=2)
    before = systems.copy()
    np.testing.assert_allclose(
        solved(systems), np.linalg.solve(matrix, right)[:, :, 0], rtol=1e-9, atol=1e-12
    )
    assert np.array_equal(systems, before)


def test_needed_counts_the_first_harmonics_that_reach_the_share() -> None:
    amplitude = np.sqrt(2 * np.array([60.0, 25.0, 10.0, 5.0]))  # variances 60, 25, 10, 5
    needed = [harmonics_needed(amplitude, p) for p in (0.5, 0.6, 0.61, 0.95, 0.951)]
    assert needed == [1, 1, 2, 3, 4]
    assert harmonics_needed(amplitude, 0.5, variance=160.0) == 2
    assert harmonics_needed(amplitude, 0.5, variance=400.0) is None


def test_the_share_of_the_whole_counts_swings_and_noise() -> None:
    t = np.arange(10 * RATE) / RATE
    x = pulse(1.2) + 8 * np.sin(2 * np.pi * 0.2 * t)
    periodic = run(params(share="85 %"), epochs(x, RATE, 10.0))
    whole = run(params(share="85 %", of="whole"), epochs(x, RATE, 10.0))
    # The planted variances: 98 and 32 of 145 (90 %), beside 32 of the slow swing (145 of 177).
    assert periodic.columns["needed"][0] == 2
    assert np.isnan(whole.columns["needed"][0])
    assert whole.missing == (NOT_REBUILT,)


def test_missing_values_say_why() -> None:
    rng = np.random.default_rng(2)
    constant = np.full(10 * RATE, 80.0)
    noise = rng.normal(80, 3, 10 * RATE)
    x = np.concatenate([pulse(1.2), constant, noise, pulse(1.2)])
    features = run(params(), epochs(x, RATE, 10.0, kept=[True, True, True, False]))
    assert features.missing == ("", ABSENT, WEAK, "")
    assert np.isnan(features.columns["fundamental"]).tolist() == [False, True, True, True]
    assert features.columns["explained"][2] < 0.5  # why it is missing can be read


def test_harmonics_above_nyquist_are_missing() -> None:
    t = np.arange(200) / 20
    x = 80 + 10 * np.cos(2 * np.pi * 1.5 * t) + 3 * np.cos(2 * np.pi * 3 * t)
    features = run(params(), epochs(x, 20, 10.0))
    given_k = [k for k in range(1, 11) if np.isfinite(features.columns[f"amplitude_{k}"][0])]
    assert given_k == [1, 2, 3, 4, 5, 6]  # 6 times 1.5 Hz is below 10 Hz, 7 times is not
    assert features.missing == (ABOVE,)


def test_a_pulse_outside_the_range_is_not_found() -> None:
    features = run(params(), epochs(pulse(0.55), RATE, 10.0))
    assert features.missing[0] in (ABSENT, WEAK)


def test_an_epoch_does_not_depend_on_its_neighbours() -> None:
    rng = np.random.default_rng(3)
    x = np.concatenate([pulse(f) + rng.normal(0, 1, 1250) for f in (0.9, 1.4, 2.2)])
    whole = run(params(), epochs(x, RATE, 10.0)).columns
    for i in range(3):
        single = run(params(), epochs(x[i * 1250 : (i + 1) * 1250], RATE, 10.0)).columns
        assert all(whole[part][i] == single[part][0] for part in whole)


def test_columns_are_those_that_the_spec_promises() -> None:
    found = Collected()
    promised = spec(params(harmonics=3), epochs_spec(), found.findings).columns
    assert not found.refused
    assert not found.warned
    made = run(params(harmonics=3), epochs(pulse(1.2), RATE, 10.0)).columns
    assert [c.part for c in promised] == list(made)
    units = {c.part: c.unit for c in promised}
    assert (units["fundamental"], units["amplitude_2"], units["phase_2"]) == ("Hz", "mmHg", "deg")


@pytest.mark.parametrize(
    ("given", "length_s", "at"),
    [
        ({"fundamental_within": ("3 Hz", "0.7 Hz")}, 10.0, "fundamental_within"),
        ({"fundamental_within": ("0.7 Hz", "70 Hz")}, 10.0, "fundamental_within"),
        ({"trend_below": "0 Hz"}, 2.0, "fundamental_within"),  # fewer than two cycles
        ({"trend_below": "0.7 Hz"}, 10.0, "trend_below"),
        ({"fitted": 5}, 10.0, "fitted"),
    ],
)
def test_unsound_parameters_are_refused_at_their_place(
    given: dict[str, object], length_s: float, at: str
) -> None:
    found = Collected()
    spec(params(**given), epochs_spec(length_s), found.findings)
    assert found.refused_at == [at]


def test_harmonics_that_can_only_be_missing_are_warned_of() -> None:
    found = Collected()
    spec(params(harmonics=20), epochs_spec(rate_hz=25), found.findings)
    assert found.warned_at == ["harmonics"]
