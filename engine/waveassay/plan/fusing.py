"""Which steps on samples run as one frequency response, and why others do not.

A fused group is a maximal run of steps of one pass that declare a `Response`, each the only taker
of the one before, whose output nothing else uses. Its response is applied in blocks that overlap
(overlap-save), see `waveassay.execute.fused`.
"""

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from math import ceil

from waveassay.contract import SignalSpec
from waveassay.plan.blocks import BlockGrid
from waveassay.plan.program import Level, Move, Program

#: Enters the key of what is made: goes up when the way it is carried out can change a number.
FORM = "overlap-save 1"
#: No block has more samples, nor four times as many at the rate at which the kernel between two
#: rates stands: beyond, the steps one after another cost less, or need less memory.
LARGEST_BLOCK = 1 << 21
#: What a block may read for each step it spares, s: beyond, the steps cost less (measured).
WORTH_S = Fraction(300)
#: How many filters a change of rate costs as much as.
CHANGE_WORTH = 4

NO_RESPONSE = "declares no response"


@dataclass(frozen=True)
class Unit:
    """Steps that are run at once: a fused group, or one step by its own function.

    Attributes
    ----------
    before, after : their summed reach, in steps of the grid of stretches, rounded up.
    """

    moves: tuple[Move, ...]
    fused: bool
    before: int
    after: int

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


def units_of(program: Program, pass_no: int) -> tuple[Unit, ...]:
    """Return how a pass's steps on samples are run, in order."""
    step_s = program.grid_step_s
    units = []
    for moves in _runs(program, pass_no):
        sides = [_sides(move, step_s) for move in moves]
        before, after = sum(side[0] for side in sides), sum(side[1] for side in sides)
        if why_not(moves, before + after, step_s) is None:
            units.append(Unit(moves, True, before, after))
        else:
            units.extend(
                Unit((move,), False, *side) for move, side in zip(moves, sides, strict=True)
            )
    return tuple(units)


def _sides(move: Move, step_s: Fraction) -> tuple[int, int]:
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
        return NO_RESPONSE
    changing = sum(ratio_of(move) != 1 for move in moves if _rate_hz(move) is not None)
    if len(moves) == 1 and not changing and _rate_hz(moves[0]) is not None:
        return "only one step"
    length_s = BlockGrid(step_s).reads(reach) * step_s
    for move in moves:
        rate_hz = _rate_hz(move)
        if rate_hz is None:
            return None  # the rest is known once there is a recording
        samples = length_s * rate_hz
        longest_s = WORTH_S * (len(moves) + (CHANGE_WORTH - 1) * changing)
        told = f"with a reach of {float(reach * step_s):.4g} s a block would take "
        if length_s > longest_s:
            return f"{told}{float(length_s):.4g} s, and cost more than the steps one by one"
        if samples > LARGEST_BLOCK:
            return f"{told}{int(samples)} samples, more than {LARGEST_BLOCK}"
        ratio = ratio_of(move)
        if samples * ratio.numerator > 4 * LARGEST_BLOCK:
            return f"the ratio {ratio} makes a kernel too large for a block"
    return None


def _rate_hz(move: Move) -> Fraction | None:
    return move.spec_in.rate_hz if isinstance(move.spec_in, SignalSpec) else None


def ratio_of(move: Move) -> Fraction:
    """Return the rate of what a responding step gives over that of what it takes."""
    response = move.step.stage.response
    assert response is not None, f"{move.step.name} has a response"
    return response.ratio(move.step.params, move.spec_in)


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


def _told(program: Program, unit: Unit, units: Sequence[Unit]) -> Iterator[Told]:
    names = [move.step.name for move in unit.moves]
    if not unit.fused:
        (move,) = unit.moves
        yield Told(names[0], f"by its own function: {_why_not(program, move)}")
        return
    ends = "; ".join(dict.fromkeys(_ends(program, unit, units)))
    if len(names) > 1:
        text = f"fused: one response of {' + '.join(names)}"
    else:
        text = "by its response, alone"
    for name in names:
        yield Told(name, f"{text} ({ends})" if ends else text)


def _why_not(program: Program, move: Move) -> str:
    if move.barrier is not None:
        return "needs the whole recording"
    step_s = program.grid_step_s
    for moves in _runs(program, move.pass_no):
        if move in moves:
            reach = sum(sum(_sides(one, step_s)) for one in moves)
            return why_not(moves, reach, step_s) or NO_RESPONSE
    return NO_RESPONSE


def _ends(program: Program, unit: Unit, units: Iterable[Unit]) -> Iterator[str]:
    """Yield why a group does not go on to its neighbours."""
    for other in units:
        if other.source == unit.index:
            yield run_ends(program, unit.moves[-1], other.moves[0]) or "too long together"
        elif other.index == unit.source:
            yield run_ends(program, other.moves[-1], unit.moves[0]) or "too long together"
