"""Run one step, and say which step failed when it does."""

import traceback
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, cast

from waveassay.contract import Data, Epochs, Part, SignalError
from waveassay.contract.agreement import disagreements
from waveassay.contract.errors import MachineError
from waveassay.plan.program import Move


class StepError(SignalError):
    """A step failed on a recording."""

    def __init__(self, step: str, message: str, detail: str = "") -> None:
        super().__init__(message)
        self.step = step
        self.detail = detail

    def __reduce__(self) -> tuple[type["StepError"], tuple[str, str, str]]:
        return StepError, (self.step, str(self), self.detail)


def run_move(move: Move, data: Any, state: Part | None = None) -> Data:
    """Return a step's output for one stretch (or for what a whole recording gave)."""
    params = move.step.params
    barrier = move.barrier
    if barrier is not None and barrier.apply is not None:
        apply = barrier.apply
        return _agreed(move, data, _guarded(move, lambda: apply(params, data, state or {})))
    run = move.step.stage.run
    if run is None:
        raise StepError(move.step.name, "the stage has nothing to run")
    return _agreed(move, data, _guarded(move, lambda: run(params, data)))


def collect_move(move: Move, data: Any) -> Part:
    """Return what a step collects from one stretch."""
    whole = move.barrier or move.gather
    if whole is None:
        raise StepError(move.step.name, "the stage collects nothing")
    return cast(Part, _guarded(move, lambda: whole.collect(move.step.params, data)))


def combine_move(move: Move, parts: Sequence[Part]) -> Any:
    """Return what a step makes of all it collected."""
    whole = move.barrier or move.gather
    if whole is None:
        raise StepError(move.step.name, "the stage combines nothing")
    made = _guarded(move, lambda: whole.combine(move.step.params, parts))
    if whole.apply is None:
        return _agreed(move, None, made)
    if not isinstance(made, Mapping):
        raise _fault(move, f"it combines to {type(made).__name__}, and named arrays are expected")
    return made


def _agreed(move: Move, taken: Any, made: Any) -> Data:
    """Return what a step gave, once it is what its spec announced."""
    for text in disagreements(move.spec_out, taken, made):
        raise _fault(move, text)
    return cast(Data, made)


def _fault(move: Move, what: str, detail: str = "") -> StepError:
    return StepError(
        move.step.name,
        f"the stage failed: {what}. This is a fault of stage {move.step.stage.name}, not of the "
        "recording; its maintainer finds more in log.jsonl.",
        detail,
    )


def _guarded(move: Move, work: Any) -> Any:
    try:
        return work()
    except (MachineError, MemoryError, StepError):
        raise
    except SignalError as error:
        raise StepError(move.step.name, str(error)) from error
    except Exception as error:  # a stage's own fault must fail this recording alone, by name
        last = traceback.extract_tb(error.__traceback__)[-1]
        where = f"{Path(last.filename).name}:{last.lineno}"
        what = f"{type(error).__name__}: {error} ({where})"
        raise _fault(move, what, traceback.format_exc()) from error


def starting_in(data: Data, bounds: tuple[Any, Any]) -> Data:
    """Return the epochs that start in a stretch; other data as they are."""
    return data.starting_in(*bounds) if isinstance(data, Epochs) else data
