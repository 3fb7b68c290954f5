"""Blocks of whole records, and the samples in them as physical values.

A block of about 1 MiB stays in the processor's cache between reading and decoding. Adjacent
signals of one rate are decoded in one strided operation.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from math import ceil, floor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Floats
from waveassay.recording.file import RegularFile
from waveassay.recording.header import Header

BLOCK_BYTES = 1 << 20
# From this size on, reading only the annotations of each record beats reading all of it.
_SPARSE_RECORD_BYTES = 16 << 10


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
    """Adjacent signals with equally many samples per record.

    Attributes
    ----------
    samples : per record and signal.
    place : where in a record the first one's samples start, bytes.
    gain, offset : of each signal, shape (signals, 1, 1).
    limits : lowest and highest stored value of each signal by its digital limits.
    limited : whether a stored value can lie outside the limits at all.
    """

    signals: tuple[int, ...]
    samples: int
    place: int
    gain: Floats
    offset: Floats
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
            and header.signals[index - 1].samples_per_record == samples
        ):
            runs[-1].append(index)
        else:
            runs.append([index])
    return tuple(_group(header, run) for run in runs)


def _group(header: Header, run: list[int]) -> Group:
    signals = [header.signals[i] for i in run]
    top = 2.0 ** (8 * header.sample_bytes - 1)

    def column(values: list[float]) -> Floats:
        return np.array(values, np.float64).reshape(-1, 1, 1)

    limits = tuple((ceil(s.digital_min), floor(s.digital_max)) for s in signals)
    return Group(
        signals=tuple(run),
        samples=signals[0].samples_per_record,
        place=header.places[run[0]],
        gain=column([s.gain for s in signals]),
        offset=column([s.offset for s in signals]),
        limits=limits,
        limited=any(low > -top or high < top - 1 for low, high in limits),
    )


class Decoder:
    """Turns the bytes of a block into physical values of one group."""

    def __init__(self, header: Header, group: Group, per_block: int) -> None:
        self.group = group
        self._record_bytes = header.record_bytes
        self._width = header.sample_bytes
        self._wide: NDArray[np.int32] | None = None
        if self._width == 3:
            self._wide = np.empty(len(group.signals) * per_block * group.samples, np.int32)

    def digital(self, raw: bytearray, count: int) -> NDArray[Any]:
        """Return stored values, shape (signals, records, samples); a view of reused memory."""
        group, width = self.group, self._width
        shape = (count, len(group.signals), group.samples)
        strides = (self._record_bytes, width * group.samples, width)
        # 24 bits: a little-endian 32-bit view that starts one byte early; the shift drops that
        # byte and extends the sign.
        start = group.place + (1 if width == 2 else 0)
        kind = "<i2" if width == 2 else "<i4"
        stored: NDArray[Any] = np.ndarray(shape, kind, raw, start, strides).transpose(1, 0, 2)
        if self._wide is None:
            return stored
        wide = self._wide[: stored.size].reshape(stored.shape)
        np.right_shift(stored, 8, out=wide)
        return wide

    def physical(self, digital: NDArray[Any], out: Floats) -> None:
        """Write ``gain * digital + offset``, in the signals' units, to ``out`` of that shape."""
        np.multiply(digital, self.group.gain, out=out)
        out += self.group.offset

    def outside(self, digital: NDArray[Any], first: int, stop: int) -> dict[int, int]:
        """Count stored values outside the digital limits, by signal, where there are any.

        Only samples first to stop of the block's are counted.
        """
        group = self.group
        # The two extremes cost a third of decoding, an exact count as much as decoding.
        low, high = digital.min(axis=(1, 2)), digital.max(axis=(1, 2))
        found = {}
        for i, index in enumerate(group.signals):
            lowest, highest = group.limits[i]
            if low[i] < lowest or high[i] > highest:
                asked = digital[i].reshape(-1)[max(0, first) : max(0, stop)]
                count = np.count_nonzero((asked < lowest) | (asked > highest))
                if count:
                    found[index] = int(count)
        return found
