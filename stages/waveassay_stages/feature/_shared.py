"""What several features take from the same spectra, worked out once.

A chain asks for the band powers of a spectrum in two units, or for an edge and a median of one
range, one step after another. What they have in common is kept until other spectra come.
"""

from collections.abc import Callable, Hashable
from typing import Any, TypeVar
from weakref import ref

import numpy as np

from waveassay.contract import Floats

T = TypeVar("T", bound=Floats | tuple[Floats, ...])

# The densities last seen, and what was made of them: replaced as one, never half.
_last: tuple[Callable[[], Any], dict[Hashable, Any]] = (lambda: None, {})


def shared(density: Floats, key: Hashable, make: Callable[[], T]) -> T:
    """Return ``make()`` of densities, or what it returned before for them and the key.

    Only densities that nothing writes (those of a `Spectra`) are remembered, and no longer than
    they exist; what was made of them is read-only then.
    """
    global _last
    if density.flags.writeable or not density.flags.owndata:
        return make()
    whose, known = _last
    if whose() is not density:
        known = {}
        _last = (ref(density), known)
    if key not in known:
        made = make()
        for array in made if isinstance(made, tuple) else (made,):
            array.flags.writeable = False
        known[key] = made
    found: T = known[key]
    return found


def in_double(density: Floats) -> Floats:
    """Return densities in float64, in which features are summed; themselves where they are."""
    if density.dtype == np.float64:
        return density
    return shared(density, "float64", lambda: density.astype(np.float64))
