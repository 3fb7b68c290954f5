"""What of a signal a pass concerns: which of its steps, and which of its time."""

from bisect import bisect_left, bisect_right
from fractions import Fraction

from waveassay.plan.passage import Lane, Passage
from waveassay.plan.program import Level, Move
from waveassay.plan.stretches import Stretch


def rows_moves(lane: Lane, pass_no: int) -> list[Move]:
    """Return the moves on rows that a pass computes: its own and those they rest on."""
    return [
        m for m in lane.program.moves.values() if m.level is Level.ROWS and m.pass_no <= pass_no
    ]


def barriers(lane: Lane, pass_no: int) -> list[Move]:
    """Return the barriers whose state pass ``pass_no`` applies."""
    return [
        m
        for m in lane.program.moves.values()
        if m.barrier is not None and m.level is not Level.RECORDING and m.pass_no == pass_no
    ]


def gathers(lane: Lane, pass_no: int) -> list[Move]:
    """Return the steps that need nothing but the whole and whose input this pass has first."""
    return [
        m
        for m in lane.program.moves.values()
        if m.gather is not None
        and m.source is not None
        and lane.program.moves[m.source].level is not Level.RECORDING
        and lane.program.moves[m.source].pass_no == pass_no
    ]


def collected(lane: Lane, pass_no: int) -> list[Move]:
    """Return the steps for which a pass collects: barriers of the next pass, and gathers."""
    return [*barriers(lane, pass_no + 1), *gathers(lane, pass_no)]


def window_s(
    passage: Passage, lane: Lane, pass_no: int, stretch: Stretch
) -> tuple[Fraction, Fraction]:
    """Return what a stretch reads: itself and the context of the pass's steps on samples."""
    if pass_no >= len(lane.forms):
        return lane.bounds_s(stretch)
    piece = passage.pieces[stretch.piece]
    return lane.forms[pass_no].window_s(piece, *lane.bounds_s(stretch))


def overlapping(lane: Lane, piece: int, start_s: Fraction, stop_s: Fraction) -> list[Stretch]:
    """Return the stretches of a piece that share time with an interval, for one signal."""
    borders = lane.borders_s[piece]
    first = max(0, bisect_right(borders, start_s) - 1)
    last = min(len(borders) - 1, bisect_left(borders, stop_s))
    return [Stretch(piece, number) for number in range(first, last)]
