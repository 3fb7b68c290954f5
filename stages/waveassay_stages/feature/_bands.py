"""Where a band begins and ends on a grid of bins, and how power is summed over it."""

from functools import lru_cache
from math import ceil, floor
from typing import Literal

import numpy as np

from waveassay.contract import Findings, Floats, SpectraSpec

Edges = Literal["lower_in", "both_in", "partial"]
BinEdges = Literal["lower_in", "both_in"]
Rule = Literal["rectangle", "trapezoid", "simpson"]

# A limit this close to a bin's centre (in bins) lies on it: 3 * 0.1 Hz is 0.3 Hz.
_ON_A_BIN = 1e-6


def spacing(freq_hz: Floats) -> float:
    """Return the spacing of equally spaced bins from 0, Hz."""
    return float(freq_hz[-1]) / (freq_hz.size - 1)


def bins_inside(
    low_hz: float, high_hz: float, bin_hz: float, count: int, edges: Edges = "both_in"
) -> slice:
    """Return which of ``count`` bins at 0, ``bin_hz``, ... have their centre in a band.

    ``lower_in`` takes a bin on the lower limit and leaves one on the upper, so that adjacent bands
    share none; a band that ends at the highest bin takes it all the same. ``both_in`` and
    ``partial`` take both.
    """
    first = max(0, ceil(low_hz / bin_hz - _ON_A_BIN))
    upper = high_hz / bin_hz
    stop = floor(upper + _ON_A_BIN) + 1
    if edges == "lower_in" and upper < count - 1 - _ON_A_BIN:
        stop = ceil(upper - _ON_A_BIN)
    return slice(first, max(first, min(stop, count)))


def band_weights(
    freq_hz: Floats, low_hz: float, high_hz: float, rule: Rule, edges: Edges
) -> Floats:
    r"""Return the weight of each bin, Hz, in the integral of a density over a band.

    .. math:: \int_{a}^{b} S(f)\,df \approx \sum_k w_k S_k

    =========  ==================================================================================
    rectangle  a bin stands for the ``bin_hz`` around its centre: :math:`w_k = \Delta f`
    trapezoid  straight lines between bins: half a weight at the first and last bin
    simpson    parabolas through three bins; a last odd interval after Cartwright
    =========  ==================================================================================

    With ``partial`` the integral runs from limit to limit: the rectangle rule takes the part of a
    bin's width that lies in the band (all of the bin at 0 for a band from 0, all of the highest
    for a band that ends there), the trapezoid rule the straight lines up to the limits.

    Parameters
    ----------
    freq_hz : bin centres, Hz, shape (f,), equally spaced from 0.
    low_hz, high_hz : the band, Hz.
    rule, edges : see above and `bins_inside`.

    Returns
    -------
    Weights in Hz, shape (f,); all 0 where the band holds too few bins for the rule.

    Raises
    ------
    ValueError
        For Simpson's rule with partial bins, which is not defined.

    References
    ----------
    P. J. Davis, P. Rabinowitz, Methods of Numerical Integration, 2nd ed., 1984 (the rules).
    K. V. Cartwright, J. Math. Sci. Math. Educ. 12(2), 1-9, 2017 (the odd interval).
    Both from memory.
    """
    step = spacing(freq_hz)
    if edges == "partial":
        if rule == "simpson":
            raise ValueError("Simpson's rule needs whole bins")
        return _partial_weights(freq_hz, step, low_hz, high_hz, rule)
    weights = np.zeros(freq_hz.size)
    inside = weights[bins_inside(low_hz, high_hz, step, freq_hz.size, edges)]
    if rule == "rectangle":
        inside[:] = step
    elif rule == "trapezoid" and inside.size > 1:
        inside[:] = step
        inside[[0, -1]] = step / 2
    elif rule == "simpson" and inside.size > 1:
        inside[:] = _simpson_weights(inside.size) * step
    return weights


def _partial_weights(
    freq_hz: Floats, step: float, low_hz: float, high_hz: float, rule: Rule
) -> Floats:
    if rule == "rectangle":
        half = step / 2
        low = low_hz if low_hz > 0 else -half
        high = high_hz if high_hz < freq_hz[-1] else float(freq_hz[-1]) + half
        covered = np.minimum(high, freq_hz + half) - np.maximum(low, freq_hz - half)
        cells: Floats = np.maximum(covered, 0.0)
        return cells

    def upto(limit_hz: float) -> Floats:
        # Integral, up to the limit, of the triangle that carries each bin's value.
        u = np.clip((limit_hz - freq_hz) / step, -1.0, 1.0)
        area: Floats = step * np.where(u < 0, (1 + u) ** 2 / 2, 1 - (1 - u) ** 2 / 2)
        return area

    top = float(freq_hz[-1])
    weights: Floats = upto(min(high_hz, top)) - upto(max(low_hz, 0.0))
    return weights


def _simpson_weights(count: int) -> Floats:
    weights = np.zeros(count)
    if count == 2:
        weights[:] = 0.5
        return weights
    odd = count if count % 2 else count - 1
    weights[:odd] = 2 / 3
    weights[1:odd:2] = 4 / 3
    weights[[0, odd - 1]] = 1 / 3
    if odd < count:
        weights[-3:] += (-1 / 12, 2 / 3, 5 / 12)
    return weights


@lru_cache(maxsize=256)
def _bins_and_weights(
    freq_hz: bytes, low_hz: float, high_hz: float, rule: Rule, edges: Edges
) -> tuple[slice, Floats | float]:
    """Return the bins that count, and their weights, on bins given as the bytes of float64.

    One number where all weigh the same.
    """
    weights = band_weights(np.frombuffer(freq_hz), low_hz, high_hz, rule, edges)
    used = np.flatnonzero(weights)
    if used.size == 0:
        return slice(0, 0), 0.0
    span = slice(int(used[0]), int(used[-1]) + 1)
    inside = weights[span]
    if np.all(inside == inside[0]):
        return span, float(inside[0])
    inside.flags.writeable = False
    return span, inside


def band_integrals(
    freq_hz: Floats, density: Floats, low_hz: float, high_hz: float, rule: Rule, edges: Edges
) -> Floats:
    """Return the sum over bins of each row by `band_weights`, shape (rows,), in float64.

    NaN where the band holds too few bins for the rule.
    """
    span, weights = _bins_and_weights(freq_hz.tobytes(), low_hz, high_hz, rule, edges)
    if span.start == span.stop:
        return np.full(density.shape[0], np.nan)
    inside = density[:, span]
    total: Floats
    if isinstance(weights, float):
        total = np.add.reduce(inside, axis=-1) * weights
    else:
        total = np.add.reduce(inside * weights, axis=-1)
    return total


def check_bins(
    low_hz: float,
    high_hz: float,
    given: SpectraSpec,
    findings: Findings,
    at: str,
    *,
    least: int = 1,
    edges: Edges = "both_in",
) -> None:
    """Refuse a band that holds fewer bins than a rule needs, where the bins are known."""
    if given.bin_hz is None or given.top_hz is None or not 0 <= low_hz < high_hz:
        return
    inside = bins_inside(
        low_hz, high_hz, given.bin_hz, round(given.top_hz / given.bin_hz) + 1, edges
    )
    found = inside.stop - inside.start
    if found < least:
        findings.refuse(
            f"the band {low_hz:g} to {high_hz:g} Hz holds {found} of the spectrum's bins, which "
            f"are {given.bin_hz:g} Hz apart; at least {least} are needed",
            at,
        )
