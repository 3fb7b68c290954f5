"""Jobs hold every task once, after what it needs, whatever the number of workers."""

from graphlib import TopologicalSorter

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
