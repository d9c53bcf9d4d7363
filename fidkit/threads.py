"""Independent pieces of work side by side: numpy and scipy let other threads run meanwhile."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import TypeVar

__all__ = ["in_threads"]

Item = TypeVar("Item")
Result = TypeVar("Result")


def in_threads(work: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
    """Yield ``work(item)`` in order; an error or an interruption drops what has not begun.

    Items are taken only as workers get free, so that few of them are in memory.
    """
    workers = os.cpu_count() or 1
    pool = ThreadPoolExecutor(max_workers=workers)
    running: deque[Future[Result]] = deque()
    try:
        for item in items:
            running.append(pool.submit(work, item))
            if len(running) > workers:
                yield running.popleft().result()
        while running:
            yield running.popleft().result()
    finally:
        pool.shutdown(cancel_futures=True)
