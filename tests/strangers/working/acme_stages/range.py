"""The peak-to-peak range of each epoch."""

import numpy as np

from waveassay.contract import (
    ColumnSpec,
    EachRow,
    Epochs,
    EpochsSpec,
    Features,
    FeaturesSpec,
    Findings,
    Kind,
    Params,
    Stage,
)


class RangeParams(Params):
    """Parameters of `acme.range`: none."""


def spec(params: RangeParams, given: EpochsSpec, findings: Findings) -> FeaturesSpec:
    """Announce one number an epoch, in the unit of the signal."""
    return FeaturesSpec(given.signal, (ColumnSpec("", given.signal.unit, "largest less smallest"),))


def run(params: RangeParams, epochs: Epochs) -> Features:
    """Measure every kept epoch."""
    values = np.full(len(epochs), np.nan)
    values[epochs.kept] = np.ptp(epochs.samples(), axis=-1)
    rows = epochs.rows
    return Features(epochs.signal.name, rows, {"": values}, ("",) * len(rows))


STAGE = Stage(
    name="acme.range",
    version=1,
    params=RangeParams,
    takes=(Kind.EPOCHS,),
    gives=Kind.FEATURES,
    spec=spec,
    run=run,
    context=EachRow(),
)
