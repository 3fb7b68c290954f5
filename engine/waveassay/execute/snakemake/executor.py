"""A Snakemake executor of long-lived worker processes, with the libraries loaded.

Starting a process and importing scipy costs half a second; a job often takes less.
"""

import concurrent.futures
import multiprocessing
import os
import signal
import threading
import traceback
from concurrent.futures.process import BrokenProcessPool
from multiprocessing.connection import wait
from pathlib import Path
from typing import Any

from snakemake_interface_executor_plugins.executors.base import SubmittedJobInfo
from snakemake_interface_executor_plugins.executors.real import RealExecutor
from snakemake_interface_executor_plugins.settings import (
    CommonSettings,
    ExecMode,
    ExecutorSettingsBase,
)

#: A job is a process; threads in it would only get in each other's way.
THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")

common_settings = CommonSettings(
    non_local_exec=False, implies_no_shared_fs=False, job_deploy_sources=False
)


class ExecutorSettings(ExecutorSettingsBase):  # type: ignore[misc]  # untyped upstream
    """No settings: what a job is, the work folder says."""


def _start_worker() -> None:
    """Prepare a worker: it dies with its parent, and leaves Ctrl-C to it."""

    def die_with_parent() -> None:
        parent = multiprocessing.parent_process()
        if parent is not None:
            wait([parent.sentinel])
            os._exit(1)

    threading.Thread(target=die_with_parent, daemon=True).start()
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, signal.SIG_DFL)
    from waveassay.execute import work

    work.warm_up()


def _run(folder: str, job: str) -> None:
    from waveassay.execute import work

    work.run_job(Path(folder), job)


class Executor(RealExecutor):  # type: ignore[misc]  # untyped upstream
    """Gives each running job a process of its own, so that one that is killed fails alone."""

    def __post_init__(self) -> None:
        for name in THREAD_VARIABLES:
            os.environ[name] = "1"  # before the workers load numpy
        self.folder = os.getcwd()
        self._idle: list[concurrent.futures.ProcessPoolExecutor] = []
        self._all: list[concurrent.futures.ProcessPoolExecutor] = []
        self._cancelled = False

    @property
    def cores(self) -> Any:
        """How many jobs may run at once."""
        return self.workflow.resource_settings.cores

    def get_exec_mode(self) -> ExecMode:
        """Say that jobs run in processes of their own."""
        return ExecMode.SUBPROCESS

    def get_python_executable(self) -> str:
        """Return the interpreter, which this executor never starts anew."""
        import sys

        return sys.executable

    def _take(self) -> concurrent.futures.ProcessPoolExecutor:
        if self._idle:
            return self._idle.pop()
        pool = concurrent.futures.ProcessPoolExecutor(
            1, mp_context=multiprocessing.get_context("spawn"), initializer=_start_worker
        )
        self._all.append(pool)
        return pool

    def run_job(self, job: Any) -> None:
        """Hand a job to an idle worker, or to a new one."""
        info = SubmittedJobInfo(job=job)
        self.workflow.async_run(job.prepare())
        if job.is_norun:
            self.report_job_submission(info)
            self.report_job_success(info)
            return
        while True:
            pool = self._take()
            try:
                future = pool.submit(_run, self.folder, job.wildcards.job)
                break
            except BrokenProcessPool:  # killed while idle
                self._all.remove(pool)
        self.report_job_submission(info)
        future.add_done_callback(lambda done: self._finished(info, pool, done))

    def _finished(
        self,
        info: SubmittedJobInfo,
        pool: concurrent.futures.ProcessPoolExecutor,
        done: "concurrent.futures.Future[None]",
    ) -> None:
        if self._cancelled:
            return
        try:
            done.result()
            for output in info.job.output:
                Path(output).touch()
        except BrokenProcessPool:
            self._all.remove(pool)
            self.report_job_error(info, msg="its process was killed, or ran out of memory")
            return
        except BaseException as error:  # whatever it was, this job alone has failed
            self._idle.append(pool)
            self.report_job_error(info, msg="".join(traceback.format_exception(error)))
            return
        self._idle.append(pool)
        self.report_job_success(info)

    def shutdown(self) -> None:
        """Let the workers go."""
        for pool in self._all:
            pool.shutdown(wait=False)
        for pool in self._all:
            pool.shutdown(wait=True)

    def cancel(self) -> None:
        """End the workers at once: Ctrl-C, or a fault of the scheduler."""
        self._cancelled = True
        for pool in self._all:
            processes = list((pool._processes or {}).values())
            pool.shutdown(wait=False, cancel_futures=True)
            for process in processes:
                process.terminate()
