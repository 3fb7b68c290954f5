"""One run of the command over recordings made for the purpose, for the checks to read."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from made_files import write_all
from published_recipe import recipe_text
from running import command, numbers, only_run, rows
from waveassay.contract import Floats


@dataclass
class PublishedRun:
    """A finished run.

    Attributes
    ----------
    folder : the run folder.
    recordings : where the recordings stand.
    """

    folder: Path
    recordings: Path
    _tables: dict[str, list[dict[str, str]]] = field(default_factory=dict, repr=False)

    def table(self, name: str) -> list[dict[str, str]]:
        """Return the rows of a CSV, such as ``epochs/hann``."""
        if name not in self._tables:
            self._tables[name] = rows(self.folder, name)
        return self._tables[name]

    def epochs(self, chain: str, signal: str, column: str) -> Floats:
        """Return a feature of every kept epoch of a signal."""
        found = [
            row
            for row in self.table(f"epochs/{chain}")
            if (row["signal"], row["condition"], row["kept"]) == (signal, "whole", "true")
        ]
        assert found, f"{chain} kept no epoch of {signal}"
        return np.array(numbers(found, column))

    def value(self, chain: str, signal: str, feature: str, statistic: str = "mean") -> float:
        """Return a number of summary.csv."""
        (row,) = (
            row
            for row in self.table("summary")
            if (row["chain"], row["signal"], row["condition"], row["feature"])
            == (chain, signal, "whole", feature)
        )
        return float(row[statistic])

    def spectrum(self, chain: str, signal: str, condition: str = "whole") -> Mapping[str, Floats]:
        """Return frequency_hz, density and dof of an averaged spectrum."""
        found = [
            row
            for row in self.table(f"averages/{chain}-spectra")
            if (row["signal"], row["condition"]) == (signal, condition)
        ]
        assert found, f"{chain} has no average of {signal}"
        names = ("frequency_hz", "density", "dof")
        return {name: np.array(numbers(found, name)) for name in names}


def run_published(folder: Path) -> PublishedRun:
    """Write the recordings and the recipe, and run the command over them."""
    recordings = folder / "recordings"
    recordings.mkdir()
    units = write_all(recordings)
    recipe = folder / "recipe.yaml"
    recipe.write_text(recipe_text(units), encoding="utf-8")
    done = command("run", recipe, recordings, "--into", folder / "out", "--workers", 2)
    assert done.returncode == 0, done.stdout + done.stderr
    return PublishedRun(only_run(folder / "out"), recordings)
