"""The process that loads the libraries once, from which workers are forked.

It is started before a recipe is even read: importing scipy takes longer than most of what a run
does before its first job.
"""

import multiprocessing
import os
import signal
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from multiprocessing import forkserver
from multiprocessing.context import BaseContext
from typing import Any

#: A job is a process; threads in it would only get in each other's way.
THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")

_PRELOAD = "waveassay.execute.snakemake.preload"
#: There is but one such process: the last one must have gone before the next is started.
_ending: list[threading.Thread] = []


def start() -> BaseContext:
    """Start the process unless it runs, without waiting for it; return how to fork from it.

    Where it cannot be started, workers are started one by one: it is reached by a socket, whose
    place (the folder of temporary files) may have too long a name or be closed to us.
    """
    while _ending:
        _ending.pop().join()
    for name in THREAD_VARIABLES:
        os.environ[name] = "1"  # before numpy is loaded
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload([_PRELOAD])
    try:
        with no_main_module():
            forkserver.ensure_running()
    except OSError:
        return multiprocessing.get_context("spawn")
    return context


def stop() -> None:
    """End the process, which has nothing to lose, and count what it and its children took."""
    server: Any = forkserver._forkserver  # there is no public way to stop it
    if server._forkserver_pid is not None:
        with suppress(ProcessLookupError):
            os.kill(server._forkserver_pid, signal.SIGKILL)
        server._stop()


def end() -> None:
    """Wait for the threads that end with `stop`, and stop what nobody has used."""
    while _ending:
        _ending.pop().join()
    stop()


def stop_after(last: threading.Thread) -> None:
    """Note the thread that ends with `stop`, and start it; the interpreter's end waits for it."""
    _ending.append(last)
    last.start()


@contextmanager
def no_main_module() -> Iterator[None]:
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
