"""Slepian's tapers and Thomson's estimate against published and closed-form values."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from check_values import entry
from waveassay.contract import Floats, exact
from waveassay.contract.statistics import confidence_factors
from waveassay_stages.spectrum._slepian import slepian_tapers
from waveassay_stages.spectrum.multitaper import multitaper, taper_count


@pytest.mark.parametrize("key", entry("B01").expected)
def test_concentrations(key: str) -> None:
    """B01: Slepian 1978, eq. 13; Thomson 1982."""
    check = entry("B01")
    expected = check.expected[key]
    tapers, found = slepian_tapers(1024, exact(float(key)), len(expected))
    assert found == pytest.approx(expected, abs=check.tolerance)
    # and by the definition: the share of a taper's energy within +-W (fine grid of the transform)
    grid = 1 << 17
    energy = np.abs(np.fft.rfft(tapers[-1], grid)) ** 2
    edge = float(key) / 1024 * grid
    inside = energy[0] + 2 * np.sum(energy[1 : int(edge) + 1])
    inside += 2 * (edge - int(edge) - 0.5) * energy[int(edge)]
    assert inside / grid == pytest.approx(expected[-1], abs=1e-5)


@pytest.mark.parametrize("key", entry("B02").expected)
def test_eigenvalues_of_the_continuous_problem(key: str) -> None:
    """B02: Slepian & Pollak 1961, Table I (c = pi NW)."""
    check = entry("B02")
    expected = check.expected[key]
    time_bandwidth = Fraction(float(key) / np.pi)
    _, found = slepian_tapers(1500, time_bandwidth, len(expected))
    assert found == pytest.approx(expected, abs=check.tolerance)


def spectral_window(length_s: int, time_bandwidth: int) -> tuple[Floats, Floats]:
    """Return frequency (Hz, from a tone) and density of the tone's unit power, by the stage.

    The tone is moved between bins, which samples the window more finely than padding alone, and
    given both phases, whose mean is free of the tone's mirror image at negative frequency.
    """
    rate, tone_hz, places = 256, 64, 16
    n = np.arange(rate * length_s)
    from_tone: list[Floats] = []
    densities: list[Floats] = []
    for k in range(places):
        moved_hz = tone_hz + k / (4 * length_s * places)
        angle = 2 * np.pi * moved_hz * n / rate
        x = np.sqrt(2) * np.stack([np.cos(angle), np.sin(angle)])
        freq_hz, density = multitaper(
            x,
            rate,
            half_bandwidth_hz=Fraction(time_bandwidth, length_s),
            detrend="none",
            zero_padding="four_times",
        )
        from_tone.append(freq_hz - moved_hz)
        densities.append(np.mean(density, axis=0))
    offset, share = np.concatenate(from_tone), np.concatenate(densities)
    order = np.argsort(offset)
    return offset[order], share[order]


@pytest.mark.parametrize(("length_s", "time_bandwidth"), [(2, 3), (4, 2)])
def test_resolution_bandwidth(length_s: int, time_bandwidth: int) -> None:
    """B03: Thomson 1982; Percival & Walden 1993, chapter 7."""
    check = entry("B03")
    count = taper_count(Fraction(time_bandwidth))
    assert count == check.expected[f"K_NW{time_bandwidth}"]
    freq_hz, density = spectral_window(length_s, time_bandwidth)
    half = time_bandwidth / length_s
    spacing = np.diff(freq_hz)
    middle = (density[1:] + density[:-1]) / 2
    within = np.abs(freq_hz[1:] + freq_hz[:-1]) / 2 < half
    key = f"energy_within_W_T{length_s}_NW{time_bandwidth}_K{count}"
    energy = np.sum((spacing * middle)[within])
    assert energy == pytest.approx(check.expected[key], abs=check.tolerance[key])
    if length_s == 2:
        key = "half_power_width_Hz_T2_NW3_K5"
        above = freq_hz[density > np.max(density[np.abs(freq_hz) < half / 4]) / 2]
        width = float(above[-1] - above[0])
        assert width == pytest.approx(check.expected[key], abs=check.tolerance[key])


@pytest.mark.parametrize("tapers", entry("B04").expected)
def test_confidence_factors_of_k_tapers(tapers: int) -> None:
    """B04: Thomson 1982; Percival & Walden 1993, section 7.1; handbook chi-square percentiles."""
    check = entry("B04")
    found = confidence_factors(2 * tapers, 0.95)
    assert found == pytest.approx(tuple(check.expected[tapers]), abs=check.tolerance)


def test_tapers_are_orthonormal() -> None:
    """B06: Slepian 1978."""
    check = entry("B06")
    tapers, _ = slepian_tapers(500, Fraction(3), 5)
    deviation = np.max(np.abs(tapers @ tapers.T - np.eye(5)))
    expected = check.expected["max_dev_from_identity"]
    assert deviation == pytest.approx(expected, abs=check.tolerance)


def test_white_noise() -> None:
    """B08: Thomson 1982; level 2 sigma^2 / fs, coefficient of variation 1 / sqrt(K)."""
    check = entry("B08")
    given: dict[str, Any] = check.input
    fs, n, k = given["fs_Hz"], given["n"], given["K"]
    x = np.random.default_rng(1982).normal(0, given["sigma"], (2000, n))
    _, density = multitaper(
        x, fs, half_bandwidth_hz=Fraction(given["NW"] * fs, n), tapers=k, detrend="none"
    )
    inner = density[:, given["NW"] + 1 : -given["NW"] - 1]  # away from 0 Hz and Nyquist
    level, variation = np.mean(inner), np.std(inner) / np.mean(inner)
    expected, tolerance = check.expected, check.tolerance
    assert level == pytest.approx(expected["mean_level"], abs=tolerance["mean_level"])
    key = "coefficient_of_variation"
    assert variation == pytest.approx(expected[key], abs=tolerance[key])
