"""The code behind a number: versions and source, as far as they can change it.

A version is raised by hand and can be forgotten, so keys hold a digest of the source too: a stage
that was edited is never answered from what its old code left in the store.
"""

import sys
from functools import lru_cache
from importlib.metadata import version
from pathlib import Path

import waveassay
from waveassay.contract import Stage
from waveassay.contract.digests import source_digest


@lru_cache(maxsize=1)
def engine() -> dict[str, str]:
    """Return the versions that can change a number, and the digest of the engine's source."""
    known = {name: version(name) for name in ("waveassay", "numpy", "scipy")}
    return known | {"source": source_digest(Path(waveassay.__file__).parent, "*.py")}


@lru_cache(maxsize=1)
def writers() -> dict[str, str]:
    """Return the versions of what writes tables and figures: they can change bytes, no number."""
    return {name: version(name) for name in ("pyarrow", "matplotlib")}


def stage_source(stage: Stage) -> str:
    """Return the digest of the package of stages that a stage comes from."""
    return _package_source(stage.params.__module__.split(".")[0])


@lru_cache(maxsize=64)
def _package_source(package: str) -> str:
    file = sys.modules[package].__file__
    if file is None:
        return ""
    path = Path(file)
    return source_digest(path.parent, "*" if path.name == "__init__.py" else path.name)
