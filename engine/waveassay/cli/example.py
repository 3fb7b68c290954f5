"""``waveassay example``."""

from pathlib import Path

from waveassay.cli.screen import console
from waveassay.contract.errors import UsageError


def write(folder: Path) -> int:
    """Write the example and say what to do with it."""
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise UsageError(f"{folder}: is there already and not empty. Name a new folder.")
    from waveassay.example import write_example

    write_example(folder)
    screen = console()
    screen.print(f"A working directory with simulated recordings is in {folder}.")
    screen.print(f"Read {folder / 'README.md'}, then: waveassay run {folder}")
    return 0
