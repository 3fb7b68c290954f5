"""How a signal's samples are held: in the store, and when they are handed to steps on rows.

Filters, and all other steps on samples, work in float64. What they leave is handed to epochs as
float32 unless the recipe asks for ``precision: double``: half the memory, faster transforms, and
a rounding of 6e-8 of the largest sample. That is little beside a signal that swings about zero, and
not beside one that rides on an offset: on 100 mV it is 4 nV a sample, and weak bins of an epoch's
spectrum come out tens of per cent off. So float32 begins behind a high-pass, as specs tell of one.
"""

from collections.abc import Iterator
from typing import Literal

from waveassay.contract import SignalSpec
from waveassay.plan.program import Level, Move, Program
from waveassay.recipe.model import Precision

Held = Literal["float32", "float64"]


def held_in_rows(move: Move, precision: Precision) -> Held:
    """Return how steps on rows are given the samples that a step on samples gave."""
    spec = move.spec_out
    swings = isinstance(spec, SignalSpec) and spec.pass_hz[0] is not None
    return "float32" if precision == "standard" and swings else "float64"


def takers_of_rows(program: Program, precision: Precision) -> Iterator[tuple[Move, Held]]:
    """Yield the steps that cut rows from samples, and how they are given them."""
    for move in program.moves.values():
        source = None if move.source is None else program.moves[move.source]
        if source is not None and source.level is Level.SAMPLES and move.level is Level.ROWS:
            yield move, held_in_rows(source, precision)


def held_in_store(program: Program, index: int, precision: Precision) -> Held:
    """Return how the store holds the samples that a step on samples gave.

    That is as steps on rows are given them, where nothing else takes them: no step on samples of a
    later pass, no step that gathers them, and no user who asked that they be kept.
    """
    move = program.moves[index]
    takers = (taker for taker in program.moves.values() if taker.source == index)
    stored_for = (
        taker
        for taker in takers
        if taker.level is not Level.SAMPLES or taker.pass_no > move.pass_no
    )
    if move.step.keep or any(taker.level is not Level.ROWS for taker in stored_for):
        return "float64"
    return held_in_rows(move, precision)
