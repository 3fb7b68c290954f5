"""Short tables as CSV too, made by workers: the main process joins thousands of them as text."""

import json
from pathlib import Path

from waveassay.execute.finish import FACTS_FILE
from waveassay.provenance.tables import write_short_csv


def add_texts(folder: Path) -> None:
    """Write, beside a finished passage's tables, those as CSV that a run may join."""
    facts = json.loads((folder / FACTS_FILE).read_text(encoding="utf-8"))
    if facts["csv"] != "never":
        for path in sorted(folder.glob("*.parquet")):
            write_short_csv(path)
