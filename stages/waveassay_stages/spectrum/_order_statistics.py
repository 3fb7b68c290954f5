"""Mean and variance of the median of chi-square variables, from their order statistics."""

from collections.abc import Callable
from functools import lru_cache

import numpy as np

from waveassay.contract import Floats


@lru_cache(maxsize=256)
def exponential_median(count: int) -> tuple[float, float]:
    r"""Return mean and variance of the median of ``count`` exponential variables of mean 1.

    A power with 2 degrees of freedom is one. With m = floor(n / 2), the k-th smallest of n has
    mean :math:`\sum_{i=n-k+1}^{n} 1/i` and variance :math:`\sum_{i=n-k+1}^{n} 1/i^2`; an even
    count takes the mean of the two in the middle, which are :math:`1/m` apart in the mean.

    References
    ----------
    B. Allen et al., Phys. Rev. D 85, 122006, 2012, appendix B (the mean). A. Renyi, Acta Math.
    Acad. Sci. Hung. 4, 191-231, 1953 (the spacings are independent; from memory).
    """
    m = count // 2
    terms = range(m + 1, count + 1)
    mean, variance = sum(1 / i for i in terms), sum(1 / i**2 for i in terms)
    if count % 2 == 0:
        return mean + 0.5 / m, variance + 0.25 / m**2
    return mean, variance


def chi_square_median(count: int, dof: float) -> tuple[float, float]:
    r"""Return mean and variance of the median of ``count`` variables chi-square(dof) / dof.

    For odd n = 2h - 1 the median is :math:`Q(U)` with U a beta(h, h) variable and Q the quantile
    function, so both are integrals. For even n the mean equals that for n - 1 (a recurrence of
    order statistics). The variance is exact for n = 2, where the median is a mean; for a larger
    even n it is taken from n + 1 as a share of the squared mean (2.4 % off at n = 4 and dof = 2,
    and less above). For many epochs the mean tends to median(chi-square(dof)) / dof.

    References
    ----------
    H. A. David, H. N. Nagaraja, Order Statistics, 3rd edition, Wiley 2003, sections 2.1 and 3.4
    (from memory).
    """
    mean, variance = _odd_median(count - 1 + count % 2, dof, _as_it_is)
    if count == 2:
        return mean, variance / 2
    if count % 2 == 0:
        next_mean, next_variance = _odd_median(count + 1, dof, _as_it_is)
        return mean, next_variance * (mean / next_mean) ** 2
    return mean, variance


def log_chi_square_median(count: int, dof: float) -> tuple[float, float]:
    """Return the same of the natural logarithm of such variables.

    For an even n above 2 the variance is taken to be that for n + 1.
    """
    mean, variance = _odd_median(count - 1 + count % 2, dof, np.log)
    if count == 2:
        return mean, variance / 2
    return mean, variance if count % 2 else _odd_median(count + 1, dof, np.log)[1]


def _as_it_is(x: Floats) -> Floats:
    return x


@lru_cache(maxsize=256)
def _odd_median(count: int, dof: float, scale: Callable[[Floats], Floats]) -> tuple[float, float]:
    """Return mean and variance of the median of an odd count.

    In z, with u the normal distribution function of z, the integrand falls off on both sides
    faster than any power, where the trapezoidal rule converges exponentially.
    """
    from scipy.special import gammainccinv, gammaincinv, log_ndtr, ndtr

    h = (count + 1) / 2
    width = 1 / np.sqrt(1 + 4 / np.pi * (h - 1))  # from the curvature of the integrand's log at 0
    z = np.linspace(-12.0, 12.0, 1201) * width
    log_weight = (h - 1) * (log_ndtr(z) + log_ndtr(-z)) - z * z / 2
    weight = np.exp(log_weight - log_weight.max())
    weight /= np.sum(weight)
    # Each tail from its own side: 1 - ndtr(z) would lose all its digits at large z.
    low = gammaincinv(dof / 2, ndtr(z))
    high = gammainccinv(dof / 2, ndtr(-z))
    value = scale(np.where(z < 0, low, high) * (2 / dof))
    mean = float(np.sum(weight * value))
    return mean, float(np.sum(weight * (value - mean) ** 2))
