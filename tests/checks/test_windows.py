"""Published figures of merit of the windows (Harris 1978, Nuttall 1981, Heinzel et al. 2002)."""

from typing import Any

import numpy as np
import pytest

from check_values import entry
from waveassay.contract import Floats
from waveassay_stages.spectrum._windows import (
    WINDOW_NAMES,
    WindowName,
    cosine_sum,
    noise_bandwidth_bins,
    overlap_correlation,
    window,
)
from waveassay_stages.spectrum.periodogram import periodogram

LENGTH = 4096

# The name in each table -> our name. Rows for windows that we do not offer are left out.
HARRIS: dict[str, WindowName] = {
    "rectangle": "rectangle",
    "triangle": "triangle",
    "riesz": "parabola",
    "tukey_0.25": "tukey_25",
    "tukey_0.50": "tukey_50",
    "hann": "hann",
    "hamming": "hamming",
    "blackman": "blackman",
    "blackman_harris_min4": "blackman_harris",
}
HEINZEL: dict[str, WindowName] = {
    "Rectangular": "rectangle",
    "Welch": "parabola",
    "Bartlett": "triangle",
    "Hanning": "hann",
    "Hamming": "hamming",
    "BH92": "blackman_harris",
    "Nuttall4c": "nuttall",
    "HFT95": "flat_top",
}


def rows(check: str, names: dict[str, WindowName]) -> list[Any]:
    expected = entry(check).expected
    return [
        pytest.param(check, names[row], expected[row], id=f"{check}-{names[row]}")
        for row in expected
        if row in names
    ]


def gain(w: Floats, bins: Floats) -> Floats:
    """Return the window's transform at fractional bins, 1 at bin 0."""
    n = np.arange(w.size)
    turn = np.exp(-2j * np.pi * np.multiply.outer(bins, n) / w.size)
    return np.asarray(np.abs(np.sum(turn * w, axis=-1)) / np.sum(w), np.float64)


def side_lobe_db(w: Floats) -> float:
    """Return how far below the main lobe the highest side lobe lies, dB.

    The main lobe ends at the first minimum below -10 dB: a flat top has ripples above that.
    """
    level = np.abs(np.fft.rfft(w, 64 * w.size))[: 64 * 40] / np.sum(w)
    first_minimum = int(np.argmax((np.diff(level) > 0) & (level[:-1] < 10**-0.5)))
    return float(-20 * np.log10(np.max(level[first_minimum:])))


def test_every_window_but_the_short_flank_is_checked() -> None:
    assert {*HARRIS.values(), *HEINZEL.values(), "tukey_10"} == set(WINDOW_NAMES)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A01", HARRIS) + rows("A08", HEINZEL))
def test_noise_bandwidth(check: str, name: WindowName, expected: float) -> None:
    """A01: Harris 1978, Table I. A08: Heinzel et al. 2002, table of windows."""
    tolerance = entry(check).tolerance
    assert noise_bandwidth_bins(window(name, LENGTH)) == pytest.approx(expected, abs=tolerance)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A02", HARRIS))
def test_coherent_gain(check: str, name: WindowName, expected: float) -> None:
    """A02: Harris 1978, Table I."""
    tolerance = entry(check).tolerance
    assert np.mean(window(name, LENGTH)) == pytest.approx(expected, abs=tolerance)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A03", HARRIS))
def test_scallop_loss(check: str, name: WindowName, expected: float) -> None:
    """A03: Harris 1978, Table I."""
    loss = -20 * np.log10(gain(window(name, LENGTH), np.array(0.5)))
    assert loss == pytest.approx(expected, abs=entry(check).tolerance)


