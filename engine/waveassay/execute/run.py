"""The main job: one recipe over some recordings, into a run folder."""

import gc
import shutil
import signal
import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from waveassay.contract import SignalError
from waveassay.contract.errors import MachineError, WaveassayError
from waveassay.execute.bundles import installed_bundles
from waveassay.execute.handover import read_recording, write_work
from waveassay.execute.lock import one_run_in
from waveassay.execute.results import (
    collect_results,
    failures_by_recording,
    machine_problem,
    step_rows,
)
from waveassay.execute.runner import JobEvent, Runner
from waveassay.execute.store import Store
from waveassay.execute.work import Failure
from waveassay.plan.jobs import LOCAL, Job, JobLength, group_into_jobs, missing_tasks
from waveassay.plan.plan import Plan, ReadRecording, make_plan, run_digest
from waveassay.plan.recordings import Found
from waveassay.plan.space import least_bytes
from waveassay.plan.tasks import Task
from waveassay.provenance.environment import environment
from waveassay.provenance.recording_digests import RecordingDigests
from waveassay.provenance.results import Result
from waveassay.provenance.run_folder import RunFolder, finished_run, notes_on
from waveassay.recipe.model import Recipe


@dataclass
class Watcher:
    """Who is told how a run goes; every call may be left as it is."""

    reading: Callable[[int, int], None] = lambda done, total: None
    planned: Callable[[int, float], None] = lambda jobs, cost_s: None
    job_ended: Callable[[float], None] = lambda cost_s: None


@dataclass(frozen=True)
class RunOutcome:
    """How a run ended.

    Attributes
    ----------
    already : the same run was finished before; nothing was computed and nothing written.
    computed, reused : tasks done now, and results taken from the store.
    timings_s : wall seconds by part.
    notes : what the user should know of earlier runs in the same place.
    """

    folder: Path
    results: Sequence[Result]
    results_digest: str
    already: bool = False
    computed: int = 0
    reused: int = 0
    timings_s: Mapping[str, float] = field(default_factory=dict)
    notes: Sequence[str] = ()


class InterruptedRunError(WaveassayError):
    """The user stopped the run; what was finished is kept in the store."""

    exit_code = 130

    def __init__(self) -> None:
        super().__init__("Stopped. What was finished is kept: give the same command again.")


def run_recipe(
    recipe: Recipe,
    found: Sequence[Found],
    into: Path,
    *,
    store_folder: Path | None,
    workers: int,
    runner: Runner,
    watcher: Watcher | None = None,
    job_length: JobLength = LOCAL,
) -> RunOutcome:
    """Run a recipe over recordings and return how it ended.

    Raises
    ------
    RefusedError
        When another run uses the folder.
    MachineError
        When the disk or the memory declines; what was finished is kept.
    InterruptedRunError
        When the user stops it, likewise.
    """
    watcher = watcher or Watcher()
    started = time.monotonic()
    into = into.resolve()
    with one_run_in(into / "runs"):
        store = Store((store_folder or into / "store").resolve())
        with RecordingDigests(store.root) as digests:
            read = _read_all(recipe, found, digests, watcher)
        sha256 = {
            name: item.sha256 for name, item in read.items() if isinstance(item, ReadRecording)
        }
        known = run_digest(recipe, {item.name: sha256.get(item.name, "") for item in found})
        finished = finished_run(into / "runs", recipe, known, store.checked)
        if finished is not None:
            seconds = time.monotonic() - started
            return RunOutcome(*finished, already=True, timings_s={"all": seconds})
        reading_s = time.monotonic() - started
        run = _Run(recipe, store, workers, runner, watcher, job_length)
        with store.in_use():
            return run.over(found, read, into / "runs", known, reading_s)


