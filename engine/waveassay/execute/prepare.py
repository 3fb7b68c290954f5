"""The task that filters, resamples and masks a stretch of every signal of a passage."""

from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path

from waveassay.contract import Interval, Part, Signal
from waveassay.execute.arrays import group_writer
from waveassay.execute.fused import run_unit
from waveassay.execute.moves import run_move
from waveassay.execute.signals import FILE, OUTSIDE, SignalSource, as_held, prepared_group
from waveassay.plan.pass_parts import window_s
from waveassay.plan.precision import held_in_store
from waveassay.plan.stretches import Stretch
from waveassay.plan.windows import Form

States = Mapping[tuple[int, int], Part]


def prepare(
    source: SignalSource, pass_no: int, stretch: Stretch, states: States, folder: Path
) -> dict[str, str]:
    """Run a pass's steps on samples over a stretch with its context, and keep the stretch.

    Returns the SHA-256 of the file written, by its name.

    Parameters
    ----------
    states : (lane, move) -> what a barrier combined.
    """
    passage = source.passage
    wanted: list[dict[int, tuple[Fraction, Fraction]]] = []
    for lane in passage.lanes:
        window = window_s(passage, lane, pass_no, stretch)
        taken = [
            m.index if m.source is None else m.source for m in lane.program.samples_moves(pass_no)
        ]
        before = {index: lane.program.moves[index] for index in taken}
        wanted.append(
            {
                i: window
                for i, move in before.items()
                if move.source is None or move.pass_no < pass_no
            }
        )
    with group_writer(folder / FILE) as writer:
        for lane_no, values in source.by_lane(wanted):
            lane = passage.lanes[lane_no]
            bounds = lane.bounds_s(stretch)
            if pass_no < len(lane.forms):
                piece = passage.pieces[stretch.piece]
                run_form(lane.forms[pass_no], lane_no, values, states, piece, bounds)
            for index in lane.program.kept_signals(pass_no):
                held = held_in_store(lane.program, index, passage.precision)
                kept = as_held(values[index].cut(*bounds), held)
                writer.add(f"{lane_no}.{index}", prepared_group(kept))
        writer.end({OUTSIDE: sorted(source.outside)})
    return {FILE: writer.sha256}


def run_form(
    form: Form,
    lane_no: int,
    values: dict[int, Signal],
    states: States,
    piece: Interval,
    bounds: tuple[Fraction, Fraction],
) -> None:
    """Run what a form says, in order; ``values`` gets what each unit gives, by its last step."""
    own = form.own(piece, *bounds)
    spans = form.spans(piece, own)
    for unit in form.units:
        taken = values[unit.source]
        if unit.fused:
            values[unit.index] = run_unit(unit, taken, form.step_s, spans[unit.index], own)
            continue
        made = run_move(unit.moves[0], taken, states.get((lane_no, unit.index)))
        assert isinstance(made, Signal), f"{unit.moves[0].step.name} gives signals"
        values[unit.index] = made
