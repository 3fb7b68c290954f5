"""Time-stamped annotation lists (EDF+): ``+onset[0x15 duration]0x14 text 0x14 ... 0x00``.

Source: Kemp and Olivan 2003, Clin Neurophysiol 114:1755-1761, and the specification's text.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

#: Times are whole numbers of ticks while records are joined: exact, and quicker than fractions.
#: Decimals beyond the 18th are dropped.
TICK_DECIMALS = 18
TICKS_PER_S: int = 10**TICK_DECIMALS

_STAMP = re.compile(rb"([+-])(\d{1,12})(?:\.(\d*))?(?:\x15(\d{1,12})(?:\.(\d*))?)?\x14")
_MAX_TEXTS = 10_000


@dataclass(frozen=True, slots=True)
class Tal:
    """One list: texts that share an onset.

    Attributes
    ----------
    onset : ticks since the header's start.
    decimals : how many the onset was written with, which bounds its rounding.
    duration : ticks; None where none is given.
    texts : undecoded; the first is empty where the list states its record's own start.
    """

    onset: int
    decimals: int
    duration: int | None
    texts: list[bytes]


def split_tals(part: bytes) -> Iterator[bytes]:
    """Yield what stands between the NULs of one record's annotation signal, first one first.

    The first is yielded even when empty, as it has to state the record's start.
    """
    at, first = 0, True
    end = len(part.rstrip(b"\0"))
    while at < end or first:
        stop = part.find(b"\0", at)
        if stop < 0:
            stop = len(part)
        if stop > at or first:
            yield part[at:stop]
        at, first = stop + 1, False


def parse_tal(raw: bytes) -> Tal | None:
    """Read one list; None when it is malformed."""
    stamp = _STAMP.match(raw)
    if stamp is None or stamp.end() == len(raw) or raw[-1:] != b"\x14":
        return None
    if raw.count(b"\x14") > _MAX_TEXTS:
        return None
    sign, whole, part, length, length_part = stamp.groups()
    onset = _ticks(whole, part)
    return Tal(
        onset=-onset if sign == b"-" else onset,
        decimals=min(len(part), TICK_DECIMALS) if part else 0,
        duration=None if length is None else _ticks(length, length_part),
        texts=raw[stamp.end() : -1].split(b"\x14"),
    )


def decode(text: bytes) -> tuple[str, bool]:
    """Return a text and whether it is UTF-8, as it should be; otherwise it is read as Latin-1."""
    try:
        return text.decode("utf-8"), True
    except UnicodeDecodeError:
        return text.decode("latin-1"), False


def seconds(ticks: int) -> Fraction:
    """Return ticks as exact seconds."""
    return Fraction(ticks, TICKS_PER_S)


def _ticks(whole: bytes, part: bytes | None) -> int:
    kept = part[:TICK_DECIMALS] if part else b""
    return int(whole + kept.ljust(TICK_DECIMALS, b"0"))
