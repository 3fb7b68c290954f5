"""Published values of pulse waves, pressures and calibration, through the command.

Tolerances are the entry's own and what rounding to a step q does: an error of variance q^2/12
(Bennett 1948; Widrow 1956), so q / sqrt(6 n) on an amplitude fitted to n independent roundings and
q / sqrt(12 n) on a mean; five standard deviations are allowed.
"""

from fractions import Fraction
from math import pi, sqrt

import numpy as np
import pytest

from check_values import entry
from made_files import pressures
from made_recordings import (
    BREATHS_HZ,
    BREATHS_MMHG,
    PULSE_MEAN_MMHG,
    PULSE_Q,
    PULSE_RATE_HZ,
    PULSES,
    RATE_HZ,
    SHORT_S,
    STANDARD_Q,
    STANDARD_RATE_HZ,
    SWING,
    pulse_amplitudes,
)
from published_run import PublishedRun

EPOCH_S = 20


def roundings(rate: int) -> int:
    """Return after how many samples a pulse, and its rounding, repeats itself."""
    return Fraction(60 * PULSE_RATE_HZ, rate).numerator


def amplitude_off(rate: int) -> float:
    """Return how far rounding may move an amplitude, or the mean, of a pulse, mmHg."""
    return 5 * PULSE_Q / sqrt(6 * roundings(rate))


def fundamental_off(rate: int) -> float:
    """Return how far rounding may move a fundamental, Hz.

    The standard deviation of the frequency of a sine of amplitude A over n samples in T seconds is
    sqrt(6) s / (pi A T sqrt(n)) for errors of variance s^2 (Rife & Boorstyn, IEEE Trans. Inf.
    Theory 20, 591-598, 1974; from memory); the pulse's other harmonics only make it smaller.
    """
    first = float(np.abs(pulse_amplitudes(1)[0]))
    return 5 * PULSE_Q / sqrt(2 * roundings(rate)) / (pi * first * EPOCH_S)


@pytest.mark.parametrize("rate", [72, 120, 180])
def test_fundamental_of_a_pulse(published: PublishedRun, rate: int) -> None:
    """H01: the fundamental is the rate over 60, the tenth harmonic ten times that."""
    check = entry("H01")
    name = f"pulse_{rate}"
    found = published.epochs("pulse", name, "harmonics.fundamental")
    expected = check.expected.get(str(rate), rate / 60)
    off = check.tolerance + fundamental_off(rate)
    assert found == pytest.approx(np.full(found.size, expected), abs=off)
    tenth = published.epochs("pulse", name, "harmonics.amplitude_10")
    planted = abs(pulse_amplitudes(10)[9])
    assert tenth == pytest.approx(np.full(tenth.size, planted), abs=amplitude_off(rate))
    if rate != 180:
        average = published.spectrum("pulse", name)
        tenth_hz = check.expected[f"10th_harmonic_at_{rate}"]
        k = int(np.argmin(np.abs(average["frequency_hz"] - tenth_hz)))
        assert average["frequency_hz"][k] == pytest.approx(tenth_hz, abs=check.tolerance)
        assert np.argmax(average["density"][k - 5 : k + 6]) == 5


@pytest.mark.parametrize(("rate", "hz"), [(100, 1.67), (70, 1.17)])
def test_pulse_of_the_trade(published: PublishedRun, rate: int, hz: float) -> None:
    """100 beats a minute are 1.67 Hz and 70 are 1.17 Hz (common practice, no source)."""
    found = published.value("pulse", f"pulse_{rate}", "harmonics.fundamental", "median")
    assert round(found, 2) == hz


@pytest.mark.parametrize("rate", PULSES)
def test_harmonics_are_multiples_and_fall_off(published: PublishedRun, rate: int) -> None:
    """Peaks at whole multiples of the fundamental, each lower (common practice, no source)."""
    average = published.spectrum("pulse", f"pulse_{rate}")
    freq_hz, density = average["frequency_hz"], average["density"]
    inside = density[1:-1]
    peaks = 1 + np.flatnonzero((inside > density[:-2]) & (inside > density[2:]))
    # Above the ventilator, and above the Hann window's side lobes.
    strong = peaks[(freq_hz[peaks] > 0.5) & (density[peaks] > 1e-3)]
    fundamental_hz = rate / 60
    multiples = freq_hz[strong] / fundamental_hz
    half_bin = freq_hz[1] / 2
    assert np.abs(multiples - np.rint(multiples)).max() * fundamental_hz <= half_bin
    assert np.rint(multiples)[:6].tolist() == [1, 2, 3, 4, 5, 6]
    names = [f"harmonics.amplitude_{k}" for k in range(1, 11)]
    amplitudes = np.array([published.value("pulse", f"pulse_{rate}", name) for name in names])
    assert (np.diff(amplitudes) < 0).all()
    # Quickly: the fifth is below a fifth of the first.
    assert amplitudes[4] < amplitudes[0] / 5


