"""Have a worker keep the memory it frees while it is at work on samples, and then give it back.

Steps make and free arrays of some megabytes all the time. The C library of most Linux systems
(glibc) gives such pieces back to the system when they are freed, and every page of the next one
must then be cleared anew: measured, as much time as filtering itself. Elsewhere nothing is done.
"""

from functools import lru_cache
from typing import Any

# From glibc's malloc.h: what lies free at the end of the heap before it is given back, and from
# what size on a piece is asked of the system by itself (32 MiB is the most it takes).
_TRIM_THRESHOLD, _MMAP_THRESHOLD = -1, -3
_KEPT_BYTES, _LARGE_BYTES = 256 << 20, 32 << 20


@lru_cache(maxsize=1)
def keep_freed_memory() -> bool:
    """Tell the C library, once a process; return whether it listens."""
    mallopt = _from_c_library("mallopt")
    if mallopt is None:
        return False
    return bool(mallopt(_MMAP_THRESHOLD, _LARGE_BYTES) and mallopt(_TRIM_THRESHOLD, _KEPT_BYTES))


def give_back_freed_memory() -> bool:
    """Give back what was kept, before work that has memory of its own; return whether any was."""
    trim = _from_c_library("malloc_trim")
    return trim is not None and bool(trim(0))


@lru_cache(maxsize=4)
def _from_c_library(name: str) -> Any | None:
    """Return a function of glibc, None where there is none."""
    import ctypes

    try:
        return getattr(ctypes.CDLL(None), name)
    except (AttributeError, OSError, TypeError):
        return None
