"""The task that filters, resamples and masks a stretch of every signal of a passage."""

from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path

from waveassay.contract import Interval, Part, Signal
from waveassay.execute.fused import run_unit
from waveassay.execute.moves import run_move
from waveassay.execute.signals import SignalSource, save_prepared
from waveassay.plan.stretches import Stretch
from waveassay.plan.tasks import window_s
from waveassay.plan.windows import Form

States = Mapping[tuple[int, int], Part]


def prepare(
    source: SignalSource, pass_no: int, stretch: Stretch, states: States, folder: Path
) -> None:
    """Run a pass's steps on samples over a stretch with its context, and keep the stretch.

    Parameters
    ----------
    states : (lane, move) -> what a barrier combined.
    """
    passage = source.passage
    wanted = {}
    for lane_no, lane in enumerate(passage.lanes):
        window = window_s(passage, lane, pass_no, stretch)
        for move in lane.program.samples_moves(pass_no):
            taken = move.index if move.source is None else move.source
            before = lane.program.moves[taken]
            if before.source is None or before.pass_no < pass_no:
                wanted[lane_no, taken] = window
    read = source.over(wanted)
    prepared: dict[tuple[int, int], Signal] = {}
    for lane_no, lane in enumerate(passage.lanes):
        values: dict[int, Signal] = {
            move_no: signal for (owner, move_no), signal in read.items() if owner == lane_no
        }
        bounds = lane.bounds_s(stretch)
        if pass_no < len(lane.forms):
            piece = passage.pieces[stretch.piece]
            run_form(lane.forms[pass_no], lane_no, values, states, piece, bounds)
        for index in lane.program.kept_signals(pass_no):
            prepared[lane_no, index] = values[index].cut(*bounds)
    save_prepared(folder, prepared, source.outside)


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
