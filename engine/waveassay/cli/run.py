"""``waveassay run``."""

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple

from waveassay.cli.loading import load_recipe
from waveassay.cli.screen import NOTICE, console, plural
from waveassay.contract.errors import UsageError
from waveassay.execute.run import InterruptedRunError, RunOutcome, Watcher, run_recipe
from waveassay.execute.runner import Runner
from waveassay.plan.jobs import CLUSTER, LOCAL, JobLength
from waveassay.plan.recordings import find_recordings
from waveassay.recipe import library

if TYPE_CHECKING:
    from rich.progress import Progress


def run(
    target: str,
    recordings: Sequence[Path],
    into: Path | None,
    workers: int | None,
    store: Path | None,
    cluster: Path | None = None,
    cluster_wait_h: float = 24.0,
) -> int:
    """Run, print how it went, and return the exit code."""
    recipe_argument, arguments, folder = _places(target, recordings, into)
    recipe, warnings = load_recipe(recipe_argument)
    found = find_recordings(arguments)
    screen = console(stderr=True)
    for warning in warnings:
        screen.print(str(warning), style="yellow")
    screen.print(
        f"Recipe {recipe.name}, edition {recipe.edition}: "
        f"{plural(len(recipe.chains), 'chain')} over {plural(len(found), 'recording')}."
    )
    where = _this_machine(workers) if cluster is None else _on(cluster, workers, cluster_wait_h)
    try:
        with _Bar() as bar:
            outcome = run_recipe(
                recipe,
                found,
                folder,
                store_folder=store,
                workers=where.workers,
                runner=where.runner,
                job_length=where.job_length,
                watcher=bar.watcher,
            )
    except KeyboardInterrupt:
        raise InterruptedRunError from None
    return _report(outcome)


def _places(
    target: str, recordings: Sequence[Path], into: Path | None
) -> tuple[str, list[Path], Path]:
    path = Path(target)
    if recordings:
        if into is None:
            raise UsageError("Say where the results go: --into DIR.")
        return target, list(recordings), into
    if not path.exists() and target not in library.names():
        raise UsageError(f"{target}: there is no such file or folder, and no shipped recipe.")
    if not path.is_dir():
        raise UsageError(
            f"Name the recordings after the recipe, as in: waveassay run {target} FILE_OR_FOLDER "
            "--into DIR. Or give a working directory that holds recipe.yaml and recordings/."
        )
    recipe, folder = path / "recipe.yaml", path / "recordings"
    for wanted in (recipe, folder):
        if not wanted.exists():
            raise UsageError(
                f"{path}: a working directory holds recipe.yaml and recordings/, but there is no "
                f"{wanted.name} in it."
            )
    return str(recipe), [folder], into or path


class _Where(NamedTuple):
    """Where the work is done."""

    runner: Runner
    workers: int
    job_length: JobLength


def _this_machine(workers: int | None) -> _Where:
    from waveassay.execute.snakemake.backend import run_with_snakemake

    return _Where(run_with_snakemake, workers or _usable_cores(), LOCAL)


def _on(cluster: Path, workers: int | None, wait_h: float) -> _Where:
    """Return the cluster of a profile, checked before anything is computed."""
    from waveassay.execute.snakemake import slurm
    from waveassay.execute.snakemake.cluster import ClusterRunner
    from waveassay.execute.snakemake.profile import read_profile

    screen = console(stderr=True)
    profile = read_profile(cluster)
    if profile.executor == "slurm":
        profile = slurm.checked(profile)
        warning = slurm.warning(profile)
        if warning:
            screen.print(warning, style="yellow")
    workers = workers or profile.jobs or _usable_cores()
    screen.print(
        f"Cluster: executor {profile.executor}, at most {plural(workers, 'job')} at once, as "
        f"{profile.file} says."
    )
    return _Where(ClusterRunner(profile, wait_h * 3600, screen.print), workers, CLUSTER)


def _usable_cores() -> int:
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


class _Bar:
    """A progress bar with the time left; nothing where the screen is not one."""

    def __init__(self) -> None:
        self._progress: Progress | None = None
        self._task: Any = None

    def __enter__(self) -> "_Bar":
        from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

        screen = console(stderr=True)
        if screen.is_terminal:
            self._progress = Progress(
                TextColumn("{task.description}"),
                BarColumn(),
                TextColumn("{task.percentage:>3.0f} %"),
                TimeRemainingColumn(),
                console=screen,
                transient=True,
            )
            self._task = self._progress.add_task("Reading headers", total=None)
            self._progress.start()
        return self

    def __exit__(self, *args: object) -> None:
        if self._progress:
            self._progress.stop()

    @property
    def watcher(self) -> Watcher:
        """What moves the bar."""
        if self._progress is None:
            return Watcher()
        bar, task = self._progress, self._task

        def reading(done: int, total: int) -> None:
            bar.update(task, completed=done, total=total)

        def planned(jobs: int, cost_s: float) -> None:
            bar.reset(
                task, total=max(cost_s, 1e-9), description=f"Computing, {plural(jobs, 'job')}"
            )

        return Watcher(reading, planned, lambda cost_s: bar.advance(task, cost_s))


def _report(outcome: RunOutcome) -> int:
    screen = console()
    results = outcome.results
    failed = [result for result in results if result.status == "failed"]
    warned = [result for result in results if result.status == "done_with_warnings"]
    for result in warned:
        screen.print(f"warning  {result.recording}: {result.message}")
    for result in failed:
        step = f" at {result.chain}.{result.step}" if result.step else ""
        screen.print(f"failed   {result.recording}{step}: {result.message}")
    for note in outcome.notes:
        screen.print(f"note     {note}")
    done = len(results) - len(failed)
    line = f"{plural(done, 'recording')} done"
    if warned:
        line += f" ({len(warned)} with warnings)"
    screen.print(f"{line}, {len(failed)} failed.")
    if outcome.already:
        screen.print("Nothing to compute: this run was finished before.")
    else:
        screen.print(
            f"{plural(outcome.computed, 'task')} computed, {outcome.reused:,} taken from the store"
            f" ({_timings(outcome)})."
        )
    screen.print(f"Results: {outcome.folder}")
    screen.print(f"Results digest: {outcome.results_digest}")
    screen.print(NOTICE)
    return 3 if failed else 0


def _timings(outcome: RunOutcome) -> str:
    return ", ".join(f"{name} {seconds:.1f} s" for name, seconds in outcome.timings_s.items())
