"""Small stages that keep the contract; tests change one thing in each, and see it caught."""

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from pydantic import Field

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
    Part,
    Reach,
    Signal,
    SignalSpec,
    Stage,
    Whole,
)

LENGTH = 11


class SmoothParams(Params):
    """Parameters of a moving average."""

    weight: float = Field(default=1.0, description="What every sample is multiplied by.")


def smooth_spec(params: Any, given: SignalSpec, findings: Findings) -> SignalSpec:
    return given


def smooth(params: Any, signal: Signal) -> Signal:
    """Average eleven samples, five on either side; ends are repeated."""
    padded = np.pad(signal.x, LENGTH // 2, mode="edge")
    windows = np.lib.stride_tricks.sliding_window_view(padded, LENGTH)
    half_s = LENGTH // 2 / signal.rate_hz
    out = signal.with_samples(params.weight * np.mean(np.ascontiguousarray(windows), axis=-1))
    return out.widened(half_s, half_s).excluding_edges(half_s, half_s)


def smooth_context(params: Any, given: SignalSpec) -> Reach:
    assert given.rate_hz is not None
    return Reach(LENGTH // 2 / given.rate_hz, LENGTH // 2 / given.rate_hz)


HONEST = Stage(
    name="filter.smooth",
    version=1,
    params=SmoothParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=smooth_spec,
    run=smooth,
    context=smooth_context,
    example={"weight": 2.0},
)


def size_spec(params: Any, given: EpochsSpec, findings: Findings) -> FeaturesSpec:
    columns = (ColumnSpec("rms", given.signal.unit, "size"), ColumnSpec("top", "", "largest"))
    return FeaturesSpec(given.signal, columns)


def size(params: Any, epochs: Epochs) -> Features:
    found = np.full((2, len(epochs)), np.nan)
    samples = epochs.samples()
    found[0, epochs.kept] = np.sqrt(np.mean(samples**2, axis=-1))
    found[1, epochs.kept] = np.max(samples, axis=-1)
    columns = {"rms": found[0], "top": found[1]}
    return Features(epochs.signal.name, epochs.rows, columns, ("",) * len(epochs))


HONEST_ROWS = replace(
    HONEST,
    name="feature.size",
    takes=(Kind.EPOCHS,),
    gives=Kind.FEATURES,
    spec=size_spec,
    run=size,
    context=EachRow(),
)


def levels(params: Any, signal: Signal) -> Part:
    return {"sum": np.array([np.sum(signal.x)]), "count": np.array([signal.x.size])}


def mean_level(params: Any, parts: Sequence[Part]) -> Part:
    total = sum(float(part["sum"][0]) for part in parts)
    return {"mean": np.array([total / max(1, sum(int(part["count"][0]) for part in parts))])}


def less_mean(params: Any, signal: Signal, state: Part) -> Signal:
    return signal.with_samples(signal.x - state["mean"][0])


HONEST_WHOLE = replace(HONEST, run=None, context=Whole(levels, mean_level, less_mean))


def caught(check: Callable[[Stage], None], said: str, stage: Stage) -> None:
    with pytest.raises(AssertionError, match=said):
        check(stage)