@pytest.mark.parametrize(
    ("check", "name", "expected", "hop"),
    [
        pytest.param(*row.values, hop, id=row.id)
        for check, hop in (("A04", LENGTH // 4), ("A05", LENGTH // 2))
        for row in rows(check, HARRIS)
    ],
)
def test_overlap_correlation(check: str, name: WindowName, expected: float, hop: int) -> None:
    """A04 (75 % overlap), A05 (50 %): Harris 1978, Table I."""
    percent = 100 * overlap_correlation(window(name, LENGTH), hop)
    assert percent == pytest.approx(expected, abs=entry(check).tolerance)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A06", HARRIS))
def test_highest_side_lobe_in_whole_decibels(check: str, name: WindowName, expected: float) -> None:
    """A06: Harris 1978, Table I."""
    level = -side_lobe_db(window(name, LENGTH))
    assert level == pytest.approx(expected, abs=entry(check).tolerance)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A10", HEINZEL))
def test_highest_side_lobe(check: str, name: WindowName, expected: float) -> None:
    """A10: Heinzel et al. 2002, table of windows."""
    level = side_lobe_db(window(name, LENGTH))
    assert level == pytest.approx(expected, abs=entry(check).tolerance)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A07", HARRIS))
def test_worst_case_processing_loss(check: str, name: WindowName, expected: float) -> None:
    """A07: Harris 1978, Table I."""
    w = window(name, LENGTH)
    loss = -20 * np.log10(gain(w, np.array(0.5))) + 10 * np.log10(noise_bandwidth_bins(w))
    assert loss == pytest.approx(expected, abs=entry(check).tolerance)


@pytest.mark.parametrize(("check", "name", "expected"), rows("A09", HEINZEL))
def test_3_db_bandwidth(check: str, name: WindowName, expected: float) -> None:
    """A09: Heinzel et al. 2002, table of windows; the width at exactly 3.000 dB."""
    from scipy.optimize import brentq

    w = window(name, LENGTH)

    def above_3_db(bins: float) -> float:
        return float(20 * np.log10(gain(w, np.array(bins))) + 3)

    half = brentq(above_3_db, 0.2, 3.0, xtol=1e-9)
    assert 2 * half == pytest.approx(expected, abs=entry(check).tolerance)


@pytest.mark.parametrize("length", [16, 64, 101])
@pytest.mark.parametrize(("check", "name", "expected"), rows("A12", HARRIS))
def test_noise_bandwidth_of_cosine_sums_does_not_depend_on_length(
    check: str, name: WindowName, expected: float, length: int
) -> None:
    """A12: closed form from Harris 1978."""
    tolerance = entry(check).tolerance
    assert noise_bandwidth_bins(window(name, length)) == pytest.approx(expected, abs=tolerance)


def test_corrected_74_db_window() -> None:
    """A13: Nuttall 1981 on the misprint in Harris 1978."""
    check = entry("A13")
    coefficients = tuple(check.input["coefficients"])
    tolerance = check.tolerance["abs"]
    assert sum(coefficients) == pytest.approx(check.expected["coefficient_sum"], abs=1e-12)
    level = -side_lobe_db(cosine_sum(coefficients, LENGTH))
    assert level == pytest.approx(check.expected["highest_sidelobe_dB"], abs=tolerance)


def test_hann_windows_add_up_to_a_constant() -> None:
    """A14: Allen & Rabiner 1977."""
    check = entry("A14")
    w = window("hann", 64)
    half = w + np.roll(w, 32)
    quarter = sum(np.roll(w * w, 16 * k) for k in range(4))
    assert half == pytest.approx(check.expected["hann_50pct_sum"], abs=check.tolerance)
    assert quarter == pytest.approx(check.expected["hann_squared_75pct_sum"], abs=check.tolerance)


def test_sine_through_a_hann_window() -> None:
    """A15: Heinzel et al. 2002, section 9; Harris 1978."""
    check = entry("A15")
    a, f, fs, n = (check.input[key] for key in ("amplitude_uV", "f_Hz", "fs_Hz", "n"))
    x = a * np.sin(2 * np.pi * f * np.arange(n) / fs)
    freq_hz, density = periodogram(x[None], fs, window_name="hann", detrend="none")
    bin_hz, peak = fs / n, round(f * n / fs)
    # From density to amplitude: P = (A^2 / 2) / (ENBW bin) under the peak.
    amplitude = np.sqrt(2 * density[0] * bin_hz * noise_bandwidth_bins(window("hann", n)))
    expected, tolerance = check.expected, check.tolerance
    assert freq_hz[peak] == f
    assert amplitude[peak] == pytest.approx(expected["amplitude_at_bin"], abs=tolerance)
    for beside in (peak - 1, peak + 1):
        found = amplitude[beside]
        assert found == pytest.approx(expected["amplitude_at_adjacent_bin"], abs=tolerance)
    total = np.sum(density) * bin_hz
    assert total == pytest.approx(expected["psd_sum_times_df"], abs=tolerance)
    assert density[0, peak] == pytest.approx(expected["psd_peak"], abs=tolerance)


def test_rectangle_half_way_between_bins() -> None:
    """A16: 20 log10(2 / pi); Harris 1978, Table I."""
    check = entry("A16")
    level = 20 * np.log10(gain(window("rectangle", LENGTH), np.array(0.5)))
    assert level == pytest.approx(check.expected, abs=check.tolerance)
