"""Named arrays and facts in one file of the store, by signal.

The file is a block for each group of arrays (its own index and the arrays' bytes), the index of
the blocks (JSON), and where that begins (8 bytes, little-endian); blocks and arrays begin at
multiples of 64 bytes. One group is written or read without the others in memory. An archive of as
many arrays (npz) takes longer to open than to read.
"""

import json
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from fractions import Fraction
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


class GroupWriter:
    """Writes groups of arrays one after another; equal content gives equal bytes.

    A group is on its way to the disk when `add` returns, and need not be held.
    """

    def __init__(self, file: BinaryIO) -> None:
        self._file = file
        self._places: dict[str, tuple[int, int]] = {}
        self._offset = 0

    def add(self, name: str, group: Group) -> None:
        """Write a group.

        Raises
        ------
        ValueError
            When an array holds Python objects.
        """
        begun = self._offset
        for piece in _packed(group):
            self._file.write(piece)
            self._file.write(bytes(_padded(piece.nbytes) - piece.nbytes))
            self._offset += _padded(piece.nbytes)
        self._places[name] = (begun, self._offset - begun)

    def end(self, facts: Any) -> None:
        """Write the index, with facts about all groups."""
        self._file.write(_json({"facts": facts, "groups": self._places}))
        self._file.write(self._offset.to_bytes(_LENGTH, "little"))


@contextmanager
def group_writer(path: Path) -> Iterator[GroupWriter]:
    """Open a file for groups; the caller ends it with its facts."""
    with path.open("wb") as file:
        yield GroupWriter(file)


def save_groups(path: Path, groups: Mapping[str, Group], facts: Any = None) -> None:
    """Write groups that are all at hand, and facts about all of them."""
    with group_writer(path) as writer:
        for name, group in groups.items():
            writer.add(name, group)
        writer.end(facts)


class ArrayFile:
    """A file of groups: its facts, and its groups when asked for."""

    def __init__(self, path: Path) -> None:
        self.path = path
        with path.open("rb") as file:
            end = file.seek(-_LENGTH, os.SEEK_END)
            begin = int.from_bytes(file.read(_LENGTH), "little")
            index = json.loads(_read(file, begin, end - begin))
        self.facts: Any = index["facts"]
        self._places: dict[str, tuple[int, int]] = index["groups"]

    def __iter__(self) -> Iterator[str]:
        return iter(self._places)

    def group(self, name: str) -> Group:
        """Read one group; its arrays may not be written."""
        with self.path.open("rb") as file:
            return _unpacked(_read(file, *self._places[name]))


def _json(known: Any) -> bytes:
    return json.dumps(known, sort_keys=True).encode()


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
    text = _json({"facts": group.facts, "arrays": index})
    return [memoryview(len(text).to_bytes(_LENGTH, "little") + text), *pieces]


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
