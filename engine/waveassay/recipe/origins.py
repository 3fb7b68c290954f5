"""Origins: who says that a parameter has its value, and what else it might have been."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import yaml
from pydantic import BaseModel

from waveassay.recipe.fields import Loc, leaves, plain
from waveassay.recipe.model import ConditionRule, Numerics, Origin, Place, SignalRule, Step
from waveassay.recipe.plain_words import validated
from waveassay.recipe.problems import Problem, Report, nearest
from waveassay.recipe.yaml_nodes import entries, place_of, places_below, value_of

#: What stands before a parameter that holds for all chains, in an address.
RECIPE = "recipe"


@dataclass(frozen=True)
class Addressed:
    """What stands before the parameter in an address, and the parameters there."""

    step: str
    params: BaseModel | None


def all_addressed(
    numerics: Numerics | None,
    chains: Mapping[str, Sequence[Step | None]],
    signals: Mapping[str, SignalRule | None],
    conditions: Mapping[str, ConditionRule | None],
) -> dict[str, Addressed]:
    """Return everything whose parameters an origin may name, by ``chain.step``.

    Where ``numerics`` is None, their values are at fault.
    """
    found = {RECIPE: Addressed(RECIPE, numerics)}
    for chain, steps in chains.items():
        for step in steps:
            if step is not None:
                name = f"{chain}.{step.name}"
                found[name] = Addressed(name, step.params)
    for section, rules in (("signals", signals), ("conditions", conditions)):
        for key, rule in rules.items():
            name = f"{section}.{key}"
            found[name] = Addressed(name, rule)
    return found


def split_address(address: str, steps: Mapping[str, Addressed]) -> tuple[str, str] | None:
    """Return the step and the dotted parameter of an address; the longest step that fits.

    What holds for all chains has one name, so that a chain may be called as it is.
    """
    fitting = [name for name in steps if address.startswith(f"{name}.")]
    if RECIPE in fitting and address.count(".") > 1:
        fitting.remove(RECIPE)
    if not fitting:
        return None
    step = max(fitting, key=len)
    return step, address[len(step) + 1 :]


def parameter_names(params: BaseModel) -> dict[str, Loc]:
    """Return every address within parameters: each leaf, and what holds it."""
    names: dict[str, Loc] = {}
    for leaf in leaves(params):
        for depth in range(1, len(leaf.loc) + 1):
            names[".".join(map(str, leaf.loc[:depth]))] = leaf.loc[:depth]
    return names


def read_origins(
    listed: Sequence[tuple[str, yaml.Node, yaml.Node]],
    steps: Mapping[str, Addressed],
    faulty: Sequence[str],
    report: Report,
) -> dict[str, Origin]:
    """Return the origins by address, checked against what they address.

    Parameters
    ----------
    faulty : starts of addresses that other errors have made unknowable.
    """
    origins: dict[str, Origin] = {}
    for address, key, node in listed:
        where = f"origins.{address}"
        at = place_of(key, report.path)
        origin = validated(Origin, node, at, where, report)
        if origin is not None:
            origins[address] = origin
        split = split_address(address, steps)
        if split is None:
            if not any(address.startswith(start) for start in faulty):
                message = (
                    f"no such step{nearest(address, _everything(steps))}; "
                    "an address is chain.step.parameter"
                )
                report.error(at, "R107", message, where)
            continue
        step, parameter = split
        params = steps[step].params
        if params is None:
            continue
        known = parameter_names(params)
        if parameter not in known:
            message = (
                f"{step} has no parameter '{parameter}'{nearest(parameter, known)} "
                f"(there are: {', '.join(known)})"
            )
            report.error(at, "R107", message, where)
        elif origin is not None:
            _check_alternatives(origin, node, known[parameter], params, where, report)
    return origins


def _everything(steps: Mapping[str, Addressed]) -> list[str]:
    return [
        f"{name}.{parameter}"
        for name, addressed in steps.items()
        if addressed.params is not None
        for parameter in parameter_names(addressed.params)
    ]


def _check_alternatives(
    origin: Origin,
    node: yaml.Node,
    loc: Loc,
    params: BaseModel,
    where: str,
    report: Report,
) -> None:
    """Try each alternative in the parameter's place, and report what its stage says of it."""
    places = places_below(node, report.path)
    for index in range(len(origin.alternatives)):
        spot = f"alternatives.{index}"
        alternative = next(
            item
            for name, _, value in entries(node)
            if name == "alternatives" and isinstance(value, yaml.SequenceNode)
            for item in value.value[index : index + 1]
        )
        tried = Report(report.path)
        values = _replaced(plain(params), loc, value_of(alternative))
        validated(type(params), _as_nodes(values, alternative), places[spot], "", tried)
        for problem in tried.problems:
            _pass_on(problem, places[spot], f"{where}.{spot}", report)


def _pass_on(problem: Problem, place: Place, where: str, report: Report) -> None:
    about = f"{problem.where}: " if problem.where else ""
    report.error(place, "R108", about + problem.message, where)


def _replaced(values: Any, loc: Loc, new: Any) -> Any:
    """Return nested values with another one at a place."""
    if not loc:
        return new
    head, rest = loc[0], loc[1:]
    if isinstance(values, list):
        return [_replaced(v, rest, new) if i == head else v for i, v in enumerate(values)]
    return {**values, head: _replaced(values[head], rest, new)}


def _as_nodes(values: Any, at: yaml.Node) -> yaml.Node:
    """Return values as nodes that all stand at one place, so that messages can name them."""
    start, end = at.start_mark, at.end_mark
    if isinstance(values, dict):
        pairs = [(_as_nodes(str(k), at), _as_nodes(v, at)) for k, v in values.items()]
        return yaml.MappingNode("tag:yaml.org,2002:map", pairs, start, end)
    if isinstance(values, list):
        items = [_as_nodes(item, at) for item in values]
        return yaml.SequenceNode("tag:yaml.org,2002:seq", items, start, end)
    kinds = {bool: "bool", int: "int", float: "float", str: "str", type(None): "null"}
    text = (
        {True: "true", False: "false", None: "null"}.get(values)
        if (values is None or isinstance(values, bool))
        else str(values)
    )
    tag = f"tag:yaml.org,2002:{kinds[type(values)]}"
    return yaml.ScalarNode(tag, text or "", start, end)


def origin_of(address: str, origins: Mapping[str, Origin]) -> Origin | None:
    """Return the origin of a parameter: its own, or that of the nearest that holds it."""
    while address:
        if address in origins:
            return origins[address]
        address = address.rpartition(".")[0]
    return None
