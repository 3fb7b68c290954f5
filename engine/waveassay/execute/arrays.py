"""Named arrays and facts in one file of the store."""

import json
from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Exclusion

Arrays = dict[str, NDArray[Any]]

_FACTS = "facts"


def save_arrays(path: Path, arrays: Mapping[str, NDArray[Any]], facts: Any) -> None:
    """Write arrays and JSON facts; the same content gives the same bytes."""
    text = np.frombuffer(json.dumps(facts, sort_keys=True).encode(), np.uint8)
    with path.open("wb") as file:
        np.savez(file, allow_pickle=False, **{**arrays, _FACTS: text})


def load_arrays(path: Path, prefix: str = "") -> Arrays:
    """Read the arrays that `save_arrays` wrote below a prefix, which is taken off their names."""
    with np.load(path, allow_pickle=False) as file:
        names = [name for name in file.files if name != _FACTS and name.startswith(prefix)]
        return {name.removeprefix(prefix): file[name] for name in names}


def load_facts(path: Path) -> Any:
    """Read the facts that `save_arrays` wrote."""
    with np.load(path, allow_pickle=False) as file:
        return json.loads(file[_FACTS].tobytes())


def exclusions_to_json(exclusions: tuple[Exclusion, ...]) -> list[list[str]]:
    """Return masked time as exact text."""
    return [[str(e.start_s), str(e.stop_s), e.reason] for e in exclusions]


def exclusions_from_json(items: list[list[str]]) -> tuple[Exclusion, ...]:
    """Read what `exclusions_to_json` wrote."""
    return tuple(Exclusion(Fraction(a), Fraction(b), reason) for a, b, reason in items)
