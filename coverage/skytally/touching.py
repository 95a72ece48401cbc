"""HEALPix cells of one order that touch footprints, wherever their centres lie.

Counting such cells whole is a widespread way to turn fields into sky, and it
overstates what they cover. The footprints as laid decide most cells: one that
holds sky that is covered touches, one that holds none possibly covered does not.
What is left is decided by geometry, exactly but for the slight bend of the cells'
edges.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from astropy_healpix import healpix_to_xyz
from numpy.typing import NDArray

from skytally.covered import Coverage
from skytally.footprints import clip_raster
from skytally.grouping import expand_ranges
from skytally.patchwork import Patchwork
from skytally.raster import Pieces, Raster, cell_radius_rad, rasterise
from skytally.spans import LINE_ORDER, Ints, Spans, SpanTable

__all__ = ["TouchingCells"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Pairs of piece and cell looked at together: bounds memory.
_PAIRS_AT_ONCE = 200_000
# Corners of a cell in order around it, as fractions along its two axes.
_CORNERS = ((0.0, 0.0), (1.0, 0.0), (1.0, 1.0), (0.0, 1.0))
# A margin of common practice: cells are tested by the circle around a sixteenth of them.
_MARGIN_ORDERS = 2


@dataclass(frozen=True, eq=False)
class TouchingCells:
    """The cells of any order that share sky with the footprints of some exposures.

    Attributes
    ----------
    coverage : Coverage
        The footprints as laid.
    chosen : bool array, shape (exposures,)
        The exposures.
    """

    coverage: Coverage
    chosen: Bools

    @cached_property
    def _footprints(self) -> Bools:
        return self.coverage.footprints.of(self.chosen)

    @cached_property
    def _bounds(self) -> dict[int, tuple[Spans, Spans]]:
        return {}

    @cached_property
    def _exact(self) -> dict[int, Spans]:
        return {}

    def bounds(self, order: int) -> tuple[Spans, Spans]:
        """Return cells that certainly and that possibly touch, found in little time; whole."""
        if order not in self._bounds:
            depth = self.coverage.footprints.raster.order[self._footprints]
            # A small cell that counts by its centre puts that point into the larger one around it.
            deep = depth[depth >= 0].min(initial=LINE_ORDER) >= order
            within = self.coverage.centre if deep else self.coverage.inner
            self._bounds[order] = (
                _whole_cells(*_covered(within, self._footprints), order),
                _whole_cells(*_covered(self.coverage.outer, self._footprints), order),
            )
        return self._bounds[order]

    def exact(self, order: int) -> Spans:
        """Return the cells of one order that touch, whole."""
        if order not in self._exact:
            sure, maybe = self.bounds(order)
            self._exact[order] = sure | self._decided(order, maybe - sure)
        return self._exact[order]

    def _decided(self, order: int, open_cells: Spans) -> Spans:
        """Those of some cells that touch."""
        if not open_cells:
            return open_cells
        pieces = self.coverage.footprints.pieces
        mine = self._footprints[pieces.owner]
        # Each piece is an owner of its own, so that the descent names the pairs to decide.
        pieces = pieces.take(mine, np.arange(int(mine.sum())))
        table = rasterise(pieces, len(pieces), order, within=open_cells).outer.clip(open_cells)
        shift = 2 * (LINE_ORDER - order)
        row, cell = expand_ranges(table.starts >> shift, (table.stops - table.starts) >> shift)
        piece = table.owner[row]
        touched = np.zeros(cell.size, dtype=bool)
        for first in range(0, cell.size, _PAIRS_AT_ONCE):
            part = slice(first, first + _PAIRS_AT_ONCE)
            touched[part] = _touch(pieces, piece[part], order, cell[part])
        return Spans.from_cells(order, cell[touched])

    def nearly(self, order: int) -> Spans:
        """Return the cells that touch or lie within about a quarter of a cell, whole.

        Library routines for "inclusive" queries test cells by a circle around a
        sixteenth of each, and so take in some that do not touch.
        """
        laid, exact = self.coverage.footprints, self.exact(order)
        outside = exact.complement()
        found = []
        for index, clip in enumerate(laid.clips):
            mine = (self._footprints & (laid.telescope == index))[laid.pieces.owner]
            pieces = laid.pieces.take(mine, np.arange(int(mine.sum())))
            near = SpanTable.from_regions([_with_margin(pieces, order + _MARGIN_ORDERS, outside)])
            table = clip_raster(Raster(near, near, near, np.array([-1])), clip).outer
            found.append(_whole_cells(table.starts, table.stops, order))
        return exact.union(*found)


def _with_margin(pieces: Pieces, order: int, within: Spans) -> Spans:
    """Cells of a region that are nearer than their own radius to all edges of a piece.

    And to a circle around it, lest sharp corners reach far.
    """
    table = rasterise(pieces, len(pieces), order, within=within).outer.clip(within)
    shift = 2 * (LINE_ORDER - order)
    row, cell = expand_ranges(table.starts >> shift, (table.stops - table.starts) >> shift)
    piece = table.owner[row]
    xyz = np.stack(healpix_to_xyz(cell, 1 << order, order="nested"), axis=1)
    reach = np.minimum(pieces.bound_rad[piece] + cell_radius_rad(order), np.pi)
    near = np.einsum("nc,nc->n", pieces.middle[piece], xyz) >= np.cos(reach)
    return Spans.from_cells(order, cell[near])


def _covered(patchwork: Patchwork, footprints: Bools) -> tuple[Ints, Ints]:
    """Patches that the footprints cover, as starts and stops."""
    rows = patchwork.covered_by(footprints)[patchwork.group]
    return patchwork.starts[rows], patchwork.stops[rows]


def _whole_cells(starts: Ints, stops: Ints, order: int) -> Spans:
    """Cells of one order that hold any of the spans."""
    shift = 2 * (LINE_ORDER - order)
    return Spans.from_intervals((starts >> shift) << shift, -((-stops >> shift) << shift))


def _touch(pieces: Pieces, piece: Ints, order: int, cell: Ints) -> Bools:
    """Tell for pairs of piece and cell whether they share sky."""
    corner = np.stack(
        [
            np.stack(healpix_to_xyz(cell, 1 << order, dx, dy, order="nested"), axis=1)
            for dx, dy in _CORNERS
        ],
        axis=1,
    )
    edge = np.cross(corner, np.roll(corner, -1, axis=1))
    edge /= np.linalg.norm(edge, axis=2, keepdims=True)
    inward = np.sign(np.einsum("nkc,nc->n", edge, corner.sum(axis=1)))
    edge *= inward[:, None, None]
    straight = pieces.radius_rad[piece] == np.pi / 2
    touched = np.empty(piece.size, dtype=bool)
    for which, test in ((straight, _polygons_meet), (~straight, _circles_meet)):
        touched[which] = test(pieces, piece[which], corner[which], edge[which])
    return touched


def _polygons_meet(pieces: Pieces, piece: Ints, corner: Floats, edge: Floats) -> Bools:
    """Tell which convex pieces and cells no edge of either separates.

    Two convex polygons are disjoint exactly where the line along an edge of one
    has all of the other beyond it (separating axes; common practice).
    """
    apart = np.zeros(piece.size, dtype=bool)
    for cap in range(pieces.normal.shape[1]):
        beyond = np.einsum("nkc,nc->nk", corner, pieces.normal[piece, cap])
        apart |= beyond.max(axis=1) < 0
    vertex = _vertices(pieces)[piece]
    for side in range(edge.shape[1]):
        apart |= np.einsum("nkc,nc->nk", vertex, edge[:, side]).max(axis=1) < 0
    return ~apart


def _vertices(pieces: Pieces) -> Floats:
    """Corners of pieces with great-circle edges, (p, k, 3): where neighbouring edges meet."""
    normal = pieces.normal
    vertex = np.cross(normal, np.roll(normal, -1, axis=1))
    length = np.linalg.norm(vertex, axis=2, keepdims=True)
    vertex = np.where(length > 0, vertex / np.where(length > 0, length, 1.0), 0.0)
    vertex *= np.sign(np.einsum("pkc,pc->pk", vertex, pieces.middle))[:, :, None]
    # A cap that only fills up the row meets its like: the first corner stands in.
    return np.where(length > 0, vertex, vertex[:, :1])


def _circles_meet(pieces: Pieces, piece: Ints, corner: Floats, edge: Floats) -> Bools:
    """Tell which circles hold a corner or a point of an edge of their cell, or lie inside it."""
    centre, radius = pieces.middle[piece], pieces.radius_rad[piece]
    near_corner = np.einsum("nkc,nc->nk", corner, centre).max(axis=1) >= np.cos(radius)
    depth = np.einsum("nkc,nc->nk", edge, centre)
    following = np.roll(corner, -1, axis=1)
    # The foot of the perpendicular lies between the edge's ends.
    sign = np.sign(np.einsum("nkc,nkc->nk", np.cross(corner, following), edge))
    after = np.einsum("nkc,nc->nk", np.cross(edge, corner), centre) * sign >= 0
    before = np.einsum("nkc,nc->nk", np.cross(following, edge), centre) * sign >= 0
    crosses = after & before & (np.abs(depth) <= np.sin(radius)[:, None])
    return np.asarray(near_corner | crosses.any(axis=1) | (depth >= 0).all(axis=1))
