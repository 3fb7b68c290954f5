"""``waveassay schema``."""

import json

from waveassay.recipe.registry import load_registry
from waveassay.recipe.schema import recipe_schema


def print_schema() -> int:
    """Print the JSON Schema of recipes, with every installed stage."""
    print(json.dumps(recipe_schema(load_registry()), indent=1, ensure_ascii=False))  # noqa: T201
    return 0
