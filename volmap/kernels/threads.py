"""Kernels on several threads, without what numba's own parallel loops cost to compile (as much again)."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from functools import lru_cache
from itertools import pairwise
from typing import Any

import numba


def on_threads(kernel: Callable[..., Any], count: int, *arguments: Any, fewest: int = 1) -> None:
    """Call ``kernel(first, last, *arguments)`` on shares of ``range(count)``, one a thread.

    Parameters
    ----------
    kernel : compiled function
        Writes to places of its own for every item, so that the shares do not enter the result.
    count : int
        Number of items.
    fewest : int
        Of which a thread gets at least so many, where they cost less than waking it.
    """
    threads = max(1, min(int(numba.get_num_threads()), count // fewest))
    bounds = [count * share // threads for share in range(threads + 1)]
    others = [_pool().submit(kernel, first, last, *arguments) for first, last in pairwise(bounds[1:])]
    kernel(0, bounds[1], *arguments)
    for other in others:
        other.result()


@lru_cache(maxsize=1)
def _pool() -> ThreadPoolExecutor:
    """Threads that sleep until they are asked for."""
    return ThreadPoolExecutor(int(numba.config.NUMBA_NUM_THREADS), "kernel")  # type: ignore[attr-defined]
