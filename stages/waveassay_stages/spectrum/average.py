"""Average spectrum of each condition over its kept epochs.

Averages are of power or of decibels (the latter is a geometric mean of power), by mean or by
median. What that does to the level is corrected or left, as the parameters say.
"""

from collections.abc import Sequence
from dataclasses import replace
from typing import Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    Findings,
    Floats,
    Kind,
    Params,
    Part,
    Rows,
    Spectra,
    SpectraSpec,
    Stage,
    Whole,
)
from waveassay_stages.spectrum._epoch_overlap import independent_share
from waveassay_stages.spectrum._order_statistics import chi_square_median, log_chi_square_median

Bias = Literal["corrected", "left"]


class AverageParams(Params):
    """Parameters of the average over epochs."""

    of: Literal["mean", "median"] = Field(
        default="mean", description="Mean, or median, over the kept epochs at each frequency."
    )
    over: Literal["power", "decibels"] = Field(
        default="power", description="What is averaged: power, or its decibels (a geometric mean)."
    )
    median_bias: Bias = Field(
        default="corrected",
        description="Of a median: whether what a median differs from a mean is taken out, for "
        "the number of epochs and their degrees of freedom.",
    )
    decibel_bias: Bias = Field(
        default="left",
        description="Over decibels: whether what a mean of decibels lies below the decibels of "
        "the mean is taken out, for the epochs' degrees of freedom (2.5 dB at 2).",
    )


def to_decibels(power: Floats) -> Floats:
    """Return ``10 log10(power)``, dB against the unit of power; minus infinity for no power."""
    with np.errstate(divide="ignore"):
        return np.asarray(10 * np.log10(power), np.float64)


def from_decibels(level_db: Floats) -> Floats:
    """Return ``10^(level / 10)``."""
    return np.asarray(10 ** (level_db / 10), np.float64)


def mean_log_bias(dof: float) -> float:
    r"""Return the mean of ``ln(chi-square(dof) / dof)``: :math:`\psi(\nu/2) - \ln(\nu/2)`.

    Below 0: -0.577 (-2.51 dB) at 2 degrees of freedom. Source: M. S. Bartlett, D. G. Kendall,
    Suppl. J. R. Stat. Soc. 8(1), 128-138, 1946.
    """
    from scipy.special import digamma

    return float(digamma(dof / 2) - np.log(dof / 2))


def average(density: Floats, dof: float, params: AverageParams) -> Floats:
    r"""Return the average of the rows, shape (f,), in the unit of the density.

    .. math::

        \text{power:}\quad \bar P = \operatorname{average}_i P_i / b, \qquad
        \text{decibels:}\quad \ln \bar P = \operatorname{average}_i \ln P_i - b_m - b_d

    - mean: b = 1, :math:`b_m = 0`;
    - median of n rows, corrected: b is the mean of the median of n variables
      :math:`\chi^2_\nu / \nu` (tending to median(:math:`\chi^2_\nu`) / nu as n grows), and
      :math:`b_m` the mean of the median, less the mean, of their logarithms. It takes epochs for
      independent; at 0 Hz and at the Nyquist frequency, where nu is half as large, it is too
      small;
    - decibels, corrected: :math:`b_d = \psi(\nu/2) - \ln(\nu/2)` (`mean_log_bias`).

    Parameters
    ----------
    density : shape (n, f), n at least 1.
    dof : nu, degrees of freedom of each row.
    params : which average.

    References
    ----------
    B. Allen et al., Phys. Rev. D 85, 122006, 2012, appendix B, for the median at nu = 2; its
    extension to any nu is by order statistics. M. S. Bartlett, D. G. Kendall, Suppl. J. R. Stat.
    Soc. 8(1), 128-138, 1946, for logarithms.
    """
    density = np.asarray(density, np.float64)  # sums and logarithms, whatever the estimates are in
    count = density.shape[0]
    corrected = params.of == "median" and params.median_bias == "corrected"
    if params.over == "power":
        if params.of == "mean":
            return _mean(density)
        bias = chi_square_median(count, dof)[0] if corrected else 1.0
        return np.asarray(np.median(density, axis=0) / bias, np.float64)
    level = to_decibels(density)
    middle = _mean(level) if params.of == "mean" else _median(level)
    shift = mean_log_bias(dof) if params.decibel_bias == "corrected" else 0.0
    if corrected:
        shift += log_chi_square_median(count, dof)[0] - mean_log_bias(dof)
    return from_decibels(middle - shift * 10 / np.log(10))


def _mean(rows: Floats) -> Floats:
    return np.asarray(np.sum(rows, axis=0) / rows.shape[0], np.float64)


def _median(level: Floats) -> Floats:
    with np.errstate(invalid="ignore"):  # between two levels of minus infinity
        middle = np.median(level, axis=0)
    return np.where(np.isnan(middle), -np.inf, middle)


