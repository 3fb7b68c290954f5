"""Snakemake as a program of its own, which ends with the process that started it.

``python -m waveassay.execute.snakemake.child FOLDER ALIVE OPTION...``: ALIVE is an open pipe that
closes when the parent is gone, OPTION... are Snakemake's.
"""

import os
import signal
import sys
import threading
import time
from pathlib import Path

from waveassay.execute.snakemake.plugins import prepare_for_snakemake, register_plugins

_CANCELLING_S = 60


def _end_with_parent(alive: int) -> None:
    """Cancel the cluster's jobs when the parent is gone: nobody would wait for them."""
    os.read(alive, 1)
    os.kill(os.getpid(), signal.SIGINT)
    time.sleep(_CANCELLING_S)
    os._exit(1)


def main(arguments: list[str]) -> None:
    """Run Snakemake's command line with our plugins known to it."""
    signal.signal(signal.SIGINT, signal.default_int_handler)
    threading.Thread(target=_end_with_parent, args=(int(arguments[1]),), daemon=True).start()
    prepare_for_snakemake(Path(arguments[0]))
    register_plugins()
    from snakemake.cli import main as snakemake

    snakemake(arguments[2:])


if __name__ == "__main__":
    main(sys.argv[1:])
