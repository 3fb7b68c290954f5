"""Whether what a step gives is what its spec announced."""

from collections.abc import Iterator
from math import isclose
from typing import Any

import numpy as np

from waveassay.contract.kinds import Epochs, Features, Signal, Spectra
from waveassay.contract.spec import EpochsSpec, FeaturesSpec, SignalSpec, SpectraSpec

_DOUBLE, _SINGLE = np.dtype(np.float64), np.dtype(np.float32)
_ANNOUNCED: dict[type, type] = {
    SignalSpec: Signal,
    EpochsSpec: Epochs,
    SpectraSpec: Spectra,
    FeaturesSpec: Features,
}


def disagreements(spec: object, taken: object, out: object) -> Iterator[str]:
    """Yield what does not agree between a step's spec and its output; nothing for an export.

    Parameters
    ----------
    spec : what was announced.
    taken : what the step was given.
    out : what it gave.
    """
    kind = _ANNOUNCED.get(type(spec))
    if kind is None:
        return
    if not isinstance(out, kind):
        yield f"its spec says {kind.__name__}, and {type(out).__name__} comes out"
        return
    for what, said, found in _said_and_found(spec, out):
        if said is not found and said != found and not _close(said, found):
            yield f"its spec says {what} {said}, and {found} comes out"
    if isinstance(out, Signal) and isinstance(taken, Signal):
        yield from _misplaced(taken, out)
    if isinstance(out, Features):
        yield from _gaps(out)
    yield from _imprecise(taken, out)


def _close(said: object, found: object) -> bool:
    if isinstance(said, float) and isinstance(found, float):
        return isclose(said, found, rel_tol=1e-9)
    return False


def _said_and_found(spec: object, out: object) -> tuple[tuple[str, object, object], ...]:
    if isinstance(spec, SignalSpec) and isinstance(out, Signal):
        return (
            ("name", spec.name, out.name),
            ("unit", spec.unit, out.unit),
            ("rate", spec.rate_hz, out.rate_hz),
        )
    if isinstance(spec, EpochsSpec) and isinstance(out, Epochs):
        return (
            ("length", spec.length_s, float(out.length / out.signal.rate_hz)),
            ("unit", spec.signal.unit, out.signal.unit),
            ("rate", spec.signal.rate_hz, out.signal.rate_hz),
        )
    if isinstance(spec, SpectraSpec) and isinstance(out, Spectra):
        return (
            ("name", spec.signal.name, out.signal),
            ("unit", spec.signal.unit, out.unit),
            ("resolution", spec.resolution_hz, out.resolution_hz),
            ("spacing", spec.bin_hz, out.bin_hz),
            ("highest frequency", spec.top_hz, float(out.freq_hz[-1])),
            ("densities", (len(out.rows), out.freq_hz.size), out.density.shape),
        )
    if isinstance(spec, FeaturesSpec) and isinstance(out, Features):
        sizes = {values.size for values in out.columns.values()} | {len(out.missing)}
        return (
            ("name", spec.signal.name, out.signal),
            ("columns", [column.part for column in spec.columns], list(out.columns)),
            ("one value a row:", {len(out.rows)}, sizes),
        )
    return ()


def _imprecise(taken: object, out: object) -> Iterator[str]:
    """Yield what is held in a precision that was not given: see `waveassay.contract.kinds`."""
    if isinstance(out, Signal) and out.x.dtype != _DOUBLE:
        yield (
            f"samples come out as {out.x.dtype}, and float64 is expected "
            "(Signal.with_samples sees to it)"
        )
    if isinstance(out, Spectra):
        given, held = _held(taken), out.density.dtype
        if held != _DOUBLE and (held != _SINGLE or given == _DOUBLE):
            allowed = "float64" if given == _DOUBLE else "float64 or float32"
            yield (
                f"densities come out as {held} of what is held as {given or 'arrays'}, and "
                f"{allowed} is expected"
            )


def _held(data: object) -> np.dtype[Any] | None:
    """Return how samples or densities are held; None where a step combines what it has."""
    if isinstance(data, Epochs):
        return data.signal.x.dtype
    if isinstance(data, Signal):
        return data.x.dtype
    return data.density.dtype if isinstance(data, Spectra) else None


def _misplaced(taken: Signal, out: Signal) -> Iterator[str]:
    if out.start_s != taken.start_s:
        yield f"the signal starts at {taken.start_s} s, and {out.start_s} s comes out"
    if out.x.size == taken.x.size and out.rate_hz == taken.rate_hz:
        return
    count = taken.x.size * out.rate_hz / taken.rate_hz
    if abs(out.x.size - count) >= 1:
        yield (
            f"{taken.x.size} samples at {float(taken.rate_hz):g} Hz are {float(count):g} at "
            f"{float(out.rate_hz):g} Hz, and {out.x.size} come out"
        )


def _gaps(out: Features) -> Iterator[str]:
    count, kept = len(out.rows), out.rows.kept
    columns = {part: x for part, x in out.columns.items() if x.size == count}
    if not columns or len(out.missing) != count:
        return
    absent = np.isnan(np.array(list(columns.values())))  # of all columns at once
    if not np.any(absent == out.rows.kept):
        return  # as it mostly is: values where rows are kept, and nowhere else
    for part in np.flatnonzero(~np.all(absent | kept, axis=-1)):
        yield f"column '{list(columns)[part]}' has values in rows that are not kept"
    for part in np.flatnonzero(np.any(absent & kept, axis=-1)):
        silent = [row for row in np.flatnonzero(absent[part] & kept) if not out.missing[row]]
        if silent:
            name = list(columns)[part]
            yield f"column '{name}' lacks a value in kept row {silent[0]}, and says no reason"
