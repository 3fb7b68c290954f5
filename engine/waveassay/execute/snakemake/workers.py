"""Long-lived worker processes with the libraries loaded, each doing one job at a time.

Starting a process and importing scipy costs most of a second; a job often takes less. So one
process loads the libraries while Snakemake is being imported, and every worker is forked from it.
"""

import concurrent.futures
import multiprocessing
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from multiprocessing import forkserver
from multiprocessing.connection import wait
from pathlib import Path

from waveassay.execute import work

#: A job is a process; threads in it would only get in each other's way.
THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")

Done = concurrent.futures.Future[None]


class Workers:
    """Processes that do jobs of one work folder.

    Each is a pool of its own, so that one that is killed fails alone.
    """

    def __init__(self, folder: Path) -> None:
        for name in THREAD_VARIABLES:
            os.environ[name] = "1"  # before the workers load numpy
        self._folder = folder
        self._idle: list[concurrent.futures.ProcessPoolExecutor] = []
        self._all: list[concurrent.futures.ProcessPoolExecutor] = []
        self._cancelled = False
        self._context = multiprocessing.get_context("forkserver")
        _wait_for_the_last()
        self._context.set_forkserver_preload([work.__name__, *work.SLOW_MODULES])
        with _no_main_module():
            forkserver.ensure_running()  # it loads the libraries while we go on

    def _new(self) -> concurrent.futures.ProcessPoolExecutor:
        pool = concurrent.futures.ProcessPoolExecutor(
            1, mp_context=self._context, initializer=_start_worker
        )
        with _no_main_module():
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
        ending = threading.Thread(target=self._end)  # the interpreter's own end waits for it
        _ending.append(ending)
        ending.start()

    def _end(self) -> None:
        for pool in self._all:
            pool.shutdown()
        # Else nobody waits for the process they were forked from, nor counts what they all took.
        forkserver._forkserver._stop()  # type: ignore[attr-defined]

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
#: There is one process to fork from: the last one must have gone before the next is started.
_ending: list[threading.Thread] = []


def _wait_for_the_last() -> None:
    while _ending:
        _ending.pop().join()


@contextmanager
def _no_main_module() -> Iterator[None]:
    """Hide the program from new processes, which would run its imports for nothing."""
    main = sys.modules["__main__"]
    known = {name: getattr(main, name) for name in ("__spec__", "__file__") if hasattr(main, name)}
    main.__spec__ = None
    main.__file__ = None
    try:
        yield
    finally:
        for name, value in known.items():
            setattr(main, name, value)


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
