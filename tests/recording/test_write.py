"""What is written reads back; what the format cannot hold is refused."""

from collections.abc import Sequence
from datetime import datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from waveassay.contract import Floats, Interval
from waveassay.contract.errors import MachineError
from waveassay.recording import open_recording
from waveassay.recording.facts import Annotation
from waveassay.recording.write import WriteError, WrittenSignal, write_recording
from waveassay.recording.write_fields import limit_text

START = datetime(2031, 2, 3, 21, 4, 5)


def wave(samples: int, seed: int = 1, height: float = 90.0) -> Floats:
    return np.random.default_rng(seed).uniform(-height, height, samples)


def signal(**changes: Any) -> WrittenSignal:
    values: dict[str, Any] = {
        "label": "EEG Fp1-F7",
        "unit": "uV",
        "rate_hz": Fraction(128),
        "x": wave(128 * 6),
        "physical_min": -100.0,
        "physical_max": 100.0,
    }
    return WrittenSignal(**{**values, **changes})


def pressure(seconds: int = 6) -> WrittenSignal:
    return signal(
        label="ABP",
        unit="mmHg",
        rate_hz=Fraction(125),
        x=100 + wave(125 * seconds, 2),
        physical_min=-50.0,
        physical_max=300.0,
    )


def step_of(one: WrittenSignal, bits: int) -> float:
    levels: int = (1 << bits) - 1
    return abs(one.physical_max - one.physical_min) / levels


def read_back(path: Path) -> tuple[Any, list[list[Floats]]]:
    """Return the facts, and the samples of each piece, by our own reader."""
    with open_recording(path) as recording:
        facts = recording.facts
        numbers = list(range(len(facts.signals)))
        parts = [
            recording.read(numbers, number, piece.start_s, piece.stop_s)
            for number, piece in enumerate(facts.pieces)
        ]
    return facts, parts


@pytest.mark.parametrize("bdf", [False, True])
@pytest.mark.parametrize("plain", [False, True])
def test_what_is_written_reads_back_within_half_a_step(
    tmp_path: Path, bdf: bool, plain: bool
) -> None:
    path = tmp_path / "one.edf"
    written = [signal(), pressure()]
    write_recording(path, written, START, bdf=bdf, plain=plain)
    facts, parts = read_back(path)
    assert facts.format == ("BDF" if bdf else "EDF") + ("" if plain else "+C")
    assert facts.start == START
    assert facts.duration_s == 6
    assert facts.warnings == ()
    for one, fact, samples in zip(written, facts.signals, parts[0], strict=True):
        assert (fact.label, fact.unit, fact.rate_hz) == (one.label, one.unit, one.rate_hz)
        step = step_of(one, 24 if bdf else 16)
        assert np.max(np.abs(samples - one.x)) <= step * (0.5 + 1e-6)


def test_a_start_within_a_second_is_kept_to_the_microsecond(tmp_path: Path) -> None:
    start = START.replace(microsecond=394531)
    marks = [
        Annotation(Fraction(5, 4), Fraction(1, 2), "eyes closed"),
        Annotation(Fraction(0), None, "µ-law, naïve"),
        Annotation(Fraction(-1, 4), None, "before the first sample"),
        Annotation(Fraction(100), None, "after the end"),
    ]
    write_recording(tmp_path / "a.edf", [signal()], start, annotations=marks)
    facts, _ = read_back(tmp_path / "a.edf")
    assert facts.start == start
    assert facts.annotations == tuple(sorted(marks, key=lambda a: a.onset_s))


@pytest.mark.parametrize("bdf", [False, True])
def test_pieces_keep_their_times_and_their_samples(tmp_path: Path, bdf: bool) -> None:
    path = tmp_path / "gap.edf"
    pieces = [
        Interval(Fraction(0), Fraction(2)),
        Interval(Fraction(7, 2), Fraction(11, 2)),
        Interval(Fraction(100), Fraction(102)),
    ]
    one = signal()
    write_recording(path, [one], START.replace(microsecond=250_000), pieces=pieces, bdf=bdf)
    facts, parts = read_back(path)
    assert facts.format == ("BDF+D" if bdf else "EDF+D")
    assert facts.pieces == tuple(pieces)
    joined = np.concatenate([part[0] for part in parts])
    assert np.max(np.abs(joined - one.x)) <= step_of(one, 24 if bdf else 16)


def test_a_record_length_that_is_no_whole_second(tmp_path: Path) -> None:
    one = signal(rate_hz=Fraction(25, 2), x=wave(50))
    write_recording(tmp_path / "a.edf", [one], START, record_s=Fraction(2, 25))
    facts, _ = read_back(tmp_path / "a.edf")
    assert facts.signals[0].rate_hz == Fraction(25, 2)
    assert facts.duration_s == 4


