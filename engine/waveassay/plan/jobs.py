"""Jobs: tasks grouped so that each is long against the cost of starting one.

Which tasks share a job changes no byte of what they make, so cores may be counted here.
"""

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from graphlib import TopologicalSorter
from itertools import groupby
from math import ceil
from typing import NamedTuple

from waveassay.contract.digests import digest
from waveassay.plan.tasks import Task


class JobLength(NamedTuple):
    """How long jobs should be, in predicted CPU seconds.

    Up to ``whole_s`` a recording is not cut up where there are many: whole, it needs no other job.
    Between these limits there are ``a_worker`` jobs for each worker, so that all workers end at
    about the same time.
    """

    shortest_s: float
    longest_s: float
    whole_s: float = 0.0
    a_worker: int = 4


#: A worker that is already running starts a job in milliseconds; a cluster takes seconds at best.
LOCAL, CLUSTER = JobLength(1.0, 60.0, 600.0, a_worker=12), JobLength(10.0, 300.0, 900.0)


@dataclass(frozen=True)
class Job:
    """Tasks done one after another in one process.

    Attributes
    ----------
    needs : identifiers of other jobs.
    path_s : predicted CPU seconds from its start to the end of the last job that waits for it;
        of jobs that may start, the one with the longest is best begun first.
    """

    identifier: str
    tasks: tuple[Task, ...]
    needs: tuple[str, ...]
    path_s: float = 0.0

    @property
    def cost_s(self) -> float:
        """Predicted CPU seconds."""
        return _cost_s(self.tasks)


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
    costs_s = [_cost_s(tasks) for tasks in todo]
    fair_s = sum(costs_s) / (length.a_worker * workers)
    target_s = min(length.longest_s, max(length.shortest_s, fair_s))
    whole_s = max(target_s, min(length.whole_s, fair_s))
    groups: list[list[Task]] = []
    short: list[tuple[float, list[Task]]] = []
    for cost_s, tasks in zip(costs_s, todo, strict=True):
        if cost_s > whole_s:
            groups.extend(_cut_up(tasks, target_s))
        elif cost_s > target_s:
            groups.append(tasks)
        else:
            short.append((cost_s, tasks))
    groups.extend(_batches(short, target_s))
    return _linked(groups)


def _cost_s(tasks: Iterable[Task]) -> float:
    return sum(task.cost_s for task in tasks)


def _batches(parts: Sequence[tuple[float, list[Task]]], target_s: float) -> list[list[Task]]:
    """Put parts together, one after another, into batches of equal cost, about a target at most.

    All is cut into equal shares, and a part goes to the share that holds its middle.
    """
    total_s = sum(cost_s for cost_s, _ in parts)
    share_s = total_s / max(1, ceil(total_s / target_s)) or 1.0
    batches: dict[int, list[Task]] = {}
    before_s = 0.0
    for cost_s, tasks in parts:
        batches.setdefault(int((before_s + cost_s / 2) / share_s), []).extend(tasks)
        before_s += cost_s
    return list(batches.values())


def _cut_up(tasks: Sequence[Task], target_s: float) -> list[list[Task]]:
    """Cut up a recording's tasks: a job filters some stretches and does the rows that they give.

    Rows that rest on stretches of several such jobs come after these.
    """
    groups: list[list[Task]] = []
    ordered = sorted(tasks, key=_layer)
    for _, layer in groupby(ordered, key=lambda task: _layer(task)[:2]):
        by_action: dict[str, list[Task]] = {"combine": [], "prepare": [], "rows": [], "finish": []}
        for task in layer:
            by_action[task.action].append(task)
        groups.extend(_batches([(t.cost_s, [t]) for t in by_action["combine"]], target_s))
        rows_s = {task.stretch: task.cost_s for task in by_action["rows"]}
        costed = [(t.cost_s + rows_s.get(t.stretch, 0.0), [t]) for t in by_action["prepare"]]
        prepared = _batches(costed, target_s)
        left = list(_placed(by_action["rows"], prepared))
        groups.extend(prepared)
        groups.extend(_batches([(t.cost_s, [t]) for t in left], target_s))
        groups.extend(_batches([(t.cost_s, [t]) for t in by_action["finish"]], target_s))
    return groups


def _placed(rows: Sequence[Task], prepared: Sequence[list[Task]]) -> Iterator[Task]:
    """Add rows to the one group that prepares all of their stretches; yield what has none."""
    holder = {task.key: number for number, group in enumerate(prepared) for task in group}
    for task in rows:
        found = {holder[key] for key in task.needs if key in holder}
        if len(found) == 1:
            prepared[found.pop()].append(task)
        else:
            yield task


def _layer(task: Task) -> tuple[str, int, int]:
    order = {"combine": 0, "prepare": 1, "rows": 2, "finish": 3}[task.action]
    return (task.chain, 10_000 if task.action == "finish" else task.pass_no, order)


def _linked(groups: Sequence[Sequence[Task]]) -> tuple[Job, ...]:
    owner: dict[tuple[str, str], str] = {}
    names = [digest([[t.recording, t.chain, t.key] for t in group])[:16] for group in groups]
    for name, group in zip(names, groups, strict=True):
        owner.update({(task.recording, task.key): name for task in group})
    jobs = {}
    for name, group in zip(names, groups, strict=True):
        needs = {
            owner[(task.recording, key)]
            for task in group
            for key in task.needs
            if (task.recording, key) in owner
        }
        jobs[name] = Job(name, tuple(group), tuple(sorted(needs - {name})))
    paths_s = _paths_s(jobs)
    return tuple(replace(job, path_s=paths_s[name]) for name, job in jobs.items())


def _paths_s(jobs: Mapping[str, Job]) -> dict[str, float]:
    """Return how long it is from each job's start to the end of what waits for it."""
    order = TopologicalSorter({name: job.needs for name, job in jobs.items()}).static_order()
    after_s = dict.fromkeys(jobs, 0.0)
    for name in reversed(list(order)):
        job = jobs[name]
        after_s[name] += job.cost_s
        for need in job.needs:
            after_s[need] = max(after_s[need], after_s[name])
    return after_s
