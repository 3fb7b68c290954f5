"""What a recipe's ``precision`` changes: how samples and spectra are held, and by how much.

Accuracy is judged on a wave as an EEG has it, without an offset and 100 mV away from zero, which
24 bits hold and the 24 binary digits of a float32 do not.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from functools import cached_property
from pathlib import Path

import numpy as np
import pytest

from running import numbers, rows, run
from waveassay.execute.run import RunOutcome
from waveassay.recording.write import WrittenSignal, write_recording

RATE_HZ, LENGTH_S = 512, 300
BANDS = {"delta": (0.5, 4.0), "alpha": (8.0, 13.0), "beta": (13.0, 30.0)}

HEAD = """\
recipe: precise
edition: 1
precision: {precision}
signals:
  level: {{labels: [level], unit: uV, modality: eeg}}
  offset: {{labels: [offset], unit: uV, modality: eeg}}
conditions:
  middle: {{start: {{time: 60 s}}, length: 180 s}}    # no end of the piece is felt there
chains:
"""
CHAIN = """\
  {name}:
    - load: {{signals: [level, offset]}}
{filters}
    - exclude.amplitude: {{range: 400 uV, window: 1 s}}
    - epoch.consecutive: {{length: 4 s, overlap: 50 %}}
    - {spectrum}
    - feature.band_power:
        bands: {{delta: [0.5 Hz, 4 Hz], alpha: [8 Hz, 13 Hz], beta: [13 Hz, 30 Hz]}}
        express: absolute
    - feature.spectral_edge: {{within: [0.5 Hz, 30 Hz]}}
    - feature.spectral_entropy: {{within: [0.5 Hz, 40 Hz]}}
    - export.table: {{}}
    - spectrum.average: {{}}
