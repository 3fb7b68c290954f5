"""Proof that masked time, and the time beyond the ends of a piece, leave no trace outside masks.

An artefact of any size may lie in masked time; of what a filter spreads of it, no more than 1 %
may show where the output is not masked.
"""

from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction

import numpy as np

from waveassay.contract.checks_context import length_for, reach_of
from waveassay.contract.checks_data import Given, calm_signal
from waveassay.contract.checks_running import announced, common_step_s, run_whole
from waveassay.contract.kinds import Bools, Exclusion, Floats, Interval, Signal
from waveassay.contract.params import Params
from waveassay.contract.spec import SignalSpec
from waveassay.contract.stage import Stage

#: What may be left of an artefact outside the output's masks.
LEAK = 0.01

#: Size of the artefacts: large beside the signal.
SIZE = 5000.0

#: How long the artefacts last; the first is an impulse.
LENGTHS_S = (Fraction(0), Fraction(1, 2), Fraction(6))


def prove_masks(stage: Stage, params: Params, case: Given) -> None:
    """Require that a stage that mixes samples in time widens masks and masks the ends."""
    spec = case.spec
    assert isinstance(spec, SignalSpec), f"{stage.name}: a reach is for stages on signals"
    assert spec.rate_hz is not None, "cases have a rate"
    reach = reach_of(stage, params, spec)
    spec_out = announced(stage, params, spec)
    sample_s = 1 / spec.rate_hz
    if not isinstance(spec_out, SignalSpec) or max(reach.before_s, reach.after_s) <= sample_s:
        return
    calm = calm_signal(spec.unit, spec.rate_hz, length_for(reach))
    step_s = common_step_s([spec.rate_hz, spec_out.rate_hz or spec.rate_hz])
    middle_s = calm.piece.start_s + calm.piece.length_s / 2 // step_s * step_s
    for length_s in LENGTHS_S:
        stop_s = middle_s + max(step_s, length_s // step_s * step_s)
        artefact = Interval(middle_s, stop_s)
        _prove_widened(stage, params, calm, artefact)
        _prove_edges(stage, params, calm, artefact)


def _prove_widened(stage: Stage, params: Params, calm: Signal, artefact: Interval) -> None:
    masked = calm.excluding([Exclusion(artefact.start_s, artefact.stop_s, "planted")])
    without = run_whole(stage, params, masked)
    with_it = run_whole(stage, params, _with(masked, artefact))
    apart = np.abs(with_it.x - without.x)
    open_ = ~with_it.masked()
    found = _leak(apart, open_, _size(calm, with_it, apart), with_it)
    assert not found, (
        f"{stage.name}: of an artefact of {float(artefact.length_s):g} s in masked time, {found} "
        "outside the masks. Its response reaches beyond the mask: return "
        "signal.with_samples(x).widened(before_s, after_s)"
    )


def _prove_edges(stage: Stage, params: Params, calm: Signal, artefact: Interval) -> None:
    """Compare a piece with one that ends beside an artefact, which it therefore cannot know."""
    whole = run_whole(stage, params, _with(calm, artefact))
    for part in _beside(calm, artefact):
        out = run_whole(stage, params, part)
        expected = whole.cut(part.piece.start_s, part.piece.stop_s)
        count = min(out.x.size, expected.x.size)
        apart = np.abs(out.x[:count] - expected.x[:count])
        open_ = ~out.masked()[:count]
        found = _leak(apart, open_, _size(calm, out, apart), out)
        assert not found, (
            f"{stage.name}: of what lay {float(artefact.length_s):g} s long beyond the end of a "
            f"piece, {found} outside the masks. What lies beyond an end is not known: return "
            "signal.with_samples(x).excluding_edges(before_s, after_s)"
        )


def _with(signal: Signal, artefact: Interval) -> Signal:
    x = signal.x.copy()
    x[signal.index_at(artefact.start_s) : signal.index_at(artefact.stop_s)] += SIZE
    return signal.with_samples(x)


def _beside(calm: Signal, artefact: Interval) -> Iterator[Signal]:
    for start_s, stop_s in (
        (artefact.stop_s, calm.piece.stop_s),
        (calm.piece.start_s, artefact.start_s),
    ):
        yield replace(calm.cut(start_s, stop_s), piece=Interval(start_s, stop_s))


def _size(given: Signal, out: Signal, apart: Floats) -> float:
    """Return how large the artefact is: what was planted, or in another unit what came of it."""
    found = float(np.max(apart, initial=0))
    return found if out.unit != given.unit else max(SIZE, found)


def _leak(apart: Floats, open_: Bools, size: float, out: Signal) -> str:
    """Return how much shows outside the masks, and where; empty when it is little enough."""
    seen = np.where(open_, apart, 0.0)
    if seen.size == 0 or np.max(seen) <= LEAK * size:
        return ""
    at = int(np.argmax(seen))
    return f"{100 * seen[at] / size:.2g} % shows at {float(out.time_s(at)):.6g} s,"
