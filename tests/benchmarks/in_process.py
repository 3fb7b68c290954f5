"""A run within this process: without its start, or as a command without its backend alone."""

import time
from collections.abc import Callable
from importlib import import_module
from pathlib import Path

from waveassay.execute.runner import JobEvent


def run(text: str, recording: Path, into: Path) -> dict[str, float]:
    """Run a recipe; return CPU seconds of all of it, and of its jobs alone.

    Libraries are imported before the clock starts.
    """
    from waveassay.execute.in_process import run_in_process
    from waveassay.execute.run import run_recipe
    from waveassay.execute.work import warm_up
    from waveassay.plan.recordings import Found
    from waveassay.recipe import check_recipe

    warm_up()
    import_module("pyarrow.compute")
    jobs_s = 0.0

    def timed_runner(
        folder: Path, workers: int, on_event: Callable[[JobEvent], None]
    ) -> str | None:
        nonlocal jobs_s
        begun_s = time.process_time()
        ended = run_in_process(folder, workers, on_event)
        jobs_s = time.process_time() - begun_s
        return ended

    start_s = time.process_time()
    recipe = check_recipe(text, "recipe.yaml").recipe
    assert recipe is not None, "the recipe is sound"
    outcome = run_recipe(
        recipe,
        [Found(recording.stem, recording)],
        into,
        store_folder=None,
        workers=1,
        runner=timed_runner,
    )
    all_s = time.process_time() - start_s
    assert all(result.status != "failed" for result in outcome.results), outcome.results
    return {"all_s": all_s, "jobs_s": jobs_s}


def main() -> None:
    """Give the command, with jobs done in this process where it would hand them to Snakemake."""
    from waveassay.cli import main as waveassay
    from waveassay.execute.in_process import run_in_process
    from waveassay.execute.snakemake import backend

    backend.run_with_snakemake = run_in_process
    waveassay()


if __name__ == "__main__":
    main()
