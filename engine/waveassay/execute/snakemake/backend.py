"""Run jobs through Snakemake, embedded."""

import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from waveassay.execute.runner import JobEvent
from waveassay.execute.snakemake.plugins import (
    EVENTS,
    EXECUTOR,
    prepare_for_snakemake,
    register_plugins,
)
from waveassay.execute.snakemake.workers import Workers, at_hand


def run_with_snakemake(
    folder: Path, workers: int, on_event: Callable[[JobEvent], None]
) -> str | None:
    """Run the jobs of ``folder/jobs.json``; return None, or what went wrong as a whole.

    Every failed job is told through ``on_event``. The jobs' work is described by other files in the
    folder, which Snakemake never sees.
    """
    with _workers(folder):
        return _run(folder, workers, on_event)


def _run(folder: Path, workers: int, on_event: Callable[[JobEvent], None]) -> str | None:
    from snakemake.api import (
        ConfigSettings,
        DAGSettings,
        DeploymentSettings,
        ExecutionSettings,
        GreedySchedulerSettings,
        OutputSettings,
        RemoteExecutionSettings,
        ResourceSettings,
        SchedulingSettings,
        SnakemakeApi,
        StorageSettings,
        WorkflowSettings,
    )
    from snakemake.settings.enums import RerunTrigger

    from waveassay.execute.snakemake import events

    register_plugins()
    prepare_for_snakemake(folder)
    greedy = GreedySchedulerSettings(greediness=1.0, omit_prioritize_by_temp_and_input=True)
    output = OutputSettings(
        nocolor=True,
        enable_file_logging=False,
        log_handler_settings={
            EVENTS: events.LogHandlerSettings(
                callback=on_event, path=str(folder / "snakemake.jsonl")
            )
        },
    )
    with _own_signal_handlers(), SnakemakeApi(output) as api:
        try:
            workflow = api.workflow(
                resource_settings=ResourceSettings(cores=workers),
                config_settings=ConfigSettings(),
                storage_settings=StorageSettings(),
                workflow_settings=WorkflowSettings(),
                deployment_settings=DeploymentSettings(),
                snakefile=Path(__file__).with_name("Snakefile"),
                workdir=folder,
            )
            dag = workflow.dag(
                DAGSettings(
                    targets=frozenset(["all"]),
                    force_incomplete=True,
                    rerun_triggers=frozenset([RerunTrigger.MTIME]),
                )
            )
            dag.execute_workflow(
                executor=EXECUTOR,
                execution_settings=ExecutionSettings(
                    lock=False, keep_going=True, keep_metadata=False, latency_wait=0
                ),
                remote_execution_settings=RemoteExecutionSettings(),
                scheduling_settings=SchedulingSettings(scheduler="greedy", subsample=1000),
                scheduler_settings=greedy,
                greedy_scheduler_settings=greedy,
            )
        except Exception as error:  # Snakemake has one kind of error for all that can go wrong
            return f"{type(error).__name__}: {error}"
    return None


@contextmanager
def _workers(folder: Path) -> Iterator[None]:
    """Have the workers at hand that the executor will use, and let them go afterwards."""
    workers = Workers(folder)
    at_hand.append(workers)
    try:
        yield
    except BaseException:  # Ctrl-C too: no worker may go on
        workers.cancel()
        raise
    finally:
        at_hand.remove(workers)
        workers.shutdown()


@contextmanager
def _own_signal_handlers() -> Iterator[None]:
    """Put the handler for SIGTERM back: Snakemake leaves its own behind."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.getsignal(signal.SIGTERM)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
