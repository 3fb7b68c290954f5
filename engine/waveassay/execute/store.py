"""The store: results by the key of what made them, shared by runs.

A result is a folder of files, written beside its place and renamed, so that a half-written one is
never taken for whole. Its ``artefact.json`` names the files with their digests and the environment
that made them, and is checked when the result is read.
"""

import fcntl
import hashlib
import json
import os
import shutil
import tempfile
from collections.abc import Collection, Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from pathlib import Path

from waveassay.contract.errors import SignalError
from waveassay.provenance.files import PART_PREFIX, machine_error, sha256_of
from waveassay.provenance.results import Made

_FACTS = "artefact.json"


class MissingArtefactError(SignalError):
    """A result that a task needs is not in the store, since the task that makes it failed."""


@dataclass(frozen=True)
class Artefact:
    """A stored result.

    Attributes
    ----------
    files : the names of its files with their SHA-256.
    rests_on : what was noted, when it was made, of the results that it rests on, by key.
    contents : of files that were asked for, as they were checked.
    """

    key: str
    folder: Path
    made: Made
    files: Mapping[str, str]
    rests_on: Mapping[str, Made] = field(default_factory=dict)
    contents: Mapping[str, bytes] = field(default_factory=dict)

    @property
    def digest(self) -> str:
        """Of what it holds."""
        return self.made[0]

    def path(self, name: str) -> Path:
        """Return one of its files."""
        return self.folder / name


class Store:
    """A folder of results."""

    def __init__(self, root: Path) -> None:
        self.root = root
        self._objects = f"{root / 'objects'}/"

    @property
    def checked(self) -> Path:
        """Where is remembered which files of finished runs were found unchanged."""
        return self.root / "checked"

    def place(self, key: str) -> Path:
        """Return the folder that a result has, or would have."""
        return Path(f"{self._objects}{key[:2]}/{key}")

    def _file(self, key: str, name: str = _FACTS) -> str:
        # As text: paths are put together for every result of thousands of recordings.
        return f"{self._objects}{key[:2]}/{key}/{name}"

    def has(self, key: str) -> bool:
        """Tell whether a result is there, whole."""
        return os.path.exists(self._file(key))

    @contextmanager
    def writing(
        self,
        key: str,
        environment: str,
        known: Mapping[str, str] | None = None,
        *,
        rests_on: Mapping[str, Made] | None = None,
    ) -> Iterator[Path]:
        """Give a folder to write a result's files to; it takes its place when all went well.

        Parameters
        ----------
        known : names of files with the SHA-256 of what was written to them, which may be told until
            the end; of all others it is worked out from what is there.
        rests_on : what is noted of the results that it rests on, by key, so that who wants to know
            need not look at all of these.

        Raises
        ------
        MachineError
            When the disk is full or may not be written.
        """
        place = self.place(key)
        try:
            place.parent.mkdir(parents=True, exist_ok=True)
            part = Path(tempfile.mkdtemp(prefix=PART_PREFIX, dir=place.parent))
            try:
                yield part
                self._put(key, environment, part, known or {}, rests_on or {})
            finally:
                shutil.rmtree(part, ignore_errors=True)
        except OSError as error:
            told = machine_error(error, self.root)
            if told is None or not self._concerns(error):
                raise
            raise told from error

    def _put(
        self,
        key: str,
        environment: str,
        part: Path,
        known: Mapping[str, str],
        rests_on: Mapping[str, Made],
    ) -> None:
        place = self.place(key)
        paths = {
            path.relative_to(part).as_posix(): path
            for path in sorted(part.rglob("*"))
            if path.is_file()
        }
        files = {name: known.get(name) or sha256_of(path) for name, path in paths.items()}
        facts: dict[str, object] = {
            "files": files,
            "digest": _digest(files),
            "environment": environment,
        }
        if rests_on:
            facts["rests_on"] = rests_on
        (part / _FACTS).write_text(json.dumps(facts, sort_keys=True, indent=1))
        part.chmod(0o755)
        if place.exists() and not self.has(key):
            shutil.rmtree(place)
        try:
            os.rename(part, place)
        except OSError:
            if not self.has(key):  # else another process made the same result first
                raise

    def _concerns(self, error: OSError) -> bool:
        """Tell whether an error is about the store, not about a recording being read."""
        return error.filename is None or Path(error.filename).is_relative_to(self.root)

    def read(self, key: str, wanted: Collection[str] = ()) -> Artefact:
        """Return a result after checking its files against their digests.

        Parameters
        ----------
        wanted : files whose contents are returned, too, as they were checked.

        Raises
        ------
        MissingArtefactError
            When it is not there.
        SignalError
            When a file was changed or lost; the result is removed, so that the next run makes it.
        """
        place = self.place(key)
        try:
            facts = json.loads(_content(self._file(key)))
            files: dict[str, str] = dict(facts["files"])
            made = (facts["digest"], facts["environment"])
            rests_on = {known: (a, b) for known, (a, b) in facts.get("rests_on", {}).items()}
        except FileNotFoundError:
            raise MissingArtefactError(f"result {key[:12]} is not in the store") from None
        except (ValueError, KeyError, TypeError, AttributeError):
            raise self._damaged(place / _FACTS) from None
        contents: dict[str, bytes] = {}
        for name, sha256 in files.items():
            path = self._file(key, name)
            try:
                if name in wanted:
                    contents[name] = _content(path)
                    found = hashlib.sha256(contents[name]).hexdigest()
                else:
                    found = sha256_of(path)
            except FileNotFoundError:
                found = ""
            if found != sha256:
                raise self._damaged(place / name)
        return Artefact(key, place, made, files, rests_on, contents)

    def _damaged(self, path: Path) -> SignalError:
        """Remove the result that a damaged file belongs to, and say so."""
        shutil.rmtree(path.parent, ignore_errors=True)
        return SignalError(
            f"{path}: a stored result was changed or lost. It has been removed; run again and it "
            "is computed afresh."
        )

    def facts(self, key: str) -> Made | None:
        """Return a result's digest and environment without reading its files; None without it."""
        try:
            facts = json.loads(_content(self._file(key)))
        except FileNotFoundError:
            return None
        return facts["digest"], facts["environment"]

    @contextmanager
    def in_use(self) -> Iterator[None]:
        """Hold the store for a run, beside others that share it.

        What killed runs left half written is removed first, when no other run is at work: only
        then is none of it anybody's.
        """
        try:
            self.root.mkdir(parents=True, exist_ok=True)
            file = (self.root / ".lock").open("a")
        except OSError as error:
            raise machine_error(error, self.root) or error from error
        with file:
            with suppress(OSError):  # another run is at work, or the disk knows no locks
                fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
                self._sweep()
            with suppress(OSError):
                fcntl.flock(file, fcntl.LOCK_SH)
            yield

    def _sweep(self) -> None:
        for part in self.root.glob(f"objects/*/{PART_PREFIX}*"):
            shutil.rmtree(part, ignore_errors=True)


def _content(path: str) -> bytes:
    with open(path, "rb", buffering=0) as file:
        return file.read()


def _digest(files: dict[str, str]) -> str:
    lines = "".join(f"{sha256}  {name}\n" for name, sha256 in files.items())
    return hashlib.sha256(lines.encode()).hexdigest()