@dataclass
class _Run:
    recipe: Recipe
    store: Store
    workers: int
    runner: Runner
    watcher: Watcher
    job_length: JobLength

    def over(
        self,
        found: Sequence[Found],
        read: Mapping[str, ReadRecording | SignalError],
        runs: Path,
        known: str,
        reading_s: float,
    ) -> RunOutcome:
        """Plan, compute what the store lacks, and write the run folder."""
        clock = _Clock({"reading": reading_s})
        notes = notes_on(runs, self.recipe, self.store.checked)
        env = environment(installed_bundles())
        folder = RunFolder.open(runs, self.recipe)
        folder.begin(self.recipe, known, env, workers=self.workers, recordings=len(found))
        with _nothing_collected():
            plan = make_plan(self.recipe, found, read)
            todo = [missing_tasks(item.tasks, self.store.has) for item in plan.recordings]
            self._require_room(plan, todo, folder)
            jobs = group_into_jobs(todo, self.workers, self.job_length)
        self.watcher.planned(len(jobs), sum(job.cost_s for job in jobs))
        clock.lap("planning")
        failures = self._compute(plan, jobs, env, folder) if jobs else {}
        clock.lap("jobs")
        computed = {task.key for tasks in todo for task in tasks}
        with _nothing_collected():
            results = collect_results(plan, self.store, failures)
            steps = list(step_rows(plan, computed, results))
            used = sorted({name for row in steps for name in row[-1].split(";") if name})
            records = [self.store.root / "environments" / f"{name}.json" for name in used]
            results_digest = folder.complete(self.recipe, results, steps, records)
        clock.lap("tables")
        return RunOutcome(
            folder.path,
            results,
            results_digest,
            computed=len(computed),
            reused=len({task.key for item in plan.recordings for task in item.tasks} - computed),
            timings_s=clock.laps_s,
            notes=notes,
        )

    def _require_room(self, plan: Plan, todo: Sequence[Sequence[Task]], folder: RunFolder) -> None:
        """Refuse a run whose results cannot fit the disk: hours later it would stop anyway."""
        least = 0
        for item, tasks in zip(plan.recordings, todo, strict=True):
            by_chain = {passage.chain.name: passage for passage in item.passages}
            least += sum(least_bytes(by_chain[task.chain], task) for task in tasks)
        free = shutil.disk_usage(self.store.root).free
        if least > free:
            why = (
                f"{self.store.root}: the disk has {free / 1e9:.3g} GB free, and what this run "
                f"keeps takes at least {least / 1e9:.3g} GB. Free some of it, give a folder on "
                "another disk (--store), or run fewer recordings at a time. Nothing was computed"
            )
            folder.log.append("run_stopped", why=why)
            raise MachineError(f"{why}.")

    def _compute(
        self, plan: Plan, jobs: Sequence[Job], env: dict[str, Any], folder: RunFolder
    ) -> dict[str, Failure]:
        """Have the jobs done; return the recordings that failed."""
        work = write_work(self.store, plan, jobs, env, folder.path)
        costs_s = {job.identifier: job.cost_s for job in jobs}
        ended: dict[str, str] = {}

        def on_event(event: JobEvent) -> None:
            if event.what != "started":
                ended[event.job] = event.text if event.what == "failed" else ""
                self.watcher.job_ended(costs_s[event.job])

        with _stoppable() as stopped:
            whole = self.runner(work, self.workers, on_event)
        if stopped:
            folder.log.append("run_interrupted")
            raise InterruptedRunError
        machine = machine_problem(ended)
        if machine is not None:
            folder.log.append("run_stopped", why=machine)
            raise MachineError(f"{machine}. What was finished is kept: run again to go on.")
        failures = failures_by_recording(work, jobs, ended, whole)
        for failure in failures.values():
            folder.log.append("recording_failed", **vars(failure))
        shutil.rmtree(work, ignore_errors=True)
        return failures


@dataclass
class _Clock:
    """Wall seconds by part of a run."""

    laps_s: dict[str, float]
    _last: float = field(default_factory=time.monotonic)

    def lap(self, name: str) -> None:
        now = time.monotonic()
        self.laps_s[name] = now - self._last
        self._last = now


def _read_all(
    recipe: Recipe, found: Sequence[Found], digests: RecordingDigests, watcher: Watcher
) -> dict[str, ReadRecording | SignalError]:
    """Read every header and digest, from the store's memory where the file is unchanged."""
    read: dict[str, ReadRecording | SignalError] = {}
    for number, item in enumerate(found):
        try:
            read[item.name] = read_recording(item, digests, recipe.truncated)
        except SignalError as error:
            read[item.name] = error
        watcher.reading(number + 1, len(found))
    return read


@contextmanager
def _nothing_collected() -> Iterator[None]:
    """Look for no garbage: all that is made here is kept, and would be gone through ever again."""
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was_on:
            gc.enable()


@contextmanager
def _stoppable() -> Iterator[list[int]]:
    """Note Ctrl-C, which Snakemake swallows; yields a list that is empty until then."""
    stopped: list[int] = []
    if threading.current_thread() is not threading.main_thread():
        yield stopped
        return

    def stop(number: int, frame: object) -> None:
        stopped.append(number)
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGINT, stop)
    try:
        yield stopped
    except KeyboardInterrupt:
        if not stopped:
            raise
    finally:
        signal.signal(signal.SIGINT, before)
