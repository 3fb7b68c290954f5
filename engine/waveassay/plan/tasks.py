"""Tasks: what is computed at once, each with the key of what it makes.

``prepare``  filters, resamples and masks a stretch of every signal of a passage;
``rows``     cuts epochs that start in a stretch, down to their features, and collects;
``combine``  turns what a pass collected into what the next pass applies;
``finish``   turns all rows of a passage into tables, averages and figures.

A key is the digest of all that can change a byte of what a task makes, and of nothing else.
"""

from collections.abc import Mapping
from dataclasses import dataclass

from waveassay.plan.drafts import Action, drafts_of, plain_digest
from waveassay.plan.passage import Passage
from waveassay.plan.stretches import Stretch


@dataclass(frozen=True)
class Task:
    """One task of a passage. ``needs`` are keys of tasks whose artefacts it reads."""

    action: Action
    recording: str
    chain: str
    pass_no: int
    stretch: Stretch | None
    key: str
    needs: tuple[str, ...]
    cost_s: float


def tasks_of(passage: Passage) -> tuple[Task, ...]:
    """Return the tasks of a passage, each after those that it needs; none without signals.

    They stand in the order of the passage's drafts.
    """
    recording, chain = passage.recording, passage.chain.name
    tasks: list[Task] = []
    for draft in drafts_of(passage):
        needs = tuple(tasks[place].key for place in draft.needs)
        known = [draft.identity, passage.sha256, *needs]
        if draft.action == "finish":  # tables name their recording
            known.append(recording)
        key = plain_digest(known)
        tasks.append(
            Task(
                draft.action,
                recording,
                chain,
                draft.pass_no,
                draft.stretch,
                key,
                needs,
                draft.cost_s,
            )
        )
    return tuple(tasks)


def needed_by(task: Task, tasks: Mapping[str, Task]) -> list[str]:
    """Return the keys of all that a task needs, and of what that needs in turn."""
    waiting = list(task.needs)
    known = dict.fromkeys(waiting)
    while waiting:
        more = [key for key in tasks[waiting.pop()].needs if key not in known]
        known |= dict.fromkeys(more)
        waiting += more
    return list(known)
