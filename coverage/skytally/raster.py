"""Shapes on the sky turned into spans: the centre rule, with a bracket on both sides.

Everything is an intersection of spherical caps. One descent serves them all: a
HEALPix cell farther than its own radius inside every cap is kept whole, one
farther than that outside any cap is dropped, the rest are split, down to the
working order, where the cell's centre decides. The cells still undecided there
are the bracket: the exact shape holds at least the kept cells and at most these
as well.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from astropy_healpix import healpix_to_xyz
from numpy.typing import NDArray

from skytally.pieces import (
    Pieces,
    convex_parts,
    pieces_of_circles,
    pieces_of_rings,
    pieces_of_shape,
)
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon, Shape
from skytally.spans import LINE_END, LINE_ORDER, Ints, Spans, SpanTable, cell_to_span
from skytally.workers import side_by_side

__all__ = [
    "Pieces",
    "Raster",
    "cell_radius_rad",
    "cell_width_rad",
    "convex_parts",
    "pieces_of_circles",
    "pieces_of_rings",
    "pieces_of_shape",
    "rasterise",
    "rasterise_shape",
    "stack_rasters",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Rounding of a dot product of unit vectors, far below any cell's radius.
_SLACK = 1e-14
# Pairs of piece and cell looked at together: bounds memory, feeds the cache.
_PAIRS_AT_ONCE = 200_000


def cell_width_rad(order: int) -> float:
    """Square root of a cell's solid angle, in radians."""
    return float(np.sqrt(np.pi / 3.0)) / (1 << order)


def cell_radius_rad(order: int) -> float:
    """Greatest angle between a cell's centre and its corner at this order, in radians.

    It is reached at the edge of the polar caps (ApJ 622 759, 2005, section 5).
    """
    nside = 1 << order
    a_z, a_phi = 2.0 / 3.0, np.pi / (4 * nside)
    b_z = 1.0 - (1.0 - 1.0 / nside) ** 2 / 3.0
    a_s, b_s = np.sqrt(1 - a_z**2), np.sqrt(1 - b_z**2)
    a = np.array([a_s * np.cos(a_phi), a_s * np.sin(a_phi), a_z])
    b = np.array([b_s, 0.0, b_z])
    return float(2 * np.arcsin(np.linalg.norm(a - b) / 2))


@dataclass(frozen=True, eq=False)
class Raster:
    """Footprints on the line, one owner each.

    Attributes
    ----------
    centre, inner, outer : SpanTable
        By the centre rule; certainly inside; possibly inside.
    order : int64 array, shape (owners,)
        Working order of each footprint; −1 where the region was exact.
    """

    centre: SpanTable
    inner: SpanTable
    outer: SpanTable
    order: Ints

    @classmethod
    def exact(cls, region: Spans) -> Raster:
        """Return a region known exactly as a raster of one owner."""
        table = SpanTable.from_regions([region])
        return cls(table, table, table, np.array([-1]))

    def take(self, owners: Ints) -> Raster:
        """Return the raster whose owner i is this raster's owner ``owners[i]``."""
        return Raster(
            self.centre.take(owners),
            self.inner.take(owners),
            self.outer.take(owners),
            self.order[owners],
        )

    def combined(self) -> Raster:
        """Return the union of all owners as a raster of one owner."""
        return Raster(
            SpanTable.from_regions([self.centre.union()]),
            SpanTable.from_regions([self.inner.union()]),
            SpanTable.from_regions([self.outer.union()]),
            np.array([self.order.max(initial=-1)]),
        )


def stack_rasters(parts: list[Raster]) -> Raster:
    """Put rasters one after the other; owners are renumbered in turn."""
    return Raster(
        SpanTable.stack(p.centre for p in parts),
        SpanTable.stack(p.inner for p in parts),
        SpanTable.stack(p.outer for p in parts),
        np.concatenate([np.empty(0, dtype=np.int64), *(p.order for p in parts)]),
    )


@dataclass(frozen=True, eq=False)
class _Found:
    """Cells that a descent decided: rows of (piece, order, cell)."""

    piece: Ints
    order: Ints
    cell: Ints

    @classmethod
    def of(cls, piece: Ints, order: int, cell: Ints) -> _Found:
        return cls(piece, np.full(piece.size, order), cell)

    @classmethod
    def join(cls, parts: Sequence[_Found]) -> _Found:
        return cls(
            np.concatenate([p.piece for p in parts]),
            np.concatenate([p.order for p in parts]),
            np.concatenate([p.cell for p in parts]),
        )


