"""What every feature says of its rows: units, and why a value is missing."""

from collections.abc import Iterable

import numpy as np

from waveassay.contract import Bools, Floats, Rows, SpectraSpec


def squared(unit: str) -> str:
    """Return the text of a unit squared: ``uV^2``, ``(m/s)^2``."""
    return f"{unit}^2" if unit.isalpha() else f"({unit})^2"


def density_unit(unit: str) -> str:
    """Return the unit of a spectral density of a signal in ``unit``."""
    return f"{squared(unit)}/Hz"


def of_what(given: SpectraSpec) -> str:
    """Return the end of a column's meaning, where the spectrum is an average."""
    if not given.averaged:
        return ""
    return ", of the average of decibels" if given.in_decibels else ", of the averaged spectrum"


def missing_reasons(rows: Rows, found: Iterable[tuple[Bools, str]]) -> tuple[str, ...]:
    """Return one text a row; rows that are not kept have their own reason and get none here."""
    texts = [""] * len(rows)
    for where, text in found:
        for index in (where & rows.kept).nonzero()[0].tolist():
            texts[index] = f"{texts[index]}; {text}" if texts[index] else text
    return tuple(texts)


def decibels(power: Floats) -> Floats:
    """Return 10 log10 of power, NaN where there is none (no number stands for minus infinity)."""
    level = np.full(power.shape, np.nan)
    np.log10(power, out=level, where=power > 0)
    return 10.0 * level
