"""Which steps on samples run as one frequency response, and why others do not.

A fused group is a maximal run of steps of one pass that declare a `Response`, each the only taker
of the one before, whose output nothing else uses. Its response is applied in blocks that overlap
(overlap-save), see `waveassay.execute.fused`.
"""

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from math import ceil

from waveassay.contract import SignalSpec, Spec
from waveassay.plan.blocks import BlockGrid, lengths_s
from waveassay.plan.program import Level, Move, Program

#: Enters the key of what is made: goes up when the way it is carried out can change a number.
FORM = "overlap-save 3"
#: No block has more samples, nor four times as many at the rate at which the kernel between two
#: rates stands: beyond, the steps one after another cost less, or need less memory.
LARGEST_BLOCK = 1 << 21

NO_RESPONSE = "declares no response"


@dataclass(frozen=True)
class Unit:
    """Steps that are run at once: a fused group, or one step by its own function.

    Attributes
    ----------
    before, after : their summed reach, in steps of the grid of stretches, rounded up.
    block_s : length of the blocks of a fused group.
    """

    moves: tuple[Move, ...]
    before: int
    after: int
    block_s: Fraction | None = None

    @property
    def fused(self) -> bool:
        """Whether it runs by its response."""
        return self.block_s is not None

    def grid(self, step_s: Fraction) -> BlockGrid:
        """Return the blocks of a fused group."""
        assert self.block_s is not None, "a step by its own function has no blocks"
        return BlockGrid(step_s, self.block_s)

    @property
    def source(self) -> int:
        """Index of the step whose output it takes."""
        source = self.moves[0].source
        assert source is not None, "a source is no unit"
        return source

    @property
    def index(self) -> int:
        """Index of the step whose output it gives."""
        return self.moves[-1].index

    @cached_property
    def identity(self) -> tuple[str, ...]:
        """Its steps, their parameters and what they take, but for the signal's name."""
        known: list[str] = [f"{self.before} {self.after}"]
        for move in self.moves:
            stage, given = move.step.stage, move.spec_in
            assert isinstance(given, SignalSpec), "a fused step takes a signal"
            known += [f"{stage.name} {stage.version}", move.step.params.model_dump_json()]
            known.append(repr(replace(given, name="")))
        return tuple(known)


def units_of(program: Program, pass_no: int) -> tuple[Unit, ...]:
    """Return how a pass's steps on samples are run, in order."""
    step_s = _step_s(program)
    return tuple(unit for moves in _runs(program, pass_no) for unit in _units(moves, step_s))


def _units(moves: tuple[Move, ...], step_s: Fraction) -> Iterator[Unit]:
    """Yield how steps that may be one response are run."""
    sides = [_sides(move, step_s) for move in moves]
    before, after = sum(side[0] for side in sides), sum(side[1] for side in sides)
    if why_not(moves, before + after, step_s) is None:
        yield Unit(moves, before, after, _block_s(moves, before + after, step_s))
        return
    # A change of rate may need a kernel too large for the reach of the steps before it.
    split = next((i for i, move in enumerate(moves) if i and _changes(move)), None)
    if split is not None and _responds(moves[0]):
        yield from _units(moves[:split], step_s)
        yield from _units(moves[split:], step_s)
        return
    for move, side in zip(moves, sides, strict=True):
        yield Unit((move,), *side)


def _step_s(program: Program) -> Fraction:
    known = any(_rate_hz(move.spec_out) is not None for move in program.moves.values())
    return program.grid_step_s if known else Fraction(1)


def _sides(move: Move, step_s: Fraction) -> tuple[int, int]:
    if _rate_hz(move.spec_in) is None:
        return 0, 0  # only the recipe is known, and nothing is going to be run
    reach = move.reach()
    return ceil(reach.before_s / step_s), ceil(reach.after_s / step_s)


def _runs(program: Program, pass_no: int) -> Iterator[tuple[Move, ...]]:
    """Yield maximal runs of steps that may fuse; any other step stands alone."""
    run: list[Move] = []
    for move in program.samples_moves(pass_no):
        if move.source is None:
            continue
        if run and run_ends(program, run[-1], move) is None:
            run.append(move)
            continue
        if run:
            yield tuple(run)
        run = [move]
    if run:
        yield tuple(run)


def _responds(move: Move) -> bool:
    stage = move.step.stage
    return (
        move.level is Level.SAMPLES
        and stage.response is not None
        and stage.run is not None
        and callable(stage.context)
        and isinstance(move.spec_in, SignalSpec)
    )


def run_ends(program: Program, one: Move, other: Move) -> str | None:
    """Return why two steps on samples are not one response; None where they are."""
    for move in (one, other):
        if not _responds(move):
            return f"{move.step.name} {NO_RESPONSE}"
    if other.source != one.index:
        return f"{other.step.name} does not take what {one.step.name} gives"
    if one.step.keep:
        return f"what {one.step.name} gives is kept"
    takers = [m for m in program.moves.values() if m.source == one.index and m is not other]
    if takers:
        return f"{takers[0].step.name} takes what {one.step.name} gives, too"
    if one.pass_no != other.pass_no:
        return f"{other.step.name} is in another pass"
    return None


