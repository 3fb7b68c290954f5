"""Read one step of a chain: the stage, its parameters, and ``on``, ``as``, ``keep``."""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import yaml

from waveassay.contract import Params, Stage
from waveassay.recipe.fields import plain
from waveassay.recipe.model import Place
from waveassay.recipe.plain_words import validated
from waveassay.recipe.problems import Report, nearest
from waveassay.recipe.registry import STEP_KEYS, Registry
from waveassay.recipe.yaml_nodes import (
    entries,
    found,
    is_null,
    is_text,
    place_of,
    places_below,
    value_of,
)


@dataclass(frozen=True)
class ReadStep:
    """A step as read, before its place among the others is known.

    Attributes
    ----------
    name : with its suffix where the stage stands a second time; empty where none is named.
    stage, params : None where they are at fault.
    on : names given by ``on`` with their places.
    alias : the ``as`` name with its place.
    crowded : it names more than one stage, so that its output may be another.
    """

    name: str
    stage: Stage | None
    params: Params | None
    on: tuple[tuple[str, Place], ...]
    alias: tuple[str, Place] | None
    keep: bool
    place: Place
    places: Mapping[str, Place]
    crowded: bool = False


class StepReader:
    """Reads the steps of one chain in order, and numbers stages that stand twice."""

    def __init__(self, chain: str, registry: Registry, report: Report) -> None:
        self.chain = chain
        self.registry = registry
        self.report = report
        self._count: dict[str, int] = {}

    def read(self, node: yaml.Node) -> ReadStep:
        """Return what a step says, with its problems reported."""
        report = self.report
        at = place_of(node, report.path)
        if is_text(node):
            return self._step(node.value, node, None, {})
        keys = {name: (key, value) for name, key, value in entries(node)}
        named = [name for name in keys if name not in STEP_KEYS]
        if not isinstance(node, yaml.MappingNode) or not named:
            message = (
                "a step is '- STAGE: {parameters}', with 'on', 'as', 'keep' beside it at will "
                f"(found {', '.join(keys) or found(node)})"
            )
            report.error(at, "R103", message, self.chain)
            return ReadStep("", None, None, (), None, False, at, {"": at})
        known = [name for name in named if name in self.registry.stages]
        chosen = (known or named)[0]
        key, body = keys[chosen]
        misplaced = []
        for name in named:
            if name != chosen and self._too_many(name, keys[name][0], chosen):
                misplaced.append(keys[name])
        if misplaced and (is_null(body) or isinstance(body, yaml.MappingNode)):
            # Read them where they were meant to be, so that nothing more is said of them.
            own = body.value if isinstance(body, yaml.MappingNode) else []
            body = yaml.MappingNode(node.tag, [*own, *misplaced], body.start_mark, body.end_mark)
        return replace(self._step(chosen, key, body, keys), crowded=len(known) > 1)

    def _too_many(self, name: str, key: yaml.Node, chosen: str) -> bool:
        """Report a key beside the stage; tell whether it is a parameter not indented enough."""
        stage = self.registry.stages.get(chosen)
        parameter = stage is not None and name in stage.params.model_fields
        if parameter:
            message = (
                f"'{name}' is a parameter of {chosen}; indent it further than '{chosen}', "
                "or write it inside braces behind it"
            )
        elif name in self.registry.stages:
            message = f"a step names one stage, and '{chosen}' is named already; begin with '- '"
        else:
            hint = nearest(name, STEP_KEYS)
            allowed = ", ".join(STEP_KEYS)
            message = f"unknown key '{name}' beside '{chosen}'{hint} (allowed: {allowed})"
        place = place_of(key, self.report.path)
        self.report.error(place, "R103", message, f"{self.chain}.{chosen}")
        return parameter

    def _step(
        self,
        stage_name: str,
        key: yaml.Node,
        body: yaml.Node | None,
        keys: Mapping[str, tuple[yaml.Node, yaml.Node]],
    ) -> ReadStep:
        report = self.report
        place = place_of(key, report.path)
        count = self._count[stage_name] = self._count.get(stage_name, 0) + 1
        name = stage_name if count == 1 else f"{stage_name}#{count}"
        where = f"{self.chain}.{name}"
        stage = self.registry.stages.get(stage_name)
        params: Params | None = None
        if stage is None:
            report.error(place, "R104", self.registry.unknown(stage_name), self.chain)
        else:
            params = self._params(stage, body, place, where)
            if others := ", ".join(self.registry.claims.get(stage_name, ())):
                owner = self.registry.owners.get(stage_name, "unknown")
                message = f"this is the stage of {owner}; its name is also claimed by {others}"
                report.warn(place, "W404", message, where)
        alias = self._text(keys, "as", where)
        keep = keys["keep"][1] if "keep" in keys else None
        keeps = value_of(keep) if keep is not None else False
        if keep is not None and not isinstance(keeps, bool):
            message = f"true or false is expected (found {found(keep)})"
            report.error(place_of(keep, report.path), "R203", message, f"{where}.keep")
        places = {"": place, **places_below(body, report.path)}
        on = self._names(keys, where)
        return ReadStep(name, stage, params, on, alias, keeps is True, place, places)

    def _params(
        self, stage: Stage, body: yaml.Node | None, place: Place, where: str
    ) -> Params | None:
        try:
            params = validated(
                stage.params, body, place, where, self.report, unknown="R201", missing="R202"
            )
            if params is not None:
                plain(params)  # fails where a default is not of its type
            return params
        except Exception as error:  # a stranger's validator
            owner = self.registry.owners.get(stage.name, "unknown")
            message = (
                f"the stage of {owner} failed while its parameters were checked: "
                f"{type(error).__name__}: {error}"
            )
            self.report.error(place, "R310", message, where)
            return None

    def _text(
        self, keys: Mapping[str, tuple[yaml.Node, yaml.Node]], key: str, where: str
    ) -> tuple[str, Place] | None:
        if key not in keys:
            return None
        node = keys[key][1]
        if not is_text(node) or not node.value:
            message = f"a name is expected (found {found(node)})"
            self.report.error(place_of(node, self.report.path), "R203", message, f"{where}.{key}")
            return None
        return node.value, place_of(node, self.report.path)

    def _names(
        self, keys: Mapping[str, tuple[yaml.Node, yaml.Node]], where: str
    ) -> tuple[tuple[str, Place], ...]:
        if "on" not in keys:
            return ()
        node = keys["on"][1]
        items = node.value if isinstance(node, yaml.SequenceNode) else [node]
        if not items or is_null(node):
            message = "a list of names is expected (found none)"
            self.report.error(place_of(node, self.report.path), "R203", message, f"{where}.on")
        named = []
        for item in items:
            place = place_of(item, self.report.path)
            if is_text(item) and item.value:
                named.append((item.value, place))
            elif not is_null(node):
                message = f"a name is expected (found {found(item)})"
                self.report.error(place, "R203", message, f"{where}.on")
        return tuple(named)
