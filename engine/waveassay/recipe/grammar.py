"""Read all of a recipe but its chains: head, signals, conditions."""

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import yaml
from pydantic import BaseModel, ConfigDict, Field

from waveassay.contract import UnitError
from waveassay.contract.quantity import require_known_unit
from waveassay.recipe.model import (
    NAME_PATTERN,
    Anchor,
    Citation,
    ConditionRule,
    Numerics,
    Place,
    Precision,
    RecipeName,
    SignalRule,
)
from waveassay.recipe.plain_words import validated
from waveassay.recipe.problems import Report, nearest
from waveassay.recipe.yaml_nodes import entries, found, is_null, place_of, places_below

RESERVED_CHAINS = ("signals", "conditions")
CONDITION_PATTERN = r"[^\s.](?:[^\n]{0,62}[^\s])?"


class Head(BaseModel):
    """What a recipe says of itself."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)

    recipe: RecipeName = Field(description="Its name: lower case, digits, hyphens.")
    edition: int = Field(gt=0, description="A whole number from 1, raised with every change.")
    title: str = Field(default="", description="A title, for people.")
    purpose: str = Field(default="", description="One line on what the numbers are for.")
    citation: Citation | None = Field(
        default=None, description="Where the method was published: {text: ..., doi: ...}."
    )
    precision: Precision = Field(
        default="standard", description=Numerics.model_fields["precision"].description
    )

    @property
    def numerics(self) -> Numerics:
        """How numbers are held; it still knows what the recipe left unsaid."""
        said = self.model_fields_set & set(Numerics.model_fields)
        return Numerics.model_validate({name: getattr(self, name) for name in said})


SECTIONS = {
    "signals": "The signals that the recipe reads, by the names it gives them.",
    "conditions": "Named stretches of time; without any, the whole recording is 'all'.",
    "chains": "Steps in order, by the name of the chain.",
    "origins": "Who says that a parameter has its value, by chain.step.parameter.",
}
TOP_KEYS = (*Head.model_fields, *SECTIONS)


@dataclass(frozen=True)
class Sections:
    """The top level, with the nodes of its sections by key."""

    head: Head | None
    nodes: Mapping[str, tuple[yaml.Node, yaml.Node]]


def read_top(root: yaml.MappingNode, report: Report) -> Sections:
    """Read the top level: the head, and which sections there are."""
    start = place_of(root, report.path)
    nodes = {name: (key, value) for name, key, value in entries(root)}
    for name, (key, _) in nodes.items():
        if name not in TOP_KEYS:
            message = f"unknown key{nearest(name, TOP_KEYS)} (allowed: {', '.join(TOP_KEYS)})"
            report.error(place_of(key, report.path), "R102", message, name)
    for name in ("signals", "chains"):
        if name not in nodes:
            report.error(start, "R101", f"is missing: {SECTIONS[name].rstrip('.')}", name)
    head = yaml.MappingNode(
        root.tag,
        [pair for name, pair in nodes.items() if name in Head.model_fields],
        root.start_mark,
        root.end_mark,
    )
    return Sections(validated(Head, head, start, "", report), nodes)


def read_section(
    sections: Sections, section: str, report: Report, *, needed: bool
) -> list[tuple[str, yaml.Node, yaml.Node]]:
    """Return the entries of a section; report one that is no mapping, or empty where needed."""
    if section not in sections.nodes:
        return []
    key, node = sections.nodes[section]
    if not isinstance(node, yaml.MappingNode) and not is_null(node):
        message = f"a mapping of names is expected (found {found(node)})"
        report.error(place_of(node, report.path), "R203", message, section)
        return []
    listed = list(entries(node))
    if needed and not listed:
        report.error(place_of(key, report.path), "R101", "names none", section)
    return listed


def check_name(name: str, node: yaml.Node, section: str, report: Report) -> None:
    """Report a name that is not well formed."""
    place = place_of(node, report.path)
    if section == "conditions":
        if not re.fullmatch(CONDITION_PATTERN, name):
            message = (
                "the name of a condition has 1 to 64 characters, no space at either end, "
                "and does not begin with a full stop"
            )
            report.error(place, "R105", message, f"{section}.{name}")
    elif not re.fullmatch(NAME_PATTERN, name) or len(name) > 64:
        message = (
            "a name is at most 64 lower case letters, digits and underscores, a letter first "
            f"(found {name})"
        )
        report.error(place, "R105", message, f"{section}.{name}")
    elif section == "chains" and name in RESERVED_CHAINS:
        message = f"no chain may be called '{name}', which names a section"
        report.error(place, "R105", message, f"{section}.{name}")


def read_signals(sections: Sections, report: Report) -> dict[str, SignalRule | None]:
    """Return the signals by name; None for one that is at fault."""
    rules: dict[str, SignalRule | None] = {}
    for name, key, node in read_section(sections, "signals", report, needed=True):
        check_name(name, key, "signals", report)
        where = f"signals.{name}"
        rule = validated(SignalRule, node, place_of(key, report.path), where, report)
        if rule is not None:
            try:
                require_known_unit(rule.unit)
            except UnitError as error:
                place = places_below(node, report.path)["unit"]
                report.error(place, "R205", str(error), f"{where}.unit")
                rule = None
        rules[name] = rule
    return rules


def read_conditions(sections: Sections, report: Report) -> dict[str, ConditionRule | None]:
    """Return the conditions by name; None for one that is at fault."""
    rules: dict[str, ConditionRule | None] = {}
    for name, key, node in read_section(sections, "conditions", report, needed=False):
        check_name(name, key, "conditions", report)
        where = f"conditions.{name}"
        at = place_of(key, report.path)
        rule = validated(ConditionRule, node, at, where, report)
        if rule is not None:
            before = report.errors
            _check_condition(rule, at, places_below(node, report.path), where, report)
            if report.errors > before:
                rule = None
        rules[name] = rule
    return rules


def _check_condition(
    rule: ConditionRule, at: Place, places: Mapping[str, Place], where: str, report: Report
) -> None:
    def contradiction(spot: str, message: str) -> None:
        report.error(places.get(spot, at), "R106", message, f"{where}.{spot}" if spot else where)

    for spot, anchor in (("start", rule.start), ("end", rule.end)):
        if anchor is not None:
            _check_anchor(spot, anchor, contradiction)
    if rule.end is not None and rule.length is not None:
        contradiction("length", "'end' and 'length' cannot both be given")
    elif rule.start and rule.end and rule.start.time is not None and rule.end.time is not None:
        start_s = rule.start.time + rule.start.offset
        end_s = rule.end.time + rule.end.offset
        if end_s <= start_s:
            contradiction("end", f"ends at {end_s:g} s, not after its start at {start_s:g} s")


def _check_anchor(spot: str, anchor: Anchor, contradiction: Callable[[str, str], None]) -> None:
    means = ("annotation", "time", "clock")
    given = [name for name in means if getattr(anchor, name) is not None]
    if len(given) != 1:
        what = f"{' and '.join(given)} are given" if given else "none is given"
        contradiction(spot, f"exactly one of annotation, time and clock is expected; {what}")
    elif anchor.which is not None and anchor.annotation is None:
        contradiction(f"{spot}.which", "'which' chooses among annotations, and none is given")
