"""Which precision a stage may give for which it was given, and that its author is told."""

from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from contract_stages import HONEST, HONEST_ROWS, caught, size, smooth
from waveassay.contract import (
    Epochs,
    EpochsSpec,
    Features,
    Findings,
    Kind,
    Signal,
    Spectra,
    SpectraSpec,
    Stage,
    checks,
)
from waveassay.contract.checks_data import given
from waveassay.contract.checks_precision import in_single

EPOCHS = given(Kind.EPOCHS, "uV", Fraction(128))


def spectrum_spec(params: Any, given: EpochsSpec, findings: Findings) -> SpectraSpec:
    return SpectraSpec(given.signal, given.length_s, 1.0, 1.0, 1.0)


def spectra(density_of: Callable[[Any], Any]) -> Stage:
    """Return a stage that gives two densities an epoch, made from its samples."""

    def run(params: Any, epochs: Epochs) -> Spectra:
        made = density_of(epochs.samples())
        density = np.full((len(epochs), 2), np.nan if made.dtype.kind == "f" else 0, made.dtype)
        density[epochs.kept] = made[:, None]
        dof = np.where(epochs.kept, 2.0, np.nan)
        name, unit = epochs.signal.name, epochs.signal.unit
        return Spectra(name, unit, epochs.rows, np.array([0.0, 1.0]), density, 1.0, dof)

    return replace(HONEST_ROWS, gives=Kind.SPECTRA, spec=spectrum_spec, run=run)


def power(x: Any) -> Any:
    """Return what numpy makes of it, in the precision of the samples."""
    return np.mean(np.ascontiguousarray(x) ** 2, axis=-1)


@pytest.mark.parametrize(
    "density_of",
    [power, lambda x: power(x.astype(np.float64))],
    ids=["as the samples", "float64"],
)
def test_densities_may_follow_the_samples_or_be_float64(
    density_of: Callable[[Any], Any],
) -> None:
    for check in (checks.check_spec_agrees_with_data, checks.check_single_precision):
        check(spectra(density_of))


def test_densities_are_never_coarser_than_the_samples() -> None:
    stage = spectra(lambda x: power(x).astype(np.float32))
    said = "densities come out as float32 of what is held as float64"
    caught(checks.check_spec_agrees_with_data, said, stage)
    whole = spectra(lambda x: power(x).astype(np.int64))
    caught(checks.check_single_precision, "densities come out as int64", whole)


def test_samples_come_out_as_float64() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        out = smooth(params, signal)
        return replace(out, x=out.x.astype(np.float32))

    said = "samples come out as float32, and float64 is expected"
    caught(checks.check_spec_agrees_with_data, said, replace(HONEST, run=run))


def _with_top(found: Callable[[Any], Any]) -> Stage:
    def run(params: Any, epochs: Epochs) -> Features:
        made = size(params, epochs)
        top = np.full(len(epochs), np.nan)
        top[epochs.kept] = found(epochs.samples())
        return replace(made, columns={**made.columns, "top": top})

    return replace(HONEST_ROWS, run=run)


def test_a_number_that_float32_changes_is_told() -> None:
    """Beside 1e8, what float32 rounds is 4 or 8."""
    changed = _with_top(lambda x: np.max(x + 1e8, axis=-1) - 1e8)
    caught(checks.check_single_precision, "given float32 and float64, .*'top'", changed)
    kept = _with_top(lambda x: np.max(x.astype(np.float64) + 1e8, axis=-1) - 1e8)
    checks.check_single_precision(kept)


def test_a_row_depends_on_itself_alone_in_float32_too() -> None:
    def less_mean(x: Any) -> Any:
        shared = 1e-6 * np.mean(x) if x.dtype == np.float32 else 0
        return np.max(x - shared, axis=-1)

    caught(checks.check_single_precision, "A row may depend on no other row", _with_top(less_mean))


def test_features_are_held_in_float64() -> None:
    single = in_single(EPOCHS)
    assert single is not None
    epochs = single.data
    assert isinstance(epochs, Epochs)
    assert epochs.samples().dtype == np.float32
    assert replace(
        epochs, signal=replace(epochs.signal, x=epochs.signal.x[:3])
    ).samples().dtype == (np.float32)
    column = np.arange(len(epochs), dtype=np.float32)
    made = Features("random", epochs.rows, {"": column}, ("",) * len(epochs))
    assert made.columns[""].dtype == np.float64
    assert np.array_equal(made.columns[""], column)
    assert not made.columns[""].flags.writeable


def test_signals_and_features_are_the_same_in_either_precision() -> None:
    for kind in (Kind.SIGNALS, Kind.FEATURES, Kind.AVERAGE_FEATURES):
        assert in_single(given(kind, "uV", Fraction(128))) is None