def test_a_negative_gain_is_kept(tmp_path: Path) -> None:
    one = signal(physical_min=100.0, physical_max=-100.0)
    write_recording(tmp_path / "a.edf", [one], START)
    facts, parts = read_back(tmp_path / "a.edf")
    assert (facts.signals[0].physical_min, facts.signals[0].physical_max) == (100, -100)
    assert np.max(np.abs(parts[0][0] - one.x)) <= step_of(one, 16)


@given(st.floats(-9_999_999, 9_999_999, allow_nan=False), st.booleans())
def test_limits_are_rounded_outward_to_what_the_field_holds(value: float, up: bool) -> None:
    text = limit_text(value, up=up, what="limit", path=Path("a.edf"))
    assert len(text) <= 8
    exact, held = Fraction(repr(value)), Fraction(text)
    assert held >= exact if up else held <= exact
    if len(f"{abs(value):f}") <= 6 and Fraction(f"{value:f}") == exact:
        assert held == exact


@given(st.lists(st.floats(-1e3, 1e3), min_size=4, max_size=4), st.floats(1e3, 9e3))
def test_no_sample_is_further_off_than_half_a_step_of_the_limits_as_written(
    values: list[float], limit: float
) -> None:
    import tempfile

    one = signal(rate_hz=Fraction(4), x=np.array(values), physical_min=-limit, physical_max=limit)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "a.edf"
        write_recording(path, [one], START)
        facts, parts = read_back(path)
    fact = facts.signals[0]
    assert fact.physical_min <= -limit
    assert fact.physical_max >= limit
    step = (fact.physical_max - fact.physical_min) / 65535
    assert np.max(np.abs(parts[0][0] - one.x)) <= step * (0.5 + 1e-9)


def test_equal_arguments_give_equal_bytes_and_no_other_file_is_left(tmp_path: Path) -> None:
    marks = [Annotation(Fraction(n, 8), None, f"mark {n}") for n in range(30)]
    for name in ("a.edf", "b.edf"):
        write_recording(tmp_path / name, [signal(), pressure()], START, annotations=marks)
    write_recording(tmp_path / "b.edf", [signal(), pressure()], START, annotations=marks[::-1])
    assert (tmp_path / "a.edf").read_bytes() == (tmp_path / "b.edf").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.edf", "b.edf"]


def test_the_identity_fields_name_nobody(tmp_path: Path) -> None:
    write_recording(tmp_path / "a.edf", [signal()], START)
    header = (tmp_path / "a.edf").read_bytes()[:256]
    assert header[8:88].decode().strip() == "X X X X"
    assert header[88:168].decode().strip() == "Startdate 03-FEB-2031 X X X"


GAP = [Interval(Fraction(0), Fraction(3)), Interval(Fraction(4), Fraction(7))]


