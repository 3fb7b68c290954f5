"""Laws of reading: what was stored comes back, wherever and however it is read."""

import json
import threading
from datetime import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from edf_bytes import Sig, annotation_signal, build, clock, stored, tal
from waveassay.contract import Interval
from waveassay.recording import Annotation, Facts, RecordingError, open_recording, read_facts

FAST = settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
BLOCK_SIZES = (1, 100, 1 << 20)


def write(folder: Path, raw: bytes) -> Path:
    path = folder / "recording.edf"
    path.write_bytes(raw)
    return path


def digital(physical: np.ndarray, signal: Sig, bdf: bool) -> list[int]:
    """Undo the scaling, by the formula of the specification."""
    top = 1 << (23 if bdf else 15)
    low = -top if signal.dmin is None else int(signal.dmin)
    high = top - 1 if signal.dmax is None else int(signal.dmax)
    span = float(signal.pmax) - float(signal.pmin)
    exact = low + (physical - float(signal.pmin)) * (high - low) / span
    assert np.abs(exact - np.rint(exact)).max(initial=0) < 1e-3
    return [int(value) for value in np.rint(exact)]


@st.composite
def layouts(draw: st.DrawFn) -> tuple[list[Sig], int, bool, str]:
    """Signals with random stored values, records, EDF or BDF, record duration."""
    bdf = draw(st.booleans())
    top = 1 << (23 if bdf else 15)
    records = draw(st.integers(1, 9))
    signals = []
    for number in range(draw(st.integers(1, 5))):
        spr = draw(st.sampled_from([1, 2, 3, 7, 7, 7]))
        pmin, pmax = draw(st.sampled_from([(-100, 100), (3276, -3276), (0, 1), (-50, 350.5)]))
        dmin, dmax = draw(st.sampled_from([(None, None), (-2048, 2047), (0, 4095)]))
        values = st.integers(-top if dmin is None else dmin, top - 1 if dmax is None else dmax)
        data = draw(st.lists(values, min_size=records * spr, max_size=records * spr))
        signals.append(
            Sig(f"S{number}", spr, pmin=pmin, pmax=pmax, dmin=dmin, dmax=dmax, data=data)
        )
    return signals, records, bdf, draw(st.sampled_from(["1", "0.5", "0.033333", "10"]))


@FAST
@given(layouts(), st.sampled_from(BLOCK_SIZES))
def test_every_stored_value_comes_back(
    tmp_path: Path, layout: tuple[list[Sig], int, bool, str], block_bytes: int
) -> None:
    signals, records, bdf, duration = layout
    path = write(tmp_path, build(signals, records, bdf=bdf, duration=duration))
    with open_recording(path, block_bytes=block_bytes) as recording:
        facts = recording.facts
        (whole,) = facts.pieces
        found = recording.read(range(len(signals)), 0, whole.start_s, whole.stop_s)
    assert facts.duration_s == records * Fraction(duration) == whole.stop_s
    for signal, own, x in zip(signals, facts.signals, found, strict=True):
        assert own.rate_hz == int(signal.spr) / Fraction(duration)
        assert x.dtype == np.float64
        assert x.size == own.samples == records * int(signal.spr)
        assert digital(x, signal, bdf) == stored(signal, records)


@FAST
@given(layouts(), st.data(), st.sampled_from(BLOCK_SIZES))
def test_a_part_equals_the_same_part_of_the_whole(
    tmp_path: Path,
    layout: tuple[list[Sig], int, bool, str],
    data: st.DataObject,
    block_bytes: int,
) -> None:
    signals, records, bdf, duration = layout
    path = write(tmp_path, build(signals, records, bdf=bdf, duration=duration))
    length_s = records * Fraction(duration)
    anywhere = st.fractions(-1, 2, max_denominator=1000).map(lambda part: part * length_s)
    on_samples = st.integers(-3, 7 * records + 3).map(lambda i: i * Fraction(duration) / 7)
    moments = anywhere | on_samples
    start_s, stop_s = data.draw(moments), data.draw(moments)
    asked = data.draw(st.permutations(range(len(signals))))[: data.draw(st.integers(1, 5))]
    with open_recording(path, block_bytes=block_bytes) as recording:
        rates = [signal.rate_hz for signal in recording.facts.signals]
        whole = recording.read(range(len(signals)), 0, Fraction(0), length_s)
        parts = recording.read(asked, 0, start_s, stop_s)
    for index, part in zip(asked, parts, strict=True):
        inside = [start_s <= i / rates[index] < stop_s for i in range(whole[index].size)]
        assert part.tobytes() == whole[index][inside].tobytes()


