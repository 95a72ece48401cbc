"""Regions of the sky as sorted integer spans on the line of order-29 cells.

The sky is cut into the 12·4²⁹ NESTED HEALPix cells of order 29, laid end to
end: the line. A cell of any order is one span of it, so a region is a sorted
list of disjoint half-open spans and all region algebra is exact integer work.
This is the range form of the MOC standard (IVOA MOC 2.0, section 4).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.grouping import expand_ranges

__all__ = [
    "DEG2_PER_SR",
    "FULL_SKY_SR",
    "LINE_END",
    "LINE_ORDER",
    "UNIT_SR",
    "SpanTable",
    "Spans",
    "cell_to_span",
    "merge",
    "spans_to_cells",
    "uniq_to_cell",
]

LINE_ORDER = 29
LINE_END = 12 << (2 * LINE_ORDER)
FULL_SKY_SR = 4.0 * np.pi
UNIT_SR = FULL_SKY_SR / LINE_END
DEG2_PER_SR = float(np.degrees(1.0) ** 2)

Ints = NDArray[np.int64]


def cell_to_span(order: int | Ints, cell: Ints) -> tuple[Ints, Ints]:
    """Return the start and stop on the line of NESTED cells.

    Parameters
    ----------
    order : int or int64 array
        HEALPix order, 0 to 29.
    cell : int64 array
        NESTED index, 0 ≤ cell < 12·4^order.
    """
    shift = 2 * (LINE_ORDER - np.asarray(order, dtype=np.int64))
    start = np.left_shift(np.asarray(cell, dtype=np.int64), shift)
    return start, start + np.left_shift(np.int64(1), shift)


def uniq_to_cell(uniq: Ints) -> tuple[Ints, Ints]:
    """Split NUNIQ numbers (MOC 2.0, section 4.3) into order and NESTED index.

    Integer arithmetic only: a floating logarithm is wrong for the last cells
    of the deep orders.

    Raises
    ------
    ValueError
        If a number is below 4 or above the last cell of order 29.
    """
    uniq = np.asarray(uniq, dtype=np.int64)
    if uniq.size and (uniq.min() < 4 or uniq.max() >= 16 << (2 * LINE_ORDER)):
        raise ValueError("a NUNIQ number must lie in [4, 16·4^29)")
    # 4·4^order ≤ uniq < 16·4^order
    bounds = np.int64(4) << (2 * np.arange(LINE_ORDER + 1, dtype=np.int64))
    order = np.searchsorted(bounds, uniq, side="right").astype(np.int64) - 1
    return order, uniq - np.left_shift(np.int64(4), 2 * order)


def merge(starts: Ints, stops: Ints) -> tuple[Ints, Ints]:
    """Union of intervals in any order, overlapping or touching.

    Sorting starts and stops apart is enough: a gap opens exactly where the
    next start lies beyond the stop of the same rank before it.
    """
    keep = stops > starts
    starts = np.sort(starts[keep])
    stops = np.sort(stops[keep])
    if starts.size == 0:
        return starts, stops
    opens = np.concatenate(([True], starts[1:] > stops[:-1]))
    closes = np.concatenate((opens[1:], [True]))
    return starts[opens], stops[closes]


@dataclass(frozen=True, eq=False)
class Spans:
    """A region: sorted, disjoint, half-open spans on the line.

    Attributes
    ----------
    edges : int64 array, shape (2n,)
        start₀, stop₀, start₁, stop₁, …; strictly increasing, in [0, 12·4²⁹].
    """

    edges: Ints

    @classmethod
    def empty(cls) -> Spans:
        """Return the region that holds nothing."""
        return cls(np.empty(0, dtype=np.int64))

    @classmethod
    def full(cls) -> Spans:
        """Return the whole sky."""
        return cls(np.array([0, LINE_END], dtype=np.int64))

    @classmethod
    def from_intervals(cls, starts: Ints, stops: Ints) -> Spans:
        """Build from intervals in any order, overlapping or not.

        Raises
        ------
        ValueError
            If an interval leaves the line.
        """
        starts = np.asarray(starts, dtype=np.int64)
        stops = np.asarray(stops, dtype=np.int64)
        if starts.size and (starts.min() < 0 or stops.max() > LINE_END):
            raise ValueError("a span leaves the line [0, 12·4^29]")
        return cls._from_sorted(*merge(starts, stops))

    @classmethod
    def from_cells(cls, order: int | Ints, cell: Ints) -> Spans:
        """Build from NESTED cells of one order or of an order each."""
        return cls.from_intervals(*cell_to_span(order, cell))

    @classmethod
    def _from_sorted(cls, starts: Ints, stops: Ints) -> Spans:
        edges = np.empty(2 * starts.size, dtype=np.int64)
        edges[0::2] = starts
        edges[1::2] = stops
        return cls(edges)

    @property
    def starts(self) -> Ints:
        """Starts of the spans, shape (n,)."""
        return self.edges[0::2]

    @property
    def stops(self) -> Ints:
        """Stops of the spans, shape (n,), not included."""
        return self.edges[1::2]

    def __len__(self) -> int:
        return self.edges.size // 2

    def __bool__(self) -> bool:
        return self.edges.size > 0

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Spans):
            return NotImplemented
        return np.array_equal(self.edges, other.edges)

    __hash__ = None  # type: ignore[assignment]

    @property
    def length(self) -> int:
        """Number of order-29 cells inside."""
        return int(np.sum(self.stops - self.starts, dtype=np.int64))

    @property
    def area_sr(self) -> float:
        """Solid angle in steradians, exact to rounding."""
        return self.length * UNIT_SR

    @property
    def area_deg2(self) -> float:
        """Solid angle in square degrees."""
        return self.area_sr * DEG2_PER_SR

    def contains(self, position: Ints) -> NDArray[np.bool_]:
        """Tell which positions on the line lie inside; same shape as given."""
        rank = np.searchsorted(self.edges, position, side="right")
        return (rank & 1).astype(bool)

    def complement(self) -> Spans:
        """Return everything else."""
        edges = self.edges
        edges = edges[1:] if edges.size and edges[0] == 0 else np.concatenate(([0], edges))
        if edges.size and edges[-1] == LINE_END:
            edges = edges[:-1]
        else:
            edges = np.concatenate((edges, [LINE_END]))
        return Spans(edges.astype(np.int64))

    def _combine(self, other: Spans, at_least: int) -> Spans:
        """Keep what at least 1 (union) or 2 (intersection) of the two cover."""
        if at_least == 1:
            return Spans._from_sorted(
                *merge(
                    np.concatenate((self.starts, other.starts)),
                    np.concatenate((self.stops, other.stops)),
                )
            )
        # Depth changes by ±1 at every edge of either; stable sort merges two sorted runs.
        edges = np.concatenate((self.edges, other.edges))
        step = np.ones(edges.size, dtype=np.int64)
        step[1 : self.edges.size : 2] = -1
        step[self.edges.size + 1 :: 2] = -1
        order = np.argsort(edges, kind="stable")
        edges = edges[order]
        depth = np.cumsum(step[order])
        last = np.concatenate((edges[1:] != edges[:-1], [True])) if edges.size else edges > 0
        edges, inside = edges[last], depth[last] == 2
        change = np.concatenate((inside[:1], inside[1:] != inside[:-1]))
        return Spans(edges[change])

    def union(self, *others: Spans) -> Spans:
        """Return what this region or any of the others covers."""
        regions = (self, *others)
        return Spans._from_sorted(
            *merge(
                np.concatenate([r.starts for r in regions]),
                np.concatenate([r.stops for r in regions]),
            )
        )

    def intersection(self, other: Spans) -> Spans:
        """Return what both cover."""
        return self._combine(other, 2)

    def difference(self, other: Spans) -> Spans:
        """Return what this region covers and the other does not."""
        return self._combine(other.complement(), 2)

    __or__ = union
    __and__ = intersection
    __sub__ = difference
    __invert__ = complement


def spans_to_cells(spans: Spans) -> tuple[Ints, Ints]:
    """Split spans into the fewest NESTED cells.

    Returns
    -------
    order, cell : int64 arrays, shape (m,)
        Sorted along the line.
    """
    starts, stops = spans.starts.copy(), spans.stops
    orders: list[Ints] = []
    firsts: list[Ints] = []
    low = starts.copy()
    high = stops.copy()
    # Peel from both ends: at each order, cells that no coarser cell can hold.
    for order in range(LINE_ORDER, -1, -1):
        size = np.int64(1) << (2 * (LINE_ORDER - order))
        parent = size * 4 if order > 0 else np.int64(LINE_END)
        for _ in range(3):
            take = (low < high) & (low % parent != 0)
            if order == 0:
                break
            orders.append(np.full(int(take.sum()), order, dtype=np.int64))
            firsts.append(low[take])
            low = low + size * take
            take = (low < high) & (high % parent != 0)
            high = high - size * take
            orders.append(np.full(int(take.sum()), order, dtype=np.int64))
            firsts.append(high[take])
        alive = low < high
        low, high = low[alive], high[alive]
        if low.size == 0:
            break
    for start, stop in zip(low, high):
        size = np.int64(1) << (2 * LINE_ORDER)
        base = np.arange(start, stop, size, dtype=np.int64)
        orders.append(np.zeros(base.size, dtype=np.int64))
        firsts.append(base)
    order_all = np.concatenate(orders) if orders else np.empty(0, dtype=np.int64)
    first_all = np.concatenate(firsts) if firsts else np.empty(0, dtype=np.int64)
    rank = np.argsort(first_all)
    order_all, first_all = order_all[rank], first_all[rank]
    return order_all, np.right_shift(first_all, 2 * (LINE_ORDER - order_all))


@dataclass(frozen=True, eq=False)
class SpanTable:
    """Many regions in one table: the spans of owner i are rows offsets[i]…offsets[i+1].

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Spans on the line; sorted and disjoint within one owner.
    offsets : int64 array, shape (owners + 1,)
        Where each owner's spans begin; the last entry is n.
    """

    starts: Ints
    stops: Ints
    offsets: Ints

    @classmethod
    def from_regions(cls, regions: Iterable[Spans]) -> SpanTable:
        """Gather regions, one owner each."""
        regions = list(regions)
        none = [np.empty(0, dtype=np.int64)]
        return cls(
            np.concatenate([r.starts for r in regions] or none),
            np.concatenate([r.stops for r in regions] or none),
            np.cumsum([0, *(len(r) for r in regions)], dtype=np.int64),
        )

    @classmethod
    def stack(cls, tables: Iterable[SpanTable]) -> SpanTable:
        """Put tables one after the other; owners are renumbered in turn."""
        tables = list(tables) or [cls.from_regions([])]
        counts = np.concatenate([np.diff(t.offsets) for t in tables])
        return cls(
            np.concatenate([t.starts for t in tables]),
            np.concatenate([t.stops for t in tables]),
            np.concatenate(([0], np.cumsum(counts))).astype(np.int64),
        )

    @classmethod
    def from_unsorted(cls, starts: Ints, stops: Ints, owner: Ints, owners: int) -> SpanTable:
        """Gather spans in any order, disjoint within each owner; touching ones are joined."""
        rank = np.lexsort((starts, owner))
        starts, stops, owner = starts[rank], stops[rank], owner[rank]
        joined = (starts[1:] == stops[:-1]) & (owner[1:] == owner[:-1])
        opens = np.concatenate((np.ones(min(1, starts.size), dtype=bool), ~joined))
        closes = np.concatenate((opens[1:], np.ones(min(1, starts.size), dtype=bool)))
        offsets = np.searchsorted(owner[opens], np.arange(owners + 1))
        return cls(starts[opens], stops[closes], offsets.astype(np.int64))

    def take(self, owners: Ints) -> SpanTable:
        """Return the table whose owner i is this table's owner ``owners[i]``."""
        count = np.diff(self.offsets)[owners]
        offsets = np.concatenate(([0], np.cumsum(count)))
        _, rows = expand_ranges(self.offsets[:-1][owners], count)
        return SpanTable(self.starts[rows], self.stops[rows], offsets.astype(np.int64))

    @property
    def owners(self) -> int:
        """Number of regions in the table."""
        return self.offsets.size - 1

    @property
    def owner(self) -> Ints:
        """Owner of each span, shape (n,)."""
        return np.repeat(np.arange(self.owners, dtype=np.int64), np.diff(self.offsets))

    def region(self, owner: int) -> Spans:
        """Return one owner's region."""
        rows = slice(int(self.offsets[owner]), int(self.offsets[owner + 1]))
        return Spans._from_sorted(self.starts[rows], self.stops[rows])

    def union(self) -> Spans:
        """Return the union of all owners' regions."""
        return Spans._from_sorted(*merge(self.starts, self.stops))

    def area_sr(self) -> NDArray[np.float64]:
        """Solid angle of each owner's region, shape (owners,), in steradians."""
        total = np.concatenate(([0], np.cumsum((self.stops - self.starts) * UNIT_SR)))
        return np.asarray(np.diff(total[self.offsets]))

    def clip(self, region: Spans) -> SpanTable:
        """Intersect every owner's region with one region."""
        if not region or self.starts.size == 0:
            return SpanTable(self.starts[:0], self.stops[:0], np.zeros_like(self.offsets))
        first = np.searchsorted(region.stops, self.starts, side="right")
        last = np.searchsorted(region.starts, self.stops, side="left")
        count = np.maximum(last - first, 0)
        row, pick = expand_ranges(first, count)
        starts = np.maximum(self.starts[row], region.starts[pick])
        stops = np.minimum(self.stops[row], region.stops[pick])
        totals = np.concatenate(([0], np.cumsum(count)))
        return SpanTable(starts, stops, totals[self.offsets].astype(np.int64))
