"""Spectra and epochs made by hand, for the tests of features and exports."""

from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction

import numpy as np
from numpy.typing import ArrayLike

from waveassay.contract import (
    Epochs,
    EpochsSpec,
    Findings,
    Floats,
    Interval,
    Rows,
    Signal,
    SignalSpec,
    Spectra,
    SpectraSpec,
)


def bins(count: int, bin_hz: float) -> Floats:
    """Return bin centres from 0."""
    return np.arange(count, dtype=np.float64) * bin_hz


def spectra(
    density: ArrayLike,
    bin_hz: float = 0.25,
    *,
    kept: ArrayLike | None = None,
    condition: Sequence[str] | None = None,
    start_s: ArrayLike | None = None,
    duration_s: float = 4.0,
    unit: str = "uV",
    dof: float = 10.0,
) -> Spectra:
    """Return spectra with a bin every ``bin_hz`` from 0; rows that are not kept are NaN."""
    values = np.array(density, np.float64, ndmin=2)
    count = values.shape[0]
    keep = np.ones(count, np.bool_) if kept is None else np.array(kept, np.bool_)
    values[~keep] = np.nan
    rows = Rows(
        start_s=bins(count, duration_s) if start_s is None else np.array(start_s, np.float64),
        duration_s=np.full(count, duration_s),
        condition=("all",) * count if condition is None else tuple(condition),
        kept=keep,
        reason=tuple("" if k else "amplitude" for k in keep),
        epochs=np.ones(count, np.int64),
    )
    freq = bins(values.shape[1], bin_hz)
    return Spectra("frontal", unit, rows, freq, values, 2 * bin_hz, np.full(count, dof))


def spectra_spec(
    *, averaged: bool = False, pass_hz: tuple[float | None, float | None] = (None, None)
) -> SpectraSpec:
    """Return the spec of spectra of 4 s epochs at 128 Hz."""
    signal = SignalSpec("frontal", "uV", "eeg", Fraction(128), pass_hz)
    return SpectraSpec(signal, 4.0, 0.5, 0.25, 64.0, averaged=averaged)


def epochs_spec(length_s: float = 10.0, rate_hz: int = 125) -> EpochsSpec:
    """Return the spec of epochs of a pressure."""
    signal = SignalSpec("artery", "mmHg", "pressure", Fraction(rate_hz))
    return EpochsSpec(signal, length_s, length_s)


def epochs(
    x: Floats, rate_hz: int, length_s: float, *, kept: Sequence[bool] | None = None
) -> Epochs:
    """Return consecutive epochs of a signal of one piece."""
    length = int(length_s * rate_hz)
    count = x.size // length
    whole = Interval(Fraction(0), Fraction(x.size, rate_hz))
    signal = Signal("artery", "mmHg", Fraction(rate_hz), Fraction(0), np.array(x), whole)
    keep = np.ones(count, np.bool_) if kept is None else np.array(kept, np.bool_)
    return Epochs(
        signal=signal,
        length=length,
        first=np.arange(count) * length,
        condition=("all",) * count,
        kept=keep,
        reason=tuple("" if k else "flat" for k in keep),
    )


def some_rows(given: Spectra, rows: slice) -> Spectra:
    """Return a part of the rows, as a stretch of time would give it."""
    r = given.rows
    part = Rows(
        r.start_s[rows],
        r.duration_s[rows],
        r.condition[rows],
        r.kept[rows],
        r.reason[rows],
        r.epochs[rows],
    )
    return replace(given, rows=part, density=given.density[rows].copy(), dof=given.dof[rows])


class Collected:
    """Findings that are kept for looking at."""

    def __init__(self) -> None:
        self.refused: list[tuple[str, str]] = []
        self.warned: list[tuple[str, str]] = []
        self.findings = Findings(
            lambda message, at: self.refused.append((at, message)),
            lambda message, at: self.warned.append((at, message)),
        )

    @property
    def refused_at(self) -> list[str]:
        """Parameters that were refused."""
        return [at for at, _ in self.refused]

    @property
    def warned_at(self) -> list[str]:
        """Parameters that were warned of."""
        return [at for at, _ in self.warned]
