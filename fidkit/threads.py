"""Independent pieces of work side by side: numpy and scipy let other threads run meanwhile."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

__all__ = ["in_threads"]

Item = TypeVar("Item")
Result = TypeVar("Result")


def in_threads(work: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
    """Yield ``work(item)`` in order; an error or an interruption drops what has not begun."""
    pool = ThreadPoolExecutor(max_workers=os.cpu_count())
    try:
        yield from pool.map(work, items)
    finally:
        pool.shutdown(cancel_futures=True)
