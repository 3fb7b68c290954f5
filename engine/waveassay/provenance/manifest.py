"""The manifest of a run folder: every other file, the log's head, and the results digest.

The log is closed first: the manifest holds its head, its number of lines and, as for every other
file, its SHA-256. The manifest is written last, so a folder without one is unfinished.
"""

import hashlib
import json
import os
import stat
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from waveassay.contract.errors import RefusedError
from waveassay.provenance.files import sha256_of, sweep, write_bytes
from waveassay.provenance.log_check import LogVerdict, verify_log

MANIFEST = "manifest.json"
LOG = "log.jsonl"

#: What must be the same bytes every time: these files, and all that is in these folders.
RESULT_FILES = frozenset(
    {"summary.csv", "excluded.csv", "columns.csv", "parameters.csv", "recipe.resolved.yaml"}
)
RESULT_FOLDERS = frozenset({"epochs", "averages", "detections"})


@dataclass(frozen=True)
class FileEntry:
    """One file of the folder; its path is relative, with forward slashes."""

    path: str
    size: int
    sha256: str


@dataclass(frozen=True)
class Manifest:
    """What a finished run folder holds.

    Attributes
    ----------
    files : every file but the manifest, sorted by path.
    log_head, log_lines : the digest of the log's last line, and how many lines there are.
    results_digest : see `results_digest`.
    """

    files: tuple[FileEntry, ...]
    log_head: str
    log_lines: int
    results_digest: str

    @property
    def results(self) -> tuple[str, ...]:
        """Paths that the results digest covers."""
        return tuple(entry.path for entry in self.files if is_result(entry.path))

    def to_json(self) -> bytes:
        """Return the file's bytes."""
        content = {
            "manifest": 1,
            "results": {"sha256": self.results_digest, "covers": list(self.results)},
            "log": {"path": LOG, "head": self.log_head, "lines": self.log_lines},
            "files": [
                {"path": entry.path, "size": entry.size, "sha256": entry.sha256}
                for entry in self.files
            ],
        }
        text = json.dumps(content, indent=1, ensure_ascii=False) + "\n"
        return text.encode("utf-8", "backslashreplace")


def is_result(path: str) -> bool:
    """Tell whether a relative path is covered by the results digest."""
    folder, slash, _ = path.partition("/")
    return folder in RESULT_FOLDERS if slash else path in RESULT_FILES


def results_digest(entries: Iterable[FileEntry]) -> str:
    r"""Return the SHA-256 over one line ``sha256  path`` a result, sorted by path.

    The lines are those of the sha256sum command (which writes a backslash and a line end in a name
    as ``\\`` and ``\n``, and then begins the line with a backslash), so the digest can be had
    without this program.
    """
    whole = hashlib.sha256()
    for entry in sorted(entries, key=lambda e: os.fsencode(e.path)):
        if is_result(entry.path):
            name = entry.path.replace("\\", "\\\\").replace("\n", "\\n").replace("\r", "\\r")
            mark = "" if name == entry.path else "\\"
            whole.update(os.fsencode(f"{mark}{entry.sha256}  {name}\n"))
    return whole.hexdigest()


def write_manifest(folder: Path, log_head: str, known: Mapping[str, str] | None = None) -> Manifest:
    """List the folder, which must be finished, and write its manifest.

    Leftovers of unfinished writers are removed first.

    Parameters
    ----------
    folder : the run folder; nothing else may be writing to it.
    log_head : digest of the log's last line as its writer knows it.
    known : relative path -> SHA-256 of the bytes that were to be written there, where their writer
        knows it. These files are not read again: should one hold anything else, it differs from
        its manifest, and every later check says so.

    Raises
    ------
    RefusedError
        When the log is not the one that its writer closed, or the folder holds a link or anything
        else that is not a plain file.
    MachineError
        When the disk or a permission declines.
    """
    sweep(folder)
    verdict = _log_verdict(folder, log_head)
    if not verdict.sound:
        raise RefusedError(
            f"{folder / LOG}: line {verdict.broken_line}: {verdict.why}; the log was changed "
            "while the run was going on, so the run cannot be vouched for: start it again"
        )
    entries = []
    for path in listed(folder):
        size = plain_size(f"{folder}/{path}")
        if size is None:
            raise RefusedError(
                f"{folder / path}: is not a plain file; a run folder holds nothing else"
            )
        sha256 = (known or {}).get(path) or sha256_of(folder / path)
        entries.append(FileEntry(path, size, sha256))
    manifest = Manifest(tuple(entries), log_head, verdict.lines, results_digest(entries))
    write_bytes(folder / MANIFEST, manifest.to_json())
    return manifest


def read_manifest(folder: Path) -> Manifest:
    """Read a folder's manifest.

    Raises
    ------
    FileNotFoundError
        When there is none: the run did not finish.
    ValueError
        When it is not a manifest.
    """
    path = folder / MANIFEST
    try:
        content: Any = json.loads(path.read_bytes())
        if content["manifest"] != 1:
            raise ValueError(f"{path}: is of an edition ({content['manifest']}) unknown here")
        return Manifest(
            files=tuple(_entry(item) for item in content["files"]),
            log_head=str(content["log"]["head"]),
            log_lines=int(content["log"]["lines"]),
            results_digest=str(content["results"]["sha256"]),
        )
    except (KeyError, TypeError, json.JSONDecodeError, UnicodeDecodeError) as error:
        raise ValueError(f"{path}: is not a manifest ({error!r})") from error


def _entry(item: Mapping[str, Any]) -> FileEntry:
    return FileEntry(str(item["path"]), int(item["size"]), str(item["sha256"]))


def listed(folder: Path) -> Iterator[str]:
    """Yield the relative paths of all files but the manifest, sorted; links are not followed."""
    yield from sorted((path for path in _below(folder, "") if path != MANIFEST), key=os.fsencode)


def _below(folder: str | Path, prefix: str) -> Iterator[str]:
    try:
        entries = list(os.scandir(folder))
    except OSError:  # what cannot be looked into is missing
        return
    for entry in entries:
        if entry.is_dir(follow_symlinks=False):
            yield from _below(entry.path, f"{prefix}{entry.name}/")
        else:
            yield f"{prefix}{entry.name}"


def plain_size(path: str | Path) -> int | None:
    """Return the size of a plain file; None where a link or something else stands."""
    try:
        status = os.lstat(path)
    except FileNotFoundError:
        return None
    return status.st_size if stat.S_ISREG(status.st_mode) else None


def _log_verdict(folder: Path, head: str, lines: int | None = None) -> LogVerdict:
    try:
        return verify_log(folder / LOG, head, lines)
    except FileNotFoundError as error:
        raise RefusedError(f"{folder / LOG}: is missing; a run folder has a log") from error
