"""Every recording that cannot be read says which file, what is wrong and where, and what to do."""

import os
import socket
import time
from fractions import Fraction
from functools import partial
from pathlib import Path

import pytest

from edf_bytes import Sig, annotation_signal, build, clock, tal
from waveassay.contract import SignalError
from waveassay.recording import RecordingError, open_recording, read_facts

TWO = [Sig("EEG Fp1"), Sig("EEG Fp2")]


def refusal(path: Path) -> str:
    """Return the error's text, having checked its form: file first, advice last."""
    with pytest.raises(RecordingError) as caught:
        open_recording(path)
    text = str(caught.value)
    assert isinstance(caught.value, SignalError)
    assert caught.value.exit_code == 3
    assert text.startswith(f"{path}: ")
    assert text.endswith(".")
    assert text.count(". ") >= 1
    assert "\n" not in text
    return text


def refused_bytes(folder: Path, raw: bytes) -> str:
    path = folder / "p03.edf"
    path.write_bytes(raw)
    return refusal(path)


# --- files that are none ---------------------------------------------------------------------


def test_missing(tmp_path: Path) -> None:
    assert "no such file" in refusal(tmp_path / "absent.edf")
    assert "no such file" not in refusal(Path(__file__) / "below.edf")


def test_unreadable(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Permission is refused by the system call: an administrator's tests may read anything."""
    path = tmp_path / "p03.edf"
    path.write_bytes(build([Sig()]))

    def refuse(*_: object) -> int:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(os, "open", refuse)
    text = refusal(path)
    assert "may not be read" in text
    assert "permission" in text


def test_a_name_that_no_file_can_have() -> None:
    with pytest.raises(RecordingError, match="cannot be opened"):
        open_recording("a\0b.edf")
    with pytest.raises(RecordingError, match="cannot be opened"):
        open_recording("x" * 5000)


def test_folder_pipe_socket_and_device_are_refused_without_waiting(tmp_path: Path) -> None:
    start = time.monotonic()
    assert "a folder" in refusal(tmp_path)
    os.mkfifo(tmp_path / "pipe.edf")
    assert "a pipe" in refusal(tmp_path / "pipe.edf")
    with socket.socket(socket.AF_UNIX) as server:
        server.bind(str(tmp_path / "s"))
        assert "a socket" in refusal(tmp_path / "s")
    assert "a device" in refusal(Path("/dev/zero"))
    assert time.monotonic() - start < 5


def test_a_pipe_that_takes_the_files_place_does_not_block(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    regular = tmp_path / "regular"
    regular.write_bytes(b"")
    os.mkfifo(tmp_path / "pipe.edf")
    seen = os.stat(regular)
    monkeypatch.setattr(os, "stat", lambda _: seen)
    with pytest.raises(RecordingError, match="a pipe"):
        open_recording(tmp_path / "pipe.edf")


@pytest.mark.parametrize("size", [0, 1, 255])
def test_shorter_than_any_header(tmp_path: Path, size: int) -> None:
    text = refused_bytes(tmp_path, build([Sig()])[:size])
    assert f"holds {size} bytes" in text
    assert "256" in text


def test_wrong_version(tmp_path: Path) -> None:
    assert "neither EDF nor BDF" in refused_bytes(tmp_path, build([Sig()], version="1"))
    assert "PK" in refused_bytes(tmp_path, b"PK\x03\x04" + bytes(5000))


@pytest.mark.parametrize("size", [256, 500, 767])
def test_ends_inside_the_header(tmp_path: Path, size: int) -> None:
    text = refused_bytes(tmp_path, build(TWO)[:size])
    assert "ends inside the header" in text
    assert f"{size} bytes" in text
    assert "768" in text


# --- header fields ---------------------------------------------------------------------------


def test_signals_and_header_bytes_disagree(tmp_path: Path) -> None:
    text = refused_bytes(tmp_path, build(TWO, header_bytes=1024))
    assert "2 signals and 1024 header bytes" in text
    assert "768" in text
    assert "3 signals" in refused_bytes(tmp_path, build(TWO, signal_count=3))
    assert "0 signals" in refused_bytes(tmp_path, build(TWO, signal_count=0, header_bytes=256))
    assert "-1 signals" in refused_bytes(tmp_path, build(TWO, signal_count=-1, header_bytes=0))


@pytest.mark.parametrize("value", ["", "x", "1 0", "0x10", "1.5", "1e1", "٣", "--1"])
@pytest.mark.parametrize(
    ("field", "named"),
    [
        ("header_bytes", "number of header bytes"),
        ("stated_records", "number of records"),
        ("signal_count", "number of signals"),
    ],
)
def test_whole_numbers(tmp_path: Path, field: str, named: str, value: str) -> None:
    raw = build(TWO, **{field: value})  # type: ignore[arg-type]
    text = refused_bytes(tmp_path, raw)
    assert named in text
    assert "not a whole number" in text


NOT_NUMBERS = ["", "x", "nan", "inf", "-inf", "0,5", "1_0", "1 0", "0x10", "+", "1e", "."]


@pytest.mark.parametrize("value", NOT_NUMBERS)
def test_record_duration_is_no_number(tmp_path: Path, value: str) -> None:
    text = refused_bytes(tmp_path, build(TWO, duration=value))
    assert "record duration" in text
    assert repr(value) in text
    assert "not a number" in text


@pytest.mark.parametrize("value", NOT_NUMBERS)
@pytest.mark.parametrize(
    ("field", "named"),
    [
        ("pmin", "physical minimum"),
        ("pmax", "physical maximum"),
        ("dmin", "digital minimum"),
        ("dmax", "digital maximum"),
    ],
)
def test_limits_are_no_numbers(tmp_path: Path, field: str, named: str, value: str) -> None:
    bad = Sig("EEG Fp2", **{field: value})  # type: ignore[arg-type]
    text = refused_bytes(tmp_path, build([Sig("EEG Fp1"), bad]))
    assert named in text
    assert "signal 2 ('EEG Fp2')" in text
    assert "not a number" in text


def test_numbers_beyond_all_bounds(tmp_path: Path) -> None:
    assert "finite" in refused_bytes(tmp_path, build(TWO, duration="1e999999"))
    assert "finite" in refused_bytes(tmp_path, build([Sig(pmax="9e999")]))
    assert "above 0" in refused_bytes(tmp_path, build(TWO, duration="1e-99999"))
    assert "is possible" in refused_bytes(tmp_path, build(TWO, duration="1e-300"))
    assert "is possible" in refused_bytes(tmp_path, build(TWO, duration="1e300"))
    huge = Sig("EEG Fp1", pmin="-1e308", pmax="1e308")
    text = refused_bytes(tmp_path, build([huge]))
    assert "signal 1 ('EEG Fp1')" in text
    assert "beyond what can be computed with" in text
    tiny = Sig(pmin="0", pmax="1e-323")
    assert "beyond what can be computed with" in refused_bytes(tmp_path, build([tiny]))


@pytest.mark.parametrize("value", [0, -1])
def test_samples_per_record_below_1(tmp_path: Path, value: int) -> None:
    text = refused_bytes(tmp_path, build([Sig(), Sig("EEG Fp2", spr=value)]))
    assert "signal 2 ('EEG Fp2')" in text
    assert f"{value} samples per record" in text
    text = refused_bytes(
        tmp_path,
        build([Sig(), Sig("EDF Annotations", spr=value)], reserved="EDF+C"),
    )
    assert "samples per record" in text


def test_samples_per_record_is_no_number(tmp_path: Path) -> None:
    text = refused_bytes(tmp_path, build([Sig("EEG Fp1", spr="1.5")]))
    assert "samples per record of signal 1 ('EEG Fp1')" in text


def test_a_record_over_64_mib(tmp_path: Path) -> None:
    most = 64 * 1024 * 1024
    text = refused_bytes(tmp_path, build([Sig(spr=most // 2 + 1)], 0, stated_records=1))
    assert f"{most + 2} bytes" in text
    assert "64 MiB" in text
    # At the limit the size is no fault; what is missing are the records.
    assert "records" in refused_bytes(tmp_path, build([Sig(spr=most // 2)], 0, stated_records=1))


def test_sums_that_wrap_in_32_bits_are_still_refused(tmp_path: Path) -> None:
    """43 signals whose samples per record sum to 2**32 + 22: 44 bytes a record, if it wrapped."""
    sizes = [99_999_999] * 42
    sizes.append(2**32 + 22 - sum(sizes))
    assert 0 < sizes[-1] < 10**8
    raw = build([Sig(spr=size) for size in sizes], 0, stated_records=1, tail=bytes(44))
    text = refused_bytes(tmp_path, raw)
    assert f"{2 * (2**32 + 22)} bytes" in text


def test_no_physical_range(tmp_path: Path) -> None:
    text = refused_bytes(tmp_path, build([Sig(), Sig("EEG Fp2", pmin=5, pmax=5)]))
    assert "physical minimum and maximum of signal 2 ('EEG Fp2') are both 5" in text


@pytest.mark.parametrize(("low", "high"), [(5, 5), (6, 5)])
def test_no_digital_range(tmp_path: Path, low: int, high: int) -> None:
    text = refused_bytes(tmp_path, build([Sig(), Sig("EEG Fp2", dmin=low, dmax=high)]))
    assert "digital minimum of signal 2 ('EEG Fp2')" in text


@pytest.mark.parametrize("value", ["0", "-1", "-0.5", "0.0"])
def test_records_that_last_no_time(tmp_path: Path, value: str) -> None:
    text = refused_bytes(tmp_path, build(TWO, duration=value))
    assert "above 0" in text


# --- records ---------------------------------------------------------------------------------


@pytest.mark.parametrize("cut", [1, 15, 16, 17, 40])
def test_more_records_stated_than_there(tmp_path: Path, cut: int) -> None:
    """Records of 16 bytes. The choice to read what is there is named, and works."""
    raw = build(TWO, 4)[:-cut]
    there = 4 - -(-cut // 16)
    text = refused_bytes(tmp_path, raw)
    assert "states 4 records" in text
    assert f"{there} whole records" in text
    assert "truncated: read" in text
    with open_recording(tmp_path / "p03.edf", truncated="read") as recording:
        assert recording.facts.duration_s == there
        assert recording.facts.signals[1].samples == there * 4
        assert any("states 4 records" in warning for warning in recording.facts.warnings)
        assert recording.read([1], 0, Fraction(0), Fraction(9))[0].size == there * 4


@pytest.mark.parametrize("stated", [0, -1, 4])
def test_no_records(tmp_path: Path, stated: int) -> None:
    path = tmp_path / "p03.edf"
    path.write_bytes(build(TWO, 0, stated_records=stated))
    with pytest.raises(RecordingError, match="holds no records"):
        open_recording(path, truncated="read")
    assert "records" in refusal(path)


def test_a_negative_number_of_records(tmp_path: Path) -> None:
    assert "-2 records" in refused_bytes(tmp_path, build(TWO, stated_records=-2))


@pytest.mark.parametrize("block_bytes", [1, 1 << 20])
def test_the_file_becomes_shorter_while_it_is_read(tmp_path: Path, block_bytes: int) -> None:
    path = tmp_path / "p03.edf"
    raw = build(TWO, 40)
    path.write_bytes(raw)
    with open_recording(path, block_bytes=block_bytes) as recording:
        recording.read([0], 0, Fraction(0), Fraction(40))
        os.truncate(path, len(raw) - 16 * 10 - 3)
        (x,) = recording.read([0], 0, Fraction(0), Fraction(29))
        assert x.all(), "zeros in place of data"
        with pytest.raises(RecordingError, match="became shorter while it was read") as caught:
            recording.read([0], 0, Fraction(0), Fraction(30))
        assert str(path) in str(caught.value)
        assert "of 40" in str(caught.value)
        with pytest.raises(RecordingError, match="became shorter while it was read"):
            list(recording.blocks())


def test_a_disk_error_names_the_place(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "p03.edf"
    path.write_bytes(build(TWO, 4))

    def fail(*_: object) -> int:
        raise OSError(5, "Input/output error")

    with open_recording(path) as recording:
        monkeypatch.setattr(os, "preadv", fail)
        with pytest.raises(RecordingError, match="records 1 to 4 of 4 cannot be read"):
            recording.read([0], 0, Fraction(0), Fraction(4))


# --- annotation signals and the record clock -------------------------------------------------


@pytest.mark.parametrize("bdf", [False, True])
def test_discontinuous_without_annotation_signal(tmp_path: Path, bdf: bool) -> None:
    kind = "BDF" if bdf else "EDF"
    text = refused_bytes(tmp_path, build(TWO, bdf=bdf, reserved=f"{kind}+D"))
    assert "discontinuous" in text
    assert f"{kind} Annotations" in text


@pytest.mark.parametrize(
    "bad",
    [
        b"",
        b"\0+2\x14\x14\0",
        b"2\x14\x14\0",
        b"+2\x14\0",
        b"+2\x14x\x14\0",
        b"+2\x14\x14x\0",
        b"+2",
        b"+\x14\x14\0",
        b"+2.\x14",
        b"+2,5\x14\x14\0",
        b"+2e0\x14\x14\0",
        b"+ 2\x14\x14\0",
        b"+nan\x14\x14\0",
        b"+2\x15\x14\x14\0",
        b"+2\x15x\x14\x14\0",
        b"+2\x15-1\x14\x14\0",
        b"+2222222222222\x14\x14\0",
        b"\xff" * 30,
    ],
)
@pytest.mark.parametrize("kind", ["EDF+C", "EDF+D"])
def test_a_record_that_does_not_state_its_start(tmp_path: Path, bad: bytes, kind: str) -> None:
    raw = build(
        [Sig(), annotation_signal(30)],
        4,
        reserved=kind,
        tals=lambda record, _: bad if record == 2 else tal(f"+{record}"),
    )
    text = refused_bytes(tmp_path, raw)
    assert "record 3 of 4 does not state when it starts" in text


def test_a_discontinuous_clock_that_runs_backwards(tmp_path: Path) -> None:
    for onsets in (("+0", "+1", "+0"), ("+0", "+1", "+1"), ("+0", "+1", "+1.8")):
        raw = build([Sig(), annotation_signal()], 3, reserved="EDF+D", tals=clock(*onsets))
        text = refused_bytes(tmp_path, raw)
        assert "record 3 starts" in text
        assert "backwards" in text


def test_more_annotations_than_can_be_believed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("waveassay.recording.scan.MAX_ANNOTATIONS", 9)

    def four(one: bytes, record: int, which: int) -> bytes:
        return tal(f"+{record}") + one * 4

    for one in (b"+0\x14x\x14\0", b"+0\x14x\0"):
        raw = build(
            [Sig(), annotation_signal(60)],
            4,
            reserved="EDF+C",
            tals=partial(four, one),
        )
        text = refused_bytes(tmp_path, raw)
        assert "more than 9 annotations by record 3 of 4" in text


def test_more_gaps_than_can_be_believed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("waveassay.recording.clock.MAX_PIECES", 2)
    raw = build(
        [Sig(), annotation_signal()], 4, reserved="EDF+D", tals=clock("+0", "+2", "+4", "+6")
    )
    assert "jumps more than 2 times" in refused_bytes(tmp_path, raw)


# --- choosing a signal -----------------------------------------------------------------------


def test_a_label_that_is_empty_double_or_absent(tmp_path: Path) -> None:
    path = tmp_path / "p03.edf"
    path.write_bytes(build([Sig("EEG"), Sig("ECG"), Sig("EEG"), Sig(""), Sig("")]))
    facts = read_facts(path)
    assert facts.signal_named("ECG").index == 1
    for label in ("", "  "):
        with pytest.raises(RecordingError, match="empty label") as caught:
            facts.signal_named(label)
        assert str(path) in str(caught.value)
    with pytest.raises(RecordingError, match=r"2 signals have the label 'EEG' \(numbers 1, 3\)"):
        facts.signal_named("EEG")
    with pytest.raises(RecordingError, match=r"no signal has the label 'EOG'.*'EEG', 'ECG'"):
        facts.signal_named("EOG")
