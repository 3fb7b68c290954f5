"""A file is whole or not there, whatever happens; a refusing disk is told plainly."""

import errno
import hashlib
import os
import signal
import stat
import subprocess
import sys
import time
from pathlib import Path

import pytest

from waveassay.contract.errors import MachineError
from waveassay.provenance.files import (
    PART_PREFIX,
    copy_file,
    machine_errors,
    sha256_of,
    sweep,
    write_beside,
    write_bytes,
    write_text,
)


def parts(folder: Path) -> list[Path]:
    return [path for path in folder.iterdir() if path.name.startswith(PART_PREFIX)]


def test_the_file_appears_only_once_it_is_whole(tmp_path: Path) -> None:
    path = tmp_path / "deeper" / "still" / "table.csv"
    with write_beside(path) as file:
        file.write(b"one")
        file.flush()
        assert not path.exists()
        assert len(parts(path.parent)) == 1
    assert path.read_bytes() == b"one"
    assert parts(path.parent) == []


def test_a_failure_leaves_the_old_file_and_no_part(tmp_path: Path) -> None:
    path = tmp_path / "table.csv"
    write_bytes(path, b"old")

    def fail() -> None:
        with write_beside(path) as file:
            file.write(b"new")
            raise KeyError("body")

    with pytest.raises(KeyError):
        fail()
    assert path.read_bytes() == b"old"
    assert parts(tmp_path) == []


@pytest.mark.skipif(os.name != "posix", reason="permissions are POSIX ones")
@pytest.mark.parametrize(("umask", "mode"), [(0o022, 0o644), (0o077, 0o600), (0o002, 0o664)])
def test_permissions_are_those_of_any_new_file(tmp_path: Path, umask: int, mode: int) -> None:
    before = os.umask(umask)
    try:
        write_bytes(tmp_path / "a", b"")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "a").stat().st_mode) == mode


def test_text_is_utf8_and_its_line_ends_are_kept(tmp_path: Path) -> None:
    write_text(tmp_path / "a", "µV\nΩ\r\n")
    assert (tmp_path / "a").read_bytes() == "µV\nΩ\r\n".encode()


WRITER = """
import sys, time
from pathlib import Path
from waveassay.provenance.files import write_beside
with write_beside(Path(sys.argv[1])) as file:
    file.write(b"new" * 100_000)
    file.flush()
    print("writing", flush=True)
    time.sleep(60)
"""


@pytest.mark.skipif(os.name != "posix", reason="SIGKILL is POSIX")
def test_a_killed_writer_leaves_the_old_file_and_a_part_that_sweep_removes(tmp_path: Path) -> None:
    path = tmp_path / "table.csv"
    write_bytes(path, b"old")
    command = [sys.executable, "-c", WRITER, str(path)]
    with subprocess.Popen(command, stdout=subprocess.PIPE) as writer:
        assert writer.stdout is not None
        writer.stdout.readline()
        writer.send_signal(signal.SIGKILL)
    assert path.read_bytes() == b"old"
    (left,) = parts(tmp_path)
    assert sweep(tmp_path) == [left]
    assert sorted(os.listdir(tmp_path)) == ["table.csv"]


def test_sweep_goes_deep_takes_parts_only_and_spares_the_young(tmp_path: Path) -> None:
    deep = tmp_path / "a" / "b"
    deep.mkdir(parents=True)
    old, young = deep / f"{PART_PREFIX}old", tmp_path / f"{PART_PREFIX}young"
    for path in (old, young, deep / "data.part-1", deep / "data.csv"):
        path.write_bytes(b"x")
    long_ago = time.time() - 7200
    os.utime(old, (long_ago, long_ago))
    assert sweep(tmp_path, older_than_s=3600) == [old]
    assert sweep(tmp_path) == [young]
    assert sorted(path.name for path in deep.iterdir()) == ["data.csv", "data.part-1"]


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.ENOSPC, "disk is full"),
        (errno.EDQUOT, "quota"),
        (errno.EACCES, "no permission"),
        (errno.EROFS, "read-only"),
        (errno.EIO, "reports an error"),
    ],
)
def test_a_refusal_names_path_cause_and_remedy(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, number: int, words: str
) -> None:
    def refuse(descriptor: int) -> None:
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(os, "fsync", refuse)
    path = tmp_path / "table.csv"
    with pytest.raises(MachineError) as caught:
        write_bytes(path, b"x")
    assert str(path) in str(caught.value)
    assert words in str(caught.value)
    assert ";" in str(caught.value)  # behind it stands what to do
    assert caught.value.exit_code == 6
    assert os.listdir(tmp_path) == []


