"""Recipes: YAML with positions -> a checked recipe; shipped recipes; canonical form and digest."""

from waveassay.recipe.canonical import (
    ParameterRow,
    canonical_parameters,
    canonical_text,
    parameters,
    resolved_yaml,
)
from waveassay.recipe.check import Checked, check_recipe
from waveassay.recipe.fold import Folded, StepFinding, effective_source, fold
from waveassay.recipe.library import find
from waveassay.recipe.model import (
    Anchor,
    Chain,
    Citation,
    ConditionRule,
    Origin,
    Place,
    Recipe,
    SignalRule,
    Step,
)
from waveassay.recipe.problems import Problem, RecipeError
from waveassay.recipe.registry import BrokenBundle, Registry, load_registry
from waveassay.recipe.schema import recipe_schema

__all__ = [
    "Anchor",
    "BrokenBundle",
    "Chain",
    "Checked",
    "Citation",
    "ConditionRule",
    "Folded",
    "Origin",
    "ParameterRow",
    "Place",
    "Problem",
    "Recipe",
    "RecipeError",
    "Registry",
    "SignalRule",
    "Step",
    "StepFinding",
    "canonical_parameters",
    "canonical_text",
    "check_recipe",
    "effective_source",
    "find",
    "fold",
    "load_registry",
    "parameters",
    "read_recipe",
    "recipe_schema",
    "resolved_yaml",
]


def read_recipe(argument: str, registry: Registry | None = None) -> Recipe:
    """Return the checked recipe that a path or a shipped recipe's name stands for.

    `find` and `check_recipe` do the same in two moves, and give warnings too.

    Raises
    ------
    RecipeError
        With everything that is wrong with it, warnings included, in file order.
    UsageError
        When there is no such recipe, or it cannot be read.
    """
    text, path = find(argument)
    checked = check_recipe(text, path, registry)
    if checked.recipe is None:
        raise RecipeError(checked.problems)
    return checked.recipe
