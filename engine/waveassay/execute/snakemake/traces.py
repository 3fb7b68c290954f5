"""What jobs on other machines left behind: outcomes, results in the store, last words."""

import json
import os
import re
import time
from functools import cached_property
from pathlib import Path
from typing import Any

from waveassay.execute.snakemake.profile import Profile
from waveassay.execute.store import Store
from waveassay.execute.work import OUTCOMES, PLAN_FILE, TASKS

_LOOK_S = 0.5
_MOST_LINES = 40
_STATUS = re.compile(r"SLURM status is: '(\w+)'")
_REFUSED = re.compile(r"SLURM sbatch failed\. The error message was '(.*?)'", re.DOTALL)
_ADVICE = {
    "OUT_OF_MEMORY": "it needs more memory: raise mem_mb in {profile}",
    "TIMEOUT": "it was not done in time: raise runtime in {profile}",
    "CANCELLED": "somebody cancelled it",
    "NODE_FAIL": "its node failed",
    "BOOT_FAIL": "its node failed",
    "PREEMPTED": "another job took its place",
}


class Traces:
    """Reads a work folder that other machines write to, and waits for what is slow to be seen."""

    def __init__(self, folder: Path, profile: Profile) -> None:
        self._folder = folder
        self._profile = profile
        self._deadline = time.monotonic() + max(profile.latency_wait_s, 1.0)

    @cached_property
    def _store(self) -> Store:
        return Store(Path(_read(self._folder / PLAN_FILE)["store"]))

    def missing(self, job: str) -> str | None:
        """Return what to say when a job that ended well left no outcome or result; else None."""
        store = self._store
        tasks = _read(self._folder / TASKS / f"{job}.json")["tasks"]
        while True:
            failed = self._failed_recordings(job)
            if failed is not None and all(
                store.has(key)
                for recording, key in tasks
                if recording not in failed and recording not in self._failed_elsewhere
            ):
                return None
            if time.monotonic() > self._deadline:
                return (
                    f"MachineError: {store.root}: a job of the cluster ended well, but what it "
                    "made is not here. The store must be on a disk that every node sees at the "
                    "same path: choose one with --store or --into, and raise latency-wait in "
                    f"{self._profile.file} if that disk is slow"
                )
            time.sleep(_LOOK_S)

    def _failed_recordings(self, job: str) -> set[str] | None:
        path = self._folder / OUTCOMES / f"{job}.json"
        os.listdir(path.parent)  # makes a network disk look again
        if not path.exists():
            return None
        return {failure["recording"] for failure in _read(path)}

    @cached_property
    def _failed_elsewhere(self) -> set[str]:
        """Recordings that failed in any job: later jobs leave out what they then cannot do."""
        paths = (self._folder / OUTCOMES).glob("*.json")
        return {failure["recording"] for path in paths for failure in _read(path)}

    def why(self, job: str, said: str) -> str:
        """Return why a job failed: all that is known, and last a line for the user.

        Parameters
        ----------
        said : what Snakemake says of it.
        """
        refused = _REFUSED.search(said)
        if refused:
            error = " ".join(refused[1].split())
            return (
                f"{said}\nMachineError: the cluster refused a job: {error}. Check what "
                f"{self._profile.file} asks for (partition, account, mem_mb, runtime)"
            )
        log = self._folder / OUTCOMES / f"{job}.log"
        own = _tail(log)
        status = _STATUS.search(said)
        if own and (status is None or status[1] == "FAILED"):
            return "\n".join([said, *own])
        advice = _ADVICE.get(status[1], "").format(profile=self._profile.file) if status else ""
        how = f" ({status[1]}{': ' if advice else ''}{advice})" if status else ""
        line = f"the cluster ended the job{how}"
        if not log.exists():
            line = (
                f"the job ended on the cluster before its work began{how}. Does every node see "
                f"{self._folder} and the Python environment, at the same paths?"
            )
        return "\n".join([said, *own, *self._clusters_log(job), line.rstrip(".")])

    def _clusters_log(self, job: str) -> list[str]:
        logs = list((self._folder / ".snakemake").glob(f"slurm_logs/*/{job}/*.log"))
        return _tail(max(logs, key=lambda path: path.stat().st_mtime)) if logs else []


def _read(path: Path) -> Any:
    return json.loads(path.read_text(encoding="utf-8"))


def _tail(path: Path) -> list[str]:
    try:
        lines = path.read_text(encoding="utf-8", errors="replace").splitlines()
    except OSError:
        return []
    return [line for line in lines if line.strip()][-_MOST_LINES:]
