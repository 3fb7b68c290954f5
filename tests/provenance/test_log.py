"""A log can only be added to, and continues soundly whatever interrupted it."""

import hashlib
import json
import os
import signal
import subprocess
import sys
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from waveassay.contract.errors import MachineError, RefusedError
from waveassay.provenance import log as log_module
from waveassay.provenance.log import Log, current_actor
from waveassay.provenance.log_check import FIRST, verify_log


def records(path: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in path.read_bytes().splitlines()]


def three_lines(path: Path) -> Log:
    log = Log(path, actor="tester@bench")
    log.append("run_started", recipe="frontal-spectra", edition=1)
    log.append("recording_done", recording="site1/p03", épochs=[1, 2.5, None, True])
    log.append("run_finished")
    log.close()
    return log


def test_each_line_is_compact_sorted_and_bound_to_the_one_before(tmp_path: Path) -> None:
    path = tmp_path / "run" / "log.jsonl"
    log = three_lines(path)
    previous = FIRST
    lines = path.read_bytes().splitlines(keepends=True)
    assert len(lines) == 3
    for number, line in enumerate(lines, start=1):
        record = json.loads(line)
        again = json.dumps(record, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        assert line == again.encode() + b"\n"
        assert record["sequence"] == number
        assert record["actor"] == "tester@bench"
        assert record["previous"] == previous
        previous = hashlib.sha256(line).hexdigest()
    assert log.head == previous
    assert log.lines == 3
    assert verify_log(path).sound
    assert verify_log(path, log.head, 3).sound


def test_facts_come_back_as_given(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    odd = b"p\xe903.edf".decode("utf-8", "surrogateescape")
    Log(path).append("read", path=odd, text='a "b"\n\u2028µ', number=0.1)
    (record,) = records(path)
    assert (record["path"], record["text"], record["number"]) == (odd, 'a "b"\n\u2028µ', 0.1)
    assert verify_log(path).sound


def test_times_are_utc_with_offset_and_never_go_back(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "log.jsonl"
    log = Log(path)
    start = datetime.now(UTC)
    log.append("first")
    assert datetime.fromisoformat(records(path)[0]["time"]) >= start
    assert records(path)[0]["time"].endswith("+00:00")

    class SetBack(datetime):
        @classmethod
        def now(cls, tz: Any = None) -> Any:
            return datetime.now(tz) - timedelta(hours=1)

    monkeypatch.setattr(log_module, "datetime", SetBack)
    log.append("second")
    first, second = records(path)
    assert second["time"] == first["time"]
    assert second["clock_behind_s"] == pytest.approx(3600, abs=60)
    assert "clock_behind_s" not in first
    assert verify_log(path).sound


def test_an_existing_log_is_continued(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    head = three_lines(path).head
    before = path.read_bytes()
    log = Log(path)
    assert (log.head, log.lines) == (head, 3)
    log.append("resumed")
    assert path.read_bytes().startswith(before)
    assert records(path)[-1]["previous"] == head
    assert verify_log(path, log.head, 4).sound


def test_a_torn_line_is_cut_off_and_the_cut_is_logged(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    three_lines(path)
    whole = path.read_bytes()
    last = whole.splitlines(keepends=True)[-1]
    for kept in range(1, len(last)):
        path.write_bytes(whole[: len(whole) - len(last) + kept])
        log = Log(path)
        log.append("resumed")
        one, two, cut, resumed = records(path)
        assert (cut["event"], cut["bytes_lost"]) == ("line_cut", kept)
        assert cut["lost"] == last[:kept].decode()
        assert cut["sha256_lost"] == hashlib.sha256(last[:kept]).hexdigest()
        assert [r["sequence"] for r in (one, two, cut, resumed)] == [1, 2, 3, 4]
        assert verify_log(path, log.head, 4).sound


def test_a_long_torn_line_of_zeros_is_cut_off_whole(tmp_path: Path) -> None:
    # What a power cut can leave: the file's length without its bytes.
    path = tmp_path / "log.jsonl"
    three_lines(path)
    with path.open("ab") as file:
        file.write(b"\0" * 10_000)
    Log(path)
    cut = records(path)[-1]
    assert (len(records(path)), cut["bytes_lost"]) == (4, 10_000)
    assert verify_log(path).sound


def test_a_log_that_is_only_a_torn_line(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    path.write_bytes(b'{"actor":"a@b","ev')
    Log(path)
    (cut,) = records(path)
    assert (cut["event"], cut["sequence"], cut["previous"]) == ("line_cut", 1, FIRST)


def test_nothing_is_built_on_a_broken_log(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    three_lines(path)
    edited = path.read_bytes().replace(b"site1/p03", b"site1/p04")
    path.write_bytes(edited)
    with pytest.raises(RefusedError, match="line 2: ") as caught:
        Log(path)
    assert str(path) in str(caught.value)
    assert path.read_bytes() == edited


def test_a_log_that_shrinks_under_its_writer_stops_it(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    log = three_lines(path)
    path.write_bytes(path.read_bytes()[:100])
    with pytest.raises(RefusedError, match="was cut"):
        log.append("more")


@pytest.mark.parametrize("name", ["sequence", "time", "actor", "previous", "clock_behind_s"])
def test_facts_cannot_take_the_logs_own_names(tmp_path: Path, name: str) -> None:
    log = Log(tmp_path / "log.jsonl")
    with pytest.raises(ValueError, match=name):
        log.append("event", **{name: "x"})


def test_what_is_not_json_is_refused_and_leaves_no_trace(tmp_path: Path) -> None:
    log = three_lines(tmp_path / "log.jsonl")
    for fact in (float("nan"), tmp_path, b"x"):
        with pytest.raises((TypeError, ValueError)):
            log.append("event", fact=fact)
    assert verify_log(log.path, log.head, 3).sound


@pytest.mark.parametrize("actor", ["", "  "])
def test_an_empty_actor_is_refused(tmp_path: Path, actor: str) -> None:
    with pytest.raises(ValueError, match="actor"):
        Log(tmp_path / "log.jsonl", actor=actor)


def test_an_empty_event_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="event"):
        Log(tmp_path / "log.jsonl").append("")


def test_the_actor_is_never_empty(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("platform.node", lambda: "")

    def nobody(*_: object) -> None:
        raise KeyError("no such account")

    monkeypatch.setattr("getpass.getuser", nobody)
    if os.name == "posix":
        monkeypatch.setattr("pwd.getpwuid", nobody)
    account, _, host = current_actor().partition("@")
    assert account
    assert host


def test_a_folder_that_cannot_be_made_is_told_plainly(tmp_path: Path) -> None:
    (tmp_path / "runs").write_text("")
    with pytest.raises(MachineError, match="a file stands where a folder is needed"):
        Log(tmp_path / "runs" / "log.jsonl")


def test_a_full_disk_leaves_no_half_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    log = three_lines(tmp_path / "log.jsonl")
    true_write = os.write
    room = [10]

    def write(descriptor: int, content: bytes) -> int:
        if not room[0]:
            raise OSError(28, "No space left on device")
        written = true_write(descriptor, content[: room[0]])
        room[0] -= written
        return written

    monkeypatch.setattr(os, "write", write)
    with pytest.raises(MachineError, match="disk is full"):
        log.append("more")
    monkeypatch.undo()
    assert verify_log(log.path, log.head, 3).sound
    log.append("more")
    assert verify_log(log.path, log.head, 4).sound


def test_lines_are_synced_once_a_second_and_on_close(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    synced: list[int] = []
    now = [100.0]
    monkeypatch.setattr(os, "fsync", synced.append)
    monkeypatch.setattr("time.monotonic", lambda: now[0])
    log = Log(tmp_path / "log.jsonl")
    for _ in range(5):
        log.append("event")
    assert len(synced) == 0
    now[0] += log_module.SYNC_EVERY_S
    log.append("event")
    assert len(synced) == 1
    log.close()
    assert len(synced) == 1  # nothing was written since
    log.append("event")
    log.close()
    assert len(synced) == 2


WRITER = """
import sys
from pathlib import Path
from waveassay.provenance.log import Log
log = Log(Path(sys.argv[1]))
for i in range(int(sys.argv[2])):
    log.append("event", writer=sys.argv[3], number=i)
    if not i:
        print("started", flush=True)
"""


def test_several_processes_make_one_chain(tmp_path: Path) -> None:
    pytest.importorskip("fcntl", reason="two writers at a time need POSIX locks")
    path = tmp_path / "log.jsonl"
    command = [sys.executable, "-c", WRITER, str(path), "100"]
    writers = [
        subprocess.Popen([*command, name], stdout=subprocess.DEVNULL) for name in ("a", "b", "c")
    ]
    assert [writer.wait() for writer in writers] == [0, 0, 0]
    assert verify_log(path, lines=300).sound
    for name in ("a", "b", "c"):
        numbers = [r["number"] for r in records(path) if r["writer"] == name]
        assert numbers == list(range(100))


@pytest.mark.skipif(os.name != "posix", reason="SIGKILL is POSIX")
def test_a_killed_writer_leaves_a_log_that_is_continued(tmp_path: Path) -> None:
    path = tmp_path / "log.jsonl"
    command = [sys.executable, "-c", WRITER, str(path), "1000000", "a"]
    with subprocess.Popen(command, stdout=subprocess.PIPE) as writer:
        assert writer.stdout is not None
        writer.stdout.readline()
        writer.send_signal(signal.SIGKILL)
    log = Log(path)
    log.append("resumed")
    assert log.lines >= 2
    assert verify_log(path, log.head, log.lines).sound


def test_many_lines_at_once_are_as_many_one_by_one(tmp_path: Path) -> None:
    together, single = Log(tmp_path / "a.jsonl", "me@here"), Log(tmp_path / "b.jsonl", "me@here")
    facts = [{"recording": f"r{number}"} for number in range(5)]
    together.append_all("recording", facts)
    for known in facts:
        single.append("recording", **known)
    assert verify_log(together.path, together.head, 5).sound
    kept = [
        [
            (line["sequence"], line["recording"])
            for line in map(json.loads, log.path.read_text().splitlines())
        ]
        for log in (together, single)
    ]
    assert kept[0] == kept[1] == [(number + 1, f"r{number}") for number in range(5)]
    with pytest.raises(ValueError, match="actor, time"):
        together.append_all("recording", [{"fine": 1}, {"time": 2}, {"actor": 3}])
    assert together.lines == 5
