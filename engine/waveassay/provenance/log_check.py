"""What was done to a log: the first broken line, and why."""

import hashlib
import json
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from enum import StrEnum
from pathlib import Path

#: What the first line holds in place of a digest.
FIRST = "0" * 64


class LogFault(StrEnum):
    """What is wrong with the first broken line."""

    EDITED = "edited"
    REMOVED = "removed"
    INSERTED = "inserted"
    REORDERED = "reordered"
    SEQUENCE = "sequence"
    TIME = "time"
    TORN = "torn"


@dataclass(frozen=True)
class LogVerdict:
    """How far a log is sound, and what is wrong behind that.

    Attributes
    ----------
    lines, size : lines and bytes of the sound part.
    head : digest of its last line; 64 zeros where there is none.
    time : of its last line.
    broken_line : the first broken line, counted from 1; None for a sound log.
    """

    lines: int = 0
    size: int = 0
    head: str = FIRST
    time: datetime | None = None
    broken_line: int | None = None
    fault: LogFault | None = None
    why: str = ""

    @property
    def sound(self) -> bool:
        """Tell whether nothing is wrong."""
        return self.broken_line is None

    def broken(self, line: int, fault: LogFault, why: str) -> "LogVerdict":
        """Return the verdict with what was found."""
        return replace(self, broken_line=line, fault=fault, why=why)

    def after(self, line: bytes, time: datetime) -> "LogVerdict":
        """Return the verdict with one more sound line (given with its line end)."""
        return replace(
            self,
            lines=self.lines + 1,
            size=self.size + len(line),
            head=hashlib.sha256(line).hexdigest(),
            time=time,
        )


def verify_log(path: Path, head: str | None = None, lines: int | None = None) -> LogVerdict:
    """Find the first broken line of a log.

    A chain alone cannot tell that its last line was edited, or that lines are missing at its end:
    give the ``head`` and the number of ``lines`` that the manifest holds.

    Raises
    ------
    OSError
        When the file cannot be read.
    """
    content = path.read_bytes()
    whole = content.rfind(b"\n") + 1
    verdict = check_lines(content[:whole], head=head)
    if not verdict.sound:
        return verdict
    if whole < len(content):
        return verdict.broken(
            verdict.lines + 1,
            LogFault.TORN,
            f"the last line has no line end ({len(content) - whole} bytes)",
        )
    if lines is not None and verdict.lines < lines:
        return verdict.broken(
            verdict.lines + 1,
            LogFault.REMOVED,
            f"lines {verdict.lines + 1} to {lines} are missing at the end",
        )
    if lines is not None and verdict.lines > lines:
        return verdict.broken(
            lines + 1, LogFault.INSERTED, f"lines were added behind line {lines}, the last known"
        )
    if head is not None and verdict.head != head:
        return verdict.broken(
            max(1, verdict.lines),
            LogFault.EDITED,
            f"its digest is not the recorded head {head}: it was edited, or lines are missing or "
            "were added behind it",
        )
    return verdict


@dataclass(frozen=True)
class _Line:
    sequence: int
    previous: str
    time: datetime


def _parse(line: bytes) -> _Line | str:
    """Return what binds a line to its neighbours, or why it is not a line of a log."""
    try:
        record = json.loads(line)
    except (ValueError, RecursionError):
        return "it is not JSON"
    if not isinstance(record, dict):
        return "it is not a JSON object"
    sequence, previous = record.get("sequence"), record.get("previous")
    if type(sequence) is not int or not isinstance(previous, str):
        return "it has no sequence number or no digest of the line before"
    for name in ("actor", "event"):
        if not isinstance(record.get(name), str) or not record[name]:
            return f"it has no {name}"
    try:
        time = datetime.fromisoformat(record["time"])
    except (KeyError, TypeError, ValueError):
        return "it has no time"
    if time.tzinfo is None:
        return "its time has no offset"
    return _Line(sequence, previous, time)


