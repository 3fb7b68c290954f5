"""Harmonics of a pulse wave: fundamental, amplitudes, phases, and how many rebuild the wave."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    ColumnSpec,
    EachRow,
    Epochs,
    EpochsSpec,
    Features,
    FeaturesSpec,
    Findings,
    Floats,
    Hertz,
    Kind,
    Params,
    Share,
    SpectraSpec,
    Stage,
    check_band,
)
from waveassay_stages.feature._harmonic_fit import (
    EpochFitter,
    find_fundamental,
    harmonics_below_nyquist,
)
from waveassay_stages.feature._rows import missing_reasons

PhaseFrom = Literal["fundamental", "epoch_start"]
Of = Literal["periodic", "whole"]

# Below this share of the largest amplitude a phase is that of rounding errors.
_NO_AMPLITUDE = 1e-9
_ROUNDING = 1e-12

ABSENT = "no fundamental in the range"
WEAK = "harmonics explain too little"
ABOVE = "a harmonic is above Nyquist"
NOT_REBUILT = "the harmonics fitted do not reach the share"


class HarmonicsParams(Params):
    """Parameters of `feature.harmonics`."""

    fundamental_within: tuple[Hertz, Hertz] = Field(
        description="Range searched for the fundamental: the pulse rate per minute over 60."
    )
    harmonics: int = Field(
        default=10, ge=1, le=100, description="Harmonics given, the fundamental being the first."
    )
    fitted: int = Field(
        default=40,
        ge=1,
        le=100,
        description="Harmonics fitted, as far as they lie below Nyquist: the periodic part.",
    )
    phase_from: PhaseFrom = Field(
        default="fundamental",
        description="fundamental: phase k less k times phase 1, the same wherever an epoch starts; "
        "epoch_start: phase at the epoch's first sample.",
    )
    share: Share = Field(
        default=0.95, gt=0, lt=1, description="Share of the variance that is to be rebuilt."
    )
    of: Of = Field(
        default="periodic",
        description="What the share is of. periodic: the variance of all harmonics fitted; whole: "
        "the variance of the epoch, with slow swings and noise.",
    )
    trend_below: Hertz = Field(
        default=0.4,
        ge=0,
        description="Slower swings, such as a ventilator's, are fitted beside the harmonics by "
        "cosines up to this frequency; 0 Hz leaves the mean alone.",
    )
    explained_at_least: Share = Field(
        default=0.5,
        ge=0,
        lt=1,
        description="An epoch whose harmonics explain a smaller share of its variance (without "
        "the trend) has no pulse wave.",
    )


@dataclass(frozen=True)
class PulseWave:
    r"""Harmonic series of one epoch: :math:`m + \sum_k A_k \cos(2 \pi k f_1 t + \varphi_k)`.

    Attributes
    ----------
    fundamental_hz : f1.
    mean : m, in the signal's unit; over whole beats, unlike the plain mean of the samples.
    amplitude : A, in the signal's unit (zero to peak), shape (fitted,).
    phase_deg : of cosines at the epoch's first sample, in (-180, 180], shape (fitted,).
    explained : share of the variance, without the trend, that the harmonics explain.
    """

    fundamental_hz: float
    mean: float
    amplitude: Floats
    phase_deg: Floats
    explained: float


def pulse_wave(
    x: Floats,
    rate_hz: float,
    low_hz: float,
    high_hz: float,
    *,
    fitted: int = 40,
    trend_below_hz: float = 0.4,
) -> PulseWave | None:
    r"""Fit a harmonic series with a slow trend to one epoch by least squares.

    .. math::

        x_n = \sum_{j=0}^{J} b_j \cos\frac{\pi j (n + 1/2)}{N}
            + \sum_{k=1}^{K} A_k \cos(2 \pi k f_1 n / f_s + \varphi_k) + e_n

    The fundamental is the f1 of the range that minimises the sum of squares of e, found on a grid
    and refined to rounding; of candidates that are multiples of one another the highest that
    explains nearly as much is taken (`find_fundamental`). J is the number of half periods of
    ``trend_below_hz`` in the epoch. An epoch should hold several beats of nearly equal length,
    some 5 s to 20 s: beats of changing length have no one fundamental.

    Parameters
    ----------
    x : samples, shape (n,).
    rate_hz : sampling rate.
    low_hz, high_hz : range of the fundamental.
    fitted : K, as far as the harmonics lie below Nyquist by half a cycle an epoch.
    trend_below_hz : highest frequency of the trend.

    Returns
    -------
    The series; None where the epoch is constant or its fundamental is not in the range.

    References
    ----------
    B. G. Quinn, P. J. Thomson, Biometrika 78, 65-74, 1991 (estimating the frequency of a periodic
    function by least squares). From memory.
    """
    terms = int(2 * trend_below_hz * x.size / rate_hz + 1e-9) + 1
    fitter = EpochFitter(np.asarray(x, np.float64), terms)
    spread = float(np.max(np.abs(fitter.x), initial=0.0))
    if spread <= 1e-12 * abs(fitter.plain_mean) or fitter.left <= 0:
        return None
    cycles = find_fundamental(fitter, low_hz / rate_hz, high_hz / rate_hz, fitted)
    if cycles is None:
        return None
    count = harmonics_below_nyquist(cycles, fitter.size, fitted)
    fit = fitter.fit(cycles, count)
    # From the epoch's middle to its first sample.
    turn = 2 * np.pi * cycles * np.arange(1, count + 1) * ((fitter.size - 1) / 2)
    return PulseWave(
        fundamental_hz=cycles * rate_hz,
        mean=fit.mean,
        amplitude=np.hypot(fit.cosine, fit.sine),
        phase_deg=wrapped_deg(np.rad2deg(np.arctan2(-fit.sine, fit.cosine) - turn)),
        explained=min(1.0, fit.gained / fit.left),
    )


def wrapped_deg(angle: Floats) -> Floats:
    """Return angles in (-180, 180] degrees."""
    turned: Floats = 180.0 - np.mod(180.0 - angle, 360.0)
    return turned


def relative_phase_deg(phase_deg: Floats) -> Floats:
    r"""Return :math:`\varphi_k - k \varphi_1`, wrapped; the first is 0.

    A shift in time turns harmonic k by k times as much as the first, so this does not depend on
    where the epoch starts.
    """
    k = np.arange(1, phase_deg.size + 1)
    relative = wrapped_deg(phase_deg - k * phase_deg[0])
    relative[0] = 0.0
    return relative


def harmonics_needed(amplitude: Floats, share: float, variance: float | None = None) -> int | None:
    r"""Return the least n for which the first n harmonics reach a share of the variance.

    .. math:: \sum_{k=1}^{n} A_k^2 / 2 \ge p V

    V is ``variance``, or that of all harmonics given. None where all of them do not reach it.
    """
    rebuilt = np.cumsum(amplitude**2) / 2
    whole = float(rebuilt[-1]) if variance is None else variance
    enough = np.flatnonzero(rebuilt >= share * whole * (1 - _ROUNDING))
    return int(enough[0]) + 1 if enough.size else None


def spec(params: HarmonicsParams, given: EpochsSpec, findings: Findings) -> FeaturesSpec:
    """Check the range searched against the epoch, the trend and the rate."""
    low, high = params.fundamental_within
    signal = given.signal
    as_spectrum = SpectraSpec(
        signal,
        window_s=given.length_s,
        resolution_hz=None,
        bin_hz=None,
        top_hz=signal.nyquist_hz,
    )
    check_band(low, high, as_spectrum, findings, "fundamental_within")
    if 0 <= low < high:
        if low * given.length_s < 2 - 1e-9:
            findings.refuse(
                f"an epoch of {given.length_s:g} s holds fewer than two cycles of {low:g} Hz; "
                f"start the range at {2 / given.length_s:g} Hz or more, or take longer epochs",
                "fundamental_within",
            )
        if params.trend_below > low - 0.5 / given.length_s + 1e-9:
            findings.refuse(
                f"the trend up to {params.trend_below:g} Hz reaches into the range of the "
                f"fundamental from {low:g} Hz; {given.length_s:g} s tell them apart at "
                f"{0.5 / given.length_s:g} Hz between them",
                "trend_below",
            )
        nyquist = signal.nyquist_hz
        if nyquist is not None and params.harmonics * low > nyquist:
            findings.warn(
                f"harmonic {params.harmonics} of {low:g} Hz and more is above the Nyquist "
                f"frequency {nyquist:g} Hz and will be missing",
                "harmonics",
            )
        top = signal.pass_hz[1]
        if top is not None and params.harmonics * low > top:
            findings.warn(
                f"harmonic {params.harmonics} of {low:g} Hz and more is above {top:g} Hz, up to "
                "which the filters before it pass",
                "harmonics",
            )
    if params.fitted < params.harmonics:
        findings.refuse(
            f"{params.fitted} harmonics are fitted, fewer than the {params.harmonics} to be given",
            "fitted",
        )
    return FeaturesSpec(signal, _columns(params, signal.unit))


def _columns(params: HarmonicsParams, unit: str) -> tuple[ColumnSpec, ...]:
    phase = {
        "fundamental": "phase of harmonic {k} less {k} times that of the fundamental",
        "epoch_start": "phase of harmonic {k}, a cosine, at the epoch's first sample",
    }[params.phase_from]
    whole = {
        "periodic": f"all harmonics fitted (up to {params.fitted})",
        "whole": "the whole epoch",
    }[params.of]
    numbers = range(1, params.harmonics + 1)
    return (
        ColumnSpec("fundamental", "Hz", "fundamental frequency of the pulse wave"),
        ColumnSpec("mean", unit, "mean of the wave, slow swings set apart"),
        *(
            ColumnSpec(f"amplitude_{k}", unit, f"amplitude (zero to peak) of harmonic {k}")
            for k in numbers
        ),
        *(ColumnSpec(f"phase_{k}", "deg", phase.format(k=k)) for k in numbers),
        ColumnSpec(
            "needed",
            "1",
            f"harmonics that rebuild {params.share * 100:g} % of the variance of {whole}",
        ),
        ColumnSpec(
            "explained", "1", "share of the variance, slow swings set apart, that is periodic"
        ),
    )


def run(params: HarmonicsParams, epochs: Epochs) -> Features:
    """Return the harmonics of each kept epoch, one epoch at a time."""
    rows = epochs.rows
    rate_hz = float(epochs.signal.rate_hz)
    columns = {column.part: np.full(len(rows), np.nan) for column in _columns(params, "")}
    flags = {text: np.zeros(len(rows), np.bool_) for text in (ABSENT, WEAK, ABOVE, NOT_REBUILT)}
    samples = epochs.samples().astype(np.float64, copy=False)
    for x, row in zip(samples, np.flatnonzero(epochs.kept), strict=True):
        wave = pulse_wave(
            x,
            rate_hz,
            *params.fundamental_within,
            fitted=params.fitted,
            trend_below_hz=params.trend_below,
        )
        if wave is None:
            flags[ABSENT][row] = True
            continue
        columns["explained"][row] = wave.explained
        if wave.explained < params.explained_at_least:
            flags[WEAK][row] = True
            continue
        columns["fundamental"][row] = wave.fundamental_hz
        columns["mean"][row] = wave.mean
        phase = wave.phase_deg
        if params.phase_from == "fundamental":
            phase = relative_phase_deg(phase)
        phase = np.where(wave.amplitude > _NO_AMPLITUDE * wave.amplitude.max(), phase, np.nan)
        given = min(params.harmonics, wave.amplitude.size)
        for k in range(given):
            columns[f"amplitude_{k + 1}"][row] = wave.amplitude[k]
            columns[f"phase_{k + 1}"][row] = phase[k]
        flags[ABOVE][row] = given < params.harmonics
        variance = float(np.var(x)) if params.of == "whole" else None
        needed = harmonics_needed(wave.amplitude, params.share, variance)
        if needed is None:
            flags[NOT_REBUILT][row] = True
        else:
            columns["needed"][row] = needed
    reasons = missing_reasons(rows, [(where, text) for text, where in flags.items()])
    return Features(epochs.signal.name, rows, columns, reasons)


STAGE = Stage(
    name="feature.harmonics",
    version=2,
    params=HarmonicsParams,
    takes=(Kind.EPOCHS,),
    gives=Kind.FEATURES,
    spec=spec,
    run=run,
    context=EachRow(),
    example={"fundamental_within": ["0.7 Hz", "3 Hz"], "harmonics": 10},
    source="B. G. Quinn, P. J. Thomson, Biometrika 78, 65-74, 1991",
)