def why_not(moves: Sequence[Move], reach: int, step_s: Fraction) -> str | None:
    """Return why steps that may be one response are run by their own functions; None if they fuse.

    Parameters
    ----------
    reach : their summed reach to both sides, in steps of the grid.
    """
    if not _responds(moves[0]):
        return NO_RESPONSE  # such a step stands alone
    if len(moves) == 1 and not _changes(moves[0]):
        return "only one step"
    reasons = [_too_large(moves, reach, step_s, s) for s in lengths_s(reach * step_s)]
    return None if None in reasons else reasons[-1]


def _block_s(moves: Sequence[Move], reach: int, step_s: Fraction) -> Fraction:
    """Return the length of a group's blocks: the best that is not too large."""
    lengths = lengths_s(reach * step_s)
    return next(s for s in lengths if _too_large(moves, reach, step_s, s) is None)


def _too_large(
    moves: Sequence[Move], reach: int, step_s: Fraction, block_s: Fraction
) -> str | None:
    length_s = BlockGrid(step_s, block_s).reads(reach) * step_s
    for move in moves:
        rate_hz = _rate_hz(move.spec_in)
        if rate_hz is None:
            return None  # the rest is known once there is a recording
        samples = length_s * rate_hz
        told = f"with a reach of {float(reach * step_s):.4g} s"
        if samples > LARGEST_BLOCK:
            return f"{told} a block would take {int(samples)} samples, more than {LARGEST_BLOCK}"
        ratio = ratio_of(move)
        if samples * ratio.numerator > 4 * LARGEST_BLOCK:
            return f"{told} the ratio {ratio} makes a kernel too large for a block"
    return None


def _changes(move: Move) -> bool:
    return _rate_hz(move.spec_in) != _rate_hz(move.spec_out)


def ratio_of(move: Move) -> Fraction:
    """Return the rate that a step on samples announces over that of what it takes."""
    before, after = _rate_hz(move.spec_in), _rate_hz(move.spec_out)
    assert before is not None, "rates are known once there is a recording"
    assert after is not None, "likewise"
    return after / before


def _rate_hz(spec: Spec) -> Fraction | None:
    return spec.rate_hz if isinstance(spec, SignalSpec) else None


@dataclass(frozen=True)
class Told:
    """How a step on samples is run, for people."""

    step: str
    text: str


def explained(program: Program) -> tuple[Told, ...]:
    """Return for every step on samples whether it runs fused, and why not where it does not."""
    told: list[Told] = []
    for pass_no in range(program.passes):
        units = units_of(program, pass_no)
        for unit in units:
            told.extend(_told(program, unit, units))
    return tuple(told)


def _told(program: Program, unit: Unit, units: Iterable[Unit]) -> Iterator[Told]:
    names = [move.step.name for move in unit.moves]
    reasons = [] if _responds(unit.moves[0]) else [NO_RESPONSE]
    reasons.extend(_why_apart(program, unit))
    if not unit.fused:
        text = "by its own function"
    elif len(names) > 1:
        text = f"fused, as one response: {' + '.join(names)}{_in_blocks(program, unit)}"
    else:
        text = f"by its response, alone{_in_blocks(program, unit)}"
    if _responds(unit.moves[0]):
        reasons.extend(_ends(program, unit, units))
    if reasons:
        text += f" ({'; '.join(dict.fromkeys(reasons))})"
    for name in names:
        yield Told(name, text)


def _in_blocks(program: Program, unit: Unit) -> str:
    if _rate_hz(unit.moves[0].spec_in) is None:
        return ""  # its reach is not known
    step_s = _step_s(program)
    grid = unit.grid(step_s)
    reads_s = float(grid.reads(unit.before + unit.after) * step_s)
    return f", in blocks of {float(grid.length_s):g} s, each from {reads_s:.4g} s"


def _why_apart(program: Program, unit: Unit) -> Iterator[str]:
    """Yield why a unit is not all of the steps that may be one response."""
    step_s, first = _step_s(program), unit.moves[0]
    for moves in _runs(program, first.pass_no):
        if first in moves and not (unit.fused and moves == unit.moves):
            reach = sum(sum(_sides(one, step_s)) for one in moves)
            reason = why_not(moves, reach, step_s)
            if reason is not None:
                yield reason


def _ends(program: Program, unit: Unit, units: Iterable[Unit]) -> Iterator[str]:
    """Yield why a step or a group is not one with its neighbours."""
    for other in units:
        reason = None
        if other.source == unit.index:
            reason = run_ends(program, unit.moves[-1], other.moves[0])
        elif other.index == unit.source:
            reason = run_ends(program, other.moves[-1], unit.moves[0])
        if reason is not None:
            yield reason
