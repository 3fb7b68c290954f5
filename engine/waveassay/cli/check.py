"""``waveassay check``."""

from collections.abc import Sequence
from pathlib import Path

from waveassay.cli.loading import load_recipe
from waveassay.cli.plan import from_passages, from_recipe, show_plan
from waveassay.cli.screen import console, plural
from waveassay.contract import SignalError
from waveassay.plan.passage import Passage
from waveassay.plan.recordings import find_recordings
from waveassay.plan.routes import Routes


def check(argument: str, arguments: Sequence[Path], *, plan: bool = False) -> int:
    """Check a recipe, and whether recordings would go through it; return the exit code.

    With ``plan``, say how the steps on samples would be run.
    """
    place = Path(argument)
    if (place / "recipe.yaml").exists() and not arguments:
        argument, arguments = str(place / "recipe.yaml"), [place / "recordings"]
    recipe, warnings = load_recipe(argument)
    screen = console()
    for warning in warnings:
        screen.print(str(warning))
    steps = sum(len(chain.steps) for chain in recipe.chains.values())
    screen.print(
        f"{recipe.path}: sound. {recipe.name}, edition {recipe.edition}: "
        f"{plural(len(recipe.chains), 'chain')}, {plural(steps, 'step')}."
    )
    screen.print(f"Digest: {recipe.digest}")
    if not arguments:
        if plan:
            show_plan(from_recipe(recipe))
        return 0
    found = find_recordings(arguments)
    planned: list[Passage] = []
    routes = Routes(recipe)
    failing = sum(not _would_run(routes, item.name, item.path, planned) for item in found)
    if plan:
        show_plan(from_passages(planned))
    screen.print(f"{len(found) - failing} of {plural(len(found), 'recording')} would run.")
    return 3 if failing else 0


def _would_run(routes: Routes, name: str, path: Path, planned: list[Passage]) -> bool:
    from waveassay.plan.passage import passages
    from waveassay.recording import read_facts

    screen = console()
    try:
        facts = read_facts(path, truncated=routes.recipe.truncated)
        ways, warnings = passages(routes, name, "", facts)
    except SignalError as error:
        screen.print(f"would fail  {name}: {error}")
        return False
    planned.extend(ways)
    for warning in warnings:
        screen.print(f"warning     {name}: {warning}")
    return True
