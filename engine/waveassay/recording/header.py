"""The header of EDF, EDF+, BDF and BDF+: fields of fixed width, each checked.

Sources: Kemp et al. 1992, Electroencephalogr Clin Neurophysiol 82:391-393 (EDF); Kemp and Olivan
2003, Clin Neurophysiol 114:1755-1761 (EDF+). BDF is EDF with 24-bit samples and its own version
field.
"""

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from functools import cached_property
from itertools import accumulate
from typing import Literal

from waveassay.recording.errors import RecordingError, recording_error
from waveassay.recording.file import RegularFile
from waveassay.recording.identity import identity_warnings, start_of

#: Fields of the first 256 bytes, in order, with their widths in bytes.
MAIN_FIELDS = (
    ("version", 8),
    ("patient", 80),
    ("recording", 80),
    ("start date", 8),
    ("start time", 8),
    ("number of header bytes", 8),
    ("reserved", 44),
    ("number of records", 8),
    ("record duration", 8),
    ("number of signals", 4),
)
#: Fields of the 256 bytes a signal; each field is there for all signals before the next field.
SIGNAL_FIELDS = (
    ("label", 16),
    ("transducer", 80),
    ("unit", 8),
    ("physical minimum", 8),
    ("physical maximum", 8),
    ("digital minimum", 8),
    ("digital maximum", 8),
    ("prefilter", 80),
    ("samples per record", 8),
    ("reserved", 32),
)
MAX_RECORD_BYTES = 64 << 20  # beyond any device's, and small enough to hold one in memory
# A rate must stay a number that can be printed and computed with.
_RECORD_S_RANGE = (1e-6, 1e8)

_VERSIONS: dict[bytes, Literal["EDF", "BDF"]] = {b"0       ": "EDF", b"\xffBIOSEMI": "BDF"}
_ANNOTATION_LABELS = ("EDF Annotations", "BDF Annotations")
_ASCII = re.compile(rb"[ -~]*")
_INTEGER = re.compile(r"[+-]?\d+\Z", re.ASCII)
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\Z", re.ASCII)


@dataclass(frozen=True)
class HeaderSignal:
    """One signal's 256 bytes. The four limits of an annotation signal mean nothing and are 0."""

    label: str
    transducer: str
    unit: str
    physical_min: float
    physical_max: float
    digital_min: float
    digital_max: float
    prefilter: str
    samples_per_record: int
    is_annotations: bool

    @property
    def gain(self) -> float:
        """Physical units per digital step; negative where the polarity is reversed."""
        return (self.physical_max - self.physical_min) / (self.digital_max - self.digital_min)

    @property
    def offset(self) -> float:
        """Physical value of digital 0: ``physical = gain * digital + offset``."""
        return self.physical_min - self.gain * self.digital_min


@dataclass(frozen=True)
class Header:
    """A checked header.

    Attributes
    ----------
    stated_records : as written; -1 where the recorder was never stopped.
    record_s : exactly the decimal number that the header states.
    start : of the header's clock, to the second; the first sample may come later (EDF+).
    """

    family: Literal["EDF", "BDF"]
    plus: bool
    discontinuous: bool
    header_bytes: int
    stated_records: int
    record_s: Fraction
    start: datetime | None
    signals: tuple[HeaderSignal, ...]
    warnings: tuple[str, ...]

    @property
    def format(self) -> str:
        """EDF, EDF+C, EDF+D, BDF, BDF+C or BDF+D."""
        kind = ("+D" if self.discontinuous else "+C") if self.plus else ""
        return f"{self.family}{kind}"

    @property
    def sample_bytes(self) -> int:
        """Width of a stored sample."""
        return 2 if self.family == "EDF" else 3

    @cached_property
    def places(self) -> tuple[int, ...]:
        """Where in a record each signal's samples start, bytes; last the record's size."""
        sizes = (s.samples_per_record * self.sample_bytes for s in self.signals)
        return (0, *accumulate(sizes))

    @property
    def record_bytes(self) -> int:
        """Size of one record."""
        return self.places[-1]

    @cached_property
    def ordinary(self) -> tuple[int, ...]:
        """Indices of the signals that hold samples."""
        return tuple(i for i, s in enumerate(self.signals) if not s.is_annotations)

    @cached_property
    def annotated(self) -> tuple[int, ...]:
        """Indices of the signals that hold annotations."""
        return tuple(i for i, s in enumerate(self.signals) if s.is_annotations)


