"""Whatever is done to a log, its first broken line is named, with the reason."""

import hashlib
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.provenance.log import Log
from waveassay.provenance.log_check import FIRST, LogFault, check_lines, verify_log

COUNT = 7
Lines = list[bytes]


@pytest.fixture(scope="module")
def lines(tmp_path_factory: pytest.TempPathFactory) -> Lines:
    path = tmp_path_factory.mktemp("log") / "log.jsonl"
    log = Log(path, actor="tester@bench")
    for number in range(COUNT):
        log.append("recording_done", recording=f"p{number:02}")
    return path.read_bytes().splitlines(keepends=True)


def head_of(lines: Lines) -> str:
    return hashlib.sha256(lines[-1]).hexdigest()


def rechained(records: list[dict[str, Any]]) -> bytes:
    """Return a log whose digests fit, as one who knows the method could forge it."""
    previous, content = FIRST, b""
    for record in records:
        record = {**record, "previous": previous}
        line = json.dumps(record, sort_keys=True, separators=(",", ":")).encode() + b"\n"
        previous = hashlib.sha256(line).hexdigest()
        content += line
    return content


def test_the_log_as_written_is_sound(lines: Lines) -> None:
    verdict = check_lines(b"".join(lines), head=head_of(lines))
    assert verdict.sound
    assert (verdict.lines, verdict.head) == (COUNT, head_of(lines))


def test_every_flipped_byte_is_found_in_its_own_line(lines: Lines, tmp_path: Path) -> None:
    content = b"".join(lines)
    head = head_of(lines)
    path = tmp_path / "log.jsonl"
    number = 1
    for place in range(len(content)):
        broken = bytearray(content)
        broken[place] ^= (0x01, 0x20, 0x80)[place % 3]
        path.write_bytes(broken)
        verdict = verify_log(path, head, COUNT)
        assert verdict.broken_line == number, (place, verdict)
        assert verdict.fault in (LogFault.EDITED, LogFault.TORN), (place, verdict)
        number += content[place] == ord("\n")


def test_without_the_head_every_edit_but_one_in_the_last_line_is_found(lines: Lines) -> None:
    for number in range(1, COUNT):
        edited = [*lines]
        edited[number - 1] = edited[number - 1].replace(b"recording_done", b"recording_lost")
        verdict = check_lines(b"".join(edited))
        assert (verdict.broken_line, verdict.fault) == (number, LogFault.EDITED)
    edited = [*lines[:-1], lines[-1].replace(b"recording_done", b"recording_lost")]
    assert check_lines(b"".join(edited)).sound  # nothing holds the last line's digest but the head


@pytest.mark.parametrize("number", range(1, COUNT))
@pytest.mark.parametrize("count", [1, 2])
def test_removed_lines(lines: Lines, number: int, count: int) -> None:
    left = lines[: number - 1] + lines[number - 1 + count :]
    if len(left) == number - 1:
        return  # removed at the end: see the test below
    verdict = check_lines(b"".join(left))
    assert (verdict.broken_line, verdict.fault) == (number, LogFault.REMOVED)
    assert f"{number} to {number + count - 1} are missing" in verdict.why


@pytest.mark.parametrize("left", range(COUNT))
def test_lines_removed_at_the_end_are_found_by_the_count(
    lines: Lines, tmp_path: Path, left: int
) -> None:
    path = tmp_path / "log.jsonl"
    path.write_bytes(b"".join(lines[:left]))
    verdict = verify_log(path, head_of(lines), COUNT)
    assert (verdict.broken_line, verdict.fault) == (left + 1, LogFault.REMOVED)
    assert verify_log(path, head_of(lines)).broken_line is not None


