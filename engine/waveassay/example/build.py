"""From the study to its recordings, and to the table of what was planted in them."""

from collections.abc import Iterator
from fractions import Fraction
from pathlib import Path

import numpy as np

from waveassay.contract import Bools, Floats, Interval, number_text
from waveassay.example import study
from waveassay.example.signals import (
    Course,
    falling,
    hill,
    noise,
    pulse_wave,
    uniform,
    with_power,
)
from waveassay.example.study import Volunteer
from waveassay.recording import Annotation
from waveassay.recording.write import WrittenSignal, write_recording

SEED = 20310304
COLUMNS = ("recording", "signal", "condition", "quantity", "value", "unit")
Row = tuple[str, str, str, str, float, str]


def write_volunteer(path: Path, one: Volunteer) -> None:
    """Write one recording."""
    number = study.VOLUNTEERS.index(one)
    site = one.site
    eeg = [_eeg(one, (SEED, number, 1)), _eeg(one, (SEED, number, 2), comes_off=True)]
    values = [eeg[0] / site.uv_per_unit, eeg[1] / site.uv_per_unit, _pressure(one, number)]
    labels = (site.left, site.right, site.artery)
    limits = ((-site.limit, site.limit), (-site.limit, site.limit), (-50.0, 300.0))
    signals = [
        WrittenSignal(
            label=label,
            unit="mmHg" if label == site.artery else site.unit,
            rate_hz=Fraction(_rate_hz(one, label)),
            x=x[_recorded(one, _rate_hz(one, label))],
            physical_min=low,
            physical_max=high,
        )
        for label, x, (low, high) in zip(labels, values, limits, strict=True)
    ]
    write_recording(path, signals, one.start, annotations=_annotations(one), pieces=_pieces(one))


def _rate_hz(one: Volunteer, label: str) -> int:
    return study.PRESSURE_RATE_HZ if label == one.site.artery else one.site.rate_hz


def _time_s(one: Volunteer, rate_hz: int) -> Floats:
    return np.arange(one.stop_s * rate_hz) / rate_hz


def _within(time_s: Floats, span: tuple[int, int] | None) -> Bools:
    low, high = span or (0, 0)
    return (time_s >= low) & (time_s < high)


def _recorded(one: Volunteer, rate_hz: int) -> Bools:
    return ~_within(_time_s(one, rate_hz), one.gap_s)


def _eeg(one: Volunteer, seed: tuple[int, ...], *, comes_off: bool = False) -> Floats:
    """Return one EEG signal, uV: slow and alpha waves that change, on a background that does not.

    The planted powers are exact over what is recorded while the electrode is on. The alpha waves
    of baseline and of sedation are two noises, since their peaks differ.
    """
    rate_hz = one.site.rate_hz
    time_s = _time_s(one, rate_hz)
    flat, mains = (
        _within(time_s, span if comes_off else None) for span in (one.flat_s, one.mains_s)
    )
    baseline = _within(time_s, study.BASELINE_S)
    sedation = _within(time_s, one.sedation_s) & _recorded(one, rate_hz) & ~flat & ~mains
    low_hz, high_hz = study.BACKGROUND_HZ
    total = noise(falling(study.BACKGROUND, low_hz, high_hz), rate_hz, time_s.size, (*seed, 0))
    shape = hill(study.SLOW_HZ, study.SLOW_HALF_WIDTH_HZ)
    slow = noise(shape, rate_hz, time_s.size, (*seed, 1))
    total += slow * with_power(slow, baseline, sedation, one.slow_uv2)
    for condition in (0, 1):
        shape = hill(one.alpha_hz[condition], study.ALPHA_HALF_WIDTH_HZ)
        alpha = noise(shape, rate_hz, time_s.size, (*seed, 2 + condition))
        powers = (
            one.alpha_uv2[0] if condition == 0 else 0.0,
            one.alpha_uv2[1] if condition == 1 else 0.0,
        )
        total += alpha * with_power(alpha, baseline, sedation, powers)
    # An electrode that has come off leaves nothing, then mains.
    total[flat] = 0.0
    total[mains] = study.MAINS_UV * np.sin(2 * np.pi * ((study.MAINS_HZ * time_s[mains]) % 1.0))
    return total


