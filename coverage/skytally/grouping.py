"""Two array idioms that the accounting uses everywhere."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["expand_ranges", "sum_by"]


def sum_by(
    group: NDArray[np.int64], weight: NDArray[np.float64], count: int
) -> NDArray[np.float64]:
    """Sum weights, shape (n,), by group number in [0, count); shape (count,)."""
    return np.bincount(group, weight, count).astype(np.float64, copy=False)


def expand_ranges(
    first: NDArray[np.int64], count: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Enumerate the ranges first[i] … first[i] + count[i] − 1, one after the other.

    Returns
    -------
    row, value : int64 arrays
        The range that each value comes from, and the value.
    """
    row = np.repeat(np.arange(count.size, dtype=np.int64), count)
    before = np.cumsum(count) - count
    return row, np.arange(row.size, dtype=np.int64) + np.repeat(first - before, count)
