"""Filters against published and closed-form values; sources stand in values/filters.yaml."""

from typing import Any

import numpy as np
import pytest

from check_values import entry
from waveassay_stages.filter import _iir, butterworth, notch
from waveassay_stages.resample import kaiser_beta, kaiser_order, low_pass_kernel


def filter_params(**values: Any) -> butterworth.ButterworthParams:
    return butterworth.ButterworthParams.model_validate(values)


def loss_db(params: butterworth.ButterworthParams, rate_hz: float, freq_hz: float) -> float:
    return float(-20 * np.log10(butterworth.gain_at(params, rate_hz, freq_hz)))


def unwarped_hz(analogue_hz: float, rate_hz: float) -> float:
    """Return the digital frequency that the bilinear transform brings an analogue one to."""
    return float(rate_hz / np.pi * np.arctan(np.pi * analogue_hz / rate_hz))


@pytest.mark.parametrize("order", range(1, 9))
def test_d01_butterworth_polynomials(order: int) -> None:
    """D01: Weinberg 1962, Zverev 1967: the denominators of the normalised low-pass."""
    published = entry("D01")
    polynomial = np.poly(np.array(butterworth.prototype_poles(order)))
    assert np.max(np.abs(polynomial.imag)) < 1e-12 * np.max(np.abs(polynomial.real))
    expected = published.expected[str(order)]
    assert polynomial.real.tolist() == pytest.approx(expected, abs=published.tolerance)


@pytest.mark.parametrize("order", range(1, 9))
@pytest.mark.parametrize("side", ["high_pass", "low_pass"])
def test_d02_half_the_power_at_the_cutoff(order: int, side: str) -> None:
    """D02: Butterworth 1930: 3.0103 dB at the cut-off, whatever the order."""
    published = entry("D02")
    params = filter_params(**{side: "30 Hz"}, order_per_pass=order, passes="forward")
    expected = published.expected[order - 1]
    assert loss_db(params, 250, 30) == pytest.approx(expected, abs=published.tolerance)


@pytest.mark.parametrize("order", [1, 2, 4, 8])
def test_d03_an_octave_above_the_cutoff_and_the_far_slope(order: int) -> None:
    """D03: Butterworth 1930: 10 log10(1 + 4^n), then 6.02 n dB an octave (analogue octaves)."""
    published = entry("D03")
    rate_hz, cutoff_hz = 1000.0, 10.0
    params = filter_params(low_pass="10 Hz", order_per_pass=order, passes="forward")
    analogue_hz = _iir.prewarped_hz(cutoff_hz, rate_hz)
    losses = {
        k: loss_db(params, rate_hz, unwarped_hz(k * analogue_hz, rate_hz)) for k in (2, 16, 32)
    }
    expected, tolerance = published.expected, published.tolerance
    assert losses[2] == pytest.approx(expected[f"n{order}_at_2fc"], abs=tolerance)
    slope = losses[32] - losses[16]
    assert slope == pytest.approx(expected[f"n{order}_slope_per_octave"], abs=tolerance)


def test_d04_two_passes_lose_twice_as_much_at_the_cutoff_of_one() -> None:
    """D04: Winter 2009, 3.4: 6.02 dB where one pass loses 3.01 dB."""
    published = entry("D04")
    params = filter_params(low_pass="30 Hz", order_per_pass=2, cutoff_at="-6 dB")
    expected = published.expected["loss_at_fc_dB"]
    assert loss_db(params, 250, 30) == pytest.approx(expected, abs=published.tolerance)
    one_pass = filter_params(low_pass="30 Hz", order_per_pass=2, passes="forward")
    same = _iir.gain(butterworth.design(params, 250), 30, 250, "forward")
    assert same == pytest.approx(butterworth.gain_at(one_pass, 250, 30), rel=1e-12)


@pytest.mark.parametrize(("order", "key"), [(1, "ratio_n1"), (2, "ratio_n2"), (4, "ratio_n4")])
def test_d04_where_two_uncorrected_passes_have_half_the_power(order: int, key: str) -> None:
    """D04: (sqrt 2 - 1)^(1/2n), 0.802 for order 2, in the pre-warped domain.

    Without correction is -6 dB at the cut-off; the filter that is corrected to -3 dB has its one
    pass designed for the cut-off over this ratio.
    """
    published = entry("D04")
    rate_hz = 250.0
    uncorrected = filter_params(low_pass="30 Hz", order_per_pass=order, cutoff_at="-6 dB")
    low, high = 1.0, 30.0
    for _ in range(80):
        middle = (low + high) / 2
        under = loss_db(uncorrected, rate_hz, middle) < 10 * np.log10(2)
        low, high = (middle, high) if under else (low, middle)
    ratio = _iir.prewarped_hz(low, rate_hz) / _iir.prewarped_hz(30, rate_hz)
    assert ratio == pytest.approx(published.expected[key], abs=published.tolerance)
    corrected = filter_params(low_pass=f"{low!r} Hz", order_per_pass=order, cutoff_at="-3 dB")
    one = butterworth.design(corrected, rate_hz).sos
    assert one == pytest.approx(butterworth.design(uncorrected, rate_hz).sos, rel=1e-9)


