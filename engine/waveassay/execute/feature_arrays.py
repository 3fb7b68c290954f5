"""Features of one signal as named arrays; see `waveassay.execute.stored_features` for the way back.

Features of the same epochs share what their rows say, which is kept once.
"""

from collections.abc import Mapping

from waveassay.contract import Features, Rows
from waveassay.execute.arrays import Arrays, texts_to_arrays

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


def _rows_to_arrays(prefix: str, rows: Rows) -> Arrays:
    return {
        f"{prefix}.start_s": rows.start_s,
        f"{prefix}.duration_s": rows.duration_s,
        f"{prefix}.kept": rows.kept,
        f"{prefix}.epochs": rows.epochs,
        **texts_to_arrays(f"{prefix}.condition", rows.condition),
        **texts_to_arrays(f"{prefix}.reason", rows.reason),
    }
