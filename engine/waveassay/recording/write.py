"""Write recordings: EDF, EDF+C, EDF+D, BDF and BDF+.

A small, strict writer. It refuses what the format cannot hold and never clips, rounds inward or
leaves out. The same arguments give the same bytes.

Source: the published specifications of EDF (Kemp et al. 1992), EDF+ (Kemp and Olivan 2003) and
their 24-bit form, BDF.
"""

import os
from bisect import bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Floats, Interval
from waveassay.contract.errors import MachineError
from waveassay.recording.facts import Annotation
from waveassay.recording.write_fields import (
    FIELD,
    WriteError,
    exact_text,
    field_text,
    limit_text,
)

__all__ = ["WriteError", "WrittenSignal", "write_recording"]

_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_BLOCK_BYTES = 1 << 22  # records are put together in blocks of about this size


@dataclass(frozen=True)
class WrittenSignal:
    """One signal to write.

    Attributes
    ----------
    x : samples in ``unit``; those of all pieces one after another.
    physical_min, physical_max : values that the lowest and the highest digital value stand for.
        The header holds 8 characters, so they are rounded outward to what fits. A minimum above
        the maximum is a negative gain.
    digital_min, digital_max : None for the format's full range.
    """

    label: str
    unit: str
    rate_hz: Fraction
    x: Floats
    physical_min: float
    physical_max: float
    digital_min: int | None = None
    digital_max: int | None = None
    transducer: str = ""
    prefilter: str = ""


@dataclass(frozen=True)
class _Coded:
    """A signal as the file holds it."""

    label: str
    transducer: str
    unit: str
    physical: tuple[str, str]
    digital: tuple[int, int]
    prefilter: str
    per_record: int
    samples: NDArray[np.int32]


def write_recording(
    path: Path,
    signals: Sequence[WrittenSignal],
    start: datetime,
    *,
    annotations: Sequence[Annotation] = (),
    record_s: Fraction = Fraction(1),
    pieces: Sequence[Interval] | None = None,
    bdf: bool = False,
    plain: bool = False,
    patient: str = "X X X X",
    recording: str | None = None,
) -> None:
    """Write a recording beside its place and rename it.

    Parameters
    ----------
    path : where it goes; an existing file is replaced.
    start : time of the first sample, to the microsecond. Its fraction of a second stands in the
        first record's time stamp, as EDF+ has it.
    annotations : in any order; times in seconds from the first sample.
    record_s : length of a record; each signal must have a whole number of samples in it.
    pieces : the parts without gaps, in seconds from the first sample, each of whole records; the
        file is then EDF+D or BDF+D. None for one piece without gaps (EDF+C or BDF+C).
    plain : write EDF or BDF without time stamps; annotations, pieces and a fractional start are
        then refused.
    patient, recording : identity fields; by default they name nobody.

    Raises
    ------
    WriteError
        When the format cannot hold what is given.
    MachineError
        When the file cannot be written.
    """
    if not signals:
        raise WriteError(f"{path}: a recording needs at least one signal")
    if not 1985 <= start.year <= 2084:
        raise WriteError(f"{path}: the year {start.year} is outside the format's 1985 to 2084")
    if plain and (annotations or pieces is not None or start.microsecond):
        raise WriteError(
            f"{path}: plain {'BDF' if bdf else 'EDF'} holds no annotations, no gaps and no "
            "fraction of a second in its start; write it without `plain`"
        )
    duration_text = exact_text(record_s, "record_s", path)
    if record_s <= 0 or len(duration_text) > FIELD:
        raise WriteError(
            f"{path}: record_s must be positive and fit {FIELD} characters, not {duration_text}"
        )
    coded = [_coded(signal, record_s, bdf, path) for signal in signals]
    records = _records(signals, coded, path)
    starts = _record_starts(pieces, records, record_s, path)
    if not plain:
        fraction = Fraction(start.microsecond, 1_000_000)
        coded.append(_annotation_signal(annotations, starts, fraction, bdf, path))
    if recording is None:
        recording = f"Startdate {start.day:02d}-{_MONTHS[start.month - 1]}-{start.year} X X X"
    form = "BDF" if bdf else "EDF"
    reserved = ("24BIT" if bdf else "") if plain else f"{form}+{'C' if pieces is None else 'D'}"
    header = (
        (b"\xffBIOSEMI" if bdf else field_text("0", 8, "version", path))
        + field_text(patient, 80, "patient field", path)
        + field_text(recording, 80, "recording field", path)
        + field_text(f"{start.day:02d}.{start.month:02d}.{start.year % 100:02d}", 8, "date", path)
        + field_text(f"{start.hour:02d}.{start.minute:02d}.{start.second:02d}", 8, "time", path)
        + field_text(str(256 * (len(coded) + 1)), 8, "header size", path)
        + field_text(reserved, 44, "reserved field", path)
        + field_text(str(records), 8, "number of records", path)
        + field_text(duration_text, 8, "record duration", path)
        + field_text(str(len(coded)), 4, "number of signals", path)
        + _signal_header(coded, path)
    )
    _write_beside(path, header, _blocks(coded, records, bdf))


