"""What is known of recordings that have not changed: their SHA-256, and facts such as the header's.

A small database in the store remembers them beside path, size, times of change and inode, so that
a second run over many gigabytes reads none of them. The files of each finished run are remembered
likewise, in a database of their own. It is only ever a saving of time: what is lost is computed
again, and an entry is used only while the system says that the file is the same.
"""

import json
import os
import sqlite3
import time
from collections.abc import Callable
from contextlib import closing, suppress
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

from waveassay.contract.digests import canonical_json
from waveassay.contract.errors import MachineError, SignalError
from waveassay.provenance.files import machine_errors, sha256_of

DATABASE = "recordings.sqlite"

#: A file that changed less than this before it was read may change again with the same time stamp
#: (file systems count in steps of up to 2 s), so nothing is remembered of it yet.
UNSETTLED_S = 2.5

_SAVE_EVERY_S = 1.0
_WAIT_S = 10.0
_EDITION = 1
# Network folders without file locks: nothing can be remembered there, and the run goes on.
_NO_LOCKS = (sqlite3.SQLITE_PROTOCOL, sqlite3.SQLITE_NOLFS, sqlite3.SQLITE_IOERR_LOCK)
_TABLE = """
CREATE TABLE IF NOT EXISTS recordings (
    path BLOB PRIMARY KEY, size INTEGER, modified_ns INTEGER, changed_ns INTEGER, inode INTEGER,
    sha256 TEXT, version TEXT, facts TEXT
) WITHOUT ROWID
"""
# What another process found of the same state of a file is not lost.
_UPSERT = """
INSERT INTO recordings VALUES (?, ?, ?, ?, ?, ?, ?, ?) ON CONFLICT (path) DO UPDATE SET
    sha256 = iif(same, coalesce(excluded.sha256, sha256), excluded.sha256),
    version = iif(same AND excluded.facts IS NULL, version, excluded.version),
    facts = iif(same AND excluded.facts IS NULL, facts, excluded.facts),
    size = excluded.size, modified_ns = excluded.modified_ns,
    changed_ns = excluded.changed_ns, inode = excluded.inode
""".replace(
    "same",
    "(size, modified_ns, changed_ns, inode) = (excluded.size, excluded.modified_ns, "
    "excluded.changed_ns, excluded.inode)",
)

# Size, modification time, change time (which cannot be set back by hand), inode.
_Stamp = tuple[int, int, int, int]


@dataclass
class _Entry:
    stamp: _Stamp
    sha256: str | None = None
    version: str | None = None
    facts: str | None = None