LIMITED = """
import resource, signal, sys
from pathlib import Path
from waveassay.contract.errors import MachineError
from waveassay.provenance.files import write_bytes
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))
try:
    write_bytes(Path(sys.argv[1]), b"x" * 5000)
except MachineError as error:
    print(error)
"""


@pytest.mark.skipif(os.name != "posix", reason="limits on file size are POSIX")
def test_a_write_that_the_system_really_refuses(tmp_path: Path) -> None:
    command = [sys.executable, "-c", LIMITED, str(tmp_path / "table.csv")]
    told = subprocess.run(command, capture_output=True, text=True, check=True).stdout
    assert "larger than" in told
    assert os.listdir(tmp_path) == []


def test_a_file_where_a_folder_is_needed(tmp_path: Path) -> None:
    (tmp_path / "runs").write_text("x")
    with pytest.raises(MachineError, match="a file stands where a folder is needed"):
        write_bytes(tmp_path / "runs" / "a", b"")
    with pytest.raises(MachineError, match="a file stands where a folder is needed"):
        write_bytes(tmp_path / "runs" / "b" / "a", b"")


def test_a_folder_where_a_file_is_needed(tmp_path: Path) -> None:
    (tmp_path / "table.csv").mkdir()
    with pytest.raises(MachineError, match="a folder stands where a file is needed"):
        write_bytes(tmp_path / "table.csv", b"")


def test_an_error_about_another_file_passes_through(tmp_path: Path) -> None:
    with pytest.raises(PermissionError), write_beside(tmp_path / "a"):
        raise PermissionError(errno.EACCES, "no", str(tmp_path / "recording.edf"))


def test_an_error_that_is_not_the_machines_passes_through(tmp_path: Path) -> None:
    with pytest.raises(OSError, match="odd") as caught, machine_errors(tmp_path):
        raise OSError(errno.EDOM, "odd")
    assert not isinstance(caught.value, MachineError)


@pytest.mark.parametrize("size", [0, 1, 32_767, 32_768, 262_144, 3_000_001])
def test_sha256_of_a_file_is_that_of_its_bytes(tmp_path: Path, size: int) -> None:
    content = (b"waveform" * (size // 8 + 1))[:size]
    (tmp_path / "a").write_bytes(content)
    assert sha256_of(tmp_path / "a") == hashlib.sha256(content).hexdigest()


def test_sha256_of_the_published_example(tmp_path: Path) -> None:
    # FIPS 180-4, example "abc".
    (tmp_path / "a").write_bytes(b"abc")
    assert sha256_of(tmp_path / "a") == (
        "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    )


@pytest.mark.parametrize("size", [0, 1, 32_767, 32_768, 1 << 20, (1 << 20) + 7])
@pytest.mark.parametrize("fails_at", [None, 0, 1])
def test_a_copy_has_the_same_bytes_whatever_the_system_can_do(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, size: int, fails_at: int | None
) -> None:
    """The system copies, or cannot between these disks, or stops in between."""
    source, target = tmp_path / "source", tmp_path / "target"
    source.write_bytes(os.urandom(size))
    calls: list[int] = []

    def copy_range(taken: int, given: int, count: int) -> int:
        if len(calls) == fails_at:
            raise OSError(errno.EXDEV, "Invalid cross-device link")
        calls.append(count)
        return os.write(given, os.read(taken, min(count, 1000)))

    monkeypatch.setattr(os, "copy_file_range", copy_range, raising=False)
    copy_file(source, target)
    assert target.read_bytes() == source.read_bytes()
    target.write_bytes(b"changed")
    assert source.stat().st_size == size  # not a link


def test_a_copy_replaces_what_stood_there(tmp_path: Path) -> None:
    (tmp_path / "target").write_bytes(b"longer than what comes")
    (tmp_path / "source").write_bytes(b"short")
    copy_file(tmp_path / "source", tmp_path / "target")
    assert (tmp_path / "target").read_bytes() == b"short"