class _Chain:
    """Lines behind a sound start; indices count from 1, 0 is the start itself."""

    def __init__(self, lines: Sequence[bytes], start: LogVerdict, head: str | None) -> None:
        self.offset = start.lines
        self.records: list[_Line | str] = ["", *(_parse(line) for line in lines)]
        self.digests = [start.head, *(hashlib.sha256(line).hexdigest() for line in lines)]
        self.copies = Counter(self.digests)
        self.place = {digest: i for i, digest in reversed(list(enumerate(self.digests)))}
        self.last_link = {r.previous: i for i, r in enumerate(self.records) if isinstance(r, _Line)}
        self.head = head

    def number(self, index: int) -> int:
        return self.offset + index

    def named(self, first: int, last: int) -> str:
        first, last = self.number(first), self.number(last)
        return f"line {first}" if first == last else f"lines {first} to {last}"

    def is_confirmed(self, index: int) -> bool:
        """Tell whether what comes behind a line says that it is as it was."""
        if index + 1 < len(self.records):
            follower = self.records[index + 1]
            return isinstance(follower, _Line) and follower.previous == self.digests[index]
        return self.head == self.digests[index]

    def link_fault(self, i: int) -> tuple[int, LogFault, str]:
        """Say why line ``i`` is not bound to the line before it, and which line is to blame."""
        record = self.records[i]
        named = self.place.get(record.previous) if isinstance(record, _Line) else None
        if self.copies[self.digests[i]] > 1:
            return i, LogFault.INSERTED, "it is a copy of another line"
        if named is not None and named > i:
            return i, LogFault.REORDERED, f"it belongs behind line {self.number(named)}"
        follower = self.last_link.get(self.digests[i - 1], 0)
        if follower > i:
            what = self.named(i, follower - 1)
            return i, LogFault.INSERTED, f"{what} came between two lines that belong together"
        if isinstance(record, str):
            return i, LogFault.EDITED, record
        if named is not None and named < i - 1:
            what = self.named(named + 1, i - 1)
            why = f"{what} came between two lines that belong together"
            return named + 1, LogFault.INSERTED, why
        if record.sequence > self.number(i):
            missing = f"{self.number(i)} to {record.sequence - 1}"
            return i, LogFault.REMOVED, f"lines with the sequence numbers {missing} are missing"
        if i > 1 and self.is_confirmed(i):
            why = f"its digest is not the one that line {self.number(i)} holds"
            return i - 1, LogFault.EDITED, why
        if i > 1 and i + 1 == len(self.records) and self.head is None:
            why = f"its digest is not the one that line {self.number(i)} holds: one was edited"
            return i - 1, LogFault.EDITED, why
        return i, LogFault.EDITED, "it does not hold the digest of the line before"

    def content_fault(
        self, i: int, record: _Line, before: datetime | None
    ) -> tuple[int, LogFault, str] | None:
        """Say what is wrong with a line that is bound to the line before it."""
        if record.sequence != self.number(i):
            what = f"its sequence number is {record.sequence} where {self.number(i)} is due"
            fault = LogFault.SEQUENCE
        elif before is not None and record.time < before:
            what = f"its time is before that of the line before ({before.isoformat()})"
            fault = LogFault.TIME
        else:
            return None
        # What comes behind does not know this line: it was put in or edited, not forged throughout.
        if self.head is not None or i + 1 < len(self.records):
            if self.last_link.get(self.digests[i - 1], 0) > i:
                fault = LogFault.INSERTED
            elif not self.is_confirmed(i):
                fault = LogFault.EDITED
        return i, fault, what


def check_lines(
    content: bytes, start: LogVerdict | None = None, head: str | None = None
) -> LogVerdict:
    """Check whole lines that follow a sound start; see `verify_log`."""
    verdict = start or LogVerdict()
    lines = [line + b"\n" for line in content.split(b"\n")[:-1]]
    chain = _Chain(lines, verdict, head)
    for i, line in enumerate(lines, start=1):
        record = chain.records[i]
        if isinstance(record, str) or record.previous != chain.digests[i - 1]:
            blamed, fault, why = chain.link_fault(i)
            return verdict.broken(chain.number(blamed), fault, why)
        found = chain.content_fault(i, record, verdict.time)
        if found is not None:
            return verdict.broken(chain.number(found[0]), found[1], found[2])
        verdict = verdict.after(line, record.time)
    return verdict
