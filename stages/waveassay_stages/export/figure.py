"""Figure of averaged spectra with confidence bands, or of spectra over time."""

from collections.abc import Sequence
from typing import Literal

from pydantic import Field

from waveassay.contract import (
    Decibel,
    Figure,
    Findings,
    Hertz,
    Kind,
    Params,
    Part,
    Share,
    SinkSpec,
    Spectra,
    SpectraSpec,
    Stage,
    Whole,
)
from waveassay_stages.export._draw import message, reference_label
from waveassay_stages.export._rows import Gathered, collect_rows, joined
from waveassay_stages.export._spectrogram import draw_spectrogram
from waveassay_stages.export._spectrum import draw_spectra


class FigureParams(Params):
    """Parameters of `export.figure`."""

    show: Literal["spectrum", "spectrogram"] = Field(
        description="spectrum: averages, a line a condition; spectrogram: every epoch over time."
    )
    within: tuple[Hertz, Hertz] | None = Field(
        default=None, description="Frequencies shown; all without it."
    )
    range: tuple[Decibel, Decibel] | None = Field(
        default=None,
        description="Levels shown, dB re 1 unit squared per Hz. Without it: for a spectrum all but "
        "the lowest 2 %, for a spectrogram the 2nd to the 99th percentile.",
    )
    confidence: Share = Field(
        default=0.95, gt=0, lt=1, description="Confidence of the band around an average spectrum."
    )
    colours: Literal["viridis", "cividis", "magma"] = Field(
        default="viridis", description="Perceptually uniform colour map of a spectrogram."
    )


def takes(params: FigureParams) -> tuple[Kind, ...]:
    """Averages for a spectrum, single epochs for a spectrogram."""
    return (Kind.AVERAGES,) if params.show == "spectrum" else (Kind.SPECTRA,)


def spec(params: FigureParams, given: SpectraSpec, findings: Findings) -> SinkSpec:
    """Check the two ranges; what lies outside a filter's pass band may be shown."""
    if params.within is not None:
        low, high = params.within
        if not 0 <= low < high:
            findings.refuse(f"the range {low:g} to {high:g} Hz is empty; low comes first", "within")
        elif given.top_hz is not None and high > given.top_hz:
            findings.refuse(
                f"the range ends at {high:g} Hz, above the Nyquist frequency {given.top_hz:g} Hz",
                "within",
            )
        elif given.bin_hz is not None and high - low < 2 * given.bin_hz:
            findings.refuse(
                f"the range {low:g} to {high:g} Hz is narrower than two of the spectrum's bins, "
                f"which are {given.bin_hz:g} Hz apart",
                "within",
            )
    if params.range is not None and not params.range[0] < params.range[1]:
        low, high = params.range
        findings.refuse(f"the range {low:g} to {high:g} dB is empty; low comes first", "range")
    return SinkSpec(given.signal)


def collect(params: FigureParams, spectra: Spectra) -> Part:
    """Return what the figure needs of one stretch."""
    return collect_rows(spectra, params.within)


def combine(params: FigureParams, parts: Sequence[Part]) -> Figure:
    """Draw the figure of one signal."""
    data = joined(parts)
    if not data.kept.any():
        return _nothing(params, data)
    if params.show == "spectrum":
        picture = draw_spectra(data, params.confidence, params.range)
        caption = (
            f"Average spectrum of {data.signal} by condition, one-sided power density in "
            f"{reference_label(data.unit)}. Bands: {params.confidence * 100:g} % confidence "
            "from the equivalent degrees of freedom of each average."
        )
    else:
        picture = draw_spectrogram(data, params.range, params.colours)
        caption = (
            f"Spectrogram of {data.signal}, one-sided power density in "
            f"{reference_label(data.unit)}; {int(data.kept.sum())} of {len(data.kept)} epochs "
            "kept. Hatched: no epoch kept. Blank: gaps, and time outside all conditions. Where "
            "epochs are denser than the picture's columns, the mean power of those kept."
        )
    return Figure(data.signal, params.show, picture, caption)


def _nothing(params: FigureParams, data: Gathered) -> Figure:
    count = len(data.kept)
    if params.show == "spectrum":
        what = "average spectrum"
        text = ["Nothing to show", "No condition has an epoch that is kept."]
    else:
        what = "spectrogram"
        text = ["Nothing to show", f"None of {count} epochs is kept." if count else "No epochs."]
    picture = message(data.name, what, text)
    return Figure(data.signal, params.show, picture, f"{data.signal}, {what}: {text[1]}")


STAGE = Stage(
    name="export.figure",
    version=2,
    params=FigureParams,
    takes=takes,
    gives=Kind.FIGURE,
    spec=spec,
    context=Whole(collect, combine),
    example={"show": "spectrogram", "within": ["0 Hz", "30 Hz"], "range": ["-20 dB", "20 dB"]},
)
