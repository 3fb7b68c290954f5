"""A plan: a recipe and recordings, worked out to tasks."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from waveassay.contract import SignalError
from waveassay.contract.digests import digest
from waveassay.plan.passage import Passage, passages
from waveassay.plan.recordings import Found
from waveassay.plan.routes import Routes
from waveassay.plan.sources import engine, stage_source
from waveassay.plan.tasks import Task, tasks_of
from waveassay.recipe.model import Recipe
from waveassay.recording import Facts


@dataclass(frozen=True)
class ReadRecording:
    """What is known of a recording before it is computed on; the stamp is that of its file."""

    sha256: str
    facts: Facts
    stamp: tuple[int, int, int] = (0, 0, 0)


@dataclass(frozen=True)
class PlannedRecording:
    """A recording with its tasks, or with why it cannot be run."""

    found: Found
    read: ReadRecording | None
    passages: tuple[Passage, ...] = ()
    tasks: tuple[Task, ...] = ()
    warnings: tuple[str, ...] = ()
    problem: str | None = None


@dataclass(frozen=True)
class Plan:
    """What will be computed."""

    recipe: Recipe
    recordings: tuple[PlannedRecording, ...]


def run_digest(recipe: Recipe, sha256_by_name: dict[str, str]) -> str:
    """Return what two runs share when the second has nothing to compute."""
    stages = {(s.stage.name, s.stage.version, stage_source(s.stage)) for _, _, s in recipe.steps()}
    return digest(
        {
            "recipe": recipe.text,
            "stages": sorted(stages),
            "recordings": sha256_by_name,
            "engine": engine(),
        }
    )


def make_plan(
    recipe: Recipe, found: Sequence[Found], read: Mapping[str, ReadRecording | SignalError]
) -> Plan:
    """Plan every recording; one that cannot be run carries its problem and stops no other."""
    routes = Routes(recipe)
    planned = (_planned(routes, item, read[item.name]) for item in found)
    return Plan(recipe, tuple(planned))


def _planned(routes: Routes, found: Found, read: ReadRecording | SignalError) -> PlannedRecording:
    if isinstance(read, SignalError):
        return PlannedRecording(found, None, problem=str(read))
    try:
        ways, warnings = passages(routes, found.name, read.sha256, read.facts)
    except SignalError as error:
        return PlannedRecording(found, read, problem=str(error))
    tasks = tuple(task for way in ways for task in tasks_of(way))
    return PlannedRecording(found, read, ways, tasks, warnings)
