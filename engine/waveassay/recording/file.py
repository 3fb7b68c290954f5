"""A regular file, read at explicit offsets, where a short read is an error and never zeros."""

import os
import stat

from waveassay.recording.errors import RecordingError, recording_error

_KINDS = (
    (stat.S_ISDIR, "a folder"),
    (stat.S_ISFIFO, "a pipe (FIFO)"),
    (stat.S_ISSOCK, "a socket"),
    (stat.S_ISCHR, "a device"),
    (stat.S_ISBLK, "a device"),
)


class RegularFile:
    """A file open for reading.

    Reads leave no file position behind (`os.preadv`), so threads and forked processes may share
    it. It is not memory-mapped: a file that shrinks under a map kills the process.
    """

    def __init__(self, path: str) -> None:
        self.path = path
        try:
            _require_regular(path, os.stat(path))
            # A pipe put in the file's place between the two calls must not block either.
            self._fd = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
        except (OSError, ValueError) as error:
            raise _cannot_open(path, error) from None
        try:
            info = os.fstat(self._fd)
            _require_regular(path, info)
        except BaseException:
            os.close(self._fd)
            raise
        self.size_bytes = info.st_size

    def fill(self, view: memoryview, offset: int, what: str) -> None:
        """Fill the view with the bytes from ``offset`` on; ``what`` names them in the error.

        Raises
        ------
        RecordingError
            When the file ends before, or cannot be read.
        """
        done = 0
        while done < len(view):
            try:
                count = os.preadv(self._fd, [view[done:]], offset + done)
            except OSError as error:
                raise recording_error(
                    self.path,
                    f"{what} cannot be read ({error.strerror})",
                    "Check the disk or the network drive, or copy the file and try again",
                ) from None
            if count == 0:
                raise recording_error(
                    self.path,
                    f"the file became shorter while it was read: it ends {len(view) - done} bytes "
                    f"before the end of {what}",
                    "Wait until nothing writes to it any more, or restore it from its original",
                )
            done += count

    def read(self, offset: int, count: int, what: str) -> bytes:
        """Return ``count`` bytes from ``offset`` on."""
        raw = bytearray(count)
        self.fill(memoryview(raw), offset, what)
        return bytes(raw)

    def close(self) -> None:
        """Close the file; a second time does nothing."""
        if self._fd >= 0:
            os.close(self._fd)
            self._fd = -1


def _require_regular(path: str, info: os.stat_result) -> None:
    if stat.S_ISREG(info.st_mode):
        return
    kind = next((name for test, name in _KINDS if test(info.st_mode)), "something special")
    raise recording_error(
        path, f"this is {kind}, not a file", "Give the path of a recording's file"
    )


def _cannot_open(path: str, error: OSError | ValueError) -> RecordingError:
    if isinstance(error, FileNotFoundError):
        return recording_error(path, "there is no such file", "Check the path and its spelling")
    if isinstance(error, PermissionError):
        return recording_error(
            path, "the file may not be read", "Ask its owner for permission to read it"
        )
    reason = error.strerror if isinstance(error, OSError) else str(error)
    return recording_error(
        path, f"the file cannot be opened ({reason})", "Check the path, or copy the file elsewhere"
    )