def _coded(signal: WrittenSignal, record_s: Fraction, bdf: bool, path: Path) -> _Coded:
    """Turn samples into digital values, with the limits as the header will hold them."""
    name = f"signal '{signal.label}'"
    low, high = (-(1 << 23), (1 << 23) - 1) if bdf else (-(1 << 15), (1 << 15) - 1)
    first = low if signal.digital_min is None else signal.digital_min
    last = high if signal.digital_max is None else signal.digital_max
    if not low <= first < last <= high:
        raise WriteError(
            f"{path}: {name}: digital limits {first} to {last} do not rise within {low} to {high}"
        )
    if not signal.label.strip():
        raise WriteError(f"{path}: a signal without a label cannot be told from others")
    if signal.label.strip() in ("EDF Annotations", "BDF Annotations"):
        raise WriteError(f"{path}: the label '{signal.label}' is kept for annotations")
    reversed_scale = signal.physical_min > signal.physical_max
    texts = (
        limit_text(signal.physical_min, up=reversed_scale, what=f"{name}: physical_min", path=path),
        limit_text(
            signal.physical_max, up=not reversed_scale, what=f"{name}: physical_max", path=path
        ),
    )
    span = float(texts[1]) - float(texts[0])
    asked = signal.physical_max - signal.physical_min
    if asked == 0 or abs(span) > 1.01 * abs(asked):
        raise WriteError(
            f"{path}: {name}: physical limits {signal.physical_min} to {signal.physical_max} would"
            f" be written as {texts[0]} to {texts[1]}; give a wider range, or another unit"
        )
    per_record = signal.rate_hz * record_s
    if signal.rate_hz <= 0 or per_record.denominator != 1:
        raise WriteError(
            f"{path}: {name}: {signal.rate_hz} Hz gives {float(per_record):g} samples in a record "
            f"of {float(record_s):g} s; a whole number is needed, choose another record_s"
        )
    return _Coded(
        label=signal.label,
        transducer=signal.transducer,
        unit=signal.unit,
        physical=texts,
        digital=(first, last),
        prefilter=signal.prefilter,
        per_record=int(per_record),
        samples=_digital(signal, float(texts[0]), span, first, last, path),
    )


def _digital(
    signal: WrittenSignal, physical_min: float, span: float, first: int, last: int, path: Path
) -> NDArray[np.int32]:
    """Scale and round the samples: ``d = first + (x - physical_min) (last - first) / span``."""
    x = np.asarray(signal.x, np.float64)
    if x.ndim != 1:
        raise WriteError(f"{path}: signal '{signal.label}': samples must be one row")
    digital = np.rint((x - physical_min) * ((last - first) / span) + first)
    wrong = np.flatnonzero(~((digital >= first) & (digital <= last)))
    if wrong.size:
        raise WriteError(
            f"{path}: signal '{signal.label}': {wrong.size} of {x.size} samples are not within "
            f"{signal.physical_min} to {signal.physical_max} {signal.unit}; the first is number "
            f"{wrong[0]}, {x[wrong[0]]}"
        )
    return digital.astype(np.int32)


def _records(signals: Sequence[WrittenSignal], coded: Sequence[_Coded], path: Path) -> int:
    """Return the number of records, which must be whole and the same for all signals."""
    counts = [Fraction(c.samples.size, c.per_record) for c in coded]
    for signal, one, count in zip(signals, coded, counts, strict=True):
        if count.denominator != 1 or count == 0:
            raise WriteError(
                f"{path}: signal '{signal.label}': {one.samples.size} samples are not whole records"
                f" of {one.per_record}"
            )
        if count != counts[0]:
            raise WriteError(
                f"{path}: signal '{signal.label}' has {count} records, but "
                f"'{signals[0].label}' has {counts[0]}"
            )
    return int(counts[0])


def _record_starts(
    pieces: Sequence[Interval] | None, records: int, record_s: Fraction, path: Path
) -> list[Fraction]:
    """Return the time of each record, s from the first sample."""
    if pieces is None:
        return [index * record_s for index in range(records)]
    starts: list[Fraction] = []
    before: Fraction | None = None
    for piece in pieces:
        count = piece.length_s / record_s
        if count.denominator != 1 or count == 0:
            raise WriteError(
                f"{path}: the piece from {float(piece.start_s):g} to {float(piece.stop_s):g} s "
                f"is not whole records of {float(record_s):g} s"
            )
        if before is None and piece.start_s != 0:
            raise WriteError(f"{path}: the first piece must start at 0 s, the first sample")
        if before is not None and piece.start_s <= before:
            raise WriteError(
                f"{path}: the piece at {float(piece.start_s):g} s does not leave a gap after the "
                f"one before, which ends at {float(before):g} s"
            )
        before = piece.stop_s
        starts.extend(piece.start_s + index * record_s for index in range(int(count)))
    if len(starts) != records:
        raise WriteError(f"{path}: the pieces hold {len(starts)} records, the signals {records}")
    return starts


