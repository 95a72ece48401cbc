"""The patchwork: the covered line cut so that each patch has one fixed set of footprints.

All span ends are sorted once. Walking along the line, the set of footprints that
cover the current place changes at every end; each footprint has a fixed random
64-bit number and a set is known by the sum of its members' numbers. Patches with
the same set are told apart by nothing but their place, so they are one row of
everything that follows: counts, first times, telescopes, deepest limits. What
remains per patch is its measure (probability, area), which is summed per set.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from skytally.grouping import Lists, distinct, sum_by, sum_pairs, tell_apart
from skytally.skymap import Measure
from skytally.spans import UNIT_SR, Ints, SpanTable

__all__ = ["CutPatchwork", "Layer", "Patchwork", "edges_of"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_SEED = 29
# Bounds the memory that listing the sets' members takes.
_MEMBERS_AT_ONCE = 2_000_000


@dataclass(frozen=True, eq=False)
class Patchwork:
    """Patches along the line and the sets of footprints that cover them.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Patches in order; every one is covered by at least one footprint.
    group : int32 array, shape (n,)
        Which set covers each patch, 0 … sets − 1 in the order in which they first appear.
    members : int32 array, shape (m,)
        The sets' footprints, set after set, rising within each.
    offsets : int64 array, shape (sets + 1,)
        Where each set's members begin.
    """

    starts: Ints
    stops: Ints
    group: NDArray[np.int32]
    members: NDArray[np.int32]
    offsets: Ints

    @classmethod
    def build(cls, table: SpanTable) -> Patchwork:
        """Cut the line at every edge of the table's regions."""
        owner = table.owner
        rng = np.random.default_rng(_SEED)
        name = rng.integers(1, 2**64 - 1, size=table.owners, dtype=np.uint64, endpoint=True)
        place = np.concatenate((table.starts, table.stops))
        step = np.concatenate((name[owner], np.uint64(0) - name[owner]))
        order = np.argsort(place)
        place = place[order]
        if place.size == 0:
            none, few = np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int32)
            return cls(none, none, few, few, np.zeros(1, dtype=np.int64))
        key = np.cumsum(step[order], dtype=np.uint64)
        last = np.append(place[1:] != place[:-1], True)
        place, key = place[last], key[last]
        # The set changes only where the key does: an edge inside a like set is no edge.
        change = np.append(True, key[1:] != key[:-1])
        place, key = place[change], key[change]
        covered = key[:-1] != 0
        starts, stops, key = place[:-1][covered], place[1:][covered], key[:-1][covered]
        first, group = tell_apart(key)
        members = _members(table, owner, starts[first])
        return cls(starts, stops, group.astype(np.int32), members.items, members.offsets)

    @property
    def sets(self) -> int:
        """Number of distinct sets."""
        return self.offsets.size - 1

    @property
    def lists(self) -> Lists:
        """The members of every set."""
        return Lists(self.offsets, self.members)

    @property
    def set_of_member(self) -> NDArray[np.int32]:
        """The set that each entry of ``members`` belongs to, shape (m,)."""
        return self.lists.owner

    @cached_property
    def area_sr(self) -> Floats:
        """Solid angle of each set's patches, shape (sets,)."""
        length = (self.stops - self.starts).astype(np.float64)
        return sum_by(self.group, length * UNIT_SR, self.sets)

    def cut(self, edges: Ints) -> CutPatchwork:
        """Cut the patches along edges: sorted, distinct positions on the line."""
        # The last patch that begins before an edge; in few patches does one lie inside.
        patch = np.searchsorted(self.starts, edges, side="left") - 1
        interval = np.cumsum(np.bincount(patch + 1, minlength=self.starts.size + 1)[:-1])
        inner = np.flatnonzero((patch >= 0) & (edges < np.append(self.stops, 0)[patch]))
        patch, inner_edges = patch[inner], edges[inner]
        first = np.flatnonzero(np.diff(patch, prepend=-1))
        last = np.append(first, patch.size)[1:] - 1
        stops, inner_stops = self.stops.copy(), np.append(inner_edges[1:], 0)
        stops[patch[first]] = inner_edges[first]
        inner_stops[last] = self.stops[patch[last]]
        length = np.concatenate((stops - self.starts, inner_stops - inner_edges))
        return CutPatchwork(
            edges,
            *sum_pairs(
                np.concatenate((self.group, self.group[patch])),
                np.concatenate((interval, inner + 1)),
                length * UNIT_SR,
                self.sets,
                edges.size + 1,
            ),
            self.sets,
        )

    def measure(self, measure: Measure) -> Floats:
        """Amount of a measure in each set's patches, shape (sets,)."""
        return self.cut(edges_of(measure)).measure(measure)

    def covered_by(self, chosen: Bools) -> Bools:
        """Tell which sets hold at least one of the chosen footprints, shape (sets,).

        Parameters
        ----------
        chosen : bool array, shape (footprints,)
        """
        return next(self.covered_by_each([chosen]))

    def covered_by_each(self, choices: Sequence[Bools]) -> Iterator[Bools]:
        """Tell for one choice of footprints after the other, as `covered_by` does for one."""
        return self.lists.any_of(choices)


