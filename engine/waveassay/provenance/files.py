"""Files that are whole or not there: written beside, then renamed; and what disks refuse."""

import errno
import hashlib
import os
import secrets
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import BinaryIO

from waveassay.contract.errors import MachineError

#: What is still being written, or was left behind by a kill, has a name that starts so.
PART_PREFIX = ".part-"

_SHORT_BYTES = 1 << 15
_O_BINARY: int = getattr(os, "O_BINARY", 0)

_NO_ROOM = "free some space, or put the output on another disk with --into; then run again"
_NO_RIGHT = "ask for the right to write there, or choose another folder with --into"
_REFUSALS = {
    errno.ENOSPC: ("the disk is full", _NO_ROOM),
    errno.EDQUOT: ("your disk quota is used up", _NO_ROOM),
    errno.EFBIG: ("the file is larger than the disk or your limits allow", _NO_ROOM),
    errno.EACCES: ("no permission", _NO_RIGHT),
    errno.EPERM: ("the operation is not permitted", _NO_RIGHT),
    errno.EROFS: ("the disk is read-only", "choose another folder with --into"),
    errno.EIO: ("the disk reports an error", "check the disk and its connection; then run again"),
    errno.ENOTDIR: ("a file stands where a folder is needed", "move that file away"),
    errno.EISDIR: ("a folder stands where a file is needed", "move that folder away"),
    errno.EEXIST: ("a file stands where a folder is needed", "move that file away"),
    errno.ENAMETOOLONG: (
        "the name is too long for the disk",
        "choose a folder with a shorter path",
    ),
    errno.EMFILE: ("too many files are open", "use fewer workers, or raise the limit (ulimit -n)"),
    errno.ENFILE: ("too many files are open", "use fewer workers, or close other programs"),
    errno.ESTALE: ("the network folder has gone away", "reconnect it; then run again"),
}


def machine_error(error: OSError, path: Path) -> MachineError | None:
    """Return what to tell the user when the machine declined; None for any other error."""
    if error.errno not in _REFUSALS:
        return None
    what, advice = _REFUSALS[error.errno]
    return MachineError(f"{path}: cannot be written: {what}; {advice}")


@contextmanager
def machine_errors(path: Path) -> Iterator[None]:
    """Turn an OSError that is the machine's into a MachineError that names the path.

    An error that names another file (one being read meanwhile) passes through unchanged.
    """
    try:
        yield
    except OSError as error:
        told = machine_error(error, path)
        if told is None or not _concerns(error, path):
            raise
        raise told from error


def _concerns(error: OSError, path: Path) -> bool:
    if error.filename is None:
        return True
    named = Path(os.fsdecode(error.filename))
    part = named.parent == path.parent and named.name.startswith(PART_PREFIX)
    return part or named == path or named in path.parents


@contextmanager
def write_beside(path: Path, *, sync: bool = True) -> Iterator[BinaryIO]:
    """Give a file to write to, which takes the name ``path`` only once it is whole and on disk.

    It is written in the same folder (made if need be) as ``.part-...``, synced, then renamed over
    ``path``. If the body raises, ``path`` is as it was and the part is removed; after a kill the
    part is left for `sweep`. Permissions are those of any new file (0644 under the usual umask).
    The folder itself is not synced: a power cut may lose the new name, never leave half a file
    under it.

    Parameters
    ----------
    sync : False where whoever reads the file finds out that it is not whole.

    Raises
    ------
    MachineError
        When the disk is full or read-only, a quota is used up, permission is lacking, ...
    """
    part = path.parent / f"{PART_PREFIX}{secrets.token_hex(8)}"
    with machine_errors(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        descriptor = os.open(part, os.O_WRONLY | os.O_CREAT | os.O_EXCL | _O_BINARY, 0o666)
        try:
            with open(descriptor, "wb") as file:
                yield file
                if sync:
                    file.flush()
                    os.fsync(file.fileno())
            os.replace(part, path)
        except BaseException:  # Ctrl-C too: nothing half written stays behind
            with suppress(OSError):
                part.unlink()
            raise


def write_bytes(path: Path, content: bytes) -> None:
    """Write a whole file, or none; see `write_beside`."""
    with write_beside(path) as file:
        file.write(content)


def write_text(path: Path, text: str) -> None:
    """Write a whole text file in UTF-8 with the line ends as they are in the text."""
    write_bytes(path, text.encode("utf-8", "backslashreplace"))


def sweep(folder: Path, older_than_s: float = 0.0) -> list[Path]:
    """Remove what unfinished writers left behind, and return what was removed, sorted.

    Give ``older_than_s`` where another run may be writing at this moment: parts that were written
    to more recently stay.
    """
    newest = time.time() - older_than_s
    removed = []
    for where, _, names in os.walk(folder):
        for name in names:
            part = Path(where, name)
            if not name.startswith(PART_PREFIX):
                continue
            with suppress(FileNotFoundError), machine_errors(part):
                if older_than_s <= 0 or part.lstat().st_mtime <= newest:
                    part.unlink()
                    removed.append(part)
    return sorted(removed)


def copy_file(source: str | Path, target: str | Path) -> None:
    """Copy the bytes of a file to a new one; a disk that can share them between files does.

    The copy is a file of its own: what is later written to one never shows in the other.
    """
    copy_range = getattr(os, "copy_file_range", None)
    # Written through a buffer: the bare system call may write less than it was given.
    with open(source, "rb", buffering=0) as taken, open(target, "wb") as given:
        begun = taken.read(_SHORT_BYTES)
        if len(begun) < _SHORT_BYTES:  # all of it: there is next to nothing to share
            given.write(begun)
            return
        taken.seek(0)
        try:
            while copy_range is not None and copy_range(taken.fileno(), given.fileno(), 1 << 30):
                pass
        except OSError:  # not between these two disks: from where it stopped, by hand
            copy_range = None
        if copy_range is None:
            taken.seek(given.seek(0, os.SEEK_END))
            shutil.copyfileobj(taken, given, 1 << 20)


def sha256_of(path: str | Path) -> str:
    """Return the SHA-256 of a file in hexadecimal, read in blocks.

    Raises
    ------
    OSError
        As the system gives it: whether a file that cannot be read stops everything or one
        recording is the caller's to say.
    """
    with open(path, "rb", buffering=0) as file:
        begun = file.read(_SHORT_BYTES)
        if len(begun) < _SHORT_BYTES:  # all of it, without the large buffer that follows
            return hashlib.sha256(begun).hexdigest()
        file.seek(0)
        return hashlib.file_digest(file, "sha256").hexdigest()
