"""Find a recipe: a file, or one of those that ship with the package."""

from importlib.resources import files
from pathlib import Path

from waveassay.contract.errors import UsageError
from waveassay.recipe.problems import nearest
from waveassay.recipe.yaml_nodes import MAX_BYTES, decode


def folder() -> Path:
    """Return the shipped recipes' folder: in the package (a wheel) or beside it (a checkout)."""
    package = Path(str(files("waveassay")))
    shipped = package / "recipes"
    return shipped if shipped.is_dir() else package.parents[1] / "recipes"


def names() -> tuple[str, ...]:
    """Return the shipped recipes' names, sorted."""
    return tuple(sorted(path.stem for path in folder().glob("*.yaml")))


def text(name: str) -> str:
    """Return a shipped recipe's YAML.

    Raises
    ------
    UsageError
        When no recipe of that name ships.
    """
    if name not in names():
        raise UsageError(f"no recipe '{name}' ships{nearest(name, names())}{_list()}")
    return _read(folder() / f"{name}.yaml", name)


def find(argument: str) -> tuple[str, str]:
    """Return text and path of the recipe that an argument names: a file, or a shipped one.

    Raises
    ------
    UsageError
        When there is no such recipe, or it cannot be read.
    RecipeError
        When the file is not text in UTF-8, or too large.
    """
    path = Path(argument)
    try:
        if path.is_file():
            return _read(path, argument), argument
        if argument in names():
            shipped = folder() / f"{argument}.yaml"
            return _read(shipped, argument), str(shipped)
        if path.is_dir():
            inside = path / "recipe.yaml"
            hint = f"; did you mean '{inside}'?" if inside.is_file() else ""
            raise UsageError(f"'{argument}' is a folder, not a recipe{hint}")
        if path.exists():
            raise UsageError(f"'{argument}' is not an ordinary file")
    except ValueError:  # a path with a NUL in it
        raise UsageError(f"{argument!r} is not a path") from None
    except OSError as error:
        raise UsageError(f"cannot read recipe '{argument}': {error.strerror}") from None
    looks_like_path = path.suffix in (".yaml", ".yml") or path.name != argument
    if looks_like_path:
        beside = path.parent
        there = [item.name for item in beside.glob("*.y*ml")] if beside.is_dir() else []
        hint = nearest(path.name, there) if beside.is_dir() else f"; no folder '{beside}'"
        raise UsageError(f"no recipe file '{argument}'{hint}")
    raise UsageError(
        f"no recipe '{argument}': neither a file nor a shipped recipe"
        f"{nearest(argument, names())}{_list()}"
    )


def _read(path: Path, shown: str) -> str:
    try:
        with path.open("rb") as stream:
            return decode(stream.read(MAX_BYTES + 1), shown)
    except OSError as error:
        raise UsageError(f"cannot read recipe '{shown}': {error.strerror}") from None


def _list() -> str:
    return f" (shipped: {', '.join(names())})" if names() else ""
