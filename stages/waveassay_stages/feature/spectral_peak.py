"""Highest peak of a spectrum in a range of frequencies, above its background."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Bools,
    ColumnSpec,
    Decibel,
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
from waveassay_stages.feature._bands import bins_inside, check_bins, spacing
from waveassay_stages.feature._rows import density_unit, missing_reasons, of_what

Method = Literal["parabola", "bin"]
Background = Literal["median", "power_law"]

# A bin without power has no decibels: it is taken as this share of the highest.
_FLOOR = 1e-30
_LEAST_BINS = {"median": 3, "power_law": 9}


class SpectralPeakParams(Params):
    """Parameters of `feature.spectral_peak`."""

    within: tuple[Hertz, Hertz] = Field(description="Range of frequencies searched.")
    method: Method = Field(
        default="parabola",
        description="parabola: vertex of a parabola through the decibels of the highest bin and "
        "its neighbours; bin: the highest bin itself.",
    )
    background: Background = Field(
        default="median",
        description="What the peak stands above. median: the median level of the range; "
        "power_law: a straight line of decibels against the logarithm of frequency.",
    )
    prominence: Decibel = Field(
        default=0.0, ge=0, description="Least height above the background that counts as a peak."
    )
    express: Literal["absolute", "decibel"] = Field(
        default="absolute",
        description="Power at the peak as a density, or in dB re 1 unit squared per Hz.",
    )


@dataclass(frozen=True)
class Peaks:
    """The peak of each row: where it is, how high, and how far above the background.

    ``found`` tells where it is a peak: higher than the bin on either side, also where that lies
    outside the range. Elsewhere the range only cuts a slope.
    """

    frequency_hz: Floats
    level_db: Floats
    prominence_db: Floats
    found: Bools


def spectral_peaks(
    freq_hz: Floats,
    density: Floats,
    low_hz: float,
    high_hz: float,
    *,
    method: Method = "parabola",
    background: Background = "median",
) -> Peaks:
    r"""Find the highest bin of each row above its background, and refine it.

    With :math:`r_k` the decibels above the background at the highest bin m and its neighbours, the
    vertex of the parabola through the three lies at

    .. math:: f_m + \delta\,\Delta f, \qquad
              \delta = \frac{1}{2}\,\frac{r_{m-1} - r_{m+1}}{r_{m-1} - 2 r_m + r_{m+1}}, \qquad
              r^* = r_m - \tfrac{1}{4} (r_{m-1} - r_{m+1})\,\delta

    which is exact for a Gaussian peak. The power-law background is a resistant line: its slope runs
    through the medians of the lower and upper third of the range's bins (by number), its height is
    the median of what is left; a peak that is narrower than a third barely moves it.

    Parameters
    ----------
    freq_hz : bin centres, Hz, shape (f,), equally spaced from 0.
    density : one-sided density, unit squared per Hz, shape (rows, f).
    low_hz, high_hz : the range searched, both limits included. A power law has no bin at 0.

    Returns
    -------
    Arrays of shape (rows,): frequency, Hz; level, dB re 1 unit squared per Hz; prominence, dB;
    whether it is a peak. NaN where the density is, or the range holds too few bins (3; 9 for a
    power law).

    References
    ----------
    M. Gasior, J. L. Gonzalez, AIP Conf. Proc. 732, 276-285, 2004 (parabola on logarithms).
    J. W. Tukey, Exploratory Data Analysis, 1977, ch. 10 (resistant line). Both from memory.
    """
    count = density.shape[0]
    nothing = np.full(count, np.nan)
    peaks = Peaks(nothing, nothing.copy(), nothing.copy(), np.zeros(count, np.bool_))
    inside = bins_inside(low_hz, high_hz, spacing(freq_hz), freq_hz.size)
    floor = 1 if background == "power_law" else 0
    first, stop = max(inside.start, floor), inside.stop
    if stop - first < _LEAST_BINS[background]:
        return peaks
    rows = np.flatnonzero(np.max(density[:, first:stop], axis=-1) > 0)
    # One bin more on either side, where there is one.
    left, right = max(first - 1, floor), min(stop + 1, freq_hz.size)
    power = np.ascontiguousarray(density[rows, left:right], np.float64)
    level = 10 * np.log10(np.maximum(power, np.max(power, axis=-1)[:, None] * _FLOOR))
    span = slice(first - left, stop - left)
    under = _background_db(freq_hz[left:right], level, span, background)
    above = level - under
    best = span.start + np.argmax(above[:, span], axis=-1)
    row = np.arange(rows.size)
    inner = (best > 0) & (best < above.shape[1] - 1)
    here = above[row, best]
    before = np.where(inner, above[row, np.maximum(best - 1, 0)], np.nan)
    after = np.where(inner, above[row, np.minimum(best + 1, above.shape[1] - 1)], np.nan)
    # On a plateau of equal bins the first one counts; a flat spectrum has no peak.
    found = (here > before) & (here >= after)
    shift = np.zeros(rows.size)
    if method == "parabola":
        curve = before - 2 * here + after
        usable = found & (curve < 0)
        np.divide(0.5 * (before - after), curve, out=shift, where=usable)
        here = np.where(usable, here - 0.25 * (before - after) * shift, here)
    peaks.frequency_hz[rows] = freq_hz[left + best] + shift * spacing(freq_hz)
    beside = np.clip(best + np.where(shift < 0, -1, 1), 0, above.shape[1] - 1)
    ground = under[row, best] + np.abs(shift) * (under[row, beside] - under[row, best])
    peaks.prominence_db[rows] = here
    peaks.level_db[rows] = here + ground
    peaks.found[rows] = found
    return peaks


def _background_db(freq_hz: Floats, level: Floats, span: slice, background: Background) -> Floats:
    y = level[:, span]
    if background == "median":
        return np.broadcast_to(np.median(y, axis=-1)[:, None], level.shape)
    x = np.log10(freq_hz)
    third = y.shape[1] // 3
    run = np.median(x[span][-third:]) - np.median(x[span][:third])
    rise = np.median(y[:, -third:], axis=-1) - np.median(y[:, :third], axis=-1)
    slope = rise / run
    height = np.median(y - slope[:, None] * x[span], axis=-1)
    line: Floats = height[:, None] + slope[:, None] * x
    return line


def spec(params: SpectralPeakParams, given: SpectraSpec, findings: Findings) -> FeaturesSpec:
    """Check the range, and give frequency, power and prominence."""
    check_band(*params.within, given, findings, "within")
    check_bins(*params.within, given, findings, "within", least=_LEAST_BINS[params.background])
    low, high = params.within
    unit = density_unit(given.signal.unit)
    columns = (
        ColumnSpec(
            "frequency",
            "Hz",
            f"frequency of the highest peak from {low:g} to {high:g} Hz{of_what(given)}",
        ),
        ColumnSpec(
            "power",
            unit if params.express == "absolute" else f"dB re 1 {unit}",
            f"power density at that peak{of_what(given)}",
        ),
        ColumnSpec("prominence", "dB", "height of that peak above the background"),
    )
    return FeaturesSpec(given.signal, columns, averaged=given.averaged)


def run(params: SpectralPeakParams, spectra: Spectra) -> Features:
    """Return the peak of each row; NaN in rows that are not kept or have no peak."""
    peaks = spectral_peaks(
        spectra.freq_hz,
        spectra.density,
        *params.within,
        method=params.method,
        background=params.background,
    )
    low = peaks.found & (peaks.prominence_db < params.prominence)
    slope = ~peaks.found
    missing = slope | low
    level = np.where(missing, np.nan, peaks.level_db)
    columns = {
        "frequency": np.where(missing, np.nan, peaks.frequency_hz),
        "power": level if params.express == "decibel" else np.power(10.0, level / 10),
        "prominence": np.where(missing, np.nan, peaks.prominence_db),
    }
    reasons = missing_reasons(
        spectra.rows,
        [
            (slope, "no peak in the range"),
            (low, "no peak of that prominence"),
        ],
    )
    return Features(spectra.signal, spectra.rows, columns, reasons)


STAGE = Stage(
    name="feature.spectral_peak",
    version=1,
    params=SpectralPeakParams,
    takes=(Kind.SPECTRA, Kind.AVERAGES),
    gives=features_of,
    spec=spec,
    run=run,
    context=EachRow(),
    example={"within": ["8 Hz", "13 Hz"], "prominence": "3 dB"},
    source="M. Gasior, J. L. Gonzalez, AIP Conf. Proc. 732, 276-285, 2004",
)
