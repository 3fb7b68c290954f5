"""How much of the disk a task's result takes, before anything is computed."""

from fractions import Fraction

from waveassay.contract import EpochsSpec, FeaturesSpec, SignalSpec
from waveassay.plan.pass_parts import rows_moves
from waveassay.plan.passage import Lane, Passage
from waveassay.plan.stretches import Stretch
from waveassay.plan.tasks import Task

#: No sample and no number takes more, and the samples of a standard run take half as much.
_LEAST_BYTES = 4


def least_bytes(passage: Passage, task: Task) -> int:
    """Return what a task keeps of samples and features at least, in bytes.

    What a step collects for the whole (spectra for a figure) is not known before, and comes on top.
    """
    if task.stretch is None:
        return 0
    numbers = 0.0
    for lane in passage.lanes:
        if task.action == "prepare":
            numbers += _samples(lane, task.stretch, task.pass_no)
        else:
            numbers += _feature_numbers(passage, lane, task.stretch, task.pass_no)
    return int(numbers * _LEAST_BYTES)


def _samples(lane: Lane, stretch: Stretch, pass_no: int) -> float:
    start_s, stop_s = lane.bounds_s(stretch)
    specs = [lane.program.moves[index].spec_out for index in lane.program.kept_signals(pass_no)]
    rates_hz = [s.rate_hz for s in specs if isinstance(s, SignalSpec) and s.rate_hz is not None]
    return float((stop_s - start_s) * sum(rates_hz, Fraction(0)))


def _feature_numbers(passage: Passage, lane: Lane, stretch: Stretch, pass_no: int) -> float:
    start_s, stop_s = lane.bounds_s(stretch)
    shared = [
        min(c.stop_s, stop_s) - max(c.start_s, start_s)
        for c in passage.conditions
        if c.start_s < stop_s and start_s < c.stop_s
    ]
    inside_s = float(sum(shared, Fraction(0)))
    numbers = 0.0
    for move in rows_moves(lane, pass_no):
        if isinstance(move.spec_out, FeaturesSpec) and move.pass_no == pass_no:
            cut = lane.program.moves[lane.program.rows_step[move.index]].spec_out
            if isinstance(cut, EpochsSpec):
                numbers += inside_s / cut.step_s * len(move.spec_out.columns)
    return numbers
