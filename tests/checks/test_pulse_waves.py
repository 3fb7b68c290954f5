"""Harmonics of pulse waves against published values and facts of the trade."""

import numpy as np
import pytest

from check_values import entry
from feature_data import epochs, spectra
from waveassay.contract import Features, Floats
from waveassay_stages.feature.harmonics import HarmonicsParams, run
from waveassay_stages.feature.spectral_peak import SpectralPeakParams
from waveassay_stages.feature.spectral_peak import run as peak_run

RATE = 125


def harmonics(x: Floats, rate_hz: int, **given: object) -> dict[str, float]:
    params = HarmonicsParams.model_validate({"fundamental_within": ("0.6 Hz", "3.5 Hz"), **given})
    features: Features = run(params, epochs(x, rate_hz, x.size / rate_hz))
    return {name: float(values[0]) for name, values in features.columns.items()}


def arterial(rate_per_min: float, length_s: float = 10.0, ventilated_mmhg: float = 0.0) -> Floats:
    """Return an invented arterial pressure: beats with a quick rise, a slow fall and a notch."""
    t = np.arange(round(length_s * RATE)) / RATE
    beat = np.mod(t * rate_per_min / 60, 1.0)
    rise = 40 * np.sin(np.pi * np.minimum(beat / 0.35, 1.0)) ** 1.5
    runoff = 12 * np.exp(-3 * beat) * np.minimum(beat / 0.08, 1.0)
    notch = 6 * np.exp(-0.5 * ((beat - 0.42) / 0.04) ** 2)
    breath = ventilated_mmhg * np.sin(2 * np.pi * 0.2 * t + 0.7)
    return np.asarray(75 + rise + runoff + notch + breath, np.float64)


# Whole cycles in an epoch, sampled so finely that what lies above the harmonics fitted does not
# reach the tolerance of 2e-5: 1.25 Hz, 8 s, 2,000 samples a second.
_T = np.arange(16_000) / 2000
_PHASE = 2 * np.pi * 1.25 * (_T + 0.00025)  # samples stand beside the jumps, not on them
_STANDARD = {
    "half_rectified_sine": np.maximum(np.sin(_PHASE), 0.0),
    "square_pm1": np.sign(np.sin(_PHASE)),
    "triangle_pm1": 2 / np.pi * np.arcsin(np.sin(_PHASE)),
}


@pytest.mark.parametrize("name", _STANDARD)
def test_h09_fourier_amplitudes_of_standard_pulses(name: str) -> None:
    check = entry("H09")
    found = harmonics(_STANDARD[name], 2000, trend_below="0 Hz")
    assert found["fundamental"] == pytest.approx(1.25, abs=2e-4)
    for key, value in check.expected[name].items():
        column = "mean" if key == "a0" else f"amplitude_{key.removeprefix('h')}"
        assert found[column] == pytest.approx(value, abs=check.tolerance)


def test_h09_phases_of_a_half_rectified_sine() -> None:
    # max(sin, 0) = 1/pi + sin(wt)/2 - sum over even k of 2/(pi (k^2 - 1)) cos(k wt): with cosines,
    # phases are -90 degrees at the first and 180 at the even ones, so 180 - k (-90) = 0 for k = 2.
    # Spiegel MR, Mathematical Handbook, sect. 23 (from memory; confirmed by the computation).
    found = harmonics(_STANDARD["half_rectified_sine"], 2000, trend_below="0 Hz", harmonics=4)
    assert found["phase_1"] == 0.0
    for k, expected in ((2, 180.0 + 2 * 90), (4, 180.0 + 4 * 90)):
        difference = (found[f"phase_{k}"] - expected + 180) % 360 - 180
        assert difference == pytest.approx(0.0, abs=0.05)


@pytest.mark.parametrize("per_min", [72, 120, 180])
def test_h01_the_fundamental_is_the_rate_over_60_and_the_tenth_harmonic_ten_times_it(
    per_min: int,
) -> None:
    check = entry("H01")
    found = harmonics(arterial(per_min), RATE)
    if str(per_min) in check.expected:
        assert found["fundamental"] == pytest.approx(check.expected[str(per_min)], abs=1e-4)
    tenth = f"10th_harmonic_at_{per_min}"
    if tenth in check.expected:
        assert 10 * found["fundamental"] == pytest.approx(check.expected[tenth], abs=1e-3)
        assert np.isfinite(found["amplitude_10"])


@pytest.mark.parametrize(("per_min", "hertz"), [(100, 1.67), (70, 1.17)])
@pytest.mark.parametrize("ventilated_mmhg", [0.0, 4.0])
def test_100_beats_a_minute_are_1_67_hz_and_70_are_1_17(
    per_min: int, hertz: float, ventilated_mmhg: float
) -> None:
    """Common practice, no source."""
    found = harmonics(arterial(per_min, ventilated_mmhg=ventilated_mmhg), RATE)
    assert round(found["fundamental"], 2) == hertz


def test_harmonics_are_whole_multiples_and_fall_off_quickly() -> None:
    """Common practice, no source: a few harmonics hold nearly all of the wave."""
    x = arterial(70)
    found = harmonics(x, RATE, share="95 %", harmonics=10)
    assert found["explained"] > 0.999  # by whole multiples of the fundamental alone
    assert found["needed"] <= 4
    assert found["amplitude_1"] > 3 * found["amplitude_4"] > 9 * found["amplitude_10"]
    # Peaks of a plain periodogram lie on the multiples, to half a bin.
    power = np.abs(np.fft.rfft((x - x.mean()) * np.hanning(x.size))) ** 2
    for k in (1, 2, 3):
        near = slice(round((k - 0.4) * 7 / 6 * 10), round((k + 0.4) * 7 / 6 * 10) + 1)
        top = near.start + int(np.argmax(power[near]))
        assert top * 0.1 == pytest.approx(k * 70 / 60, abs=0.05 + 1e-9)


def test_mechanical_ventilation_is_a_small_peak_near_a_fifth_of_a_hertz() -> None:
    """Common practice, no source."""
    x = arterial(70, 60.0, ventilated_mmhg=3.0)
    tapered = (x - x.mean()) * np.hanning(x.size)
    density = 2 * np.abs(np.fft.rfft(tapered)) ** 2 / (RATE * np.sum(np.hanning(x.size) ** 2))
    data = spectra(density, RATE / x.size, unit="mmHg", duration_s=60.0)

    def peak(low: str, high: str) -> dict[str, float]:
        params = SpectralPeakParams.model_validate({"within": (low, high), "prominence": "10 dB"})
        return {name: float(v[0]) for name, v in peak_run(params, data).columns.items()}

    slow, pulse = peak("0.1 Hz", "0.6 Hz"), peak("0.7 Hz", "3 Hz")
    assert slow["frequency"] == pytest.approx(0.2, abs=0.005)
    assert pulse["frequency"] == pytest.approx(70 / 60, abs=0.005)
    assert slow["power"] < 0.1 * pulse["power"]


def test_l08_the_lynx_cycle_is_that_of_the_best_single_sinusoid() -> None:
    check = entry("L08")
    x = np.log10(np.array(check.input["values"], np.float64))
    assert x.size == check.expected["n"]
    # One count a year: a hertz of this signal is a cycle a year.
    found = harmonics(
        x,
        1,
        fundamental_within=("0.05 Hz", "0.4 Hz"),
        harmonics=1,
        fitted=1,
        trend_below="0 Hz",
    )
    assert 1 / found["fundamental"] == pytest.approx(
        check.expected["best_period_years"], abs=check.tolerance["best_period_years"]
    )
