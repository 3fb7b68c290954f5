"""Epochs and specs for tests of the spectrum stages."""

from collections.abc import Sequence
from fractions import Fraction
from typing import TypeVar

import numpy as np

from waveassay.contract import (
    Epochs,
    EpochsSpec,
    Findings,
    Floats,
    Interval,
    Params,
    Rows,
    Signal,
    SignalSpec,
    Spectra,
)

P = TypeVar("P", bound=Params)


def params_of(kind: type[P], **values: object) -> P:
    """Return parameters from what a recipe would say."""
    return kind.model_validate(values)


def epochs_of(
    x: Floats,
    *,
    rate_hz: int = 128,
    length: int = 512,
    hop: int = 256,
    kept: Sequence[bool] | None = None,
    condition: str = "all",
) -> Epochs:
    """Cut a signal that starts at 10 s into epochs."""
    start, rate = Fraction(10), Fraction(rate_hz)
    piece = Interval(start, start + x.size / rate)
    signal = Signal("frontal", "uV", rate, start, x, piece)
    first = np.arange(0, x.size - length + 1, hop, dtype=np.int64)
    keep = np.ones(first.size, np.bool_) if kept is None else np.array(kept, np.bool_)
    return Epochs(
        signal=signal,
        length=length,
        first=first,
        condition=(condition,) * first.size,
        kept=keep,
        reason=tuple("" if k else "amplitude" for k in keep),
    )


def spectra_of(
    density: Floats,
    *,
    dof: float = 2.0,
    length_s: float = 4.0,
    hop_s: float = 4.0,
    kept: Sequence[bool] | None = None,
    condition: Sequence[str] | None = None,
    bandwidth_time: float = 1.5,
) -> Spectra:
    """Return spectra of epochs with these densities."""
    n, f = density.shape
    keep = np.ones(n, np.bool_) if kept is None else np.array(kept, np.bool_)
    values = np.where(keep[:, None], density, np.nan)
    rows = Rows(
        start_s=np.arange(n, dtype=np.float64) * hop_s + 10,
        duration_s=np.full(n, length_s),
        condition=("all",) * n if condition is None else tuple(condition),
        kept=keep,
        reason=tuple("" if k else "amplitude" for k in keep),
        epochs=np.ones(n, np.int64),
    )
    return Spectra(
        signal="frontal",
        unit="uV",
        rows=rows,
        freq_hz=np.arange(f) / length_s,
        density=values,
        resolution_hz=bandwidth_time / length_s,
        dof=np.where(keep, dof, np.nan),
    )


def epochs_spec(length_s: float = 4.0, rate_hz: int | Fraction | None = 128) -> EpochsSpec:
    """Return the spec of epochs."""
    rate = None if rate_hz is None else Fraction(rate_hz)
    return EpochsSpec(SignalSpec("frontal", "uV", "eeg", rate), length_s, length_s / 2)


class Found:
    """Collects what a spec refuses and warns of."""

    def __init__(self) -> None:
        self.errors: list[tuple[str, str]] = []
        self.warnings: list[tuple[str, str]] = []

    @property
    def findings(self) -> Findings:
        """What to hand to a spec."""
        return Findings(
            on_refuse=lambda message, at: self.errors.append((at, message)),
            on_warn=lambda message, at: self.warnings.append((at, message)),
        )