def test_lines_added_behind_the_end_are_found_by_the_count(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    log = Log(path)
    log.append("run_finished")
    head = log.head
    log.append("added")
    assert verify_log(path).sound
    verdict = verify_log(path, head, 1)
    assert (verdict.broken_line, verdict.fault) == (2, LogFault.INSERTED)


def forged(lines: Lines, number: int, link: Callable[[int], str], **changes: object) -> bytes:
    record = {**json.loads(lines[number - 1]), "event": "forged", "previous": link(number)}
    record.update(changes)
    return json.dumps(record, sort_keys=True, separators=(",", ":")).encode() + b"\n"


@pytest.mark.parametrize("number", range(1, COUNT + 1))
@pytest.mark.parametrize(
    "kind", ["fitting", "numbered", "dated", "unfitting", "junk", "empty", "two"]
)
def test_inserted_lines(lines: Lines, number: int, kind: str) -> None:
    def fitting(number: int) -> str:
        return FIRST if number == 1 else hashlib.sha256(lines[number - 2]).hexdigest()

    added = {
        "fitting": lambda: [forged(lines, number, fitting)],
        "numbered": lambda: [forged(lines, number, fitting, sequence=99)],
        "dated": lambda: [forged(lines, number, fitting, time="2001-01-01T00:00:00+00:00")],
        "unfitting": lambda: [forged(lines, number, lambda _: "ab" * 32)],
        "junk": lambda: [b"not a line\n"],
        "empty": lambda: [b"\n"],
        "two": lambda: [b"{}\n", b"[1]\n"],
    }[kind]()
    changed = lines[: number - 1] + added + lines[number - 1 :]
    verdict = check_lines(b"".join(changed), head=head_of(lines))
    assert (verdict.broken_line, verdict.fault) == (number, LogFault.INSERTED)


@pytest.mark.parametrize("source", range(1, COUNT + 1))
@pytest.mark.parametrize("target", range(1, COUNT + 2))
def test_a_copied_line(lines: Lines, source: int, target: int) -> None:
    changed = [*lines[: target - 1], lines[source - 1], *lines[target - 1 :]]
    verdict = check_lines(b"".join(changed), head=head_of(lines))
    # A copy beside its original cannot be told from it: the second of the two is named.
    named = target + 1 if source == target else target
    assert (verdict.broken_line, verdict.fault) == (named, LogFault.INSERTED)


@settings(deadline=None)
@given(order=st.permutations(range(COUNT)))
def test_reordered_lines(lines: Lines, order: list[int]) -> None:
    verdict = check_lines(b"".join(lines[i] for i in order), head=head_of(lines))
    first = next((place for place, i in enumerate(order) if place != i), None)
    if first is None:
        assert verdict.sound
    else:
        assert (verdict.broken_line, verdict.fault) == (first + 1, LogFault.REORDERED)


@pytest.mark.parametrize("number", range(1, COUNT + 1))
def test_a_chain_forged_anew_with_a_wrong_sequence(lines: Lines, number: int) -> None:
    records = [json.loads(line) for line in lines]
    records[number - 1]["sequence"] += 5
    verdict = check_lines(rechained(records))
    assert (verdict.broken_line, verdict.fault) == (number, LogFault.SEQUENCE)


@pytest.mark.parametrize("number", range(2, COUNT + 1))
def test_a_chain_forged_anew_with_a_time_that_goes_back(lines: Lines, number: int) -> None:
    records = [json.loads(line) for line in lines]
    records[number - 1]["time"] = "2001-01-01T00:00:00.000000+00:00"
    verdict = check_lines(rechained(records))
    assert (verdict.broken_line, verdict.fault) == (number, LogFault.TIME)


@pytest.mark.parametrize(
    ("name", "value", "why"),
    [
        ("actor", "", "no actor"),
        ("actor", None, "no actor"),
        ("event", "", "no event"),
        ("time", "yesterday", "no time"),
        ("time", "2024-01-01T00:00:00", "no offset"),
        ("sequence", True, "no sequence"),
        ("sequence", "3", "no sequence"),
    ],
)
def test_a_chain_forged_anew_with_what_no_line_has(
    lines: Lines, name: str, value: object, why: str
) -> None:
    records = [json.loads(line) for line in lines]
    records[2][name] = value
    verdict = check_lines(rechained(records))
    assert (verdict.broken_line, verdict.fault) == (3, LogFault.EDITED)
    assert why in verdict.why


def test_a_chain_forged_anew_without_a_flaw_is_found_by_its_head(
    lines: Lines, tmp_path: Path
) -> None:
    records = [json.loads(line) for line in lines]
    records[2]["recording"] = "another"
    path = tmp_path / "log.jsonl"
    path.write_bytes(rechained(records))
    assert verify_log(path).sound
    assert not verify_log(path, head_of(lines)).sound


def test_a_torn_last_line(lines: Lines, tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    path.write_bytes(b"".join(lines)[:-10])
    verdict = verify_log(path)
    assert (verdict.broken_line, verdict.fault) == (COUNT, LogFault.TORN)


@settings(deadline=None)
@given(st.binary(max_size=200))
def test_any_bytes_at_all_give_a_verdict(content: bytes) -> None:
    whole = content[: content.rfind(b"\n") + 1]
    assert check_lines(whole).sound == (whole == b"")
