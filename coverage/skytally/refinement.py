"""Tighten the bracket where it holds probability, within a stated budget.

After rasterising, a union's bracket is as wide as its undecided cells. Those that
hold most probability are descended further, for every footprint of a selection
whose bracket is too wide, until high − low meets the target or the budget of
cells is spent. Where the descent went deeper, the deeper centre rule replaces the
coarser one, so the value stays inside its bracket.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from skytally.footprints import Footprints, Progress, clip_raster
from skytally.patchwork import Patchwork
from skytally.raster import Raster, cell_width_rad, rasterise, stack_rasters
from skytally.selection import selections
from skytally.skymap import SkyMap
from skytally.spans import UNIT_SR, Ints, Spans, SpanTable

__all__ = ["BUDGET_CELLS", "refine_footprints"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Pairs of piece and cell that refining may look at, about a second of work.
BUDGET_CELLS = 4_000_000
_ORDERS_A_ROUND = 2
_ROUNDS = 2
_ORDER_LIMIT = 22


def refine_footprints(
    footprints: Footprints,
    maps: Sequence[SkyMap],
    target: float,
    progress: Progress | None = None,
    budget: float = BUDGET_CELLS,
) -> Footprints:
    """Refine until every selection's bracket in probability is at most ``target``.

    Selections are served in the order of the rows, so that the union of all
    comes first where the budget is short.

    Parameters
    ----------
    footprints : Footprints
        As laid.
    maps : sequence of SkyMap
        The bracket must be met on every one.
    target : float
        Greatest high − low, a probability.
    budget : float
        Pairs of piece and cell that may be looked at in all.
    """
    for step in range(_ROUNDS):
        if budget <= 0:
            break
        if progress is not None:
            progress("Tightening the bracket", step / _ROUNDS)
        region, cost = _where(footprints, maps, target, budget)
        if not region:
            break
        budget -= cost
        footprints = _refine(footprints, region)
    return footprints


def _where(
    footprints: Footprints, maps: Sequence[SkyMap], target: float, budget: float
) -> tuple[Spans, float]:
    """Find the undecided sky of the selections that miss the target, and its cost."""
    raster = footprints.raster
    patchworks = Patchwork.build(raster.inner), Patchwork.build(raster.outer)
    inner, outer = ([p.measure(m.probability) for m in maps] for p in patchworks)
    region, cost = Spans.empty(), 0.0
    for selection in selections(footprints.observations):
        mine = footprints.of(selection.chosen)
        low, high = (p.covered_by(mine) for p in patchworks)
        width = max(float(b[high].sum() - a[low].sum()) for a, b in zip(inner, outer))
        if width <= target:
            continue
        undecided = _patches(patchworks[1], high).difference(_patches(patchworks[0], low))
        wanted = region.union(_heaviest(undecided, maps, target / 4))
        price = _cost(footprints, wanted)
        if price > budget:
            return region.union(_affordable(footprints, maps, wanted, budget)), budget
        region, cost = wanted, price
    return region, cost


def _patches(patchwork: Patchwork, sets: Bools) -> Spans:
    rows = sets[patchwork.group]
    return Spans.from_intervals(patchwork.starts[rows], patchwork.stops[rows])


def _worth(region: Spans, maps: Sequence[SkyMap]) -> Floats:
    """Greatest probability of each span on any map, shape (n,)."""
    worth = [m.probability.of_intervals(region.starts, region.stops) for m in maps]
    return np.asarray(np.max(worth, axis=0))


def _heaviest(region: Spans, maps: Sequence[SkyMap], leave: float) -> Spans:
    """Drop the emptiest spans while what is dropped holds at most ``leave``."""
    worth = _worth(region, maps)
    order = np.argsort(worth)
    keep = np.sort(order[np.cumsum(worth[order]) > leave])
    return Spans.from_intervals(region.starts[keep], region.stops[keep])


def _cost(footprints: Footprints, region: Spans) -> float:
    """Pairs of piece and cell that refining a region takes."""
    raster = footprints.raster
    cells = _undecided_sr(raster, region) / cell_width_rad(0) ** 2 * 4.0**raster.order
    return float(4 * 2**_ORDERS_A_ROUND * cells[footprints.pieces_per_footprint > 0].sum())


def _undecided_sr(raster: Raster, region: Spans) -> Floats:
    """Solid angle of each footprint's undecided cells inside a region, (footprints,)."""
    inside = raster.outer.clip(region).area_sr() - raster.inner.clip(region).area_sr()
    return np.maximum(inside, 0.0)


def _affordable(
    footprints: Footprints, maps: Sequence[SkyMap], region: Spans, budget: float
) -> Spans:
    """Cut a region to its densest part that the budget can pay for."""
    worth = _worth(region, maps) / ((region.stops - region.starts) * UNIT_SR)
    order = np.argsort(-worth)
    low, high = 0, order.size
    best = Spans.empty()
    while high - low > max(order.size // 32, 1):
        middle = (low + high) // 2
        keep = np.sort(order[:middle])
        part = Spans.from_intervals(region.starts[keep], region.stops[keep])
        if _cost(footprints, part) <= budget:
            low, best = middle, part
        else:
            high = middle
    return best


def _refine(footprints: Footprints, region: Spans) -> Footprints:
    """Descend every footprint that is undecided inside a region deeper there."""
    parts: list[Raster] = []
    outside = region.complement()
    open_there = _undecided_sr(footprints.raster, region) > 0
    wanted_all = open_there & (footprints.pieces_per_footprint > 0)
    for index in range(len(footprints.observations.telescopes)):
        mine = np.flatnonzero(footprints.telescope == index)
        old = footprints.raster.take(mine)
        wanted = mine[wanted_all[mine]]
        if wanted.size == 0:
            parts.append(old)
            continue
        fresh = _deepen(footprints, mine, wanted, region)
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


def _deepen(footprints: Footprints, mine: Ints, wanted: Ints, region: Spans) -> Raster:
    """Rasterise footprints of one telescope two orders deeper inside a region."""
    order = footprints.raster.order
    pieces = footprints.pieces
    parts: list[tuple[Ints, Raster]] = []
    for level in np.unique(order[wanted]):
        owners = wanted[order[wanted] == level]
        chosen = np.isin(pieces.owner, owners)
        part = pieces.take(chosen, np.searchsorted(owners, pieces.owner[chosen]))
        depth = min(int(level) + _ORDERS_A_ROUND, _ORDER_LIMIT)
        parts.append((owners, rasterise(part, owners.size, depth, within=region)))
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
