"""What came of a recording."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

Status = Literal["done", "done_with_warnings", "failed"]
#: Digest of what a stored result holds, and the id of the environment that made it.
Made = tuple[str, str]


@dataclass(frozen=True)
class Output:
    """What a recording's passage through one chain left.

    Attributes
    ----------
    folder : its tables and figures.
    facts : see `waveassay.execute.finish`.
    digests : SHA-256 by name of the folder's files, as they were found when they were read.
    made : of the results that the numbers went through, by their key.
    """

    chain: str
    folder: Path
    facts: Mapping[str, Any]
    digests: Mapping[str, str]
    made: Mapping[str, Made] = field(default_factory=dict)


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
