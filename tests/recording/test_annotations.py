"""Annotations: onset, duration and text of every one, wherever in the file it stands."""

from fractions import Fraction
from pathlib import Path

import pytest

from edf_bytes import Sig, annotation_signal, build, tal
from waveassay.recording import Annotation, Facts, read_facts


def facts_of(folder: Path, lists: dict[tuple[int, int], bytes], channels: int = 1) -> Facts:
    """Write three records; ``lists`` follow the time-keeping list of (record, which signal)."""
    signals = [annotation_signal(90) for _ in range(channels)]
    path = folder / "recording.edf"

    def tals(record: int, which: int) -> bytes:
        own = b"" if which else tal(f"+{record}.5")
        return own + lists.get((record, which), b"")

    path.write_bytes(build([Sig(), *signals], 3, reserved="EDF+C", tals=tals))
    return read_facts(path)


def found(facts: Facts) -> list[tuple[float, float | None, str]]:
    return [
        (float(a.onset_s), None if a.duration_s is None else float(a.duration_s), a.text)
        for a in facts.annotations
    ]


def test_onsets_count_from_the_first_sample(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, {(1, 0): tal("+1.75", "stable", duration="2.5")})
    assert facts.annotations == (Annotation(Fraction(5, 4), Fraction(5, 2), "stable"),)


def test_before_the_first_sample(tmp_path: Path) -> None:
    assert found(facts_of(tmp_path, {(0, 0): tal("-1.5", "premedication")})) == [
        (-2.0, None, "premedication")
    ]


def test_sorted_by_onset_with_duplicates_and_the_files_order(tmp_path: Path) -> None:
    lists = {
        (0, 0): tal("+2.5", "late") + tal("+1.5", "b"),
        (1, 0): tal("+1.5", "a", "b") + tal("+1.5", "b"),
        (2, 1): tal("+0.5", "first"),
    }
    facts = facts_of(tmp_path, lists, channels=2)
    assert [a.text for a in facts.annotations] == ["first", "b", "a", "b", "b", "late"]
    assert facts.warnings == ()


def test_several_texts_share_onset_and_duration(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, {(0, 0): tal("+1", "x", "", "y", duration="0.1")})
    assert found(facts) == [(0.5, 0.1, "x"), (0.5, 0.1, "y")]


def test_a_text_in_the_time_keeping_list(tmp_path: Path) -> None:
    path = tmp_path / "recording.edf"
    own = tal("+0", "", "Recording starts")
    path.write_bytes(build([Sig(), annotation_signal()], 1, reserved="EDF+C", tals=lambda *_: own))
    assert found(read_facts(path)) == [(0.0, None, "Recording starts")]


def test_lists_without_text_say_nothing(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, {(0, 1): tal("+0.5"), (1, 1): tal("+1.5")}, channels=2)
    assert facts.annotations == ()
    assert facts.warnings == ()


def test_utf8_and_what_is_not(tmp_path: Path) -> None:
    lists = {(0, 0): tal("+1", "Öffnen, 開眼"), (1, 0): b"+2\x14Augen ge\xf6ffnet\x14\0"}
    facts = facts_of(tmp_path, lists)
    assert [a.text for a in facts.annotations] == ["Öffnen, 開眼", "Augen geöffnet"]
    (warning,) = facts.warnings
    assert "1 annotation texts are not UTF-8" in warning
    assert "record 2" in warning


@pytest.mark.parametrize(
    "bad",
    [
        b"1.5\x14x\x14\0",
        b"+1.5\x14x\0",
        b"+1.5\0",
        b"+1.5\x15\x14x\x14\0",
        b"+1,5\x14x\x14\0",
        b"x",
    ],
)
def test_a_malformed_one_is_left_out_and_told(tmp_path: Path, bad: bytes) -> None:
    facts = facts_of(tmp_path, {(1, 0): bad, (2, 0): tal("+2.5", "good")})
    assert [a.text for a in facts.annotations] == ["good"]
    (warning,) = facts.warnings
    assert "1 malformed annotations are left out" in warning
    assert "record 2" in warning


def test_a_list_that_fills_its_signal_to_the_last_byte(tmp_path: Path) -> None:
    room = 90 - len(tal("+0.5"))
    text = "t" * (room - len(b"+1\x14\x14"))
    facts = facts_of(tmp_path, {(0, 0): f"+1\x14{text}\x14".encode()})
    assert [a.text for a in facts.annotations] == [text]


def test_an_annotation_signal_ahead_of_and_between_others(tmp_path: Path) -> None:
    path = tmp_path / "recording.edf"
    signals = [annotation_signal(33), Sig("A", 3), annotation_signal(41), Sig("B", 5)]
    for bdf in (False, True):
        own = [
            annotation_signal(33, bdf=bdf),
            signals[1],
            annotation_signal(41, bdf=bdf),
            signals[3],
        ]

        def tals(record: int, which: int) -> bytes:
            return tal("+0.25", "second") if which else tal(f"+{record}") + tal("+1", "first")

        path.write_bytes(build(own, 1, bdf=bdf, reserved="BDF+C" if bdf else "EDF+C", tals=tals))
        facts = read_facts(path)
        assert found(facts) == [(0.25, None, "second"), (1.0, None, "first")]
        assert [(s.index, s.label) for s in facts.signals] == [(1, "A"), (3, "B")]
