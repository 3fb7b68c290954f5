"""What came of a recording."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

Status = Literal["done", "done_with_warnings", "failed"]


@dataclass(frozen=True)
class Output:
    """What a recording's passage through one chain left.

    Attributes
    ----------
    folder : its tables and figures.
    facts : summary and excluded rows, figures with captions, and when to write CSV.
    digests : SHA-256 by name of the folder's files, as they were found when they were read.
    """

    chain: str
    folder: Path
    facts: Mapping[str, Any]
    digests: Mapping[str, str]


@dataclass(frozen=True)
class Result:
    """What came of a recording; a failed one leaves no output."""

    recording: str
    path: str
    sha256: str
    start: str
    duration_s: float | None
    status: Status
    chain: str = ""
    step: str = ""
    message: str = ""
    outputs: tuple[Output, ...] = ()
