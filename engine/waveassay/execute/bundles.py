"""The packages of stages that are installed, for the record of the environment."""

from collections.abc import Iterator
from importlib.metadata import entry_points
from importlib.util import find_spec
from pathlib import Path

from waveassay.provenance.environment import Bundle
from waveassay.recipe.registry import GROUP


def installed_bundles() -> Iterator[Bundle]:
    """Yield every package of stages that can be found, whether or not it loads."""
    for point in entry_points(group=GROUP):
        try:
            spec = find_spec(point.module)
        except (ImportError, ValueError):
            continue
        if spec is None or not spec.origin:
            continue
        version = point.dist.version if point.dist else ""
        name = point.dist.name if point.dist else point.name
        yield Bundle(f"{name}:{point.name}", version, Path(spec.origin).parent)
