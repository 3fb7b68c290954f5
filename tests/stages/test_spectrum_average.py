"""Averages over epochs: level, degrees of freedom, and the same bytes however cut."""

from dataclasses import replace
from itertools import pairwise
from math import log

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spectrum_epochs import Found, epochs_of, epochs_spec, params_of, spectra_of
from waveassay.contract import Floats, Rows, Spectra, SpectraSpec, Whole
from waveassay_stages.spectrum import average as stage
from waveassay_stages.spectrum import multitaper, welch
from waveassay_stages.spectrum._epoch_overlap import independent_share
from waveassay_stages.spectrum._order_statistics import (
    chi_square_median,
    exponential_median,
    log_chi_square_median,
)
from waveassay_stages.spectrum._windows import (
    WindowName,
    noise_bandwidth_bins,
    overlap_correlation,
    window,
)
from waveassay_stages.spectrum.periodogram import periodogram

KINDS = [
    {"of": of, "over": over, "median_bias": "corrected", "decibel_bias": "corrected"}
    for of in ("mean", "median")
    for over in ("power", "decibels")
]


def average(spectra: Spectra, **parameters: str) -> Spectra:
    params = params_of(stage.AverageParams, **parameters)
    return stage.combine(params, [stage.collect(params, spectra)])


def part_of(spectra: Spectra, first: int, stop: int) -> Spectra:
    rows = spectra.rows
    cut = slice(first, stop)
    return replace(
        spectra,
        rows=Rows(
            start_s=rows.start_s[cut],
            duration_s=rows.duration_s[cut],
            condition=rows.condition[cut],
            kept=rows.kept[cut],
            reason=rows.reason[cut],
            epochs=rows.epochs[cut],
        ),
        density=spectra.density[cut],
        dof=spectra.dof[cut],
    )


def powers(n: int, bins: int, dof: float, seed: int = 0) -> Floats:
    """Return densities whose true value is 1."""
    return np.random.default_rng(seed).chisquare(dof, (n, bins)) / dof


@settings(deadline=None)
@given(
    cuts=st.lists(st.integers(0, 60), max_size=6).map(sorted),
    kind=st.sampled_from(KINDS),
    seed=st.integers(0, 1000),
)
def test_the_same_however_the_recording_is_cut(
    cuts: list[int], kind: dict[str, str], seed: int
) -> None:
    rng = np.random.default_rng(seed)
    names = [str(name) for name in rng.choice(["eyes closed", "baseline", "a"], 60)]
    spectra = spectra_of(
        powers(60, 9, 2, seed), kept=list(rng.random(60) < 0.7), condition=names, hop_s=1.5
    )
    params = params_of(stage.AverageParams, **kind)
    whole = stage.combine(params, [stage.collect(params, spectra)])
    parts = [stage.collect(params, part_of(spectra, a, b)) for a, b in pairwise([0, *cuts, 60])]
    pieces = stage.combine(params, parts)
    if params.of == "median":
        assert pieces.density.tobytes() == whole.density.tobytes()
    else:  # sums of stretches, added up: the last bits depend on the cut, which is always the same
        np.testing.assert_allclose(pieces.density, whole.density, rtol=1e-13)
    assert pieces.dof.tobytes() == whole.dof.tobytes()
    assert pieces.rows.condition == whole.rows.condition
    for one, other in (
        (pieces.rows.start_s, whole.rows.start_s),
        (pieces.rows.duration_s, whole.rows.duration_s),
        (pieces.rows.kept, whole.rows.kept),
        (pieces.rows.epochs, whole.rows.epochs),
    ):
        assert one.tobytes() == other.tobytes()


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(("count", "dof"), [(1, 2), (2, 2), (3, 2), (4, 2), (9, 10), (40, 5.8)])
def test_corrected_averages_are_unbiased_and_their_degrees_of_freedom_hold(
    kind: dict[str, str], count: int, dof: float
) -> None:
    """Over power the mean is 1; over decibels the mean level is 0 dB."""
    bins = 100_000
    spectra = spectra_of(powers(count, bins, dof, seed=count), dof=dof, bandwidth_time=3)
    found = average(spectra, **kind)
    decibels = kind["over"] == "decibels"
    value = np.log(found.density[0]) if decibels else found.density[0]
    error = 5 * np.std(value) / np.sqrt(bins)
    # a mean of logarithms, corrected for single epochs, aims at the logarithm of the mean
    assert np.mean(value) == pytest.approx(0 if decibels else 1, abs=error)
    variance = np.var(value)
    dof_found = found.dof[0]
    if decibels:
        from scipy.special import polygamma

        assert polygamma(1, dof_found / 2) == pytest.approx(variance, rel=0.06)
    else:
        assert dof_found == pytest.approx(2 / variance, rel=0.06)


