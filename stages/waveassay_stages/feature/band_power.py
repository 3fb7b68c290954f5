"""Power of a spectrum in named frequency bands: absolute, as a share, or in decibels."""

from collections.abc import Mapping
from typing import Annotated, Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    ColumnSpec,
    EachRow,
    Features,
    FeaturesSpec,
    Findings,
    Floats,
    Hertz,
    Kind,
    Params,
    Spectra,
    SpectraSpec,
    Stage,
    check_band,
    features_of,
)
from waveassay_stages.feature._bands import (
    Edges,
    Rule,
    band_integrals,
    check_bins,
)
from waveassay_stages.feature._rows import decibels, missing_reasons, of_what, squared
from waveassay_stages.feature._shared import in_double, shared

BandName = Annotated[str, Field(pattern=r"^[a-z][a-z0-9_]*$")]


class BandPowerParams(Params):
    """Parameters of `feature.band_power`."""

    bands: dict[BandName, tuple[Hertz, Hertz]] = Field(
        min_length=1,
        description="Bands by name (lower-case letters, digits, underscore), each with its lower "
        "and upper limit. Columns stand in order of frequency.",
    )
    express: Literal["absolute", "relative", "decibel"] = Field(
        default="absolute",
        description="absolute: unit squared; relative: share of the power in relative_to; "
        "decibel: dB re 1 unit squared.",
    )
    relative_to: tuple[Hertz, Hertz] | None = Field(
        default=None, description="The range whose power is 1, for relative power only."
    )
    integration: Rule = Field(
        default="rectangle",
        description="rectangle: sum of bins times their spacing; trapezoid; simpson.",
    )
    edges: Edges = Field(
        default="lower_in",
        description="lower_in: bins from the lower limit up to, but not on, the upper one; "
        "both_in: bins on both limits too; partial: from limit to limit, in parts of bins.",
    )


def ordered_bands(
    bands: Mapping[str, tuple[float, float]],
) -> tuple[tuple[str, tuple[float, float]], ...]:
    """Return the bands in order of lower limit, upper limit, name.

    The order of keys in a recipe says nothing, so it must not order a table's columns.
    """
    return tuple(sorted(bands.items(), key=lambda item: (*item[1], item[0])))


def band_power(
    freq_hz: Floats,
    density: Floats,
    low_hz: float,
    high_hz: float,
    *,
    integration: Rule = "rectangle",
    edges: Edges = "lower_in",
) -> Floats:
    r"""Return the power in a band of each row.

    .. math:: P = \int_{low}^{high} S(f)\,df \approx \sum_k w_k S_k

    with the weights of `band_weights`. Over 0 to the highest bin, the rectangle rule gives the mean
    square of the signal (Parseval), since the density is one-sided with 0 and Nyquist not doubled.

    Parameters
    ----------
    freq_hz : bin centres, Hz, shape (f,), equally spaced from 0.
    density : one-sided density, unit squared per Hz, shape (rows, f).
    low_hz, high_hz : the band, Hz.
    integration, edges : the rule, and what becomes of bins at the limits.

    Returns
    -------
    Power in unit squared, shape (rows,); NaN where the density is, or where no bin is inside.

    Raises
    ------
    ValueError
        For Simpson's rule with partial bins.

    References
    ----------
    I. J. Rampil, Anesthesiology 89, 980-1002, 1998 (power in EEG bands).
    """
    return shared(
        density,
        ("band", freq_hz.tobytes(), low_hz, high_hz, integration, edges),
        lambda: band_integrals(freq_hz, in_double(density), low_hz, high_hz, integration, edges),
    )


def relative_power(power: Floats, whole: Floats) -> Floats:
    """Return power as a share of the whole, NaN where the whole is not above 0."""
    return np.asarray(power / np.where(whole > 0, whole, np.nan), np.float64)


def spec(params: BandPowerParams, given: SpectraSpec, findings: Findings) -> FeaturesSpec:
    """Check each band, and give one column a band."""
    least = 1 if params.integration == "rectangle" or params.edges == "partial" else 2
    ranges = [(f"bands.{name}", limits) for name, limits in params.bands.items()]
    if params.relative_to is not None:
        ranges.append(("relative_to", params.relative_to))
    for at, (low, high) in ranges:
        check_band(low, high, given, findings, at)
        if params.edges != "partial":
            check_bins(low, high, given, findings, at, least=least, edges=params.edges)
    if params.express == "relative" and params.relative_to is None:
        findings.refuse("relative power needs relative_to, such as [0.5 Hz, 40 Hz]", "express")
    if params.express != "relative" and params.relative_to is not None:
        findings.refuse(
            f"relative_to has no meaning for {params.express} power; say express: relative, or "
            "leave it out",
            "relative_to",
        )
    if params.integration == "simpson" and params.edges == "partial":
        findings.refuse(
            "Simpson's rule needs whole bins: edges must be lower_in or both_in", "edges"
        )
    unit = {
        "absolute": squared(given.signal.unit),
        "relative": "1",
        "decibel": f"dB re 1 {squared(given.signal.unit)}",
    }[params.express]
    columns = []
    for name, (low, high) in ordered_bands(params.bands):
        meaning = f"power from {low:g} to {high:g} Hz"
        if params.express == "relative" and params.relative_to is not None:
            meaning += " as a share of that from {:g} to {:g} Hz".format(*params.relative_to)
        columns.append(ColumnSpec(name, unit, meaning + of_what(given)))
    return FeaturesSpec(given.signal, tuple(columns), averaged=given.averaged)


def run(params: BandPowerParams, spectra: Spectra) -> Features:
    """Return one column a band; NaN in rows that are not kept."""

    def power(limits: tuple[float, float]) -> Floats:
        return band_power(
            spectra.freq_hz,
            spectra.density,
            *limits,
            integration=params.integration,
            edges=params.edges,
        )

    columns: dict[str, Floats] = {}
    reasons = []
    whole = None
    if params.express == "relative":
        if params.relative_to is None:
            raise ValueError("relative power needs relative_to")
        whole = power(params.relative_to)
        reasons.append((~(whole > 0), "no power in relative_to"))
    for name, limits in ordered_bands(params.bands):
        columns[name] = power(limits)
        if params.express == "decibel":
            reasons.append((~(columns[name] > 0), f"no power in {name}"))
            columns[name] = decibels(columns[name])
        else:
            reasons.append((np.isnan(columns[name]), f"no bin in {name}"))
        if whole is not None:
            columns[name] = relative_power(columns[name], whole)
    return Features(spectra.signal, spectra.rows, columns, missing_reasons(spectra.rows, reasons))


STAGE = Stage(
    name="feature.band_power",
    version=2,
    params=BandPowerParams,
    takes=(Kind.SPECTRA, Kind.AVERAGES),
    gives=features_of,
    spec=spec,
    run=run,
    context=EachRow(),
    example={
        "bands": {"delta": ["0.5 Hz", "4 Hz"], "alpha": ["8 Hz", "13 Hz"]},
        "express": "relative",
        "relative_to": ["0.5 Hz", "40 Hz"],
    },
    source="I. J. Rampil, Anesthesiology 89, 980-1002, 1998",
)
