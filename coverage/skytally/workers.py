"""Work done side by side: numpy and scipy let go of the interpreter while they count."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

__all__ = ["side_by_side"]

In = TypeVar("In")
Out = TypeVar("Out")

# More would only wait for memory.
_WORKERS = min(os.cpu_count() or 1, 4)


def side_by_side(function: Callable[[In], Out], items: Iterable[In]) -> list[Out]:
    """Apply a function to every item, on several cores where there are; results in order."""
    items = list(items)
    if len(items) < 2 or _WORKERS < 2:
        return [function(item) for item in items]
    pool = ThreadPoolExecutor(_WORKERS)
    try:
        return list(pool.map(function, items))
    finally:
        # Who is interrupted does not wait for work that nobody wants.
        pool.shutdown(wait=False, cancel_futures=True)
