"""Windows from their published formulas, and what they do to noise."""

from fractions import Fraction
from functools import lru_cache
from math import cos, pi
from typing import Literal, get_args

import numpy as np

from waveassay.contract import Floats
from waveassay_stages.spectrum._density import scaled

WindowName = Literal[
    "rectangle",
    "triangle",
    "parabola",
    "tukey_10",
    "tukey_25",
    "tukey_50",
    "hann",
    "hamming",
    "blackman",
    "blackman_harris",
    "nuttall",
    "flat_top",
]
WINDOW_NAMES: tuple[str, ...] = get_args(WindowName)

# a_0, a_1, ... of a_0 - a_1 cos(z) + a_2 cos(2z) - ..., z = 2 pi n / N
_COSINE_SUMS: dict[str, tuple[float, ...]] = {
    "rectangle": (1.0,),
    "hann": (0.5, 0.5),
    "hamming": (0.54, 0.46),
    "blackman": (0.42, 0.5, 0.08),
    # Harris 1978, the minimum 4-sample window (-92 dB)
    "blackman_harris": (0.35875, 0.48829, 0.14128, 0.01168),
    # Nuttall 1981, the 4-term window with the lowest side lobes (-98 dB)
    "nuttall": (0.3635819, 0.4891775, 0.1365995, 0.0106411),
    # Heinzel et al. 2002, HFT95
    "flat_top": (1.0, 1.9383379, 1.3045202, 0.4028270, 0.0350665),
}
_TAPERED_SHARE = {"tukey_10": 0.10, "tukey_25": 0.25, "tukey_50": 0.50}


def cosine_sum(coefficients: tuple[float, ...], length: int) -> Floats:
    r"""Return the periodic window ``sum_k (-1)^k a_k cos(2 pi k n / N)``, n = 0 .. N-1.

    Parameters
    ----------
    coefficients : a_0, a_1, ...
    length : N.

    References
    ----------
    F. J. Harris, Proc. IEEE 66(1), 51-83, 1978; A. H. Nuttall, IEEE Trans. ASSP 29(1), 84-91, 1981.
    """
    # One scalar cosine a place: vectorised ones differ in the last bit between processors.
    # Both halves from the same angles, so that the window is symmetric to the bit.
    turn = [cos(2 * pi * min(n, length - n) / length) for n in range(length)]
    total = np.full(length, coefficients[0], np.float64)
    for k, a in enumerate(coefficients[1:], start=1):
        total += (-1) ** k * a * np.array([turn[k * n % length] for n in range(length)])
    return total


def _tukey(share: float, length: int) -> Floats:
    w = np.ones(length)
    for n in range(length):
        edge = min(n, length - n) / length  # periodic: n and N - n are alike
        if edge < share / 2:
            w[n] = 0.5 * (1 - cos(2 * pi * edge / share))
    return w


@lru_cache(maxsize=64)
def window(name: WindowName, length: int) -> Floats:
    r"""Return a window of N samples in its periodic (DFT-even) form; read-only, unitless.

    With ``u = n / N``, n = 0 .. N-1:

    - ``rectangle``: 1; ``triangle``: ``1 - |2u - 1|``; ``parabola``: ``1 - (2u - 1)^2``;
    - ``tukey_10``, ``tukey_25``, ``tukey_50``: flat, with cosine flanks over 10, 25 or 50 % of it;
    - the rest are sums of cosines (`cosine_sum`); ``blackman_harris`` is the 4-term minimum,
      ``nuttall`` the 4-term window with the lowest side lobes, ``flat_top`` is HFT95.

    Periodic windows continue a record of N samples by itself, as the DFT does; symmetric ones of
    the same length differ by about 1/N in noise bandwidth.

    Raises
    ------
    ValueError
        When the name is unknown or the length is below 1.

    References
    ----------
    F. J. Harris, Proc. IEEE 66(1), 51-83, 1978 (triangle, tukey, hann, hamming, blackman,
    blackman_harris); P. D. Welch, IEEE Trans. Audio Electroacoust. 15(2), 70-73, 1967 (parabola);
    A. H. Nuttall, IEEE Trans. ASSP 29(1), 84-91, 1981 (nuttall); G. Heinzel, A. Ruediger,
    R. Schilling, Max-Planck-Institut fuer Gravitationsphysik 2002 (flat_top).
    """
    if length < 1:
        raise ValueError(f"a window needs at least one sample, not {length}")
    if name in _COSINE_SUMS:
        w = cosine_sum(_COSINE_SUMS[name], length)
    elif name in _TAPERED_SHARE:
        w = _tukey(_TAPERED_SHARE[name], length)
    elif name in ("triangle", "parabola"):
        from_middle = np.abs(2 * np.arange(length) / length - 1)
        w = 1 - from_middle if name == "triangle" else 1 - from_middle**2
    else:
        raise ValueError(f"no window '{name}'; there are {', '.join(WINDOW_NAMES)}")
    w.flags.writeable = False
    return w


def noise_bandwidth_bins(w: Floats) -> float:
    """Return the equivalent noise bandwidth ``N sum(w^2) / sum(w)^2``, in bins of fs / N."""
    return float(w.size * np.sum(w * w) / np.sum(w) ** 2)


@lru_cache(maxsize=64)
def resolution_hz(name: WindowName, length: int, rate_hz: Fraction) -> float:
    """Return the equivalent noise bandwidth ``ENBW fs / N`` of a window of N samples, Hz."""
    return noise_bandwidth_bins(window(name, length)) * float(rate_hz / length)


@lru_cache(maxsize=64)
def scaled_window(name: WindowName, length: int, rate_hz: Fraction) -> Floats:
    """Return a window as the one taper of an estimate, shape (1, N); read-only."""
    tapers = scaled(window(name, length), rate_hz)[None]
    tapers.flags.writeable = False
    return tapers


def overlap_correlation(w: Floats, hop: int) -> float:
    """Return ``sum(w[n] w[n + hop]) / sum(w^2)``; its square correlates the powers of noise.

    Zero where the two do not overlap. Source: P. D. Welch 1967; F. J. Harris 1978.
    """
    if hop >= w.size:
        return 0.0
    return float(np.sum(w[hop:] * w[: w.size - hop]) / np.sum(w * w))