def _pressure(one: Volunteer, number: int) -> Floats:
    """Return the arterial pressure, mmHg: mean, pulse wave, ventilator, a little noise."""
    time_s = _time_s(one, study.PRESSURE_RATE_HZ)

    def course(pair: tuple[float, float]) -> Course:
        return Course(pair[0], pair[1], study.LEAVES_S, study.STABLE_S)

    cycles = course(one.pulse_per_min).integral(time_s) / 60
    amplitude = course(one.pulse_mmhg).at(time_s)
    breath = np.cos(2 * np.pi * ((one.breaths_per_min / 60 * time_s) % 1.0))
    spread = 2 * uniform((SEED, number, 3), time_s.size) - 1
    pressure: Floats = (
        course(one.pressure_mmhg).at(time_s)
        + pulse_wave(cycles, amplitude, study.HARMONICS, study.PHASES_DEG)
        + study.VENTILATOR_MMHG * breath
        + study.PRESSURE_NOISE_MMHG * spread
    )
    return pressure


def _annotations(one: Volunteer) -> list[Annotation]:
    texts = {
        "eyes closed": study.CLOSED_S,
        "infusion starts": study.LEAVES_S - 5,
        "stable level": study.STABLE_S,
        "end of level": one.end_of_level_s,
    }
    if one.site is study.HILLSIDE:  # another hand, another way of writing
        texts = {text.capitalize(): at for text, at in texts.items()}
    return [Annotation(Fraction(at), None, text) for text, at in texts.items()]


def _pieces(one: Volunteer) -> list[Interval] | None:
    if one.gap_s is None:
        return None
    first, last = map(Fraction, one.gap_s)
    return [Interval(Fraction(0), first), Interval(last, Fraction(one.stop_s))]


def planted() -> Iterator[Row]:
    """Yield what was planted, one number a row."""
    for one in study.VOLUNTEERS:
        for signal in ("frontal_left", "frontal_right"):
            yield from _planted_eeg(one, signal)
        yield from _planted_pressure(one)
        yield from _planted_faults(one)


def _planted_eeg(one: Volunteer, signal: str) -> Iterator[Row]:
    for index, condition in enumerate(("baseline", "sedation")):
        here = (one.recording, signal, condition)
        yield (*here, "slow_power", one.slow_uv2[index], "uV^2")
        yield (*here, "alpha_power", one.alpha_uv2[index], "uV^2")
        yield (*here, "alpha_peak", one.alpha_hz[index], "Hz")
        yield (*here, "background_density_at_1_hz", study.BACKGROUND, "uV^2/Hz")
    change = (one.recording, signal, "sedation")
    yield (*change, "slow_power_change", _decibels(one.slow_uv2), "dB")
    yield (*change, "alpha_power_change", _decibels(one.alpha_uv2), "dB")


def _decibels(pair: tuple[float, float]) -> float:
    return round(float(10 * np.log10(pair[1] / pair[0])), 4)


def _planted_pressure(one: Volunteer) -> Iterator[Row]:
    for index, condition in enumerate(("baseline", "sedation")):
        here = (one.recording, "artery", condition)
        yield (*here, "mean_pressure", one.pressure_mmhg[index], "mmHg")
        yield (*here, "pulse_rate", one.pulse_per_min[index], "1/min")
        for k, share in enumerate(study.HARMONICS, start=1):
            yield (*here, f"amplitude_{k}", round(share * one.pulse_mmhg[index], 6), "mmHg")
        for k, phase in enumerate(study.PHASES_DEG[1:], start=2):
            yield (*here, f"phase_{k}", phase, "deg")
        yield (*here, "ventilator_rate", one.breaths_per_min, "1/min")
        yield (*here, "ventilator_amplitude", study.VENTILATOR_MMHG, "mmHg")


def _planted_faults(one: Volunteer) -> Iterator[Row]:
    faults = (("", "gap", one.gap_s), ("frontal_right", "flat", one.flat_s))
    for signal, what, span in (*faults, ("frontal_right", "mains", one.mains_s)):
        if span is not None:
            yield one.recording, signal, "", f"{what}_start", span[0], "s"
            yield one.recording, signal, "", f"{what}_stop", span[1], "s"


def planted_csv() -> str:
    """Return the table of what was planted."""
    lines = [",".join(COLUMNS)]
    for *names, value, unit in planted():
        lines.append(",".join([*map(str, names), number_text(float(value)), unit]))
    return "\n".join(lines) + "\n"
