"""A filter that lets masked artefacts or the ends of a piece through is found."""

from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

from contract_stages import HONEST, LENGTH, caught, smooth
from waveassay.contract import Reach, Signal, SignalSpec, Stage, checks


def with_masks(mend: Any) -> Stage:
    """Return the honest stage with other masks."""

    def run(params: Any, signal: Signal) -> Signal:
        out: Signal = mend(signal.with_samples(smooth(params, signal).x))
        return out

    return replace(HONEST, run=run)


def half_s(signal: Signal, samples: int = LENGTH // 2) -> Fraction:
    return samples / signal.rate_hz


def both(signal: Signal, samples: int) -> Signal:
    span_s = half_s(signal, samples)
    return signal.widened(span_s, span_s).excluding_edges(span_s, span_s)


@pytest.mark.parametrize("samples", [LENGTH // 2, LENGTH // 2 + 1])
def test_masks_as_wide_as_the_response(samples: int) -> None:
    checks.check_masks(with_masks(lambda signal: both(signal, samples)))


@pytest.mark.parametrize(
    "mend",
    [
        lambda signal: signal,
        lambda signal: both(signal, LENGTH // 2 - 1),
        lambda signal: signal.widened(half_s(signal), Fraction(0)),
        lambda signal: signal.widened(Fraction(0), half_s(signal)),
        lambda signal: replace(signal, excluded=()),
    ],
)
def test_masks_that_are_not_widened_enough(mend: Any) -> None:
    caught(checks.check_masks, r"% shows at .* s, outside the masks.*\.widened", with_masks(mend))


@pytest.mark.parametrize("sides", [(0, 0), (1, 0), (0, 1)])
def test_ends_that_are_not_masked(sides: tuple[int, int]) -> None:
    def mend(signal: Signal) -> Signal:
        wide = signal.widened(half_s(signal), half_s(signal))
        return wide.excluding_edges(*(side * half_s(signal) for side in sides))

    caught(checks.check_masks, r"beyond the end of a piece.*\.excluding_edges", with_masks(mend))


def test_an_output_in_another_unit_is_measured_by_what_came_of_the_artefact() -> None:
    def stage(samples: int) -> Stage:
        def run(params: Any, signal: Signal) -> Signal:
            small = signal.with_samples(1e-6 * smooth(params, signal).x, unit="V")
            return both(small, samples)

        return replace(HONEST, run=run, spec=lambda p, given, f: replace(given, unit="V"))

    checks.check_masks(stage(LENGTH // 2))
    caught(checks.check_masks, "shows at", stage(LENGTH // 2 - 1))


def test_a_stage_that_only_masks_is_left_alone() -> None:
    def run(params: Any, signal: Signal) -> Signal:
        return signal

    def context(params: Any, given: SignalSpec) -> Reach:
        return Reach(Fraction(1), Fraction(1))

    checks.check_masks(replace(HONEST, run=run, context=context))


def test_the_response_of_one_percent_need_not_be_masked() -> None:
    """A long average: an impulse leaves less than 1 % anywhere, a long artefact much more."""
    from scipy.ndimage import uniform_filter1d

    def stage(samples: int) -> Stage:
        def run(params: Any, signal: Signal) -> Signal:
            x = uniform_filter1d(np.asarray(signal.x), 1001, mode="nearest")
            return both(signal.with_samples(x), samples)

        def context(params: Any, given: SignalSpec) -> Reach:
            assert given.rate_hz is not None
            return Reach(2000 / given.rate_hz, 2000 / given.rate_hz)

        return replace(HONEST, run=run, context=context)

    checks.check_masks(stage(495))
    caught(checks.check_masks, "outside the masks", stage(485))
