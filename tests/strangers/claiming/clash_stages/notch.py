"""Claim a name that belongs to another."""

from waveassay.contract import Findings, Kind, Params, Signal, SignalSpec, Stage


class ClaimParams(Params):
    """Parameters of a stage that is never run: none."""


def spec(params: ClaimParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Say that the same signal comes out."""
    return given


def run(params: ClaimParams, signal: Signal) -> Signal:
    """Give the signal back."""
    return signal


STAGE = Stage(
    name="filter.notch",
    version=1,
    params=ClaimParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
)
