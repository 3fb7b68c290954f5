"""A small bundle of stages, so that tests of recipes rest on no stage that ships."""

from dataclasses import replace
from fractions import Fraction
from typing import Literal

from pydantic import Field

from waveassay.contract import (
    ColumnSpec,
    EpochsSpec,
    FeaturesSpec,
    Findings,
    Hertz,
    Kind,
    Params,
    Seconds,
    Share,
    SignalAmount,
    SignalSpec,
    SinkSpec,
    SpectraSpec,
    Stage,
    check_band,
    features_of,
)
from waveassay.recipe import Registry


class ReadParams(Params):
    signals: tuple[str, ...] = Field(min_length=1, description="Signals to read.")


READ = Stage(
    name="load",
    version=1,
    params=ReadParams,
    takes=(),
    gives=Kind.SIGNALS,
    spec=lambda params, given, findings: given,
    needs=lambda params: params.signals,
    example={"signals": ["eeg"]},
)


class SmoothParams(Params):
    low_pass: Hertz = Field(gt=0, description="Upper end of what passes.")
    order: int = Field(default=4, ge=1, le=8, description="Order.")
    gain: float = Field(default=1.0, gt=0, description="A plain number.")
    careful: bool = Field(default=False, description="A switch.")


def _smooth(params: SmoothParams, given: SignalSpec, findings: Findings) -> SignalSpec:
    if given.nyquist_hz is not None and params.low_pass >= given.nyquist_hz:
        findings.refuse(f"{params.low_pass:g} Hz is above the Nyquist frequency", "low_pass")
    if params.careful:
        findings.warn("careful is slow", "careful")
    return given.passing(None, params.low_pass, 0.1)


SMOOTH = Stage(
    name="filter.smooth",
    version=1,
    params=SmoothParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=_smooth,
    example={"low_pass": "40 Hz"},
)


class RateParams(Params):
    rate: Hertz = Field(gt=0, description="New rate.")


RATE = Stage(
    name="resample",
    version=1,
    params=RateParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=lambda params, given, findings: replace(given, rate_hz=Fraction(repr(params.rate))),
    example={"rate": "128 Hz"},
)


class LimitParams(Params):
    range: SignalAmount = Field(description="Largest value that is believed.")
    window: Seconds | None = Field(default=None, gt=0, description="Window.")


LIMIT = Stage(
    name="exclude.range",
    version=1,
    params=LimitParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.SIGNALS,
    spec=lambda params, given, findings: given,
    example={"range": "250 uV"},
)


class CutParams(Params):
    length: Seconds = Field(gt=0, description="Length of an epoch.")
    overlap: Share = Field(default=0.5, ge=0, lt=1, description="Shared by neighbours.")


CUT = Stage(
    name="epoch.cut",
    version=1,
    params=CutParams,
    takes=(Kind.SIGNALS,),
    gives=Kind.EPOCHS,
    spec=lambda params, given, findings: EpochsSpec(
        given, params.length, params.length * (1 - params.overlap)
    ),
    example={"length": "4 s"},
)


class DensityParams(Params):
    window: Literal["hann", "boxcar"] = Field(default="hann", description="Taper.")


def _density(params: DensityParams, given: EpochsSpec, findings: Findings) -> SpectraSpec:
    return SpectraSpec(
        given.signal,
        given.length_s,
        1 / given.length_s,
        1 / given.length_s,
        given.signal.nyquist_hz,
    )


DENSITY = Stage(
    name="spectrum.plain",
    version=1,
    params=DensityParams,
    takes=(Kind.EPOCHS,),
    gives=Kind.SPECTRA,
    spec=_density,
)

MEAN = Stage(
    name="spectrum.mean",
    version=1,
    params=Params,
    takes=(Kind.SPECTRA,),
    gives=Kind.AVERAGES,
    spec=lambda params, given, findings: replace(given, averaged=True),
)


class PowerParams(Params):
    bands: dict[str, tuple[Hertz, Hertz]] = Field(min_length=1, description="Bands by name.")
    within: tuple[Hertz, Hertz] | Literal["all"] = Field(default="all", description="Of what.")


def _power(params: PowerParams, given: SpectraSpec, findings: Findings) -> FeaturesSpec:
    for name, (low, high) in params.bands.items():
        check_band(low, high, given, findings, f"bands.{name}")
    columns = tuple(ColumnSpec(name, "uV^2", "power") for name in params.bands)
    return FeaturesSpec(given.signal, columns, averaged=given.averaged)


POWER = Stage(
    name="feature.power",
    version=1,
    params=PowerParams,
    takes=(Kind.SPECTRA, Kind.AVERAGES),
    gives=features_of,
    spec=_power,
    example={"bands": {"alpha": ["8 Hz", "13 Hz"]}},
)

TABLE = Stage(
    name="export.table",
    version=1,
    params=Params,
    takes=(Kind.FEATURES, Kind.AVERAGE_FEATURES),
    gives=Kind.TABLE,
    spec=lambda params, given, findings: SinkSpec(given.signal),
)

FIGURE = Stage(
    name="export.figure",
    version=1,
    params=Params,
    takes=(Kind.SPECTRA, Kind.AVERAGES),
    gives=Kind.FIGURE,
    spec=lambda params, given, findings: SinkSpec(given.signal),
)

STAGES = (READ, SMOOTH, RATE, LIMIT, CUT, DENSITY, MEAN, POWER, TABLE, FIGURE)


def registry_of(*more: Stage) -> Registry:
    """Return the bundle's stages, and some more, as a registry."""
    stages = {stage.name: stage for stage in (*STAGES, *more)}
    return Registry(stages=stages, owners=dict.fromkeys(stages, "testing 1.0"))


REGISTRY = registry_of()

HEAD = """\
recipe: tried
edition: 1
signals:
  eeg: {labels: [Fp1], unit: uV}
  artery: {labels: [ABP], unit: mmHg}
"""


def with_chain(*steps: str, head: str = HEAD, tail: str = "") -> str:
    """Return a recipe's text whose chain ``c`` begins at line 8, or behind a longer head."""
    lines = "".join(f"    - {step}\n" for step in steps)
    return f"{head}chains:\n  c:\n{lines}{tail}"
