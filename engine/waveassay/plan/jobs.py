"""Jobs: tasks grouped so that each is long against the cost of starting one.

Which tasks share a job changes no byte of what they make, so cores may be counted here.
"""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from itertools import groupby
from typing import NamedTuple

from waveassay.contract.digests import digest
from waveassay.plan.tasks import Task


class JobLength(NamedTuple):
    """How long jobs should be, in predicted CPU seconds."""

    shortest_s: float
    longest_s: float


#: A worker that is already running starts a job in milliseconds; a cluster takes seconds at best.
LOCAL, CLUSTER = JobLength(1.0, 60.0), JobLength(10.0, 300.0)


@dataclass(frozen=True)
class Job:
    """Tasks done one after another in one process. ``needs`` are identifiers of other jobs."""

    identifier: str
    tasks: tuple[Task, ...]
    needs: tuple[str, ...]

    @property
    def cost_s(self) -> float:
        """Predicted CPU seconds."""
        return sum(task.cost_s for task in self.tasks)


def missing_tasks(tasks: Sequence[Task], is_stored: Callable[[str], bool]) -> list[Task]:
    """Return the tasks to do: those whose result is wanted and not in the store.

    ``tasks`` come each after those it needs. A stored result makes what only it needs unwanted.
    """
    wanted = {task.key for task in tasks if task.action == "finish"}
    todo: list[Task] = []
    for task in reversed(tasks):
        if task.key in wanted and not is_stored(task.key):
            wanted.update(task.needs)
            todo.append(task)
    return todo[::-1]


def group_into_jobs(
    by_recording: Iterable[Sequence[Task]], workers: int, length: JobLength = LOCAL
) -> tuple[Job, ...]:
    """Group tasks into jobs: short recordings in batches, long ones cut up.

    Parameters
    ----------
    by_recording : the tasks to do of each recording, each after those that it needs.
    workers : processes to keep busy.
    length : between what lengths jobs should lie.
    """
    todo = [list(tasks) for tasks in by_recording if tasks]
    total_s = sum(task.cost_s for tasks in todo for task in tasks)
    target_s = min(length.longest_s, max(length.shortest_s, total_s / (4 * workers)))
    groups: list[list[Task]] = []
    batch: list[Task] = []
    for tasks in todo:
        cost_s = sum(task.cost_s for task in tasks)
        if cost_s > target_s:
            groups.extend(_cut_up(tasks, target_s))
            continue
        if batch and sum(task.cost_s for task in batch) + cost_s > target_s:
            groups.append(batch)
            batch = []
        batch.extend(tasks)
    if batch:
        groups.append(batch)
    return _linked(groups)


def _cut_up(tasks: Sequence[Task], target_s: float) -> list[list[Task]]:
    groups: list[list[Task]] = []
    for _, layer in groupby(sorted(tasks, key=_layer), key=lambda task: (task.chain, _layer(task))):
        group: list[Task] = []
        for task in layer:
            if group and sum(t.cost_s for t in group) + task.cost_s > target_s:
                groups.append(group)
                group = []
            group.append(task)
        groups.append(group)
    return groups


def _layer(task: Task) -> tuple[str, int, int]:
    order = {"combine": 0, "prepare": 1, "rows": 2, "finish": 3}[task.action]
    return (task.chain, 10_000 if task.action == "finish" else task.pass_no, order)


def _linked(groups: Sequence[Sequence[Task]]) -> tuple[Job, ...]:
    owner: dict[tuple[str, str], str] = {}
    names = [digest([[t.recording, t.chain, t.key] for t in group])[:16] for group in groups]
    for name, group in zip(names, groups, strict=True):
        owner.update({(task.recording, task.key): name for task in group})
    jobs = []
    for name, group in zip(names, groups, strict=True):
        needs = {
            owner[(task.recording, key)]
            for task in group
            for key in task.needs
            if (task.recording, key) in owner
        }
        jobs.append(Job(name, tuple(group), tuple(sorted(needs - {name}))))
    return tuple(jobs)
