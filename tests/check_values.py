"""Values from outside, with their sources, that the tests in checks/ hold the stages to."""

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import yaml

VALUES = Path(__file__).parent / "checks" / "values"


@dataclass(frozen=True)
class Entry:
    """One check value, or a few that belong together.

    Attributes
    ----------
    id, quantity : its name, and what it is.
    input : what the value is for: text, a number, a list or a mapping, as the file says it.
    expected : a value or a mapping of values.
    tolerance : absolute; a mapping where it says ``rel`` or differs by key of ``expected``.
    source : where it was published.
    obtained : how it was come by; values from memory count as far as a computation repeats them.
    """

    id: str
    quantity: str
    input: Any
    expected: Any
    tolerance: Any
    source: str
    obtained: str
    note: str


@lru_cache(maxsize=1)
def entries() -> dict[str, Entry]:
    """Return all entries of checks/values/*.yaml by their id.

    A file is a list of entries, or has one under ``entries``.

    Raises
    ------
    ValueError
        When two files disagree on an entry.
    """
    found: dict[str, Entry] = {}
    for path in sorted(VALUES.glob("*.yaml")):
        content = yaml.safe_load(path.read_text(encoding="utf-8"))
        for item in content["entries"] if isinstance(content, dict) else content:
            new = Entry(**{name: item[name] for name in Entry.__dataclass_fields__})
            old = found.setdefault(new.id, new)
            if (old.expected, old.tolerance) != (new.expected, new.tolerance):
                raise ValueError(f"{path.name}: {new.id} says otherwise than another file")
    return found


def entry(entry_id: str) -> Entry:
    """Return one entry.

    Raises
    ------
    KeyError
        When there is none of that id.
    """
    try:
        return entries()[entry_id]
    except KeyError:
        raise KeyError(f"no check value {entry_id} in {VALUES}") from None
