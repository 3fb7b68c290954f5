"""Do a job: its tasks one after another, each recording failing alone."""

import json
import socket
import sys
import traceback
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from importlib import import_module
from pathlib import Path
from typing import Any

from waveassay.contract import SignalError
from waveassay.contract.errors import MachineError
from waveassay.execute.finish import finish
from waveassay.execute.gathered import gather
from waveassay.execute.memory import give_back_freed_memory, keep_freed_memory
from waveassay.execute.moves import StepError
from waveassay.execute.prepare import prepare
from waveassay.execute.rows import make_rows
from waveassay.execute.signals import PreparedFiles, SignalSource, prepared_keys
from waveassay.execute.stamps import Stamp, require_unchanged
from waveassay.execute.states import combine, read_states
from waveassay.execute.store import MissingArtefactError, Store
from waveassay.plan.passage import Passage, passages
from waveassay.plan.routes import Routes
from waveassay.plan.tasks import Task, needed_by, tasks_of
from waveassay.provenance.files import write_text
from waveassay.recipe.check import check_recipe
from waveassay.recipe.problems import RecipeError
from waveassay.recipe.registry import load_registry
from waveassay.recording import Facts

PLAN_FILE, JOBS_FILE = "plan.json", "jobs.json"
#: What is to be done in each job, and which recordings failed in it.
TASKS, OUTCOMES = "tasks", "outcomes"


@dataclass(frozen=True)
class Failure:
    """Why a recording failed, at which step."""

    recording: str
    chain: str
    step: str
    message: str
    detail: str = ""


@dataclass(frozen=True)
class Ready:
    """A recording made ready for work: its passages and tasks."""

    path: Path
    stamp: Stamp
    facts: Facts
    passages: Mapping[str, Passage]
    tasks: Mapping[str, Task]


class Bench:
    """What workers need to know, read from a work folder: of the run, and of one job at a time."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        plan = json.loads((folder / PLAN_FILE).read_text(encoding="utf-8"))
        self.environment: str = plan["environment"]
        self.store = Store(Path(plan["store"]))
        self.prepared = PreparedFiles(self.store)
        self._plan: dict[str, str] = plan
        self._recordings: dict[str, Any] = {}
        self._ready: dict[str, Ready] = {}

    @cached_property
    def routes(self) -> Routes:
        """The routes of the recipe, which is checked again from its text."""
        checked = check_recipe(self._plan["recipe"], self._plan["recipe_path"])
        if checked.recipe is None:
            raise RecipeError(checked.problems)
        return Routes(checked.recipe)

    def take_up(self, job: str) -> list[tuple[str, str]]:
        """Read what is to be done in a job; return its tasks: (recording, key)."""
        known = json.loads((self.folder / TASKS / f"{job}.json").read_text(encoding="utf-8"))
        self._recordings = known["recordings"]
        return [(recording, key) for recording, key in known["tasks"]]

    def ready(self, recording: str) -> Ready:
        """Work out the passages and tasks of a recording of the job, as the planner did."""
        if recording not in self._ready:
            known = self._recordings[recording]
            facts = Facts.from_json(known["facts"])
            ways, _ = passages(self.routes, recording, known["sha256"], facts)
            tasks = {task.key: task for way in ways for task in tasks_of(way)}
            size, changed, touched = known["stamp"]
            self._ready.clear()  # jobs take recordings one after another
            by_chain = {way.chain.name: way for way in ways}
            stamp = (size, changed, touched)
            self._ready[recording] = Ready(Path(known["path"]), stamp, facts, by_chain, tasks)
        return self._ready[recording]

    def task(self, recording: str, key: str) -> Task:
        """Return a task as worked out here.

        Raises
        ------
        MachineError
            When it comes out otherwise here: another version, or code that changed meanwhile.
        """
        task = self.ready(recording).tasks.get(key)
        if task is None:
            raise MachineError(
                f"{recording}: the code or the libraries here ({socket.gethostname()}) are not "
                "those that planned the run. Use one installation everywhere and leave it alone "
                "while a run goes on"
            )
        return task


@lru_cache(maxsize=1)
def _bench(folder: Path, stamp: int) -> Bench:
    return Bench(folder)


def run_job(folder: Path, job: str) -> None:
    """Do a job's tasks and write its outcome; a failed recording leaves the others alone.

    Raises
    ------
    MachineError
        When the disk or the memory ends: no task would fare better.
    """
    keep_freed_memory()
    bench = _bench(folder, (folder / PLAN_FILE).stat().st_mtime_ns)
    failures: dict[str, Failure] = {}
    for recording, key in bench.take_up(job):
        if recording in failures or bench.store.has(key):
            continue
        task: Task | None = None
        try:
            task = bench.task(recording, key)
            _do(bench, recording, task)
        except MissingArtefactError:
            continue  # the task that makes it failed in another job, and is told there
        except MemoryError as error:
            raise MachineError(
                f"{recording}: the memory does not suffice; use fewer workers (--workers)"
            ) from error
        except StepError as error:
            failures[recording] = Failure(
                recording, task.chain if task else "", error.step, str(error), error.detail
            )
        except SignalError as error:
            failures[recording] = Failure(recording, task.chain if task else "", "", str(error))
        except MachineError:
            raise
        except Exception as error:  # our own fault: it must not take other recordings with it
            failures[recording] = Failure(
                recording,
                task.chain if task else "",
                "",
                f"{type(error).__name__}: {error}. This is a fault of waveassay, not of the "
                "recording; please report it with the run's log.jsonl.",
                traceback.format_exc(),
            )
    lines = [vars(failure) for failure in failures.values()]
    write_text(folder / OUTCOMES / f"{job}.json", json.dumps(lines))


def _do(bench: Bench, recording: str, task: Task) -> None:
    ready = bench.ready(recording)
    passage = ready.passages[task.chain]
    store = bench.store
    by_action: dict[str, list[str]] = {"prepare": [], "rows": [], "combine": [], "finish": []}
    for need in task.needs:
        by_action[ready.tasks[need].action].append(need)
    behind = needed_by(task, ready.tasks) if task.action == "finish" else ()
    rests_on = {key: made for key in behind if (made := store.facts(key)) is not None}
    written: dict[str, str] = {}
    with store.writing(task.key, bench.environment, written, rests_on=rests_on) as folder:
        if task.action == "finish":
            give_back_freed_memory()  # Arrow, which makes the tables, has its own
            finish(passage, gather(store, by_action["rows"]), folder)
        elif task.action == "combine":
            combine(passage, task.pass_no, gather(store, by_action["rows"]), folder)
        else:
            assert task.stretch is not None, "stretches are what is prepared and cut"
            source = SignalSource(
                passage,
                ready.path,
                ready.facts,
                bench.prepared,
                task.stretch.piece,
                prepared_keys(task, ready.tasks),
            )
            states = read_states(store, by_action["combine"])
            make = prepare if task.action == "prepare" else make_rows
            require_unchanged(ready.path, ready.stamp)
            written |= make(source, task.pass_no, task.stretch, states, folder)
            require_unchanged(ready.path, ready.stamp)
    if task.action == "prepare":
        bench.prepared.know(task.key)


def warm_up() -> None:
    """Load what nearly every job needs, and takes far longer to load than to use."""
    for module in ("pyarrow.parquet", "scipy.fft", "scipy.signal"):
        import_module(module)
    load_registry()


if __name__ == "__main__":
    run_job(Path(sys.argv[1]).resolve(), sys.argv[2])