def read_header(file: RegularFile) -> Header:
    """Read and check the header.

    Raises
    ------
    RecordingError
        When the file is no EDF or BDF file, or a field cannot be what it says.
    """
    size = file.size_bytes
    if size < 256:
        raise recording_error(
            file.path,
            f"the file holds {size} bytes, fewer than the 256 that a header needs",
            "Check that it is a recording, and that it was copied completely",
        )
    main = _split(file.read(0, 256, "the header"), MAIN_FIELDS, 1)
    family = _VERSIONS.get(main["version"][0])
    if family is None:
        raise recording_error(
            file.path,
            f"this is neither EDF nor BDF: the version field holds {main['version'][0]!r}",
            "Convert the recording to EDF or BDF",
        )
    fields = _Fields(file.path)
    count = fields.integer(main["number of signals"][0], "the number of signals")
    header_bytes = fields.integer(main["number of header bytes"][0], "the number of header bytes")
    if count < 1 or header_bytes != 256 * (count + 1):
        raise recording_error(
            file.path,
            f"the header states {count} signals and {header_bytes} header bytes, which do not "
            f"agree: {count} signals need {256 * (count + 1)}"
            if count >= 1
            else f"the header states {count} signals; at least 1 is needed",
        )
    if size < header_bytes:
        raise recording_error(
            file.path,
            f"the file ends inside the header: it holds {size} bytes, the header needs "
            f"{header_bytes}",
            "Copy it again from its original; this copy is incomplete",
        )
    reserved = main["reserved"][0]
    plus = reserved[:4] in (b"EDF+", b"BDF+")
    discontinuous = plus and reserved[4:5] == b"D"
    if plus and reserved[4:5] not in (b"C", b"D"):
        fields.warnings.append(
            "the header says EDF+ or BDF+ but neither C (continuous) nor D (discontinuous); "
            "read as continuous"
        )
    stated = fields.integer(main["number of records"][0], "the number of records")
    record_s = fields.number(main["record duration"][0], "the record duration")
    patient = fields.text(main["patient"][0], "patient")
    recording = fields.text(main["recording"][0], "recording")
    start, start_warnings = start_of(main["start date"][0], main["start time"][0], recording)
    own = _split(file.read(256, header_bytes - 256, "the header"), SIGNAL_FIELDS, count)
    signals = tuple(_signal(fields, own, i, plus) for i in range(count))
    if plus:
        fields.warnings += identity_warnings(patient, recording)
    _warn_of_units(signals, fields.warnings)
    low_s, high_s = _RECORD_S_RANGE
    if not all(s.is_annotations for s in signals) and not low_s <= record_s <= high_s:
        raise recording_error(
            file.path,
            f"a record lasts {record_s:g} s by the header; "
            + ("it must be above 0" if record_s <= 0 else f"{low_s:g} to {high_s:g} s is possible"),
        )
    header = Header(
        family=family,
        plus=plus,
        discontinuous=discontinuous,
        header_bytes=header_bytes,
        stated_records=stated,
        # Only now: a text such as 1e-9999999 is 0 as a float and would be huge as a fraction.
        record_s=Fraction(_stripped(main["record duration"][0])) if record_s > 0 else Fraction(0),
        start=start,
        signals=signals,
        warnings=(*fields.odd_text(), *start_warnings, *fields.warnings),
    )
    if header.record_bytes > MAX_RECORD_BYTES:
        raise recording_error(
            file.path,
            f"one record would hold {header.record_bytes} bytes; at most {MAX_RECORD_BYTES} "
            "(64 MiB) are read",
            "Export it again with shorter records, or check that the file is a recording",
        )
    if discontinuous and not header.annotated:
        raise recording_error(
            file.path,
            f"the file is discontinuous ({header.format}) but has no signal "
            f"'{family} Annotations', so nothing says when its records were taken",
        )
    return header


def signal_name(index: int, label: str) -> str:
    """Return how messages name a signal: its number from 1, and its label."""
    return f"signal {index + 1} ('{label}')"


def _split(raw: bytes, fields: tuple[tuple[str, int], ...], count: int) -> dict[str, list[bytes]]:
    parts: dict[str, list[bytes]] = {}
    at = 0
    for name, width in fields:
        parts[name] = [raw[at + i * width : at + (i + 1) * width] for i in range(count)]
        at += count * width
    return parts


def _stripped(raw: bytes) -> str:
    return raw.decode("latin-1").strip(" \0")


