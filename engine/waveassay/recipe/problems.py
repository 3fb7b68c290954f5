"""What is wrong with a recipe, where, and what to do about it.

======  ============================================================================
code    meaning
======  ============================================================================
Y101    not a text file in UTF-8, or a character that has no place in one
Y102    the file is too large
Y103    the file is empty
Y104    not YAML
Y105    a tab where spaces are due
Y106    more than one document
Y107    the file is not a mapping of keys to values
Y108    a key stands twice
Y109    an alias that is unknown, contains itself, or is one too many
Y110    a merge key (``<<``)
Y111    a tag (``!!str``)
Y112    nested too deeply
Y113    a key that is not a short text
Y114    a number with too many digits
R101    a key of the grammar is missing
R102    a key that the grammar does not have
R103    a step that does not name one stage
R104    a stage that is not installed
R105    a name that is not well formed, or is reserved
R106    a condition that contradicts itself
R107    an origin for a parameter that does not exist
R108    an alternative that the parameter would not take
R201    a parameter that the stage does not have
R202    a parameter is missing
R203    a value of the wrong type, or none of those allowed
R204    a number without its unit
R205    a unit that is unknown, or of another kind
R206    a value out of bounds
R207    values that the stage refuses together
R301    a chain that is empty or does not begin with a source
R302    no earlier step gives what a step takes
R303    ``on`` names nothing that is there
R304    ``as`` gives a name that is taken
R305    a step on signals stands after the epochs were cut
R306    a signal that the recipe does not describe
R307    ``on`` names an output that the step cannot take
R309    a stage refuses, seen in the chain as a whole
R310    a stage fails while it is checked: its author's to mend
W401    a stage warns, seen in the chain as a whole
W402    an output that nothing uses
W403    a signal that no chain reads
W404    a stage whose name another package claims too
======  ============================================================================

Codes in Y concern the file as YAML, R1 the grammar, R2 values, R3 chains, W warnings.
"""

import difflib
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Literal

from waveassay.contract.errors import UsageError
from waveassay.recipe.model import Place

Severity = Literal["error", "warning"]


@dataclass(frozen=True)
class Problem:
    """One thing wrong with a recipe.

    Attributes
    ----------
    where : what it is about, dotted (``cortex.resample.rate``); empty for the file as a whole.
    """

    place: Place
    code: str
    message: str
    severity: Severity = "error"
    where: str = ""

    def __str__(self) -> str:
        about = f"{self.where}: " if self.where else ""
        return f"{self.place}: {self.code} {about}{self.message}"


def in_file_order(problems: Iterable[Problem]) -> tuple[Problem, ...]:
    """Sort by place; problems at one place stay in the order in which they were found."""
    return tuple(sorted(dict.fromkeys(problems), key=lambda p: (p.place.line, p.place.column)))


class RecipeError(UsageError):
    """Everything wrong with a recipe, in file order, one line each."""

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = in_file_order(problems)
        super().__init__("\n".join(map(str, self.problems)))


@dataclass
class Report:
    """Gathers problems while a recipe is checked."""

    path: str
    problems: list[Problem] = field(default_factory=list)

    def error(self, place: Place, code: str, message: str, where: str = "") -> None:
        """Record an error."""
        self.problems.append(Problem(place, code, message, "error", where))

    def warn(self, place: Place, code: str, message: str, where: str = "") -> None:
        """Record a warning."""
        self.problems.append(Problem(place, code, message, "warning", where))

    @property
    def errors(self) -> int:
        """How many errors there are so far."""
        return sum(problem.severity == "error" for problem in self.problems)


def nearest(name: str, options: Iterable[str]) -> str:
    """Return ``; did you mean 'x'?`` for the option most like a name, or nothing."""
    known = list(options)
    folded = {option.casefold(): option for option in known}
    near = difflib.get_close_matches(name.casefold(), folded, n=1)
    return f"; did you mean '{folded[near[0]]}'?" if near else ""
