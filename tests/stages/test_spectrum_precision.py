"""Spectra of samples in float32, against the same samples in float64."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spectrum_epochs import epochs_of, params_of, spectra_of
from waveassay.contract import Epochs, Features, Floats, Spectra
from waveassay_stages.feature import (
    band_power,
    harmonics,
    spectral_edge,
    spectral_entropy,
    spectral_peak,
)
from waveassay_stages.spectrum import _density, average, multitaper, periodogram, welch
from waveassay_stages.spectrum._windows import scaled_window

RATE = 128
SMOOTH = {
    "multitaper": (multitaper, {"half_bandwidth": "0.75 Hz"}),
    "welch": (welch, {"segment": "2 s"}),
}
STAGES = {**SMOOTH, "periodogram": (periodogram, {})}


def estimate(name: str, epochs: Epochs) -> Spectra:
    module, given_params = STAGES[name]
    kind: Any = getattr(module, f"{name.capitalize()}Params")
    out: Spectra = module.run(params_of(kind, **given_params), epochs)
    return out


def narrowed(x: Floats) -> Any:
    """Return numbers in float32."""
    return x.astype(np.float32)


def both(x: Floats, name: str) -> tuple[Spectra, Spectra]:
    """Return spectra of samples rounded to float32, worked out in float32 and in float64."""
    rounded = narrowed(x)
    return estimate(name, epochs_of(rounded)), estimate(name, epochs_of(rounded.astype(np.float64)))


def recording(offset: float, minutes: int = 10) -> Floats:
    """Return invented noise between pink and brown, waxing alpha waves, mains hum, an offset."""
    from scipy import fft

    count = minutes * 60 * RATE
    transform = fft.rfft(np.random.default_rng(5).standard_normal(count))
    transform /= np.maximum(fft.rfftfreq(count, 1 / RATE), 0.2) ** 0.75
    noise = fft.irfft(transform, count)
    t = np.arange(count) / RATE
    alpha = 15 * np.sin(2 * np.pi * 10 * t) * np.sin(2 * np.pi * 0.05 * t) ** 2
    hum = 20 * np.sin(2 * np.pi * 50 * t + 0.3)
    return np.asarray(20 * noise / np.std(noise) + alpha + hum + offset, np.float64)


@pytest.mark.parametrize("name", STAGES)
def test_a_density_has_the_precision_of_its_samples(name: str) -> None:
    single, double = both(recording(0.0, 1), name)
    assert (str(single.density.dtype), str(double.density.dtype)) == ("float32", "float64")
    for spectra in (single, double):
        assert spectra.freq_hz.dtype == spectra.dof.dtype == np.float64
    np.testing.assert_array_equal(single.freq_hz, double.freq_hz)
    np.testing.assert_array_equal(single.dof, double.dof)
    assert single.resolution_hz == double.resolution_hz
    none = estimate(name, epochs_of(narrowed(np.zeros(100))))
    assert (str(none.density.dtype), none.density.shape[0]) == ("float32", 0)


@settings(deadline=None)
@given(
    n=st.integers(8, 700),
    tapers=st.integers(1, 7),
    detrend=st.sampled_from(("constant", "linear")),
    padding=st.sampled_from(("none", "next_power_of_two", "twice")),
    log_offset=st.floats(-3, 5),
    drift=st.floats(-1e3, 1e3),
    colour=st.floats(0, 1),
    seed=st.integers(0, 10**6),
)
def test_the_error_is_a_small_share_of_the_mean_amplitude(
    n: int,
    tapers: int,
    detrend: _density.Detrend,
    padding: _density.ZeroPadding,
    log_offset: float,
    drift: float,
    colour: float,
    seed: int,
) -> None:
    """The law that `density` states, also beside an offset 100,000 times the signal."""
    rng = np.random.default_rng(seed)
    step = rng.standard_normal((3, n))
    noise = (1 - colour) * step + colour * np.cumsum(step, axis=-1)
    if detrend == "linear":
        noise += drift * np.linspace(-1, 1, n)
    x = narrowed(noise + 10**log_offset)
    h = rng.standard_normal((tapers, n))
    n_fft = _density.transform_length(n, padding)
    single = _density.density(x, h, n_fft, detrend)
    double = _density.density(x.astype(np.float64), h, n_fft, detrend)
    apart = np.abs(np.sqrt(single.astype(np.float64)) - np.sqrt(double))
    assert np.all(apart <= 4e-6 * np.sqrt(np.mean(double, axis=-1, keepdims=True)))


@pytest.mark.parametrize("spike", [1e3, 1e4, 1e5, 1e6])
@pytest.mark.parametrize("n", [128, 256, 512, 1000])
def test_the_error_beside_a_spike_that_the_window_hides(n: int, spike: float) -> None:
    """The law that `density` states of a sample that only the mean shows."""
    x = np.random.default_rng(n).standard_normal((64, n))
    x[:, 0] += spike
    x = narrowed(x)
    h = scaled_window("hann", n, Fraction(128))
    single = _density.density(x, h, n, "constant")
    double = _density.density(x.astype(np.float64), h, n, "constant")
    apart = np.abs(np.sqrt(single.astype(np.float64)) - np.sqrt(double))
    assert np.all(apart <= 1e-5 * np.sqrt(np.mean(double, axis=-1, keepdims=True)))


@pytest.mark.parametrize("offset", [0.0, 1e5])
@pytest.mark.parametrize("name", SMOOTH)
def test_the_error_on_an_electroencephalogram(name: str, offset: float) -> None:
    """From 0.5 to 40 Hz within 5e-5 at every bin of every epoch; powers and edges within 1e-5."""
    single, double = both(recording(offset), name)
    freq = double.freq_hz
    band = (freq >= 0.5) & (freq <= 40)
    np.testing.assert_allclose(single.density[:, band], double.density[:, band], rtol=5e-5)
    for one, other in zip(features(single), features(double), strict=True):
        for part, values in other.columns.items():
            np.testing.assert_allclose(one.columns[part], values, rtol=1e-5, err_msg=part)


def features(spectra: Spectra) -> list[Features]:
    bands = {"delta": ("0.5 Hz", "4 Hz"), "alpha": ("8 Hz", "13 Hz"), "gamma": ("30 Hz", "40 Hz")}
    within = ("0.5 Hz", "40 Hz")
    power = params_of(band_power.BandPowerParams, bands=bands)
    share = params_of(
        band_power.BandPowerParams, bands=bands, express="relative", relative_to=within
    )
    edge = params_of(spectral_edge.SpectralEdgeParams, within=within)
    median = params_of(spectral_edge.SpectralEdgeParams, within=within, fraction="50 %")
    entropy = params_of(spectral_entropy.SpectralEntropyParams, within=within)
    peak = params_of(spectral_peak.SpectralPeakParams, within=("8 Hz", "13 Hz"), method="bin")
    return [
        band_power.run(power, spectra),
        band_power.run(share, spectra),
        spectral_edge.run(edge, spectra),
        spectral_edge.run(median, spectra),
        spectral_entropy.run(entropy, spectra),
        spectral_peak.run(peak, spectra),
    ]


def test_features_are_what_they_are_of_the_densities_in_float64() -> None:
    """To the bit: what is summed is summed in float64."""
    single = estimate("multitaper", epochs_of(narrowed(recording(0.0, 1))))
    widened = Spectra(
        single.signal,
        single.unit,
        single.rows,
        single.freq_hz,
        single.density.astype(np.float64),
        single.resolution_hz,
        single.dof,
    )
    for one, other in zip(features(single), features(widened), strict=True):
        for part, values in other.columns.items():
            assert one.columns[part].dtype == np.float64
            np.testing.assert_array_equal(one.columns[part], values, err_msg=part)


@pytest.mark.parametrize("of", ["mean", "median"])
@pytest.mark.parametrize("over", ["power", "decibels"])
def test_an_average_is_that_of_the_densities_in_float64(of: str, over: str) -> None:
    density = narrowed(np.random.default_rng(3).gamma(2.0, size=(60, 33)))
    params = params_of(average.AverageParams, of=of, over=over)
    single = average.average(density, 2.0, params)
    assert single.dtype == np.float64
    np.testing.assert_array_equal(single, average.average(density.astype(np.float64), 2.0, params))
    rows = spectra_of(density.astype(np.float64))
    narrow = Spectra(
        rows.signal, rows.unit, rows.rows, rows.freq_hz, density, rows.resolution_hz, rows.dof
    )
    made = [average.combine(params, [average.collect(params, one)]) for one in (narrow, rows)]
    assert made[0].density.dtype == np.float64
    np.testing.assert_array_equal(made[0].density, made[1].density)


def test_harmonics_are_fitted_in_float64() -> None:
    t = np.arange(1250) / 125
    beat = 80 + sum(12 / k * np.cos(2 * np.pi * 1.2 * k * t + k) for k in range(1, 6))
    x = narrowed(np.tile(beat, 2))
    params = params_of(harmonics.HarmonicsParams, fundamental_within=("0.7 Hz", "3 Hz"), of="whole")
    made = [
        harmonics.run(params, epochs_of(samples, rate_hz=125, length=1250, hop=1250)).columns
        for samples in (x, x.astype(np.float64))
    ]
    assert made[0]["fundamental"][0] == pytest.approx(1.2, abs=1e-6)
    for part, values in made[1].items():
        np.testing.assert_array_equal(made[0][part], values, err_msg=part)