@pytest.mark.parametrize(
    ("changes", "options", "says"),
    [
        ({"label": "EEG Fp1-F7 against left mastoid"}, {}, "31 characters"),
        ({"label": "EEG Fp1–F7"}, {}, "not printable ASCII"),
        ({"label": " "}, {}, "without a label"),
        ({"label": "EDF Annotations"}, {}, "kept for annotations"),
        ({"unit": "µV"}, {}, "unit 'µV'"),
        ({"unit": "microvolts"}, {}, "10 characters"),
        ({"x": wave(128 * 6 - 1)}, {}, "767 samples are not whole records of 128"),
        ({"x": np.zeros(0)}, {}, "not whole records"),
        ({"rate_hz": Fraction(257, 2), "x": wave(257)}, {}, "choose another record_s"),
        ({"rate_hz": Fraction(0)}, {}, "whole number is needed"),
        ({"x": np.full(768, 100.01)}, {}, "768 of 768 samples are not within"),
        ({"x": np.full(768, np.nan)}, {}, "the first is number 0, nan"),
        ({"physical_min": 100.0}, {}, "would be written as"),
        ({"physical_min": -1e-9, "physical_max": 1e-9}, {}, "another unit"),
        ({"physical_max": 1e8}, {}, "does not fit 8 characters"),
        ({"physical_max": float("inf")}, {}, "does not fit 8 characters"),
        ({"digital_min": -40000}, {}, "digital limits"),
        ({"digital_min": 5, "digital_max": 5}, {}, "digital limits"),
        ({"transducer": "x" * 81}, {}, "81 characters"),
        ({}, {"start": START.replace(year=1984)}, "1985 to 2084"),
        ({}, {"start": START.replace(year=2085)}, "1985 to 2084"),
        ({}, {"record_s": Fraction(1, 3)}, "no finite decimal"),
        ({}, {"record_s": Fraction(1, 2**20)}, "fit 8 characters"),
        ({}, {"record_s": Fraction(0)}, "must be positive"),
        ({}, {"plain": True, "pieces": GAP}, "no gaps"),
        ({}, {"plain": True, "start": START.replace(microsecond=1)}, "fraction of a second"),
        ({}, {"plain": True, "annotations": [Annotation(Fraction(0), None, "a")]}, "annotations"),
        ({}, {"annotations": [Annotation(Fraction(1, 3), None, "a")]}, "no finite decimal"),
        ({}, {"annotations": [Annotation(Fraction(0), None, "")]}, "is empty"),
        ({}, {"annotations": [Annotation(Fraction(0), None, "a\x14b")]}, "control characters"),
        ({}, {"annotations": [Annotation(Fraction(0), Fraction(-1), "a")]}, "negative duration"),
        ({}, {"pieces": GAP[:1]}, "hold 3 records, the signals 6"),
        ({}, {"pieces": [Interval(Fraction(1), Fraction(7))]}, "must start at 0 s"),
        ({}, {"pieces": [GAP[0], Interval(Fraction(3), Fraction(6))]}, "does not leave a gap"),
        ({}, {"pieces": [Interval(Fraction(0), Fraction(11, 2))]}, "not whole records of 1 s"),
        ({}, {"patient": "X" * 81}, "patient field"),
    ],
)
def test_what_the_format_cannot_hold_is_refused_and_nothing_is_written(
    tmp_path: Path, changes: dict[str, Any], options: dict[str, Any], says: str
) -> None:
    path = tmp_path / "a.edf"
    start = options.pop("start", START)
    with pytest.raises(WriteError) as caught:
        write_recording(path, [signal(**changes)], start, **options)
    assert says in str(caught.value)
    assert str(caught.value).startswith(str(path))
    assert list(tmp_path.iterdir()) == []


def test_signals_of_unequal_length_and_no_signals_are_refused(tmp_path: Path) -> None:
    with pytest.raises(WriteError, match="'ABP' has 5 records, but 'EEG Fp1-F7' has 6"):
        write_recording(tmp_path / "a.edf", [signal(), pressure(5)], START)
    with pytest.raises(WriteError, match="at least one signal"):
        write_recording(tmp_path / "a.edf", [], START)


def test_a_folder_that_is_not_there_is_told_without_a_traceback(tmp_path: Path) -> None:
    with pytest.raises(MachineError, match=r"a\.edf: cannot be written: No such file"):
        write_recording(tmp_path / "nowhere" / "a.edf", [signal()], START)


def independent(path: Path) -> tuple[list[dict[str, Any]], list[Floats], Any, datetime]:
    """Read with another library."""
    edflib = pytest.importorskip("pyedflib")
    with edflib.EdfReader(str(path)) as file:
        count = file.signals_in_file
        return (
            [file.getSignalHeader(number) for number in range(count)],
            [file.readSignal(number) for number in range(count)],
            file.readAnnotations(),
            file.getStartdatetime(),
        )


@pytest.mark.parametrize("bdf", [False, True])
@pytest.mark.parametrize("plain", [False, True])
def test_an_independent_reader_finds_the_same(tmp_path: Path, bdf: bool, plain: bool) -> None:
    path = tmp_path / ("a.bdf" if bdf else "a.edf")
    written = [signal(physical_max=101.2345678, prefilter="HP:0.1Hz LP:75Hz"), pressure()]
    marks: Sequence[Annotation] = (
        ()
        if plain
        else (
            Annotation(Fraction(1), Fraction(5, 2), "eyes closed"),
            Annotation(Fraction(33, 8), None, "stable level"),
        )
    )
    write_recording(path, written, START, annotations=marks, bdf=bdf, plain=plain)
    headers, samples, (onsets, lengths, texts), start = independent(path)
    ours, parts = read_back(path)
    assert start == START
    assert list(onsets) == [float(a.onset_s) for a in marks]
    assert [float(v) for v in lengths] == [2.5, -1.0][: len(marks)]
    assert list(texts) == [a.text for a in marks]
    assert len(headers) == len(written)
    for one, header, fact, theirs, mine in zip(
        written, headers, ours.signals, samples, parts[0], strict=True
    ):
        assert header["label"] == one.label
        assert header["dimension"] == one.unit
        assert header["sample_frequency"] == one.rate_hz
        assert header["physical_min"] == fact.physical_min
        assert header["physical_max"] == fact.physical_max
        assert header["prefilter"] == one.prefilter
        assert np.max(np.abs(theirs - one.x)) <= step_of(one, 24 if bdf else 16)
        assert np.allclose(theirs, mine, rtol=0, atol=1e-9)
