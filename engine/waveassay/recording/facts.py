"""What a recording holds, known without decoding its samples."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from typing import Any

from waveassay.contract import Interval
from waveassay.recording.errors import recording_error


@dataclass(frozen=True)
class SignalFacts:
    """One signal as the header describes it.

    Attributes
    ----------
    index : its place among all signals of the file, from 0; annotation signals count too.
    unit : as written; empty where the signal is not calibrated.
    rate_hz : samples per record over the record's duration, both exactly as the header states.
    samples : in the whole file.
    physical_min, physical_max : in ``unit``; the first may be the greater (reversed polarity).
    digital_min, digital_max : the stored values that they stand for.
    """

    index: int
    label: str
    unit: str
    rate_hz: Fraction
    samples: int
    physical_min: float
    physical_max: float
    digital_min: float
    digital_max: float
    transducer: str
    prefilter: str


@dataclass(frozen=True, slots=True)
class Annotation:
    """A timed text. ``onset_s`` counts from the first sample and may lie before it."""

    onset_s: Fraction
    duration_s: Fraction | None
    text: str


@dataclass(frozen=True)
class Facts:
    """What a recording holds.

    Attributes
    ----------
    format : EDF, EDF+C, EDF+D, BDF, BDF+C or BDF+D.
    start : date and time of the first sample, to the microsecond; None where the header does not
        give a possible one.
    duration_s : from the first sample to just after the last one, gaps included.
    signals : without those that carry annotations. The Status signal of a BDF file, whose values
        are bit flags, is listed like any other.
    pieces : gap-free parts in order of time, none overlapping; the first starts at 0.
    annotations : sorted by onset, those of one onset in the file's order, duplicates kept.
    warnings : what is odd but can be read.
    """

    path: str
    format: str
    size_bytes: int
    start: datetime | None
    duration_s: Fraction
    signals: tuple[SignalFacts, ...]
    pieces: tuple[Interval, ...]
    annotations: tuple[Annotation, ...]
    warnings: tuple[str, ...]

    def signal_named(self, label: str) -> SignalFacts:
        """Return the one signal with this label, written as in the file.

        Raises
        ------
        RecordingError
            When the label is empty, or no signal or more than one has it.
        """
        if not label.strip():
            raise recording_error(
                self.path,
                "a signal was asked for by an empty label, which says of none which one it is",
                "Ask for it by a label that the file has, or by its number",
            )
        found = [signal for signal in self.signals if signal.label == label]
        if not found:
            labels = ", ".join(f"'{signal.label}'" for signal in self.signals) or "none"
            raise recording_error(
                self.path,
                f"no signal has the label '{label}'",
                f"Ask for one of those in the file: {labels}",
            )
        if len(found) > 1:
            numbers = ", ".join(str(signal.index + 1) for signal in found)
            raise recording_error(
                self.path,
                f"{len(found)} signals have the label '{label}' (numbers {numbers})",
                "Give them different labels, or ask for a signal by its number",
            )
        return found[0]

    def to_json(self) -> dict[str, Any]:
        """Return plain values for JSON, exact: fractions as text ``p/q``."""
        return {
            "path": self.path,
            "format": self.format,
            "size_bytes": self.size_bytes,
            "start": None if self.start is None else self.start.isoformat(),
            "duration_s": _text(self.duration_s),
            "signals": [{**vars(s), "rate_hz": _text(s.rate_hz)} for s in self.signals],
            "pieces": [[_text(p.start_s), _text(p.stop_s)] for p in self.pieces],
            "annotations": [
                [_text(a.onset_s), None if a.duration_s is None else _text(a.duration_s), a.text]
                for a in self.annotations
            ],
            "warnings": list(self.warnings),
        }

    @classmethod
    def from_json(cls, values: Mapping[str, Any]) -> "Facts":
        """Return the facts that `to_json` wrote."""
        start = values["start"]
        return cls(
            path=values["path"],
            format=values["format"],
            size_bytes=values["size_bytes"],
            start=None if start is None else datetime.fromisoformat(start),
            duration_s=Fraction(values["duration_s"]),
            signals=tuple(
                SignalFacts(**{**signal, "rate_hz": Fraction(signal["rate_hz"])})
                for signal in values["signals"]
            ),
            pieces=tuple(
                Interval(Fraction(start_s), Fraction(stop_s))
                for start_s, stop_s in values["pieces"]
            ),
            annotations=tuple(
                Annotation(Fraction(onset), None if length is None else Fraction(length), text)
                for onset, length, text in values["annotations"]
            ),
            warnings=tuple(values["warnings"]),
        )


def _text(value: Fraction) -> str:
    return f"{value.numerator}/{value.denominator}"
