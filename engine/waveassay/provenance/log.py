"""The log of a run: lines that can be added to, each bound to the one before.

A line is a compact JSON object in UTF-8 with sorted keys: ``sequence`` (from 1), ``time`` (UTC with
offset, microseconds), ``event``, ``actor`` (account@host), the event's facts, and ``previous``: the
SHA-256 of the line before, its line end included (``sed -n 3p log.jsonl | sha256sum`` shows it);
64 zeros in the first. `waveassay.provenance.log_check` finds what was done to a log afterwards.
"""

import getpass
import hashlib
import os
import platform
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType

from waveassay.contract.digests import canonical_json
from waveassay.contract.errors import RefusedError
from waveassay.provenance.files import machine_errors
from waveassay.provenance.log_check import LogVerdict, check_lines

#: Lines reach the disk itself (fsync) at most this much later, and always on `Log.close`.
SYNC_EVERY_S = 1.0

#: Names that facts cannot have.
RESERVED = frozenset({"sequence", "time", "event", "actor", "previous", "clock_behind_s"})


def current_actor() -> str:
    """Return who runs this: ``account@host``; neither part is ever empty."""
    account = ""
    with suppress(ImportError, KeyError, AttributeError):
        import pwd  # the account as the system knows it, before what the environment claims

        account = pwd.getpwuid(os.getuid()).pw_name
    if not account:
        with suppress(OSError, KeyError, ImportError):
            account = getpass.getuser()
    if not account:
        account = f"uid{os.getuid()}" if hasattr(os, "getuid") else "unknown-account"
    return f"{account}@{platform.node() or 'unknown-host'}"


class Log:
    """A log that can be added to, by one process or several.

    An existing log is checked and continued. A last line without its line end (a kill or a power
    cut while it was written) is cut off, and the cut is logged as the event ``line_cut`` with the
    bytes lost.

    A line is handed to the system in one write, so a killed process loses none; it is synced to
    the disk at most once a second and on `close`, so a power cut may lose the last second, and
    what is left is still a whole chain.

    Should the clock have been set back since the last line, the line repeats that line's time and
    says in ``clock_behind_s`` how far behind the clock was: times never go backwards.

    Parameters
    ----------
    path : the file; made with its folder if need be.
    actor : who acts; the account and host that run this, unless given.

    Raises
    ------
    ValueError
        When the actor is empty.
    RefusedError
        When the existing log is broken: nothing is built on it.
    MachineError
        When the disk or a permission declines.
    """

    def __init__(self, path: Path, actor: str | None = None) -> None:
        self.path = path
        self.actor = current_actor() if actor is None else actor.strip()
        if not self.actor:
            raise ValueError("a log line needs an actor: who did it")
        self._known = LogVerdict()  # the sound log as last seen
        self._synced = time.monotonic()
        self._pending = False
        with self._locked() as descriptor:
            self._catch_up(descriptor)

    @property
    def head(self) -> str:
        """The digest of the last line; 64 zeros while there is none."""
        return self._known.head

    @property
    def lines(self) -> int:
        """How many lines there are, as far as this object knows."""
        return self._known.lines

    def append(self, event: str, **facts: object) -> None:
        """Add a line.

        Raises
        ------
        ValueError
            For an empty event, a fact with a reserved name, or a number that is not finite.
        TypeError
            For a fact that is not JSON.
        """
        self.append_all(event, [facts])

    def append_all(self, event: str, lines: Sequence[Mapping[str, object]]) -> None:
        """Add a line for each of some facts, all of one event, in one change; see `append`.

        When one cannot be written, those before it stay.
        """
        if not event:
            raise ValueError("a log line needs an event")
        taken = sorted({name for facts in lines for name in facts} & RESERVED)
        if taken:
            raise ValueError(f"these names belong to the log itself: {', '.join(taken)}")
        with self._locked() as descriptor:
            self._catch_up(descriptor)
            for facts in lines:
                self._write(descriptor, event, facts)

    def sync(self) -> None:
        """Have every line so far on the disk itself."""
        if self._pending:
            with self._locked() as descriptor:
                self._sync(descriptor)

    def close(self) -> None:
        """Sync; nothing else is held, so that more may be added afterwards."""
        self.sync()

    def __enter__(self) -> "Log":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    @contextmanager
    def _locked(self) -> Iterator[int]:
        """Open the file for one change, alone; it is not held open between changes."""
        with machine_errors(self.path):
            self.path.parent.mkdir(parents=True, exist_ok=True)
            binary: int = getattr(os, "O_BINARY", 0)
            descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT | binary, 0o666)
            try:
                _lock(descriptor)
                yield descriptor
            finally:
                os.close(descriptor)  # and with it the lock

    def _catch_up(self, descriptor: int) -> None:
        """Read what was added since this object last looked; cut off a torn line."""
        size, known = os.fstat(descriptor).st_size, self._known.size
        if size < known:
            raise RefusedError(
                f"{self.path}: was cut from {known} to {size} bytes while the run was writing it; "
                "the run cannot vouch for it any more and stops"
            )
        if size == known:
            return
        added = _read(descriptor, known, size - known)
        whole = added.rfind(b"\n") + 1
        verdict = check_lines(added[:whole], self._known)
        if not verdict.sound:
            raise RefusedError(
                f"{self.path}: line {verdict.broken_line}: {verdict.why}; a broken log is not "
                "continued: move the run folder away and start a new run"
            )
        self._known = verdict
        torn = added[whole:]
        if torn:
            lost = {
                "bytes_lost": len(torn),
                "sha256_lost": hashlib.sha256(torn).hexdigest(),
                "lost": torn[:1000].decode("utf-8", "backslashreplace"),
            }
            self._write(descriptor, "line_cut", lost)

    def _write(self, descriptor: int, event: str, facts: Mapping[str, object]) -> None:
        """Write a line behind the last whole one, over a torn line if there is one."""
        now = datetime.now(UTC)
        record: dict[str, object] = {
            **facts,
            "sequence": self._known.lines + 1,
            "event": event,
            "actor": self.actor,
            "previous": self._known.head,
        }
        last = self._known.time
        if last is not None and now < last:
            record["clock_behind_s"] = (last - now).total_seconds()
            now = last
        record["time"] = now.isoformat(timespec="microseconds")
        line = canonical_json(record) + b"\n"
        start = self._known.size
        try:
            os.lseek(descriptor, start, os.SEEK_SET)
            written = 0
            while written < len(line):
                written += os.write(descriptor, line[written:])
        except BaseException:  # Ctrl-C too
            # A full disk leaves no half line behind, so that the run can say so in its log later.
            with suppress(OSError):
                os.ftruncate(descriptor, start)
            raise
        os.ftruncate(descriptor, start + len(line))
        self._known = self._known.after(line, now)
        self._pending = True
        if time.monotonic() - self._synced >= SYNC_EVERY_S:
            self._sync(descriptor)

    def _sync(self, descriptor: int) -> None:
        os.fsync(descriptor)
        self._synced = time.monotonic()
        self._pending = False


def _read(descriptor: int, start: int, size: int) -> bytes:
    os.lseek(descriptor, start, os.SEEK_SET)
    blocks = []
    while size > 0:
        block = os.read(descriptor, size)
        if not block:
            break
        blocks.append(block)
        size -= len(block)
    return b"".join(blocks)


def _lock(descriptor: int) -> None:
    """Wait for the file's lock; where there are none, the run folder's own lock must do."""
    with suppress(ImportError, OSError):
        import fcntl

        fcntl.flock(descriptor, fcntl.LOCK_EX)
