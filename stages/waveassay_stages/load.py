"""Reads the named signals of a recording, where a chain begins."""

from typing import Annotated, Literal

from pydantic import AfterValidator, Field

from waveassay.contract import Findings, Kind, Params, SignalSpec, Stage


def _each_once(names: tuple[str, ...]) -> tuple[str, ...]:
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise ValueError(f"{', '.join(twice)} named twice")
    return names


class LoadParams(Params):
    """Parameters of `load`."""

    signals: Annotated[tuple[str, ...], AfterValidator(_each_once)] = Field(
        min_length=1, description="Names of the signals to read, from the recipe's 'signals'."
    )
    truncated: Literal["refuse", "read"] = Field(
        default="refuse",
        description="What becomes of a file that ends before its header says. refuse: it fails; "
        "read: the whole records that are there are used, with a warning.",
    )


def spec(params: LoadParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    """Return what is read, as it is: unit and rate come from the recipe and the recording."""
    return given


def needs(params: LoadParams) -> tuple[str, ...]:
    """Return the names of the signals that the engine reads."""
    return params.signals


def reads_truncated(params: LoadParams) -> bool:
    """Tell whether a file that ends early is read as far as it goes."""
    return params.truncated == "read"


STAGE = Stage(
    name="load",
    version=1,
    params=LoadParams,
    takes=(),
    gives=Kind.SIGNALS,
    spec=spec,
    example={"signals": ["frontal_left"]},
    needs=needs,
    reads_truncated=reads_truncated,
)
