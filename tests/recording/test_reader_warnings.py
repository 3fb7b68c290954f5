"""What is odd but can be read is told, and told once; a sound file has no warnings."""

from datetime import datetime
from fractions import Fraction
from pathlib import Path

import pytest

from edf_bytes import Sig, annotation_signal, build, tal
from waveassay.recording import open_recording, read_facts
from waveassay.recording.facts import Facts

PLUS = [Sig("EEG Fp1"), annotation_signal()]


def facts_of(folder: Path, raw: bytes) -> Facts:
    path = folder / "recording.edf"
    path.write_bytes(raw)
    return read_facts(path)


def only_warning(folder: Path, raw: bytes) -> str:
    (warning,) = facts_of(folder, raw).warnings
    return warning


@pytest.mark.parametrize("bdf", [False, True])
@pytest.mark.parametrize("kind", ["", "+C", "+D"])
def test_a_sound_file_has_none(tmp_path: Path, kind: str, bdf: bool) -> None:
    signals = [Sig("EEG Fp1"), *([annotation_signal(bdf=bdf)] if kind else [])]
    family = "BDF" if bdf else "EDF"
    facts = facts_of(tmp_path, build(signals, bdf=bdf, reserved=family + kind if kind else ""))
    assert facts.warnings == ()
    assert facts.format == family + kind


def test_records_stated_as_minus_1(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, build([Sig()], 5, stated_records=-1))
    assert "-1 records" in facts.warnings[0]
    assert "5 whole records" in facts.warnings[0]
    assert len(facts.warnings) == 1
    assert facts.duration_s == 5


@pytest.mark.parametrize(
    ("records", "stated", "tail", "trailing", "read"),
    [(4, 4, b"abc", 3, 4), (4, 3, b"", 8, 3), (4, 3, b"abc", 11, 3), (1, 1, b"x" * 7, 7, 1)],
)
def test_trailing_bytes(
    tmp_path: Path, records: int, stated: int, tail: bytes, trailing: int, read: int
) -> None:
    facts = facts_of(tmp_path, build([Sig()], records, stated_records=stated, tail=tail))
    assert facts.warnings == (f"{trailing} bytes after the last record are not read",)
    assert facts.duration_s == read


@pytest.mark.parametrize(
    ("unit", "read"), [(b"\xb5V", "µV"), ("µV", "µV"), (b"uV\0\0\0\0\0\0", "uV"), (b"\nuV", "uV")]
)
def test_text_that_is_not_plain(tmp_path: Path, unit: bytes | str, read: str) -> None:
    """A micro sign in Latin-1 or UTF-8, and padding of NULs, which many programs write."""
    facts = facts_of(tmp_path, build([Sig("EEG Fp1", unit=unit)]))
    assert facts.signals[0].unit == read
    (warning,) = facts.warnings
    assert "plain ASCII, or NUL" in warning
    assert "unit of signal 1 ('EEG Fp1')" in warning


def test_odd_text_is_told_once_and_never_quotes_a_persons_field(tmp_path: Path) -> None:
    signals = [Sig(f"S{i}", transducer="größer") for i in range(20)]
    warning = only_warning(tmp_path, build(signals, patient="Grünkohl"))
    assert "patient" in warning
    assert "more" in warning
    assert "Gr" not in warning
    assert len(warning) < 300


def test_numbers_padded_by_nul(tmp_path: Path) -> None:
    raw = build(
        [Sig("EEG Fp1", spr=b"4\0\0\0\0\0\0\0")], records=0, stated_records=1, tail=bytes(8)
    )
    facts = facts_of(tmp_path, raw)
    assert facts.signals[0].samples == 4
    assert "samples per record of signal 1 ('EEG Fp1')" in facts.warnings[0]


@pytest.mark.parametrize("patient", ["", "John Doe", "X X X", "X Q X X", "X M 3-MAR-1980 X"])
def test_free_text_for_the_patient(tmp_path: Path, patient: str) -> None:
    warning = only_warning(tmp_path, build(PLUS, reserved="EDF+C", patient=patient))
    assert "patient field is free text" in warning
    assert "Doe" not in warning


