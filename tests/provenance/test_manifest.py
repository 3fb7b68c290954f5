"""A run folder is as its manifest says, or what differs is named."""

import hashlib
import json
import os
import shutil
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from waveassay.contract.errors import RefusedError
from waveassay.provenance import recording_digests
from waveassay.provenance.files import PART_PREFIX, sha256_of
from waveassay.provenance.log import Log
from waveassay.provenance.manifest import (
    MANIFEST,
    Manifest,
    is_result,
    read_manifest,
    results_digest,
    write_manifest,
)
from waveassay.provenance.manifest_check import Difference, verify_manifest
from waveassay.provenance.recording_digests import RecordingDigests

CONTENT = {
    "recipe.source.yaml": "recipe: a\n",
    "recipe.resolved.yaml": "recipe: a\nedition: 1\n",
    "parameters.csv": "step\n",
    "recordings.csv": "recording\n",
    "epochs/cortex/site1/p03.parquet": "p03",
    "epochs/cortex/site1/p04.parquet": "p04",
    "epochs/cortex.csv": "epochs",
    "averages/cortex/p03.parquet": "average",
    "detections/artery/p03.parquet": "beats",
    "summary.csv": "summary",
    "excluded.csv": "excluded",
    "columns.csv": "columns",
    "figures/µ.png": "picture",
}
RESULTS = {
    "recipe.resolved.yaml",
    "parameters.csv",
    "epochs/cortex/site1/p03.parquet",
    "epochs/cortex/site1/p04.parquet",
    "epochs/cortex.csv",
    "averages/cortex/p03.parquet",
    "detections/artery/p03.parquet",
    "summary.csv",
    "excluded.csv",
    "columns.csv",
}


def fill(folder: Path) -> Manifest:
    for name, text in CONTENT.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text)
    with Log(folder / "log.jsonl", actor="tester@bench") as log:
        for event in ("run_started", "recording_done", "run_finished"):
            log.append(event)
    return write_manifest(folder, log.head)


@pytest.fixture
def run(tmp_path: Path) -> Path:
    folder = tmp_path / "run"
    fill(folder)
    return folder


def found(folder: Path) -> set[tuple[str, Difference]]:
    return {(finding.path, finding.difference) for finding in verify_manifest(folder)}


def test_an_untouched_folder_is_intact(run: Path) -> None:
    assert verify_manifest(run) == []


def test_it_lists_every_other_file_sorted_with_size_and_digest(run: Path) -> None:
    manifest = read_manifest(run)
    paths = [entry.path for entry in manifest.files]
    assert paths == sorted({*CONTENT, "log.jsonl"})
    for entry in manifest.files:
        content = (run / entry.path).read_bytes()
        assert (entry.size, entry.sha256) == (len(content), hashlib.sha256(content).hexdigest())


def test_it_holds_the_logs_head(run: Path) -> None:
    manifest = read_manifest(run)
    last = (run / "log.jsonl").read_bytes().splitlines(keepends=True)[-1]
    assert manifest.log_head == hashlib.sha256(last).hexdigest()
    assert manifest.log_lines == 3


def test_it_reads_back_as_written(tmp_path: Path) -> None:
    manifest = fill(tmp_path)
    assert read_manifest(tmp_path) == manifest
    assert (tmp_path / MANIFEST).read_bytes() == manifest.to_json()


def test_the_results_digest_covers_results_alone(run: Path) -> None:
    manifest = read_manifest(run)
    assert set(manifest.results) == RESULTS
    assert set(json.loads((run / MANIFEST).read_text())["results"]["covers"]) == RESULTS
    assert not is_result("epochs")
    assert not is_result("figures/summary.csv")


@pytest.mark.parametrize("name", sorted(CONTENT))
def test_the_results_digest_changes_with_a_result_and_with_nothing_else(
    tmp_path: Path, name: str
) -> None:
    one, two = tmp_path / "one", tmp_path / "two"
    before = fill(one)
    shutil.copytree(one, two)
    (two / MANIFEST).unlink()
    (two / name).write_text("another")
    after = write_manifest(two, before.log_head)
    assert (after.results_digest != before.results_digest) == (name in RESULTS)


def test_the_results_digest_is_what_ordinary_tools_compute(run: Path) -> None:
    if shutil.which("sha256sum") is None:
        pytest.skip("needs the sha256sum command")
    names = sorted(RESULTS, key=os.fsencode)
    listing = subprocess.run(["sha256sum", *names], cwd=run, capture_output=True, check=True).stdout
    # sha256sum marks a binary file with '*' on some systems; on POSIX ones there is no such mode.
    assert hashlib.sha256(listing).hexdigest() == read_manifest(run).results_digest


