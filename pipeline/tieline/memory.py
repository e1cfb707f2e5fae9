"""Gives memory that is no longer used back to the system, which allocators otherwise keep for later."""

from __future__ import annotations

import ctypes
from contextlib import suppress

import pyarrow as pa


def return_unused_memory() -> None:
    """Empties the caches of Arrow and, where it has a call for that, of the C library.

    A stage leaves hundreds of megabytes of freed arrays behind, in pieces that do not fit those of the next one: without
    this a long table is in memory once as itself and once more as holes.
    """
    pa.default_memory_pool().release_unused()
    with suppress(OSError, TypeError, AttributeError):  # the GNU C library alone has it
        ctypes.CDLL(None).malloc_trim(0)
