"""A stage that is not put together right: its kinds are no tuple, and nothing is run."""

from waveassay.contract import Findings, Kind, Params, SignalSpec, Stage


class UnreadyParams(Params):
    """Parameters of `careless.unready`: none."""


def spec(params: UnreadyParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Say that the same signal comes out."""
    return given


STAGE = Stage(
    name="careless.unready",
    version=1,
    params=UnreadyParams,
    takes=Kind.SIGNALS,  # type: ignore[arg-type]
    gives=Kind.SIGNALS,
    spec=spec,
)
