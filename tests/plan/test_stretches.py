"""The grid of stretches: whole samples at every rate, no gap and no overlap."""

import math
from fractions import Fraction
from itertools import pairwise

from hypothesis import given
from hypothesis import strategies as st

from waveassay.contract import Interval
from waveassay.plan.stretches import STRETCH_S, aligned, bounds_s, common_step_s

rates = st.fractions(min_value=1, max_value=5000, max_denominator=100)
times = st.fractions(min_value=0, max_value=90_000, max_denominator=1000)


@given(st.lists(rates, min_size=1, max_size=4))
def test_the_common_step_is_whole_samples_at_every_rate_and_the_shortest(
    rates_hz: list[Fraction],
) -> None:
    step = common_step_s(rates_hz)
    counts = [step * rate for rate in rates_hz]
    assert all(count.denominator == 1 for count in counts)
    shared = [c.numerator for c in counts]
    assert math.gcd(*shared) == 1


def test_the_common_step_of_usual_rates() -> None:
    assert common_step_s([Fraction(512), Fraction(128)]) == Fraction(1, 128)
    assert common_step_s([Fraction(500), Fraction(128)]) == Fraction(1, 4)


@given(times, times, rates, st.booleans())
def test_stretches_cover_a_piece_once(
    start_s: Fraction, length_s: Fraction, rate_hz: Fraction, whole: bool
) -> None:
    piece = Interval(start_s, start_s + length_s)
    step_s = common_step_s([rate_hz])
    borders = bounds_s(piece, step_s, whole=whole)
    assert borders[0] == piece.start_s
    assert borders[-1] == piece.stop_s
    assert list(borders) == sorted(borders)
    for border in borders[:-1]:
        assert ((border - start_s) / step_s).denominator == 1
    lengths = [b - a for a, b in pairwise(borders)]
    assert len(lengths) == 1 or (not whole and max(lengths) <= STRETCH_S * 3 / 2 + step_s)


@given(times, times, rates)
def test_alignment_goes_back_by_less_than_a_step(
    start_s: Fraction, later_s: Fraction, rate_hz: Fraction
) -> None:
    step_s = common_step_s([rate_hz])
    piece = Interval(start_s, start_s + later_s + 1)
    moment = aligned(start_s + later_s, piece, step_s)
    assert 0 <= start_s + later_s - moment < step_s
