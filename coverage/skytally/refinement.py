"""Tighten the bracket where it holds probability, within a stated budget.

After rasterising, a union's bracket is as wide as its undecided cells. One order
deeper, the strip of undecided cells along an edge is half as wide and holds twice
as many cells: going k orders deeper leaves 2⁻ᵏ of a bracket for 4 (2ᵏ − 1) looks
at each cell. Each part of the undecided sky is given the depth at which all parts
gain the same per look, the deeper the more probability is in a cell: that is the
bracket that costs fewest looks. Where the descent went deeper, the deeper centre
rule replaces the coarser one, so the value stays inside its bracket.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from skytally.cache import Cache
from skytally.footprints import Footprints, Progress, clip_raster
from skytally.kept_raster import keep_raster
from skytally.patchwork import Patchwork
from skytally.raster import Raster, rasterise, stack_rasters
from skytally.selection import selections
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Ints, Spans, SpanTable

__all__ = ["BUDGET_LOOKS", "refine_footprints"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Looks at a pair of piece and cell that refining may take, about a second of work.
BUDGET_LOOKS = 5_000_000
_ROUNDS = 2
_DEEPEST = 6
_ORDER_LIMIT = 22
# What is aimed at, in parts of the target: some strips halve a little less than they should.
_AIM = 0.95
_POWERS = 2.0 ** np.arange(_DEEPEST + 1)


def refine_footprints(
    footprints: Footprints,
    maps: Sequence[SkyMap],
    target: float,
    progress: Progress | None = None,
    budget: float = BUDGET_LOOKS,
    cache: Cache | None = None,
) -> Footprints:
    """Refine until every selection's bracket in probability is at most ``target``.

    Selections are served in the order of the rows. The union of all gets as much
    of the budget as it can use; any other is passed over if what is left cannot
    bring its bracket to the target.

    Parameters
    ----------
    footprints : Footprints
        As laid.
    maps : sequence of SkyMap
        The bracket must be met on every one.
    target : float
        Greatest high − low, a probability.
    budget : float
        Pairs of piece and cell that may be looked at below the working orders.
    cache : Cache, optional
        Where the outcome is kept.
    """
    raster = keep_raster(
        cache,
        "refined",
        lambda: _deciding(footprints, maps, target, budget),
        lambda: _refined(footprints, maps, target, progress, budget).raster,
    )
    return replace(footprints, raster=raster)


def _deciding(
    footprints: Footprints, maps: Sequence[SkyMap], target: float, budget: float
) -> tuple[object, ...]:
    """Return everything that decides the outcome."""
    o = footprints.observations
    return (
        (footprints.raster, footprints.pieces, footprints.telescope, footprints.clips),
        (len(o.telescopes), len(o.bands), len(o.nights)),
        (o.telescope, o.band, o.night, o.footprint),
        [(one.starts, one.stops, one.density_per_sr) for one in maps],
        (target, budget),
    )


def _refined(
    footprints: Footprints,
    maps: Sequence[SkyMap],
    target: float,
    progress: Progress | None,
    budget: float,
) -> Footprints:
    """Refine round by round."""
    done = [Spans.empty() for _ in range(_DEEPEST)]
    for step in range(_ROUNDS):
        if progress is not None:
            progress("Tightening the bracket", step / _ROUNDS)
        deeper, looks = _plan(footprints, maps, target, budget, done)
        if not deeper[0]:
            break
        footprints = _refine(footprints, deeper)
        done = [one.union(other) for one, other in zip(done, deeper)]
        budget -= looks
        # Many strips halve as foreseen; to look at them again is for where they are few.
        if budget < looks:
            break
    return footprints


def _plan(
    footprints: Footprints,
    maps: Sequence[SkyMap],
    target: float,
    budget: float,
    done: Sequence[Spans],
) -> tuple[list[Spans], float]:
    """Choose where to go one order below the working order, where two, and so on.

    ``done`` is what was chosen so before. Also returns the looks that it takes.
    """
    patches = _OpenPatches.of(footprints, maps, done)
    depth = patches.depth.copy()
    left = budget
    every = selections(footprints.observations)
    undecided = patches.undecided_for([footprints.of(one.chosen) for one in every])
    for selection, rows in zip(every, undecided):
        choice = _Choice(patches.worth[:, rows], patches.cells[rows], depth[rows])
        is_whole = (selection.telescope, selection.band, selection.night) == (None, None, None)
        if choice.is_met(target) or not (is_whole or choice.least_looks(_AIM * target) <= left):
            continue
        wanted = choice.depth_for(_AIM * target, left if is_whole else np.inf)
        looks = choice.looks(wanted)
        if looks <= left:
            depth[rows] = wanted
            left -= looks
    changed = depth > patches.depth
    return [patches.region(changed & (depth > k)) for k in range(_DEEPEST)], budget - left


@dataclass(frozen=True, eq=False)
class _OpenPatches:
    """The sky cut at every edge of what is certainly and of what is possibly covered.

    Only patches that are undecided for some footprint.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Sorted and disjoint.
    group : int32 array, shape (n,)
        Which set of the patchwork each belongs to.
    depth : int64 array, shape (n,)
        Orders below the working orders that have been looked at.
    worth : float64 array, shape (maps, n)
        Their probability, times 2 for each of those orders: what a patch of its
        cells held at the working order.
    cells : float64 array, shape (n,)
        Undecided cells of the footprints that can be refined, likewise at the working orders.
    patchwork : Patchwork
        Of the inner regions, owner by owner, followed by the outer ones.
    """

    starts: Ints
    stops: Ints
    group: NDArray[np.int32]
    depth: Ints
    worth: Floats
    cells: Floats
    patchwork: Patchwork

    @classmethod
    def of(
        cls, footprints: Footprints, maps: Sequence[SkyMap], done: Sequence[Spans]
    ) -> _OpenPatches:
        raster = footprints.raster
        patchwork = Patchwork.build(SpanTable.stack((raster.inner, raster.outer)))
        # A footprint's inner region lies in its outer one, so what a set holds of
        # the one less what it holds of the other is what is undecided there.
        sign = np.repeat([-1, 1], raster.order.size)
        undecided = patchwork.lists.reduce(np.add, sign)
        refined = footprints.pieces_per_footprint > 0
        rate = np.tile(np.where(refined, 4.0 ** (raster.order - LINE_ORDER), 0.0), 2) * sign
        rows = undecided[patchwork.group] > 0
        starts, stops = patchwork.starts[rows], patchwork.stops[rows]
        group = patchwork.group[rows]
        rate = patchwork.lists.reduce(np.add, rate)[group]
        depth = np.zeros(starts.size, dtype=np.int64)
        for region in done:
            depth += region.contains(starts)
        # Each order has halved what is undecided.
        return cls(
            starts,
            stops,
            group,
            depth,
            np.array([m.probability.of_intervals(starts, stops) for m in maps]) * _POWERS[depth],
            (stops - starts) * rate * _POWERS[depth],
            patchwork,
        )

    def undecided_for(self, choices: Sequence[Bools]) -> Iterator[Ints]:
        """Yield the patches that some footprints may and none does cover, choice after choice."""
        none = np.zeros_like(choices[0])
        certain = self.patchwork.covered_by_each([np.concatenate((one, none)) for one in choices])
        possible = self.patchwork.covered_by_each([np.concatenate((none, one)) for one in choices])
        for inner, outer in zip(certain, possible):
            yield np.flatnonzero((outer & ~inner)[self.group])

    def region(self, which: Bools) -> Spans:
        """Return the patches named as a region."""
        return Spans.from_intervals(self.starts[which], self.stops[which])


@dataclass(frozen=True, eq=False)
class _Choice:
    """How deep to go in the patches that are undecided for one selection.

    Attributes
    ----------
    worth : float64 array, shape (maps, n)
        Probability of the patches at the working orders.
    cells : float64 array, shape (n,)
        Undecided cells in them at the working orders.
    depth : int64 array, shape (n,)
        Orders that they are deeper, or to be taken deeper, already.
    """

    worth: Floats
    cells: Floats
    depth: Ints

    def is_met(self, target: float) -> bool:
        """Tell whether the bracket is no wider than this on any map."""
        return bool(np.all(self.worth @ (1 / _POWERS)[self.depth] <= target))

    def looks(self, wanted: Ints) -> float:
        """Looks that it takes to go as deep as wanted."""
        return 4 * float(np.sum(self.cells * (_POWERS[wanted] - _POWERS[self.depth])))

    def least_looks(self, width: float) -> float:
        """Looks that no choice of depths can do without if this is to be left.

        The least of 4 Σ c 2ᵏ over all real k with Σ w 2⁻ᵏ = width is
        4 (Σ √(w c))² / width (Cauchy's inequality).
        """
        even = np.sum(np.sqrt(self.worth * self.cells), axis=1).max(initial=0.0)
        return 4 * (float(even) ** 2 / width - float(np.sum(self.cells * _POWERS[self.depth])))

    def depth_for(self, width: float, budget: float) -> Ints:
        """Choose the depths that leave a bracket of some width, or what a budget can.

        One more order gains 2⁻ᵏ⁻¹ of a patch's probability for 4·2ᵏ looks at each
        of its cells, so equal gains per look mean 4ᵏ in proportion to the
        probability per cell.
        """
        missing = self.worth[self.worth.sum(axis=1) > width]
        held = missing.max(axis=0)
        some = (self.cells > 0) & (held > 0)
        value = np.full(self.cells.size, -np.inf)
        value[some] = np.log2(held[some] / self.cells[some]) / 2
        low, high = value[some].min(initial=0.0) - _DEEPEST, value[some].max(initial=0.0)
        best, is_met = self.depth, False
        # Halving to less than a hundredth of an order.
        for _ in range(14):
            level = (low + high) / 2
            wanted = np.clip(np.rint(value - level), self.depth, _DEEPEST).astype(np.int64)
            is_narrow = bool(np.all(missing @ (1 / _POWERS)[wanted] <= width))
            is_affordable = self.looks(wanted) <= budget
            if is_affordable and (is_narrow or not is_met):
                best, is_met = wanted, is_narrow
            if is_narrow or not is_affordable:
                low = level
            else:
                high = level
        return best


def _refine(footprints: Footprints, deeper: Sequence[Spans]) -> Footprints:
    """Descend every footprint that is undecided inside the first region deeper there."""
    parts: list[Raster] = []
    region, outside = deeper[0], deeper[0].complement()
    raster = footprints.raster
    open_sr = raster.outer.clip(region).area_sr() - raster.inner.clip(region).area_sr()
    wanted_all = (open_sr > 0) & (footprints.pieces_per_footprint > 0)
    for index in range(len(footprints.observations.telescopes)):
        mine = np.flatnonzero(footprints.telescope == index)
        old = raster.take(mine)
        wanted = mine[wanted_all[mine]]
        if wanted.size == 0:
            parts.append(old)
            continue
        fresh = _deepen(footprints, mine, wanted, deeper)
        fresh = clip_raster(fresh, footprints.clips[index])
        deepened = wanted_all[mine]
        parts.append(
            Raster(
                _replace(old.centre, fresh.centre, deepened, region, outside),
                _replace(old.inner, fresh.inner, deepened, region, outside),
                _replace(old.outer, fresh.outer, deepened, region, outside),
                old.order,
            )
        )
    return replace(footprints, raster=stack_rasters(parts))


def _deepen(footprints: Footprints, mine: Ints, wanted: Ints, deeper: Sequence[Spans]) -> Raster:
    """Rasterise footprints of one telescope inside regions to go ever deeper in."""
    order = footprints.raster.order
    pieces = footprints.pieces
    parts: list[tuple[Ints, Raster]] = []
    for level in np.unique(order[wanted]):
        owners = wanted[order[wanted] == level]
        chosen = np.isin(pieces.owner, owners)
        part = pieces.take(chosen, np.searchsorted(owners, pieces.owner[chosen]))
        regions = [region for region in deeper[: _ORDER_LIMIT - int(level)] if region]
        fresh = rasterise(part, owners.size, int(level), within=deeper[0], deeper=regions)
        parts.append((owners, fresh))
    stacked = stack_rasters([raster for _, raster in parts])
    given = np.concatenate([owners for owners, _ in parts])
    # Footprints that are not wanted get an empty raster.
    place = np.full(mine.size, given.size)
    place[np.searchsorted(mine, given)] = np.arange(given.size)
    none = Raster.exact(Spans.empty())
    return stack_rasters([stacked, none]).take(place)


def _replace(
    old: SpanTable, fresh: SpanTable, deepened: Bools, region: Spans, outside: Spans
) -> SpanTable:
    """Take the deepened owners' sky inside a region from ``fresh``, all else from ``old``."""
    kept, inside = old.clip(outside), fresh.clip(region)
    rows = deepened[kept.owner]
    whole = ~deepened[old.owner]
    return SpanTable.from_unsorted(
        np.concatenate((kept.starts[rows], inside.starts, old.starts[whole])),
        np.concatenate((kept.stops[rows], inside.stops, old.stops[whole])),
        np.concatenate((kept.owner[rows], inside.owner, old.owner[whole])),
        old.owners,
    )
