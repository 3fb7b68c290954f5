"""Least-squares fit of a slow trend and a harmonic series to one epoch.

Time is counted from the epoch's middle, so that cosines and sines are orthogonal and the normal
equations fall into two small systems whose elements are sums of cosines in closed form. Everything
is done epoch by epoch with elementwise operations and sums along rows: an epoch's numbers depend
neither on its neighbours nor on the number of threads.
"""

from collections.abc import Sequence
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
_SECANTS = 12
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


@lru_cache(maxsize=128)
def _pairs(count: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Return k - l, without sign, and k + l for all pairs of harmonics."""
    k = np.arange(1, count + 1, dtype=np.int64)
    apart, together = np.abs(k[:, None] - k), k[:, None] + k
    apart.flags.writeable = together.flags.writeable = False
    return apart, together


def eliminated(systems: Floats) -> Floats:
    """Return positive definite systems, shape (s, m, m + 1), in upper triangular form.

    What stands below the diagonal has no meaning. Elementwise, since a library's solver gives
    other last bits on another number of threads.
    """
    left = systems.copy()
    for i in range(left.shape[1] - 1):
        factor = left[:, i + 1 :, i] / left[:, i, i, None]
        left[:, i + 1 :, i + 1 :] -= factor[:, :, None] * left[:, i, None, i + 1 :]
    return left


def substituted(upper: Floats) -> Floats:
    """Return the solutions, shape (s, m), of systems that `eliminated` returned."""
    solution = upper[:, :, -1].copy()
    for i in range(upper.shape[1] - 1, -1, -1):
        solution[:, i] /= upper[:, i, i]
        solution[:, :i] -= upper[:, :i, i] * solution[:, i, None]
    return solution


def solved(systems: Floats) -> Floats:
    """Solve positive definite systems, shape (s, m, m + 1); shape (s, m)."""
    return substituted(eliminated(systems))


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
        self.doubled = np.full(later.size, 2.0)
        if x.size % 2:  # the middle sample is its own mirror image
            self.folded_even[0] /= 2
            self.doubled[0] = 1.0
        self.omega, even, odd = _trend_basis(x.size, terms)
        self.even = np.sum(even * self.x, axis=-1)
        self.odd = np.sum(odd * self.x, axis=-1)
        # The trend's cosines are orthogonal: n for the constant, n/2 for the others.
        norm = np.full(self.even.size, self.size / 2)
        norm[0] = self.size
        self.norm = norm
        self.by_trend = float(np.sum(self.even**2 / norm) + np.sum(self.odd**2) * 2 / self.size)
        self.left = max(0.0, float(np.sum(self.x**2)) - self.by_trend)
        self.without_trend = (
            self.x
            - np.sum(even * (self.even / norm)[:, None], axis=0)
            - np.sum(odd * (self.odd * 2 / self.size)[:, None], axis=0)
        )

    def _systems(self, harmonic: NDArray[np.complex128], cycles: float) -> tuple[Floats, Floats]:
        """Return the normal equations of cosines and of sines, the trend taken out of both.

        Shape (2, count, count + 1); and what the even trend shares with the cosines. A trend's
        own equations are diagonal, so that it is eliminated at once.
        """
        base, count = 2 * pi * cycles, harmonic.shape[0]
        systems = np.empty((2, count, count + 1))
        np.add.reduce(harmonic.real * self.folded_even, axis=-1, out=systems[0, :, -1])
        np.add.reduce(harmonic.imag * self.folded_odd, axis=-1, out=systems[1, :, -1])
        kernel = _cosine_sum(base * np.arange(2 * count + 1), self.size)
        apart, together = (kernel[pairs] for pairs in _pairs(count))
        systems[0, :, :-1] = (apart + together) / 2
        systems[1, :, :-1] = (apart - together) / 2
        omega, trend = base * np.arange(1, count + 1), self.omega[:, None]
        difference = _cosine_sum(trend - omega, self.size)
        total = _cosine_sum(trend + omega, self.size)
        even, odd = (difference + total)[0::2] / 2, (difference - total)[1::2] / 2
        for system, shared, right, norm in (
            (systems[0], even, self.even, self.norm),
            (systems[1], odd, self.odd, np.full(self.odd.size, self.size / 2)),
        ):
            whole = np.concatenate((shared, right[:, None]), axis=1)
            for j in range(norm.size):
                system -= shared[j][:, None] * (whole[j] / norm[j])
        return systems, even

    def fit(self, cycles: float, count: int) -> HarmonicFit:
        """Fit ``count`` harmonics of a fundamental in cycles a sample, with the trend."""
        systems, shared = self._systems(self._turned(cycles, count), cycles)
        upper = eliminated(systems)
        cosine, sine = substituted(upper)
        constant = float(self.even[0] - np.sum(shared[0] * cosine)) / self.size
        return HarmonicFit(
            mean=self.plain_mean + constant,
            cosine=cosine,
            sine=sine,
            gained=_explained(upper),
            left=self.left,
        )

    def gain(self, cycles: float, count: int) -> float:
        """Return the sum of squares that harmonics explain beyond the trend."""
        (gain,) = self.gains((cycles,), count)
        return gain

    def gains(self, cycles: Sequence[float], count: int) -> list[float]:
        """Return the gains at several fundamentals, whose systems are solved side by side."""
        each = [self._systems(self._turned(one, count), one)[0] for one in cycles]
        upper = eliminated(np.concatenate(each))
        return [_explained(upper[2 * i : 2 * i + 2]) for i in range(len(each))]

    def slope(self, cycles: float, count: int) -> float:
        r"""Return how the gain changes with the fundamental, per cycle a sample.

        .. math::

            \frac{dG}{d\omega} = 2 \sum_t e_t\, t
                \sum_k k\,(b_k \cos k \omega t - a_k \sin k \omega t)

        with a, b the coefficients and e what the fit leaves. That is orthogonal to all that is
        fitted, so that it does not count how the coefficients change.
        """
        harmonic = self._turned(cycles, count)
        systems, _ = self._systems(harmonic, cycles)
        cosine, sine = substituted(eliminated(systems))
        a, b = cosine[:, None], sine[:, None]
        left_even, left_odd = self._without_trend(
            self.folded_even - self.doubled * np.add.reduce(a * harmonic.real, axis=0),
            self.folded_odd - self.doubled * np.add.reduce(b * harmonic.imag, axis=0),
        )
        k = np.arange(1, count + 1)[:, None]
        even = np.add.reduce((-k * a) * harmonic.imag, axis=0)
        odd = np.add.reduce((k * b) * harmonic.real, axis=0)
        time = _time(self.size)[self.size // 2 :]
        return 4 * pi * float(np.sum(time * (left_even * even + left_odd * odd)))

    def _turned(self, cycles: float, count: int) -> NDArray[np.complex128]:
        """Return the harmonics over the epoch's later half, shape (count, half)."""
        return _harmonics(2 * pi * cycles * _time(self.size)[self.size // 2 :], count)

    def _without_trend(self, even: Floats, odd: Floats) -> tuple[Floats, Floats]:
        """Return the even and odd half of an epoch without the trend that fits them best."""
        middle = self.size // 2
        _, cosines, sines = _trend_basis(self.size, self.omega.size)
        for basis, norm in zip(cosines[:, middle:], self.norm, strict=True):
            even = even - self.doubled * basis * (np.sum(basis * even) / norm)
        for basis in sines[:, middle:]:
            odd = odd - self.doubled * basis * (np.sum(basis * odd) * 2 / self.size)
        return even, odd


def _explained(upper: Floats) -> float:
    """Return the right side times the solution, of systems that `eliminated` returned."""
    pivots = np.diagonal(upper, axis1=1, axis2=2)
    return float(np.sum(np.ascontiguousarray(upper[:, :, -1] ** 2 / pivots)))


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
    step = 1 / (_CELLS_A_LOBE * max(count, 4) * fitter.size)
    here = start
    left, height, right = fitter.gains((start - step, start, start + step), count)
    stride, ahead, behind = (step, right, left) if right >= left else (-step, left, right)
    for _ in range(_HILL_STEPS):
        if ahead <= height:
            break
        here, height, behind = here + stride, ahead, height
        ahead = fitter.gain(here + stride, count)
    curve = behind - 2 * height + ahead
    if not curve < 0:
        return here
    top = here + stride * (behind - ahead) / curve / 2
    return _level(fitter, count, (here - step, here + step), top, curve / step**2, precision * step)


def _level(
    fitter: EpochFitter,
    count: int,
    within: tuple[float, float],
    start: float,
    curvature: float,
    precision: float,
) -> float:
    """Return where the slope is 0, by the secant method; by bracketing where that goes astray."""
    from scipy.optimize import minimize_scalar

    here, slope = start, fitter.slope(start, count)
    for _ in range(_SECANTS):
        ahead = here - slope / curvature
        if not within[0] <= ahead <= within[1]:
            break
        if abs(ahead - here) <= precision:
            return ahead
        next_slope = fitter.slope(ahead, count)
        curvature = (next_slope - slope) / (ahead - here)
        here, slope = ahead, next_slope
        if not curvature < 0:
            break
    found = minimize_scalar(
        lambda cycles: -fitter.gain(cycles, count),
        bounds=within,
        method="bounded",
        options={"xatol": precision},
    )
    return float(found.x)
