"""A working directory to try: a recipe, and simulated recordings in which all is known."""

from importlib.resources import files
from pathlib import Path
from tempfile import TemporaryDirectory

from waveassay.contract.errors import MachineError, RefusedError

DAMAGED_SHARE = 0.15  # of a good recording's bytes, which is what is left of the damaged one


def write_example(folder: Path) -> None:
    """Write the example's working directory: the same bytes every time.

    Raises
    ------
    RefusedError
        When the folder exists and is not empty.
    MachineError
        When it cannot be written.
    """
    try:
        if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
            raise RefusedError(
                f"{folder}: already exists; name a folder that does not exist or is empty"
            )
        _write(folder)
    except OSError as error:
        raise MachineError(f"{folder}: cannot be written: {error.strerror or error}") from error


def _write(folder: Path) -> None:
    from waveassay.example.build import planted_csv, write_volunteer
    from waveassay.example.study import VOLUNTEERS

    for one in VOLUNTEERS:
        path = folder / "recordings" / f"{one.recording}.edf"
        path.parent.mkdir(parents=True, exist_ok=True)
        write_volunteer(path, one)
    damaged = folder / "damaged" / "v07.edf"
    damaged.parent.mkdir(exist_ok=True)
    with TemporaryDirectory() as scratch:
        whole = Path(scratch) / "whole.edf"
        write_volunteer(whole, VOLUNTEERS[0])
        content = whole.read_bytes()
    damaged.write_bytes(content[: int(len(content) * DAMAGED_SHARE)])
    texts = files("waveassay.example")
    for name, shipped in (("recipe.yaml", "recipe.yaml"), ("README.md", "folder_readme.md")):
        text = (texts / shipped).read_text(encoding="utf-8")
        (folder / name).write_text(text, encoding="utf-8", newline="\n")
    (folder / "planted.csv").write_text(planted_csv(), encoding="utf-8", newline="\n")
