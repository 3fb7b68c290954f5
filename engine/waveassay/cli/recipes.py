"""``waveassay recipes``."""

from pathlib import Path

from waveassay.cli.loading import load_recipe
from waveassay.cli.screen import console
from waveassay.contract.errors import UsageError
from waveassay.provenance.files import write_text
from waveassay.recipe import library


def show_recipes(name: str | None, copy: Path | None) -> int:
    """List the shipped recipes, print one, or copy one out."""
    screen = console()
    if name is None:
        if copy is not None:
            raise UsageError("Name the recipe to copy: waveassay recipes NAME --copy FILE.")
        for known in library.names():
            recipe, _ = load_recipe(known)
            screen.print(f"{known:24} {recipe.title or recipe.purpose}")
        screen.print("\nwaveassay recipes NAME shows one; --copy FILE writes it out to edit.")
        return 0
    text = library.text(name)
    if copy is None:
        screen.print(text, end="")
        return 0
    if copy.is_dir():
        copy = copy / f"{name}.yaml"
    if copy.exists():
        raise UsageError(f"{copy}: is there already. Name a new file.")
    write_text(copy, text)
    screen.print(f"{copy}: recipe {name}, yours to edit. Raise its edition when you change it.")
    return 0
