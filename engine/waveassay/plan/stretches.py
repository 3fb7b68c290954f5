"""The fixed grid of stretches: how a piece is cut into tasks.

A stretch is about a quarter of an hour, aligned with the sampling rates of the steps that work on
samples; it is never a function of cores, memory or later steps, so the same recording is always cut
alike.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from fractions import Fraction
from math import gcd, lcm

from waveassay.contract import Interval

#: Longer ones cost fewer calls a channel-hour, and more memory; an hour still keeps four busy.
STRETCH_S = Fraction(900)


@dataclass(frozen=True, order=True)
class Stretch:
    """A stretch of a piece; both count from 0. Its borders differ by signal, see `bounds_s`."""

    piece: int
    number: int


def common_step_s(rates_hz: Iterable[Fraction]) -> Fraction:
    """Return the shortest time that is a whole number of samples at every rate.

    The least common multiple of the sampling intervals: for rates a/b in lowest terms,
    lcm(all b) / gcd(all a) seconds.
    """
    numerator, denominator = 0, 1
    for rate in rates_hz:
        numerator = gcd(numerator, rate.numerator)
        denominator = lcm(denominator, rate.denominator)
    return Fraction(denominator, numerator)


def aligned(time_s: Fraction, piece: Interval, step_s: Fraction) -> Fraction:
    """Return the last moment of a piece's grid at or before a time, not before the piece."""
    return max(piece.start_s, piece.start_s + (time_s - piece.start_s) // step_s * step_s)


def bounds_s(piece: Interval, step_s: Fraction, *, whole: bool) -> tuple[Fraction, ...]:
    """Return the stretches' borders in a piece; with ``whole`` the piece is one stretch.

    Border k lies at the last grid moment at or before k times a quarter of an hour. A rest shorter
    than half a stretch is joined to the last stretch.
    """
    count = 1 if whole else max(1, int(piece.length_s / STRETCH_S + Fraction(1, 2)))
    inner = [aligned(piece.start_s + k * STRETCH_S, piece, step_s) for k in range(1, count)]
    return (piece.start_s, *inner, piece.stop_s)
