"""Least-squares fit of a slow trend and a harmonic series to one epoch.

Time is counted from the epoch's middle, so that cosines and sines are orthogonal and the normal
equations fall into two small systems whose elements are sums of cosines in closed form. Everything
is done epoch by epoch with elementwise operations and sums along rows: an epoch's numbers depend
neither on its neighbours nor on the number of threads.
"""

from dataclasses import dataclass
from functools import lru_cache
from math import pi

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Floats

# Two equally likely pitches: a multiple that carries this share of the variance is the pulse.
OCTAVE_SHARE = 0.9
_CELLS_A_LOBE = 8
_HILL_STEPS = 60
_ROUGH, _FINE = 1e-2, 1e-6


@dataclass(frozen=True)
class HarmonicFit:
    """What a fit found.

    Attributes
    ----------
    mean : constant of the trend.
    cosine, sine : coefficients about the epoch's middle, shape (harmonics,).
    gained : sum of squares that the harmonics explain beyond the trend.
    left : sum of squares that the trend alone leaves.
    """

    mean: float
    cosine: Floats
    sine: Floats
    gained: float
    left: float


@lru_cache(maxsize=8)
def _trend_basis(size: int, terms: int) -> tuple[Floats, Floats, Floats]:
    """Return trend frequencies (radians a sample) and even and odd basis rows."""
    time = _time(size)
    omega = np.arange(terms, dtype=np.float64) * (pi / size)
    even = np.cos(omega[0::2, None] * time)
    odd = np.sin(omega[1::2, None] * time)
    for array in (omega, even, odd):
        array.flags.writeable = False
    return omega, even, odd


@lru_cache(maxsize=8)
def _time(size: int) -> Floats:
    middle = (size - 1) / 2
    time = np.linspace(-middle, middle, size, dtype=np.float64)
    time.flags.writeable = False
    return time


def _harmonics(angle: Floats, count: int) -> NDArray[np.complex128]:
    """Return exp(i k angle) for k = 1 to ``count``, shape (count, n), by doubling k."""
    turned = np.empty((count, angle.size), np.complex128)
    turned[0] = np.exp(1j * angle)
    known = 1
    while known < count:
        more = min(known, count - known)
        np.multiply(turned[:more], turned[known - 1], out=turned[known : known + more])
        known += more
    return turned


def _cosine_sum(omega: Floats, size: int) -> Floats:
    """Return the sum of cos(omega t) over the epoch: the Dirichlet kernel."""
    half = np.sin(omega / 2)
    near = np.abs(half) < 1e-12
    total: Floats = np.where(near, size, np.sin(size * omega / 2) / np.where(near, 1.0, half))
    return total


def _system(omega: Floats, right: Floats, size: int, sign: float) -> Floats:
    """Return the normal equations of cosines (sign 1) or sines (-1), with their right side."""
    difference = _cosine_sum(omega[:, None] - omega[None, :], size)
    total = _cosine_sum(omega[:, None] + omega[None, :], size)
    return np.concatenate(((difference + sign * total) / 2, right[:, None]), axis=1)


def solved(systems: Floats) -> Floats:
    """Solve positive definite systems, shape (s, m, m + 1), by elimination; shape (s, m).

    Elementwise, since a library's solver gives other last bits on another number of threads.
    """
    left = systems.copy()
    for i in range(left.shape[1]):
        left[:, i, i:] /= left[:, i, i, None]
        factor = left[:, :, i].copy()
        factor[:, i] = 0.0
        left[:, :, i:] -= factor[:, :, None] * left[:, i, None, i:]
    solution: Floats = left[:, :, -1]
    return solution


