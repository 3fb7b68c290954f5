"""Recursive filters as second-order sections: design, response, and how they are run."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import ceil, isqrt
from typing import Any, Generic, Literal, Protocol, TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from waveassay.contract import (
    REACH_TOLERANCE,
    Floats,
    Reach,
    Response,
    Signal,
    SignalSpec,
    exact,
)
from waveassay_stages._finite import require_finite

Complex = NDArray[np.complex128]
Passes = Literal["both_ways", "forward"]
Edges = Literal["odd", "even", "constant"]

#: A filter's response is over when the worst artefact of size 1 leaves no more than this.
RESPONSE_SHARE = 0.01

# Points at which a long response is looked at; finer would not change its length by 1e-5.
_POINTS = 200_000


def prewarped_hz(freq_hz: float, rate_hz: float) -> float:
    r"""Return the analogue frequency that the bilinear transform brings to ``freq_hz``.

    .. math:: f_a = \frac{f_s}{\pi} \tan\frac{\pi f}{f_s}
    """
    return float(rate_hz / np.pi * np.tan(np.pi * freq_hz / rate_hz))


@dataclass(frozen=True)
class Cascade:
    """Second-order sections in series.

    Attributes
    ----------
    sos : coefficients b0, b1, b2, 1, a1, a2 of each section, shape (sections, 6).
    zeros, poles : what they were made from, shape (order,).
    dc : gain of each section at 0 Hz, shape (sections,).
    """

    sos: Floats
    zeros: Complex
    poles: Complex
    dc: Floats


def cascade(sections: Iterable[tuple[complex, complex, complex, complex]], at: complex) -> Cascade:
    """Return the cascade of sections, each scaled to gain 1 at the point ``at`` of the z plane.

    A section is two poles and two zeros, each pair real or conjugate; a first-order section has a
    pole and a zero at 0.
    """
    pairs = list(sections)
    sos = np.empty((len(pairs), 6))
    dc = np.empty(len(pairs))
    for i, (p1, p2, z1, z2) in enumerate(pairs):
        gain = abs((at - p1) * (at - p2) / ((at - z1) * (at - z2)))
        b = np.array([1.0, -(z1 + z2).real, (z1 * z2).real]) * gain
        sos[i] = (*b, 1.0, -(p1 + p2).real, (p1 * p2).real)
        # Exactly 0 for a zero at 1: the coefficients of a slow filter would cancel too coarsely.
        dc[i] = gain * ((1 - z1) * (1 - z2) / ((1 - p1) * (1 - p2))).real
    # A first-order section's spare pole and zero at 0 cancel, and are left out.
    used = [((p1, z1), (p2, z2)) for p1, p2, z1, z2 in pairs]
    kept = [pair for both in used for pair in both if any(pair)]
    poles = np.array([pole for pole, _ in kept], np.complex128)
    zeros = np.array([zero for _, zero in kept], np.complex128)
    return Cascade(sos, zeros, poles, dc)


def response(
    filters: Cascade, freq_hz: ArrayLike, rate_hz: float, passes: Passes
) -> Floats | Complex:
    r"""Return the gain of all passes, from the coefficients that are run; real both ways.

    .. math::

        H(z) = \prod \frac{b_0 + b_1 z^{-1} + b_2 z^{-2}}{1 + a_1 z^{-1} + a_2 z^{-2}}, \qquad
        |H|^2 \;\text{both ways}

    in powers of :math:`u = 1 - z^{-1} = 2 i \sin(\omega / 2) e^{-i \omega / 2}`: the coefficients
    of a slow filter nearly cancel at 0 Hz, and their sums are exact while their products are not.
    """
    half = np.pi * np.asarray(freq_hz, np.float64) / rate_hz
    u = 2j * np.sin(half) * np.exp(-1j * half)
    once: Complex = np.ones(half.shape, np.complex128)
    for b0, b1, b2, _, a1, a2 in filters.sos:
        above = (b0 + b1) + b2 - u * ((b1 + 2 * b2) - u * b2)
        below = (1 + a1) + a2 - u * ((a1 + 2 * a2) - u * a2)
        once = once * (above / below)
    return once.real**2 + once.imag**2 if passes == "both_ways" else once


def gain(filters: Cascade, freq_hz: ArrayLike, rate_hz: float, passes: Passes) -> Floats:
    """Return the gain in amplitude after all passes, from the coefficients that are run."""
    return np.abs(response(filters, freq_hz, rate_hz, passes))


def modes(filters: Cascade, passes: Passes) -> tuple[Complex, Complex]:
    r"""Return weights and poles of the impulse response.

    .. math::

        h[n] = \sum_k c_k p_k^{n-1} \quad (n \ge 1), \qquad
        c_k = g \frac{\prod_i (p_k - z_i)}{\prod_{j \ne k} (p_k - p_j)}

    by partial fractions; run both ways, :math:`h[-n] = h[n]` and each weight is multiplied by
    :math:`H(1 / p_k)`.
    """
    poles = filters.poles.copy()
    for k in range(1, poles.size):
        # Partial fractions want poles apart; this moves the response by a hundred-thousandth.
        apart = 1e-5 * abs(1 - poles[k])
        while np.any(np.abs(poles[:k] - poles[k]) < apart / 2):
            poles[k] -= apart
    scale = float(np.prod(filters.sos[:, 0]))
    weights = np.empty_like(poles)
    for k, pole in enumerate(poles):
        others = np.delete(poles, k)
        weights[k] = scale * np.prod(pole - filters.zeros) / np.prod(pole - others)
        if passes == "both_ways":
            backward = np.prod(1 - filters.zeros * pole) / np.prod(1 - poles * pole)
            weights[k] *= scale * backward
    return weights, poles


def reach_samples(filters: Cascade, passes: Passes, share: float) -> int:
    r"""Return after how many samples no more than ``share`` of a bounded past can be felt.

    The smallest n with :math:`\sum_k |c_k| |p_k|^n / (1 - |p_k|) \le` ``share``, which bounds
    :math:`\sum_{m > n} |h[m]|`, for one pass and for both.
    """
    kinds: tuple[Passes, ...] = ("forward", "both_ways")
    sizes = []
    for kind in kinds if passes == "both_ways" else kinds[:1]:
        weights, poles = modes(filters, kind)
        sizes.append((np.abs(weights) / (1 - np.abs(poles)), np.abs(poles)))

    def bound(n: int) -> float:
        return max(float(np.sum(weight * size**n)) for weight, size in sizes)

    high = 1
    while bound(high) > share:
        high *= 2
    low = high // 2
    while high - low > max(1, high // 1000):
        middle = (low + high) // 2
        low, high = (middle, high) if bound(middle) > share else (low, middle)
    return high


def response_samples(filters: Cascade, passes: Passes) -> int:
    r"""Return how long the response stays above 1 %, in samples.

    The smallest n (or a thousandth more) with :math:`\sum_{m > n} |h[m]| \le 0.01`: an artefact of
    any shape and length and of size A, that lies more than n samples away, leaves at most A / 100.
    (That of the worst shape leaves just as much; a step leaves less.) Measured on the impulse
    response of all passes, to one side.
    """
    rest = RESPONSE_SHARE / 1000  # what lies beyond the part that is looked at
    length = reach_samples(filters, passes, rest)
    stride = max(1, length // _POINTS)
    weights, poles = modes(filters, passes)
    steps = ceil(length / stride)
    block = isqrt(steps) + 1
    response = np.zeros(block * block)
    for weight, pole in zip(weights, poles, strict=True):
        # h at 1, 1 + stride, ...: powers as an outer product, for one multiplication a sample.
        fine = (pole**stride) ** np.arange(block)
        coarse = (pole ** (stride * block)) ** np.arange(block)
        response += (weight * coarse[:, None] * fine[None, :]).real.ravel()
    tail = (
        np.cumsum(np.abs(response)[::-1])[::-1] * stride
    )  # tail[i] = sum from sample 1 + i*stride
    return int(np.count_nonzero(tail > RESPONSE_SHARE - rest)) * stride


def run_sections(x: Floats, filters: Cascade, passes: Passes, edges: Edges, pad: int) -> Floats:
    """Return the filtered samples, shape (n,).

    Each pass starts from the steady state of its first sample, so that a constant offset starts
    no transient. Both ways, ``pad`` samples (at most n - 1) are put before and after: mirrored
    through the end sample (``odd``), mirrored (``even``), or the end sample itself (``constant``).
    """
    from scipy import signal

    steady = np.empty((filters.sos.shape[0], 2))
    level = 1.0
    for i, (_, b1, b2, _, a1, a2) in enumerate(filters.sos):
        out = level * filters.dc[i]
        steady[i, 1] = b2 * level - a2 * out
        steady[i, 0] = b1 * level - a1 * out + steady[i, 1]
        level = out

    def one_pass(values: Floats) -> Floats:
        filtered, _ = signal.sosfilt(filters.sos, values, zi=steady * values[0])
        return np.asarray(filtered, np.float64)

    if x.size == 0:
        return x.copy()
    if passes == "forward":
        return one_pass(x)
    pad = min(pad, x.size - 1)
    before, after = x[1 : pad + 1][::-1], x[x.size - 1 - pad : -1][::-1]
    if edges == "odd":
        before, after = 2 * x[0] - before, 2 * x[-1] - after
    elif edges == "constant":
        before, after = np.full(pad, x[0]), np.full(pad, x[-1])
    once = one_pass(np.concatenate((before, x, after)))
    return np.ascontiguousarray(one_pass(once[::-1])[::-1][pad : pad + x.size])


class FilterParams(Protocol):
    """What the parameters of every recursive filter hold."""

    @property
    def passes(self) -> Passes:
        """Both ways or forward."""

    @property
    def edges(self) -> Edges:
        """What is put beyond the ends of a piece when run both ways."""

    @property
    def widen(self) -> float | None:
        """How far masked time is widened, s; None for as long as the filter's response."""

    def __hash__(self) -> int:
        """By value: what is made of parameters is remembered."""


