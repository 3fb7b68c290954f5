"""The record clock makes pieces: a jump is a gap, rounding is none, drift is told."""

from fractions import Fraction
from pathlib import Path

import pytest

from edf_bytes import Sig, annotation_signal, build, clock
from waveassay.contract import Interval
from waveassay.recording import Facts, read_facts


def facts_of(
    folder: Path, onsets: list[str], *, duration: str = "1", spr: int = 100, kind: str = "EDF+C"
) -> Facts:
    signals = [Sig("A", spr), Sig("slow", 1), annotation_signal()]
    path = folder / "recording.edf"
    path.write_bytes(
        build(signals, len(onsets), duration=duration, reserved=kind, tals=clock(*onsets))
    )
    return read_facts(path)


def lengths(facts: Facts) -> list[Fraction]:
    return [piece.length_s for piece in facts.pieces]


def test_time_starts_with_the_first_sample(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, ["+7.25", "+8.25", "+19.5"], kind="EDF+D")
    assert facts.pieces == (
        Interval(Fraction(0), Fraction(2)),
        Interval(Fraction(49, 4), Fraction(53, 4)),
    )
    assert facts.duration_s == Fraction(53, 4)
    assert facts.start is not None
    assert (facts.start.second, facts.start.microsecond) == (7, 250_000)


@pytest.mark.parametrize("kind", ["EDF+C", "EDF+D"])
@pytest.mark.parametrize(("onset", "pieces"), [("+2.0049", 1), ("+2.005", 1), ("+2.0051", 2)])
def test_half_a_sample_of_the_fastest_signal_is_the_limit(
    tmp_path: Path, onset: str, pieces: int, kind: str
) -> None:
    facts = facts_of(tmp_path, ["+0", "+1", onset], kind=kind)
    assert len(facts.pieces) == pieces


def test_a_jump_in_a_continuous_file_is_a_gap_with_a_warning(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, ["+0", "+1", "+5", "+6", "+8"])
    assert [piece.start_s for piece in facts.pieces] == [0, 5, 8]
    assert lengths(facts) == [2, 2, 1]
    (warning,) = facts.warnings
    assert "jumps 2 times" in warning
    assert "before record 3" in warning
    assert "EDF+C" in warning


def test_gaps_of_a_discontinuous_file_are_no_warning(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, ["+0", "+1", "+5"], kind="EDF+D")
    assert len(facts.pieces) == 2
    assert facts.warnings == ()


@pytest.mark.parametrize("decimals", [2, 3, 4, 6])
@pytest.mark.parametrize("duration", ["0.333333", "0.066667", "0.1"])
def test_rounded_onsets_make_no_gap(tmp_path: Path, duration: str, decimals: int) -> None:
    """At 10 kHz half a sample is 0.05 ms, far below the onsets' last decimal."""
    exact = {"0.333333": Fraction(1, 3), "0.066667": Fraction(1, 15), "0.1": Fraction(1, 10)}
    onsets = [f"+{float(i * exact[duration]):.{decimals}f}" for i in range(50)]
    spr = int(10_000 * exact[duration])
    facts = facts_of(tmp_path, onsets, duration=duration, spr=spr)
    assert lengths(facts) == [50 * Fraction(duration)]


def test_onsets_without_trailing_zeros_are_judged_by_the_finest(tmp_path: Path) -> None:
    """``+0``, ``+1``, ``+1.1`` at 0.1 s a record: a gap, though one decimal is missing at first."""
    facts = facts_of(tmp_path, ["+0", "+1", "+1.1", "+1.2"], duration="0.1", kind="EDF+D")
    assert [piece.start_s for piece in facts.pieces] == [0, 1]


def test_whole_seconds_hide_no_gap(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, ["+0", "+1", "+3", "+4"], kind="EDF+D")
    assert [piece.start_s for piece in facts.pieces] == [0, 3]


def test_rounding_does_not_add_up(tmp_path: Path) -> None:
    """Four records of 0.25 s may start at one whole second; one of 0.03 s a second may not."""
    whole = ["+0", "+0", "+1", "+1", "+1", "+1", "+2", "+2"]
    assert lengths(facts_of(tmp_path, whole, duration="0.25")) == [2]
    apart = [f"+{i}" for i in range(40)]
    facts = facts_of(tmp_path, apart, duration="0.033333", kind="EDF+D")
    assert len(facts.pieces) == 20
    assert facts.duration_s > 38


def test_a_duration_with_too_few_decimals_drifts_without_a_gap(tmp_path: Path) -> None:
    """A 1/30 s record stated as 0.033333 s: 10 ppm, so 1,500 records are off by 0.5 ms."""
    onsets = [f"+{i / 30:.7f}" for i in range(1501)]
    facts = facts_of(tmp_path, onsets, duration="0.033333", spr=64)
    assert lengths(facts) == [1501 * Fraction("0.033333")]
    (warning,) = facts.warnings
    assert "off from the stated record duration of 0.033333 s" in warning
    assert "up to 0.0005 s" in warning


def test_drift_below_half_a_sample_is_not_told(tmp_path: Path) -> None:
    onsets = [f"+{i / 30:.7f}" for i in range(100)]
    assert facts_of(tmp_path, onsets, duration="0.033333", spr=64).warnings == ()


def test_pieces_never_overlap_though_the_clock_drifts(tmp_path: Path) -> None:
    """Each second lasts 4 ms less by the clock; then a pause of 20 ms, less than the 40 ms lost."""
    onsets = [f"+{i * 0.996:.3f}" for i in range(11)]
    onsets += [f"+{11 * 0.996 + 0.02 + i * 0.996:.3f}" for i in range(3)]
    facts = facts_of(tmp_path, onsets)
    assert lengths(facts) == [11, 3]
    assert facts.pieces[1].start_s == 11
    assert any("off from the stated record duration" in warning for warning in facts.warnings)


def test_a_continuous_clock_set_back_is_read_on_with_a_warning(tmp_path: Path) -> None:
    """The file says that it is continuous, and time that runs back cannot be a gap."""
    facts = facts_of(tmp_path, ["+0", "+1", "+1.5", "+2.5", "+3.5"])
    assert lengths(facts) == [5]
    assert any("1 records start before" in w and "record 3" in w for w in facts.warnings)
    assert any("up to 0.5 s" in warning for warning in facts.warnings)


def test_onsets_of_any_length_stay_exact(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, ["+0.333333333333333333", "+100000.5"], kind="EDF+D")
    assert facts.pieces[1].start_s == Fraction("100000.5") - Fraction("0.333333333333333333")
    long = "+1." + "0" * 40
    assert lengths(facts_of(tmp_path, ["+0", long])) == [2]
