"""``waveassay schema``."""

import json
import sys

from waveassay.recipe.registry import load_registry
from waveassay.recipe.schema import recipe_schema


def print_schema() -> int:
    """Print the JSON Schema of recipes, with every installed stage that has one."""
    left_out: list[str] = []
    schema = recipe_schema(load_registry(), left_out)
    for text in left_out:
        print(f"left out: {text}", file=sys.stderr)  # noqa: T201
    print(json.dumps(schema, indent=1, ensure_ascii=False))  # noqa: T201
    return 0
