"""Take the mean of a piece away; its context is not declared, so it is given whole pieces."""

from waveassay.contract import Findings, Kind, Params, Signal, SignalSpec, Stage


class CentreParams(Params):
    """Parameters of `acme.centre`: none."""


def spec(params: CentreParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Say that the same signal comes out."""
    return given


def run(params: CentreParams, signal: Signal) -> Signal:
    """Take the mean away."""
    return signal.with_samples(signal.x - signal.x.mean())


STAGE = Stage(
    name="acme.centre",
    version=1,
    params=CentreParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
)
