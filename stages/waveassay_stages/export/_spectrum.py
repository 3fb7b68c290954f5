"""Drawing of averaged spectra with their confidence bands."""

import numpy as np

from waveassay.contract import Floats
from waveassay_stages.export._draw import (
    LINE_COLOURS,
    LINE_STYLES,
    canvas,
    png,
    reference_label,
    shortened,
    title,
)
from waveassay_stages.export._rows import Gathered


def confidence_band(level_db: Floats, dof: float, share: float) -> tuple[Floats, Floats]:
    """Return the lower and upper limits of a level in decibels, from its degrees of freedom.

    NaN where the degrees of freedom are not known.
    """
    from waveassay.contract.statistics import confidence_factors

    lower, upper = confidence_factors(dof if dof > 0 else np.nan, share)
    return level_db + 10 * np.log10(lower), level_db + 10 * np.log10(upper)


def level_limits(levels: Floats) -> tuple[float, float]:
    """Return limits, multiples of 5 dB, that hold all but the lowest 2 % of the levels."""
    finite = levels[np.isfinite(levels)]
    low, high = np.percentile(finite, 2), np.max(finite)
    return float(5 * np.floor((low - 1) / 5)), float(5 * np.ceil((high + 1) / 5))


def draw_spectra(
    data: Gathered, confidence: float, level_range: tuple[float, float] | None
) -> bytes:
    """Draw one line a row, with its band, and return the picture."""
    rows = np.flatnonzero(data.kept)
    with canvas() as figure:
        axes = figure.add_subplot()
        shown = []
        for place, row in enumerate(rows):
            level = data.level_db[row].astype(np.float64)
            colour = LINE_COLOURS[place % len(LINE_COLOURS)]
            style = LINE_STYLES[place % len(LINE_STYLES)]
            lower, upper = confidence_band(level, float(data.dof[row]), confidence)
            shown += [level, lower, upper]
            count = int(data.epochs[row])
            label = f"{shortened(data.condition[row], 28)} ({count} epoch{'s' * (count != 1)})"
            axes.fill_between(data.freq_hz, lower, upper, color=colour, alpha=0.16, linewidth=0)
            axes.plot(
                data.freq_hz, level, color=colour, linestyle=style, linewidth=1.6, label=label
            )
        axes.set_xlim(float(data.freq_hz[0]), float(data.freq_hz[-1]))
        axes.set_ylim(*(level_range or level_limits(np.concatenate(shown))))
        axes.set_xlabel("Frequency (Hz)")
        axes.set_ylabel(f"Power density ({reference_label(data.unit)})")
        axes.grid(color="#e3e3e3", linewidth=0.7)
        axes.set_axisbelow(True)
        axes.spines[["top", "right"]].set_visible(False)
        title(axes, data.signal, f"average spectrum with {confidence * 100:g} % confidence band")
        if rows.size <= 6:
            axes.legend(loc="upper right")
        else:
            axes.legend(loc="center left", bbox_to_anchor=(1.01, 0.5), fontsize=8)
        return png(figure)
