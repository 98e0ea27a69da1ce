"""Work in blocks on threads; blocks and their order never depend on the number of workers."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from typing import Protocol, TypeVar

Item = TypeVar("Item")
Result = TypeVar("Result")


def n_default() -> int:
    """Cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


class Progress(Protocol):
    """What is told of long work: a stage as it begins, then the share of it that is done."""

    def __call__(self, stage: str, share: float | None = None) -> None:
        """Take note of it."""


def silent(stage: str, share: float | None = None) -> None:
    """Progress that nobody listens to."""


def in_order(
    work: Callable[[Item], Result],
    items: Iterable[Item],
    n_workers: int,
    stage: str = "",
    progress: Progress = silent,
) -> list[Result]:
    """``[work(item) for item in items]``, on threads (kernels release the interpreter lock).

    With a ``stage`` the share of items done is told after each. The main thread only waits, even
    with one worker, so that Ctrl-C is heard while a kernel runs; blocks at work then end by
    themselves.
    """
    items = list(items)
    results: list[Result] = []
    is_main = threading.current_thread() is threading.main_thread()
    pool = ThreadPoolExecutor(max(1, min(n_workers, len(items))))
    try:
        done = pool.map(work, items) if is_main or n_workers > 1 else map(work, items)
        for result in done:
            results.append(result)
            if stage:
                progress(stage, len(results) / len(items))
    except BaseException as error:
        pool.shutdown(wait=not isinstance(error, KeyboardInterrupt), cancel_futures=True)
        raise
    pool.shutdown()
    return results


def blocks(n: int, size: int) -> list[tuple[int, int]]:
    """Half-open ranges of ``size`` that cover ``range(n)``."""
    return [(start, min(n, start + size)) for start in range(0, n, size)]
