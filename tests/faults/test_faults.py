"""Faults injected for real: killed processes, two runs at once, full disks, folders not ours."""

import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

import numpy as np
import pytest

from running import command, only_run, write_eeg
from waveassay.execute.snakemake.backend import run_with_snakemake
from waveassay.provenance.log_check import verify_log
from waveassay.provenance.manifest import read_manifest
from waveassay.provenance.manifest_check import verify_manifest

RECIPE = """\
recipe: faults
edition: 1
title: To be interrupted
purpose: To see what is left
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}
    - epoch.consecutive: {length: 4 s, overlap: 75 %}
    - spectrum.multitaper: {half_bandwidth: 0.75 Hz}
    - feature.spectral_edge: {within: [0.5 Hz, 30 Hz]}
    - export.table: {}
"""
ROOT = os.geteuid() == 0


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write a working directory: eight recordings of ten minutes."""
    folder = tmp_path_factory.mktemp("faults")
    (folder / "recipe.yaml").write_text(RECIPE)
    for seed in range(8):
        x = 30 * np.random.default_rng(seed).standard_normal(600 * 256)
        write_eeg(folder / "recordings" / f"p{seed}.edf", x, 256)
    return folder


@pytest.fixture(scope="module")
def undisturbed(made: Path) -> str:
    """Run without any fault; return the results digest."""
    done = command("run", made, "--into", made / "undisturbed")
    assert done.returncode == 0, done.stderr
    return read_manifest(only_run(made / "undisturbed")).results_digest


def start(made: Path, into: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "waveassay", "run", str(made), "--into", str(into)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def stored(into: Path) -> int:
    return len(list((into / "store").glob("objects/*/*/artefact.json")))


def wait_until(met: "Iterator[bool]", seconds: float = 240) -> None:
    end = time.monotonic() + seconds
    while not next(met):
        assert time.monotonic() < end, "it never came to that"
        time.sleep(0.02)


def results_stored(into: Path, count: int) -> "Iterator[bool]":
    while True:
        yield stored(into) >= count


def test_snakemake_and_the_runner_in_process_give_the_same_bytes(
    made: Path, undisturbed: str, tmp_path: Path
) -> None:
    from running import run

    one = run(RECIPE, [made / "recordings"], tmp_path / "in-process")
    three = run(
        RECIPE, [made / "recordings"], tmp_path / "three", runner=run_with_snakemake, workers=3
    )
    assert one.results_digest == three.results_digest == undisturbed


@pytest.mark.parametrize("results", [1, 9])
def test_a_killed_run_goes_on_where_it_was(
    made: Path, undisturbed: str, tmp_path: Path, results: int
) -> None:
    """SIGKILL of the whole tree of processes, then the same command again."""
    process = start(made, tmp_path)
    wait_until(results_stored(tmp_path, results))
    os.killpg(process.pid, signal.SIGKILL)
    process.communicate(timeout=30)
    kept = stored(tmp_path)
    assert kept >= results
    again = command("run", made, "--into", tmp_path)
    assert again.returncode == 0, again.stderr
    folder = only_run(tmp_path)  # the unfinished run was continued, not begun anew
    assert read_manifest(folder).results_digest == undisturbed
    assert ", 0 taken from the store" not in again.stdout
    assert verify_log(folder / "log.jsonl").sound
    assert not verify_manifest(folder)
    assert not list((tmp_path / "store").rglob(".part-*"))


def test_workers_do_not_outlive_a_killed_parent(made: Path, tmp_path: Path) -> None:
    process = start(made, tmp_path)
    wait_until(results_stored(tmp_path, 1))
    os.kill(process.pid, signal.SIGKILL)
    process.communicate(timeout=30)
    for _ in range(100):
        before = stored(tmp_path)
        time.sleep(0.2)
        if stored(tmp_path) == before:
            break
    time.sleep(1.0)
    assert stored(tmp_path) < 24  # 8 recordings of 3 tasks: the rest was never done


def test_ctrl_c_stops_with_130_and_keeps_what_was_finished(made: Path, tmp_path: Path) -> None:
    process = start(made, tmp_path)
    wait_until(results_stored(tmp_path, 1))
    process.send_signal(signal.SIGINT)
    _, told = process.communicate(timeout=60)
    assert process.returncode == 130, told
    assert "same command again" in told
    assert "Traceback" not in told
    assert stored(tmp_path) >= 1


def test_the_second_run_in_a_folder_is_refused_and_says_who_holds_it(
    made: Path, tmp_path: Path
) -> None:
    process, lock = start(made, tmp_path), tmp_path / "runs" / ".lock"
    wait_until(iter(lambda: lock.exists() and lock.read_text().endswith("\n"), None))
    process.send_signal(signal.SIGSTOP)  # else it might end before the second begins
    second = command("run", made, "--into", tmp_path)
    process.send_signal(signal.SIGCONT)
    process.communicate(timeout=120)
    assert second.returncode == 5
    assert f"process {process.pid} on" in second.stderr
    assert process.returncode == 0


@contextmanager
def small_disk(folder: Path, size: str) -> Iterator[Path]:
    """Mount a disk of a given size."""
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(folder)]
    if not ROOT or subprocess.run(mount, capture_output=True).returncode != 0:
        pytest.skip("a disk of its own can be mounted by root alone")
    try:
        yield folder
    finally:
        subprocess.run(["umount", str(folder)], check=True)


def fill(path: Path) -> None:
    """Write until there is no room."""
    with path.open("wb", buffering=0) as file, suppress(OSError):
        while file.write(bytes(1 << 16)):
            pass


def test_a_full_disk_stops_with_6_and_keeps_what_was_finished(
    made: Path, undisturbed: str, tmp_path: Path
) -> None:
    with small_disk(tmp_path / "disk", "24m") as disk:
        process = start(made, disk)
        wait_until(results_stored(disk, 2))
        fill(disk / "somebody else's")
        output, errors = process.communicate(timeout=120)
        assert process.returncode == 6, errors + output
        assert "disk is full" in errors
        assert "Traceback" not in errors
        assert not list((disk / "store").rglob("*/artefact.json.part"))
        kept = stored(disk)
        (disk / "somebody else's").unlink()
        shutil.copytree(disk, tmp_path / "roomy", symlinks=True)
    assert kept >= 1
    again = command("run", made, "--into", tmp_path / "roomy")
    assert again.returncode == 0, again.stderr
    assert read_manifest(only_run(tmp_path / "roomy")).results_digest == undisturbed


def test_a_disk_without_room_for_the_results_is_told_before_anything_is_computed(
    made: Path, tmp_path: Path
) -> None:
    with small_disk(tmp_path / "disk", "3m") as disk:
        done = command("run", made, "--into", disk)
        assert done.returncode == 6, done.stderr + done.stdout
        assert "GB free" in done.stderr
        assert "--store" in done.stderr
        assert "Traceback" not in done.stderr
        assert stored(disk) == 0


def test_a_file_in_the_place_of_the_folder_is_said(made: Path, tmp_path: Path) -> None:
    (tmp_path / "taken").touch()
    done = command("run", made, "--into", tmp_path / "taken")
    assert done.returncode == 6
    assert "a file stands where a folder is needed" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_folder_that_may_not_be_written_is_said(made: Path, tmp_path: Path) -> None:
    tmp_path.chmod(0o555)
    try:
        arguments = [sys.executable, "-m", "waveassay", "run", str(made)]
        into = tmp_path / "out"
        if ROOT:  # root may write anywhere: be somebody else
            setpriv = shutil.which("setpriv")
            if setpriv is None:
                pytest.skip("root may write anywhere, and there is no setpriv to be another user")
            arguments = [setpriv, "--reuid=65534", "--regid=65534", "--clear-groups", *arguments]
            for path in (made, *made.parents):
                if path.owner() == "root" and str(path).startswith("/tmp/"):
                    path.chmod(path.stat().st_mode | 0o055)
        done = subprocess.run(
            [*arguments, "--into", str(into)], capture_output=True, text=True, timeout=120
        )
    finally:
        tmp_path.chmod(0o755)
    assert done.returncode == 6, done.stderr
    assert "no permission" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_folder_of_temporary_files_with_too_long_a_name_for_a_socket_will_do(
    made: Path, undisturbed: str, tmp_path: Path
) -> None:
    temporary = tmp_path / ("a" * 100) / "temporary"
    temporary.mkdir(parents=True)
    done = subprocess.run(
        [sys.executable, "-m", "waveassay", "run", str(made), "--into", str(tmp_path / "into")],
        capture_output=True,
        text=True,
        env={**os.environ, "TMPDIR": str(temporary)},
    )
    assert done.returncode == 0, done.stderr
    assert "Traceback" not in done.stderr
    assert read_manifest(only_run(tmp_path / "into")).results_digest == undisturbed


def children_of(process: int) -> list[int]:
    """Return the processes that a process has started and that are still there."""
    found = subprocess.run(["pgrep", "-P", str(process)], capture_output=True, text=True)
    return [int(child) for child in found.stdout.split()]


def test_a_killed_worker_fails_its_own_recordings_and_the_rest_go_on(
    made: Path, undisturbed: str, tmp_path: Path
) -> None:
    """The kernel's out-of-memory killer, as SIGKILL of one worker while it works."""
    process = start(made, tmp_path)
    wait_until(results_stored(tmp_path, 1))
    workers = [
        worker
        for child in children_of(process.pid)
        if b"forkserver" in Path(f"/proc/{child}/cmdline").read_bytes()
        for worker in children_of(child)
    ]
    assert workers
    os.kill(workers[0], signal.SIGKILL)
    out, told = process.communicate(timeout=120)
    assert process.returncode in (0, 3), told
    if process.returncode == 3:
        assert "killed" in out
        assert "--workers" in out
    again = command("run", made, "--into", tmp_path)
    assert again.returncode == 0, again.stderr
    newest = sorted((tmp_path / "runs").glob("faults-1-*"))[-1]
    assert read_manifest(newest).results_digest == undisturbed
