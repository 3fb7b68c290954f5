"""The frequency response of a linear time-invariant stage, by which neighbours are run as one."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract.kinds import Floats, Signal


@dataclass(frozen=True)
class Response:
    r"""What a stage does away from the ends of a piece, said as a frequency response.

    The engine runs stages that declare one, and follow one another, as a single response. Near the
    ends of a piece, and wherever else it must, it runs the stage's `run`, which stays the
    reference: `waveassay.contract.checks` proves that the two agree.

    Attributes
    ----------
    gain : ``gain(params, given, freq_hz)``: what a sine of each frequency is multiplied by, real
        for a filter without delay, complex otherwise (:math:`\sum_n h[n] e^{-2 \pi i f n / r}`).
        ``given`` is the spec of the input, with its rate. ``freq_hz``, shape (n,), rises in equal
        steps from 0 to half of the rate r at which the filter stands: the input's; where the
        stage's spec changes the rate by U / D in lowest terms, U times the input's. There the
        input stands with U - 1 zeros after each sample, so that its spectrum repeats every
        ``given.rate_hz``; it is multiplied by ``gain``, every D-th sample is kept, and multiplied
        by U. So a slow signal keeps its size where the gain at 0 Hz is 1, and without delay the
        first samples of input and output lie at the same time.
    mask : ``mask(params, signal)``: the signal with its exclusions as `run` leaves them, its
        samples and rate as they were. It may look at no sample.
    """

    gain: Callable[[Any, Any, Floats], NDArray[Any]]
    mask: Callable[[Any, Signal], Signal]


def kernel_gain(kernel: Floats, centre: int, freq_hz: Floats, rate_hz: float) -> NDArray[Any]:
    r"""Return the gain of a finite kernel, for `Response.gain`.

    .. math:: G(f) = \sum_n h[n] e^{-2 \pi i f (n - c) / r}

    Parameters
    ----------
    kernel : h, shape (taps,).
    centre : c, the tap that stands over the moment itself; taps before it look ahead.
    freq_hz : equal steps from 0, shape (n,); a step is a whole part of r.
    rate_hz : r, at which the kernel stands.

    Returns
    -------
    Gain, shape (n,): real for a kernel that is symmetric about its centre.
    """
    if freq_hz.size < 2:
        return np.full(freq_hz.shape, np.sum(kernel))
    length = round(rate_hz / float(freq_hz[-1]) * (freq_hz.size - 1))
    # The transform of a kernel that is longer than asked is that of its turns laid over another.
    laid = np.zeros(length)
    np.add.at(laid, (np.arange(kernel.size) - centre) % length, kernel)
    gain = np.fft.rfft(laid)[: freq_hz.size]
    symmetric = kernel.size == 2 * centre + 1 and np.array_equal(kernel, kernel[::-1])
    return np.ascontiguousarray(gain.real) if symmetric else gain