@settings(deadline=None)
@given(n=st.integers(1, 30), seed=st.integers(0, 10**6))
def test_a_geometric_mean_is_never_above_the_mean(n: int, seed: int) -> None:
    spectra = spectra_of(powers(n, 5, 2, seed))
    plain, decibels = average(spectra), average(spectra, over="decibels")
    assert np.all(decibels.density <= plain.density * (1 + 1e-12))


@pytest.mark.parametrize("kind", KINDS)
def test_scaling_and_one_epoch(kind: dict[str, str]) -> None:
    density = powers(7, 5, 2)
    once, four = average(spectra_of(density), **kind), average(spectra_of(4 * density), **kind)
    np.testing.assert_allclose(four.density, 4 * once.density, rtol=1e-12)
    alone = average(spectra_of(density[:1]), **{**kind, "decibel_bias": "left"})
    np.testing.assert_allclose(alone.density, density[:1], rtol=1e-12)
    assert alone.dof == pytest.approx([2.0], rel=1e-9)


def test_left_biases_are_left() -> None:
    density = powers(5, 8, 2)
    plain = average(spectra_of(density), of="median", median_bias="left")
    np.testing.assert_array_equal(plain.density[0], np.median(density, axis=0))
    level = average(spectra_of(density), over="decibels")
    np.testing.assert_allclose(level.density[0], np.exp(np.mean(np.log(density), axis=0)))
    corrected = average(spectra_of(density), over="decibels", decibel_bias="corrected")
    # Euler's constant, in decibels: the mean of ln of an exponential variable is -0.5772
    gap = 10 * np.log10(corrected.density / level.density)
    np.testing.assert_allclose(gap, 10 / np.log(10) * 0.5772156649, rtol=1e-9)


@pytest.mark.parametrize("of", ["mean", "median"])
def test_no_power_has_no_decibels_and_is_no_error(of: str) -> None:
    density = np.zeros((4, 3))
    density[0, 1] = 1.0
    found = average(spectra_of(density), of=of, over="decibels")
    np.testing.assert_array_equal(found.density, np.zeros((1, 3)))


def test_conditions_come_in_order_and_without_a_kept_epoch_say_so() -> None:
    density = np.arange(12.0).reshape(6, 2) + 1
    spectra = spectra_of(
        density,
        hop_s=2.0,
        kept=[True, True, False, False, True, True],
        condition=["late", "late", "empty", "empty", "a", "late"],
    )
    found = average(spectra)
    rows = found.rows
    assert rows.condition == ("late", "empty", "a")
    assert rows.reason == ("", "no epoch kept", "")
    assert list(rows.kept) == [True, False, True]
    assert list(rows.epochs) == [3, 0, 1]
    assert list(rows.start_s) == [10.0, 14.0, 18.0]
    assert list(rows.duration_s) == [14.0, 6.0, 4.0]
    np.testing.assert_array_equal(found.density[0], np.mean(density[[0, 1, 5]], axis=0))
    np.testing.assert_array_equal(found.density[2], density[4])
    assert np.all(np.isnan(found.density[1]))
    assert np.isnan(found.dof[1])
    assert (found.signal, found.unit) == ("frontal", "uV")


def test_no_epochs_at_all() -> None:
    found = average(spectra_of(np.empty((0, 4))))
    assert found.density.shape == (0, 4)
    with pytest.raises(ValueError, match="at least one part"):
        stage.combine(stage.AverageParams(), [])


@settings(deadline=None)
@given(count=st.integers(1, 400))
def test_the_two_forms_of_the_median_of_exponentials_agree(count: int) -> None:
    mean, variance = chi_square_median(count, 2.0)
    closed_mean, closed_variance = exponential_median(count)
    assert mean == pytest.approx(closed_mean, rel=1e-10)
    exact = count % 2 or count == 2
    assert variance == pytest.approx(closed_variance, rel=1e-8 if exact else 0.03)


@settings(deadline=None)
@given(dof=st.floats(1, 500))
def test_the_median_of_many_tends_to_that_of_chi_square(dof: float) -> None:
    from scipy.special import chdtri

    limit = chdtri(dof, 0.5) / dof
    assert chi_square_median(200_001, dof)[0] == pytest.approx(limit, rel=1e-4)
    assert log_chi_square_median(200_001, dof)[0] == pytest.approx(log(limit), abs=1e-4)


def test_the_median_of_one_is_the_variable_itself() -> None:
    for dof in (1.0, 2.0, 6.0, 57.0, 1000.0):
        mean, variance = chi_square_median(1, dof)
        assert mean == pytest.approx(1, rel=1e-9)
        assert exponential_median(1) == (1, 1)
        log_mean, _ = log_chi_square_median(1, dof)
        assert log_mean == pytest.approx(stage.mean_log_bias(dof), abs=1e-9)
        assert variance > 0


