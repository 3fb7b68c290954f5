"""Run one step, and say which step failed when it does."""

import traceback
from collections.abc import Sequence
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Data, Epochs, Floats, Part, Response, Signal, SignalError
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
        return cast(Data, _guarded(move, lambda: apply(params, data, state or {})))
    run = move.step.stage.run
    if run is None:
        raise StepError(move.step.name, "the stage has nothing to run")
    return cast(Data, _guarded(move, lambda: run(params, data)))


def mask_move(move: Move, signal: Signal) -> Signal:
    """Return the signal with its masks as a step that declares its response leaves them."""
    response = _response(move)
    return cast(Signal, _guarded(move, lambda: response.mask(move.step.params, signal)))


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
    if gain.shape != freq_hz.shape or gain.dtype.kind not in "fc" or not np.isfinite(gain).all():
        raise StepError(
            move.step.name,
            f"the response of stage {move.step.stage.name} is not one finite number for each of "
            f"{freq_hz.size} frequencies; tell whoever maintains it.",
        )
    return gain


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
    return _guarded(move, lambda: whole.combine(move.step.params, parts))


def _guarded(move: Move, work: Any) -> Any:
    try:
        return work()
    except (MachineError, MemoryError, StepError):
        raise
    except SignalError as error:
        raise StepError(move.step.name, str(error)) from error
    except Exception as error:  # a stage's own fault must fail this recording alone, by name
        raise StepError(
            move.step.name,
            f"the stage failed: {type(error).__name__}: {error}. This is a fault of stage "
            f"{move.step.stage.name}, not of the recording; tell whoever maintains it.",
            traceback.format_exc(),
        ) from error


def starting_in(data: Data, bounds: tuple[Any, Any]) -> Data:
    """Return the epochs that start in a stretch; other data as they are."""
    return data.starting_in(*bounds) if isinstance(data, Epochs) else data
