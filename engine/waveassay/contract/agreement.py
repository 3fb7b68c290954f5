"""Whether what a step gives is what its spec announced."""

from collections.abc import Iterator
from math import isclose

import numpy as np

from waveassay.contract.kinds import Epochs, Features, Signal, Spectra
from waveassay.contract.spec import EpochsSpec, FeaturesSpec, SignalSpec, SpectraSpec

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
        same = said == found
        if isinstance(said, float) and isinstance(found, float):
            same = isclose(said, found, rel_tol=1e-9)
        if not same:
            yield f"its spec says {what} {said}, and {found} comes out"
    if isinstance(out, Signal) and isinstance(taken, Signal):
        yield from _misplaced(taken, out)
    if isinstance(out, Features):
        yield from _gaps(out)
    yield from _imprecise(taken, out)


def _said_and_found(spec: object, out: object) -> Iterator[tuple[str, object, object]]:
    if isinstance(spec, SignalSpec) and isinstance(out, Signal):
        yield "name", spec.name, out.name
        yield "unit", spec.unit, out.unit
        yield "rate", spec.rate_hz, out.rate_hz
    elif isinstance(spec, EpochsSpec) and isinstance(out, Epochs):
        yield "length", spec.length_s, float(out.length / out.signal.rate_hz)
        yield "unit", spec.signal.unit, out.signal.unit
        yield "rate", spec.signal.rate_hz, out.signal.rate_hz
    elif isinstance(spec, SpectraSpec) and isinstance(out, Spectra):
        yield "name", spec.signal.name, out.signal
        yield "unit", spec.signal.unit, out.unit
        yield "resolution", spec.resolution_hz, out.resolution_hz
        yield "spacing", spec.bin_hz, out.bin_hz
        yield "highest frequency", spec.top_hz, float(out.freq_hz[-1])
        yield "densities", (len(out.rows), out.freq_hz.size), out.density.shape
    elif isinstance(spec, FeaturesSpec) and isinstance(out, Features):
        yield "name", spec.signal.name, out.signal
        yield "columns", [column.part for column in spec.columns], list(out.columns)
        sizes = {values.size for values in out.columns.values()} | {len(out.missing)}
        yield "one value a row:", {len(out.rows)}, sizes


def _imprecise(taken: object, out: object) -> Iterator[str]:
    """Yield what is held in a precision that was not given: see `waveassay.contract.kinds`."""
    if isinstance(out, Signal) and out.x.dtype != np.float64:
        yield (
            f"samples come out as {out.x.dtype}, and float64 is expected "
            "(Signal.with_samples sees to it)"
        )
    if isinstance(out, Spectra):
        given = _held(taken)
        allowed = ("float64",) if given == "float64" else ("float64", "float32")
        if str(out.density.dtype) not in allowed:
            yield (
                f"densities come out as {out.density.dtype} of what is held as {given}, and "
                f"{' or '.join(allowed)} is expected"
            )


def _held(data: object) -> str:
    """Return how samples or densities are held; ``arrays`` where a step combines what it has."""
    if isinstance(data, Epochs):
        return str(data.signal.x.dtype)
    if isinstance(data, Signal):
        return str(data.x.dtype)
    return str(data.density.dtype) if isinstance(data, Spectra) else "arrays"


def _misplaced(taken: Signal, out: Signal) -> Iterator[str]:
    if out.start_s != taken.start_s:
        yield f"the signal starts at {taken.start_s} s, and {out.start_s} s comes out"
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
    for part in np.flatnonzero(~np.all(absent | kept, axis=-1)):
        yield f"column '{list(columns)[part]}' has values in rows that are not kept"
    for part in np.flatnonzero(np.any(absent & kept, axis=-1)):
        silent = [row for row in np.flatnonzero(absent[part] & kept) if not out.missing[row]]
        if silent:
            name = list(columns)[part]
            yield f"column '{name}' lacks a value in kept row {silent[0]}, and says no reason"
