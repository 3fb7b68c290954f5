"""Simulated signals whose make-up is known: noise of a given spectrum, a pulse wave, mains.

Random numbers come straight from the bit generator, whose stream numpy keeps for good, so that the
example is the same on every machine.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import pi

import numpy as np

from waveassay.contract import Bools, Floats

Density = Callable[[Floats], Floats]
_PERIOD_S = 512  # the noise repeats after this time, longer than any recording of the example


@dataclass(frozen=True)
class Course:
    """A value that stays, changes along a straight line, and stays again.

    Attributes
    ----------
    first, second : the two values.
    leaves_s, arrives_s : when it leaves the first and reaches the second.
    """

    first: float
    second: float
    leaves_s: float
    arrives_s: float

    def at(self, time_s: Floats) -> Floats:
        """Return the value at each time."""
        values: Floats = self.first + (self.second - self.first) * self._way(time_s)
        return values

    def integral(self, time_s: Floats) -> Floats:
        """Return the integral from 0 to each time: of a rate in Hz, the cycles gone through."""
        width = self.arrives_s - self.leaves_s
        ramp = self._way(time_s) ** 2 * width / 2 + np.maximum(time_s - self.arrives_s, 0)
        total: Floats = self.first * time_s + (self.second - self.first) * ramp
        return total

    def _way(self, time_s: Floats) -> Floats:
        way: Floats = np.clip((time_s - self.leaves_s) / (self.arrives_s - self.leaves_s), 0, 1)
        return way


def uniform(seed: Sequence[int], count: int) -> Floats:
    """Return numbers in [0, 1), the same on every machine and for every edition of numpy."""
    raw = np.random.PCG64(np.random.SeedSequence(seed)).random_raw(count)
    return (raw >> np.uint64(11)).astype(np.float64) * 2.0**-53


def hill(centre_hz: float, half_width_hz: float) -> Density:
    """Return a smooth hill of power around a frequency, nothing outside its half width."""

    def density(freq_hz: Floats) -> Floats:
        away = np.clip(np.abs(freq_hz - centre_hz) / half_width_hz, 0, 1)
        height: Floats = (1 + np.cos(pi * away)) / (2 * half_width_hz)
        return height

    return density


def falling(at_1_hz: float, low_hz: float, high_hz: float) -> Density:
    """Return a density that falls as 1/f between two frequencies."""

    def density(freq_hz: Floats) -> Floats:
        inside = (freq_hz >= low_hz) & (freq_hz <= high_hz)
        return np.where(inside, at_1_hz / np.maximum(freq_hz, low_hz), 0)

    return density


def noise(density: Density, rate_hz: int, samples: int, seed: Sequence[int]) -> Floats:
    r"""Return noise with a given one-sided density.

    .. math:: x(t) = \sum_k \sqrt{2 S(f_k)\,\Delta f}\,\cos(2 \pi f_k t + \varphi_k)

    with random phases; over its period of `_PERIOD_S` its power in a band is the density's sum.
    """
    from scipy import fft

    whole = rate_hz * _PERIOD_S
    freq_hz = np.arange(whole // 2 + 1) / _PERIOD_S
    amplitude = np.sqrt(2 * density(freq_hz) / _PERIOD_S)
    angle = 2 * pi * uniform(seed, freq_hz.size)
    lines = amplitude * (np.cos(angle) + 1j * np.sin(angle)) * (whole / 2)
    lines[[0, -1]] = 0
    series: Floats = fft.irfft(lines, whole)
    return series[:samples]


def with_power(x: Floats, first: Bools, second: Bools, powers: tuple[float, float]) -> Floats:
    """Return a gain for ``x`` with which it has exactly these mean squares where told.

    Between the two stretches the gain changes along a straight line.
    """
    gains = [
        float(np.sqrt(power / np.mean(x[where] ** 2)))
        for where, power in zip((first, second), powers, strict=True)
    ]
    leaves, arrives = int(np.flatnonzero(first)[-1]), int(np.flatnonzero(second)[0])
    return np.interp(np.arange(x.size), [leaves, arrives], gains)


def pulse_wave(
    cycles: Floats, amplitude: Floats, shape: Sequence[float], phase_deg: Sequence[float]
) -> Floats:
    r"""Return :math:`A \sum_k s_k \cos(2 \pi k c + \varphi_k)` of the cycles c gone through."""
    wave = np.zeros_like(cycles)
    for k, (share, phase) in enumerate(zip(shape, phase_deg, strict=True), start=1):
        wave += share * np.cos(2 * pi * ((k * cycles) % 1.0) + np.deg2rad(phase))
    return amplitude * wave
