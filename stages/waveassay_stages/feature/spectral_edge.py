"""Frequency below which a stated share of a spectrum's power lies: spectral edge, or median."""

from functools import lru_cache
from itertools import pairwise
from typing import Literal

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
    Share,
    Spectra,
    SpectraSpec,
    Stage,
    check_band,
    features_of,
)
from waveassay_stages.feature._bands import bins_inside, check_bins, spacing
from waveassay_stages.feature._rows import missing_reasons, of_what
from waveassay_stages.feature._shared import in_double, shared

# A share that is reached but for rounding is reached: half of ten equal bins is the fifth.
_ROUNDING = 1e-12


class SpectralEdgeParams(Params):
    """Parameters of `feature.spectral_edge`."""

    fraction: Share = Field(
        default=0.95,
        gt=0,
        lt=1,
        description="Share of the power below the edge; 50 % is the median.",
    )
    within: tuple[Hertz, Hertz] = Field(
        description="Range whose power is 100 %; the result depends on it."
    )
    interpolation: Literal["linear", "bin"] = Field(
        default="linear",
        description="linear: between the points of the cumulative power; bin: the first bin at "
        "which the share is reached.",
    )
    integration: Literal["rectangle", "trapezoid"] = Field(
        default="rectangle",
        description="rectangle: a bin's power lies evenly over its width; trapezoid: straight "
        "lines between bins.",
    )


def cumulative_power(
    freq_hz: Floats,
    density: Floats,
    low_hz: float,
    high_hz: float,
    *,
    whole_bins: bool = False,
    integration: Literal["rectangle", "trapezoid"] = "rectangle",
) -> tuple[Floats, Floats]:
    r"""Return points on the frequency axis and the power between ``low_hz`` and each.

    .. math:: C(f) = \int_{low}^{f} S(u)\,du

    The points are the borders between bins (rectangle), or the bins themselves (trapezoid), with
    the two limits at the ends. With ``whole_bins`` they are the bins inside the limits, each with
    the sum (or the trapezoids) up to and including it.

    Parameters
    ----------
    freq_hz : bin centres, Hz, shape (f,), equally spaced from 0.
    density : one-sided density, unit squared per Hz, shape (rows, f).
    low_hz, high_hz : the range, Hz.

    Returns
    -------
    Points, Hz, shape (p,), and power in unit squared, shape (rows, p), rising along a row.
    """
    density = in_double(density)
    if integration == "rectangle" and not whole_bins:
        points, cells, widths = _cells(freq_hz.tobytes(), low_hz, high_hz)
        return points, _running(density[:, cells], widths, ahead=1)
    step = spacing(freq_hz)
    if whole_bins:
        inside = bins_inside(low_hz, high_hz, step, freq_hz.size)
        points, values = freq_hz[inside], density[:, inside]
        if integration == "rectangle":
            return points, _running(values, step, ahead=0)
        return points, _running(values[:, 1:] + values[:, :-1], step / 2, ahead=1)
    top = float(freq_hz[-1])
    low, high = max(low_hz, 0.0), min(high_hz, top)
    between = freq_hz[(freq_hz > low) & (freq_hz < high)]
    points = np.concatenate(([low], between, [high]))
    position = points / step
    left = np.minimum(position.astype(np.int64), freq_hz.size - 2)
    weight = position - left
    values = density[:, left] * (1 - weight) + density[:, left + 1] * weight
    return points, _running(values[:, 1:] + values[:, :-1], np.diff(points) / 2, ahead=1)


def _running(values: Floats, widths: Floats | float, *, ahead: int) -> Floats:
    """Return the running sums of values times widths along each row, with zeros ahead of them.

    Frequency by frequency for all rows at once: along a row each sum waits for the one before it.
    """
    total = np.empty((ahead + values.shape[1], values.shape[0]))
    total[:ahead] = 0.0
    np.multiply(values.T, np.reshape(widths, (-1, 1)), out=total[ahead:])
    for before, here in pairwise(total):
        np.add(before, here, out=here)
    return total.T