@pytest.mark.parametrize(
    "recording", ["", "Ward 3", "Startdate X X X", "Startdate 01-MRZ-2024 X X X"]
)
def test_free_text_for_the_recording(tmp_path: Path, recording: str) -> None:
    warning = only_warning(tmp_path, build(PLUS, reserved="EDF+C", recording=recording))
    assert "recording field is free text" in warning


def test_plain_edf_may_hold_free_text(tmp_path: Path) -> None:
    assert not facts_of(tmp_path, build([Sig()], patient="J. Doe", recording="Ward 3")).warnings


@pytest.mark.parametrize(
    ("patient", "recording"),
    [
        ("X X X X", "Startdate X X X X"),
        ("MCH-1 F 02-MAY-1951 Some_Name", "Startdate 02-MAR-2002 PSG-1 NN Telemetry03"),
        ("MCH-1 M X X and more", "Startdate 02-MAR-2002 X X X more"),
    ],
)
def test_identity_fields_in_order(tmp_path: Path, patient: str, recording: str) -> None:
    raw = build(PLUS, reserved="EDF+C", patient=patient, recording=recording)
    assert facts_of(tmp_path, raw).warnings == ()


@pytest.mark.parametrize(
    ("date", "time"),
    [
        ("31.02.24", "22.00.00"),
        ("00.00.00", "22.00.00"),
        ("01.13.24", "22.00.00"),
        ("01.03.24", "24.00.00"),
        ("01.03.24", "22.60.00"),
        ("", ""),
        ("01/03/24", "22.00.00"),
        ("01.03.24", "22:00:00"),
    ],
)
def test_impossible_date(tmp_path: Path, date: str, time: str) -> None:
    facts = facts_of(tmp_path, build([Sig()], date=date, time=time))
    assert facts.start is None
    (warning,) = facts.warnings
    assert "no possible date" in warning
    assert repr(date) in warning


def test_year_yy(tmp_path: Path) -> None:
    """From 2085 on the year stands in the recording field (EDF+ specification)."""
    late = "Startdate 01-MAR-2091 X X X"
    raw = build(PLUS, reserved="EDF+C", date="01.03.yy", recording=late)
    facts = facts_of(tmp_path, raw)
    assert facts.start == datetime(2091, 3, 1, 22)
    assert "'yy'" in facts.warnings[0]
    raw = build(PLUS, reserved="EDF+C", date="01.03.yy", recording="Startdate X X X X")
    facts = facts_of(tmp_path, raw)
    assert facts.start is None
    assert "'yy'" in facts.warnings[0]


def test_a_start_beyond_the_calendar(tmp_path: Path) -> None:
    own = tal("+999999999999")
    raw = build(PLUS, 1, reserved="EDF+C", tals=lambda *_: own)
    facts = facts_of(tmp_path, raw)
    assert facts.start is None
    assert "beyond the calendar" in facts.warnings[0]


def test_no_unit(tmp_path: Path) -> None:
    signals = [Sig("EEG Fp1"), Sig("Marker", unit=""), Sig("Light", unit="")]
    warning = only_warning(tmp_path, build(signals))
    assert "not calibrated" in warning
    assert "signal 2 ('Marker'), signal 3 ('Light')" in warning


def test_neither_continuous_nor_discontinuous(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, build(PLUS, reserved="EDF+"))
    assert facts.format == "EDF+C"
    assert "neither C" in facts.warnings[0]


def test_a_continuous_plus_file_without_annotation_signal(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, build([Sig()], reserved="EDF+C"))
    assert "no annotation signal" in facts.warnings[0]
    assert facts.duration_s == 4


def test_values_out_of_range_are_left_to_reading(tmp_path: Path) -> None:
    """Finding them takes all samples, so opening does not tell; reading counts them."""
    path = tmp_path / "recording.edf"
    path.write_bytes(build([Sig(spr=2, dmin=-10, dmax=10, data=[0, 11, -11, 10])], 2))
    with open_recording(path) as recording:
        assert recording.facts.warnings == ()
        recording.read([0], 0, Fraction(0), Fraction(2))
        assert recording.out_of_range == {0: 2}