def _centres(order: int, cell: Ints) -> Floats:
    """Unit vectors (n, 3) of NESTED cells' centres."""
    return np.stack(healpix_to_xyz(cell, 1 << order, order="nested"), axis=1)


def _classify(pieces: Pieces, piece: Ints, order: int, cell: Ints) -> tuple[Bools, Bools, Bools]:
    """Tell for pairs of piece and cell: wholly inside, not outside, centre inside."""
    rho = cell_radius_rad(order)
    radius = pieces.radius_rad
    within = np.where(radius > rho, np.cos(radius - rho), 2.0) + _SLACK
    beyond = np.where(radius + rho < np.pi, np.cos(radius + rho), -2.0) - _SLACK
    xyz = _centres(order, cell)
    # The caps of a piece have one radius, so the farthest cap decides.
    nearest = np.full(piece.size, 2.0)
    for cap in range(pieces.normal.shape[1]):
        normal = np.take(pieces.normal[:, cap], piece, axis=0)
        np.minimum(nearest, np.einsum("nc,nc->n", normal, xyz), out=nearest)
    return nearest >= within[piece], nearest >= beyond[piece], nearest >= np.cos(radius)[piece]


def _near(pieces: Pieces, piece: Ints, order: int, cell: Ints) -> Bools:
    """Tell which cells may touch the circle around their piece."""
    reach = pieces.bound_rad + cell_radius_rad(order)
    limit = np.where(reach < np.pi, np.cos(reach), -2.0) - _SLACK
    near = np.einsum("nc,nc->n", pieces.middle[piece], _centres(order, cell)) >= limit[piece]
    return np.asarray(near)


def _split(piece: Ints, cell: Ints) -> tuple[Ints, Ints]:
    """Replace each cell by its four children."""
    return np.repeat(piece, 4), (cell[:, None] * 4 + np.arange(4)).ravel()


def _meets(region: Spans, order: int, cell: Ints) -> Bools:
    """Tell which cells share sky with a region."""
    start, stop = cell_to_span(order, cell)
    rank = np.searchsorted(region.edges, start, side="right")
    following = np.append(region.edges, LINE_END)[rank]
    return np.asarray(((rank & 1) == 1) | (following < stop))


def _descend(
    pieces: Pieces, order: int, within: Spans | None, deeper: Sequence[Spans]
) -> tuple[_Found, _Found, Bools]:
    """Descend from the base cells; return cells inside, undecided cells, their centre rule."""
    piece = np.repeat(np.arange(len(pieces)), 12)
    cell = np.tile(np.arange(12), len(pieces))
    kept: list[_Found] = []
    edge: list[_Found] = []
    centres: list[Bools] = []
    # Far above a piece's own size its caps decide nothing that its circle does not.
    size = float(pieces.bound_rad.max(initial=0.0))
    for level in range(order + len(deeper) + 1):
        if level < order and cell_radius_rad(level) > size:
            open_ = np.flatnonzero(_near(pieces, piece, level, cell))
        else:
            inside, touched, centred = _classify(pieces, piece, level, cell)
            kept.append(_Found.of(piece[inside], level, cell[inside]))
            open_ = np.flatnonzero(touched & ~inside)
        if level < order:
            if within is not None:
                open_ = open_[_meets(within, level, cell[open_])]
        else:
            goes_on = np.zeros(open_.size, dtype=bool)
            if level < order + len(deeper):
                goes_on = _meets(deeper[level - order], level, cell[open_])
            rest = open_[~goes_on]
            edge.append(_Found.of(piece[rest], level, cell[rest]))
            centres.append(centred[rest])
            open_ = open_[goes_on]
        piece, cell = _split(piece[open_], cell[open_])
    return _Found.join(kept), _Found.join(edge), np.concatenate(centres)


def _to_table(owner: Ints, order: Ints, cell: Ints, owners: int, depth: int) -> SpanTable:
    """Unite the cells of each owner; ``depth`` is the deepest order among them.

    The owner goes above the position in one integer, so that a plain sort of
    starts and of stops does the union of every owner at once. Each level's cells
    come sorted, which a stable sort makes use of.
    """
    bits = 2 * depth + 4
    base = owner << bits
    shift = 2 * (depth - order)
    starts = np.sort(base + (cell << shift), kind="stable")
    stops = np.sort(base + ((cell + 1) << shift), kind="stable")
    if starts.size == 0:
        return SpanTable(starts, stops, np.zeros(owners + 1, dtype=np.int64))
    opens = np.concatenate(([True], starts[1:] > stops[:-1]))
    closes = np.concatenate((opens[1:], [True]))
    starts, stops = starts[opens], stops[closes]
    offsets = np.searchsorted(starts, np.arange(owners + 1, dtype=np.int64) << bits)
    mask = (np.int64(1) << bits) - 1
    lift = 2 * (LINE_ORDER - depth)
    return SpanTable((starts & mask) << lift, (stops & mask) << lift, offsets.astype(np.int64))


