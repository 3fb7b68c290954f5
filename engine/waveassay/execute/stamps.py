"""Whether a file is still the one that was examined: by size and times, not by reading it again."""

from pathlib import Path

from waveassay.contract import SignalError

Stamp = tuple[int, int, int]


def stamp_of(path: Path) -> Stamp:
    """Return size, time of the last change of content, and of the last change of anything (ns)."""
    known = path.stat()
    return known.st_size, known.st_mtime_ns, known.st_ctime_ns


def require_unchanged(path: Path, stamp: Stamp) -> None:
    """Refuse a recording that is no longer the one whose digest stands in the keys.

    Raises
    ------
    SignalError
        When it was changed or removed since.
    """
    try:
        same = stamp_of(path) == stamp
    except OSError:
        same = False
    if not same:
        raise SignalError(
            f"{path}: the file was changed or removed after it was examined. Run again, when "
            "nothing writes to it."
        )
