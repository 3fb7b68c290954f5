"""Real recordings that installed packages carry, through the command. None is committed here.

The EEG is `tests/data/test_subsecond.edf` of the package pyedflib, the ECG `waveform_ecg.dcm` of
the package pydicom; each is read where it is installed.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from running import command, numbers, only_run, rows
from waveassay.contract import Floats
from waveassay.recording import open_recording
from waveassay.recording.write import WrittenSignal, write_recording

EEG_RECIPE = """
recipe: real-eeg
edition: 1
signals:
  frontal: {labels: [Fp1], unit: uV, modality: eeg}
chains:
  whole:
    - load: {signals: [frontal]}
    - epoch.consecutive: {length: 4 s, overlap: 50 %}
    - spectrum.periodogram: {window: hann}
    - spectrum.average: {of: mean, over: power}
    - feature.spectral_edge: {fraction: 95 %, within: [0.5 Hz, 45 Hz]}
    - feature.spectral_edge: {fraction: 95 %, within: [0.5 Hz, 45 Hz], interpolation: bin}
      as: edge_bin
    - feature.spectral_peak: {within: [8 Hz, 30 Hz]}
    - feature.spectral_peak: {within: [50 Hz, 63 Hz], background: median, prominence: 3 dB}
      as: mains
    - export.table: {}
  notched:
    - load: {signals: [frontal]}
    - filter.notch: {line: 60 Hz}
    - epoch.consecutive: {length: 4 s, overlap: 50 %}
    - spectrum.periodogram: {window: hann}
    - spectrum.average: {of: mean, over: power}
    - feature.spectral_peak: {within: [50 Hz, 63 Hz], background: median, prominence: 3 dB}
      as: mains
    - export.table: {}
"""


@pytest.fixture(scope="module")
def eeg(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the run folder of the real EEG."""
    # No x86-64 Linux wheel of it above Python 3.12; there this file is not to be had.
    package = pytest.importorskip("pyedflib")
    recording = Path(package.__file__).parent / "tests" / "data" / "test_subsecond.edf"
    return _run(EEG_RECIPE, recording, tmp_path_factory.mktemp("eeg"))


def _run(recipe_text: str, recording: Path, folder: Path) -> Path:
    recipe = folder / "recipe.yaml"
    recipe.write_text(recipe_text, encoding="utf-8")
    done = command("run", recipe, recording, "--into", folder / "out")
    assert done.returncode == 0, done.stdout + done.stderr
    return only_run(folder / "out")


def test_time_of_the_eeg(eeg: Path) -> None:
    """698 s at 128 Hz from a start with a fraction of a second (header and first time stamp)."""
    (recording,) = rows(eeg, "recordings")
    start = datetime.fromisoformat(recording["start"])
    assert start.microsecond == pytest.approx(394531, abs=1)
    assert float(recording["duration_s"]) == 698


def test_spectrum_of_the_eeg(eeg: Path) -> None:
    """Peak near 13.5 Hz; 95 % of 0.5 to 45 Hz below 14.0 Hz (measured with other code before).

    The edge was printed to a tenth. It is that of the spectrum of the whole recording, averaged
    over Hann windows of 4 s or more: wider ones of 2 s smear the peak beyond it, to 14.1 Hz. The
    first bin to reach the share is 14.0 Hz itself.
    """
    (row,) = rows(eeg, "averages/whole")
    assert float(row["spectral_edge"]) == pytest.approx(14.0, abs=0.05)
    assert float(row["edge_bin"]) == 14.0
    # Near: within a bin of a quarter of a Hz.
    assert float(row["spectral_peak.frequency"]) == pytest.approx(13.5, abs=0.25)


def test_mains_of_the_eeg(eeg: Path) -> None:
    """The recording was made where mains have 60 Hz: a line without a notch, none with it."""
    (plain,), (notched,) = rows(eeg, "averages/whole"), rows(eeg, "averages/notched")
    assert float(plain["mains.frequency"]) == pytest.approx(60, abs=0.25)
    assert notched["mains.frequency"] == "" or abs(float(notched["mains.frequency"]) - 60) > 1
    before, after = (_at(eeg, chain, 60.0) for chain in ("whole", "notched"))
    assert after < before / 10


def _at(run: Path, chain: str, freq_hz: float) -> float:
    (row,) = (
        row
        for row in rows(run, f"averages/{chain}-spectra")
        if float(row["frequency_hz"]) == freq_hz
    )
    return float(row["density"])


