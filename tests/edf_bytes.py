"""EDF and BDF files as raw bytes, every header field settable, wrongly too.

Stored values are whole numbers; nothing is scaled here, so tests state what a reader has to make
of them.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

Value = str | bytes | int | float

#: What a file's annotation signals hold: (record, which annotation signal) -> bytes.
Tals = Callable[[int, int], bytes]


@dataclass(frozen=True)
class Sig:
    """One signal. ``data`` are its stored values, ``spr`` of them a record."""

    label: Value = "EEG Fp1"
    spr: Value = 4
    unit: Value = "uV"
    pmin: Value = -100
    pmax: Value = 100
    dmin: Value | None = None
    dmax: Value | None = None
    transducer: Value = "AgAgCl electrode"
    prefilter: Value = "HP:0.1Hz LP:75Hz"
    reserved: Value = ""
    data: Sequence[int] | None = None
    annotations: bool = False


def annotation_signal(size_bytes: int = 60, *, bdf: bool = False, label: Value = "") -> Sig:
    """Return an annotation signal of at least so many bytes a record."""
    width = 3 if bdf else 2
    return Sig(
        label=label or ("BDF Annotations" if bdf else "EDF Annotations"),
        spr=-(-size_bytes // width),
        unit="",
        pmin=-1,
        pmax=1,
        transducer="",
        prefilter="",
        annotations=True,
    )


def tal(onset: str, *texts: str, duration: str = "") -> bytes:
    """Return one time-stamped annotation list; without texts, one that keeps a record's time."""
    length = f"\x15{duration}" if duration else ""
    return "\x14".join((onset + length, *(texts or ("",)), "\0")).encode()


def clock(*onsets: str) -> Tals:
    """Return lists that state each record's start and nothing else."""
    return lambda record, which: b"" if which else tal(onsets[record])


def build(
    signals: Sequence[Sig],
    records: int = 4,
    *,
    duration: Value = 1,
    bdf: bool = False,
    reserved: Value = "",
    tals: Tals | None = None,
    version: Value | None = None,
    patient: Value = "X X X X",
    recording: Value = "Startdate 01-MAR-2024 X X X",
    date: Value = "01.03.24",
    time: Value = "22.00.00",
    header_bytes: Value | None = None,
    stated_records: Value | None = None,
    signal_count: Value | None = None,
    tail: bytes = b"",
) -> bytes:
    """Return a whole file. Fields that are None are what they should be."""
    count = len(signals)
    top = 1 << (23 if bdf else 15)
    own_version = b"\xffBIOSEMI" if bdf else b"0"
    header = b"".join(
        (
            _field(_or(version, own_version), 8),
            _field(patient, 80),
            _field(recording, 80),
            _field(date, 8),
            _field(time, 8),
            _field(_or(header_bytes, 256 * (count + 1)), 8),
            _field(reserved, 44),
            _field(_or(stated_records, records), 8),
            _field(duration, 8),
            _field(_or(signal_count, count), 4),
            *(_field(s.label, 16) for s in signals),
            *(_field(s.transducer, 80) for s in signals),
            *(_field(s.unit, 8) for s in signals),
            *(_field(s.pmin, 8) for s in signals),
            *(_field(s.pmax, 8) for s in signals),
            *(_field(_or(s.dmin, -top), 8) for s in signals),
            *(_field(_or(s.dmax, top - 1), 8) for s in signals),
            *(_field(s.prefilter, 80) for s in signals),
            *(_field(s.spr, 8) for s in signals),
            *(_field(s.reserved, 32) for s in signals),
        )
    )
    width = 3 if bdf else 2
    body = b"".join(_record(signals, record, width, tals) for record in range(records))
    return header + body + tail


def stored(signal: Sig, records: int) -> list[int]:
    """Return a signal's stored values: its data, or the default, a count from 1 to 30,000."""
    size = records * int(signal.spr)
    return list(signal.data) if signal.data is not None else [_count(i) for i in range(size)]


def _record(signals: Sequence[Sig], record: int, width: int, tals: Tals | None) -> bytes:
    parts = []
    which = 0
    for signal in signals:
        if signal.annotations:
            own = tals(record, which) if tals else tal(f"+{record}") if which == 0 else b""
            size = int(signal.spr) * width
            assert len(own) <= size, "the lists do not fit the annotation signal"
            parts.append(own.ljust(size, b"\0"))
            which += 1
            continue
        size = int(signal.spr) if str(signal.spr).lstrip("-").isdigit() else 0
        first = record * size
        values = (
            [_count(i) for i in range(first, first + size)]
            if signal.data is None
            else signal.data[first : first + size]
        )
        parts += [value.to_bytes(width, "little", signed=True) for value in values]
    return b"".join(parts)


def _count(index: int) -> int:
    return index % 30_000 + 1


def _or(value: Value | None, default: Value) -> Value:
    return default if value is None else value


def _field(value: Value, width: int) -> bytes:
    raw = value if isinstance(value, bytes) else str(value).encode("utf-8")
    assert len(raw) <= width, f"{value!r} is wider than {width} bytes"
    return raw.ljust(width)
