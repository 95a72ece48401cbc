"""Galactic maps brought to the line, which is ICRS.

A rotation does not map cells onto cells, so the map is sampled: the density of
a cell of the line is the mean of the Galactic map's density at the centres of
its sub-cells. Where much probability lies the cells are finer than the map's,
so that any region sees the map's own pixels; where little lies they are not.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
from astropy.coordinates import CartesianRepresentation, SkyCoord
from astropy_healpix import healpix_to_xyz, neighbours, xyz_to_healpix
from numpy.typing import NDArray

from skytally.skymap import DistanceLayer, Floats
from skytally.skymap_table import MapCells
from skytally.spans import LINE_ORDER, UNIT_SR, Ints, Spans, cell_to_span, spans_to_cells

__all__ = ["galactic_to_line"]

# A cell that holds less probability than this is not refined further: thousands
# of them along a region's edge, each off by a tenth, stay far below 0.0005.
_REFINE_ABOVE = 2e-6
_REFINE_ORDERS = 2
# Sub-cells are two orders deeper than the cells, which must fit on the line.
_DEEPEST = LINE_ORDER - 2
_CHUNK = 1 << 18


@cache
def _galactic_axes() -> NDArray[np.float64]:
    """Rotation matrix, shape (3, 3): ICRS vector = matrix @ Galactic vector.

    From astropy's Galactic frame (MNRAS 123 123, 1960, and the J2000 axes
    given with the Hipparcos catalogue, ESA SP-1200, 1997, volume 1, section 1.5.3).
    """
    axes = SkyCoord(CartesianRepresentation(np.eye(3)), frame="galactic").icrs
    return np.asarray(axes.cartesian.xyz.value)


def galactic_to_line(cells: MapCells) -> tuple[MapCells, float]:
    """Resample the cells of a Galactic map to the line.

    Returns
    -------
    cells : MapCells
        In ICRS; not normalised. Distance parameters are those of the sampled
        cell with the greatest density.
    residual : float
        Sum of the probability after resampling, relative to before, minus one.
    """
    before = float(np.sum((cells.stops - cells.starts) * UNIT_SR * cells.density_per_sr))
    order, cell = _covering_cells(cells)
    limit = np.minimum(order + _REFINE_ORDERS, _DEEPEST)
    done: list[tuple[Ints, Ints, Floats, Ints]] = []
    depth = 1
    while cell.size:
        density, row = _sample(cells, order, cell, depth)
        amount = density * (4.0 ** (LINE_ORDER - order) * UNIT_SR / before)
        split = (amount > _REFINE_ABOVE) & (order < limit)
        keep = ~split & (density > 0)
        done.append((order[keep], cell[keep], density[keep], row[keep]))
        order, cell, limit = np.repeat(order[split] + 1, 4), cell[split], np.repeat(limit[split], 4)
        cell = ((cell << 2)[:, np.newaxis] + np.arange(4)).reshape(-1)
        depth = 2
    order, cell, density, row = (np.concatenate(part) for part in zip(*done))
    starts, stops = cell_to_span(order, cell)
    rank = np.argsort(starts)
    result = replace(
        cells,
        starts=starts[rank],
        stops=stops[rank],
        density_per_sr=density[rank],
        order_max=int(order.max(initial=0)),
        galactic=False,
        distance=_pick(cells.distance, row[rank]),
    )
    after = float(np.sum((stops - starts) * UNIT_SR * density))
    return result, after / before - 1.0


def _pick(distance: DistanceLayer | None, row: Ints) -> DistanceLayer | None:
    if distance is None:
        return None
    return replace(
        distance,
        mu_mpc=distance.mu_mpc[row],
        sigma_mpc=distance.sigma_mpc[row],
        norm_per_mpc2=distance.norm_per_mpc2[row],
    )


def _centres(order: int, cell: Ints) -> Floats:
    """Unit vectors, shape (3, n), of the centres of NESTED cells."""
    return np.stack(healpix_to_xyz(cell, 1 << order, order="nested"))


def _cells_at(order: int, vector: Floats) -> Ints:
    return np.asarray(xyz_to_healpix(*vector, 1 << order, order="nested"), dtype=np.int64)


def _covering_cells(cells: MapCells) -> tuple[Ints, Ints]:
    """Cells of the line that may hold probability, each as fine as the map is there."""
    sizes = np.left_shift(np.int64(1), 2 * np.arange(LINE_ORDER + 1, dtype=np.int64))
    source_order = LINE_ORDER - np.searchsorted(sizes, cells.stops - cells.starts)
    claimed = Spans.empty()
    orders: list[Ints] = []
    numbers: list[Ints] = []
    for level in np.unique(source_order)[::-1]:
        own = np.right_shift(cells.starts[source_order == level], 2 * (LINE_ORDER - level))
        # A cell lies within the one a level coarser that holds its centre, and its neighbours.
        coarse = max(int(level) - 1, 0)
        hit = np.unique(_cells_at(coarse, _galactic_axes() @ _centres(int(level), own)))
        with np.errstate(invalid="ignore"):  # where a neighbour is missing it is −1
            around = np.asarray(neighbours(hit, 1 << coarse, order="nested")).reshape(-1)
        near = np.union1d(hit, around[around >= 0])
        region = Spans.from_cells(coarse, near)
        order, cell = spans_to_cells(region - claimed)
        claimed = claimed | region
        order, cell = _split_to(order, cell, min(int(level), _DEEPEST))
        orders.append(order)
        numbers.append(cell)
    return np.concatenate(orders), np.concatenate(numbers)


def _split_to(order: Ints, cell: Ints, level: int) -> tuple[Ints, Ints]:
    """Split the cells that are coarser than a level."""
    down = 2 * np.maximum(level - order, 0)
    count = np.left_shift(np.int64(1), down)
    first = np.repeat(np.left_shift(cell, down), count)
    within = np.arange(first.size) - np.repeat(np.cumsum(count) - count, count)
    return np.repeat(np.maximum(order, level), count), first + within


def _sample(cells: MapCells, order: Ints, cell: Ints, depth: int) -> tuple[Floats, Ints]:
    """Mean density over the sub-cells of each cell, and the source row of the densest.

    The row is −1 where no sub-cell meets the map.
    """
    mean = np.zeros(cell.size)
    row = np.full(cell.size, -1, dtype=np.int64)
    icrs_to_galactic = _galactic_axes().T
    for level in np.unique(order):
        ours = np.flatnonzero(order == level)
        for low in range(0, ours.size, _CHUNK >> (2 * depth)):
            part = ours[low : low + (_CHUNK >> (2 * depth))]
            sub = (cell[part] << (2 * depth))[:, np.newaxis] + np.arange(1 << (2 * depth))
            vector = icrs_to_galactic @ _centres(int(level) + depth, sub.reshape(-1))
            position = _cells_at(LINE_ORDER, vector)
            source = np.searchsorted(cells.starts, position, side="right") - 1
            inside = (source >= 0) & (position < cells.stops[source])
            density = np.where(inside, cells.density_per_sr[source], 0.0).reshape(sub.shape)
            source = np.where(inside, source, -1).reshape(sub.shape)
            mean[part] = density.mean(axis=1)
            row[part] = source[np.arange(part.size), density.argmax(axis=1)]
    return mean, row