@pytest.mark.skipif(os.name != "posix", reason="such names exist on POSIX alone")
def test_odd_names_are_covered_and_cannot_be_confused(tmp_path: Path) -> None:
    names = ["epochs/a\nb.csv", "epochs/a\\nb.csv", "epochs/a\\b.csv", "epochs/µ 1.csv"]
    (tmp_path / "epochs").mkdir()
    for name in names:
        (tmp_path / name).write_text(name)
    raw = os.fsdecode(b"epochs/p\xe9.csv")
    try:
        (tmp_path / raw).write_text(raw.encode("utf-8", "replace").decode())
        names.append(raw)
    except OSError:
        pass  # this file system takes UTF-8 names alone
    with Log(tmp_path / "log.jsonl") as log:
        log.append("run_finished")
    manifest = write_manifest(tmp_path, log.head)
    assert set(manifest.results) == set(names)
    assert verify_manifest(tmp_path) == []
    if shutil.which("sha256sum") is not None:
        listing = subprocess.run(
            ["sha256sum", *sorted(names, key=os.fsencode)],
            cwd=tmp_path,
            capture_output=True,
            check=True,
        ).stdout
        assert hashlib.sha256(listing).hexdigest() == manifest.results_digest


def test_the_order_of_files_does_not_matter_to_the_digest(run: Path) -> None:
    manifest = read_manifest(run)
    assert results_digest(reversed(manifest.files)) == manifest.results_digest


@pytest.mark.parametrize("name", [*sorted(CONTENT)])
def test_missing_added_and_changed_files_are_named(run: Path, name: str) -> None:
    path = run / name
    content = path.read_bytes()
    flipped = bytes([content[0] ^ 1]) + content[1:]
    path.write_bytes(flipped)
    assert found(run) == {(name, Difference.CHANGED)}
    path.write_bytes(content + b"\0")
    assert found(run) == {(name, Difference.CHANGED)}
    path.unlink()
    assert found(run) == {(name, Difference.MISSING)}
    path.write_bytes(content)
    extra = path.with_name("extra.csv")
    extra.write_text("x")
    assert found(run) == {(extra.relative_to(run).as_posix(), Difference.ADDED)}
    extra.unlink()
    assert verify_manifest(run) == []


def test_two_files_whose_contents_were_exchanged(run: Path) -> None:
    one, two = run / "epochs/cortex/site1/p03.parquet", run / "epochs/cortex/site1/p04.parquet"
    kept = one.read_bytes()
    one.write_bytes(two.read_bytes())
    two.write_bytes(kept)
    findings = verify_manifest(run)
    assert [f.difference for f in findings] == [Difference.SWAPPED] * 2
    assert "p04.parquet" in findings[0].message
    assert "p03.parquet" in findings[1].message


def test_a_renamed_file_is_missing_and_where_it_went_is_said(run: Path) -> None:
    (run / "summary.csv").rename(run / "summary_old.csv")
    assert found(run) == {
        ("summary.csv", Difference.MISSING),
        ("summary_old.csv", Difference.ADDED),
    }
    assert any("summary_old.csv" in f.message for f in verify_manifest(run))


def test_a_link_in_place_of_a_file(run: Path, tmp_path: Path) -> None:
    outside = tmp_path / "outside.csv"
    (run / "summary.csv").rename(outside)
    try:
        (run / "summary.csv").symlink_to(outside)
    except OSError:
        pytest.skip("links are not allowed here")
    assert found(run) == {("summary.csv", Difference.CHANGED)}


def test_a_log_that_was_changed_names_its_line(run: Path) -> None:
    log = run / "log.jsonl"
    log.write_bytes(log.read_bytes().replace(b"recording_done", b"recording_gone"))
    assert found(run) == {("log.jsonl", Difference.CHANGED), ("log.jsonl", Difference.BROKEN_LOG)}
    broken = [f for f in verify_manifest(run) if f.difference is Difference.BROKEN_LOG]
    assert "line 2" in broken[0].message


def test_a_log_that_was_continued_after_the_manifest(run: Path) -> None:
    Log(run / "log.jsonl").append("afterthought")
    broken = [f for f in verify_manifest(run) if f.difference is Difference.BROKEN_LOG]
    assert "line 4" in broken[0].message


def test_a_result_exchanged_in_folder_and_list_is_found_by_the_results_digest(run: Path) -> None:
    (run / "summary.csv").write_text("forged!")
    content = json.loads((run / MANIFEST).read_text())
    for entry in content["files"]:
        if entry["path"] == "summary.csv":
            entry["sha256"] = hashlib.sha256(b"forged!").hexdigest()
    (run / MANIFEST).write_text(json.dumps(content))
    assert found(run) == {(MANIFEST, Difference.WRONG_DIGEST)}