def test_d07_kaiser_low_pass() -> None:
    """D07: Oppenheim & Schafer, ch. 7: beta, order, and the error of the next symmetric order."""
    published = entry("D07")
    expected, tolerance = published.expected, published.tolerance
    beta = kaiser_beta(60)
    assert beta == pytest.approx(expected["beta"], abs=tolerance["beta"])
    assert kaiser_order(60, 0.2 * np.pi) == expected["M"]
    kernel = low_pass_kernel(20, 0.5, beta)
    response = np.abs(np.fft.rfft(kernel, 1 << 16))
    share = np.arange(response.size) / (1 << 15)
    error = float(np.max(response[share >= 0.6]))
    assert error == pytest.approx(expected["peak_error_M40"], abs=tolerance["peak_error_M40"])


def test_d08_kaiser_beta() -> None:
    """D08: Kaiser 1974."""
    published = entry("D08")
    for attenuation_db, beta in published.expected.items():
        assert kaiser_beta(float(attenuation_db)) == pytest.approx(beta, abs=published.tolerance)


def test_d12_prewarping() -> None:
    """D12: Oppenheim & Schafer, ch. 7: (fs / pi) tan(pi fc / fs)."""
    published = entry("D12")
    for key, expected in published.expected.items():
        freq, rate = key.split("Hz_at_")
        found = _iir.prewarped_hz(float(freq), float(rate))
        assert found == pytest.approx(expected, abs=published.tolerance)


@pytest.mark.parametrize("line", ["50", "60"])
@pytest.mark.parametrize("passes", ["forward", "both_ways"])
def test_d13_notch(line: str, passes: str) -> None:
    """D13: Orfanidis 1996, 11.3: half the power over f0 / Q, nothing at f0, all at 0 Hz.

    Our width is what it says after both passes, too.
    """
    published = entry("D13")
    expected, tolerance = published.expected[line], published.tolerance
    line_hz = float(line)
    values = {"line": f"{line} Hz", "width": f"{line_hz / 30!r} Hz", "passes": passes}
    params = notch.NotchParams.model_validate(values)
    freq_hz = np.arange(line_hz - 2, line_hz + 2, 1e-5)
    gain = notch.gain_at(params, 250, freq_hz)
    stopped = freq_hz[gain < np.sqrt(0.5)]
    low, high = float(stopped[0]), float(stopped[-1])
    assert high - low == pytest.approx(expected["minus3dB_width_Hz"], abs=tolerance)
    middle = np.sqrt(np.prod([np.tan(np.pi * f / 250) for f in (low, high)]))
    centre_hz = 250 / np.pi * np.arctan(middle)
    assert centre_hz == pytest.approx(expected["edges_warped_geometric_mean_Hz"], abs=tolerance)
    at_line, at_zero = notch.gain_at(params, 250, [line_hz, 0.0])
    assert at_line == pytest.approx(expected["gain_at_f0"], abs=tolerance)
    assert at_zero == pytest.approx(expected["gain_dc"], abs=tolerance)


@pytest.mark.parametrize("tau", ["1.0", "0.3", "0.1", "3.2"])
def test_d14_time_constants(tau: str) -> None:
    """D14: a first-order high-pass of 1 / (2 pi tau) lets a step fall to 1 / e in tau."""
    published = entry("D14")
    cutoff_hz = published.expected[tau]
    assert 1 / (2 * np.pi * float(tau)) == pytest.approx(cutoff_hz, abs=published.tolerance)
    rate = 1000
    params = filter_params(high_pass=f"{cutoff_hz} Hz", order_per_pass=1, passes="forward")
    step = np.concatenate((np.zeros(10), np.ones(6 * rate)))
    out = butterworth.butterworth(step, rate, params)
    above = np.flatnonzero(out > np.exp(-1))
    assert (above[-1] + 1 - 10) / rate == pytest.approx(float(tau), abs=0.002)
