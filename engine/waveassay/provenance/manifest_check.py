"""Is a run folder as its manifest says."""

from collections import defaultdict
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path

from waveassay.provenance.files import sha256_of
from waveassay.provenance.log_check import verify_log
from waveassay.provenance.manifest import (
    LOG,
    MANIFEST,
    FileEntry,
    listed,
    plain_size,
    read_manifest,
    results_digest,
)


class Difference(StrEnum):
    """What is wrong with a file of a run folder."""

    MISSING = "missing"
    ADDED = "added"
    CHANGED = "changed"
    SWAPPED = "swapped"
    BROKEN_LOG = "broken log"
    WRONG_DIGEST = "wrong digest"
    NO_MANIFEST = "no manifest"


@dataclass(frozen=True)
class Finding:
    """One thing that is wrong, and where."""

    path: str
    difference: Difference
    message: str

    def __str__(self) -> str:
        return f"{self.path}: {self.difference}: {self.message}"


def verify_manifest(folder: Path, digest_of: Callable[[str], str] = sha256_of) -> list[Finding]:
    """Compare a run folder with its manifest; an empty list means that it is intact.

    Parameters
    ----------
    digest_of : gives the SHA-256 of a file. By default every file is read.

    Raises
    ------
    OSError
        When a file cannot be read.

    Notes
    -----
    A manifest that was rewritten to fit changed files agrees with itself: only its results digest
    and log head, kept elsewhere (printed in a report, a notebook), can show that.
    """
    try:
        manifest = read_manifest(folder)
    except FileNotFoundError:
        why = "there is none: the run did not finish, or it was removed"
        return [Finding(MANIFEST, Difference.NO_MANIFEST, why)]
    except ValueError as error:
        return [Finding(MANIFEST, Difference.NO_MANIFEST, str(error))]
    recorded = {entry.path: entry for entry in manifest.files}
    found = {path: _now(folder, path, digest_of) for path in listed(folder)}
    findings = [*_file_findings(recorded, found)]
    if results_digest(manifest.files) != manifest.results_digest:
        why = "its results digest is not that of the files it lists: the manifest was edited"
        findings.append(Finding(MANIFEST, Difference.WRONG_DIGEST, why))
    if len(recorded) != len(manifest.files):
        why = "it lists a file twice: the manifest was edited"
        findings.append(Finding(MANIFEST, Difference.WRONG_DIGEST, why))
    if LOG in found:
        verdict = verify_log(folder / LOG, manifest.log_head, manifest.log_lines)
        if not verdict.sound:
            why = f"line {verdict.broken_line}: {verdict.why}"
            findings.append(Finding(LOG, Difference.BROKEN_LOG, why))
    return sorted(findings, key=lambda f: (f.path, f.difference))


def _now(folder: Path, path: str, digest_of: Callable[[str], str]) -> FileEntry | None:
    """Return what a file is now; None where a link or something else stands in its place."""
    place = f"{folder}/{path}"
    size = plain_size(place)
    return None if size is None else FileEntry(path, size, digest_of(place))


def _file_findings(
    recorded: dict[str, FileEntry], found: dict[str, FileEntry | None]
) -> Iterator[Finding]:
    holders: dict[str, list[str]] = defaultdict(list)  # content -> where it stands now
    owners: dict[str, list[str]] = defaultdict(list)  # content -> where it belongs
    for now in found.values():
        if now is not None:
            holders[now.sha256].append(now.path)
    for entry in recorded.values():
        owners[entry.sha256].append(entry.path)
    for path, entry in recorded.items():
        if path not in found:
            strays = [place for place in holders[entry.sha256] if place not in recorded]
            moved = f"; its content now stands in {strays[0]}" if strays else ""
            yield Finding(path, Difference.MISSING, f"the manifest lists it{moved}")
            continue
        now = found[path]
        if now is None:
            why = "it is not a plain file any more (a link?)"
            yield Finding(path, Difference.CHANGED, why)
        elif now.sha256 != entry.sha256:
            others = [owner for owner in owners[now.sha256] if owner != path]
            if others:
                yield Finding(path, Difference.SWAPPED, f"it holds the content of {others[0]}")
            else:
                sizes = f"{entry.size} bytes then, {now.size} now"
                yield Finding(path, Difference.CHANGED, f"its SHA-256 is another ({sizes})")
        elif now.size != entry.size:
            why = f"the manifest says {entry.size} bytes where its SHA-256 has {now.size}"
            yield Finding(MANIFEST, Difference.WRONG_DIGEST, f"{path}: {why}")
    for path in found:
        if path not in recorded:
            yield Finding(path, Difference.ADDED, "the manifest does not list it")