ECG_RECIPE = """
recipe: real-ecg
edition: 1
signals:
  lead_1: {labels: [ECG I], unit: mV, modality: ecg}
  lead_2: {labels: [ECG II], unit: mV, modality: ecg}
  lead_3: {labels: [ECG III], unit: mV, modality: ecg}
chains:
  beats:
    - load: {signals: [lead_1, lead_2, lead_3]}
    - epoch.consecutive: {length: 10 s}
    - feature.harmonics: {fundamental_within: [0.6 Hz, 3 Hz], explained_at_least: 10 %}
    - spectrum.periodogram: {window: hann}
    - feature.spectral_peak: {within: [0.6 Hz, 1.6 Hz]}
    - export.table: {}
"""
LEADS = {"lead_1": "ECG I", "lead_2": "ECG II", "lead_3": "ECG III"}


@dataclass(frozen=True)
class Ecg:
    """The ECG inside pydicom: samples in uV, their step, and what its header says of beats."""

    x: Mapping[str, Floats]
    rate_hz: int
    step_uv: float
    beat_s: float
    beats_s: Floats


def read_ecg() -> Ecg:
    """Read the rhythm strip of the installed file; nothing is downloaded."""
    from pydicom import dcmread
    from pydicom.data import get_testdata_file

    found = get_testdata_file("waveform_ecg.dcm", download=False)
    assert isinstance(found, str), "pydicom carries waveform_ecg.dcm"
    data = dcmread(found)
    strip = data.WaveformSequence[0]
    names = [str(c.ChannelSourceSequence[0].CodeMeaning) for c in strip.ChannelDefinitionSequence]
    samples = data.waveform_array(0)
    wanted = {"lead_1": "Lead I (Einthoven)", "lead_2": "Lead II", "lead_3": "Lead III"}
    steps = {float(c.ChannelSensitivity) for c in strip.ChannelDefinitionSequence}
    return Ecg(
        {name: samples[:, names.index(label)] for name, label in wanted.items()},
        round(float(strip.SamplingFrequency)),
        steps.pop(),
        float(_notes(data, "RR Interval")[0].NumericValue) / 1000,
        # The first fiducial point is in the averaged beat, which stands apart.
        np.array([n.ReferencedSamplePositions / 1000 for n in _notes(data, "Fiducial Point")[1:]]),
    )


def _notes(data: Any, name: str) -> list[Any]:
    return [
        note
        for note in data.WaveformAnnotationSequence
        if "ConceptNameCodeSequence" in note and note.ConceptNameCodeSequence[0].CodeMeaning == name
    ]


@pytest.fixture(scope="module")
def ecg_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write the limb leads as EDF+, on the grid of steps that the ECG was sampled on."""
    ecg = read_ecg()
    limits = -32768 * ecg.step_uv, 32767 * ecg.step_uv
    signals = [
        WrittenSignal(LEADS[name], "uV", Fraction(ecg.rate_hz), x, *limits)
        for name, x in ecg.x.items()
    ]
    path = tmp_path_factory.mktemp("ecg") / "ecg.edf"
    write_recording(path, signals, datetime(2031, 1, 2))
    return path


def test_leads_of_the_ecg(ecg_file: Path) -> None:
    """Lead III = II - I (Einthoven), as read back by our reader, and each as it was."""
    ecg = read_ecg()
    with open_recording(ecg_file) as recording:
        labels = [signal.label for signal in recording.facts.signals]
        places = [labels.index(LEADS[name]) for name in ecg.x]
        one, two, three = recording.read(places, 0, Fraction(0), recording.facts.duration_s)
    assert three == pytest.approx(two - one, abs=1e-9)
    assert np.ptp(three) > 100 * ecg.step_uv
    for read, given in zip((one, two, three), ecg.x.values(), strict=True):
        assert read == pytest.approx(given, abs=1e-9)


def test_beat_of_the_ecg(ecg_file: Path, tmp_path: Path) -> None:
    """The header states RR = 982 ms: a fundamental of 1.018 Hz, within the resolution of 10 s.

    That is the median of the intervals between the beats that the file marks, which last from 953
    to 1002 ms. No one series fits all of them; it lies within three standard errors of their mean.
    """
    ecg = read_ecg()
    assert ecg.beat_s == 0.982
    folder = _run(ECG_RECIPE, ecg_file, tmp_path)
    table = rows(folder, "epochs/beats")
    assert [row["signal"] for row in table] == list(LEADS)
    stated_hz, resolution_hz = 1 / ecg.beat_s, 1 / 10
    for column in ("harmonics.fundamental", "spectral_peak.frequency"):
        assert numbers(table, column) == pytest.approx([stated_hz] * 3, abs=resolution_hz / 2)
    intervals_s = np.diff(ecg.beats_s)
    assert np.median(intervals_s) == pytest.approx(ecg.beat_s, abs=1e-9)
    mean_s = np.mean(intervals_s)
    error_s = np.std(intervals_s, ddof=1) / np.sqrt(intervals_s.size)
    found = numbers(table, "harmonics.fundamental")
    assert found == pytest.approx([1 / mean_s] * 3, abs=float(3 * error_s / mean_s**2))
