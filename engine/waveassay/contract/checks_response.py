"""The check that a stage's declared frequency response is what its function does."""

from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np

from waveassay.contract.checks_context import length_for, reach_of
from waveassay.contract.checks_data import calm_signal, random_signal
from waveassay.contract.checks_running import common_step_s, difference
from waveassay.contract.kinds import Floats, Signal
from waveassay.contract.params import Params
from waveassay.contract.spec import SignalSpec
from waveassay.contract.stage import Stage

#: The response and the function may be this share of the root mean square (of the largest sample
#: beside artefacts) apart, away from the ends of a piece: ten times what a reach may leave out.
RESPONSE_TOLERANCE = 1e-9


def prove_response(stage: Stage, params: Params, given: SignalSpec) -> None:
    """Require that gain and mask give what `run` gives, on random signals."""
    rate_hz = given.rate_hz
    assert stage.response is not None, f"{stage.name} declares no response"
    assert rate_hz is not None, "the check's signals have a rate"
    assert stage.run is not None, (
        f"{stage.name}: a response says what `run` does, and there is none"
    )
    assert callable(stage.context), f"{stage.name}: a response goes with a reach as context"
    reach = reach_of(stage, params, given)
    long_s = length_for(reach)
    planted = random_signal(given.unit, rate_hz, long_s)
    for signal in (planted, calm_signal(given.unit, rate_hz, long_s)):
        out = stage.run(params, signal)
        assert isinstance(out, Signal), f"{stage.name}: a response gives signals"
        new_rate_hz = out.rate_hz
        made = _filtered(stage, params, given, signal.x, new_rate_hz / rate_hz)
        first, last = signal.piece.start_s + reach.before_s, signal.piece.stop_s - reach.after_s
        low, high = max(0, out.index_at(first)), min(out.index_at(last), out.x.size)
        assert high - low > out.x.size // 10, (
            f"{stage.name}: its reach leaves too little to compare"
        )
        sizes = [np.max(np.abs(x)) if signal is planted else np.std(x) for x in (signal.x, out.x)]
        tolerance = RESPONSE_TOLERANCE * float(max(sizes))
        told = difference(made[low:high], out.x[low:high], tolerance)
        assert not told, f"{stage.name}: its response and its function are not the same: {told}"
    step_s = common_step_s([rate_hz, new_rate_hz])
    middle_s = planted.piece.start_s + planted.piece.length_s / 3 // step_s * step_s
    for part in (planted, planted.cut(middle_s, middle_s + 30)):
        _prove_masks(stage, params, part)


def _prove_masks(stage: Stage, params: Params, given: Signal) -> None:
    """Require the masks that `run` leaves, and all else as it was."""
    assert stage.response is not None
    assert stage.run is not None
    masked, out = stage.response.mask(params, given), stage.run(params, given)
    assert isinstance(out, Signal)
    told = difference(masked.excluded, out.excluded)
    assert not told, f"{stage.name}: its mask and its function exclude other times: {told}"
    told = difference(masked, replace(given, excluded=masked.excluded))
    assert not told, f"{stage.name}: its mask changes more than the excluded time: {told}"
    for name in ("name", "unit", "start_s", "piece", "conditions"):
        told = difference(getattr(out, name), getattr(given, name), at=name)
        assert not told, f"{stage.name}: it declares a response, and changes more: {told}"


def _filtered(
    stage: Stage, params: Params, given: SignalSpec, x: Floats, ratio: Fraction
) -> np.ndarray[Any, Any]:
    """Return the samples by the letter of `Response.gain`, as if zeros lay around them."""
    assert stage.response is not None
    assert given.rate_hz is not None
    up, down = ratio.numerator, ratio.denominator
    spread = np.zeros(2 * x.size * up)
    spread[: x.size * up : up] = x
    freq_hz = np.arange(spread.size // 2 + 1, dtype=np.float64) * float(
        given.rate_hz * up / spread.size
    )
    gain = stage.response.gain(params, given, freq_hz)
    assert gain.shape == freq_hz.shape, (
        f"{stage.name}: {freq_hz.shape} frequencies and {gain.shape} gains"
    )
    made = np.fft.irfft(np.fft.rfft(spread) * gain, n=spread.size)[: x.size * up : down] * up
    return np.ascontiguousarray(made)