P = TypeVar("P", bound=FilterParams)
Design = Callable[[Any, float], Cascade]


@lru_cache(maxsize=256)
def _response_samples(design: Design, params: FilterParams, rate_hz: float) -> int:
    return response_samples(design(params, rate_hz), params.passes)


@lru_cache(maxsize=256)
def _reach_samples(design: Design, params: FilterParams, rate_hz: float) -> int:
    return reach_samples(design(params, rate_hz), params.passes, REACH_TOLERANCE)


@dataclass(frozen=True)
class Filter(Generic[P]):
    """What a stage is that filters by sections: all but its parameters and their design.

    Attributes
    ----------
    stage : its name.
    design : ``design(params, rate_hz)``: the second-order sections of one pass.
    """

    stage: str
    design: Callable[[P, float], Cascade]

    def filtered(self, x: Floats, rate_hz: float, params: P) -> Floats:
        """Return the filtered samples; padded by the length of the 1 % response."""
        pad = _response_samples(self.design, params, rate_hz)
        return run_sections(x, self.design(params, rate_hz), params.passes, params.edges, pad)

    def gain_at(self, params: P, rate_hz: float, freq_hz: ArrayLike) -> Floats:
        """Return the gain in amplitude after all passes, measured from the designed sections."""
        return gain(self.design(params, rate_hz), freq_hz, rate_hz, params.passes)

    def response_s(self, params: P, rate_hz: Fraction) -> Fraction:
        """Return how long the response stays above 1 %, to either side; see `response_samples`."""
        return _response_samples(self.design, params, float(rate_hz)) / rate_hz

    def context(self, params: P, given: SignalSpec) -> Reach:
        """Return how far back, and both ways how far ahead, a moment depends on the input."""
        if given.rate_hz is None:
            raise ValueError("the rate must be known")
        rate_hz = float(given.rate_hz)
        samples = _reach_samples(self.design, params, rate_hz)
        widen_s = self._widen_s(params, given.rate_hz)
        if params.passes == "forward":
            return Reach(max(widen_s, samples / given.rate_hz), Fraction(0))
        pad = _response_samples(self.design, params, rate_hz)
        span_s = max(widen_s, (samples + pad) / given.rate_hz)
        return Reach(span_s, span_s)

    def response(self) -> Response:
        """Return what the stage does away from the ends of a piece."""
        return Response(gain=self._gain, mask=self.mask)

    def mask(self, params: P, signal: Signal) -> Signal:
        """Widen the masks by the filter's response, and mask the ends of the piece."""
        widen_s = self._widen_s(params, signal.rate_hz)
        before_s = widen_s if params.passes == "both_ways" else Fraction(0)
        return signal.widened(before_s, widen_s).excluding_edges(before_s, widen_s)

    def run(self, params: P, signal: Signal) -> Signal:
        """Filter one signal through its masks, widen them, and mask the ends of its piece."""
        require_finite(signal, self.stage)
        filtered = self.filtered(signal.x, float(signal.rate_hz), params)
        return self.mask(params, signal.with_samples(filtered))

    def _gain(self, params: P, given: SignalSpec, freq_hz: Floats) -> Floats | Complex:
        assert given.rate_hz is not None, "it is asked for once the rate is known"
        rate_hz = float(given.rate_hz)
        return response(self.design(params, rate_hz), freq_hz, rate_hz, params.passes)

    def _widen_s(self, params: P, rate_hz: Fraction) -> Fraction:
        return self.response_s(params, rate_hz) if params.widen is None else exact(params.widen)