class EpochFitter:
    """One epoch, ready to be fitted at any fundamental.

    Parameters
    ----------
    x : samples, shape (n,).
    terms : cosines of the trend, the constant included; term j has j half periods in the epoch.
    """

    def __init__(self, x: Floats, terms: int) -> None:
        self.size = x.size
        self.plain_mean = float(np.mean(x))
        self.x = np.ascontiguousarray(x - self.plain_mean)
        # Cosines meet only the even part of the epoch about its middle, sines only the odd part.
        later, earlier = self.x[x.size // 2 :], self.x[::-1][x.size // 2 :]
        self.folded_even, self.folded_odd = later + earlier, later - earlier
        if x.size % 2:
            self.folded_even[0] /= 2  # the middle sample is its own mirror image
        self.omega, even, odd = _trend_basis(x.size, terms)
        self.even = np.sum(even * self.x, axis=-1)
        self.odd = np.sum(odd * self.x, axis=-1)
        # The trend's cosines are orthogonal: n for the constant, n/2 for the others.
        norm = np.full(self.even.size, self.size / 2)
        norm[0] = self.size
        self.by_trend = float(np.sum(self.even**2 / norm) + np.sum(self.odd**2) * 2 / self.size)
        self.left = max(0.0, float(np.sum(self.x**2)) - self.by_trend)
        self.without_trend = (
            self.x
            - np.sum(even * (self.even / norm)[:, None], axis=0)
            - np.sum(odd * (self.odd * 2 / self.size)[:, None], axis=0)
        )

    def fit(self, cycles: float, count: int) -> HarmonicFit:
        """Fit ``count`` harmonics of a fundamental in cycles a sample, with the trend."""
        base = 2 * pi * cycles
        harmonic = _harmonics(base * _time(self.size)[self.size // 2 :], count)
        cosine = np.sum(harmonic.real * self.folded_even, axis=-1)
        sine = np.sum(harmonic.imag * self.folded_odd, axis=-1)
        omega = base * np.arange(1, count + 1)
        even_right = np.concatenate((self.even, cosine))
        odd_right = np.concatenate((self.odd, sine))
        even_system = _system(np.concatenate((self.omega[0::2], omega)), even_right, self.size, 1.0)
        odd_system = _system(np.concatenate((self.omega[1::2], omega)), odd_right, self.size, -1.0)
        # The odd system is one smaller or equal: an equation of its own, 1 x = 0, fills it up.
        both = np.zeros((2, *even_system.shape))
        both[:, np.arange(len(even_right)), np.arange(len(even_right))] = 1.0
        short = len(even_right) - len(odd_right)
        both[0] = even_system
        both[1, short:, short:] = odd_system
        even, odd = solved(both)
        odd = odd[short:]
        explained = float(np.sum(even * even_right) + np.sum(odd * odd_right))
        return HarmonicFit(
            mean=self.plain_mean + float(even[0]),
            cosine=even[self.even.size :],
            sine=odd[self.odd.size :],
            gained=max(0.0, explained - self.by_trend),
            left=self.left,
        )

    def gain(self, cycles: float, count: int) -> float:
        """Return the sum of squares that harmonics explain beyond the trend."""
        return self.fit(cycles, count).gained


def harmonics_below_nyquist(cycles: float, size: int, at_most: int) -> int:
    """Return how many harmonics lie below Nyquist by half a cycle an epoch or more."""
    return max(0, min(at_most, int((0.5 - 0.5 / size) / cycles)))


def find_fundamental(fitter: EpochFitter, low: float, high: float, at_most: int) -> float | None:
    """Return the fundamental of one epoch in cycles a sample; None where it is not in the range.

    1. Score a grid of candidates by the power that a zero-padded periodogram of the epoch without
       its trend has at their harmonics, up to one frequency that is the same for all.
    2. Climb from the best one to the top of the exact explained sum of squares.
    3. That may be a fraction of the pulse (whose harmonics include the pulse's): take the highest
       multiple in the range that explains `OCTAVE_SHARE` as much, over the same frequencies.
    4. Climb again with all harmonics that are fitted.
    """
    ceiling = min(0.5, max(10 * low, 4 * high))

    def counted(cycles: float) -> int:
        wanted = min(at_most, int(ceiling / cycles))
        return max(1, harmonics_below_nyquist(cycles, fitter.size, wanted))

    step = 1 / (_CELLS_A_LOBE * counted(low) * fitter.size)
    grid = low + step * np.arange(int((high - low) / step) + 2, dtype=np.float64)
    scores = _scores(fitter.without_trend, grid, min(at_most, counted(low)), ceiling)
    best = float(grid[int(np.argmax(scores))])
    count = counted(best)
    best = _climb(fitter, best, count, _ROUGH)
    reached = fitter.gain(best, count)
    if reached <= 0:
        return None
    for multiple in range(int(high / best + 1e-9), 1, -1):
        fewer = count // multiple
        if fewer < 1:
            continue
        other = _climb(fitter, best * multiple, fewer, _ROUGH)
        if fitter.gain(other, fewer) >= OCTAVE_SHARE * reached:
            best = other
            break
    count = max(1, harmonics_below_nyquist(best, fitter.size, at_most))
    best = _climb(fitter, best, count, _FINE)
    return best if low * (1 - 1e-6) <= best <= high * (1 + 1e-6) else None


def _scores(x: Floats, grid: Floats, count: int, ceiling: float) -> Floats:
    """Return the power at each candidate's harmonics up to a ceiling (cycles a sample)."""
    from scipy import fft

    size = fft.next_fast_len(_CELLS_A_LOBE * x.size, real=True)
    power = np.abs(fft.rfft(x, size)) ** 2
    score = np.zeros(grid.size)
    for k in range(1, count + 1):
        heard = grid[grid * k <= ceiling]  # the grid rises, so these are its first ones
        bins = np.minimum(np.rint(heard * (k * size)).astype(np.int64), power.size - 1)
        score[: heard.size] += power[bins]
    return score


def _climb(fitter: EpochFitter, start: float, count: int, precision: float) -> float:
    """Return the top of the explained sum of squares on the hill where ``start`` stands.

    ``precision`` is a share of the step, which is an eighth of the hill's width or less.
    """
    from scipy.optimize import minimize_scalar

    step = 1 / (_CELLS_A_LOBE * max(count, 4) * fitter.size)
    here, height = start, fitter.gain(start, count)
    left, right = fitter.gain(start - step, count), fitter.gain(start + step, count)
    stride, ahead = (step, right) if right >= left else (-step, left)
    for _ in range(_HILL_STEPS):
        if ahead <= height:
            break
        here, height = here + stride, ahead
        ahead = fitter.gain(here + stride, count)
    found = minimize_scalar(
        lambda cycles: -fitter.gain(cycles, count),
        bounds=(here - step, here + step),
        method="bounded",
        options={"xatol": precision * step},
    )
    return float(found.x)
