"""Find the installed stages through entry points; the engine imports no stage by name.

A bundle is a package named by an entry point of the group ``waveassay.stages``. A bundle that
fails is remembered and named where a stage is missed; it never stops the others.
"""

import importlib
import pkgutil
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from importlib.metadata import EntryPoint, entry_points
from types import ModuleType

from waveassay.contract import Kind, Stage
from waveassay.contract.checks_form import why_unfit
from waveassay.recipe.problems import nearest

GROUP = "waveassay.stages"
SHIPPED = "waveassay"

#: Keys of a step that are not stages.
STEP_KEYS = ("on", "as", "keep")


@dataclass(frozen=True)
class BrokenBundle:
    """A bundle, or a part of one, that gives no stage.

    Attributes
    ----------
    owner : distribution and version.
    module : the module that failed, or the stage's name where two claim it.
    why : what went wrong, in one line.
    """

    owner: str
    module: str
    why: str

    def __str__(self) -> str:
        return f"{self.owner} failed to load: {self.module}: {self.why}"


@dataclass(frozen=True)
class Registry:
    """The installed stages by name, who owns them, and what did not load.

    Attributes
    ----------
    claims : stage -> the modules that claim its name too, and are not used.
    """

    stages: Mapping[str, Stage]
    owners: Mapping[str, str] = field(default_factory=dict)
    broken: tuple[BrokenBundle, ...] = ()
    claims: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    def unknown(self, name: str) -> str:
        """Return the message for a stage that is not there."""
        message = f"no stage '{name}'{nearest(name, self.stages)}"
        if self.broken:
            message += f" ({'; '.join(map(str, self.broken))})"
        return message

    def giving(self, kinds: Iterable[Kind]) -> list[str]:
        """Return the names of stages that can give one of these kinds, sorted."""
        wanted = set(kinds)
        return sorted(name for name, stage in self.stages.items() if wanted & kinds_given(stage))


def kinds_given(stage: Stage) -> set[Kind]:
    """Return every kind that a stage can give, whatever it takes."""
    if not callable(stage.gives):
        return {stage.gives}
    kinds = set()
    for taken in Kind if callable(stage.takes) else stage.takes:
        try:
            kinds.add(stage.gives(taken))
        except Exception:  # a stranger's function; it is reported where a recipe uses the stage
            continue
    return kinds


@dataclass(frozen=True)
class _Claim:
    owner: str
    module: str
    stage: Stage
    shipped: bool


def load_registry(points: Iterable[EntryPoint] | None = None) -> Registry:
    """Return the stages of these entry points, or (once a process) of all that are installed."""
    if points is None:
        return _installed()
    broken: list[BrokenBundle] = []
    claims: dict[str, list[_Claim]] = {}
    for point in sorted(points, key=lambda p: (_owner(p), p.name, p.value)):
        for claim in _claims_of(point, broken):
            known = claims.setdefault(claim.stage.name, [])
            if all(claim.stage is not other.stage for other in known):
                known.append(claim)
    winners = {name: _settle(name, claims[name], broken) for name in sorted(claims)}
    kept = {name: claim for name, claim in winners.items() if claim is not None}
    return Registry(
        stages={name: claim.stage for name, claim in kept.items()},
        owners={name: claim.owner for name, claim in kept.items()},
        broken=tuple(broken),
        claims={
            name: tuple(_claimant(claim) for claim in claims[name] if claim is not winner)
            for name, winner in kept.items()
            if len(claims[name]) > 1
        },
    )


@lru_cache(maxsize=1)
def _installed() -> Registry:
    return load_registry(entry_points(group=GROUP))


def _owner(point: EntryPoint) -> str:
    return f"{point.dist.name} {point.dist.version}" if point.dist else point.name


def _one_line(error: BaseException) -> str:
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text}" if text else type(error).__name__


def _claims_of(point: EntryPoint, broken: list[BrokenBundle]) -> Iterator[_Claim]:
    owner = _owner(point)
    shipped = point.dist is not None and point.dist.name == SHIPPED
    try:
        loaded = point.load()
    except (Exception, SystemExit) as error:
        broken.append(BrokenBundle(owner, point.value, _one_line(error)))
        return
    if not isinstance(loaded, ModuleType):
        broken.append(BrokenBundle(owner, point.value, "the entry point names no package"))
        return
    for module in _modules(loaded, owner, broken):
        stage = getattr(module, "STAGE", None)
        if stage is None and hasattr(module, "__path__"):
            continue  # a folder of stages
        if why := _unfit(stage):
            broken.append(BrokenBundle(owner, module.__name__, why))
            continue
        assert isinstance(stage, Stage)
        yield _Claim(owner, module.__name__, stage, shipped)


def _modules(package: ModuleType, owner: str, broken: list[BrokenBundle]) -> Iterator[ModuleType]:
    yield package
    if not hasattr(package, "__path__"):
        return
    for info in pkgutil.iter_modules(package.__path__, f"{package.__name__}."):
        if info.name.rpartition(".")[2].startswith("_"):
            continue
        try:
            module = importlib.import_module(info.name)
        except (Exception, SystemExit) as error:
            broken.append(BrokenBundle(owner, info.name, _one_line(error)))
            continue
        yield from _modules(module, owner, broken)


def _unfit(stage: object) -> str | None:
    """Return why an object cannot serve as a stage and what to write, or None."""
    if isinstance(stage, Stage) and stage.name in STEP_KEYS:
        return f"'{stage.name}' is a key of the recipe grammar; name the stage 'family.method'"
    return why_unfit(stage)


def _claimant(claim: _Claim) -> str:
    return f"{claim.owner} ({claim.module})"


def _settle(name: str, claims: list[_Claim], broken: list[BrokenBundle]) -> _Claim | None:
    """Return who keeps a name: the only claim, or ours; of several strangers, nobody."""
    ours = [claim for claim in claims if claim.shipped]
    winner = claims[0] if len(claims) == 1 else ours[0] if len(ours) == 1 else None
    for claim in claims:
        if claim is winner:
            continue
        others = ", ".join(_claimant(other) for other in claims if other is not claim)
        kept = "which keeps it: rename yours" if winner else "so neither has it: rename one"
        broken.append(
            BrokenBundle(
                claim.owner,
                claim.module,
                f"stage name '{name}' is also claimed by {others}, {kept}",
            )
        )
    return winner
