"""What recordings share: the way of a signal through a chain, worked out once for all alike.

Thousands of recordings of one study have the same labels, units and rates. What follows from these
and from the recipe alone is kept here; nothing of one recording is.
"""

from collections.abc import Callable, Hashable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING

from waveassay.contract import SignalSpec
from waveassay.plan.columns import FeatureColumn, columns_by_chain
from waveassay.plan.labels import Matched, match_signals
from waveassay.plan.program import Program, compile_program
from waveassay.plan.windows import Form
from waveassay.recipe.fold import StepFinding, fold
from waveassay.recipe.model import Chain, Recipe

if TYPE_CHECKING:
    from waveassay.plan.passage import Alike

#: Recordings of so many kinds are remembered: beyond, few would be like an earlier one.
_MOST_KINDS = 256


@dataclass(frozen=True, eq=False)
class Route:
    """The way of one signal through one chain.

    Attributes
    ----------
    spec : the signal as it is read.
    findings : what the stages say of it.
    digests : of its part in tasks, once known, by action and pass.
    """

    spec: SignalSpec
    program: Program
    findings: tuple[StepFinding, ...]
    digests: dict[tuple[str, int], str] = field(default_factory=dict)

    @cached_property
    def forms(self) -> tuple[Form, ...]:
        """How each pass over its samples is carried out."""
        return tuple(Form(self.program, pass_no) for pass_no in range(self.program.passes))

    @cached_property
    def outline(self) -> Hashable:
        """What routes of one chain have in common whose signals differ in their names alone."""
        spec, program = self.spec, self.program
        moves = tuple((m.index, m.source, m.level, m.pass_no) for m in program.moves.values())
        forms = tuple(form.alike for form in self.forms)
        return spec.unit, spec.modality, spec.rate_hz, moves, forms, program.rows_reach


class Routes:
    """The routes of a recipe's signals, each worked out when it is first asked for."""

    def __init__(self, recipe: Recipe) -> None:
        self.recipe = recipe
        self._routes: dict[tuple[str, str, SignalSpec], Route] = {}
        self._matched: dict[tuple[str, ...], Matched] = {}
        self._alike: dict[Hashable, Alike] = {}

    @cached_property
    def columns(self) -> Mapping[str, tuple[FeatureColumn, ...]]:
        """Columns of every chain's tables."""
        return columns_by_chain(self.recipe)

    @cached_property
    def wanted(self) -> tuple[str, ...]:
        """Names of the signals that any chain reads, in the order first named."""
        named = (name for chain in self.recipe.chains.values() for name in chain.signals)
        return tuple(dict.fromkeys(named))

    def matched(self, labels: Sequence[str]) -> Matched:
        """Match the recipe's signals to the labels of a file; see `match_signals`."""
        key = tuple(labels)
        if key not in self._matched:
            self._matched[key] = match_signals(self.recipe.signals, key, self.wanted)
        return self._matched[key]

    def alike(self, what: Hashable, work_out: Callable[[], "Alike"]) -> "Alike":
        """Return what all recordings have in common that are alike in ``what``."""
        if what not in self._alike:
            if len(self._alike) >= _MOST_KINDS:
                self._alike.clear()
            self._alike[what] = work_out()
        return self._alike[what]

    def route(self, chain: Chain, role: str, spec: SignalSpec) -> Route:
        """Return the way of a signal, known to the recipe as ``role``, through a chain."""
        key = (chain.name, role, spec)
        if key not in self._routes:
            folded = fold(chain, spec, rule=role)
            program = compile_program(chain, role, spec, folded)
            self._routes[key] = Route(spec, program, folded.findings)
        return self._routes[key]
