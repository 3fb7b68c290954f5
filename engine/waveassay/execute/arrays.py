"""Named arrays and facts in one file of the store, by signal.

The file is the length of its index (8 bytes, little-endian), the index (JSON), and a block for
each group of arrays: its own index and the arrays' bytes, each from a multiple of 64 bytes on. One
group is read with one call and none of the others; an archive of as many arrays (npz) takes longer
to open than to read.
"""

import json
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from itertools import chain
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Exclusion

Arrays = dict[str, NDArray[Any]]

_ALIGNED = 64
_LENGTH = 8


@dataclass(frozen=True)
class Group:
    """Arrays that are read together, and JSON facts about them."""

    arrays: Arrays = field(default_factory=dict)
    facts: Any = None


def save_groups(path: Path, groups: Mapping[str, Group], facts: Any = None) -> None:
    """Write groups of arrays, and facts about all of them; equal content gives equal bytes.

    Raises
    ------
    ValueError
        When an array holds Python objects.
    """
    packed = {name: _packed(group) for name, group in groups.items()}
    places, offset = {}, 0
    for name, pieces in packed.items():
        size = sum(_padded(piece.nbytes) for piece in pieces)
        places[name] = [offset, size]
        offset += size
    with path.open("wb") as file:
        for piece in chain(_index({"facts": facts, "groups": places}), *packed.values()):
            file.write(piece)
            file.write(bytes(_padded(piece.nbytes) - piece.nbytes))


class ArrayFile:
    """A file that `save_groups` wrote: its facts, and its groups when asked for."""

    def __init__(self, path: Path) -> None:
        self.path = path
        with path.open("rb") as file:
            length = int.from_bytes(file.read(_LENGTH), "little")
            index = json.loads(file.read(length))
        self.facts: Any = index["facts"]
        self._places: dict[str, tuple[int, int]] = index["groups"]
        self._first = _padded(_LENGTH + length)

    def __iter__(self) -> Iterator[str]:
        return iter(self._places)

    def group(self, name: str) -> Group:
        """Read one group; its arrays may not be written."""
        offset, size = self._places[name]
        with self.path.open("rb") as file:
            return _unpacked(_read(file, self._first + offset, size))


def _index(known: Any) -> list[memoryview]:
    text = json.dumps(known, sort_keys=True).encode()
    return [memoryview(len(text).to_bytes(_LENGTH, "little") + text)]


def _packed(group: Group) -> list[memoryview]:
    """Return the bytes of a group in pieces, each of which is padded when it is written."""
    index, pieces, offset = {}, [], 0
    for name, array in group.arrays.items():
        if array.dtype.hasobject:
            raise ValueError(f"array {name} holds Python objects")
        plain = np.ascontiguousarray(array)
        index[name] = [plain.dtype.str, array.shape, offset]
        pieces.append(plain.reshape(-1).view(np.uint8).data)
        offset += _padded(plain.nbytes)
    return [*_index({"facts": group.facts, "arrays": index}), *pieces]


def _unpacked(block: bytes) -> Group:
    length = int.from_bytes(block[:_LENGTH], "little")
    index = json.loads(block[_LENGTH : _LENGTH + length])
    first = _padded(_LENGTH + length)
    arrays = {}
    for name, (kind, shape, offset) in index["arrays"].items():
        dtype = np.dtype(kind)
        count = int(np.prod(shape, dtype=np.int64))
        flat = np.frombuffer(block, dtype, count, first + offset) if count else np.empty(0, dtype)
        arrays[name] = flat.reshape(shape)
    return Group(arrays, index["facts"])


def _read(file: BinaryIO, start: int, size: int) -> bytes:
    file.seek(start)
    return file.read(size)


def _padded(size: int) -> int:
    return -(-size // _ALIGNED) * _ALIGNED


def texts_to_arrays(name: str, texts: Sequence[str]) -> Arrays:
    """Return texts of which many are alike as two arrays: which ones there are, and which where."""
    known, codes = coded(texts)
    return {f"{name}.texts": np.array(known, np.str_), f"{name}.codes": codes}


def coded(texts: Sequence[str]) -> tuple[list[str], NDArray[np.int32]]:
    """Return which texts there are, in the order first met, and for each place which one."""
    number = {text: place for place, text in enumerate(dict.fromkeys(texts))}
    return list(number), np.fromiter(map(number.__getitem__, texts), np.int32, len(texts))


def texts_from_arrays(name: str, arrays: Mapping[str, NDArray[Any]]) -> tuple[str, ...]:
    """Return the texts that `texts_to_arrays` put into arrays."""
    texts: list[str] = arrays[f"{name}.texts"].tolist()
    return tuple(map(texts.__getitem__, arrays[f"{name}.codes"].tolist()))


def exclusions_to_json(exclusions: tuple[Exclusion, ...]) -> list[list[str]]:
    """Return masked time as exact text."""
    return [[str(e.start_s), str(e.stop_s), e.reason] for e in exclusions]


def exclusions_from_json(items: list[list[str]]) -> tuple[Exclusion, ...]:
    """Read what `exclusions_to_json` wrote."""
    return tuple(Exclusion(Fraction(a), Fraction(b), reason) for a, b, reason in items)