def degrees_of_freedom(count: int, dof: float, share: float, params: AverageParams) -> float:
    r"""Return the equivalent degrees of freedom of the average of ``count`` rows.

    ``share`` is the `independent_share` of the epochs, which multiplies the following, for
    independent ones:

    - mean of power: n nu;
    - median of power: :math:`2 \mu^2 / \sigma^2` of the median of n variables
      :math:`\chi^2_\nu / \nu`;
    - decibels: the nu' of a chi-square variable whose logarithm varies as much as the average of
      n logarithms: :math:`\psi'(\nu'/2) = \psi'(\nu/2) / n` for the mean.

    Never fewer than one row has. Source: D. B. Percival, A. T. Walden, Spectral Analysis for
    Physical Applications, 1993, chapter 6 (equivalent degrees of freedom); Bartlett & Kendall 1946.
    """
    from scipy.special import polygamma

    if params.over == "decibels":
        variance = float(polygamma(1, dof / 2)) / count
        if params.of == "median" and count > 1:
            variance = log_chi_square_median(count, dof)[1]
        alone = _dof_of_log_variance(variance)
    elif params.of == "median" and count > 1:
        mean, variance = chi_square_median(count, dof)
        alone = 2 * mean**2 / variance
    else:
        alone = count * dof
    return max(dof, alone * share)


def _dof_of_log_variance(variance: float) -> float:
    """Return nu with psi'(nu / 2) = variance, by Newton's method on 1 / psi'."""
    from scipy.special import polygamma

    half = 1 / variance  # 1 / psi' is nearly a straight line
    for _ in range(50):
        value = float(polygamma(1, half))
        step = (1 / value - 1 / variance) * value**2 / float(polygamma(2, half))
        half = max(half + step, half / 2)
        if abs(step) <= 1e-14 * half:
            break
    return 2 * half


def spec(params: AverageParams, given: SpectraSpec, findings: Findings) -> SpectraSpec:
    """Say that one row a condition comes out; warn of a parameter without effect."""
    if params.of == "mean" and params.median_bias != "corrected":
        findings.warn("median_bias has no effect on a mean", "median_bias")
    if params.over == "power" and params.decibel_bias != "left":
        findings.warn("decibel_bias has no effect on an average of power", "decibel_bias")
    return replace(given, averaged=True, in_decibels=params.over == "decibels")


def collect(params: AverageParams, spectra: Spectra) -> Part:
    """Return the rows of a stretch, with the densities of the kept ones."""
    rows = spectra.rows
    return {
        "signal": np.array([spectra.signal], np.str_),
        "unit": np.array([spectra.unit], np.str_),
        "freq_hz": spectra.freq_hz,
        "resolution_hz": np.array([spectra.resolution_hz]),
        "density": spectra.density[rows.kept],
        "dof": spectra.dof[rows.kept],
        "kept": rows.kept,
        "start_s": rows.start_s,
        "duration_s": rows.duration_s,
        "condition": np.array(rows.condition, np.str_),
    }


def combine(params: AverageParams, parts: Sequence[Part]) -> Spectra:
    """Return the average of each condition, in the order in which conditions begin.

    All rows are put together before anything is summed, so that the result does not depend on
    where the recording was cut.

    Raises
    ------
    ValueError
        When there are no parts.
    """
    if not parts:
        raise ValueError("an average needs at least one part")
    kept, start_s, duration_s, names, density, dof = (
        np.concatenate([part[key] for part in parts])
        for key in ("kept", "start_s", "duration_s", "condition", "density", "dof")
    )
    first = parts[0]
    freq_hz, resolution_hz = first["freq_hz"], float(first["resolution_hz"][0])
    order = np.argsort(start_s, kind="stable")
    place = np.cumsum(kept) - 1  # of a kept row among the densities
    conditions = tuple(dict.fromkeys(str(name) for name in names[order]))
    count = len(conditions)
    out = np.full((count, freq_hz.size), np.nan)
    out_dof, starts, lengths = np.full(count, np.nan), np.empty(count), np.empty(count)
    epochs = np.zeros(count, np.int64)
    for c, condition in enumerate(conditions):
        mine = order[names[order] == condition]
        used = mine[kept[mine]]
        span = used if used.size else mine
        starts[c] = start_s[span[0]]
        lengths[c] = np.max(start_s[span] + duration_s[span]) - starts[c]
        epochs[c] = used.size
        if used.size == 0:
            continue
        # Epochs of one chain have one length and one estimator, hence one dof.
        nu, length_s = float(dof[place[used[0]]]), float(duration_s[used[0]])
        share = independent_share(start_s[used], length_s, nu, resolution_hz * length_s)
        out[c] = average(density[place[used]], nu, params)
        out_dof[c] = degrees_of_freedom(used.size, nu, share, params)
    any_kept = epochs > 0
    return Spectra(
        signal=str(first["signal"][0]),
        unit=str(first["unit"][0]),
        rows=Rows(
            start_s=starts,
            duration_s=lengths,
            condition=conditions,
            kept=any_kept,
            reason=tuple("" if any_ else "no epoch kept" for any_ in any_kept),
            epochs=epochs,
        ),
        freq_hz=freq_hz,
        density=out,
        resolution_hz=resolution_hz,
        dof=out_dof,
    )


STAGE = Stage(
    name="spectrum.average",
    version=1,
    params=AverageParams,
    takes=(Kind.SPECTRA,),
    gives=Kind.AVERAGES,
    spec=spec,
    context=Whole(collect=collect, combine=combine),
    example={"of": "mean", "over": "power"},
    source="P. D. Welch, IEEE Trans. Audio Electroacoust. 15(2), 70-73, 1967 (mean of power); "
    "B. Allen et al., Phys. Rev. D 85, 122006, 2012 (median)",
)
