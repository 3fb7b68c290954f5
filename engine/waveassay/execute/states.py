"""The task between two passes: what a pass collected becomes what the next one applies."""

from collections.abc import Mapping, Sequence
from pathlib import Path

from waveassay.contract import Part
from waveassay.execute.arrays import ArrayFile, Group, save_groups
from waveassay.execute.gathered import Gathered
from waveassay.execute.moves import combine_move
from waveassay.execute.store import Store
from waveassay.plan.pass_parts import barriers
from waveassay.plan.passage import Passage

STATE_FILE = "state.arrays"


def combine(passage: Passage, pass_no: int, gathered: Gathered, folder: Path) -> None:
    """Turn what the pass before collected into what this pass applies."""
    groups: dict[str, Group] = {}
    for lane_no, lane in enumerate(passage.lanes):
        rows = gathered.lane(lane_no)
        for move in barriers(lane, pass_no):
            made: Part = combine_move(move, rows.parts(move.index))
            groups[f"{lane_no}.{move.index}"] = Group(dict(made))
    save_groups(folder / STATE_FILE, groups)


def read_states(store: Store, keys: Sequence[str]) -> Mapping[tuple[int, int], Part]:
    """Read what `combine` wrote: (lane, move) -> named arrays."""
    states: dict[tuple[int, int], Part] = {}
    for key in keys:
        file = ArrayFile(store.read(key).path(STATE_FILE))
        for place in file:
            lane, move = place.split(".")
            states[int(lane), int(move)] = file.group(place).arrays
    return states
