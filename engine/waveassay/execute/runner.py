"""What a runner of jobs is. The engine has two: Snakemake's, and one in this process for tests."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol


@dataclass(frozen=True)
class JobEvent:
    """Something that happened to a job: ``started``, ``finished`` or ``failed``."""

    what: str
    job: str
    text: str = ""


class Runner(Protocol):
    """Runs the jobs that a work folder describes, each after those it needs."""

    def __call__(
        self, folder: Path, workers: int, on_event: Callable[[JobEvent], None]
    ) -> str | None:
        """Run all jobs; return None, or what went wrong as a whole."""
