"""Jobs hold every task once, after what it needs, whatever the number of workers."""

from graphlib import TopologicalSorter

import pytest
from hypothesis import given
from hypothesis import strategies as st

from waveassay.plan.jobs import LOCAL, Job, group_into_jobs, missing_tasks
from waveassay.plan.stretches import Stretch
from waveassay.plan.tasks import Task


def tasks_of(recording: str, stretches: int, cost_s: float) -> list[Task]:
    prepared = [
        Task("prepare", recording, "c", 0, Stretch(0, n), f"{recording}-p{n}", (), cost_s)
        for n in range(stretches)
    ]
    rows = [
        Task(
            "rows", recording, "c", 0, Stretch(0, n), f"{recording}-r{n}",
            tuple(f"{recording}-p{m}" for m in (n, n + 1) if m < stretches), cost_s,
        )
        for n in range(stretches)
    ]  # fmt: skip
    end = Task(
        "finish", recording, "c", 0, None, f"{recording}-f", tuple(r.key for r in rows), cost_s
    )
    return [*prepared, *rows, end]


recordings = st.lists(
    st.tuples(st.integers(1, 12), st.sampled_from([0.01, 0.5, 5.0, 40.0])), min_size=1, max_size=8
)


@given(recordings, st.integers(1, 16))
def test_every_task_is_in_one_job_after_what_it_needs(
    sizes: list[tuple[int, float]], workers: int
) -> None:
    todo = [tasks_of(f"rec{i}", *size) for i, size in enumerate(sizes)]
    jobs = group_into_jobs(todo, workers)
    placed = [task.key for job in jobs for task in job.tasks]
    assert sorted(placed) == sorted(task.key for tasks in todo for task in tasks)
    by_name = {job.identifier: job for job in jobs}
    assert len(by_name) == len(jobs)
    order = TopologicalSorter({job.identifier: job.needs for job in jobs}).static_order()
    done: set[str] = set()
    for name in order:
        for task in by_name[name].tasks:
            assert done.issuperset(task.needs)
            done.add(task.key)


def test_a_long_recording_is_cut_up_and_short_ones_share_a_job() -> None:
    long = group_into_jobs([tasks_of("long", 50, 5.0)], workers=2)
    assert len(long) > 4
    assert all(job.cost_s <= LOCAL.longest_s for job in long)
    short = group_into_jobs([tasks_of(f"r{i}", 1, 0.01) for i in range(40)], workers=2)
    assert len(short) < 10


def test_the_same_tasks_make_the_same_jobs() -> None:
    def jobs() -> tuple[Job, ...]:
        return group_into_jobs([tasks_of("a", 5, 1.0), tasks_of("b", 2, 0.1)], workers=2)

    assert jobs() == jobs()


def test_what_is_stored_is_not_done_again_nor_what_only_it_needs() -> None:
    tasks = tasks_of("a", 3, 1.0)
    assert missing_tasks(tasks, lambda key: False) == tasks
    assert missing_tasks(tasks, lambda key: key == "a-f") == []
    rest = missing_tasks(tasks, lambda key: key in ("a-r0", "a-p1"))
    assert [task.key for task in rest] == ["a-p2", "a-r1", "a-r2", "a-f"]


def test_many_recordings_stay_whole_and_need_no_other_job() -> None:
    """Each lasts longer than a job should, but there are many for every worker."""
    todo = [tasks_of(f"rec{i}", 12, 5.0) for i in range(40)]  # 125 s each
    jobs = group_into_jobs(todo, workers=2)
    assert len(jobs) == 40
    assert all(len({task.recording for task in job.tasks}) == 1 for job in jobs)
    assert not any(job.needs for job in jobs)
    few = group_into_jobs(todo[:2], workers=2)  # whole, one worker would soon wait for the other
    assert len(few) > 8


def test_a_job_that_filters_stretches_does_the_rows_that_they_give() -> None:
    tasks = tasks_of("long", 48, 1.0)
    jobs = group_into_jobs([tasks], workers=2)
    filtering = [job for job in jobs if any(t.action == "prepare" for t in job.tasks)]
    assert len(filtering) >= 8
    assert all(not job.needs for job in filtering)  # no barrier between them
    together = sum(task.action == "rows" for job in filtering for task in job.tasks)
    assert together == 48 - (len(filtering) - 1)  # all but those that rest on two jobs


@given(recordings, st.integers(1, 16))
def test_the_path_of_a_job_is_its_own_time_and_the_longest_that_waits_for_it(
    sizes: list[tuple[int, float]], workers: int
) -> None:
    jobs = group_into_jobs([tasks_of(f"rec{i}", *size) for i, size in enumerate(sizes)], workers)
    for job in jobs:
        waiting = [other.path_s for other in jobs if job.identifier in other.needs]
        assert job.path_s == pytest.approx(job.cost_s + max(waiting, default=0.0))


@given(st.lists(st.floats(0.02, 0.4), min_size=50, max_size=400), st.integers(1, 8))
def test_batches_of_short_recordings_are_balanced(costs_s: list[float], workers: int) -> None:
    """Law: a batch is at most a recording longer than a job should be; all are alike."""
    todo = [[Task("finish", f"r{i}", "c", 0, None, f"k{i}", (), c)] for i, c in enumerate(costs_s)]
    jobs = group_into_jobs(todo, workers)
    target_s = min(LOCAL.longest_s, max(LOCAL.shortest_s, sum(costs_s) / (4 * workers)))
    lengths_s = [job.cost_s for job in jobs]
    assert max(lengths_s) <= target_s + max(costs_s) + 1e-9
    assert max(lengths_s) - min(lengths_s) <= 2 * max(costs_s) + 1e-9
    placed = [task.recording for job in jobs for task in job.tasks]
    assert placed == [f"r{i}" for i in range(len(costs_s))]
