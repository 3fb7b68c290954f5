"""Long-lived worker processes with the libraries loaded, each doing one job at a time.

Starting a process and importing scipy costs most of a second; a job often takes less. So workers
are forked from one process that has loaded all of it, see `waveassay.execute.snakemake.warming`.
"""

import concurrent.futures
import multiprocessing
import os
import signal
import threading
from collections.abc import Callable
from concurrent.futures.process import BrokenProcessPool
from multiprocessing.connection import wait
from pathlib import Path

from waveassay.execute import work
from waveassay.execute.snakemake import warming

Done = concurrent.futures.Future[None]


class Workers:
    """Processes that do jobs of one work folder.

    Each is a pool of its own, so that one that is killed fails alone.
    """

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._idle: list[concurrent.futures.ProcessPoolExecutor] = []
        self._all: list[concurrent.futures.ProcessPoolExecutor] = []
        self._cancelled = False
        self._context = warming.start()

    def _new(self) -> concurrent.futures.ProcessPoolExecutor:
        pool = concurrent.futures.ProcessPoolExecutor(
            1, mp_context=self._context, initializer=_start_worker
        )
        with warming.no_main_module():
            pool.submit(_nothing)  # a pool has no process before it has something to do
        self._all.append(pool)
        return pool

    def run(self, job: str, when_done: Callable[[Done], None]) -> None:
        """Hand a job to an idle worker, or a new one; once cancelled nobody is told of its end.

        The worker of a job that ended with `BrokenProcessPool` was killed.
        """
        while True:
            pool = self._idle.pop() if self._idle else self._new()
            try:
                future = pool.submit(_run, str(self._folder), job)
                break
            except BrokenProcessPool:  # killed while idle
                self._all.remove(pool)

        def finished(done: Done) -> None:
            if self._cancelled:
                return
            if isinstance(done.exception(), BrokenProcessPool):
                self._all.remove(pool)
            else:
                self._idle.append(pool)
            when_done(done)

        future.add_done_callback(finished)

    def shutdown(self) -> None:
        """Let the workers go when they have done what they are at; nobody has to wait for it."""
        warming.stop_after(threading.Thread(target=self._end))

    def _end(self) -> None:
        for pool in self._all:
            pool.shutdown()
        warming.stop()

    def cancel(self) -> None:
        """End the workers at once: Ctrl-C, or a fault of the scheduler."""
        self._cancelled = True
        for pool in self._all:
            processes = list((pool._processes or {}).values())
            pool.shutdown(wait=False, cancel_futures=True)
            for process in processes:
                process.terminate()


#: Snakemake makes the executor: who starts Snakemake puts here the workers that it is to use.
at_hand: list[Workers] = []


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


def _nothing() -> None:
    """Be there."""


def _run(folder: str, job: str) -> None:
    work.run_job(Path(folder), job)
