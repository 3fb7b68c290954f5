"""Agreement with pyedflib, an independent reader, on every layout that it can open.

pyedflib has no x86-64 Linux wheel above Python 3.12, so there this file is left out as a whole.
It cannot open discontinuous files, and it takes only identity fields that keep to EDF+.
"""

from collections.abc import Callable
from datetime import datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from edf_bytes import Sig, Tals, annotation_signal, build, tal
from waveassay.recording import Facts, open_recording

pyedflib = pytest.importorskip("pyedflib")

FOLDER = Path(pyedflib.__file__).parent / "tests" / "data"
PACKAGED = (
    "test_generator.edf",
    "test_generator.bdf",
    "test_generator_datarec_generator_0_5.bdf",
    "test_generator_datarec_generator_2.bdf",
    "test_legacy.edf",
    "test_subsecond.edf",
    "test_utf8.edf",
)


def noise(seed: int, size: int, bits: int) -> list[int]:
    top = 1 << (bits - 1)
    return [int(v) for v in np.random.default_rng(seed).integers(-top, top, size)]


def events(step: str = "1", zero: str = "0") -> Tals:
    """Return time-keeping lists with annotations in between, some with a duration, out of order."""

    def lists(record: int, which: int) -> bytes:
        start = Fraction(zero) + record * Fraction(step)
        if which:
            return tal(f"+{float(start) + 0.25:.4f}", f"second {record}", duration="0.5")
        own = tal(f"+{float(start):.7f}")
        if record % 2:
            own += tal(f"+{float(start) + 0.5:.3f}", f"öffnet {record}", "again", duration="1.25")
            own += tal(f"+{float(start) + 0.125:.3f}", "earlier")
        return own

    return lists


def plain(*signals: Sig, **fields: object) -> Callable[[], bytes]:
    return lambda: build(signals, 6, **fields)  # type: ignore[arg-type]


def plus(*signals: Sig, step: str = "1", zero: str = "0", bdf: bool = False) -> Callable[[], bytes]:
    kind = "BDF+C" if bdf else "EDF+C"
    lists = events(step, zero)
    return lambda: build(signals, 6, duration=step, bdf=bdf, reserved=kind, tals=lists)


RANDOM = Sig("EEG Fp1", 50, data=noise(1, 300, 16))
SLOW = Sig("SaO2", 1, unit="%", pmin=0, pmax=100, data=noise(2, 6, 16))
REVERSED = Sig("EEG Fp2", 25, pmin=8711, pmax=-8711, data=noise(3, 150, 16))
TWELVE_BIT = Sig("ABP", 20, unit="mmHg", pmin=-50, pmax=350, dmin=-2048, dmax=2047)
WIDE = Sig("EEG Cz", 40, pmin=-262144, pmax=262143, data=noise(4, 240, 24))
LISTS = annotation_signal(120)
WIDE_LISTS = annotation_signal(120, bdf=True)

LAYOUTS: dict[str, Callable[[], bytes]] = {
    "one signal": plain(RANDOM),
    "several rates": plain(RANDOM, SLOW, REVERSED, TWELVE_BIT),
    "equal neighbours": plain(RANDOM, RANDOM, SLOW, RANDOM),
    "records of 10 s": plain(RANDOM, SLOW, duration=10),
    "records of a quarter second": plain(RANDOM, REVERSED, duration="0.25"),
    "24 bit": plain(WIDE, Sig("Status", 40, unit="Boolean"), bdf=True),
    "24 bit, several rates": plain(Sig("A", 3, data=noise(5, 18, 24)), WIDE, bdf=True),
    "annotations last": plus(RANDOM, SLOW, LISTS),
    "annotations first": plus(LISTS, RANDOM, REVERSED),
    "annotations between": plus(RANDOM, LISTS, RANDOM),
    "two annotation signals": plus(RANDOM, LISTS, SLOW, LISTS),
    "annotations, records of half a second": plus(RANDOM, LISTS, step="0.5"),
    "annotations, 24 bit": plus(WIDE, WIDE_LISTS, bdf=True),
    "two annotation signals, 24 bit": plus(WIDE_LISTS, WIDE, WIDE_LISTS, bdf=True),
    "sub-second start": plus(RANDOM, LISTS, zero="0.3945312"),
}