def _annotation_signal(
    annotations: Sequence[Annotation],
    starts: Sequence[Fraction],
    fraction: Fraction,
    bdf: bool,
    path: Path,
) -> _Coded:
    """Return time stamps and annotations as a signal; onsets count from the header's second."""
    texts = [_stamp(start + fraction, path) + b"\x14\x14\x00" for start in starts]
    for item in sorted(annotations, key=lambda a: (a.onset_s, a.text, a.duration_s or 0)):
        if not item.text or any(ord(c) < 32 and c not in "\t\n\r" for c in item.text):
            raise WriteError(
                f"{path}: the annotation {item.text!r} is empty or has control characters"
            )
        if item.duration_s is not None and item.duration_s < 0:
            raise WriteError(f"{path}: the annotation '{item.text}' has a negative duration")
        onset = _stamp(item.onset_s + fraction, path)
        if item.duration_s is not None:
            length = exact_text(item.duration_s, "an annotation's duration", path)
            onset += b"\x15" + length.encode("ascii")
        index = bisect_right(starts, item.onset_s) - 1
        texts[max(0, index)] += onset + b"\x14" + item.text.encode("utf-8") + b"\x14\x00"
    width = 3 if bdf else 2
    per_record = -(-max(map(len, texts)) // width)
    raw = b"".join(text.ljust(per_record * width, b"\0") for text in texts)
    if bdf:
        parts = np.frombuffer(raw, np.uint8).astype(np.int32).reshape(-1, 3)
        samples = parts[:, 0] | (parts[:, 1] << 8) | (parts[:, 2] << 16)
    else:
        samples = np.frombuffer(raw, "<i2").astype(np.int32)
    limit = (1 << 23) if bdf else (1 << 15)
    label = "BDF Annotations" if bdf else "EDF Annotations"
    digital = (-limit, limit - 1)
    return _Coded(label, "", "", ("-1", "1"), digital, "", per_record, samples)


def _stamp(time_s: Fraction, path: Path) -> bytes:
    """Return an onset with its sign, which the format asks for."""
    text = exact_text(time_s, "an annotation's or record's onset", path)
    return (text if time_s < 0 else f"+{text}").encode("ascii")


def _signal_header(coded: Sequence[_Coded], path: Path) -> bytes:
    """Return the signals' part of the header, field by field."""
    fields = (
        [field_text(c.label, 16, "label", path) for c in coded],
        [field_text(c.transducer, 80, "transducer", path) for c in coded],
        [field_text(c.unit, 8, "unit", path) for c in coded],
        [field_text(c.physical[0], 8, "physical minimum", path) for c in coded],
        [field_text(c.physical[1], 8, "physical maximum", path) for c in coded],
        [field_text(str(c.digital[0]), 8, "digital minimum", path) for c in coded],
        [field_text(str(c.digital[1]), 8, "digital maximum", path) for c in coded],
        [field_text(c.prefilter, 80, "prefilter", path) for c in coded],
        [field_text(str(c.per_record), 8, "samples per record", path) for c in coded],
        [field_text("", 32, "reserved", path) for _ in coded],
    )
    return b"".join(b"".join(field) for field in fields)


def _blocks(coded: Sequence[_Coded], records: int, bdf: bool) -> Iterator[bytes]:
    """Yield the records, some at a time."""
    width = 3 if bdf else 2
    per_record = sum(c.per_record for c in coded)
    count = max(1, _BLOCK_BYTES // (per_record * width))
    for first in range(0, records, count):
        last = min(records, first + count)
        block = np.concatenate(
            [
                c.samples[first * c.per_record : last * c.per_record].reshape(last - first, -1)
                for c in coded
            ],
            axis=1,
        )
        if bdf:
            octets = np.ascontiguousarray(block, "<i4").view(np.uint8).reshape(-1, 4)
            yield octets[:, :3].tobytes()
        else:
            yield block.astype("<i2").tobytes()


def _write_beside(path: Path, header: bytes, blocks: Iterator[bytes]) -> None:
    """Write under another name and rename, so that half a file never bears the name."""
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with part.open("wb") as file:
            file.write(header)
            for block in blocks:
                file.write(block)
        part.replace(path)
    except OSError as error:
        raise MachineError(f"{path}: cannot be written: {error.strerror or error}") from error
    finally:
        part.unlink(missing_ok=True)
