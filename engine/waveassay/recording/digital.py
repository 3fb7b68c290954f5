"""Samples as a file stores them, and their physical values.

Values are ``gain * stored + offset`` with ``gain = (physical_max - physical_min) / (digital_max -
digital_min)`` (Kemp et al. 1992, Electroencephalogr Clin Neurophysiol 82:391-393).
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from waveassay.contract import Floats

StoredArray = NDArray[np.signedinteger[Any]]
Scale = tuple[float, float]  # gain and offset

# Samples that are made physical at a time: they stay in the processor's cache.
_AT_ONCE = 1 << 15


@dataclass(frozen=True)
class Digital:
    """Samples of some signals as they are stored: 2 bytes each from EDF, 4 from BDF.

    Attributes
    ----------
    stored, scales : of each signal, in the order they were asked for.
    """

    stored: tuple[StoredArray, ...]
    scales: tuple[Scale, ...]

    def __len__(self) -> int:
        return len(self.stored)

    def physical(self, place: int, out: Floats | None = None) -> Floats:
        """Return a signal's samples in its own unit, as float64, shape (samples,).

        They are made anew whenever they are asked for, in ``out`` where it is given.
        """
        stored, (gain, offset) = self.stored[place], self.scales[place]
        made = np.empty(stored.size) if out is None else out
        for first in range(0, stored.size, _AT_ONCE):
            part = made[first : first + _AT_ONCE]
            np.copyto(part, stored[first : first + _AT_ONCE])
            part *= gain
            part += offset
        return made


def outside(stored: StoredArray, limits: tuple[int, int]) -> int:
    """Return how many stored values lie outside the digital limits."""
    lowest, highest = limits
    # The two extremes cost far less than an exact count.
    if not stored.size or (np.min(stored) >= lowest and np.max(stored) <= highest):
        return 0
    return int(np.count_nonzero((stored < lowest) | (stored > highest)))
