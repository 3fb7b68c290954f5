"""Which columns a chain's tables have, known from the recipe alone, so that all sites agree."""

from collections.abc import Mapping
from dataclasses import dataclass

from waveassay.contract import FeaturesSpec, Kind, SignalSpec
from waveassay.recipe.fold import fold
from waveassay.recipe.model import Chain, Recipe, SignalRule


@dataclass(frozen=True)
class FeatureColumn:
    """One column of a table.

    Attributes
    ----------
    name : ``<feature>.<part>``, as ``band_power.alpha`` or ``spectral_edge``.
    averaged : of averaged spectra, one row a condition.
    step_index, part : the step that gives it, and which of its parts.
    unit : all units it has, where signals of several units share the chain.
    """

    name: str
    averaged: bool
    step_index: int
    step: str
    part: str
    unit: str
    meaning: str


def feature_columns(chain: Chain, rules: Mapping[str, SignalRule]) -> tuple[FeatureColumn, ...]:
    """Return the columns of a chain's features, in the order of its steps."""
    found: dict[tuple[int, str], FeatureColumn] = {}
    for role in chain.signals:
        rule = rules[role]
        folded = fold(chain, SignalSpec(role, rule.unit, rule.modality))
        for index, (step, spec) in enumerate(zip(chain.steps, folded.specs, strict=True)):
            if not isinstance(spec, FeaturesSpec):
                continue
            for column in spec.columns:
                known = found.get((index, column.part))
                units = known.unit.split("; ") if known else []
                unit = "; ".join(units if column.unit in units else [*units, column.unit])
                found[index, column.part] = FeatureColumn(
                    name=column_name(step.alias or step.name, column.part),
                    averaged=step.given is Kind.AVERAGE_FEATURES,
                    step_index=index,
                    step=f"{chain.name}.{step.name}",
                    part=column.part,
                    unit=unit,
                    meaning=column.meaning,
                )
    return tuple(sorted(found.values(), key=lambda c: c.step_index))


def columns_by_chain(recipe: Recipe) -> dict[str, tuple[FeatureColumn, ...]]:
    """Return the columns of every chain's features."""
    return {chain.name: feature_columns(chain, recipe.signals) for chain in recipe.chains.values()}


def column_name(step: str, part: str) -> str:
    """Return a column's name: the step without its family, and the part."""
    feature = step.split(".", 1)[-1]
    return f"{feature}.{part}" if part else feature
