"""Read the recipe that a command names."""

from waveassay.recipe import Problem, Recipe, RecipeError, check_recipe, find


def load_recipe(argument: str) -> tuple[Recipe, tuple[Problem, ...]]:
    """Return a recipe and its warnings.

    Raises
    ------
    RecipeError
        With all that is wrong with it.
    UsageError
        When there is no such recipe.
    """
    checked = check_recipe(*find(argument))
    if checked.recipe is None:
        raise RecipeError(checked.problems)
    return checked.recipe, checked.warnings
