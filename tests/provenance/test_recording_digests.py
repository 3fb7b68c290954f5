"""A recording that has not changed is not read again; one that may have changed always is."""

import hashlib
import os
import signal
import sqlite3
import subprocess
import sys
import time
from fractions import Fraction
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest

from waveassay.contract.errors import MachineError, SignalError
from waveassay.provenance import recording_digests
from waveassay.provenance.files import sha256_of
from waveassay.provenance.recording_digests import DATABASE, UNSETTLED_S, RecordingDigests

HASHER = "waveassay.provenance.recording_digests.sha256_of"


class Clock:
    """The wall clock, set by hand: at first so late that every file has settled."""

    def __init__(self) -> None:
        self.now_ns = time.time_ns() + 3600 * 10**9

    def __call__(self) -> int:
        return self.now_ns

    def set_after(self, path: Path, seconds: float) -> None:
        """Set it to so long after the last change of a file."""
        stat = path.stat()
        self.now_ns = max(stat.st_mtime_ns, stat.st_ctime_ns) + int(seconds * 1e9)


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    clock = Clock()
    monkeypatch.setattr(time, "time_ns", clock)
    return clock


@pytest.fixture
def reads(monkeypatch: pytest.MonkeyPatch) -> list[Path]:
    """Return the list of files that were hashed."""
    seen: list[Path] = []

    def counting(path: Path) -> str:
        seen.append(path)
        return sha256_of(path)

    monkeypatch.setattr(HASHER, counting)
    return seen


@pytest.fixture
def recording(tmp_path: Path) -> Path:
    path = tmp_path / "p03.edf"
    path.write_bytes(b"waveform" * 1000)
    return path


@pytest.fixture
def store(tmp_path: Path) -> Path:
    return tmp_path / "store"


def sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


@pytest.mark.usefixtures("clock")
def test_it_is_read_once(store: Path, recording: Path, reads: list[Path]) -> None:
    with RecordingDigests(store) as digests:
        assert digests.digest(recording) == sha256(recording)
        assert digests.digest(recording) == sha256(recording)
    with RecordingDigests(store) as digests:
        assert digests.digest(recording) == sha256(recording)
    assert reads == [recording]