@pytest.mark.parametrize("name", ["rectangle", "hamming", "hann"])
@pytest.mark.parametrize("overlap", [0.25, 0.5, 0.75, 0.9])
def test_overlap_of_single_transforms_is_welchs_formula(name: WindowName, overlap: float) -> None:
    n, count = 1000, 25
    w, hop = window(name, n), round(n * (1 - overlap))
    shared = sum((1 - m / count) * overlap_correlation(w, m * hop) ** 2 for m in range(1, count))
    found = independent_share(
        np.arange(25, dtype=np.float64) * hop, n, 2.0, noise_bandwidth_bins(w)
    )
    assert found == pytest.approx(1 / (1 + 2 * shared), rel=1e-3)


@pytest.mark.parametrize("estimator", ["multitaper", "welch", "parabola", "blackman"])
@pytest.mark.parametrize("overlap", [0.5, 0.75])
def test_degrees_of_freedom_of_overlapping_epochs_by_simulation(
    estimator: str, overlap: float
) -> None:
    """Near what a simulation gives, and hardly above it: the band may be wide, not narrow."""
    n, count, repeats, rate = 128, 12, 2500, 128
    hop = round(n * (1 - overlap))
    x = np.random.default_rng(11).normal(size=(repeats, n + (count - 1) * hop))
    epochs = np.lib.stride_tricks.sliding_window_view(x, n, axis=1)[:, ::hop]
    flat = np.ascontiguousarray(epochs).reshape(-1, n)
    if estimator == "multitaper":
        _, density = multitaper.multitaper(flat, rate, half_bandwidth_hz=3, detrend="none")
        dof, bandwidth_hz = 10.0, 6.0
    elif estimator == "welch":
        _, density = welch.welch(flat, rate, segment=32, detrend="none")
        dof, bandwidth_hz = welch.degrees_of_freedom(n, 32, 0.5, "hann"), 6.0
    else:
        name: WindowName = "parabola" if estimator == "parabola" else "blackman"
        _, density = periodogram(flat, rate, window_name=name, detrend="none")
        dof, bandwidth_hz = 2.0, noise_bandwidth_bins(window(name, n))
    mean = np.mean(density.reshape(repeats, count, -1), axis=1)[:, 6:-6]
    simulated = np.mean(2 * np.mean(mean, axis=0) ** 2 / np.var(mean, axis=0))
    spectra = spectra_of(
        np.ones((count, 2)),
        dof=dof,
        length_s=1.0,
        hop_s=1 - overlap,
        bandwidth_time=bandwidth_hz,
    )
    assert 0.83 * simulated < average(spectra).dof[0] < 1.04 * simulated


@settings(deadline=None)
@given(overlap=st.floats(0, 0.99), count=st.integers(1, 60), dof=st.floats(2, 60))
def test_overlap_never_adds_nor_takes_all(overlap: float, count: int, dof: float) -> None:
    starts = np.arange(count, dtype=np.float64) * (4 * (1 - overlap))
    share = independent_share(starts, 4.0, dof, dof / 2)
    assert 1 / count - 1e-9 <= share <= 1 + 1e-9
    if overlap == 0:
        assert share == 1


def test_what_the_spec_says() -> None:
    found = Found()
    given_spec = SpectraSpec(epochs_spec().signal, 4.0, 0.375, 0.25, 64.0)
    plain = stage.spec(stage.AverageParams(), given_spec, found.findings)
    assert plain == replace(given_spec, averaged=True)
    level = stage.spec(stage.AverageParams(over="decibels"), given_spec, found.findings)
    assert level.in_decibels
    assert found.warnings == []
    idle = stage.AverageParams(median_bias="left", decibel_bias="corrected")
    stage.spec(idle, given_spec, found.findings)
    assert [at for at, _ in found.warnings] == ["median_bias", "decibel_bias"]


def test_a_chain_from_samples_to_an_average() -> None:
    x = np.random.default_rng(12).normal(0, 3, 128 * 400)
    kept = [i % 7 != 3 for i in range(199)]
    params = params_of(multitaper.MultitaperParams, half_bandwidth="0.75 Hz")
    spectra = multitaper.run(params, epochs_of(x, kept=kept))
    found = average(spectra)
    assert isinstance(stage.STAGE.context, Whole)
    assert stage.STAGE.run is None
    assert found.rows.epochs[0] == sum(kept)
    level = np.mean(found.density[0, 4:-4])
    assert level == pytest.approx(2 * 9 / 128, rel=0.02)
