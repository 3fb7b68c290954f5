"""Start date and identity fields of a header. What identifies a person is never repeated."""

import re
from datetime import datetime

_DATE = re.compile(rb"(\d\d)\.(\d\d)\.(\d\d|yy|YY)\Z")
_TIME = re.compile(rb"(\d\d)\.(\d\d)\.(\d\d)\Z")
_MONTHS = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_LONG_DATE = rf"\d\d-(?:{'|'.join(_MONTHS)})-\d{{4}}"
_PATIENT = re.compile(rf"\S+ [MFX] (?:X|{_LONG_DATE}) \S+(?: .*)?\Z", re.ASCII)
_RECORDING = re.compile(rf"Startdate (?:X|({_LONG_DATE})) \S+ \S+ \S+(?: .*)?\Z", re.ASCII)


def start_of(date: bytes, time: bytes, recording: str) -> tuple[datetime | None, list[str]]:
    """Return the header's start, to the second, and what is odd about it.

    Two-digit years from 85 are of the last century, the others of this one. From 2085 on the year
    is written ``yy`` and stands in the recording field (EDF+).
    """
    day, clock = _DATE.match(date), _TIME.match(time)
    warnings = []
    if day is not None and day[3].lower() == b"yy":
        long = _RECORDING.match(recording)
        if long is None or long[1] is None:
            return None, ["the year of the start date is 'yy', and no full date is given"]
        warnings = ["the year of the start date is 'yy'; taken from the recording field"]
        number, month, year = long[1].split("-")
        date_parts = (int(year), _MONTHS.index(month) + 1, int(number))
    elif day is not None:
        short = int(day[3])
        date_parts = (short + (1900 if short >= 85 else 2000), int(day[2]), int(day[1]))
    if day is not None and clock is not None:
        try:
            hour, minute, second = (int(part) for part in clock.groups())
            return datetime(*date_parts, hour, minute, second), warnings
        except ValueError:
            pass
    return None, [
        f"the start {_shown(date)} {_shown(time)} is no possible date and time (dd.mm.yy "
        "hh.mm.ss); times of day are unknown"
    ]


def identity_warnings(patient: str, recording: str) -> list[str]:
    """Return warnings for EDF+ identity fields that do not keep to their subfields."""
    checks = (
        ("patient", _PATIENT, patient, "code, sex, birth date, name"),
        ("recording", _RECORDING, recording, "'Startdate', date, code, technician, equipment"),
    )
    return [
        f"the {name} field is free text instead of {subfields}; it is not interpreted"
        for name, pattern, text, subfields in checks
        if pattern.match(text) is None
    ]


def _shown(raw: bytes) -> str:
    return repr(raw.decode("latin-1").strip(" \0"))
