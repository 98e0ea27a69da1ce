"""Work in blocks on threads; blocks and their order never depend on the number of workers."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

Item = TypeVar("Item")
Result = TypeVar("Result")


def n_default() -> int:
    """Cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def in_order(work: Callable[[Item], Result], items: Iterable[Item], n_workers: int) -> list[Result]:
    """``[work(item) for item in items]``, on threads (kernels release the interpreter lock)."""
    items = list(items)
    if n_workers <= 1 or len(items) <= 1:
        return [work(item) for item in items]
    with ThreadPoolExecutor(min(n_workers, len(items))) as pool:
        return list(pool.map(work, items))


def blocks(n: int, size: int) -> list[tuple[int, int]]:
    """Half-open ranges of ``size`` that cover ``range(n)``."""
    return [(start, min(n, start + size)) for start in range(0, n, size)]
