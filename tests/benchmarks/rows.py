"""Lines of a table of results, and whether a target is met."""

from collections.abc import Iterable
from dataclasses import dataclass

from benchmarks.measured import Spread


@dataclass(frozen=True)
class Row:
    """One line of a table.

    Attributes
    ----------
    limit : in the unit shown, None where no target is set.
    excellent : what would be better than the target, where that is set too.
    at_least : whether more is better.
    """

    what: str
    spread: Spread
    unit: str = ""
    limit: float | None = None
    excellent: float | None = None
    at_least: bool = False

    @property
    def verdict(self) -> str:
        """Whether the target is met: always, as a rule, or not."""
        if self.limit is None:
            return "none set"
        worst = self.spread.low if self.at_least else self.spread.high
        if not self._reaches(self.spread.median, self.limit):
            return "**not met**"
        if not self._reaches(worst, self.limit):
            return "median met"
        if self.excellent is not None and self._reaches(self.spread.median, self.excellent):
            return "excellent"
        return "met"

    def _reaches(self, value: float, wanted: float) -> bool:
        return value >= wanted if self.at_least else value <= wanted

    @property
    def cells(self) -> list[str]:
        """What stands in the table: with target and verdict where there is a target."""
        unit = f" {self.unit}" if self.unit else ""
        s = self.spread
        spread = "" if s.low == s.high else f" ({number(s.low)} to {number(s.high)})"
        measured = f"{number(s.median)}{spread}{unit}"
        if self.limit is None:
            return [self.what, measured]
        target = f"at {'least' if self.at_least else 'most'} {self.limit:g}{unit}"
        if self.excellent is not None:
            target += f" ({self.excellent:g} is excellent)"
        return [self.what, target, measured, self.verdict]


def number(value: float) -> str:
    """Return three digits of a number."""
    return f"{value:.3g}" if abs(value) < 1000 else f"{value:.0f}"


def table(rows: Iterable[Row], *, targets: bool) -> str:
    """Return rows as a table; all of them have a target, or none has."""
    heads = ["what", "target", "median (least to most)", "target met"]
    shown = heads if targets else [heads[0], heads[2]]
    return markdown([shown, *(row.cells for row in rows)])


def markdown(lines: Iterable[list[str]]) -> str:
    """Return cells as a table in Markdown; the first line is its head."""
    head, *rest = lines
    return "\n".join(f"| {' | '.join(line)} |" for line in [head, ["---"] * len(head), *rest])
