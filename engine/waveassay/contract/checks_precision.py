"""Proof, on random data, that a stage takes samples and densities in float32 as well as float64."""

from collections.abc import Mapping
from dataclasses import fields, is_dataclass, replace
from typing import Any

import numpy as np

from waveassay.contract.agreement import disagreements
from waveassay.contract.checks_data import Given
from waveassay.contract.checks_running import announced, run_whole
from waveassay.contract.kinds import Epochs, Figure, Signal, Spectra
from waveassay.contract.params import Params
from waveassay.contract.stage import Stage

#: What float32 may change, as a share of the largest number of the row of densities, or of the
#: column of features.
SINGLE_TOLERANCE = 1e-4


def in_single(case: Given) -> Given | None:
    """Return the same data as a recipe of standard precision hands them on; None where no other."""
    data = case.data
    if isinstance(data, Epochs):
        x = data.signal.x.astype(np.float32)
        return replace(case, data=replace(data, signal=replace(data.signal, x=x)))
    if isinstance(data, Spectra):
        return replace(case, data=replace(data, density=data.density.astype(np.float32)))
    return None


def prove_single(stage: Stage, params: Params, double: Given, single: Given) -> None:
    """Require that float32 gives what float64 does: rows to the letter, numbers nearly."""
    out, expected = (run_whole(stage, params, case.data) for case in (single, double))
    for text in disagreements(announced(stage, params, single.spec), single.data, out):
        raise AssertionError(f"{stage.name}: given float32, {text}")
    found = _apart(out, expected)
    assert not found, (
        f"{stage.name}: given float32 and float64, {found}. Sum in float64 "
        "(np.sum(..., dtype=np.float64)), and compare with no threshold below float32's rounding"
    )


def _apart(one: Any, other: Any, at: str = "output") -> str:
    """Return where two outputs are first too far apart, or an empty text."""
    if type(one) is not type(other):
        return f"{at} is a {type(one).__name__} and a {type(other).__name__}"
    if isinstance(one, Figure | Signal):  # a picture, or the samples that were given
        return ""
    if isinstance(one, np.ndarray):
        return _array_apart(one, other, at)
    if isinstance(one, Mapping):
        if list(one) != list(other):
            return f"{at} has the names {list(one)} and {list(other)}"
        pairs = [(f"{at}[{name!r}]", one[name], other[name]) for name in one]
    elif is_dataclass(one) and not isinstance(one, type):
        names = [item.name for item in fields(one)]
        pairs = [(f"{at}.{name}", getattr(one, name), getattr(other, name)) for name in names]
    else:
        return "" if one == other else f"{at} is {one!r:.200} and {other!r:.200}"
    return next(filter(None, (_apart(a, b, place) for place, a, b in pairs)), "")


def _array_apart(one: np.ndarray[Any, Any], other: np.ndarray[Any, Any], at: str) -> str:
    if one.shape != other.shape:
        return f"{at} has {one.shape} and {other.shape}"
    if one.dtype.kind != "f":
        unequal = np.flatnonzero(one.ravel() != other.ravel())
        return f"{at} differs at {unequal[0]}" if unequal.size else ""
    if not one.size:
        return ""
    missing = np.isnan(one)
    if not np.array_equal(missing, np.isnan(other)):
        return f"{at} lacks other values"
    one, other = (np.where(missing, 0, array).astype(np.float64) for array in (one, other))
    allowed = SINGLE_TOLERANCE * np.abs(other).max(axis=-1, keepdims=True)
    far = np.flatnonzero(np.abs(one - other) > allowed)
    if not far.size:
        return ""
    return (
        f"{at} differs at {far[0]}: {one.ravel()[far[0]]!r} and {other.ravel()[far[0]]!r}, more "
        f"than {SINGLE_TOLERANCE:g} of the largest apart"
    )
