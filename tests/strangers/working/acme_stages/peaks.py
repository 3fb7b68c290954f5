"""Exclude what comes near the largest value of the whole recording."""

from collections.abc import Sequence

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Findings,
    Kind,
    Params,
    Part,
    Share,
    Signal,
    SignalSpec,
    Stage,
    Whole,
    exclusions_of,
)


class PeaksParams(Params):
    """Parameters of `acme.peaks`."""

    above: Share = Field(default=0.9, gt=0, le=1, description="Share of the largest value.")


def spec(params: PeaksParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Say that the same signal comes out."""
    return given


def collect(params: PeaksParams, signal: Signal) -> Part:
    """Return the largest value of a stretch."""
    return {"largest": np.abs(signal.x).max(initial=0.0, keepdims=True)}


def combine(params: PeaksParams, parts: Sequence[Part]) -> Part:
    """Return the largest value of the recording."""
    return {"largest": np.max([part["largest"] for part in parts], axis=0)}


def apply(params: PeaksParams, signal: Signal, state: Part) -> Signal:
    """Exclude the samples of a stretch that come near it."""
    near = np.abs(signal.x) > params.above * state["largest"][0]
    return signal.excluding(exclusions_of(signal, near, "peak"))


STAGE = Stage(
    name="acme.peaks",
    version=1,
    params=PeaksParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    context=Whole(collect, combine, apply),
    example={"above": "90 %"},
)