class _Fields:
    """Reads single fields and remembers what is odd about them."""

    def __init__(self, path: str) -> None:
        self.path = path
        self.warnings: list[str] = []
        self._odd: list[str] = []

    def text(self, raw: bytes, what: str) -> str:
        """Return text without its padding; bytes beyond ASCII as UTF-8, else as Latin-1."""
        if _ASCII.fullmatch(raw):
            return raw.decode("ascii").strip()
        self._odd.append(what)
        try:
            text = raw.decode("utf-8")
        except UnicodeDecodeError:
            text = raw.decode("latin-1")
        return "".join(c if c.isprintable() else " " for c in text).strip()

    def integer(self, raw: bytes, what: str) -> int:
        text = self._plain(raw, what)
        if not _INTEGER.match(text):
            raise self._refused(raw, what, "a whole number")
        return int(text)

    def number(self, raw: bytes, what: str) -> float:
        text = self._plain(raw, what)
        if not _NUMBER.match(text):
            raise self._refused(raw, what, "a number")
        value = float(text)
        if not math.isfinite(value):
            raise self._refused(raw, what, "a finite number")
        return value

    def odd_text(self) -> list[str]:
        if not self._odd:
            return []
        return [f"header text holds characters outside plain ASCII, or NUL: {_some(self._odd)}"]

    def _plain(self, raw: bytes, what: str) -> str:
        if b"\0" in raw:
            self._odd.append(what)
        return _stripped(raw)

    def _refused(self, raw: bytes, what: str, wanted: str) -> RecordingError:
        return recording_error(
            self.path, f"{what} is {_stripped(raw)!r} in the header, not {wanted}"
        )


def _signal(fields: _Fields, own: dict[str, list[bytes]], index: int, plus: bool) -> HeaderSignal:
    label = fields.text(own["label"][index], f"label of signal {index + 1}")
    name = signal_name(index, label)
    is_annotations = plus and label in _ANNOTATION_LABELS

    def each(read: Callable[[bytes, str], float], what: str) -> float:
        return 0.0 if is_annotations else read(own[what][index], f"the {what} of {name}")

    signal = HeaderSignal(
        label=label,
        transducer=fields.text(own["transducer"][index], f"transducer of {name}"),
        unit=fields.text(own["unit"][index], f"unit of {name}"),
        physical_min=each(fields.number, "physical minimum"),
        physical_max=each(fields.number, "physical maximum"),
        digital_min=each(fields.number, "digital minimum"),
        digital_max=each(fields.number, "digital maximum"),
        prefilter=fields.text(own["prefilter"][index], f"prefilter of {name}"),
        samples_per_record=fields.integer(
            own["samples per record"][index], f"the number of samples per record of {name}"
        ),
        is_annotations=is_annotations,
    )
    if signal.samples_per_record < 1:
        raise recording_error(
            fields.path,
            f"{name} has {signal.samples_per_record} samples per record; at least 1 is needed",
        )
    if not is_annotations:
        _check_scale(fields.path, name, signal)
    return signal


def _check_scale(path: str, name: str, signal: HeaderSignal) -> None:
    if signal.digital_min >= signal.digital_max:
        raise recording_error(
            path,
            f"the digital minimum of {name}, {signal.digital_min:g}, is not below its digital "
            f"maximum, {signal.digital_max:g}",
        )
    if signal.physical_min == signal.physical_max:
        raise recording_error(
            path,
            f"the physical minimum and maximum of {name} are both {signal.physical_min:g}, so its "
            "samples have no scale",
        )
    largest = abs(signal.gain) * 2.0**24 + abs(signal.offset)
    if signal.gain == 0 or not math.isfinite(largest):
        raise recording_error(
            path,
            f"the physical range of {name}, {signal.physical_min:g} to {signal.physical_max:g}, "
            f"over the digital range {signal.digital_min:g} to {signal.digital_max:g} is beyond "
            "what can be computed with",
        )


def _warn_of_units(signals: tuple[HeaderSignal, ...], warnings: list[str]) -> None:
    bare = [
        signal_name(i, s.label)
        for i, s in enumerate(signals)
        if not s.unit and not s.is_annotations
    ]
    if bare:
        warnings.append(f"not calibrated, as no unit is given: {_some(bare)}")


def _some(names: list[str], shown: int = 5) -> str:
    more = f" and {len(names) - shown} more" if len(names) > shown else ""
    return ", ".join(names[:shown]) + more
