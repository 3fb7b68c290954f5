"""Recipe text -> checked recipe, or everything that is wrong with it."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import yaml

from waveassay.contract import SignalSpec
from waveassay.recipe.canonical import canonical_form, digest_of
from waveassay.recipe.chains import resolve_chain, warn_of_unused
from waveassay.recipe.fold import StepFinding, fold_steps
from waveassay.recipe.grammar import (
    Head,
    check_name,
    read_conditions,
    read_section,
    read_signals,
    read_top,
)
from waveassay.recipe.model import Chain, ConditionRule, Origin, Place, Recipe, SignalRule, Step
from waveassay.recipe.origins import all_addressed, read_origins
from waveassay.recipe.problems import Problem, Report, in_file_order
from waveassay.recipe.registry import Registry, load_registry
from waveassay.recipe.steps import ReadStep, StepReader
from waveassay.recipe.yaml_nodes import found, place_of, read_document


@dataclass(frozen=True)
class Checked:
    """What checking a recipe came to.

    Attributes
    ----------
    recipe : None where there are errors.
    problems : errors and warnings, in file order.
    """

    recipe: Recipe | None
    problems: tuple[Problem, ...]

    @property
    def errors(self) -> tuple[Problem, ...]:
        """What keeps the recipe from running."""
        return tuple(p for p in self.problems if p.severity == "error")

    @property
    def warnings(self) -> tuple[Problem, ...]:
        """What the user is told while it runs all the same."""
        return tuple(p for p in self.problems if p.severity == "warning")


def check_recipe(text: str, path: str, registry: Registry | None = None) -> Checked:
    """Check a recipe's text and find all that is wrong at once.

    Parameters
    ----------
    path : how messages name the file.
    registry : the stages to use; those installed when None.
    """
    registry = load_registry() if registry is None else registry
    report = Report(path)
    recipe: Recipe | None = None
    root = read_document(text, report)
    if root is not None:
        recipe = _Reading(text, root, registry, report).recipe()
    problems = in_file_order(report.problems)
    return Checked(None if report.errors else recipe, problems)


class _Reading:
    """One recipe on its way from nodes to a checked value."""

    def __init__(
        self, text: str, root: yaml.MappingNode, registry: Registry, report: Report
    ) -> None:
        self.text = text
        self.registry = registry
        self.report = report
        self.sections = read_top(root, report)
        self.signals = read_signals(self.sections, report)
        self.conditions = read_conditions(self.sections, report)

    def recipe(self) -> Recipe | None:
        report = self.report
        steps: dict[str, list[Step | None]] = {}
        for name, key, node in read_section(self.sections, "chains", report, needed=True):
            check_name(name, key, "chains", report)
            steps[name] = self._chain(name, key, node)
        origins = self._origins(steps)
        self._check_read(steps)
        head = self.sections.head
        if report.errors or head is None:
            return None
        return self._made(head, steps, origins)

    def _chain(self, name: str, key: yaml.Node, node: yaml.Node) -> list[Step | None]:
        report = self.report
        if not isinstance(node, yaml.SequenceNode) or not node.value:
            message = f"a list of steps is expected (found {found(node)})"
            place = place_of(node if isinstance(node, yaml.SequenceNode) else key, report.path)
            report.error(place, "R301", message, name)
            return []
        before = report.errors
        reader = StepReader(name, self.registry, report)
        read = [reader.read(item) for item in node.value]
        steps = resolve_chain(name, read, list(self.signals), self.registry, report)
        self._fold(name, read, steps)
        sound = [step for step in steps if step is not None]
        if report.errors == before and len(sound) == len(steps):
            warn_of_unused(name, sound, report)
        return steps

    def _fold(self, chain: str, read: Sequence[ReadStep], steps: Sequence[Step | None]) -> None:
        """Fold every signal of a chain and report each finding once."""
        names: dict[str, None] = {}
        for step in steps:
            if step is not None and step.stage.needs is not None:
                names.update(dict.fromkeys(step.stage.needs(step.params)))
        heard: dict[StepFinding, list[str]] = {}
        folded: list[str] = []
        for name in names:
            rule = self.signals.get(name)
            if rule is None:
                continue
            folded.append(name)
            given = SignalSpec(name=name, unit=rule.unit, modality=rule.modality)
            for finding in fold_steps(steps, given, owners=self.registry.owners).findings:
                whose = heard.setdefault(finding, [])
                if name not in whose:
                    whose.append(name)
        for finding, whose in heard.items():
            at = read[finding.step_index]
            message = finding.message
            if len(whose) < len(folded):
                message += f" (signal {', '.join(whose)})"
            where = ".".join(filter(None, (chain, at.name, finding.at)))
            place = _nearest_place(at.places, finding.at)
            if finding.severity == "warning":
                self.report.warn(place, "W401", message, where)
            else:
                self.report.error(place, "R310" if finding.failed else "R309", message, where)

    def _origins(self, steps: Mapping[str, Sequence[Step | None]]) -> dict[str, Origin]:
        listed = read_section(self.sections, "origins", self.report, needed=False)
        head = self.sections.head
        numerics = None if head is None else head.numerics
        addressed = all_addressed(numerics, steps, self.signals, self.conditions)
        # Where a step is at fault, an address in its chain may well be right.
        faulty = [f"{name}." for name, chain in steps.items() if None in chain or not chain]
        return read_origins(listed, addressed, faulty, self.report)

    def _check_read(self, steps: Mapping[str, Sequence[Step | None]]) -> None:
        """Warn of signals that no chain reads, once nothing else is wrong."""
        if self.report.errors:
            return
        read: set[str] = set()
        for chain in steps.values():
            for step in chain:
                if step is not None and step.stage.needs is not None:
                    read.update(step.stage.needs(step.params))
        for name, key, _ in read_section(self.sections, "signals", self.report, needed=True):
            if name not in read:
                place = place_of(key, self.report.path)
                self.report.warn(place, "W403", "no chain reads this signal", f"signals.{name}")

    def _made(
        self,
        head: Head,
        steps: Mapping[str, Sequence[Step | None]],
        origins: Mapping[str, Origin],
    ) -> Recipe:
        signals: dict[str, SignalRule] = {k: v for k, v in self.signals.items() if v is not None}
        conditions: dict[str, ConditionRule] = {
            k: v for k, v in self.conditions.items() if v is not None
        }
        chains = {
            name: Chain(name, tuple(step for step in chain if step is not None))
            for name, chain in steps.items()
        }
        form = canonical_form(head.recipe, head.edition, head.numerics, signals, conditions, chains)
        return Recipe(
            path=self.report.path,
            text=self.text,
            name=head.recipe,
            edition=head.edition,
            title=head.title,
            purpose=head.purpose,
            citation=head.citation,
            numerics=head.numerics,
            signals=signals,
            conditions=conditions,
            chains=chains,
            origins=origins,
            digest=digest_of(form),
        )


def _nearest_place(places: Mapping[str, Place], at: str) -> Place:
    """Return where a parameter stands, or what holds it; the step where it is a default."""
    while at and at not in places:
        at = at.rpartition(".")[0]
    return places[at]
