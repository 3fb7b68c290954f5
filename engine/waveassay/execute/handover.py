"""What is handed to workers: a work folder with the plan and the jobs, all of it plain data."""

import json
import shutil
from collections.abc import Mapping, Sequence
from functools import lru_cache
from importlib.metadata import version
from pathlib import Path
from typing import Any, Literal

from waveassay.contract import SignalError
from waveassay.contract.digests import digest
from waveassay.execute.stamps import require_unchanged, stamp_of
from waveassay.execute.store import Store
from waveassay.execute.work import JOBS_FILE, OUTCOMES, PLAN_FILE, TASKS
from waveassay.plan.jobs import Job
from waveassay.plan.plan import Plan, PlannedRecording, ReadRecording
from waveassay.plan.recordings import Found
from waveassay.provenance.environment import environment_id
from waveassay.provenance.files import machine_errors, write_text
from waveassay.provenance.recording_digests import RecordingDigests
from waveassay.recording import Facts, read_facts


def read_recording(
    found: Found, digests: RecordingDigests, truncated: Literal["refuse", "read"]
) -> ReadRecording:
    """Return a recording's digest and header facts, computed only when the file has changed.

    Parameters
    ----------
    truncated : what becomes of a file that ends before its header says.

    Raises
    ------
    SignalError
        When it cannot be read, or is not what it should be.
    """
    try:
        stamp = stamp_of(found.path)
        facts = digests.facts(
            found.path,
            lambda: read_facts(found.path, truncated=truncated).to_json(),
            version=f"{_own_version()} {truncated}",
        )
        sha256 = digests.digest(found.path)
        require_unchanged(found.path, stamp)
        return ReadRecording(sha256, Facts.from_json(facts), stamp)
    except OSError as error:
        raise SignalError(
            f"{found.path}: cannot be read: {error.strerror}. Check the file and your right to "
            "read it."
        ) from error


@lru_cache(maxsize=1)
def _own_version() -> str:
    return version("waveassay")


def write_work(
    store: Store, plan: Plan, jobs: Sequence[Job], env: dict[str, Any], run: Path
) -> Path:
    """Write the work folder of a run afresh and return it; ``run`` is the run folder."""
    identifier = environment_id(env)
    # Runs of several places may share a store, and their folders a name.
    folder = store.root / "work" / f"{run.name}-{digest(str(run))[:8]}"
    work = {
        "recipe": plan.recipe.text,
        "recipe_path": plan.recipe.path,
        "store": str(store.root),
        "environment": identifier,
    }
    with machine_errors(folder):
        shutil.rmtree(folder, ignore_errors=True)
        for name in (OUTCOMES, TASKS, "jobs"):
            (folder / name).mkdir(parents=True)
    text = json.dumps(env, sort_keys=True, indent=1)
    write_text(store.root / "environments" / f"{identifier}.json", text)
    write_text(folder / PLAN_FILE, json.dumps(work))
    items = {item.found.name: item for item in plan.recordings}
    for job in jobs:
        write_text(folder / TASKS / f"{job.identifier}.json", json.dumps(_job(job, items)))
    order = {job.identifier: [job.needs, round(job.path_s, 3)] for job in jobs}
    write_text(folder / JOBS_FILE, json.dumps(order))
    return folder


def _job(job: Job, items: Mapping[str, PlannedRecording]) -> dict[str, Any]:
    """Return what a worker must know of a job: its tasks, and what was read of its recordings.

    Of other recordings it learns nothing, so a job costs the same however many there are.
    """
    recordings = {}
    for name in dict.fromkeys(task.recording for task in job.tasks):
        item = items[name]
        assert item.read is not None, "what was not read has no tasks"
        recordings[name] = {
            "path": str(item.found.path.resolve()),
            "sha256": item.read.sha256,
            "facts": item.read.facts.to_json(),
            "stamp": item.read.stamp,
        }
    return {"tasks": [[t.recording, t.key] for t in job.tasks], "recordings": recordings}
