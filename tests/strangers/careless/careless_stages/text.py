"""Give a signal back; the default is written as in a recipe, not as it is held."""

from pydantic import Field

from waveassay.contract import Findings, Kind, Params, Seconds, Signal, SignalSpec, Stage


class TextParams(Params):
    """Parameters of `careless.text`."""

    length: Seconds = Field(default="0.05 s", description="A length.")  # type: ignore[assignment]


def spec(params: TextParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Say that the same signal comes out."""
    return given


def run(params: TextParams, signal: Signal) -> Signal:
    """Give the signal back."""
    return signal


STAGE = Stage(
    name="careless.text",
    version=1,
    params=TextParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=spec,
    run=run,
)
