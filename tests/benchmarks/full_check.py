"""Whether the ways do the same job: features against the script's, spectra against the textbook's.

Only the middle of a recording is looked at: a script's edge rule is its own.
"""

import csv
import tempfile
from collections import defaultdict
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchmarks import full_data, full_recipe, full_script, plain_script
from benchmarks.measured import command

#: Largest relative difference allowed between a power of ours and of the script, which resamples
#: with a shorter kernel; between a frequency, which moves far where a spectrum is low; and the
#: share of epochs that may be kept by one of them alone.
TOLERANCE, FREQUENCY_TOLERANCE, KEPT_TOLERANCE = 5e-3, 3e-2, 1e-3
_FREQUENCIES = ("welch_edge", "spectral_edge", "median_frequency")
#: Largest relative error of a bin against the textbook's: what is acceptable, what is excellent.
PSD_TARGETS = {"acceptable": 1e-3, "excellent": 5e-5}
EDGE_S = 60.0
_KERNEL = plain_script.kernel(full_data.RATE_HZ // full_script.NEW_RATE_HZ)


class DifferentJobError(Exception):
    """The ways do not do the same, so that comparing their times means nothing."""


@dataclass(frozen=True)
class Epochs:
    """What a way found: shape (channels, epochs) each, in the order of channels and time."""

    start_s: NDArray[np.float64]
    kept: NDArray[np.bool_]
    columns: dict[str, NDArray[np.float64]]


def ours(into: Path) -> Epochs:
    """Read what a run left."""
    import pyarrow.parquet as pq

    (path,) = into.glob("runs/*/epochs/cortex/*.parquet")
    table = pq.read_table(path)
    signals = table["signal"].to_pylist()
    shape = (len(set(signals)), -1)
    order = np.lexsort((table["start_s"].to_numpy(), np.array(signals)))
    shaped = {
        name.split("#")[0]: table[name].to_numpy(zero_copy_only=False)[order].reshape(shape)
        for name in table.column_names
        if table[name].type in ("double", "float", "bool")
    }
    start_s, kept = shaped.pop("start_s"), shaped.pop("kept").astype(bool)
    del shaped["duration_s"]
    return Epochs(start_s, kept, shaped)


def scripts(table: Path) -> Epochs:
    """Read what a script wrote."""
    columns: dict[str, list[Any]] = defaultdict(list)
    with table.open(encoding="utf-8", newline="") as file:
        for row in csv.DictReader(file):
            for name, text in row.items():
                columns[name].append(text)
    shape = (len(set(columns["channel"])), -1)

    def numbers(name: str) -> NDArray[np.float64]:
        return np.array(columns[name], np.float64).reshape(shape)

    kept = np.array([text == "True" for text in columns["kept"]]).reshape(shape)
    return Epochs(numbers("start_s"), kept, {name: numbers(name) for name in full_script.COLUMNS})


def require_same_job(ours: Epochs, others: Epochs) -> float:
    """Return the largest relative difference of a power or share of an epoch that both keep.

    Raises
    ------
    DifferentJobError
        When they have other epochs or columns, keep others, or differ by more than is allowed.
    """
    if not np.array_equal(ours.start_s, others.start_s):
        raise DifferentJobError("the script has other epochs than the run")
    if set(ours.columns) != set(others.columns):
        raise DifferentJobError(f"other columns: {set(ours.columns) ^ set(others.columns)}")
    middle = _middle(ours)
    apart = np.mean((ours.kept != others.kept)[middle])
    both = middle & ours.kept & others.kept
    if apart > KEPT_TOLERANCE or not np.any(both):
        raise DifferentJobError(
            f"{apart:.2%} of the epochs are kept by the run or by the script alone"
        )
    worst = {
        name: _largest(values[both], others.columns[name][both])
        for name, values in ours.columns.items()
    }
    for name, apart in worst.items():
        if not apart <= (FREQUENCY_TOLERANCE if name in _FREQUENCIES else TOLERANCE):
            raise DifferentJobError(
                f"{name} of the run and of the script differ by {apart:.2g} of its size"
            )
    return max(apart for name, apart in worst.items() if name not in _FREQUENCIES)


def psd_errors(precision: str, channels: int = 2, length_s: int = 900) -> dict[str, float]:
    """Return the largest relative error of any bin of any kept epoch, 0.5 to 40 Hz, by estimator.

    The textbook's chain is the steps' definitions one after another on the whole recording, in
    float64: `full_script` with the kernel that the recipe stands for.
    """
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        path = full_data.write(folder / "few.edf", channels, length_s)
        (folder / "recipe.yaml").write_text(full_recipe.spectra(precision), encoding="utf-8")
        command("run", folder / "recipe.yaml", path, "--into", folder / "into", "--workers", 1)
        found = ours(folder / "into")
        y = full_script.cleaned(full_script.read(path), _KERNEL)
    epochs, _ = full_script.cut(y)
    kept = _middle(found) & found.kept
    errors = {}
    for name, way, width_hz in (
        ("welch", full_script.welch, full_recipe.WELCH_BIN_HZ),
        ("multitaper", full_script.multitaper, full_recipe.MULTITAPER_BIN_HZ),
    ):
        _, density = way(epochs)
        errors[name] = max(
            _largest(found.columns[f"{name}_bin.b{k}"][kept] / width_hz, density[..., k][kept])
            for k in full_recipe.bins(width_hz)
        )
    return errors


def _middle(epochs: Epochs) -> NDArray[np.bool_]:
    last_s = float(epochs.start_s.max()) + full_script.LENGTH / full_script.NEW_RATE_HZ
    inside = (epochs.start_s >= EDGE_S) & (epochs.start_s < last_s - EDGE_S)
    return np.asarray(inside, np.bool_)


def _largest(some: NDArray[np.float64], others: NDArray[np.float64]) -> float:
    return float(np.max(np.abs(some / others - 1)))