@pytest.mark.parametrize("rate", PULSES)
def test_amplitudes_of_a_pulse(published: PublishedRun, rate: int) -> None:
    """Amplitudes and mean of the beat whose Fourier integral is known (derived)."""
    name = f"pulse_{rate}"
    for k, amplitude in enumerate(np.abs(pulse_amplitudes(10)), 1):
        found = published.epochs("pulse", name, f"harmonics.amplitude_{k}")
        assert found == pytest.approx(np.full(found.size, amplitude), abs=amplitude_off(rate))
    mean = published.epochs("pulse", name, "harmonics.mean")
    assert mean == pytest.approx(np.full(mean.size, PULSE_MEAN_MMHG), abs=amplitude_off(rate))


def test_ventilator(published: PublishedRun) -> None:
    """Ventilation is a small peak near 0.2 Hz in arterial pressure (common practice, no source)."""
    where = published.epochs("pulse", "pulse_70", "ventilator.frequency")
    bin_hz = 1 / EPOCH_S
    assert where == pytest.approx(np.full(where.size, BREATHS_HZ), abs=bin_hz / 2)
    average = published.spectrum("pulse", "pulse_70")
    near = np.abs(average["frequency_hz"] - BREATHS_HZ) < 2.5 * bin_hz
    power = np.sum(average["density"][near]) * bin_hz
    assert power == pytest.approx(BREATHS_MMHG**2 / 2, rel=0.01)
    first = published.value("pulse", "pulse_70", "harmonics.amplitude_1")
    assert power < first**2 / 2 / 10
    others = published.table("epochs/pulse")
    still = [r for r in others if r["signal"] == "pulse_100" and r["kept"] == "true"]
    assert still
    assert not any(row["ventilator.frequency"] for row in still)


@pytest.mark.parametrize(
    ("name", "key"),
    [
        ("half_rectified", "half_rectified_sine"),
        ("square", "square_pm1"),
        ("triangle", "triangle_pm1"),
    ],
)
def test_standard_pulses(published: PublishedRun, name: str, key: str) -> None:
    """H09: Bronshtein & Semendyayev; Spiegel, section 23.

    Samples of a square wave between its edges have harmonics x / sin x times those of the wave,
    with x = pi k / 1000: 0.00001 at the fifth, within the entry's tolerance.
    """
    check = entry("H09")
    off = check.tolerance + 5 * STANDARD_Q / sqrt(6 * STANDARD_RATE_HZ)
    for part, expected in check.expected[key].items():
        column = "mean" if part == "a0" else f"amplitude_{part.removeprefix('h')}"
        found = published.epochs("standard", name, f"harmonics.{column}")
        assert found == pytest.approx(np.full(found.size, expected), abs=off)
    rate = published.epochs("standard", name, "harmonics.fundamental")
    # What is above the 40 harmonics fitted, of a square the most, pulls by some 0.0001 Hz.
    assert rate == pytest.approx(np.ones(rate.size), abs=0.001)


@pytest.mark.parametrize("name", ["in_kpa", "in_cmh2o", "in_mmhg"])
def test_units_of_pressure(published: PublishedRun, name: str) -> None:
    """H08: Thompson & Taylor, NIST SP 811, 2008: a recipe's unit, whatever the file's.

    The conventional millimetre of mercury and the torr differ by 1.4e-7, which the values that the
    24-bit file holds tell apart to 1e-8.
    """
    check = entry("H08")
    pascals = {
        "in_kpa": 1e3 / check.expected["mmHg_to_Pa_conventional"],
        "in_cmh2o": check.expected["cmH2O_to_Pa"] / check.expected["mmHg_to_Pa_conventional"],
        "in_mmhg": check.expected["mmHg_to_Pa_conventional"] / 1e3,
    }
    (made,) = (signal for signal in pressures() if signal.name == name)
    held = np.mean(made.held.reshape(-1, 10 * RATE_HZ), axis=-1) * pascals[name]
    mean = np.sqrt(published.epochs("units", name, "band_power.mean"))
    assert mean == pytest.approx(held, rel=check.tolerance)
    whole = check.expected["100_mmHg_in_kPa"] if name == "in_mmhg" else 100.0
    # Roundings repeat themselves after the swing's period of 500 samples.
    off = 5 * made.q * pascals[name] / sqrt(12 * 500)
    assert mean == pytest.approx(np.full(mean.size, whole), abs=check.tolerance * whole + off)
    swing = np.sqrt(2 * published.epochs("units", name, "band_power.swing"))
    assert swing == pytest.approx(np.full(swing.size, SWING * whole), abs=2 * off + 1e-8 * whole)


def test_calibration_of_a_converter(published: PublishedRun) -> None:
    """G13: Kemp et al. 1992; Kemp & Olivan 2003. Power at 0 Hz is the square of the value."""
    check = entry("G13")
    expected = check.expected

    def values(name: str) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        return np.sqrt(published.epochs("converter", name, "band_power.mean"))

    zero, one, limits = (values(name) for name in ("zero", "one", "limits"))
    count = zero.size
    assert zero == pytest.approx(
        np.full(count, expected["physical_at_digital_0"]), abs=check.tolerance
    )
    assert one - zero == pytest.approx(
        np.full(count, expected["gain_uV_per_bit"]), abs=check.tolerance
    )
    halves = [expected["physical_at_2047"], -expected["physical_at_minus2048"]]
    assert limits == pytest.approx(np.repeat(halves, count // 2), abs=check.tolerance)
    size = (published.recordings / "converter.edf").stat().st_size
    assert size - 3 * 2 * RATE_HZ * SHORT_S == expected["header_bytes_ns3"]