"""
BAND = '    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz, cutoff_at: "-6 dB"}'
LOW = '    - filter.butterworth: {low_pass: 40 Hz, cutoff_at: "-6 dB"}'
DOWN = "    - resample: {rate: 128 Hz}"
CHAINS = {
    "textbook": (BAND, "spectrum.periodogram: {window: hann}"),
    "passed": (f"{BAND}\n{DOWN}", "spectrum.multitaper: {half_bandwidth: 0.75 Hz}"),
    "unpassed": (f"{LOW}\n{DOWN}", "spectrum.multitaper: {half_bandwidth: 0.75 Hz}"),
    "welch": (f"{BAND}\n{DOWN}", "spectrum.welch: {segment: 2 s}"),
}


def recipe(precision: str, **chains: tuple[str, str]) -> str:
    """Return a recipe of some chains: name -> filters, spectrum."""
    return HEAD.format(precision=precision) + "".join(
        CHAIN.format(name=name, filters=filters, spectrum=spectrum)
        for name, (filters, spectrum) in chains.items()
    )


def brain_wave(length_s: int) -> np.ndarray:
    """Return noise whose density falls with frequency, a rhythm, the line's hum, one artefact."""
    rng = np.random.default_rng(20310406)
    count = length_s * RATE_HZ
    freq_hz = np.fft.rfftfreq(count, 1 / RATE_HZ)
    lines = rng.standard_normal(freq_hz.size) + 1j * rng.standard_normal(freq_hz.size)
    lines[0] = 0
    noise = np.fft.irfft(lines / np.maximum(freq_hz, 0.5), count)
    time_s = np.arange(count) / RATE_HZ
    rhythm = 10 * np.sin(2 * np.pi * 10.1 * time_s) * (1 + 0.4 * np.sin(2 * np.pi * 0.07 * time_s))
    x = 20 * noise / np.std(noise) + rhythm + 5 * np.sin(2 * np.pi * 50 * time_s)
    x[count // 2 : count // 2 + RATE_HZ // 4] += 3000
    return np.asarray(x, np.float64)


@dataclass
class Made:
    """A recording and what both precisions make of it."""

    folder: Path
    path: Path
    samples: Mapping[str, np.ndarray]

    @cached_property
    def outcomes(self) -> Mapping[str, RunOutcome]:
        return {
            precision: run(recipe(precision, **CHAINS), [self.path], self.folder / "out")
            for precision in ("double", "standard")
        }

    def table(self, precision: str, name: str) -> list[dict[str, str]]:
        return rows(self.outcomes[precision].folder, name)

    def spectrum(self, precision: str, chain: str, signal: str) -> tuple[np.ndarray, np.ndarray]:
        """Return frequencies and densities of an average, 0.5 to 40 Hz."""
        table = self.table(precision, f"averages/{chain}-spectra")
        table = [row for row in table if row["signal"] == signal]
        freq_hz = np.array(numbers(table, "frequency_hz"))
        inside = (freq_hz >= 0.5) & (freq_hz <= 40)
        return freq_hz[inside], np.array(numbers(table, "density"))[inside]


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Made:
    """Write 24 bits a sample, of 31.25 nV and of 29.8 nV."""
    folder = tmp_path_factory.mktemp("precise")
    x = brain_wave(LENGTH_S)
    given = {"level": (x, 262144.0), "offset": (x + 100_000, 250_000.0)}
    signals = [
        WrittenSignal(name, "uV", Fraction(RATE_HZ), values, -largest, largest)
        for name, (values, largest) in given.items()
    ]
    path = folder / "a.bdf"
    write_recording(path, signals, datetime(2031, 4, 6, 9, 0), bdf=True)
    steps = {name: 2 * largest / (2**24 - 1) for name, (_, largest) in given.items()}
    held = {
        name: np.rint((values + largest) / steps[name]) * steps[name] - largest
        for name, (values, largest) in given.items()
    }
    return Made(folder, path, held)


@pytest.mark.parametrize("signal", ["level", "offset"])
@pytest.mark.parametrize("chain", CHAINS)
def test_standard_agrees_with_double(made: Made, chain: str, signal: str) -> None:
    """Densities to 5e-5 from 0.5 to 40 Hz, features to 1e-5, everything else to the letter."""
    freq_hz, expected = made.spectrum("double", chain, signal)
    found = made.spectrum("standard", chain, signal)[1]
    assert freq_hz[-1] == 40
    assert found == pytest.approx(expected, rel=5e-5)
    tables = (made.table(p, f"epochs/{chain}") for p in ("standard", "double"))
    kept = 0
    for row, same in zip(*tables, strict=True):
        for column, value in same.items():
            if column.startswith(("band_power", "spectral")) and same["kept"] == "true":
                assert float(row[column]) == pytest.approx(float(value), rel=1e-5), column
            else:
                assert row[column] == value, column
        kept += same["kept"] == "true"
    assert 150 < kept < len(made.table("double", f"epochs/{chain}"))
    assert made.table("standard", "excluded") == made.table("double", "excluded")


@pytest.mark.parametrize("signal", ["level", "offset"])
def test_double_is_the_textbook_chain(made: Made, signal: str) -> None:
    """The same steps by scipy alone, on the samples that the file holds."""
    from scipy import signal as textbook

    sections = textbook.butter(4, [0.5, 40], "bandpass", fs=RATE_HZ, output="sos")
    x = textbook.sosfiltfilt(sections, made.samples[signal], padlen=10 * RATE_HZ)
    table = [row for row in made.table("double", "epochs/textbook") if row["signal"] == signal]
    first = [round(float(row["start_s"]) * RATE_HZ) for row in table if row["kept"] == "true"]
    epochs = np.array([x[start : start + 4 * RATE_HZ] for start in first])
    freq_hz, density = textbook.periodogram(epochs, RATE_HZ, "hann", detrend="constant")
    inside = (freq_hz >= 0.5) & (freq_hz <= 40)
    found_hz, found = made.spectrum("double", "textbook", signal)
    assert found_hz == pytest.approx(freq_hz[inside], rel=1e-15)
    assert found == pytest.approx(density.mean(axis=0)[inside], rel=1e-9)
    # On 100 mV, a float64 filter's own rounding is seen in single epochs; measured: 2e-9.
    of_epochs = 1e-9 if signal == "level" else 1e-8
    for name, (low_hz, high_hz) in BANDS.items():
        within = (freq_hz >= low_hz) & (freq_hz < high_hz)
        powers = density[:, within].sum(axis=-1) * freq_hz[1]
        column = numbers([row for row in table if row["kept"] == "true"], f"band_power.{name}")
        assert column == pytest.approx(powers, rel=of_epochs)


def test_float32_begins_behind_a_high_pass_and_is_told(made: Made) -> None:
    told = {
        (precision, row["chain"]): row["value"]
        for precision in ("standard", "double")
        for row in made.table(precision, "derived")
        if row["quantity"] == "samples given as"
    }
    assert told == {
        (precision, chain): "float32"
        if precision == "standard" and chain != "unpassed"
        else "float64"
        for precision in ("standard", "double")
        for chain in CHAINS
    }
    for chain in CHAINS:
        tables = [made.table(p, f"epochs/{chain}") for p in ("standard", "double")]
        assert (tables[0] == tables[1]) is (chain == "unpassed")


def test_the_run_folder_says_in_which_precision_it_was_run(made: Made) -> None:
    for precision, outcome in made.outcomes.items():
        lines = (outcome.folder / "log.jsonl").read_text().splitlines()
        started = [json.loads(line) for line in lines if "run_started" in line]
        assert [event["precision"] for event in started] == [precision]
        resolved = (outcome.folder / "recipe.resolved.yaml").read_text()
        assert f"\nprecision: {precision}\n" in resolved
        first = rows(outcome.folder, "parameters")[0]
        assert (first["step"], first["parameter"]) == ("recipe", "precision")
        assert (first["value"], first["origin"]) == (precision, "recipe")


def test_one_precision_is_never_answered_with_the_other(made: Made) -> None:
    """Both runs had one store."""
    keys = [{row["key"] for row in made.table(p, "steps")} for p in ("double", "standard")]
    assert keys[0].isdisjoint(keys[1])
    assert made.outcomes["standard"].reused == 0
    digests = [outcome.results_digest for outcome in made.outcomes.values()]
    assert digests[0] != digests[1]


def test_the_store_holds_filtered_signals_as_they_are_taken(made: Made, tmp_path: Path) -> None:
    """In half the bytes; what the user asked for is kept beside them in float64."""
    passed = CHAINS["passed"]
    kept = (f"{passed[0]}\n      keep: true", passed[1])
    sizes = {}
    tables = {}
    for name, precision, chain in (
        ("double", "double", passed),
        ("standard", "standard", passed),
        ("kept", "standard", kept),
    ):
        outcome = run(recipe(precision, passed=chain), [made.path], tmp_path / name)
        objects = (tmp_path / name / "store" / "objects").rglob("*")
        sizes[name] = sum(path.stat().st_size for path in objects if path.is_file())
        tables[name] = rows(outcome.folder, "epochs/passed")
    held = 2 * LENGTH_S * 128
    # At least: spectra that are collected for an average may be held in float32 too.
    assert sizes["double"] - sizes["standard"] > 3.8 * held
    assert sizes["kept"] - sizes["standard"] == pytest.approx(8 * held, rel=0.05)
    assert tables["kept"] == tables["standard"] != tables["double"]
