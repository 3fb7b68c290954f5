"""The canonical form of a recipe: its digest, its full text, its table of parameters.

The form holds what can change a number, defaults included, in normal units and sorted. Title,
purpose, citation, origins and ``keep`` cannot, and are no part of it.
"""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from pydantic import BaseModel

from waveassay.contract import Kind
from waveassay.contract.quantity import unit_symbol
from waveassay.recipe.chains import default_source
from waveassay.recipe.fields import leaves, plain
from waveassay.recipe.model import (
    Chain,
    ConditionRule,
    Numerics,
    Place,
    Recipe,
    SignalRule,
)
from waveassay.recipe.origins import RECIPE, origin_of
from waveassay.recipe.yaml_writer import written


def canonical_parameters(params: BaseModel) -> dict[str, Any]:
    """Return a stage's parameters in canonical form: what a content key is to cover."""
    form: dict[str, Any] = _whole_numbers(plain(params))
    return form


def canonical_text(form: Any) -> str:
    """Return the one JSON text of a canonical form."""
    return json.dumps(form, sort_keys=True, separators=(",", ":"), ensure_ascii=True)


def _whole_numbers(value: Any) -> Any:
    """Write a float that is whole as an integer: ``4`` and ``4.0`` are one value."""
    if isinstance(value, dict):
        return {key: _whole_numbers(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_whole_numbers(item) for item in value]
    if isinstance(value, float) and value.is_integer():
        return int(value)
    return value


def canonical_form(
    name: str,
    edition: int,
    numerics: Numerics,
    signals: Mapping[str, SignalRule],
    conditions: Mapping[str, ConditionRule],
    chains: Mapping[str, Chain],
) -> dict[str, Any]:
    """Return what can change a number, as plain values."""
    return {
        "recipe": name,
        "edition": edition,
        **plain(numerics),
        "signals": {key: _whole_numbers(_signal(rule)) for key, rule in signals.items()},
        "conditions": {key: _whole_numbers(plain(rule)) for key, rule in conditions.items()},
        "chains": {
            key: [
                {
                    "stage": step.stage.name,
                    "params": canonical_parameters(step.params),
                    "takes_from": step.takes_from,
                    "signals": None if step.signals is None else sorted(step.signals),
                    "as": step.alias,
                }
                for step in chain.steps
            ]
            for key, chain in chains.items()
        },
    }


def _signal(rule: SignalRule) -> dict[str, Any]:
    return {**plain(rule), "unit": unit_symbol(rule.unit)}


def digest_of(form: Mapping[str, Any]) -> str:
    """Return the SHA-256 of a canonical form, in hexadecimal."""
    return hashlib.sha256(canonical_text(form).encode("ascii")).hexdigest()


def resolved_yaml(recipe: Recipe) -> str:
    """Return the recipe with every default and unit written out: a recipe of the same digest."""
    document: dict[str, Any] = {"recipe": recipe.name, "edition": recipe.edition}
    if recipe.title:
        document["title"] = recipe.title
    if recipe.purpose:
        document["purpose"] = recipe.purpose
    if recipe.citation is not None:
        document["citation"] = plain(recipe.citation)
    document |= plain(recipe.numerics)
    document["signals"] = {key: _signal(recipe.signals[key]) for key in sorted(recipe.signals)}
    if recipe.conditions:
        document["conditions"] = {
            key: plain(recipe.conditions[key]) for key in sorted(recipe.conditions)
        }
    document["chains"] = {
        key: [_step(recipe.chains[key], index) for index in range(len(recipe.chains[key].steps))]
        for key in sorted(recipe.chains)
    }
    if recipe.origins:
        document["origins"] = {key: plain(recipe.origins[key]) for key in sorted(recipe.origins)}
    return written(document)


def _step(chain: Chain, index: int) -> dict[str, Any]:
    step = chain.steps[index]
    entry: dict[str, Any] = {step.stage.name: plain(step.params)}
    on = [] if step.signals is None else sorted(step.signals)
    if step.takes_from is not None and _must_name_input(chain, index):
        source = chain.steps[step.takes_from]
        on.append(source.alias or source.name)
    if on:
        entry["on"] = on
    if step.alias is not None:
        entry["as"] = step.alias
    if step.keep:
        entry["keep"] = True
    return entry


def _must_name_input(chain: Chain, index: int) -> bool:
    """Tell whether a step's input would be another, or refused, without a word from ``on``."""
    step = chain.steps[index]
    given = [earlier.given for earlier in chain.steps[:index]]
    assert step.takes_from is not None
    past_epochs = step.taken is Kind.SIGNALS and Kind.EPOCHS in given[step.takes_from :]
    return past_epochs or default_source(step.stage.kinds_taken(step.params), given) != (
        step.takes_from
    )


@dataclass(frozen=True)
class ParameterRow:
    """One parameter of the recipe, as the table of parameters has it.

    Attributes
    ----------
    step : ``chain.step``, ``signals.name`` or ``conditions.name``; ``recipe`` for what holds for
        all chains.
    parameter : dotted (``bands.alpha``).
    value, unit : numbers read back to the same float; a list stands in brackets.
    origin : of the recipe's ``origins``, else ``recipe`` or ``default``.
    where : where a source states it, or why it was chosen.
    """

    step: str
    parameter: str
    value: str
    unit: str
    origin: str
    where: str


def parameters(recipe: Recipe) -> list[ParameterRow]:
    """Return every parameter of the recipe, its steps, signals and conditions, with defaults.

    ``on`` and ``as`` stand among a step's parameters where the recipe gives them.
    """
    rows = _rows(recipe, RECIPE, recipe.numerics, None)
    for name in sorted(recipe.signals):
        rows += _rows(recipe, f"signals.{name}", recipe.signals[name], None)
    for name in sorted(recipe.conditions):
        rows += _rows(recipe, f"conditions.{name}", recipe.conditions[name], None)
    for key in sorted(recipe.chains):
        for index, step in enumerate(recipe.chains[key].steps):
            name = f"{key}.{step.name}"
            rows += _rows(recipe, name, step.params, step.places)
            beside = _step(recipe.chains[key], index)
            if "on" in beside:
                value = f"[{', '.join(beside['on'])}]"
                rows.append(ParameterRow(name, "on", value, "", "recipe", ""))
            if step.alias is not None:
                rows.append(ParameterRow(name, "as", step.alias, "", "recipe", ""))
    return rows


def _rows(
    recipe: Recipe, step: str, params: BaseModel, places: Mapping[str, Place] | None
) -> list[ParameterRow]:
    rows = []
    for leaf in leaves(params):
        origin = origin_of(f"{step}.{leaf.dotted}", recipe.origins)
        written_out = leaf.dotted in places if places is not None else _is_set(params, leaf.loc)
        said = origin.origin if origin else "recipe" if written_out else "default"
        where = (origin.where or origin.why or "") if origin else ""
        rows.append(ParameterRow(step, leaf.dotted, leaf.value, leaf.unit, said, where))
    return rows


def _is_set(params: Any, loc: tuple[str | int, ...]) -> bool:
    for part in loc:
        if isinstance(params, BaseModel):
            if part not in params.model_fields_set:
                return False
            params = getattr(params, str(part))
        else:
            return True
    return True