@FAST
@given(layouts(), st.data(), st.sampled_from(BLOCK_SIZES))
def test_samples_as_stored_are_small_and_become_what_is_read(
    tmp_path: Path,
    layout: tuple[list[Sig], int, bool, str],
    data: st.DataObject,
    block_bytes: int,
) -> None:
    signals, records, bdf, duration = layout
    path = write(tmp_path, build(signals, records, bdf=bdf, duration=duration))
    length_s = records * Fraction(duration)
    moments = st.fractions(-1, 2, max_denominator=1000).map(lambda part: part * length_s)
    start_s, stop_s = data.draw(moments), data.draw(moments)
    asked = data.draw(st.lists(st.integers(0, len(signals) - 1), min_size=1, max_size=6))
    with open_recording(path, block_bytes=block_bytes) as recording:
        found = recording.read(asked, 0, start_s, stop_s)
        outside = dict(recording.out_of_range)
        held = recording.read_digital(asked, 0, start_s, stop_s)
        assert recording.out_of_range == {index: 2 * number for index, number in outside.items()}
    assert len(held) == len(asked)
    for place, x in enumerate(found):
        assert held.physical(place).tobytes() == x.tobytes()
        assert held.stored[place].nbytes == (x.nbytes // 2 if bdf else x.nbytes // 4) or not x.size


def test_many_signals_are_each_their_own(tmp_path: Path) -> None:
    """More than are decoded together, of two rates in turn."""
    signals = [
        Sig(f"S{number}", 3 if number % 40 < 37 else 2, data=[number] * 6) for number in range(90)
    ]
    path = write(tmp_path, build(signals, 2))
    with open_recording(path) as recording:
        whole = recording.read(range(90), 0, Fraction(0), Fraction(2))
        blocks = {
            index: row.copy()
            for _, block in recording.blocks()
            for indices, rows in block
            for index, row in zip(indices, rows, strict=True)
        }
    for number, (signal, x) in enumerate(zip(signals, whole, strict=True)):
        assert digital(x, signal, bdf=False) == [number] * x.size
        assert x.size == 2 * int(signal.spr)
        assert blocks[number].tobytes() == x.tobytes()


@FAST
@given(
    st.lists(st.integers(0, 3), min_size=1, max_size=12),
    st.sampled_from(["1", "0.25", "0.1", "1.5"]),
    st.sampled_from(["0", "0.3945312", "0.5"]),
    st.booleans(),
    st.sampled_from(BLOCK_SIZES),
)
def test_pieces_of_any_gaps_are_found_and_read(
    tmp_path: Path, gaps: list[int], duration: str, zero: str, bdf: bool, block_bytes: int
) -> None:
    """Before each record a pause of so many tenths of a second; 0 continues the piece."""
    record_s, records = Fraction(duration), len(gaps)
    onsets: list[Fraction] = []
    at = Fraction(zero)
    for gap in gaps:
        at += Fraction(gap, 10) if onsets else 0
        onsets.append(at)
        at += record_s
    texts = [f"+{float(onset):.7f}" for onset in onsets]
    signals = [Sig("A", 20), annotation_signal(40, bdf=bdf), Sig("B", 1)]
    reserved = "BDF+D" if bdf else "EDF+D"
    raw = build(signals, records, duration=duration, bdf=bdf, reserved=reserved, tals=clock(*texts))
    starts = [0] + [i for i in range(1, records) if gaps[i] > 0]
    ends = [*starts[1:], records]
    with open_recording(write(tmp_path, raw), block_bytes=block_bytes) as recording:
        facts = recording.facts
        assert facts.format == reserved
        assert facts.pieces == tuple(
            Interval(onsets[a] - onsets[0], onsets[a] - onsets[0] + (b - a) * record_s)
            for a, b in zip(starts, ends, strict=True)
        )
        assert facts.duration_s == onsets[-1] + record_s - onsets[0]
        assert not facts.warnings
        for number, (a, b) in enumerate(zip(starts, ends, strict=True)):
            piece = facts.pieces[number]
            for index, spr in ((0, 20), (2, 1)):
                (x,) = recording.read([index], number, Fraction(0), facts.duration_s)
                expected = stored(signals[index], records)[a * spr : b * spr]
                assert digital(x, signals[index], bdf) == expected
            rate_hz = facts.signals[0].rate_hz
            (x,) = recording.read([0], number, piece.start_s + 3 / rate_hz, piece.stop_s)
            assert digital(x, signals[0], bdf) == stored(signals[0], records)[a * 20 + 3 : b * 20]


def test_read_sizes_change_no_bit(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    signals = [
        Sig(f"S{i}", spr, data=[int(v) for v in rng.integers(-32768, 32768, 50 * spr)])
        for i, spr in enumerate((64, 64, 5, 64))
    ]
    path = write(tmp_path, build(signals, 50))
    found = set()
    for block_bytes in (1, 400, 1000, 4096, 1 << 21):
        with open_recording(path, block_bytes=block_bytes) as recording:
            parts = recording.read([3, 0, 2, 1], 0, Fraction(1, 3), Fraction(97, 2))
        found.add(b"".join(part.tobytes() for part in parts))
    assert len(found) == 1


def test_blocks_hold_what_read_returns(tmp_path: Path) -> None:
    signals = [Sig("A", 4), Sig("B", 4), annotation_signal(), Sig("C", 3)]
    path = write(tmp_path, build(signals, 11, reserved="EDF+C"))
    with open_recording(path, block_bytes=300) as recording:
        whole = recording.read([0, 1, 3], 0, Fraction(0), Fraction(11))
        gathered: dict[int, list[np.ndarray]] = {0: [], 1: [], 3: []}
        firsts = []
        for first, parts in recording.blocks():
            firsts.append(first)
            for indices, samples in parts:
                for index, row in zip(indices, samples, strict=True):
                    gathered[index].append(row.copy())
    assert firsts == [0, 3, 6, 9]
    for x, rows in zip(whole, gathered.values(), strict=True):
        assert x.tobytes() == np.concatenate(rows).tobytes()


def test_facts_of_a_plus_file(tmp_path: Path) -> None:
    """The header's clock starts on the second; the first sample comes 0.3945312 s later."""

    def tals(record: int, which: int) -> bytes:
        own = tal(f"+{record}.3945312")
        return own + (tal("+1.5", "eyes closed", duration="0.25") if record == 0 else b"")

    raw = build([Sig("EEG Fp1", 128), annotation_signal()], 3, reserved="EDF+C", tals=tals)
    facts = read_facts(write(tmp_path, raw))
    assert facts.format == "EDF+C"
    assert facts.size_bytes == len(raw)
    assert facts.start == datetime(2024, 3, 1, 22, 0, 0, 394531)
    assert facts.pieces == (Interval(Fraction(0), Fraction(3)),)
    assert facts.annotations == (
        Annotation(Fraction("1.5") - Fraction("0.3945312"), Fraction(1, 4), "eyes closed"),
    )
    (signal,) = facts.signals
    assert (signal.index, signal.label, signal.unit, signal.samples) == (0, "EEG Fp1", "uV", 384)
    assert (signal.physical_min, signal.physical_max) == (-100, 100)
    assert (signal.digital_min, signal.digital_max) == (-32768, 32767)
    assert signal.transducer == "AgAgCl electrode"
    assert signal.prefilter == "HP:0.1Hz LP:75Hz"
    assert facts.warnings == ()


def test_the_rate_is_the_exact_fraction_of_the_text(tmp_path: Path) -> None:
    facts = read_facts(write(tmp_path, build([Sig(spr=16)], duration="0.033333")))
    assert facts.signals[0].rate_hz == Fraction(16_000_000, 33_333)


@pytest.mark.parametrize(
    ("short", "full"), [("84", 2084), ("85", 1985), ("99", 1999), ("00", 2000)]
)
def test_two_digit_years_turn_at_85(tmp_path: Path, short: str, full: int) -> None:
    start = read_facts(write(tmp_path, build([Sig()], date=f"28.02.{short}"))).start
    assert start == datetime(full, 2, 28, 22)


def test_facts_survive_json_exactly(tmp_path: Path) -> None:
    def tals(record: int, which: int) -> bytes:
        return (
            tal(f"+{record * 2}.3945312") + tal("+0.4", "x", "y", duration="0.1") + tal("+1", "µ")
        )

    raw = build(
        [Sig(), annotation_signal()], 3, reserved="EDF+D", tals=tals, duration="0.033333", tail=b"x"
    )
    facts = read_facts(write(tmp_path, raw))
    assert len(facts.pieces) == 3
    assert len(facts.annotations) == 9
    assert Facts.from_json(json.loads(json.dumps(facts.to_json()))) == facts
    nameless = read_facts(write(tmp_path, build([Sig()], date="99.99.99")))
    assert nameless.start is None
    assert Facts.from_json(json.loads(json.dumps(nameless.to_json()))) == nameless


def test_known_facts_spare_the_scan_but_must_fit(tmp_path: Path) -> None:
    path = write(tmp_path, build([Sig(), annotation_signal()], 5, reserved="EDF+C"))
    facts = read_facts(path)
    # The record clock is spoilt, so that only a scan would notice.
    path.write_bytes(path.read_bytes().replace(b"+3\x14", b"?3\x14"))
    with open_recording(path, facts=facts) as recording:
        assert recording.facts is facts
        assert recording.read([0], 0, Fraction(4), Fraction(9))[0].size == 4
    path.write_bytes(build([Sig(), annotation_signal()], 6, reserved="EDF+C"))
    with pytest.raises(RecordingError, match="has changed since it was examined"):
        open_recording(path, facts=facts)


def test_a_record_beyond_the_block_size_is_read_whole(tmp_path: Path) -> None:
    """Records of 40 kB: annotations are then read one by one, samples a record at a time."""
    signals = [Sig("A", 10_000), annotation_signal(), Sig("B", 10_000)]
    raw = build(signals, 3, reserved="EDF+C")
    with open_recording(write(tmp_path, raw), block_bytes=1000) as recording:
        assert recording.facts.pieces == (Interval(Fraction(0), Fraction(3)),)
        (x,) = recording.read([2], 0, Fraction(0), Fraction(3))
        assert digital(x, signals[2], bdf=False) == stored(signals[2], 3)


def test_only_annotations(tmp_path: Path) -> None:
    """EDF+ allows a file without samples, whose records may last 0 s."""
    raw = build(
        [annotation_signal()],
        1,
        duration=0,
        reserved="EDF+C",
        tals=lambda *_: tal("+0") + tal("+9", "x"),
    )
    facts = read_facts(write(tmp_path, raw))
    assert not facts.signals
    assert not facts.pieces
    assert facts.duration_s == 0
    assert facts.annotations == (Annotation(Fraction(9), None, "x"),)


def test_the_annotation_label_means_nothing_in_a_plain_file(tmp_path: Path) -> None:
    facts = read_facts(write(tmp_path, build([Sig("EDF Annotations")])))
    assert [signal.label for signal in facts.signals] == ["EDF Annotations"]
    assert facts.annotations == ()


def test_a_signal_without_samples_cannot_be_asked_for(tmp_path: Path) -> None:
    path = write(tmp_path, build([Sig(), annotation_signal()], reserved="EDF+C"))
    with open_recording(path) as recording:
        for index in (1, 2, -1):
            with pytest.raises(IndexError, match=str(index)):
                recording.read([index], 0, Fraction(0), Fraction(1))


def test_values_out_of_the_digital_range_are_counted_and_returned(tmp_path: Path) -> None:
    data = [0, 2047, 2048, -2048, -2049, 3000, 5, 6]
    twelve_bit = Sig("A", 2, dmin=-2048, dmax=2047, pmin=-2048, pmax=2047, data=data)
    path = write(tmp_path, build([twelve_bit, Sig("B", 2)], 4))
    for block_bytes in BLOCK_SIZES:
        with open_recording(path, block_bytes=block_bytes) as recording:
            assert recording.out_of_range == {}
            (x,) = recording.read([0], 0, Fraction(0), Fraction(1))
            assert recording.out_of_range == {}
            recording.read([0, 1], 0, Fraction(3, 2), Fraction(5, 2))
            assert recording.out_of_range == {0: 1}
            (x,) = recording.read([0], 0, Fraction(0), Fraction(4))
            assert recording.out_of_range == {0: 4}
        assert np.allclose(x, data, rtol=0, atol=1e-9)


def test_threads_share_a_recording(tmp_path: Path) -> None:
    path = write(tmp_path, build([Sig(spr=100)], 100))
    wrong = []
    with open_recording(path, block_bytes=500) as recording:
        expected = recording.read([0], 0, Fraction(0), Fraction(100))[0]

        def check(start: int) -> None:
            for _ in range(10):
                x = recording.read([0], 0, Fraction(start), Fraction(start + 20))[0]
                if x.tobytes() != expected[start * 100 : start * 100 + 2000].tobytes():
                    wrong.append(start)

        threads = [threading.Thread(target=check, args=(start,)) for start in (0, 30, 60, 80)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
    assert wrong == []


def test_a_recording_closes_with_its_block_and_twice(tmp_path: Path) -> None:
    with open_recording(write(tmp_path, build([Sig()]))) as recording:
        pass
    recording.close()
    with pytest.raises(RecordingError, match="cannot be read"):
        recording.read([0], 0, Fraction(0), Fraction(1))
