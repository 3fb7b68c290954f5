"""Features of one signal as named arrays, and back from what several stretches gave.

Features of the same epochs share what their rows say, which is kept once.
"""

from collections.abc import Mapping, Sequence

import numpy as np

from waveassay.contract import Features, Rows
from waveassay.execute.arrays import Arrays, Group, texts_from_arrays, texts_to_arrays

#: In a group's facts: number of a step -> number of the step under which its rows stand.
ROWS_OF = "rows_of"


def features_to_arrays(features: Mapping[int, Features]) -> tuple[Arrays, dict[str, int]]:
    """Return the arrays of all features of a stretch, and under which step each one's rows stand.

    Parameters
    ----------
    features : number of a step -> what it gave.
    """
    arrays: Arrays = {}
    rows_of: dict[str, int] = {}
    written: dict[int, int] = {}  # identity of rows -> step
    for index, made in features.items():
        owner = written.setdefault(id(made.rows), index)
        rows_of[str(index)] = owner
        if owner == index:
            arrays |= _rows_to_arrays(f"{index}.rows", made.rows)
        arrays |= {f"{index}.column.{part}": values for part, values in made.columns.items()}
        if any(made.missing):
            arrays |= texts_to_arrays(f"{index}.missing", made.missing)
    return arrays, rows_of


def features_from_groups(signal: str, groups: Sequence[Group]) -> dict[int, Features]:
    """Join the features that several stretches gave, by step; none where no stretch has any."""
    with_features = [group for group in groups if group.facts[ROWS_OF]]
    if not with_features:
        return {}
    joined: dict[tuple[int, ...], Rows] = {}
    found: dict[int, Features] = {}
    for name in with_features[0].facts[ROWS_OF]:
        owners = tuple(group.facts[ROWS_OF][name] for group in with_features)
        if owners not in joined:
            pairs = zip(with_features, owners, strict=True)
            joined[owners] = _joined_rows([_rows(g.arrays, f"{owner}.rows") for g, owner in pairs])
        prefix = f"{name}.column."
        columns = [n for n in with_features[0].arrays if n.startswith(prefix)]
        missing: list[str] = []
        for group, owner in zip(with_features, owners, strict=True):
            if f"{name}.missing.codes" in group.arrays:
                missing += texts_from_arrays(f"{name}.missing", group.arrays)
            else:
                missing += [""] * group.arrays[f"{owner}.rows.start_s"].size
        found[int(name)] = Features(
            signal,
            joined[owners],
            {
                column.removeprefix(prefix): np.concatenate(
                    [g.arrays[column] for g in with_features]
                )
                for column in columns
            },
            tuple(missing),
        )
    return found


def _rows_to_arrays(prefix: str, rows: Rows) -> Arrays:
    return {
        f"{prefix}.start_s": rows.start_s,
        f"{prefix}.duration_s": rows.duration_s,
        f"{prefix}.kept": rows.kept,
        f"{prefix}.epochs": rows.epochs,
        **texts_to_arrays(f"{prefix}.condition", rows.condition),
        **texts_to_arrays(f"{prefix}.reason", rows.reason),
    }


def _rows(arrays: Arrays, prefix: str) -> Rows:
    return Rows(
        start_s=arrays[f"{prefix}.start_s"],
        duration_s=arrays[f"{prefix}.duration_s"],
        condition=texts_from_arrays(f"{prefix}.condition", arrays),
        kept=arrays[f"{prefix}.kept"],
        reason=texts_from_arrays(f"{prefix}.reason", arrays),
        epochs=arrays[f"{prefix}.epochs"],
    )


def _joined_rows(parts: Sequence[Rows]) -> Rows:
    return Rows(
        start_s=np.concatenate([part.start_s for part in parts]),
        duration_s=np.concatenate([part.duration_s for part in parts]),
        condition=tuple(text for part in parts for text in part.condition),
        kept=np.concatenate([part.kept for part in parts]),
        reason=tuple(text for part in parts for text in part.reason),
        epochs=np.concatenate([part.epochs for part in parts]),
    )
