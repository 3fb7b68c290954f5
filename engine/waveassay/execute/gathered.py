"""What all stretches of a passage gave, read back one signal at a time."""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

from waveassay.contract import Exclusion, Part, merged
from waveassay.execute.arrays import ArrayFile, Group, exclusions_from_json
from waveassay.execute.rows import FILE, MASKS
from waveassay.execute.signals import OUTSIDE
from waveassay.execute.store import Store
from waveassay.execute.stored_features import StoredFeatures, features_from_groups


@dataclass(frozen=True)
class LaneRows:
    """What the stretches gave of one signal, in order of time."""

    groups: Sequence[Group]

    @cached_property
    def features(self) -> dict[int, StoredFeatures]:
        """Features by the number of their step."""
        return features_from_groups(self.groups)

    def parts(self, index: int) -> list[Part]:
        """Return what was collected for a step, one part a stretch that has some."""
        prefix = f"{index}.part."
        parts = (
            {n.removeprefix(prefix): a for n, a in group.arrays.items() if n.startswith(prefix)}
            for group in self.groups
        )
        return [part for part in parts if part]

    @property
    def excluded(self) -> tuple[Exclusion, ...]:
        """The masks on the signal where epochs were cut."""
        return merged(
            item
            for group in self.groups
            for items in group.facts[MASKS].values()
            for item in exclusions_from_json(items)
        )


@dataclass(frozen=True)
class Gathered:
    """Where the rows of all stretches are, in order of time.

    Attributes
    ----------
    outside : signals with samples outside the digital limits of their header.
    """

    files: Sequence[ArrayFile]
    outside: frozenset[int]

    def lane(self, lane_no: int) -> LaneRows:
        """Read what there is of one signal: all signals at once would fill the memory."""
        return LaneRows([file.group(str(lane_no)) for file in self.files])


def gather(store: Store, keys: Sequence[str]) -> Gathered:
    """Find the rows of all stretches, checked against their digests."""
    files = [ArrayFile(store.read(key).path(FILE)) for key in keys]
    return Gathered(files, frozenset(lane for file in files for lane in file.facts[OUTSIDE]))
