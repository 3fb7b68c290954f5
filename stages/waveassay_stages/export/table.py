"""Table of every feature of the chain, one row an epoch (or a condition, after averaging)."""

from typing import Literal

from pydantic import Field

from waveassay.contract import (
    EachRow,
    Features,
    FeaturesSpec,
    Findings,
    Kind,
    Params,
    SinkSpec,
    Stage,
    Table,
)


class TableParams(Params):
    """Parameters of `export.table`."""

    csv: Literal["auto", "always", "never"] = Field(
        default="auto",
        description="Beside Parquet, write CSV for opening by hand. auto: while the rows of all "
        "recordings are fewer than a million.",
    )


def spec(params: TableParams, given: FeaturesSpec, findings: Findings) -> SinkSpec:
    """Nothing flows on."""
    return SinkSpec(given.signal)


def run(params: TableParams, features: Features) -> Table:
    """Ask for the table; the engine gathers the columns of all features and writes it."""
    return Table(csv=params.csv)


STAGE = Stage(
    name="export.table",
    version=1,
    params=TableParams,
    takes=(Kind.FEATURES, Kind.AVERAGE_FEATURES),
    gives=Kind.TABLE,
    spec=spec,
    run=run,
    context=EachRow(),
    example={"csv": "auto"},
)
