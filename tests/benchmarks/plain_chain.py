"""One channel through a plain recipe, against a script that does the same on the whole array.

Both read the file and end with a number an epoch and feature. The recipe does more: it checks,
digests the file, keeps results in a store and leaves a run folder, which is counted.
Libraries are imported before the clock starts, for both.
"""

import json
import sys
import tempfile
import time
from datetime import datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from benchmarks import in_process
from benchmarks.measured import Spread, child, ratios

RATE_HZ = 512
LABEL = "EEG Fp1-F7"
#: Largest relative difference allowed between a feature of the recipe and of the script.
TOLERANCE = 1e-9
RECIPE = f"""\
recipe: plain-chain
edition: 1
precision: double
title: The plain chain of the benchmarks
signals:
  frontal: {{labels: [{LABEL}], unit: uV, modality: eeg}}
chains:
  cortex:
    - load: {{signals: [frontal]}}
    - filter.butterworth: {{high_pass: 0.5 Hz, low_pass: 40 Hz, order_per_pass: 4}}
    - resample: {{rate: 128 Hz}}
    - exclude.amplitude: {{range: 250 uV, window: 1 s}}
    - epoch.consecutive: {{length: 4 s, overlap: 50 %}}
    - spectrum.multitaper: {{half_bandwidth: 0.75 Hz}}
    - feature.band_power:
        bands: {{delta: [0.5 Hz, 4 Hz], alpha: [8 Hz, 13 Hz]}}
        express: relative
        relative_to: [0.5 Hz, 40 Hz]
    - feature.spectral_edge: {{fraction: 95 %, within: [0.5 Hz, 30 Hz]}}
    - export.table: {{csv: never}}
"""


def measure(hours: float, rounds: int) -> dict[str, Any]:
    """Return CPU seconds of both ways, their ratio, and how far the features are apart."""
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        recording = write(folder / "long.edf", round(hours * 3600))
        times: dict[str, list[float]] = {"recipe": [], "jobs": [], "script": []}
        peaks: dict[str, list[float]] = {"recipe": [], "script": []}
        for number in range(rounds):
            into = folder / f"into{number}"
            recipe = child("plain_chain", "recipe", recording, into)
            script = child("plain_chain", "script", recording)
            times["recipe"].append(recipe.json["all_s"])
            times["jobs"].append(recipe.json["jobs_s"])
            times["script"].append(script.json["all_s"])
            peaks["recipe"].append(recipe.peak_mb)
            peaks["script"].append(script.peak_mb)
        apart, compared = difference(into, recording)
    return {
        "hours": hours,
        "rate_hz": RATE_HZ,
        "cpu_s": {name: Spread.of(values) for name, values in times.items()},
        "peak_mb": {name: Spread.of(values) for name, values in peaks.items()},
        "ratio": ratios(times["recipe"], times["script"]),
        "jobs_ratio": ratios(times["jobs"], times["script"]),
        "largest_relative_difference": apart,
        "numbers_compared": compared,
    }


def write(path: Path, length_s: int) -> Path:
    """Write a signal between pink and brown with alpha waves, and now and then an artefact."""
    from scipy import fft

    from waveassay.recording.write import WrittenSignal, write_recording

    noise = np.random.default_rng(11)
    count = length_s * RATE_HZ
    transform = fft.rfft(noise.standard_normal(count))
    transform *= 1 / np.maximum(fft.rfftfreq(count, 1 / RATE_HZ), 0.2) ** 0.75
    x = fft.irfft(transform, count)
    time_s = np.arange(count) / RATE_HZ
    x *= 20 / np.std(x)
    x += 12 * np.sin(2 * np.pi * 10 * time_s) * np.sin(2 * np.pi * 0.05 * time_s) ** 2
    for start_s in range(90, length_s, 180):
        x[start_s * RATE_HZ : (start_s + 1) * RATE_HZ] += 600
    signal = WrittenSignal(LABEL, "uV", Fraction(RATE_HZ), x, -3276.8, 3276.7)
    write_recording(path, [signal], datetime(2031, 4, 5, 9, 30))
    return path


def run(recording: Path, into: Path) -> dict[str, float]:
    """Run the recipe in this process; return CPU seconds of all of it, and of its jobs alone."""
    return in_process.run(RECIPE, recording, into)


def script(recording: Path) -> dict[str, float]:
    """Run the script in this process and return its CPU seconds."""
    from benchmarks.plain_script import features_of_file

    start_s = time.process_time()
    features_of_file(recording)
    return {"all_s": time.process_time() - start_s}


def difference(into: Path, recording: Path) -> tuple[float, int]:
    """Return the largest relative difference of any feature of any kept epoch, and how many.

    Raises
    ------
    AssertionError
        When the two have other epochs, or keep others.
    """
    import pyarrow.parquet as pq

    from benchmarks.plain_script import features_of_file

    (path,) = into.glob("runs/*/epochs/cortex/*.parquet")
    table = pq.read_table(path)
    plain = features_of_file(recording)
    kept = table["kept"].to_numpy()
    assert np.array_equal(table["start_s"].to_numpy(), plain.start_s), "other epochs"
    assert np.array_equal(kept, plain.kept), "other epochs are kept"
    apart, compared = 0.0, 0
    for name, values in plain.columns.items():
        ours = table[name].to_numpy()[kept]
        apart = max(apart, float(np.max(np.abs(ours / values - 1))))
        compared += values.size
    return apart, compared


if __name__ == "__main__":
    way, source, *rest = sys.argv[1:]
    found = run(Path(source), Path(rest[0])) if way == "recipe" else script(Path(source))
    print(json.dumps(found))
