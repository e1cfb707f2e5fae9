"""Independent parts of one computation on all processors; the order of the results is that of the parts."""

import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

Part = TypeVar("Part")
Result = TypeVar("Result")


def thread_count() -> int:
    """Threads worth starting: OMP_NUM_THREADS where it is set, as worker processes do, else the processors."""
    wanted = os.environ.get("OMP_NUM_THREADS", "")
    return max(1, int(wanted)) if wanted.isdecimal() else os.cpu_count() or 1


def side_by_side(work: Callable[[Part], Result], parts: Sequence[Part]) -> list[Result]:
    """`work` of every part. Worth it where NumPy does the work on large arrays, for it lets other threads run."""
    threads = min(thread_count(), len(parts))
    if threads < 2:
        return [work(part) for part in parts]
    with ThreadPoolExecutor(threads) as pool:
        return list(pool.map(work, parts))
