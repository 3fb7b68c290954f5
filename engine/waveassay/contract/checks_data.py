"""Random data of every kind, for the checks that a stage's author runs."""

from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np

from waveassay.contract.kinds import (
    Condition,
    Data,
    Epochs,
    Exclusion,
    Features,
    Floats,
    Interval,
    Kind,
    Rows,
    Signal,
    Spectra,
    merged,
)
from waveassay.contract.spec import (
    ColumnSpec,
    EpochsSpec,
    FeaturesSpec,
    SignalSpec,
    Spec,
    SpectraSpec,
)

RATES_HZ = (Fraction(128), Fraction(250), Fraction(500))
UNITS = ("uV", "mmHg", "mV")

_EPOCH_S = 4
_SEED = 20240229


@dataclass(frozen=True)
class Given:
    """Data with what a recipe would have said of them."""

    data: Data
    spec: Spec


def given(kind: Kind, unit: str, rate_hz: Fraction, length_s: int = 60) -> Given:
    """Return random data of a kind.

    Raises
    ------
    ValueError
        For the kinds that no step takes.
    """
    signal = random_signal(unit, rate_hz, length_s)
    spec = SignalSpec(signal.name, unit, "eeg", rate_hz)
    if kind is Kind.SIGNALS:
        return Given(signal, spec)
    if kind is Kind.EPOCHS:
        return Given(random_epochs(signal), EpochsSpec(spec, float(_EPOCH_S), _EPOCH_S / 2))
    averaged = kind in (Kind.AVERAGES, Kind.AVERAGE_FEATURES)
    rows = _averaged_rows(signal) if averaged else random_epochs(signal).rows
    if kind in (Kind.SPECTRA, Kind.AVERAGES):
        spectra = _random_spectra(unit, rate_hz, rows)
        return Given(
            spectra,
            SpectraSpec(
                signal=spec,
                window_s=float(_EPOCH_S),
                resolution_hz=spectra.resolution_hz,
                bin_hz=spectra.bin_hz,
                top_hz=float(spectra.freq_hz[-1]),
                averaged=averaged,
            ),
        )
    if kind in (Kind.FEATURES, Kind.AVERAGE_FEATURES):
        columns = (ColumnSpec("low", unit, "random"), ColumnSpec("high", unit, "random"))
        return Given(_random_features(rows, columns), FeaturesSpec(spec, columns, averaged))
    raise ValueError(f"no step takes {kind}")


def random_signal(unit: str, rate_hz: Fraction, length_s: int) -> Signal:
    """Return a whole piece: noise, drift, offset and a rhythm, with masks, artefacts and flats.

    Artefacts, flat stretches and masks lie every ten seconds or so, and so about the borders of
    stretches, wherever they are.
    """
    calm = calm_signal(unit, rate_hz, length_s)
    rng = np.random.default_rng([_SEED, int(rate_hz), length_s, 1])
    x, start_s = calm.x.copy(), calm.start_s
    masks = []
    for k in range(1, length_s // 10):
        centre_s = 10 * k + Fraction(int(rng.integers(-800, 800)), 1000)
        at = int(centre_s * rate_hz)
        wide = int(rate_hz * Fraction(int(rng.integers(1, 2200)), 1000)) + 1
        if k % 4 == 0:
            x[at : at + 3] += 2000 * rng.standard_normal(3)
        elif k % 4 == 2:
            x[at : at + wide] = x[at]
        elif k % 4 == 3:
            mask_s = start_s + centre_s
            masks.append(Exclusion(mask_s, mask_s + wide / rate_hz, f"planted {k % 3}"))
    return replace(calm, x=x, excluded=merged(masks))


def calm_signal(unit: str, rate_hz: Fraction, length_s: int) -> Signal:
    """Return a whole piece of noise, drift, offset and a rhythm, much the same throughout."""
    rng = np.random.default_rng([_SEED, int(rate_hz), length_s])
    count = int(length_s * rate_hz)
    time_s = np.arange(count) / float(rate_hz)
    drift = np.cumsum(rng.standard_normal(count)) * 20 / np.sqrt(count)
    rhythm = 15 * np.sin(2 * np.pi * 10.3 * time_s) + 8 * np.sin(2 * np.pi * 1.2 * time_s)
    x = 40 + 10 * rng.standard_normal(count) + drift + rhythm
    start_s = Fraction(1237, 1000)
    stop_s = start_s + count / rate_hz
    some = Fraction(1, 3) * length_s
    conditions = (
        Condition(start_s, stop_s, "all"),
        Condition(start_s + Fraction(33, 10), start_s + 2 * some, "early"),
        Condition(start_s + some, stop_s - 1, "late"),
    )
    piece = Interval(start_s, stop_s)
    return Signal("random", unit, rate_hz, start_s, x, piece, (), conditions)


def random_epochs(signal: Signal) -> Epochs:
    """Return half-overlapping epochs of a piece, some of them not kept."""
    length = int(_EPOCH_S * signal.rate_hz)
    rng = np.random.default_rng([_SEED, signal.x.size])
    starts = np.arange(0, signal.x.size - length + 1, length // 2, dtype=np.int64)
    first = np.repeat(starts, 2)
    condition = ("all", "late") * starts.size
    kept = np.repeat(rng.random(starts.size) > 0.2, 2)
    reason = tuple("" if keep else "planted" for keep in kept)
    return Epochs(signal, length, first, condition, kept, reason)


def _averaged_rows(signal: Signal) -> Rows:
    names = tuple(condition.name for condition in signal.conditions)
    start_s = np.array([float(c.start_s) for c in signal.conditions])
    lengths = np.array([float(c.length_s) for c in signal.conditions])
    kept = np.array([True, True, False])
    reason = ("", "", "no epoch kept")
    return Rows(start_s, lengths, names, kept, reason, np.array([50, 30, 0], np.int64))


def _random_spectra(unit: str, rate_hz: Fraction, rows: Rows) -> Spectra:
    rng = np.random.default_rng([_SEED, len(rows), int(rate_hz)])
    freq_hz = np.arange(int(_EPOCH_S * rate_hz) // 2 + 1) / _EPOCH_S
    hump = 30 * np.exp(-0.5 * ((freq_hz - 10) / 1.5) ** 2)
    level = 100 / (1 + freq_hz) ** 1.5 + hump + 0.01
    density = level * rng.chisquare(6, (len(rows), freq_hz.size)) / 6
    density[~rows.kept] = np.nan
    dof = np.where(rows.kept, 6.0 * rows.epochs, np.nan)
    return Spectra("random", unit, rows, freq_hz, density, 0.75, dof)


def _random_features(rows: Rows, columns: tuple[ColumnSpec, ...]) -> Features:
    rng = np.random.default_rng([_SEED, len(rows), 7])

    def column() -> Floats:
        return np.where(rows.kept, rng.standard_normal(len(rows)), np.nan)

    values = {item.part: column() for item in columns}
    return Features("random", rows, values, ("",) * len(rows))
