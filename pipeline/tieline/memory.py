"""Gives memory that is no longer used back to the system, which allocators otherwise keep for later."""

from __future__ import annotations

import ctypes
import sys
from contextlib import suppress

import pyarrow as pa

# A process that never took more has nothing worth the milliseconds.
LEAST_PEAK_BYTES = 500_000_000


def return_unused_memory() -> None:
    """Empties the caches of Arrow and, where it has a call for that, of the C library.

    A stage leaves hundreds of megabytes of freed arrays behind, in pieces that do not fit those of the next one: without
    this a long table is in memory once as itself and once more as holes.
    """
    if peak_bytes() < LEAST_PEAK_BYTES:
        return
    pa.default_memory_pool().release_unused()
    with suppress(OSError, TypeError, AttributeError):  # the GNU C library alone has it
        ctypes.CDLL(None).malloc_trim(0)


def peak_bytes() -> float:
    """The most memory that this process has held so far; infinite where the system does not say."""
    if sys.platform == "win32":
        return float("inf")
    import resource

    return float(
        resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)
    )
