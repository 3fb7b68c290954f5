"""A Snakemake executor that hands jobs to workers which are running already."""

import traceback
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any

from snakemake_interface_executor_plugins.executors.base import SubmittedJobInfo
from snakemake_interface_executor_plugins.executors.real import RealExecutor
from snakemake_interface_executor_plugins.settings import (
    CommonSettings,
    ExecMode,
    ExecutorSettingsBase,
)

from waveassay.execute.snakemake.workers import Done, at_hand

common_settings = CommonSettings(
    non_local_exec=False, implies_no_shared_fs=False, job_deploy_sources=False
)


class ExecutorSettings(ExecutorSettingsBase):  # type: ignore[misc]  # untyped upstream
    """No settings: what a job is, the work folder says."""


class Executor(RealExecutor):  # type: ignore[misc]  # untyped upstream
    """Gives each running job a process of its own, so that one that is killed fails alone."""

    def __post_init__(self) -> None:
        self._workers = at_hand[-1]

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

    def run_job(self, job: Any) -> None:
        """Hand a job to a worker."""
        info = SubmittedJobInfo(job=job)
        self.workflow.async_run(job.prepare())
        if job.is_norun:
            self.report_job_submission(info)
            self.report_job_success(info)
            return
        self.report_job_submission(info)
        self._workers.run(job.wildcards.job, lambda done: self._finished(info, done))

    def _finished(self, info: SubmittedJobInfo, done: Done) -> None:
        try:
            done.result()
            for output in info.job.output:
                Path(output).touch()
        except BrokenProcessPool:
            self.report_job_error(info, msg="its process was killed, or ran out of memory")
            return
        except BaseException as error:  # whatever it was, this job alone has failed
            self.report_job_error(info, msg="".join(traceback.format_exception(error)))
            return
        self.report_job_success(info)

    def shutdown(self) -> None:
        """Do nothing: who started the workers lets them go."""

    def cancel(self) -> None:
        """End the workers at once: Ctrl-C, or a fault of the scheduler."""
        self._workers.cancel()
