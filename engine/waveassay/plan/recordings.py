"""Find the recordings that the user means, and name them."""

import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from waveassay.contract.errors import UsageError

SUFFIXES = (".edf", ".bdf")


@dataclass(frozen=True, order=True)
class Found:
    """A recording: its name (path below the folder given, without suffix) and its file."""

    name: str
    path: Path


def find_recordings(arguments: Sequence[Path]) -> tuple[Found, ...]:
    """Return the recordings in files and folders, sorted by name.

    A file that is named is taken whatever its suffix; a folder is searched at every depth for
    ``.edf`` and ``.bdf`` files in either case, hidden ones left out.

    Raises
    ------
    UsageError
        When a path does not exist, a folder holds no recording, or two would get one name.
    """
    found: list[Found] = []
    for argument in arguments:
        if argument.is_dir():
            inside = list(_inside(argument))
            if not inside:
                raise UsageError(
                    f"{argument}: no recording in this folder. Files that end in "
                    f"{' or '.join(SUFFIXES)} are looked for, at every depth."
                )
            found.extend(inside)
        elif argument.exists():
            found.append(Found(argument.stem, argument))
        else:
            raise UsageError(f"{argument}: there is no such file or folder.")
    if not found:
        raise UsageError("No recording was named: give files or folders that hold them.")
    return _without_clashes(found)


def _inside(folder: Path) -> Iterator[Found]:
    for where, below, files in os.walk(folder):
        below[:] = [name for name in below if not name.startswith(".")]
        place = Path(where)
        prefix = "" if place == folder else f"{place.relative_to(folder).as_posix()}/"
        for name in (*below, *files):  # a folder of that name is told when it is read
            stem, suffix = os.path.splitext(name)
            if suffix.lower() in SUFFIXES and not name.startswith("."):
                yield Found(f"{prefix}{stem}", place / name)


def _without_clashes(found: Sequence[Found]) -> tuple[Found, ...]:
    by_name: dict[str, Found] = {}
    for item in sorted(found, key=lambda f: (f.name, str(f.path))):
        known = by_name.setdefault(item.name, item)
        if known.path != item.path and known.path.resolve() != item.path.resolve():
            raise UsageError(
                f"Two recordings would both be named '{item.name}': {known.path} and {item.path}. "
                "Rename one, or give the folder that holds both."
            )
    return tuple(by_name.values())
