"""What a figure needs of spectra: small arrays from each stretch, joined in order of time."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Bools, Floats, Ints, Part, Spectra

# More lines of frequency than a picture has pixels for are averaged in equal groups.
MOST_BINS = 512


@dataclass(frozen=True)
class Gathered:
    """All rows of one signal. ``level_db`` is float32, shape (rows, f), NaN where there is none."""

    recording: str
    signal: str
    unit: str
    freq_hz: Floats
    level_db: NDArray[np.float32]
    start_s: Floats
    duration_s: Floats
    condition: tuple[str, ...]
    kept: Bools
    epochs: Ints
    dof: Floats

    @property
    def name(self) -> str:
        """What the picture is of: the recording, where it is known, and the signal."""
        return f"{self.recording}, {self.signal}" if self.recording else self.signal


def collect_rows(spectra: Spectra, within: tuple[float, float] | None) -> Part:
    """Return the arrays of one stretch, cut to a range and at most `MOST_BINS` lines."""
    freq, density = spectra.freq_hz, spectra.density
    if within is not None:
        slack = 1e-6 * spectra.bin_hz
        inside = (freq >= within[0] - slack) & (freq <= within[1] + slack)
        freq, density = freq[inside], density[:, inside]
    group = -(-freq.size // MOST_BINS)
    if group > 1:
        whole = freq.size // group * group
        freq = np.mean(freq[:whole].reshape(-1, group), axis=-1)
        density = np.mean(
            np.ascontiguousarray(density[:, :whole]).reshape(len(density), freq.size, group),
            axis=-1,
        )
    level = np.full(density.shape, np.nan)
    np.log10(density, out=level, where=density > 0)
    rows = spectra.rows
    return {
        "signal": np.array(spectra.signal),
        "unit": np.array(spectra.unit),
        "freq_hz": np.asarray(freq, np.float64),
        "level_db": (10 * level).astype(np.float32),
        "start_s": rows.start_s,
        "duration_s": rows.duration_s,
        "condition": np.array(rows.condition, dtype=np.str_),
        "kept": rows.kept,
        "epochs": rows.epochs,
        "dof": spectra.dof,
    }


def joined(parts: Sequence[Part]) -> Gathered:
    """Join the parts of one signal."""
    first = parts[0]

    def stacked(name: str) -> NDArray[np.generic]:
        return np.concatenate([part[name] for part in parts])

    level = stacked("level_db").astype(np.float32)
    has_level = np.any(np.isfinite(level), axis=-1)
    return Gathered(
        recording=str(first.get("recording", "")),
        signal=str(first["signal"]),
        unit=str(first["unit"]),
        freq_hz=first["freq_hz"],
        level_db=level,
        start_s=stacked("start_s").astype(np.float64),
        duration_s=stacked("duration_s").astype(np.float64),
        condition=tuple(stacked("condition").astype(np.str_).tolist()),
        kept=stacked("kept").astype(np.bool_) & has_level,
        epochs=stacked("epochs").astype(np.int64),
        dof=stacked("dof").astype(np.float64),
    )