def _chunks(pieces: Pieces, order: int) -> list[slice]:
    """Cut the pieces into runs of whole owners with a bounded number of pairs."""
    # About three undecided cells per cell width of perimeter, four children each.
    pairs = 60 + 12 * np.sqrt(pieces.edge_rad2 * 4) / cell_width_rad(order)
    first = np.flatnonzero(np.diff(pieces.owner, prepend=-1))
    before = np.concatenate(([0.0], np.cumsum(pairs)))[first]
    group = (before // _PAIRS_AT_ONCE).astype(np.int64)
    starts = first[np.flatnonzero(np.diff(group, prepend=-1))]
    stops = np.append(starts[1:], len(pieces))
    return [slice(int(a), int(b)) for a, b in zip(starts, stops)]


def rasterise(
    pieces: Pieces,
    owners: int,
    order: int,
    within: Spans | None = None,
    deeper: Sequence[Spans] = (),
) -> Raster:
    """Rasterise footprints at one working order.

    Parameters
    ----------
    pieces : Pieces
        Convex pieces with owners in [0, owners), not decreasing.
    owners : int
        Number of footprints.
    order : int
        Working order, 0 to 24.
    within : Spans, optional
        Only sky that meets this region needs to be right; elsewhere the result
        is anything.
    deeper : sequence of Spans
        Where to go on below the working order: a cell that is undecided there
        and meets the first region is split; those of its children that are
        undecided and meet the second are split again, and so on.

    Returns
    -------
    Raster
        The three regions of every footprint.
    """
    runs = _chunks(pieces, order)
    stops = [int(pieces.owner[rows.stop - 1]) + 1 for rows in runs]

    def tables(run: tuple[slice, int, int]) -> tuple[SpanTable, SpanTable, SpanTable]:
        rows, first, stop = run
        part = pieces.take(np.arange(rows.start, rows.stop), pieces.owner[rows] - first)
        return _three_tables(part, stop - first, order, within, deeper)

    found = side_by_side(tables, zip(runs, [0, *stops], stops))
    none = np.empty(0, dtype=np.int64)
    left = owners - max(stops, default=0)
    found.append((SpanTable(none, none, np.zeros(left + 1, dtype=np.int64)),) * 3)
    centre, inner, outer = (SpanTable.stack(one) for one in zip(*found))
    return Raster(centre, inner, outer, np.full(owners, order, dtype=np.int64))


def _three_tables(
    pieces: Pieces, owners: int, order: int, within: Spans | None, deeper: Sequence[Spans]
) -> tuple[SpanTable, SpanTable, SpanTable]:
    """Return the centre rule's regions, the inner and the outer ones of a run of pieces."""
    kept, edge, centred = _descend(pieces, order, within, deeper)

    def table(which: Bools) -> SpanTable:
        return _to_table(
            pieces.owner[np.concatenate((kept.piece, edge.piece[which]))],
            np.concatenate((kept.order, edge.order[which])),
            np.concatenate((kept.cell, edge.cell[which])),
            owners,
            order + len(deeper),
        )

    return table(centred), table(np.zeros_like(centred)), table(np.ones_like(centred))


def rasterise_shape(shape: Shape, order: int, within: Spans | None = None) -> Raster:
    """Rasterise one shape of any kind at one working order; a raster of one owner.

    ``within`` is as in `rasterise`.
    """
    if isinstance(shape, Spans):
        return Raster.exact(shape)
    if isinstance(shape, Circle | Polygon):
        return rasterise(pieces_of_shape(shape, 0), 1, order, within)
    if isinstance(shape, NotIn):
        part = rasterise_shape(shape.part, order, within)
        centre, inner, outer = (
            SpanTable.from_regions([table.region(0).complement()])
            for table in (part.centre, part.outer, part.inner)
        )
        return Raster(centre, inner, outer, part.order)
    parts = [rasterise_shape(part, order, within) for part in shape.parts]
    if isinstance(shape, AnyOf):
        return stack_rasters(parts).combined()
    assert isinstance(shape, AllOf)
    whole = parts[0]
    for part in parts[1:]:
        whole = Raster(
            whole.centre.clip(part.centre.region(0)),
            whole.inner.clip(part.inner.region(0)),
            whole.outer.clip(part.outer.region(0)),
            np.maximum(whole.order, part.order),
        )
    return whole
