"""Runs compiled blocks on a pool of threads.

Work is cut into blocks whose number does not depend on the threads, so that results are equal to
the bit for any number of them. numba's own setting NUMBA_NUM_THREADS says how many there are.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from itertools import pairwise

import numba
import numpy as np


@cache
def _pool(threads: int) -> ThreadPoolExecutor:
    return ThreadPoolExecutor(threads, thread_name_prefix="stillground")


# A forked child has the pool but not its threads.
if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=_pool.cache_clear)


def n_threads() -> int:
    """numba's number of threads."""
    return int(numba.config.NUMBA_NUM_THREADS)  # type: ignore[attr-defined]  # made at import


def run_blocks(blocks: Sequence[Callable[[], None]], threads: int | None = None) -> None:
    """Call every block; on the pool when ``threads`` (default: numba's number) is above one."""
    threads = n_threads() if threads is None else threads
    if threads == 1 or len(blocks) == 1:
        for block in blocks:
            block()
    else:
        for done in [_pool(threads).submit(block) for block in blocks]:
            done.result()


def cut(loads: np.ndarray, n_blocks: int) -> list[tuple[int, int]]:
    """Ranges of consecutive items with about equal sums of ``loads``, none of them empty."""
    total = np.cumsum(loads)
    if total.size == 0:
        return []
    goals = total[-1] * np.arange(1, n_blocks) / n_blocks
    edges = np.unique([0, *np.searchsorted(total, goals), total.size])
    return [(int(a), int(b)) for a, b in pairwise(edges)]
