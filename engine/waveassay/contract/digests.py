"""One text for one value, and its SHA-256: the ground under keys, logs and identifiers.

The canonical form is JSON in UTF-8, without spaces, keys sorted by code point. What is told apart:
``1``, ``1.0``, ``True`` and ``"1"`` are four values; so are ``0.0`` and ``-0.0``. What is not:
tuples and lists, an enumeration's member and its value, a fraction and its text ``"p/q"``
(``Fraction(4)`` is ``"4/1"``), the order of keys. All else is refused rather than guessed at.
"""

import hashlib
import json
import math
from collections.abc import Mapping
from enum import Enum
from fractions import Fraction
from pathlib import Path
from typing import Any

#: Most values by far are of these types, of which json writes each in one way.
_AS_THEY_ARE = frozenset({str, int, bool, type(None)})


def canonical_json(value: object) -> bytes:
    """Return the one text of a value: sorted keys, floats by their shortest exact text.

    A lone surrogate (from a file name that is not UTF-8) is written as its JSON escape, so that
    the text is always sound UTF-8 and reads back to the same value.

    Raises
    ------
    TypeError
        For anything but mappings with text keys, lists, tuples, text, numbers, fractions,
        enumerations, booleans and None.
    ValueError
        For a number that is not finite.
    """
    text = json.dumps(_plain(value), sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    return text.encode("utf-8", "backslashreplace")


def digest(value: object) -> str:
    """Return the SHA-256 of a value's canonical form, in hexadecimal."""
    return hashlib.sha256(canonical_json(value)).hexdigest()


def source_digest(folder: Path, pattern: str = "*") -> str:
    """Return one SHA-256 over the files below a folder that match: their names and their bytes.

    Compiled Python and hidden files are left out; data and extensions that a package carries are
    as much part of its code as its modules.
    """
    files = sorted(path.relative_to(folder) for path in folder.rglob(pattern) if path.is_file())
    kept = [file for file in files if not any(map(_is_left_out, file.parts))]
    return digest([(file.as_posix(), _sha256(folder / file)) for file in kept])


def _is_left_out(part: str) -> bool:
    return part == "__pycache__" or part.startswith(".")


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _plain(value: object) -> Any:
    """Turn a value into what json writes in one way only, or refuse it."""
    if type(value) in _AS_THEY_ARE:
        return value
    if isinstance(value, Enum):  # before int and str, which an enumeration may also be
        return _plain(value.value)
    if value is None or isinstance(value, bool):
        return value
    # The base types' own conversions, so that a subclass (a numpy float) cannot print otherwise.
    if isinstance(value, str):
        return str.__str__(value)
    if isinstance(value, int):
        return int(value)
    if isinstance(value, float):
        if not math.isfinite(value):
            raise ValueError(f"{value!r} has no canonical form; only finite numbers have one")
        return float(value)
    if isinstance(value, Fraction):
        return f"{value.numerator}/{value.denominator}"
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, dict) or isinstance(value, Mapping):  # noqa: SIM101 (most are; it is fast)
        return {_key(key): _plain(item) for key, item in value.items()}
    raise TypeError(f"{type(value).__name__} has no canonical form (got {value!r})")


def _key(key: object) -> str:
    if type(key) is str:
        return key
    plain = _plain(key)
    if not isinstance(plain, str) or isinstance(key, Fraction):
        raise TypeError(f"keys are text in the canonical form (got {key!r})")
    return plain
