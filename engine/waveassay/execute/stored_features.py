"""Features of one signal as tables take them, put together from what several stretches gave.

A text of a row (its condition, why it is not kept) is one of a few, and there are many rows: which
of these it is stays a number from the store to the table.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Bools, Features, Floats, Ints
from waveassay.execute.arrays import Arrays, Group, coded
from waveassay.execute.feature_arrays import ROWS_OF

Codes = NDArray[np.int32]


@dataclass(frozen=True)
class CodedTexts:
    """One text a row: which texts there are, each once, and the number of each row's."""

    known: tuple[str, ...]
    codes: Codes

    @classmethod
    def of(cls, texts: Sequence[str]) -> "CodedTexts":
        """Return texts as numbers."""
        known, codes = coded(texts)
        return cls(tuple(known), codes)

    def are(self, text: str) -> Bools:
        """Tell for each row whether it has this text."""
        number = self.known.index(text) if text in self.known else -1
        return np.equal(self.codes, number)


@dataclass(frozen=True)
class StoredRows:
    """What `waveassay.contract.Rows` says, with its texts as numbers."""

    start_s: Floats
    duration_s: Floats
    condition: CodedTexts
    kept: Bools
    reason: CodedTexts
    epochs: Ints

    def __len__(self) -> int:
        return int(self.kept.size)


@dataclass(frozen=True)
class StoredFeatures:
    """What `waveassay.contract.Features` says; ``missing`` is None where nothing is missing."""

    rows: StoredRows
    columns: Mapping[str, Floats]
    missing: CodedTexts | None = None

    @classmethod
    def of(cls, features: Features) -> "StoredFeatures":
        """Return features that were not stored."""
        rows = features.rows
        condition, reason = CodedTexts.of(rows.condition), CodedTexts.of(rows.reason)
        stored = StoredRows(
            rows.start_s, rows.duration_s, condition, rows.kept, reason, rows.epochs
        )
        missing = CodedTexts.of(features.missing) if any(features.missing) else None
        return cls(stored, features.columns, missing)


@dataclass
class _Texts:
    """Texts of several stretches, one stretch after another."""

    numbers: dict[str, int] = field(default_factory=dict)
    codes: list[Codes] = field(default_factory=list)

    def add(self, name: str, arrays: Arrays) -> None:
        known: list[str] = arrays[f"{name}.texts"].tolist()
        codes: Codes = arrays[f"{name}.codes"]
        numbers = [self.numbers.setdefault(text, len(self.numbers)) for text in known]
        same = numbers == list(range(len(known)))  # as they mostly are
        self.codes.append(codes if same else np.array(numbers, np.int32)[codes])

    def add_empty(self, count: int) -> None:
        self.codes.append(np.full(count, self.numbers.setdefault("", len(self.numbers)), np.int32))

    def joined(self) -> CodedTexts:
        return CodedTexts(tuple(self.numbers), np.concatenate(self.codes))


def features_from_groups(groups: Sequence[Group]) -> dict[int, StoredFeatures]:
    """Join the features that several stretches gave, by step; none where no stretch has any."""
    with_features = [group for group in groups if group.facts[ROWS_OF]]
    if not with_features:
        return {}
    joined: dict[tuple[int, ...], StoredRows] = {}
    found: dict[int, StoredFeatures] = {}
    for name in with_features[0].facts[ROWS_OF]:
        owners = tuple(group.facts[ROWS_OF][name] for group in with_features)
        parts = [
            (g.arrays, f"{owner}.rows") for g, owner in zip(with_features, owners, strict=True)
        ]
        if owners not in joined:
            joined[owners] = _joined_rows(parts)
        prefix = f"{name}.column."
        columns = [n for n in with_features[0].arrays if n.startswith(prefix)]
        found[int(name)] = StoredFeatures(
            joined[owners],
            {
                column.removeprefix(prefix): np.concatenate(
                    [g.arrays[column] for g in with_features]
                )
                for column in columns
            },
            _missing(name, parts),
        )
    return found


def _missing(step: str, parts: Sequence[tuple[Arrays, str]]) -> CodedTexts | None:
    name = f"{step}.missing"
    if not any(f"{name}.codes" in arrays for arrays, _ in parts):
        return None
    texts = _Texts()
    for arrays, rows in parts:
        if f"{name}.codes" in arrays:
            texts.add(name, arrays)
        else:
            texts.add_empty(arrays[f"{rows}.start_s"].size)
    return texts.joined()


def _joined_rows(parts: Sequence[tuple[Arrays, str]]) -> StoredRows:
    texts = {"condition": _Texts(), "reason": _Texts()}
    for arrays, rows in parts:
        for name, those in texts.items():
            those.add(f"{rows}.{name}", arrays)

    def joined(name: str) -> NDArray[Any]:
        return np.concatenate([arrays[f"{rows}.{name}"] for arrays, rows in parts])

    return StoredRows(
        start_s=joined("start_s"),
        duration_s=joined("duration_s"),
        condition=texts["condition"].joined(),
        kept=joined("kept"),
        reason=texts["reason"].joined(),
        epochs=joined("epochs"),
    )
