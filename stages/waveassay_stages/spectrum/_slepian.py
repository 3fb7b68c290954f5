"""Slepian's tapers (discrete prolate spheroidal sequences), the same bits on every machine."""

from fractions import Fraction
from functools import lru_cache
from math import cos, fsum, pi, sin, sqrt

import numpy as np

from waveassay.contract import Floats

# Tapers and concentrations are rounded to this share of their size, so that the last bits of a
# library's arithmetic do not reach them.
_ROUNDING = 2.0**-40


@lru_cache(maxsize=32)
def slepian_tapers(length: int, time_bandwidth: Fraction, count: int) -> tuple[Floats, Floats]:
    r"""Return the first K tapers, shape (K, N), of energy 1, and their concentrations, shape (K,).

    Taper k is the eigenvector of the k-th largest eigenvalue of the tridiagonal matrix with

    .. math::

        T_{t,t} = \Bigl( \frac{N - 1 - 2t}{2} \Bigr)^2 \cos 2 \pi W, \qquad
        T_{t,t+1} = \frac{(t + 1)(N - 1 - t)}{2}, \qquad W = NW / N

    and its concentration is the share of its energy at frequencies within +-W,

    .. math::

        \lambda_k = 2 W r_0 + 2 \sum_{l=1}^{N-1} r_l \frac{\sin 2 \pi W l}{\pi l}, \qquad
        r_l = \sum_t v_{k,t} v_{k,t+l} .

    Sign (Slepian): even tapers have a positive sum, odd ones begin with a positive lobe. Both
    results are rounded to about 2^-40 of their size and no BLAS routine has a part in them;
    arrays are read-only.

    Parameters
    ----------
    length : N, samples.
    time_bandwidth : NW, half bandwidth times length; above 0 and below N / 2.
    count : K, at least 1 and at most N.

    Raises
    ------
    ValueError
        When NW or K is outside its range.

    References
    ----------
    D. Slepian, Bell Syst. Tech. J. 57, 1371-1430, 1978, equations 13 and 14.
    """
    if not 0 < time_bandwidth < Fraction(length, 2):
        raise ValueError(f"NW must lie between 0 and {length / 2:g}, and is {time_bandwidth}")
    if not 1 <= count <= length:
        raise ValueError(f"{count} tapers of {length} samples cannot be made")
    from scipy.linalg import eigvalsh_tridiagonal

    half_width = float(time_bandwidth / length)  # W, cycles a sample
    t = np.arange(length, dtype=np.float64)
    diagonal = ((length - 1 - 2 * t) / 2) ** 2 * cos(2 * pi * half_width)
    beside = t[1:] * (length - t[1:]) / 2
    # Bisection ("stebz") and, below, elimination ("gtsv") call no BLAS; inverse iteration as
    # the library offers it would.
    values = eigvalsh_tridiagonal(
        diagonal,
        beside,
        select="i",
        select_range=(length - count, length - 1),
        lapack_driver="stebz",
    )[::-1]
    tapers = np.array(
        [_eigenvector(diagonal, beside, float(value), k) for k, value in enumerate(values)]
    )
    concentrations = np.array([_concentration(taper, half_width) for taper in tapers])
    tapers.flags.writeable = False
    concentrations.flags.writeable = False
    return tapers, concentrations


def _eigenvector(diagonal: Floats, beside: Floats, value: float, order: int) -> Floats:
    """Return the eigenvector by inverse iteration from a sine taper, which it resembles."""
    from scipy.linalg.lapack import dgtsv

    length = diagonal.size
    # Off the eigenvalue by far less than the next one is away: the system is not singular.
    shifted = diagonal - (value + 2.0**-46 * length**2)
    v = np.array([sin(pi * (order + 1) * (t + 1) / (length + 1)) for t in range(length)])
    for _ in range(4):
        *_, v, info = dgtsv(beside, shifted, beside, v)
        if info:
            raise ArithmeticError(f"taper {order} of {length} samples could not be computed")
        v = v / np.max(np.abs(v))
    v = (v + v[::-1]) / 2 if order % 2 == 0 else (v - v[::-1]) / 2
    half = v[: length // 2]
    leading = fsum(v) if order % 2 == 0 else fsum(half * (length - 1 - 2 * np.arange(half.size)))
    v = np.round((v if leading > 0 else -v) / _ROUNDING) * _ROUNDING  # the largest is 1
    return np.asarray(v / sqrt(fsum(v * v)), np.float64)


def _concentration(taper: Floats, half_width: float) -> float:
    from scipy import fft

    length = taper.size
    transform = fft.rfft(taper, 2 * length)
    r = fft.irfft(transform.real**2 + transform.imag**2, 2 * length)[:length]
    lag = np.arange(1, length)
    kernel = np.sin(2 * np.pi * half_width * lag) / (np.pi * lag)
    share = fsum((2 * half_width * r[0], *(2 * r[1:] * kernel)))
    return min(1.0, round(share / _ROUNDING) * _ROUNDING)
