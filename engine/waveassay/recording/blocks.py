"""Blocks of whole records, and the stored samples in them.

A block of about 1 MiB stays in the processor's cache between reading and sorting by signal.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from math import ceil, floor
from typing import Any

import numpy as np

from waveassay.recording.digital import Scale, StoredArray
from waveassay.recording.file import RegularFile
from waveassay.recording.header import Header

BLOCK_BYTES = 1 << 20
# From this size on, reading only the annotations of each record beats reading all of it.
_SPARSE_RECORD_BYTES = 16 << 10
# Signals in a group: their arrays stay small enough for memory that was freed to be used again.
_MOST = 16


class Records:
    """The data records of an open file."""

    def __init__(self, file: RegularFile, header: Header, count: int, block_bytes: int) -> None:
        self.file = file
        self.header = header
        self.count = count
        self.record_bytes = header.record_bytes
        self.per_block = max(1, block_bytes // self.record_bytes)

    def raw_blocks(self, first: int, stop: int) -> Iterator[tuple[int, int, bytearray]]:
        """Yield (first record, number of records, bytes); the bytes are reused by the next step.

        One spare byte stands in front, which lets 24-bit samples be seen as 32-bit ones.
        """
        size = self.record_bytes
        raw = bytearray(1 + min(self.per_block, max(0, stop - first)) * size)
        view = memoryview(raw)[1:]
        for record in range(first, stop, self.per_block):
            count = min(self.per_block, stop - record)
            offset = self.header.header_bytes + record * size
            self.file.fill(view[: count * size], offset, self._named(record, count))
            yield record, count, raw

    def annotation_parts(self) -> Iterator[tuple[int, list[bytes]]]:
        """Yield every record's number and the bytes of its annotation signals."""
        header, size = self.header, self.record_bytes
        spans = [
            (header.places[i], header.signals[i].samples_per_record * header.sample_bytes)
            for i in header.annotated
        ]
        if size >= _SPARSE_RECORD_BYTES:
            for record in range(self.count):
                offset = header.header_bytes + record * size
                named = self._named(record, 1)
                yield record, [self.file.read(offset + at, n, named) for at, n in spans]
            return
        for first, count, raw in self.raw_blocks(0, self.count):
            for i in range(count):
                start = 1 + i * size
                yield first + i, [bytes(raw[start + at : start + at + n]) for at, n in spans]

    def _named(self, record: int, count: int) -> str:
        many = f"records {record + 1} to {record + count}" if count > 1 else f"record {record + 1}"
        return f"{many} of {self.count}"


@dataclass(frozen=True)
class Group:
    """Adjacent signals, not too many, with equally many samples per record.

    Attributes
    ----------
    samples : per record and signal.
    place : where in a record the first one's samples start, bytes.
    scales : gain and offset of each signal.
    limits : lowest and highest stored value of each signal by its digital limits.
    limited : whether a stored value can lie outside the limits at all.
    """

    signals: tuple[int, ...]
    samples: int
    place: int
    scales: tuple[Scale, ...]
    limits: tuple[tuple[int, int], ...]
    limited: bool


def groups_of(header: Header, wanted: Iterable[int]) -> tuple[Group, ...]:
    """Return the groups that cover the wanted signals, each signal once."""
    runs: list[list[int]] = []
    for index in sorted(set(wanted)):
        samples = header.signals[index].samples_per_record
        if (
            runs
            and runs[-1][-1] == index - 1
            and len(runs[-1]) < _MOST
            and header.signals[index - 1].samples_per_record == samples
        ):
            runs[-1].append(index)
        else:
            runs.append([index])
    return tuple(_group(header, run) for run in runs)


def _group(header: Header, run: list[int]) -> Group:
    signals = [header.signals[i] for i in run]
    top = 2.0 ** (8 * header.sample_bytes - 1)

    limits = tuple((ceil(s.digital_min), floor(s.digital_max)) for s in signals)
    return Group(
        signals=tuple(run),
        samples=signals[0].samples_per_record,
        place=header.places[run[0]],
        scales=tuple((s.gain, s.offset) for s in signals),
        limits=limits,
        limited=any(low > -top or high < top - 1 for low, high in limits),
    )


class Decoder:
    """Finds the stored samples of one group in the bytes of a block."""

    def __init__(self, header: Header, group: Group) -> None:
        self.group = group
        self.kind: type[np.signedinteger[Any]] = np.int16 if header.sample_bytes == 2 else np.int32
        self._record_bytes = header.record_bytes
        self._width = header.sample_bytes

    def stored(self, raw: bytearray, count: int, out: StoredArray | None = None) -> StoredArray:
        """Return stored values, shape (signals, records, samples), in ``out`` where it is given.

        Without it, they may be a view of the block.
        """
        group, width = self.group, self._width
        strides = (width * group.samples, self._record_bytes, width)
        # 24 bits: a little-endian 32-bit view that starts one byte early; the shift drops that
        # byte and extends the sign.
        start = group.place + (1 if width == 2 else 0)
        kind = "<i2" if width == 2 else "<i4"
        shape = (len(group.signals), count, group.samples)
        found: StoredArray = np.ndarray(shape, kind, raw, start, strides)
        if width == 3:
            return np.right_shift(found, 8, out=out)
        if out is None:
            return found
        np.copyto(out, found)
        return out
