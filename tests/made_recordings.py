"""Signals whose spectra are known in closed form, and the 16-bit recordings that hold them.

Every signal is written on a grid of steps q that begins at -32768 q, so that 0 lies on it and a
sample x is held as round(x / q). What that rounding does to a power is in `rounding_of_power`.
"""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from math import atan, log, pi, sqrt, tan
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from check_values import entry
from waveassay.contract import Floats
from waveassay.recording.write import WrittenSignal, write_recording

Complexes = NDArray[np.complex128]

START = datetime(2031, 4, 5, 9, 30)
#: Two second epochs at 250 Hz, as most entries have it.
RATE_HZ = 250
EPOCH = 500
SHORT_S, LONG_S = 100, 4000
Q_UV = 0.001
TONE_UV = 10.0
HALFWAY_HZ = 62.75
#: Power in uV^2 of the tones of C13, by frequency: ratios of 2, of 1/2, and of 100.
LEVELS_UV2 = {10: 0.5, 20: 1.0, 30: 0.25, 40: 50.0}
COARSE_Q_UV = 0.5
#: Bins that neighbouring estimates of white noise hardly share, Hz.
APART_HZ = tuple(range(10, 116, 5))
RANDOM_ERROR_HZ = tuple(range(4, 124, 2))
#: Half-overlapping epochs in the conditions of C01.
CONDITIONS = {"two": 2, "eight": 8, "thirty": 30}
#: Tones of E01; one that lands on the Nyquist frequency is no peak.
ALIASES = tuple(key for key in entry("E01").expected if key != "150@100")


@dataclass(frozen=True)
class Made:
    """One signal: what it is called in recipe and file, and the step ``q`` that it is held in."""

    name: str
    rate_hz: int
    x: Floats
    q: float = Q_UV
    unit: str = "uV"

    @property
    def held(self) -> Floats:
        """The samples that the file holds, by our own rounding and not by the writer's."""
        held: Floats = np.rint(self.x / self.q) * self.q
        return held


def rounding_of_power(rms: float, q: float, roundings: float) -> float:
    r"""Return how far the power of a signal may be off once it is held in steps q.

    Rounding adds an error of variance :math:`q^2/12` that is not correlated with the signal
    (Bennett 1948; Widrow 1956). It adds that much power, and with the signal the product
    :math:`2 x e`, whose mean over n independent roundings has the standard deviation
    :math:`2\,rms\,q / \sqrt{12 n}`; five of them are allowed. A signal that repeats itself has as
    many independent roundings as samples in its period.
    """
    return q * q / 12 + 5 * 2 * rms * q / sqrt(12 * roundings)


def seconds(rate_hz: int, length_s: int) -> Floats:
    """Return the times of all samples, s."""
    return np.arange(rate_hz * length_s) / rate_hz


def alias_name(key: str) -> str:
    """Return the name of the signal for an entry of E01, such as ``100@128``."""
    return f"mains_{key.replace('@', '_')}"


def tone(freq_hz: float, rate_hz: int = RATE_HZ, amplitude: float = TONE_UV) -> Floats:
    """Return a sine; its phase of 0.3 keeps its half periods from being rounded alike."""
    x: Floats = amplitude * np.sin(2 * pi * freq_hz * seconds(rate_hz, SHORT_S) + 0.3)
    return x


