"""Run jobs one after another in this process: for tests, and to debug a stage."""

import json
import traceback
from collections.abc import Callable
from graphlib import TopologicalSorter
from pathlib import Path

from waveassay.contract.errors import MachineError
from waveassay.execute import work
from waveassay.execute.runner import JobEvent
from waveassay.execute.work import JOBS_FILE


def run_in_process(folder: Path, workers: int, on_event: Callable[[JobEvent], None]) -> str | None:
    """Run the jobs of ``folder/jobs.json``; ``workers`` is not used."""
    jobs = json.loads((folder / JOBS_FILE).read_text())
    for job in TopologicalSorter({job: needs for job, (needs, _) in jobs.items()}).static_order():
        on_event(JobEvent("started", job))
        try:
            work.run_job(folder, job)
        except MachineError:
            on_event(JobEvent("failed", job, traceback.format_exc()))
            return "stopped, since the machine declines"
        on_event(JobEvent("finished", job))
    return None
