"""Run one step, and say which step failed when it does."""

import traceback
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Data, Epochs, Floats, Part, Response, Signal, SignalError
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


def mask_move(move: Move, signal: Signal) -> Signal:
    """Return the signal with its masks as a step that declares its response leaves them.

    Samples and rate stay as they are; what the step announces of them is made elsewhere.
    """
    response = _response(move)
    made = _guarded(move, lambda: response.mask(move.step.params, signal))
    if not isinstance(made, Signal) or _but_for_masks(made) != _but_for_masks(signal):
        raise _fault(move, "the mask of its response changes more than the excluded time")
    return made


def gain_move(move: Move, freq_hz: Floats) -> NDArray[Any]:
    """Return the gain of a step that declares its response.

    Raises
    ------
    StepError
        When it is not one finite number a frequency.
    """
    response = _response(move)
    gain = _guarded(move, lambda: response.gain(move.step.params, move.spec_in, freq_hz))
    gain = np.asarray(gain)
    if gain.shape != freq_hz.shape or gain.dtype.kind not in "fc":
        raise _fault(move, f"{gain.shape} gains come for {freq_hz.shape} frequencies")
    if not np.isfinite(gain).all():
        at = float(freq_hz[np.flatnonzero(~np.isfinite(gain))[0]])
        raise _fault(move, f"the gain of its response at {at:g} Hz is not a finite number")
    return gain


def _but_for_masks(signal: Signal) -> tuple[object, ...]:
    return (signal.name, signal.unit, signal.rate_hz, signal.start_s, signal.x.size, signal.piece)


def _response(move: Move) -> Response:
    response = move.step.stage.response
    assert response is not None, f"{move.step.name} declares a response"
    return response


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