def compare(path: Path) -> Facts:
    """Compare every sample and every annotation; return our facts."""
    with open_recording(path) as recording, pyedflib.EdfReader(str(path)) as other:
        facts = recording.facts
        (whole,) = facts.pieces
        assert [s.label for s in facts.signals] == other.getSignalLabels()
        assert [s.samples for s in facts.signals] == list(other.getNSamples())
        assert [float(s.rate_hz) for s in facts.signals] == list(other.getSampleFrequencies())
        ours = recording.read([s.index for s in facts.signals], 0, whole.start_s, whole.stop_s)
        for number, (signal, x) in enumerate(zip(facts.signals, ours, strict=True)):
            assert signal.unit == other.getPhysicalDimension(number)
            theirs = other.readSignal(number)
            # Both scale in double precision, but in another order: a few units in the last place
            # of the largest value that took part.
            largest = max(abs(signal.physical_min), abs(signal.physical_max), np.abs(theirs).max())
            assert x.shape == theirs.shape
            assert np.abs(x - theirs).max() <= 4 * np.spacing(largest)
            exact = other.readSignal(number, digital=True)
            gain = (signal.physical_max - signal.physical_min) / (
                signal.digital_max - signal.digital_min
            )
            back = signal.digital_min + (x - signal.physical_min) / gain
            assert np.array_equal(np.rint(back), exact)
        if facts.format in ("EDF+C", "BDF+C"):
            compare_annotations(facts, other)
    return facts


def compare_annotations(facts: Facts, other: Any) -> None:
    # pyedflib keeps the file's order, and times in steps of 100 ns.
    found = sorted(
        (round(float(onset), 6), None if length < 0 else round(float(length), 6), str(text))
        for onset, length, text in zip(*other.readAnnotations(), strict=True)
    )
    ours = sorted(
        (
            round(float(a.onset_s), 6),
            None if a.duration_s is None else round(float(a.duration_s), 6),
            a.text,
        )
        for a in facts.annotations
    )
    assert ours == found


@pytest.mark.parametrize("name", LAYOUTS)
def test_layouts(tmp_path: Path, name: str) -> None:
    path = tmp_path / "recording.edf"
    path.write_bytes(LAYOUTS[name]())
    facts = compare(path)
    assert len(facts.annotations) >= (9 if "annotation" in name else 0)


@pytest.mark.parametrize("name", PACKAGED)
def test_files_inside_the_package(name: str) -> None:
    compare(FOLDER / name)


def test_a_real_recording() -> None:
    """One frontal EEG signal of 698 s, read where it is; its header identifies a person."""
    from scipy.signal import welch

    with open_recording(FOLDER / "test_subsecond.edf") as recording:
        facts = recording.facts
        (whole,) = facts.pieces
        (x,) = recording.read([0], 0, whole.start_s, whole.stop_s)
    (signal,) = facts.signals
    assert facts.format == "EDF+C"
    assert signal.label == "Fp1"
    assert signal.rate_hz == 128
    assert facts.duration_s == 698
    assert x.size == 698 * 128
    assert (signal.physical_min, signal.physical_max) == (8711, -8711)
    assert facts.start == datetime(2020, 1, 24, 4, 5, 56, 394531)
    assert [a.text for a in facts.annotations] == ["XLSpike", "Clip Note", "XLEvent", "XLSpike"]
    assert facts.annotations[0].onset_s == Fraction("1.9511719")
    freq_hz, density = welch(x, 128, nperseg=1024)
    inside = (freq_hz >= 8) & (freq_hz <= 30)
    assert freq_hz[inside][density[inside].argmax()] == pytest.approx(13.5, abs=0.25)
    line = (freq_hz >= 58) & (freq_hz <= 62)
    assert freq_hz[line][density[line].argmax()] == pytest.approx(60, abs=0.2)
    assert density[line].max() > 5 * np.median(density[line])


def test_generated_signals_have_the_frequencies_in_their_labels() -> None:
    from scipy.fft import rfft

    with open_recording(FOLDER / "test_generator.edf") as recording:
        facts = recording.facts
        assert len(facts.signals) == 11
        assert facts.duration_s == 600
        assert [a.text for a in facts.annotations] == ["Recording starts", "Recording ends"]
        for label, frequency_hz in (("sine 8 Hz", 8.0), ("sine 8.5 Hz", 8.5), ("sine 50 Hz", 50.0)):
            index = facts.signal_named(label).index
            (x,) = recording.read([index], 0, Fraction(0), Fraction(600))
            assert np.abs(rfft(x)).argmax() / 600 == frequency_hz
