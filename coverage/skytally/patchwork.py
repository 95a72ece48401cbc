"""The patchwork: the covered line cut so that each patch has one fixed set of footprints.

All span ends are sorted once. Walking along the line, the set of footprints that
cover the current place changes at every end; each footprint has a fixed random
64-bit number and a set is known by the sum of its members' numbers. Patches with
the same set are told apart by nothing but their place, so they are one row of
everything that follows: counts, first times, telescopes, deepest limits. What
remains per patch is its measure (probability, area), which is summed per set.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.grouping import expand_ranges, sum_by
from skytally.skymap import Measure
from skytally.spans import UNIT_SR, Ints, SpanTable

__all__ = ["Patchwork"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_SEED = 29


@dataclass(frozen=True, eq=False)
class Patchwork:
    """Patches along the line and the sets of footprints that cover them.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Patches in order; every one is covered by at least one footprint.
    group : int64 array, shape (n,)
        Which set covers each patch, 0 … sets − 1.
    members : int64 array, shape (m,)
        The sets' footprints, set after set, rising within each.
    offsets : int64 array, shape (sets + 1,)
        Where each set's members begin.
    """

    starts: Ints
    stops: Ints
    group: Ints
    members: Ints
    offsets: Ints

    @classmethod
    def build(cls, table: SpanTable) -> Patchwork:
        """Cut the line at every edge of the table's regions."""
        owner = table.owner
        rng = np.random.default_rng(_SEED)
        name = rng.integers(1, 2**64 - 1, size=table.owners, dtype=np.uint64, endpoint=True)
        place = np.concatenate((table.starts, table.stops))
        step = np.concatenate((name[owner], np.uint64(0) - name[owner]))
        order = np.argsort(place, kind="stable")
        place = place[order]
        if place.size == 0:
            none = np.empty(0, dtype=np.int64)
            return cls(none, none, none, none, np.zeros(1, dtype=np.int64))
        key = np.cumsum(step[order], dtype=np.uint64)
        last = np.append(place[1:] != place[:-1], True)
        place, key = place[last], key[last]
        # The set changes only where the key does: an edge inside a like set is no edge.
        change = np.append(True, key[1:] != key[:-1])
        place, key = place[change], key[change]
        covered = key[:-1] != 0
        starts, stops, key = place[:-1][covered], place[1:][covered], key[:-1][covered]
        _, first, group = np.unique(key, return_index=True, return_inverse=True)
        members, offsets = _members(table, owner, starts[first])
        return cls(starts, stops, group.astype(np.int64), members, offsets)

    @property
    def sets(self) -> int:
        """Number of distinct sets."""
        return self.offsets.size - 1

    @cached_property
    def set_of_member(self) -> Ints:
        """The set that each entry of ``members`` belongs to, shape (m,)."""
        return np.repeat(np.arange(self.sets), np.diff(self.offsets))

    @cached_property
    def area_sr(self) -> Floats:
        """Solid angle of each set's patches, shape (sets,)."""
        length = (self.stops - self.starts).astype(np.float64)
        return sum_by(self.group, length * UNIT_SR, self.sets)

    def measure(self, measure: Measure) -> Floats:
        """Amount of a measure in each set's patches, shape (sets,)."""
        return sum_by(self.group, measure.of_intervals(self.starts, self.stops), self.sets)

    def covered_by(self, chosen: Bools) -> Bools:
        """Tell which sets hold at least one of the chosen footprints, shape (sets,).

        Parameters
        ----------
        chosen : bool array, shape (footprints,)
        """
        hit = np.zeros(self.sets, dtype=bool)
        hit[self.set_of_member[chosen[self.members]]] = True
        return hit


def _members(table: SpanTable, owner: Ints, position: Ints) -> tuple[Ints, Ints]:
    """Owners that hold each position on the line, as one list with offsets."""
    rank = np.argsort(position)
    ordered = position[rank]
    first = np.searchsorted(ordered, table.starts, side="left")
    count = np.searchsorted(ordered, table.stops, side="left") - first
    row, place = expand_ranges(first, count)
    which = rank[place]
    holder = owner[row]
    by_set = np.lexsort((holder, which))
    counts = np.bincount(which, minlength=position.size)
    return holder[by_set], np.concatenate(([0], np.cumsum(counts))).astype(np.int64)
