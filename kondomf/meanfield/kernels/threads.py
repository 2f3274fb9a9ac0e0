"""Threads over shares of a range; results must not depend on who takes which share."""

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from functools import lru_cache
from itertools import pairwise

from kondomf.meanfield.kernels.vector import LANES

SMALLEST_PART = 4
"""Groups of eight wave vectors that a part of a zone has at least."""
SHARES = 4
"""Shares per thread: where a core is busy with something else, the other threads take more of them."""


@lru_cache(maxsize=4)
def _pool(threads: int, process: int) -> ThreadPoolExecutor:
    """Threads that wait for work; a process forked from this one has none of them and gets its own."""
    return ThreadPoolExecutor(threads, thread_name_prefix="kondomf")


def parts_of(points: int, most: int) -> tuple[int, int]:
    """Number of parts of a zone, at most `most`, and of the groups of eight wave vectors in each."""
    count = -(-points // LANES)
    groups = max(SMALLEST_PART, -(-count // most))
    return -(-count // groups), groups


def over_shares(work: Callable[[int, int], bool], count: int, threads: int) -> bool:
    """True if work(first, last) was for all shares of range(count); this thread is one of the `threads`."""
    if threads <= 1 or count <= 1:
        return work(0, count)
    number = min(count, SHARES * threads)
    bounds = [count * i // number for i in range(number + 1)]
    shares = iter(list(pairwise(bounds)))  # a list's iterator serves several threads

    def take() -> bool:
        return all(work(first, last) for first, last in shares)

    others = [_pool(threads - 1, os.getpid()).submit(take) for _ in range(threads - 1)]
    return all([take(), *(other.result() for other in others)])
