"""Galactic dust: one more piecewise-constant function on the line."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from skytally.grouping import expand_ranges, sum_by
from skytally.skymap import Floats
from skytally.spans import Ints, SpanTable

__all__ = ["Dust"]


@dataclass(frozen=True, eq=False)
class Dust:
    """Reddening over the sky; sky without a span has no value (a hole).

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Sorted, disjoint spans of the line.
    ebv : float64 array, shape (n,)
        E(B−V) in magnitudes, ≥ 0.
    notes : tuple of str
        What the reader assumed or changed.
    """

    starts: Ints
    stops: Ints
    ebv: Floats
    notes: tuple[str, ...] = ()

    def at(self, position: Ints) -> Floats:
        """E(B−V) at positions on the line, same shape; NaN in a hole."""
        position = np.asarray(position, dtype=np.int64)
        if self.starts.size == 0:
            return np.full(position.shape, np.nan)
        row = np.maximum(np.searchsorted(self.starts, position, side="right") - 1, 0)
        inside = (position >= self.starts[row]) & (position < self.stops[row])
        return np.where(inside, self.ebv[row], np.nan)

    def mean_of_table(self, table: SpanTable) -> Floats:
        """Area-weighted mean of E(B−V) over each owner's region, shape (owners,).

        Holes are left out; NaN where nothing is left, or the region is empty.
        """
        # Every overlap by itself: differences of cumulative sums lose small regions.
        first = np.searchsorted(self.stops, table.starts, side="right")
        last = np.searchsorted(self.starts, table.stops, side="left")
        piece, row = expand_ranges(first, last - first)
        starts = np.maximum(table.starts[piece], self.starts[row])
        length = (np.minimum(table.stops[piece], self.stops[row]) - starts).astype(np.float64)
        owner = table.owner[piece]
        known = sum_by(owner, length, table.owners)
        mean = np.full(table.owners, np.nan)
        np.divide(sum_by(owner, length * self.ebv[row], table.owners), known, mean, where=known > 0)
        return mean

    @cached_property
    def edges(self) -> Ints:
        """Positions at which the value may change, sorted, distinct."""
        return np.union1d(self.starts, self.stops)
