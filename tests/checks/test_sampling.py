"""Resampling against the sampling theorem; sources stand in values/sampling.yaml."""

from fractions import Fraction

import numpy as np
import pytest

from check_values import entry
from signal_data import tone
from waveassay.contract import Floats
from waveassay_stages.resample import ResampleParams, resample

PAIRS = list(entry("E01").expected)


def resampled(x: Floats, old: int, new: int, **values: str) -> Floats:
    values["rate"] = f"{new} Hz"
    factor = Fraction(new, old)
    params = ResampleParams.model_validate(values)
    return resample(x, factor.numerator, factor.denominator, params)


def amplitude(x: Floats, rate_hz: float, freq_hz: float) -> float:
    """Return the amplitude of a line, over whole cycles."""
    places = np.arange(x.size) / rate_hz
    return float(2 * np.abs(np.mean(x * np.exp(-2j * np.pi * freq_hz * places))))


@pytest.mark.parametrize("pair", PAIRS)
def test_e01_what_would_fold_is_kept_out(pair: str) -> None:
    """E01: Shannon 1949: taken every k-th sample a tone lands at its alias; resampled it is gone.

    Gone is more than E02 asks for 16 bits: 98.09 dB down (Bennett 1948). A tone below the Nyquist
    frequency stays where it is. The transition is narrow, for 120 Hz at a rate of 250 Hz.
    """
    freq, new = (int(part) for part in pair.split("@"))
    alias = entry("E01").expected[pair]
    factor = 8
    old, seconds = factor * new, 24
    wave = tone(freq, old, seconds * old, 0.7)
    middle = slice(6 * new, -6 * new)
    full = 1 if alias < new / 2 else 2 * np.sin(0.7)  # at Nyquist a line has no other side
    assert amplitude(wave[::factor][middle], new, alias) == pytest.approx(full, abs=1e-6)
    left = amplitude(resampled(wave, old, new, transition="3 %")[middle], new, alias)
    if freq < new / 2:
        assert freq == alias
        assert left == pytest.approx(1, abs=1e-5)
    else:
        assert left < 10 ** (-entry("E02").expected[16] / 20)


@pytest.mark.parametrize("bits", [12, 16, 24])
def test_e02_transparent_at_a_word_length(bits: int) -> None:
    """E02: Bennett 1948: an anti-alias filter of 6.02 b + 1.76 dB is below b bits' rounding."""
    asked = entry("E02").expected[bits]
    wave = tone(90, 512, 20 * 512)
    left = resampled(wave, 512, 128, attenuation=f"{asked} dB")[128:-128]
    rounding = np.sqrt((2 / 2**bits) ** 2 / 12)  # of a full-scale sine of amplitude 1
    assert np.std(left) < rounding


def test_e04_a_sine_is_resampled_exactly() -> None:
    """E04: sampling theorem: 10 Hz from 250 Hz to 200 Hz, to 1e-10 away from the ends."""
    published = entry("E04")
    out = resampled(tone(10, 250, 5000), 250, 200, attenuation="200 dB")
    error = float(np.max(np.abs(out - tone(10, 200, 4000))[400:-400]))
    assert error == pytest.approx(published.expected, abs=published.tolerance)
