"""How this process keeps memory that was freed: small pieces for the next use, large ones back to the system at once.

Left alone, the C library of Linux lets the first large array that is freed decide, and a long recording's columns then
stay with the process for good. Dask starts its workers with the opposite (MALLOC_TRIM_THRESHOLD_ of 64 kB): every
array is given back and asked for anew, which doubles the time of an analysis.
"""

from __future__ import annotations

import ctypes

_TRIM_THRESHOLD, _MMAP_THRESHOLD, _ARENA_MAX = -1, -3, -8  # names of mallopt(3), numbers of malloc.h

LARGE_BYTES = 2 * 2**20
KEPT_BYTES = 16 * 2**20


def give_back() -> None:
    """Set the limits for this process and give back what is free now; does nothing with another C library than glibc."""
    library = ctypes.CDLL(None)
    if hasattr(library, "mallopt"):
        library.mallopt(_MMAP_THRESHOLD, LARGE_BYTES)
        library.mallopt(_TRIM_THRESHOLD, KEPT_BYTES)
        library.mallopt(_ARENA_MAX, 1)  # threads share what is kept
        library.malloc_trim(0)