class RecordingDigests:
    """Digests and facts of recordings, remembered in a store.

    Several processes may use one store at a time; a kill loses at most the last second's work. Use
    it as a context manager, or call `close`.

    Parameters
    ----------
    store_folder : made if need be.
    name : of the database.

    Raises
    ------
    MachineError
        When the disk or a permission declines.
    """

    def __init__(self, store_folder: Path, name: str = DATABASE) -> None:
        self.path = store_folder / name
        self._entries: dict[bytes, _Entry] = {}
        self._unsaved: set[bytes] = set()
        self._facts_loaded = False
        self._saved = time.monotonic()
        with machine_errors(self.path):
            store_folder.mkdir(parents=True, exist_ok=True)
        self._load()

    def digest(self, path: str | Path) -> str:
        """Return the SHA-256 of a recording's bytes, in hexadecimal.

        Raises
        ------
        OSError
            When the recording cannot be read.
        SignalError
            When it goes on changing while it is read.
        """
        entry = self._entry(path)
        if entry is not None and entry.sha256 is not None:
            return entry.sha256
        read, sha256 = _read_steady(path, lambda: sha256_of(path))

        def remember(entry: _Entry) -> None:
            entry.sha256 = sha256

        self._keep(path, read, remember)
        return sha256

    def facts(
        self, path: Path, make: Callable[[], dict[str, Any]], version: str = ""
    ) -> dict[str, Any]:
        """Return what ``make`` says of a recording, without calling it while nothing changed.

        Remembered or not, what comes back went through JSON: tuples are lists, fractions texts.

        Parameters
        ----------
        make : reads the recording; returns JSON. Whatever it raises passes through.
        version : of the code behind ``make``; facts of another version are not used.

        Raises
        ------
        OSError
            When the recording cannot be read.
        SignalError
            When it goes on changing while it is read.
        """
        self._load_facts()
        entry = self._entry(path)
        if entry is not None and entry.facts is not None and entry.version == version:
            known: dict[str, Any] = json.loads(entry.facts)
            return known
        read, made = _read_steady(path, lambda: canonical_json(make()).decode())

        def remember(entry: _Entry) -> None:
            entry.version, entry.facts = version, made

        self._keep(path, read, remember)
        fresh: dict[str, Any] = json.loads(made)
        return fresh

    def close(self) -> None:
        """Write what is new to the store."""
        self._save()

    def __enter__(self) -> "RecordingDigests":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def _entry(self, path: str | Path) -> _Entry | None:
        """Return what is known of a file as it stands there now."""
        entry = self._entries.get(_key(path))
        if entry is None or entry.stamp != _stamp(os.stat(path)):
            return None
        return entry

    def _keep(self, path: str | Path, read: "_Read", change: Callable[[_Entry], None]) -> None:
        """Remember something of a file, if it had settled when its reading began."""
        if not read.settled:
            return
        key = _key(path)
        entry = self._entries.get(key)
        if entry is None or entry.stamp != read.stamp:
            entry = self._entries[key] = _Entry(read.stamp)
        change(entry)
        self._unsaved.add(key)
        if time.monotonic() - self._saved >= _SAVE_EVERY_S:
            self._save()

    def _load(self) -> None:
        """Read all but the facts, which are many more bytes and not always asked for."""

        def read(database: sqlite3.Connection) -> None:
            query = "SELECT path, size, modified_ns, changed_ns, inode, sha256 FROM recordings"
            for key, size, modified_ns, changed_ns, inode, sha256 in database.execute(query):
                stamp = (size, modified_ns, changed_ns, inode)
                self._entries[key] = _Entry(stamp, sha256)

        self._with_database(read)

    def _load_facts(self) -> None:
        def read(database: sqlite3.Connection) -> None:
            query = (
                "SELECT path, size, modified_ns, changed_ns, inode, version, facts FROM recordings "
                "WHERE facts IS NOT NULL"
            )
            for key, size, modified_ns, changed_ns, inode, version, facts in database.execute(
                query
            ):
                entry = self._entries.setdefault(
                    key, _Entry((size, modified_ns, changed_ns, inode))
                )
                if entry.facts is None and entry.stamp == (size, modified_ns, changed_ns, inode):
                    entry.version, entry.facts = version, facts

        if not self._facts_loaded:
            self._facts_loaded = self._with_database(read)

    def _save(self) -> None:
        def write(database: sqlite3.Connection) -> None:
            database.executemany(_UPSERT, [_row(key, self._entries[key]) for key in unsaved])

        unsaved = sorted(self._unsaved)
        if unsaved and self._with_database(write):
            self._unsaved.clear()
        self._saved = time.monotonic()

    def _with_database(self, use: Callable[[sqlite3.Connection], None]) -> bool:
        """Run one transaction; tell whether it was done.

        Not done when another process kept the database busy, or where files cannot be locked. A
        damaged database is begun afresh.
        """
        for last in (False, True):
            try:
                with closing(sqlite3.connect(self.path, _WAIT_S, isolation_level=None)) as database:
                    database.execute("BEGIN IMMEDIATE")  # closing without COMMIT undoes all
                    _prepare(database)
                    use(database)
                    database.execute("COMMIT")
                return True
            except sqlite3.OperationalError as error:
                code = error.sqlite_errorcode
                if code in _NO_LOCKS or code & 0xFF in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
                    return False
                raise MachineError(
                    f"{self.path}: cannot be used: {error}; see that the disk is not full and that "
                    "you may write to the folder, or choose another store with --store"
                ) from error
            except sqlite3.DatabaseError as error:
                if last:
                    raise MachineError(
                        f"{self.path}: cannot be used: {error}; remove it"
                    ) from error
                self._begin_afresh()
        return False

    def _begin_afresh(self) -> None:
        with machine_errors(self.path):
            for path in (self.path, Path(f"{self.path}-journal")):
                with suppress(FileNotFoundError):
                    path.unlink()


@dataclass(frozen=True)
class _Read:
    """A file's stamp when its reading began, and whether it had stood still long enough."""

    stamp: _Stamp
    settled: bool


def _begin(stat: os.stat_result) -> _Read:
    # Taken before the reading: what is changed after it then gets another time stamp.
    newest = max(stat.st_mtime_ns, stat.st_ctime_ns)
    return _Read(_stamp(stat), time.time_ns() - newest > UNSETTLED_S * 1e9)


def _read_steady(path: str | Path, read: Callable[[], str]) -> tuple[_Read, str]:
    """Read a file that must not change meanwhile; one that does is read once more."""
    for _ in range(2):
        begun = _begin(os.stat(path))
        result = read()
        if begun.stamp == _stamp(os.stat(path)):
            return begun, result
    raise SignalError(
        f"{path}: changes while it is being read; wait until it is written or copied completely, "
        "then run again"
    )


def _stamp(stat: os.stat_result) -> _Stamp:
    inode = stat.st_ino & (2**63 - 1)  # some file systems use all 64 bits, the database 63
    return stat.st_size, stat.st_mtime_ns, stat.st_ctime_ns, inode


def _key(path: str | Path) -> bytes:
    return os.fsencode(os.path.abspath(path))


def _prepare(database: sqlite3.Connection) -> None:
    (edition,) = database.execute("PRAGMA user_version").fetchone()
    if edition != _EDITION:
        database.execute("DROP TABLE IF EXISTS recordings")
        database.execute(_TABLE)
        database.execute(f"PRAGMA user_version = {_EDITION}")


def _row(key: bytes, entry: _Entry) -> tuple[object, ...]:
    return (key, *entry.stamp, entry.sha256, entry.version, entry.facts)
