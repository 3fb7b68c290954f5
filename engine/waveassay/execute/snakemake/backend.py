"""Run jobs through Snakemake, embedded."""

import getpass
import os
import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from waveassay.execute.runner import JobEvent

_EXECUTOR, _EVENTS = "waveassay-warm", "waveassay-events"


def run_with_snakemake(
    folder: Path, workers: int, on_event: Callable[[JobEvent], None]
) -> str | None:
    """Run the jobs of ``folder/jobs.json``; return None, or what went wrong as a whole.

    Every failed job is told through ``on_event``. The jobs' work is described by other files in the
    folder, which Snakemake never sees.
    """
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

    events = _register()
    _make_bearable_for_snakemake(folder)
    greedy = GreedySchedulerSettings(greediness=1.0, omit_prioritize_by_temp_and_input=True)
    output = OutputSettings(
        nocolor=True,
        enable_file_logging=False,
        log_handler_settings={
            _EVENTS: events.LogHandlerSettings(
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
                executor=_EXECUTOR,
                execution_settings=ExecutionSettings(
                    lock=False, keep_going=True, keep_metadata=False, latency_wait=0
                ),
                remote_execution_settings=RemoteExecutionSettings(),
                scheduling_settings=SchedulingSettings(scheduler="greedy", subsample=100),
                scheduler_settings=greedy,
                greedy_scheduler_settings=greedy,
            )
        except Exception as error:  # Snakemake has one kind of error for all that can go wrong
            return f"{type(error).__name__}: {error}"
    return None


def _register() -> Any:
    from snakemake_interface_executor_plugins.registry import ExecutorPluginRegistry
    from snakemake_interface_logger_plugins.registry import LoggerPluginRegistry

    from waveassay.execute.snakemake import events, executor

    prefix = "snakemake_{}_plugin_{}"
    ExecutorPluginRegistry().register_plugin(
        prefix.format("executor", _EXECUTOR.replace("-", "_")), executor
    )
    LoggerPluginRegistry().register_plugin(
        prefix.format("logger", _EVENTS.replace("-", "_")), events
    )
    return events


def _make_bearable_for_snakemake(folder: Path) -> None:
    """Give Snakemake the cache folder and the user's name that it insists on."""
    os.environ.setdefault("XDG_CACHE_HOME", str(folder / ".snakemake" / "cache"))
    try:
        getpass.getuser()
    except (KeyError, OSError, ImportError):
        os.environ["USER"] = os.environ["LOGNAME"] = f"uid{os.getuid()}"


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
