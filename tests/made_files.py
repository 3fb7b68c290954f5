"""The recordings of the published run: signals by file."""

from fractions import Fraction
from pathlib import Path

import numpy as np

from check_values import entry
from made_recordings import (
    ALIASES,
    BDF_LIMIT,
    BDF_TOP,
    COARSE_Q_UV,
    EPOCH,
    FILTERED_UV,
    HALFWAY_HZ,
    LEVELS_UV2,
    LONG_S,
    PULSE_Q,
    PULSE_RATE_HZ,
    PULSES,
    QUANTILES_Q_UV,
    QUANTILES_RATE_HZ,
    RATE_HZ,
    SHORT_S,
    STANDARD_Q,
    STANDARD_RATE_HZ,
    START,
    SWING,
    SWING_HZ,
    Made,
    alias_name,
    ar2_powers,
    filter_tones,
    pulse_wave,
    quantile_powers,
    seconds,
    standard_pulses,
    tone,
    with_powers,
    write_edf,
)
from waveassay.contract import Floats
from waveassay.recording.write import WrittenSignal, write_recording


def write_all(folder: Path) -> dict[str, str]:
    """Write all recordings, and return signal -> unit of its file."""
    units: dict[str, str] = {}
    for name, signals in (("eeg", eeg()), ("noise", noise()), ("pulse", pulses())):
        write_edf(folder / f"{name}.edf", signals)
        units |= {signal.name: signal.unit for signal in signals}
    units |= write_pressures(folder / "pressures.bdf")
    return units | write_converter(folder / "converter.edf")


def eeg() -> list[Made]:
    """Return signals of 100 s, of several rates."""
    made = {
        "tone": tone(10),
        "halfway": tone(HALFWAY_HZ),
        "two_lines": tone(10) + tone(30),
        "levels": np.sum(
            [tone(f, amplitude=(2 * p) ** 0.5) for f, p in LEVELS_UV2.items()], axis=0
        ),
        "offset_noise": _white(3, 5, SHORT_S) + 2,
        "impulses": np.tile(np.where(np.arange(EPOCH) == 7, 30.0, 0.0), SHORT_S // 2),
        "steady": np.full(RATE_HZ * SHORT_S, 5.0),
    }
    for name, freq_hz in filter_tones().items():
        made[name] = tone(freq_hz, amplitude=FILTERED_UV)
    signals = [Made(name, RATE_HZ, x) for name, x in made.items()]
    for key in ALIASES:
        freq_hz, rate_hz = map(int, key.split("@"))
        signals.append(Made(alias_name(key), rate_hz, tone(freq_hz, rate_hz)))
    for name in entry("G05").expected:
        x = with_powers(quantile_powers(name), QUANTILES_RATE_HZ * SHORT_S, 1, 5)
        signals.append(Made(name, QUANTILES_RATE_HZ, x, QUANTILES_Q_UV))
    return [*signals, autoregressive()]


def autoregressive() -> Made:
    """Return the process of C12 as one of its periodic samples with exactly its spectrum."""
    process = entry("C12").input
    powers = ar2_powers(process["phi"], process["sigma2"], EPOCH)
    return Made("ar2", RATE_HZ, with_powers(powers, EPOCH, SHORT_S // 2, 12), 0.0002)


def _white(sigma: float, seed: int, length_s: int) -> Floats:
    return np.random.default_rng(seed).normal(0, sigma, RATE_HZ * length_s)


def noise() -> list[Made]:
    """Return signals that are long enough for the published tolerances of random errors."""
    t = np.arange(RATE_HZ * LONG_S) / RATE_HZ
    # Both move by many steps a sample, so that no rounding is like the one before.
    two_tones = 200 * np.sin(2 * np.pi * 7.123456 * t) + 150 * np.sin(2 * np.pi * 10.98765 * t)
    return [
        Made("white_3", RATE_HZ, _white(entry("C08").input["sigma"], 8, LONG_S)),
        Made("white_1", RATE_HZ, _white(entry("B08").input["sigma"], 1982, LONG_S), 0.0002),
        Made("coarse", RATE_HZ, two_tones, COARSE_Q_UV),
    ]


def pulses() -> list[Made]:
    """Return arterial pressures, the one of 70 a minute with a ventilator, and standard pulses."""
    signals = [
        Made(f"pulse_{n}", PULSE_RATE_HZ, pulse_wave(n, ventilated=n == 70), PULSE_Q, "mmHg")
        for n in PULSES
    ]
    for name, x in standard_pulses().items():
        signals.append(Made(name, STANDARD_RATE_HZ, x, STANDARD_Q, "mmHg"))
    return signals


def pressures() -> list[Made]:
    """Return the same pressure, 100 mmHg and a swing of a fifth of it, in three units."""
    values = entry("H08").expected
    kpa = values["100_mmHg_in_kPa"]
    cmh2o = 100 * values["mmHg_to_Pa_conventional"] / values["cmH2O_to_Pa"]
    wave = 1 + SWING * np.sin(2 * np.pi * SWING_HZ * seconds(RATE_HZ, SHORT_S) + 0.3)
    means = {"in_kpa": (kpa, "kPa"), "in_cmh2o": (cmh2o, "cmH2O"), "in_mmhg": (100.0, "mmHg")}
    return [
        Made(name, RATE_HZ, mean * wave, BDF_LIMIT / BDF_TOP, unit)
        for name, (mean, unit) in means.items()
    ]


def write_pressures(path: Path) -> dict[str, str]:
    """Write the pressures as BDF+, whose 24 bits leave the factor between units to be seen."""
    made = pressures()
    signals = [
        WrittenSignal(
            m.name, m.unit, Fraction(m.rate_hz), m.x, -BDF_LIMIT, BDF_LIMIT, -BDF_TOP, BDF_TOP
        )
        for m in made
    ]
    write_recording(path, signals, START, bdf=True)
    return {m.name: m.unit for m in made}


def write_converter(path: Path) -> dict[str, str]:
    """Write what a 12 bit converter gave (G13) as plain EDF: digital 0, 1, and both its limits."""
    given = entry("G13").input
    low, high = given["digital_min"], given["digital_max"]
    bottom, top = given["physical_min_uV"], given["physical_max_uV"]
    count = RATE_HZ * SHORT_S
    half = np.arange(count) < count // 2
    digital = {"zero": np.zeros(count), "one": np.ones(count), "limits": np.where(half, high, low)}
    signals = [
        WrittenSignal(
            name,
            "uV",
            Fraction(RATE_HZ),
            bottom + (d - low) * (top - bottom) / (high - low),
            bottom,
            top,
            low,
            high,
        )
        for name, d in digital.items()
    ]
    write_recording(path, signals, START, plain=True)
    return dict.fromkeys(digital, "uV")
