"""What is to be done with one signal of one recording in one chain, in passes.

Steps differ in what they work on. Some work on samples (filters), some on rows (epochs, their
spectra and features), and some on what a whole recording gave (an average and all that follows
it). A step that needs the whole before it can go on (a `Whole` with ``apply``) is a barrier: the
samples are passed over once to collect and once more to apply. A step's pass counts the barriers
at or before it.
"""

from dataclasses import dataclass
from enum import StrEnum
from fractions import Fraction
from functools import cached_property

from waveassay.contract import Derived, Kind, Reach, SignalSpec, Spec, Whole
from waveassay.plan.stretches import common_step_s
from waveassay.recipe.fold import Folded, effective_source
from waveassay.recipe.model import Chain, Step

NO_REACH = Reach(Fraction(0), Fraction(0))


class Level(StrEnum):
    """What a step works on."""

    SAMPLES = "samples"
    ROWS = "rows"
    RECORDING = "recording"


@dataclass(frozen=True)
class Move:
    """A step as it applies to one signal.

    Attributes
    ----------
    index : its place in the chain.
    source : index of the step whose output it takes, for this signal; None for a source.
    spec_in, spec_out : folded specs (``spec_in`` of a source is what it reads).
    level : what it works on.
    pass_no : how many barriers are at or before it.
    """

    index: int
    step: Step
    source: int | None
    spec_in: Spec
    spec_out: Spec
    level: Level
    pass_no: int

    @property
    def barrier(self) -> Whole | None:
        """Its three moves, where it needs the whole before it can go on."""
        context = self.step.stage.context
        return context if isinstance(context, Whole) and context.apply is not None else None

    @property
    def gather(self) -> Whole | None:
        """Its two moves, where the whole is all it gives."""
        context = self.step.stage.context
        return context if isinstance(context, Whole) and context.apply is None else None

    @property
    def needs_piece(self) -> bool:
        """Whether nothing is declared, so that it must be given the whole piece."""
        return self.step.stage.context is None and self.step.stage.run is not None

    def reach(self) -> Reach:
        """Return how much of its input a moment of its output depends on."""
        return self._reach

    @cached_property
    def _reach(self) -> Reach:
        context = self.step.stage.context
        if callable(context) and not isinstance(context, Whole):
            reach = context(self.step.params, self.spec_in)
            if isinstance(reach, Reach):
                return reach
        return NO_REACH

    @cached_property
    def derived(self) -> tuple[Derived, ...]:
        """What follows from its parameters and the rate of what it takes."""
        derive = self.step.stage.derive
        return tuple(derive(self.step.params, self.spec_in)) if derive else ()


@dataclass(frozen=True)
class Program:
    """All moves for one signal in one chain, by their index in the chain."""

    moves: dict[int, Move]

    @property
    def passes(self) -> int:
        """How often the recording is passed over."""
        return 1 + max((m.pass_no for m in self.moves.values()), default=0)

    def samples_moves(self, pass_no: int) -> list[Move]:
        """Return the moves on samples of one pass, in order."""
        return [m for m in self.moves.values() if m.level is Level.SAMPLES and m.pass_no == pass_no]

    def kept_signals(self, pass_no: int) -> list[int]:
        """Return the moves whose signals a pass prepares for what comes after it, in order."""
        if pass_no not in self._kept:
            self._kept[pass_no] = self._find_kept(pass_no)
        return self._kept[pass_no]

    @cached_property
    def _kept(self) -> dict[int, list[int]]:
        return {}

    def _find_kept(self, pass_no: int) -> list[int]:
        used: set[int] = set()
        for move in self.moves.values():
            source = move.source
            if source is None or self.moves[source].level is not Level.SAMPLES:
                continue
            leaves = move.level is not Level.SAMPLES or move.pass_no > pass_no
            if leaves and self.moves[source].pass_no == pass_no:
                used.add(source)
        used.update(
            m.index for m in self.samples_moves(pass_no) if m.step.keep and m.source is not None
        )
        return sorted(used)

    def prepares(self, pass_no: int) -> bool:
        """Tell whether a pass changes samples, so that keeping what it makes pays."""
        return any(m.source is not None for m in self.samples_moves(pass_no))

    @cached_property
    def rows_reach(self) -> Reach:
        """Return the longest reach of the steps that cut rows from samples."""
        reaches = [
            m.reach()
            for m in self.moves.values()
            if m.level is Level.ROWS
            and m.source is not None
            and self.moves[m.source].level is Level.SAMPLES
        ]
        zero = Fraction(0)
        return Reach(
            max((r.before_s for r in reaches), default=zero),
            max((r.after_s for r in reaches), default=zero),
        )

    @cached_property
    def grid_step_s(self) -> Fraction:
        """Return the step of the grid on which stretches of this signal begin."""
        rates = [
            spec.rate_hz
            for m in self.moves.values()
            for spec in (m.spec_in, m.spec_out)
            if isinstance(spec, SignalSpec) and spec.rate_hz is not None
        ]
        return common_step_s(rates)

    def whole_pieces(self) -> bool:
        """Tell whether some step must be given whole pieces."""
        return any(m.needs_piece and m.level is not Level.RECORDING for m in self.moves.values())

    @property
    def rows_step(self) -> dict[int, int]:
        """For each move on rows, the move that cut the rows: what belongs in one table row."""
        cut: dict[int, int] = {}
        for move in self.moves.values():
            if move.level is Level.ROWS:
                cut[move.index] = (
                    move.index
                    if move.source is None
                    or move.source not in cut
                    or move.step.given is Kind.EPOCHS
                    else cut[move.source]
                )
        return cut


def compile_program(chain: Chain, signal: str, given: SignalSpec, folded: Folded) -> Program:
    """Put a chain's steps into passes for one signal."""
    moves: dict[int, Move] = {}
    for index, step in enumerate(chain.steps):
        spec_out = folded.specs[index]
        if spec_out is None or (step.signals is not None and signal not in step.signals):
            continue
        if step.stage.needs is not None:
            if signal in step.stage.needs(step.params):
                moves[index] = Move(index, step, None, given, spec_out, Level.SAMPLES, 0)
            continue
        source = effective_source(chain.steps, index, signal)
        if source is None or source not in moves:
            continue
        before = moves[source]
        context = step.stage.context
        barrier = isinstance(context, Whole) and context.apply is not None
        gather = isinstance(context, Whole) and context.apply is None
        if before.level is Level.RECORDING or gather or step.given is Kind.TABLE:
            level = Level.RECORDING
        elif step.given is Kind.SIGNALS:
            level = Level.SAMPLES
        else:
            level = Level.ROWS
        pass_no = before.pass_no + (1 if barrier and level is not Level.RECORDING else 0)
        moves[index] = Move(index, step, source, before.spec_out, spec_out, level, pass_no)
    return Program(moves)