def with_powers(powers: Mapping[int, float], period: int, repeats: int, seed: int) -> Floats:
    """Return cosines of random phase with these powers, by their whole cycles in the period."""
    rng = np.random.default_rng(seed)
    half = np.zeros(period // 2 + 1, np.complex128)
    for cycles, power in powers.items():
        # A cosine has half its squared amplitude; a constant, or one that alternates, all of it.
        if cycles in (0, period / 2):
            half[cycles] = period * sqrt(power)
        else:
            half[cycles] = period * sqrt(power / 2) * np.exp(2j * pi * rng.random())
    return np.tile(np.fft.irfft(half, period), repeats)


def ar2_powers(phi: tuple[float, float], sigma2: float, period: int) -> dict[int, float]:
    """Return the power in each bin of ``1 / period`` of an AR(2) process, from its spectrum."""
    turns = np.arange(period // 2 + 1) / period
    z = np.exp(-2j * pi * turns)
    two_sided = sigma2 / np.abs(1 - phi[0] * z - phi[1] * z * z) ** 2
    sides = np.where((turns == 0) | (turns == 0.5), 1, 2)
    return dict(enumerate((sides * two_sided / period).tolist()))


#: Integrals of the densities of G05 between two frequencies.
INTEGRALS: dict[str, Callable[[float, float], float]] = {
    "flat": lambda a, b: b - a,
    "one_over_f": lambda a, b: log(b / a),
    "one_over_f2": lambda a, b: 1 / a - 1 / b,
}
QUANTILES_RATE_HZ = 100
QUANTILES_HZ = (0.5, 30.0)
QUANTILES_UV, QUANTILES_Q_UV = 10.0, 0.002


def quantile_powers(name: str) -> dict[int, float]:
    """Return the power of a density of G05 in each bin of 1 / `SHORT_S` around its range."""
    low, high = (round(limit * SHORT_S) for limit in QUANTILES_HZ)
    whole = INTEGRALS[name](*QUANTILES_HZ)
    return {
        k: QUANTILES_UV**2 * INTEGRALS[name]((k - 0.5) / SHORT_S, (k + 0.5) / SHORT_S) / whole
        for k in range(low, high + 1)
    }


def warped(freq_hz: float, ratio: float, rate_hz: int = RATE_HZ) -> float:
    """Return the frequency whose tangent is a multiple of that of another (bilinear transform)."""
    return rate_hz / pi * atan(ratio * tan(pi * freq_hz / rate_hz))


ORDERS = range(1, 9)
CUTOFF_HZ = 30.0
FILTERED_UV = 30.0
#: Tones apart from a notch's edge on either side, Hz: a straight line between them is good enough.
BESIDE_EDGE_HZ = 0.01


def notch_edges_hz(line_hz: float, width_hz: float) -> tuple[float, float]:
    """Return where a second-order notch halves the power: ``width_hz`` apart around the line.

    With tangents t = tan(pi f / fs): t1 t2 = t0^2, and tan(pi width / fs) = (t2 - t1) / (1 + t0^2)
    (Orfanidis 1996, section 11.3).
    """
    middle = tan(pi * line_hz / RATE_HZ)
    apart = tan(pi * width_hz / RATE_HZ) * (1 + middle**2)
    lower = (sqrt(apart**2 + 4 * middle**2) - apart) / 2
    return tuple(RATE_HZ / pi * atan(t) for t in (lower, lower + apart))  # type: ignore[return-value]


def filter_tones() -> dict[str, float]:
    """Return name -> Hz of the tones that are filtered; ``half_n`` lies where D04 says for n."""
    tones = {"cutoff": CUTOFF_HZ, "octave": warped(CUTOFF_HZ, 2.0)}
    for order in (1, 2, 4):
        tones[f"half_{order}"] = warped(CUTOFF_HZ, entry("D04").expected[f"ratio_n{order}"])
    for line in (50, 60):
        tones[f"line_{line}"] = line
        for side, edge in zip(("low", "high"), notch_edges_hz(line, line / 30), strict=True):
            tones[f"{side}_{line}_a"] = edge - BESIDE_EDGE_HZ
            tones[f"{side}_{line}_b"] = edge + BESIDE_EDGE_HZ
    return tones


PULSES = (70, 72, 100, 120, 180)
PULSE_RATE_HZ, PULSE_Q = 125, 0.005
PULSE_MMHG, PULSE_MEAN_MMHG = 40.0, 80.0
BREATHS_HZ, BREATHS_MMHG = 0.2, 1.5
_RISE, _FALL = 0.05, 0.3  # time constants of a beat, as shares of its length


def pulse_amplitudes(harmonics: int) -> Complexes:
    """Return the complex amplitudes of a beat that rises and falls by exponentials, mmHg.

    Of exp(-u / fall) - exp(-u / b), u from 0 to 1 over a beat and 1 / b = 1 / fall + 1 / rise:
    twice the integral over u of the beat times exp(-2 pi i k u), in closed form.
    """
    k = np.arange(1, harmonics + 1)

    def decay(rate: float) -> Complexes:
        return np.asarray(2 * (1 - np.exp(-rate)) / (rate + 2j * pi * k))

    return np.asarray(PULSE_MMHG * (decay(1 / _FALL) - decay(1 / _FALL + 1 / _RISE)))


def pulse_wave(per_minute: float, *, ventilated: bool = False) -> Floats:
    """Return a pressure with all harmonics below Nyquist, as an anti-alias filter leaves it."""
    t, f = seconds(PULSE_RATE_HZ, SHORT_S), per_minute / 60
    x = np.full(t.size, PULSE_MEAN_MMHG)
    for k, amplitude in enumerate(pulse_amplitudes(int(0.99 * PULSE_RATE_HZ / 2 / f)), 1):
        x += np.real(amplitude * np.exp(2j * pi * k * f * t))
    wave: Floats = x + BREATHS_MMHG * np.cos(2 * pi * BREATHS_HZ * t) * ventilated
    return wave


STANDARD_RATE_HZ, STANDARD_Q = 1000, 0.0001

#: What 24 bits hold evenly around 0, in any unit; and a swing around a pressure, as a share of it.
BDF_LIMIT, BDF_TOP = 200.0, (1 << 23) - 1
SWING, SWING_HZ = 0.2, 0.5


def standard_pulses() -> dict[str, Floats]:
    """Return the pulses of H09, one a second; samples lie half a step from the square's edges."""
    u = (seconds(STANDARD_RATE_HZ, SHORT_S) + 0.5 / STANDARD_RATE_HZ) % 1
    return {
        "half_rectified": np.maximum(np.sin(2 * pi * u), 0.0),
        "square": np.where(u < 0.5, 1.0, -1.0),
        "triangle": 4 * np.abs(u - 0.5) - 1,
    }


def write_edf(path: Path, made: Iterable[Made]) -> None:
    """Write signals as EDF+C, 16 bits, each in its own steps."""
    signals = [
        WrittenSignal(m.name, m.unit, Fraction(m.rate_hz), m.x, *limits_of(m.q)) for m in made
    ]
    write_recording(path, signals, START)


def limits_of(q: float) -> tuple[float, float]:
    """Return what the lowest and the highest of 2^16 digital values stand for."""
    low, high = (float(f"{digital * q:.7g}") for digital in (-(1 << 15), (1 << 15) - 1))
    return low, high