@lru_cache(maxsize=64)
def _cells(freq: bytes, low_hz: float, high_hz: float) -> tuple[Floats, slice, Floats]:
    """Return the borders between bins in a range, which bins lie between them, and their widths.

    The bins are given as the bytes of float64.
    """
    freq_hz = np.frombuffer(freq)
    step, top = spacing(freq_hz), float(freq_hz[-1])
    # All of the bin at 0, and all of the highest, belongs to a range that ends on it.
    low = low_hz if low_hz > 0 else -step / 2
    high = high_hz if high_hz < top else top + step / 2
    borders = freq_hz[:-1] + step / 2
    between = borders[(borders > low) & (borders < high)]
    points = np.concatenate(([low], between, [high]))
    first = int(np.clip(np.rint((points[1] + points[0]) / (2 * step)), 0, freq_hz.size - 1))
    widths, points_hz = np.diff(points), np.clip(points, 0.0, min(high_hz, top))
    for array in (widths, points_hz):
        array.flags.writeable = False
    return points_hz, slice(first, first + widths.size), widths


def spectral_edges(
    freq_hz: Floats,
    density: Floats,
    low_hz: float,
    high_hz: float,
    fraction: float,
    *,
    interpolation: Literal["linear", "bin"] = "linear",
    integration: Literal["rectangle", "trapezoid"] = "rectangle",
) -> Floats:
    r"""Return the frequency below which a share of each row's power lies.

    .. math:: \int_{low}^{e} S(f)\,df = p \int_{low}^{high} S(f)\,df

    ``bin`` returns the centre of the first bin inside the range whose running sum, its own power
    included, reaches the share: up to one bin above the other.

    Parameters
    ----------
    freq_hz : bin centres, Hz, shape (f,), equally spaced from 0.
    density : one-sided density, unit squared per Hz, shape (rows, f).
    low_hz, high_hz : the range whose power is the whole, Hz.
    fraction : share p, between 0 and 1.

    Returns
    -------
    Frequencies, Hz, shape (rows,); NaN where the density is, or where there is no power.

    References
    ----------
    I. J. Rampil, Anesthesiology 89, 980-1002, 1998.
    """
    whole_bins = interpolation == "bin"

    points, power = shared(
        density,
        ("edge", freq_hz.tobytes(), low_hz, high_hz, whole_bins, integration),
        lambda: cumulative_power(
            freq_hz, density, low_hz, high_hz, whole_bins=whole_bins, integration=integration
        ),
    )
    edge = np.full(density.shape[0], np.nan)
    if points.size == 0:
        return edge
    found = np.flatnonzero(power[:, -1] > 0)
    if found.size < edge.size:
        power = power[found]
    target = power[:, -1] * fraction
    # Power rises along a row: the first point that has the share is the one after all that lack it.
    limit = target * (1 - _ROUNDING)
    lacking = limit > power.T
    reached = np.add.reduce(lacking, axis=0, dtype=np.int32)
    if whole_bins:
        edge[found] = points[reached]
        return edge
    row = np.arange(found.size)
    below, above = power[row, reached - 1], power[row, reached]
    start, stop = points[reached - 1], points[reached]
    edge[found] = start + (stop - start) * ((target - below) / (above - below))
    return edge


def spec(params: SpectralEdgeParams, given: SpectraSpec, findings: Findings) -> FeaturesSpec:
    """Check the range, and give one frequency."""
    check_band(*params.within, given, findings, "within")
    check_bins(*params.within, given, findings, "within", least=2)
    low, high = params.within
    column = ColumnSpec(
        "",
        "Hz",
        f"frequency below which {params.fraction * 100:g} % of the power from {low:g} to {high:g} "
        f"Hz lies{of_what(given)}",
    )
    return FeaturesSpec(given.signal, (column,), averaged=given.averaged)


def run(params: SpectralEdgeParams, spectra: Spectra) -> Features:
    """Return the edge of each row; NaN in rows that are not kept."""
    edge = spectral_edges(
        spectra.freq_hz,
        spectra.density,
        *params.within,
        params.fraction,
        interpolation=params.interpolation,
        integration=params.integration,
    )
    reasons = missing_reasons(spectra.rows, [(np.isnan(edge), "no power in within")])
    return Features(spectra.signal, spectra.rows, {"": edge}, reasons)


STAGE = Stage(
    name="feature.spectral_edge",
    version=1,
    params=SpectralEdgeParams,
    takes=(Kind.SPECTRA, Kind.AVERAGES),
    gives=features_of,
    spec=spec,
    run=run,
    context=EachRow(),
    example={"fraction": "95 %", "within": ["0.5 Hz", "30 Hz"]},
    source="I. J. Rampil, Anesthesiology 89, 980-1002, 1998",
)
