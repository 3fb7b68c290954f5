"""Named arrays and facts in one file of the store, by signal.

The file is the arrays' bytes, those of a group together, then the index (JSON), and where that
begins (8 bytes, little-endian); arrays begin at multiples of 64 bytes. Signals of one file mostly
have arrays of the same names and shapes: a layout that groups share is told once. One group is
written, or read, without the others in memory. An archive of as many arrays (npz) takes longer to
open than to read.
"""

import hashlib
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from fractions import Fraction
from functools import lru_cache
from math import prod
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
        self._sha256 = hashlib.sha256()
        self._layouts: dict[str, int] = {}
        self._groups: dict[str, Any] = {}
        self._offset = 0

    @property
    def sha256(self) -> str:
        """The SHA-256 of what was written."""
        return self._sha256.hexdigest()

    def add(self, name: str, group: Group) -> None:
        """Write a group.

        Raises
        ------
        ValueError
            When an array holds Python objects.
        """
        arrays, pieces, size = {}, [], 0
        for key, array in group.arrays.items():
            if array.dtype.hasobject:
                raise ValueError(f"array {key} holds Python objects")
            plain = np.ascontiguousarray(array)
            arrays[key] = [plain.dtype.str, array.shape, size]
            pieces.append(plain.reshape(-1).view(np.uint8).data)
            gap = -plain.nbytes % _ALIGNED
            if gap:
                pieces.append(memoryview(bytes(gap)))
            size += plain.nbytes + gap
        layout = json.dumps({"arrays": arrays, "size": size}, sort_keys=True)
        number = self._layouts.setdefault(layout, len(self._layouts))
        self._groups[name] = {"facts": group.facts, "layout": number, "start": self._offset}
        # Most groups are many small arrays, which are faster written as one.
        self._write(pieces[0] if len(pieces) == 1 else b"".join(pieces))

    def end(self, facts: Any) -> None:
        """Write the index, with facts about all groups."""
        begin = self._offset
        layouts = [json.loads(layout) for layout in self._layouts]
        index = {"facts": facts, "groups": self._groups, "layouts": layouts}
        self._write(json.dumps(index, sort_keys=True).encode())
        self._write(begin.to_bytes(_LENGTH, "little"))

    def _write(self, block: bytes | memoryview) -> None:
        self._file.write(block)
        self._sha256.update(block)
        self._offset += len(block)


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
        self._groups: dict[str, Any] = index["groups"]
        self._layouts: list[Any] = index["layouts"]

    def __iter__(self) -> Iterator[str]:
        return iter(self._groups)

    def facts_of(self, name: str) -> Any:
        """Return the facts of one group; nothing is read."""
        return self._groups[name]["facts"]

    def group(self, name: str) -> Group:
        """Read one group; its arrays may not be written."""
        known = self._groups[name]
        layout = self._layouts[known["layout"]]
        with self.path.open("rb") as file:
            block = _read(file, known["start"], layout["size"])
        arrays = {}
        for key, (kind, shape, offset) in layout["arrays"].items():
            dtype = np.dtype(kind)
            count = prod(shape)
            flat = np.frombuffer(block, dtype, count, offset) if count else np.empty(0, dtype)
            arrays[key] = flat.reshape(shape)
        return Group(arrays, known["facts"])

    def fill(self, out: NDArray[Any], name: str, array: str, first: int) -> None:
        """Read a part of one array of one dimension, from element ``first`` on, and nothing else.

        Parameters
        ----------
        out : what is filled; contiguous, and of the array's kind.

        Raises
        ------
        ValueError
            When the array is of another kind, or ends before.
        """
        known = self._groups[name]
        kind, (count,), offset = self._layouts[known["layout"]]["arrays"][array]
        if out.dtype.str != kind or first + out.size > count:
            raise ValueError(f"{self.path}: {array} of {name} is {count} numbers of kind {kind}")
        with self.path.open("rb") as file:
            file.seek(known["start"] + offset + first * out.itemsize)
            if file.readinto(out.view(np.uint8).data) != out.nbytes:
                raise ValueError(f"{self.path}: the file ends within {array} of {name}")


def _read(file: BinaryIO, start: int, size: int) -> bytes:
    file.seek(start)
    return file.read(size)


def texts_to_arrays(name: str, texts: Sequence[str]) -> Arrays:
    """Return texts of which many are alike as two arrays: which ones there are, and which where."""
    known, codes = coded(texts)
    return {f"{name}.texts": np.array(known, np.str_), f"{name}.codes": codes}


def coded(texts: Sequence[str]) -> tuple[list[str], NDArray[np.int32]]:
    """Return which texts there are, in the order first met, and for each place which one."""
    number = {text: place for place, text in enumerate(dict.fromkeys(texts))}
    return list(number), np.fromiter(map(number.__getitem__, texts), np.int32, len(texts))


def exclusions_to_json(exclusions: tuple[Exclusion, ...]) -> list[list[str]]:
    """Return masked time as exact text."""
    return [[str(e.start_s), str(e.stop_s), e.reason] for e in exclusions]


def exclusions_from_json(items: list[list[str]]) -> tuple[Exclusion, ...]:
    """Read what `exclusions_to_json` wrote."""
    return tuple(Exclusion(fraction_of(a), fraction_of(b), reason) for a, b, reason in items)


@lru_cache(maxsize=1 << 12)
def fraction_of(text: str) -> Fraction:
    """Read an exact number; signals have most of their times in common."""
    return Fraction(text)