class Layer(Protocol):
    """Anything that is piecewise constant on the line."""

    @property
    def starts(self) -> Ints:
        """Starts of its disjoint spans, rising."""

    @property
    def stops(self) -> Ints:
        """Stops of its spans."""


def edges_of(*layers: Layer) -> Ints:
    """Positions where any of the layers may change, sorted and distinct."""
    return distinct(np.concatenate([a for one in layers for a in (one.starts, one.stops)]))


@dataclass(frozen=True, eq=False)
class CutPatchwork:
    """What of each set of a patchwork lies between which edges.

    Whatever changes at these edges alone is constant on each row. There are far
    fewer rows than patches: a set is a row per interval, however ragged it is.

    Attributes
    ----------
    edges : int64 array, shape (n,)
        Sorted, distinct positions on the line.
    group : int64 array, shape (rows,)
        The set, rising.
    interval : int32 array, shape (rows,)
        How many of the edges lie at or before the row, rising within a set.
    solid_angle_sr : float64 array, shape (rows,)
        Its size.
    sets : int
        Number of sets.
    """

    edges: Ints
    group: Ints
    interval: NDArray[np.int32]
    solid_angle_sr: Floats
    sets: int

    def knows(self, edges: Ints) -> bool:
        """Whether the patchwork was cut at all of these edges."""
        place = np.searchsorted(self.edges, edges)
        return bool(np.all(np.append(self.edges, -1)[place] == edges))

    def span_of(self, layer: Layer) -> Ints:
        """Find the layer's span that each interval lies in, −1 for none; (n + 1,)."""
        span = np.searchsorted(layer.starts, self.edges, side="right") - 1
        inside = (span >= 0) & (self.edges < np.append(layer.stops, 0)[span])
        return np.append(-1, np.where(inside, span, -1))

    def measure(self, measure: Measure) -> Floats:
        """Amount of a measure in each set, shape (sets,)."""
        density = np.append(measure.density, 0.0)[self.span_of(measure)]
        return sum_by(self.group, density[self.interval] * self.solid_angle_sr, self.sets)


def _members(table: SpanTable, owner: Ints, position: Ints) -> Lists:
    """Owners that hold each position on the line; positions rise, one for each set."""
    first = np.searchsorted(position, table.starts, side="left")
    last = np.searchsorted(position, table.stops, side="left")
    some = np.flatnonzero(last > first)
    first, last, owner = first[some], last[some], owner[some].astype(np.int32)
    # How many begin less how many end at a position is the step in the length of its list.
    step = np.bincount(first, minlength=position.size + 1)
    step -= np.bincount(last, minlength=position.size + 1)
    offsets = np.concatenate(([0], np.cumsum(np.cumsum(step[:-1]))))
    items = np.empty(offsets[-1], dtype=np.int32)
    for block in Lists(offsets, items).blocks(_MEMBERS_AT_ONCE):
        here = np.flatnonzero((first < block.stop) & (last > block.start))
        begin = np.maximum(first[here], block.start) - block.start
        count = np.minimum(last[here], block.stop) - block.start - begin
        row = np.arange(count.sum(), dtype=np.int32)
        row += np.repeat((begin - (np.cumsum(count) - count)).astype(np.int32), count)
        holder = np.repeat(owner[here], count)
        lists = Lists.of_pairs(row, holder, block.stop - block.start, table.owners)
        items[offsets[block.start] : offsets[block.stop]] = lists.items
    return Lists(offsets, items)
