"""The task that filters, resamples and masks a stretch of every signal of a passage."""

from collections.abc import Mapping
from pathlib import Path

from waveassay.contract import Part, Signal
from waveassay.execute.moves import run_move
from waveassay.execute.signals import SignalSource, save_prepared
from waveassay.plan.stretches import Stretch
from waveassay.plan.tasks import window_s

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
        for move in lane.program.samples_moves(pass_no):
            if move.source is None:
                continue
            made = run_move(move, values[move.source], states.get((lane_no, move.index)))
            assert isinstance(made, Signal), f"{move.step.name} gives signals"
            values[move.index] = made
        bounds = lane.bounds_s(stretch)
        for index in lane.program.kept_signals(pass_no):
            prepared[lane_no, index] = values[index].cut(*bounds)
    save_prepared(folder, prepared, source.outside)
