"""One pass over the annotation signals: the record clock, the pieces and the annotations."""

from dataclasses import dataclass
from fractions import Fraction

from waveassay.contract import Interval
from waveassay.recording.blocks import Records
from waveassay.recording.clock import ClockError, ClockFindings, RecordClock
from waveassay.recording.errors import recording_error
from waveassay.recording.facts import Annotation
from waveassay.recording.tal import Tal, decode, parse_tal, seconds, split_tals

MAX_ANNOTATIONS = 1_000_000  # hundreds of MB; more come from a damaged file


@dataclass(frozen=True)
class Scan:
    """What the pass found.

    Attributes
    ----------
    first_s : the first record's start after the header's (sub-second start).
    pieces : on the clock that starts with the first sample; none where there are no signals.
    """

    first_s: Fraction
    pieces: tuple[Interval, ...]
    annotations: tuple[Annotation, ...]
    warnings: tuple[str, ...]


def scan(records: Records) -> Scan:
    """Scan a recording, in memory bounded but for the annotations and pieces themselves.

    Raises
    ------
    RecordingError
        When a record does not state its start, records overlap in a discontinuous file, or there
        are more annotations or gaps than can be believed.
    """
    header = records.header
    if not header.annotated:
        missing = (
            (f"the file says {header.format} but has no annotation signal; read as continuous",)
            if header.plus
            else ()
        )
        return Scan(Fraction(0), _pieces(records, ((0, 0),)), (), missing)
    decimals: int | None = 0
    while decimals is not None:
        one_pass = _Pass(records, decimals)
        decimals = one_pass.run()
    return one_pass.result()


class _Pass:
    """A pass that takes onsets to be written with so many decimals at the most."""

    def __init__(self, records: Records, decimals: int) -> None:
        header = records.header
        self._records = records
        self._clock: RecordClock | None = None
        if header.ordinary:
            most = max(header.signals[i].samples_per_record for i in header.ordinary)
            self._clock = RecordClock(
                header.record_s, most / header.record_s, decimals, not header.discontinuous
            )
        self._first: int | None = None
        self._found: list[tuple[int, int | None, str]] = []
        self._unreadable: list[int] = []
        self._not_utf8: list[int] = []

    def run(self) -> int | None:
        """Take in all records; or return with how many decimals to begin anew."""
        for record, parts in self._records.annotation_parts():
            for number, part in enumerate(parts):
                for place, raw in enumerate(split_tals(part)):
                    keeps_time = number == 0 and place == 0
                    if not raw and not keeps_time:
                        continue
                    tal = parse_tal(raw)
                    if keeps_time:
                        tal = self._time_keeping(record, raw, tal)
                        clock = self._clock
                        if clock and not clock.resolved and tal.decimals > clock.decimals:
                            return tal.decimals
                        self._add_to_clock(record, tal.onset)
                    self._take(record, tal)
        return None

    def result(self) -> Scan:
        """Return what was found, on the clock that starts with the first sample."""
        first = self._first or 0
        self._found.sort(key=lambda item: item[0])
        annotations = tuple(
            Annotation(seconds(onset - first), None if length is None else seconds(length), text)
            for onset, length, text in self._found
        )
        pieces: tuple[Interval, ...] = ()
        warnings = self._annotation_warnings()
        if self._clock is not None:
            findings = self._clock.findings()
            pieces = _pieces(self._records, findings.pieces)
            warnings += self._clock_warnings(findings)
        return Scan(seconds(first), pieces, annotations, tuple(warnings))

    def _time_keeping(self, record: int, raw: bytes, tal: Tal | None) -> Tal:
        if tal is not None and tal.texts[0] == b"":
            return tal
        found = f"{raw[:24]!r}" if raw else "nothing"
        raise recording_error(
            self._records.file.path,
            f"record {record + 1} of {self._records.count} does not state when it starts: its "
            "first annotation signal begins with "
            f"{found} instead of a time such as '+{record}' with an empty text",
        )

    def _add_to_clock(self, record: int, onset: int) -> None:
        if self._first is None:
            self._first = onset
        if self._clock is None:
            return
        try:
            self._clock.add(onset)
        except ClockError as error:
            raise recording_error(self._records.file.path, str(error)) from None

    def _take(self, record: int, tal: Tal | None) -> None:
        if tal is None:
            self._unreadable.append(record)
        else:
            for text in filter(None, tal.texts):
                decoded, is_utf8 = decode(text)
                if not is_utf8:
                    self._not_utf8.append(record)
                self._found.append((tal.onset, tal.duration, decoded))
        if len(self._found) + len(self._unreadable) > MAX_ANNOTATIONS:
            raise recording_error(
                self._records.file.path,
                f"there are more than {MAX_ANNOTATIONS} annotations by record {record + 1} of "
                f"{self._records.count}",
            )

    def _annotation_warnings(self) -> list[str]:
        warnings = []
        if self._unreadable:
            warnings.append(
                f"{len(self._unreadable)} malformed annotations are left out, the first in record "
                f"{self._unreadable[0] + 1}"
            )
        if self._not_utf8:
            warnings.append(
                f"{len(self._not_utf8)} annotation texts are not UTF-8 and are read as Latin-1, "
                f"the first in record {self._not_utf8[0] + 1}"
            )
        return warnings

    def _clock_warnings(self, findings: ClockFindings) -> list[str]:
        header = self._records.header
        warnings = []
        gaps = len(findings.pieces) - 1
        if gaps and not header.discontinuous:
            warnings.append(
                f"the record clock jumps {gaps} times, first before record "
                f"{findings.pieces[1][0] + 1}, though the file says that it is continuous "
                f"({header.format}); the jumps are taken as gaps"
            )
        if findings.backward:
            warnings.append(
                f"{findings.backward} records start before the one before them ends, first record "
                f"{findings.first_backward + 1}; they are read as following each other"
            )
        if findings.drifts:
            warnings.append(
                "the record clock is off from the stated record duration of "
                f"{float(header.record_s):.9g} s by up to {float(findings.drift_s):.6g} s; samples "
                "are timed by the stated duration from the start of each gap-free piece"
            )
        return warnings


def _pieces(records: Records, starts: tuple[tuple[int, int], ...]) -> tuple[Interval, ...]:
    if not records.header.ordinary:
        return ()
    ends = [first for first, _ in starts[1:]] + [records.count]
    record_s = records.header.record_s
    return tuple(
        Interval(seconds(start), seconds(start) + (end - first) * record_s)
        for (first, start), end in zip(starts, ends, strict=True)
    )
