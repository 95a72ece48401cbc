"""Galactic maps brought to the line, which is ICRS.

A rotation does not map cells onto cells, so the map is sampled: the density of
a cell of the line is the mean of the Galactic map's density at the centres of
its sub-cells. Where much probability lies the cells are finer than the map's,
so that any region sees the map's own pixels; where little lies they are not.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from functools import cache

import numpy as np
from astropy.coordinates import CartesianRepresentation, SkyCoord
from astropy_healpix import healpix_to_xyz, neighbours, xyz_to_healpix
from numpy.typing import NDArray

from skytally.grouping import expand_ranges
from skytally.skymap import DistanceLayer, Floats
from skytally.skymap_table import MapCells
from skytally.spans import LINE_ORDER, UNIT_SR, Ints, Spans, cell_to_span, spans_to_cells

__all__ = ["galactic_positions", "galactic_to_line"]

# A source cell is matched by cells one order finer for each of these amounts of
# probability that it exceeds: the cells along a region's edge, each off by a
# tenth, then stay far below 0.0005 together, and their number below a few million.
_FINER_ABOVE = (2e-6, 2e-5, 2e-4, 2e-3, 2e-2)
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
    amount = (cells.stops - cells.starts) * UNIT_SR * cells.density_per_sr
    before = float(np.sum(amount))
    done: list[tuple[Ints, Ints, Floats, Ints]] = []
    for order, cell, depth in _covering_cells(cells, amount / before):
        density, row = _sample(cells, order, cell, depth)
        held = density > 0
        done.append((order[held], cell[held], density[held], row[held]))
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


def galactic_positions(order: int, cell: Ints, depth: int) -> Ints:
    """Where the centres of the sub-cells of ICRS cells lie on the line of a Galactic map.

    Parameters
    ----------
    order : int
        Of the cells.
    cell : int64 array, shape (n,)
        NESTED indices of ICRS cells.
    depth : int
        How many orders deeper the sub-cells are.

    Returns
    -------
    int64 array, shape (n, 4**depth)
        Order-29 NESTED indices in the Galactic frame.
    """
    sub = (cell << (2 * depth))[:, np.newaxis] + np.arange(1 << (2 * depth))
    vector = _galactic_axes().T @ _centres(order + depth, sub.reshape(-1))
    return _cells_at(LINE_ORDER, vector).reshape(sub.shape)


def _covering_cells(cells: MapCells, share: Floats) -> Iterator[tuple[Ints, Ints, int]]:
    """Yield order, cells of the line that may hold probability, and how deep to sample them.

    Each is at least as fine as the map is there, finer where a source cell's
    share of the probability is large; no two overlap.
    """
    sizes = np.left_shift(np.int64(1), 2 * np.arange(LINE_ORDER + 1, dtype=np.int64))
    own_order = LINE_ORDER - np.searchsorted(sizes, cells.stops - cells.starts)
    finer = np.searchsorted(_FINER_ABOVE, share)
    level = np.minimum(own_order + finer, _DEEPEST)
    claimed = Spans.empty()
    for deepest in np.unique(level)[::-1]:
        for depth, kind in ((2, finer > 0), (1, finer == 0)):
            ours = (level == deepest) & kind
            own = np.right_shift(cells.starts[ours], 2 * (LINE_ORDER - own_order[ours]))
            region = _surroundings(*_split_to(own_order[ours], own, int(deepest)), int(deepest))
            order, cell = spans_to_cells(region - claimed)
            claimed = claimed | region
            yield *_split_to(order, cell, int(deepest)), depth


def _surroundings(order: Ints, cell: Ints, level: int) -> Spans:
    """Region of the line that holds Galactic cells, all at one level or all deeper."""
    # A cell lies within the one a level coarser that holds its centre, and its neighbours.
    coarse = max(level - 1, 0)
    hits = [
        np.unique(_cells_at(coarse, _galactic_axes() @ _centres(int(k), cell[order == k])))
        for k in np.unique(order)
    ]
    hit = np.unique(np.concatenate([*hits, np.empty(0, dtype=np.int64)]))
    with np.errstate(invalid="ignore"):  # where a neighbour is missing it is −1
        around = np.asarray(neighbours(hit, 1 << coarse, order="nested")).reshape(-1)
    return Spans.from_cells(coarse, np.union1d(hit, around[around >= 0]))


def _split_to(order: Ints, cell: Ints, level: int) -> tuple[Ints, Ints]:
    """Split the cells that are coarser than a level."""
    down = 2 * np.maximum(level - order, 0)
    row, children = expand_ranges(np.left_shift(cell, down), np.left_shift(np.int64(1), down))
    return np.maximum(order, level)[row], children


def _sample(cells: MapCells, order: Ints, cell: Ints, depth: int) -> tuple[Floats, Ints]:
    """Mean density over the sub-cells of each cell, and the source row of the densest.

    The row is −1 where no sub-cell meets the map.
    """
    mean = np.zeros(cell.size)
    row = np.full(cell.size, -1, dtype=np.int64)
    for level in np.unique(order):
        ours = np.flatnonzero(order == level)
        for low in range(0, ours.size, _CHUNK >> (2 * depth)):
            part = ours[low : low + (_CHUNK >> (2 * depth))]
            position = galactic_positions(int(level), cell[part], depth)
            source = np.searchsorted(cells.starts, position, side="right") - 1
            inside = (source >= 0) & (position < cells.stops[source])
            density = np.where(inside, cells.density_per_sr[source], 0.0)
            source = np.where(inside, source, -1)
            mean[part] = density.mean(axis=1)
            row[part] = source[np.arange(part.size), density.argmax(axis=1)]
    return mean, row