@pytest.mark.parametrize(
    "damage",
    [
        lambda path: path.unlink(),
        lambda path: path.write_bytes(path.read_bytes()[:50]),
        lambda path: path.write_bytes(b""),
        lambda path: path.write_bytes(b"[]"),
        lambda path: path.write_bytes(b'{"manifest": 2}'),
        lambda path: path.write_bytes(b'{"manifest": 1, "files": 3}'),
        lambda path: path.write_bytes(b"\xff\xfe\x00"),
    ],
)
def test_a_lost_or_damaged_manifest(run: Path, damage: Callable[[Path], object]) -> None:
    damage(run / MANIFEST)
    assert found(run) == {(MANIFEST, Difference.NO_MANIFEST)}


def test_leftovers_are_swept_before_listing(tmp_path: Path) -> None:
    (tmp_path / "epochs").mkdir()
    (tmp_path / "epochs" / f"{PART_PREFIX}1").write_text("half")
    manifest = fill(tmp_path)
    assert not [entry for entry in manifest.files if PART_PREFIX in entry.path]
    assert verify_manifest(tmp_path) == []


def test_a_log_that_its_writer_did_not_close_is_refused(tmp_path: Path) -> None:
    with pytest.raises(RefusedError, match="is missing"):
        write_manifest(tmp_path, "0" * 64)
    log = Log(tmp_path / "log.jsonl")
    log.append("run_started")
    early = log.head
    log.append("run_finished")
    with pytest.raises(RefusedError, match=r"log\.jsonl"):
        write_manifest(tmp_path, early)
    assert not (tmp_path / MANIFEST).exists()


def test_a_link_is_refused(tmp_path: Path) -> None:
    with Log(tmp_path / "log.jsonl") as log:
        log.append("run_finished")
    try:
        (tmp_path / "epochs").symlink_to(tmp_path)
    except OSError:
        pytest.skip("links are not allowed here")
    with pytest.raises(RefusedError, match="plain file"):
        write_manifest(tmp_path, log.head)


def test_a_digest_that_its_writer_knows_is_taken_and_another_content_is_found(
    tmp_path: Path,
) -> None:
    before = fill(tmp_path)
    (tmp_path / MANIFEST).unlink()
    known = {entry.path: entry.sha256 for entry in before.files if entry.path.endswith(".parquet")}
    assert write_manifest(tmp_path, before.log_head, known) == before
    (tmp_path / MANIFEST).unlink()
    (tmp_path / "averages/cortex/p03.parquet").write_text("other")
    manifest = write_manifest(tmp_path, before.log_head, known)
    assert manifest.results_digest == before.results_digest  # of what was to be written
    assert found(tmp_path) == {("averages/cortex/p03.parquet", Difference.CHANGED)}


class _Settled:
    """Digests remembered of files that changed long ago, and how many were read."""

    def __init__(self, folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        self.read: list[str] = []
        self.folder = folder
        now_ns = time.time_ns() + 3600 * 10**9
        monkeypatch.setattr(time, "time_ns", lambda: now_ns)
        monkeypatch.setattr(recording_digests, "sha256_of", self._sha256_of)

    def _sha256_of(self, path: str) -> str:
        self.read.append(path)
        return sha256_of(path)

    def found(self, run: Path) -> set[tuple[str, Difference]]:
        self.read.clear()
        with RecordingDigests(self.folder, "run.sqlite") as digests:
            return {(f.path, f.difference) for f in verify_manifest(run, digests.digest)}


def test_unchanged_files_are_read_once_and_any_change_is_still_found(
    run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    settled = _Settled(tmp_path / "checked", monkeypatch)
    assert settled.found(run) == set()
    assert len(settled.read) == len(CONTENT) + 1
    assert settled.found(run) == set()
    assert settled.read == []
    path = run / "epochs/cortex/site1/p03.parquet"
    times = path.stat()
    path.write_text("P03")  # the same size, and the time of its change is set back
    os.utime(path, ns=(times.st_atime_ns, times.st_mtime_ns))
    changed = {("epochs/cortex/site1/p03.parquet", Difference.CHANGED)}
    assert settled.found(run) == changed
    assert settled.read == [str(path)]
    assert settled.found(run) == changed  # remembered as it is, not as intact
    path.unlink()
    (run / "extra").write_text("x")
    assert settled.found(run) == {
        ("epochs/cortex/site1/p03.parquet", Difference.MISSING),
        ("extra", Difference.ADDED),
    }


def test_a_file_renamed_over_another_of_the_same_size_is_found(
    run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    settled = _Settled(tmp_path / "checked", monkeypatch)
    assert settled.found(run) == set()
    one, two = run / "epochs/cortex/site1/p03.parquet", run / "epochs/cortex/site1/p04.parquet"
    os.utime(two, ns=(one.stat().st_atime_ns, one.stat().st_mtime_ns))
    two.rename(run / "kept")
    one.rename(two)
    (run / "kept").rename(one)
    assert {d for _, d in settled.found(run)} == {Difference.SWAPPED}