@pytest.mark.usefixtures("clock")
def test_one_file_under_two_spellings_of_its_path(
    store: Path, recording: Path, reads: list[Path], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(recording.parent)
    with RecordingDigests(store) as digests:
        digests.digest(recording)
        digests.digest(Path(recording.name))
        digests.digest(store / ".." / recording.name)
    assert reads == [recording]


def rewrite_same_size_and_time(path: Path) -> None:
    stat = path.stat()
    path.write_bytes(b"WAVEFORM" * 1000)
    os.utime(path, ns=(stat.st_atime_ns, stat.st_mtime_ns))


def exchange_same_size_and_time(path: Path) -> None:
    stat = path.stat()
    other = path.with_name("other.edf")
    other.write_bytes(b"WAVEFORM" * 1000)
    os.utime(other, ns=(stat.st_atime_ns, stat.st_mtime_ns))
    other.replace(path)


@pytest.mark.usefixtures("clock")
@pytest.mark.parametrize(
    "change",
    [
        lambda path: path.write_bytes(b"longer" * 5000),
        lambda path: path.write_bytes(b"WAVEFORM" * 1000),
        pytest.param(
            rewrite_same_size_and_time,
            marks=pytest.mark.skipif(os.name != "posix", reason="change times are POSIX"),
        ),
        pytest.param(
            exchange_same_size_and_time,
            marks=pytest.mark.skipif(os.name != "posix", reason="inodes are POSIX"),
        ),
    ],
)
@pytest.mark.parametrize("reopened", [True, False])
def test_a_changed_file_is_read_again(
    store: Path, recording: Path, change: Any, reopened: bool
) -> None:
    digests = RecordingDigests(store)
    before = digests.digest(recording)
    digests.facts(recording, lambda: {"size": recording.stat().st_size, "edition": 1})
    if reopened:
        digests.close()
        digests = RecordingDigests(store)
    time.sleep(0.02)  # beyond the step of the file system's clock
    change(recording)
    assert digests.digest(recording) == sha256(recording) != before
    facts = digests.facts(recording, lambda: {"size": recording.stat().st_size, "edition": 2})
    assert facts == {"size": recording.stat().st_size, "edition": 2}
    # What is known now is remembered in turn.
    assert digests.facts(recording, lambda: {"edition": 3}) == facts
    digests.close()
    with RecordingDigests(store) as again:
        assert again.facts(recording, lambda: {"edition": 3}) == facts


def test_a_file_that_changed_just_now_is_not_trusted_by_its_times(
    store: Path, recording: Path, reads: list[Path], clock: Clock
) -> None:
    # Two changes within one step of a file system's clock leave equal times (steps are up to 2 s).
    clock.set_after(recording, 2)
    with RecordingDigests(store) as digests:
        digests.digest(recording)
        digests.digest(recording)
        digests.facts(recording, lambda: {"made": 1})
        assert digests.facts(recording, lambda: {"made": 2}) == {"made": 2}
    assert reads == [recording, recording]
    with RecordingDigests(store) as digests:
        digests.digest(recording)
    assert reads == [recording] * 3


def test_a_file_dated_in_the_future_is_not_trusted(
    store: Path, recording: Path, reads: list[Path], clock: Clock
) -> None:
    clock.set_after(recording, -3600)
    with RecordingDigests(store) as digests:
        digests.digest(recording)
        digests.digest(recording)
    assert reads == [recording, recording]


def test_whether_it_settled_counts_from_the_start_of_the_reading(
    store: Path, recording: Path, clock: Clock, monkeypatch: pytest.MonkeyPatch
) -> None:
    # A long reading that began just after a change may have missed a second one.
    reads = []

    def slow(path: Path) -> str:
        reads.append(path)
        clock.set_after(path, 60)
        return sha256_of(path)

    monkeypatch.setattr(HASHER, slow)
    with RecordingDigests(store) as digests:
        clock.set_after(recording, 1)
        digests.digest(recording)
        digests.digest(recording)
        assert len(reads) == 2  # the second reading began late enough
        digests.digest(recording)
        assert len(reads) == 2


@pytest.mark.parametrize(("age_s", "count"), [(UNSETTLED_S - 0.01, 2), (UNSETTLED_S + 0.01, 1)])
def test_the_edge_of_being_settled(
    store: Path, recording: Path, clock: Clock, age_s: float, count: int
) -> None:
    made = []

    def make() -> dict[str, Any]:
        made.append(1)
        return {}

    clock.set_after(recording, age_s)
    with RecordingDigests(store) as digests:
        digests.facts(recording, make)
        digests.facts(recording, make)
    assert len(made) == count


@pytest.mark.usefixtures("clock")
def test_a_file_that_goes_on_changing_is_refused(
    store: Path, recording: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def growing(path: Path) -> str:
        with path.open("ab") as file:
            file.write(b"more")
        return "0" * 64

    monkeypatch.setattr(HASHER, growing)
    with RecordingDigests(store) as digests, pytest.raises(SignalError, match=r"p03\.edf: changes"):
        digests.digest(recording)


@pytest.mark.usefixtures("clock")
def test_a_file_that_changes_once_while_read_is_read_again(
    store: Path, recording: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    grown: list[int] = []

    def growing_once(path: Path) -> str:
        found = sha256_of(path)
        if not grown:
            grown.append(path.write_bytes(b"more"))
        return found

    monkeypatch.setattr(HASHER, growing_once)
    with RecordingDigests(store) as digests:
        assert digests.digest(recording) == hashlib.sha256(b"more").hexdigest()


@pytest.mark.usefixtures("clock")
def test_facts_are_made_once_and_are_the_same_fresh_and_remembered(
    store: Path, recording: Path
) -> None:
    made = []

    def make() -> dict[str, Any]:
        made.append(1)
        return {"rate": Fraction(256, 3), "labels": ("EEG Fp1", "µ"), "gap_s": 0.1, "none": None}

    with RecordingDigests(store) as digests:
        fresh = digests.facts(recording, make)
        remembered = digests.facts(recording, make)
    with RecordingDigests(store) as digests:
        reread = digests.facts(recording, make)
    assert fresh == remembered == reread
    assert fresh == {"rate": "256/3", "labels": ["EEG Fp1", "µ"], "gap_s": 0.1, "none": None}
    assert made == [1]


@pytest.mark.usefixtures("clock")
def test_facts_handed_out_are_the_callers_own(store: Path, recording: Path) -> None:
    with RecordingDigests(store) as digests:
        digests.facts(recording, lambda: {"labels": []})["labels"].append("x")
        digests.facts(recording, lambda: {})["labels"].append("y")
        assert digests.facts(recording, lambda: {}) == {"labels": []}


@pytest.mark.usefixtures("clock")
def test_facts_of_another_version_are_not_used(store: Path, recording: Path) -> None:
    with RecordingDigests(store) as digests:
        digests.digest(recording)
        digests.facts(recording, lambda: {"by": 1}, version="1")
    with RecordingDigests(store) as digests:
        assert digests.facts(recording, lambda: {"by": 2}, version="2") == {"by": 2}
    with RecordingDigests(store) as digests:
        assert digests.facts(recording, lambda: {"by": 3}, version="2") == {"by": 2}


@pytest.mark.usefixtures("clock")
def test_what_make_raises_passes_through_and_is_not_remembered(
    store: Path, recording: Path
) -> None:
    def fail() -> dict[str, Any]:
        raise SignalError("bad header")

    with RecordingDigests(store) as digests:
        with pytest.raises(SignalError, match="bad header"):
            digests.facts(recording, fail)
        assert digests.facts(recording, lambda: {"now": "fine"}) == {"now": "fine"}


def test_a_missing_recording_is_the_callers_to_tell(store: Path, tmp_path: Path) -> None:
    with RecordingDigests(store) as digests, pytest.raises(FileNotFoundError):
        digests.digest(tmp_path / "none.edf")


@pytest.mark.skipif(os.name != "posix", reason="such names exist on POSIX alone")
@pytest.mark.usefixtures("clock")
def test_a_name_that_is_not_utf8(store: Path, tmp_path: Path, reads: list[Path]) -> None:
    path = tmp_path / os.fsdecode(b"p\xe903.edf")
    try:
        path.write_bytes(b"x")
    except OSError:
        pytest.skip("this file system takes UTF-8 names alone")
    for _ in range(2):
        with RecordingDigests(store) as digests:
            digests.digest(path)
    assert reads == [path]


@pytest.mark.usefixtures("clock")
def test_inodes_of_64_bits(
    store: Path, recording: Path, reads: list[Path], monkeypatch: pytest.MonkeyPatch
) -> None:
    true_stat = os.stat

    def large(path: Any, **more: Any) -> Any:
        stat = true_stat(path, **more)
        names = ("st_size", "st_mtime_ns", "st_ctime_ns", "st_mode")
        return SimpleNamespace(st_ino=2**64 - 1, **{name: getattr(stat, name) for name in names})

    monkeypatch.setattr(os, "stat", large)
    for _ in range(2):
        with RecordingDigests(store) as digests:
            digests.digest(recording)
    assert reads == [recording]


@pytest.mark.usefixtures("clock")
def test_two_users_of_one_store_lose_nothing_of_each_other(
    store: Path, recording: Path, tmp_path: Path
) -> None:
    second = tmp_path / "p04.edf"
    second.write_bytes(b"x")
    one, two = RecordingDigests(store), RecordingDigests(store)
    one.digest(recording)
    two.facts(recording, lambda: {"from": "two"})
    two.digest(second)
    one.close()
    two.close()
    with RecordingDigests(store) as digests:
        assert digests.facts(recording, lambda: {}) == {"from": "two"}
    with sqlite3.connect(store / DATABASE) as database:
        rows = database.execute("SELECT path, sha256 FROM recordings").fetchall()
    database.close()
    expected = {os.fsencode(path): sha256(path) for path in (recording, second)}
    assert dict(rows) == expected


@pytest.mark.usefixtures("clock")
def test_a_change_seen_by_one_user_replaces_what_another_knew(store: Path, recording: Path) -> None:
    one = RecordingDigests(store)
    one.digest(recording)
    one.facts(recording, lambda: {"old": True})
    one.close()
    time.sleep(0.02)
    recording.write_bytes(b"new")
    two = RecordingDigests(store)
    two.digest(recording)
    two.close()
    with RecordingDigests(store) as digests:
        assert digests.facts(recording, lambda: {"old": False}) == {"old": False}


@pytest.mark.usefixtures("clock")
@pytest.mark.parametrize("damage", [b"not a database at all" * 500, b""])
def test_a_damaged_database_is_begun_afresh(
    store: Path, recording: Path, reads: list[Path], damage: bytes
) -> None:
    with RecordingDigests(store) as digests:
        digests.digest(recording)
    (store / DATABASE).write_bytes(damage)
    for _ in range(2):
        with RecordingDigests(store) as digests:
            assert digests.digest(recording) == sha256(recording)
    assert reads == [recording] * 2


@pytest.mark.usefixtures("clock")
def test_a_database_of_another_edition_is_begun_afresh(store: Path, recording: Path) -> None:
    store.mkdir()
    database = sqlite3.connect(store / DATABASE)
    database.execute("CREATE TABLE recordings (something_else TEXT)")
    database.execute("PRAGMA user_version = 77")
    database.commit()
    database.close()
    with RecordingDigests(store) as digests:
        assert digests.digest(recording) == sha256(recording)


def test_a_store_that_cannot_be_made_is_told_plainly(tmp_path: Path) -> None:
    (tmp_path / "store").write_text("")
    with pytest.raises(MachineError, match="a file stands where a folder is needed"):
        RecordingDigests(tmp_path / "store")


def test_a_database_that_cannot_be_opened_is_told_plainly(store: Path) -> None:
    (store / DATABASE).mkdir(parents=True)
    with pytest.raises(MachineError, match=DATABASE.replace(".", r"\.")):
        RecordingDigests(store)


@pytest.mark.usefixtures("clock")
def test_a_store_that_another_keeps_busy_costs_no_run(
    store: Path, recording: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(recording_digests, "_WAIT_S", 0.05)
    digests = RecordingDigests(store)
    other = sqlite3.connect(store / DATABASE)
    other.execute("BEGIN EXCLUSIVE")
    assert digests.digest(recording) == sha256(recording)
    digests.close()
    other.rollback()
    other.close()
    digests.close()  # now it can be saved
    assert (store / DATABASE).stat().st_size > 0
    with RecordingDigests(store) as again:
        monkeypatch.setattr(HASHER, lambda path: "read again")
        assert again.digest(recording) == sha256(recording)


WRITER = """
import sys
from pathlib import Path
from waveassay.provenance import recording_digests
recording_digests.UNSETTLED_S = -1e9
recording_digests._SAVE_EVERY_S = 0.0
with recording_digests.RecordingDigests(Path(sys.argv[1])) as digests:
    for round in range(int(sys.argv[3])):
        for path in sorted(Path(sys.argv[2]).iterdir()):
            digests._entries.clear()
            digests.digest(path)
        print("round", flush=True)
"""


def many(tmp_path: Path) -> Path:
    folder = tmp_path / "recordings"
    folder.mkdir()
    for i in range(15):
        (folder / f"p{i:02}.edf").write_bytes(b"%d" % i)
    return folder


def check_all(store: Path, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(HASHER, lambda path: "read again")
    with RecordingDigests(store) as digests:
        for path in folder.iterdir():
            assert digests.digest(path) == sha256(path)


def test_several_writers_at_a_time(
    store: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = many(tmp_path)
    command = [sys.executable, "-c", WRITER, str(store), str(folder), "3"]
    writers = [subprocess.Popen(command, stdout=subprocess.DEVNULL) for _ in range(3)]
    assert [writer.wait() for writer in writers] == [0, 0, 0]
    check_all(store, folder, monkeypatch)


@pytest.mark.skipif(os.name != "posix", reason="SIGKILL is POSIX")
def test_a_killed_writer_leaves_what_it_had_saved(
    store: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = many(tmp_path)
    command = [sys.executable, "-c", WRITER, str(store), str(folder), "1000"]
    with subprocess.Popen(command, stdout=subprocess.PIPE) as writer:
        assert writer.stdout is not None
        writer.stdout.readline()  # one round is done: all is saved
        time.sleep(0.05)
        writer.send_signal(signal.SIGKILL)
    check_all(store, folder, monkeypatch)
