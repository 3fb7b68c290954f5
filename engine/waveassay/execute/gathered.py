"""What all stretches of a passage gave, read back one signal at a time."""

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from waveassay.contract import Exclusion, Part, merged
from waveassay.execute.arrays import Arrays, exclusions_from_json, load_arrays, load_facts
from waveassay.execute.rows import FILE
from waveassay.execute.store import Store


@dataclass(frozen=True)
class LaneRows:
    """The arrays of one signal, by stretch, in order of time."""

    arrays: Sequence[Arrays]

    def named(self, prefix: str) -> dict[str, list[Any]]:
        """Return the arrays below a prefix, each name with its parts."""
        found: dict[str, list[Any]] = defaultdict(list)
        for part in self.parts(prefix):
            for name, array in part.items():
                found[name].append(array)
        return found

    def parts(self, prefix: str) -> list[Part]:
        """Return the arrays below a prefix, one part a stretch that has some."""
        parts = (
            {n.removeprefix(prefix): a for n, a in arrays.items() if n.startswith(prefix)}
            for arrays in self.arrays
        )
        return [part for part in parts if part]


@dataclass(frozen=True)
class Gathered:
    """Where the rows of all stretches are, in order of time, with their masks.

    Attributes
    ----------
    outside : signals with samples outside the digital limits of their header.
    """

    paths: Sequence[Path]
    masks: Sequence[Mapping[str, Mapping[str, list[list[str]]]]]
    outside: frozenset[int]

    def lane(self, lane_no: int) -> LaneRows:
        """Read one signal's arrays: all signals at once would fill the memory."""
        prefix = f"{lane_no}."
        return LaneRows([load_arrays(path, prefix) for path in self.paths])

    def excluded(self, lane_no: int) -> tuple[Exclusion, ...]:
        """Return the masks on a signal where epochs were cut."""
        return merged(
            item
            for masks in self.masks
            for items in masks[str(lane_no)].values()
            for item in exclusions_from_json(items)
        )


def gather(store: Store, keys: Sequence[str]) -> Gathered:
    """Find the rows of all stretches, checked against their digests."""
    paths = [store.read(key).path(FILE) for key in keys]
    facts = [load_facts(path) for path in paths]
    outside = frozenset(lane for known in facts for lane in known["outside"])
    return Gathered(paths, [known["masks"] for known in facts], outside)
