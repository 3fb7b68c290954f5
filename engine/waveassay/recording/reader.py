"""Opening a recording and reading its samples."""

from collections.abc import Iterator, Sequence
from datetime import datetime, timedelta
from fractions import Fraction
from itertools import accumulate
from math import ceil
from os import PathLike, fspath
from types import TracebackType
from typing import Literal, Self

import numpy as np

from waveassay.contract import Floats
from waveassay.recording.blocks import (
    BLOCK_BYTES,
    Decoder,
    Records,
    groups_of,
)
from waveassay.recording.digital import Digital, StoredArray, outside
from waveassay.recording.errors import EXPORT_AGAIN, recording_error
from waveassay.recording.facts import Facts, SignalFacts
from waveassay.recording.file import RegularFile
from waveassay.recording.header import Header, read_header
from waveassay.recording.scan import scan

Truncated = Literal["refuse", "read"]


class Recording:
    """An open recording; use it in a ``with`` statement, or close it.

    Attributes
    ----------
    facts : what the recording holds.
    out_of_range : signal index -> how many samples outside its digital limits `read` has returned
        since the recording was opened; a sample read twice counts twice. Such samples are
        returned as they are. Only signals that have some are listed.
    """

    def __init__(self, records: Records, facts: Facts) -> None:
        self.facts = facts
        self.out_of_range: dict[int, int] = {}
        self._records = records
        record_s = records.header.record_s
        counts = [int(piece.length_s / record_s) for piece in facts.pieces]
        self._first_record = [0, *accumulate(counts)]

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._records.file.close()

    def read(
        self, signals: Sequence[int], piece: int, start_s: Fraction, stop_s: Fraction
    ) -> list[Floats]:
        """Return samples of one piece, in each signal's own unit, as float64.

        Sample ``i`` of a piece lies at ``piece.start_s + i / rate_hz``. Those at or after
        ``start_s`` and before ``stop_s`` are returned, as many as the piece has.

        Parameters
        ----------
        signals : indices as in `SignalFacts`, in any order.
        piece : index in ``facts.pieces``.

        Returns
        -------
        list of arrays, shape (samples,) each, in the order asked for.

        Raises
        ------
        RecordingError
            When the file became shorter, or cannot be read.

        Notes
        -----
        See `read_digital`, which holds less memory where signals are taken one by one.
        """
        digital = self.read_digital(signals, piece, start_s, stop_s)
        # One array for all: of a large one, the system gives large pages.
        made = np.empty(sum(stored.size for stored in digital.stored))
        ends = accumulate(stored.size for stored in digital.stored)
        parts: list[Floats] = list(np.split(made, list(ends)[:-1]))
        for place, part in enumerate(parts):
            digital.physical(place, part)
        return parts[: len(digital)]

    def read_digital(
        self, signals: Sequence[int], piece: int, start_s: Fraction, stop_s: Fraction
    ) -> Digital:
        """Return the same samples as they are stored, each made physical when it is asked for.

        Parameters and errors as for `read`.

        Notes
        -----
        One sequential pass over the records needed, in blocks of whole records of about 1 MiB;
        block size changes no bit of the result.
        """
        self._require_samples(signals)
        whole = self.facts.pieces[piece]
        header = self._records.header
        spans: dict[int, tuple[int, int]] = {}
        for group in groups_of(header, signals):
            rate_hz = group.samples / header.record_s
            size = int(whole.length_s * rate_hz)
            first = min(max(0, ceil((start_s - whole.start_s) * rate_hz)), size)
            stop = min(max(first, ceil((stop_s - whole.start_s) * rate_hz)), size)
            spans.update(dict.fromkeys(group.signals, (first, stop)))
        found = self._read_spans(spans, self._first_record[piece])
        return Digital(
            tuple(found[index] for index in signals),
            tuple((header.signals[i].gain, header.signals[i].offset) for i in signals),
        )

    def blocks(
        self, signals: Sequence[int] | None = None
    ) -> Iterator[tuple[int, list[tuple[tuple[int, ...], Floats]]]]:
        """Yield all records in blocks, gaps or not, in constant memory.

        Yields
        ------
        (first record, [(signal indices, samples of shape (signals, samples)), ...]). The arrays
        are reused by the next block: copy what is to be kept.
        """
        records = self._records
        wanted = records.header.ordinary if signals is None else signals
        self._require_samples(wanted)
        per_block = min(records.per_block, records.count)
        parts = []
        for group in groups_of(records.header, wanted):
            space = np.empty(len(group.signals) * per_block * group.samples)
            scales = np.array(group.scales).T.reshape(2, -1, 1, 1)
            parts.append((Decoder(records.header, group), scales, space))
        for first, count, raw in records.raw_blocks(0, records.count):
            block: list[tuple[tuple[int, ...], Floats]] = []
            for decoder, (gains, offsets), space in parts:
                stored = decoder.stored(raw, count)
                out = space[: stored.size].reshape(stored.shape)
                np.multiply(stored, gains, out=out)
                out += offsets
                block.append((decoder.group.signals, out.reshape(len(stored), -1)))
            yield first, block

    def _require_samples(self, signals: Sequence[int]) -> None:
        wrong = set(signals).difference(self._records.header.ordinary)
        if wrong:
            raise IndexError(f"{self.facts.path}: no signal with samples has index {min(wrong)}")

    def _read_spans(
        self, spans: dict[int, tuple[int, int]], piece_record: int
    ) -> dict[int, StoredArray]:
        """Read samples first to stop of each signal, counted from the start of a piece."""
        records = self._records
        groups = groups_of(
            records.header, [i for i, (first, stop) in spans.items() if stop > first]
        )
        found: dict[int, StoredArray] = {i: np.empty(0, np.int16) for i in spans}
        if not groups:
            return found
        first_record = min(spans[g.signals[0]][0] // g.samples for g in groups)
        stop_record = max(-(-spans[g.signals[0]][1] // g.samples) for g in groups)
        total = stop_record - first_record
        # Whole records are put straight to their place; what was not asked for is cut off as a
        # view.
        decoders = [Decoder(records.header, group) for group in groups]
        targets = [
            np.empty((len(d.group.signals), total, d.group.samples), d.kind) for d in decoders
        ]
        outer = piece_record + first_record
        for record, count, raw in records.raw_blocks(outer, piece_record + stop_record):
            at = record - outer
            for decoder, rows in zip(decoders, targets, strict=True):
                decoder.stored(raw, count, rows[:, at : at + count])
        for group, rows in zip(groups, targets, strict=True):
            first, stop = spans[group.signals[0]]
            base = first_record * group.samples
            for index, row, limits in zip(group.signals, rows, group.limits, strict=True):
                found[index] = row.reshape(-1)[first - base : stop - base]
                more = outside(found[index], limits) if group.limited else 0
                if more:
                    self.out_of_range[index] = self.out_of_range.get(index, 0) + more
        return found


def open_recording(
    path: str | PathLike[str],
    *,
    truncated: Truncated = "refuse",
    facts: Facts | None = None,
    block_bytes: int = BLOCK_BYTES,
) -> Recording:
    """Open an EDF, EDF+C, EDF+D, BDF or BDF+ file.

    The header is read and checked; in a plus file the annotation signals are read through, for the
    record clock and the annotations. No samples are decoded.

    Parameters
    ----------
    truncated : what to do with a file that holds fewer records than its header states:
        ``"refuse"`` it, or ``"read"`` the whole records that are there, with a warning.
    facts : what this function found earlier in the same file, which spares reading it through.
    block_bytes : about how much is read at a time; changes no result.

    Raises
    ------
    RecordingError
        When the file is missing, unreadable or not a regular file, or its content cannot be
        trusted. The text names the file, what is wrong and where, and what to do.
    """
    file = RegularFile(fspath(path))
    try:
        header = read_header(file)
        count, warnings = _count_records(file, header, truncated)
        records = Records(file, header, count, block_bytes)
        if facts is None:
            facts = _facts(records, warnings)
        elif facts.size_bytes != file.size_bytes or facts.signals != _signals(header, count):
            raise recording_error(
                file.path,
                "the file has changed since it was examined",
                "Run again, so that it is examined afresh",
            )
        return Recording(records, facts)
    except BaseException:
        file.close()
        raise


def read_facts(path: str | PathLike[str], *, truncated: Truncated = "refuse") -> Facts:
    """Return what a recording holds; parameters and errors as in `open_recording`."""
    with open_recording(path, truncated=truncated) as recording:
        return recording.facts


def _count_records(
    file: RegularFile, header: Header, truncated: Truncated
) -> tuple[int, list[str]]:
    stated = header.stated_records
    whole, rest = divmod(file.size_bytes - header.header_bytes, header.record_bytes)
    warnings = []
    if stated < -1:
        raise recording_error(file.path, f"the header states {stated} records")
    if stated == -1:
        warnings.append(
            f"the header states -1 records, as while recording; the {whole} whole records that "
            "are there are read"
        )
    count = whole if stated == -1 else stated
    if count > whole:
        if truncated == "refuse":
            raise recording_error(
                file.path,
                f"the header states {stated} records of {header.record_bytes} bytes, but the file "
                f"ends after {whole} whole records and {rest} bytes",
                "Copy it again from its original, or have the recipe read what is there "
                "(load: {truncated: read})",
            )
        warnings.append(
            f"the header states {stated} records, but the file ends after {whole}; what is there "
            "is read"
        )
        count = whole
    if count < 1:
        raise recording_error(
            file.path,
            f"the file holds no records ({stated} stated, {whole} there)",
            EXPORT_AGAIN,
        )
    trailing = (whole - count) * header.record_bytes + rest
    if trailing:
        warnings.append(f"{trailing} bytes after the last record are not read")
    return count, warnings


def _facts(records: Records, warnings: list[str]) -> Facts:
    header = records.header
    found = scan(records)
    start = _start(header, found.first_s)
    if start is None and header.start is not None:
        warnings = [
            *warnings,
            "the first record starts beyond the calendar; no time of day is known",
        ]
    return Facts(
        path=records.file.path,
        format=header.format,
        size_bytes=records.file.size_bytes,
        start=start,
        duration_s=found.pieces[-1].stop_s if found.pieces else Fraction(0),
        signals=_signals(header, records.count),
        pieces=found.pieces,
        annotations=found.annotations,
        warnings=(*header.warnings, *warnings, *found.warnings),
    )


def _start(header: Header, first_s: Fraction) -> datetime | None:
    if header.start is None:
        return None
    try:
        return header.start + timedelta(microseconds=round(first_s * 1_000_000))
    except OverflowError:
        return None


def _signals(header: Header, count: int) -> tuple[SignalFacts, ...]:
    return tuple(
        SignalFacts(
            index=index,
            label=signal.label,
            unit=signal.unit,
            rate_hz=signal.samples_per_record / header.record_s,
            samples=signal.samples_per_record * count,
            physical_min=signal.physical_min,
            physical_max=signal.physical_max,
            digital_min=signal.digital_min,
            digital_max=signal.digital_max,
            transducer=signal.transducer,
            prefilter=signal.prefilter,
        )
        for index, signal in enumerate(header.signals)
        if not signal.is_annotations
    )
