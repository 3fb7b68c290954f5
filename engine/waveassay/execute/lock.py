"""One run at a time in a folder. The kernel drops the lock when its holder dies."""

import fcntl
import os
import socket
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

from waveassay.contract.errors import MachineError, RefusedError
from waveassay.provenance.files import machine_error


@contextmanager
def one_run_in(folder: Path) -> Iterator[None]:
    """Hold the folder, made if need be, for one run.

    Raises
    ------
    RefusedError
        When another run holds it; the message says which process, where and since when.
    MachineError
        When the folder cannot be written.
    """
    path = folder / ".lock"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        file = path.open("a+", encoding="utf-8")
    except OSError as error:
        told = machine_error(error, folder)
        raise told or error from error
    with file:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            if not isinstance(error, BlockingIOError):
                raise MachineError(
                    f"{folder}: cannot be locked ({error.strerror}); choose a folder on a disk "
                    "that knows locks with --into"
                ) from error
            file.seek(0)
            holder = file.read().strip() or "unknown"
            raise RefusedError(
                f"{folder}: another run is using this folder ({holder}). Wait for it to end, or "
                "give another folder with --into."
            ) from None
        file.seek(0)
        file.truncate()
        since = datetime.now(UTC).strftime("%Y-%m-%d %H:%M:%S UTC")
        file.write(f"process {os.getpid()} on {socket.gethostname()}, since {since}\n")
        file.flush()
        yield
