"""Snakemake's events, turned into ours; its own text goes to a file and never to the screen."""

import json
import os
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, field
from logging import LogRecord
from typing import Any

from snakemake_interface_logger_plugins.base import LogHandlerBase
from snakemake_interface_logger_plugins.settings import LogHandlerSettingsBase

from waveassay.execute.runner import JobEvent


@dataclass
class LogHandlerSettings(LogHandlerSettingsBase):
    """Where events go."""

    # Snakemake makes options of these for its command line, and needs a plain type for each.
    callback: Callable[[JobEvent], None] | None = field(
        default=None, metadata={"help": "called with each event of a job", "type": str}
    )
    path: str | None = field(
        default=None, metadata={"help": "file that keeps what Snakemake says", "type": str}
    )
    pipe: int | None = field(
        default=None,
        metadata={"help": "open file that gets each event as a line of JSON", "type": int},
    )


class LogHandler(LogHandlerBase):
    """Passes on what happens to jobs, and keeps everything in a file."""

    def __post_init__(self) -> None:
        settings: Any = self.settings
        self._callback = settings.callback
        self._pipe: int | None = settings.pipe
        self._file = open(settings.path, "a", encoding="utf-8") if settings.path else None  # noqa: SIM115 (closed in close)
        self._job_of: dict[int, str] = {}

    def emit(self, record: LogRecord) -> None:
        """Handle one event."""
        try:
            self._emit(record)
        except Exception:  # the interface's rule: a handler reports its own faults and goes on
            self.handleError(record)

    def _emit(self, record: LogRecord) -> None:
        known = record.__dict__
        event = str(known.get("event") or "message")
        self._keep({"event": event, "level": record.levelname, "text": record.getMessage()})
        if event == "job_info" and known.get("rule_name") == "job":
            job = str(known["wildcards"]["job"])
            self._job_of[int(known["jobid"])] = job
            self._tell(JobEvent("started", job))
        elif event == "job_finished":
            self._ended("finished", known.get("job_id"), "")
        elif event == "job_error":
            text = str(known.get("rule_msg") or record.getMessage())
            self._ended("failed", known.get("jobid"), text)

    def _keep(self, line: dict[str, str]) -> None:
        if self._file:
            with suppress(OSError):  # a full disk is told by the jobs, which this must not hinder
                print(json.dumps(line), file=self._file, flush=True)

    def _ended(self, what: str, number: Any, text: str) -> None:
        job = self._job_of.get(int(number)) if number is not None else None
        if job is not None:
            self._tell(JobEvent(what, job, text))

    def _tell(self, event: JobEvent) -> None:
        if self._callback:
            self._callback(event)
        if self._pipe is not None:
            line = (json.dumps(vars(event)) + "\n").encode()
            while line:
                line = line[os.write(self._pipe, line) :]

    def close(self) -> None:
        """Close the file."""
        if self._file:
            with suppress(OSError):
                self._file.close()
            self._file = None
        super().close()

    @property
    def writes_to_stream(self) -> bool:
        """Say that this takes the place of Snakemake's own screen output."""
        return True

    @property
    def writes_to_file(self) -> bool:
        """Say that Snakemake need not manage our file."""
        return False

    @property
    def has_filter(self) -> bool:
        """Keep Snakemake's filters off the events."""
        return True

    @property
    def has_formatter(self) -> bool:
        """Keep Snakemake's formatter off the events."""
        return True

    @property
    def needs_rulegraph(self) -> bool:
        """Say that no rule graph is needed."""
        return False
