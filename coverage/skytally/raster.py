"""Shapes on the sky turned into spans: the centre rule, with a bracket on both sides.

Everything is an intersection of spherical caps: a great-circle edge is a cap of
90°, a circle is one cap. A convex piece is a list of caps; any simple polygon is
a few convex pieces. One descent serves them all: a HEALPix cell farther than its
own radius inside every cap is kept whole, one farther than that outside any cap
is dropped, the rest are split, down to the working order, where the cell's
centre decides. The cells still undecided there are the bracket: the exact shape
holds at least the kept cells and at most these as well.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from astropy_healpix import healpix_to_xyz
from numpy.typing import NDArray

from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon, Shape, lonlat_to_vector
from skytally.spans import LINE_END, LINE_ORDER, Ints, Spans, SpanTable, cell_to_span

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
class Pieces:
    """Convex pieces of footprints, each an intersection of spherical caps.

    Attributes
    ----------
    normal : float64 array, shape (p, k, 3)
        Unit vectors to the caps' centres; the first is repeated where a piece
        has fewer caps than others.
    radius_rad : float64 array, shape (p,)
        Radius of a piece's caps: π/2 for great-circle edges, else the circle's.
    middle : float64 array, shape (p, 3)
        Centre of a circle around the piece.
    bound_rad : float64 array, shape (p,)
        Its radius.
    owner : int64 array, shape (p,)
        Footprint of each piece, not decreasing.
    area_sr, edge_rad2 : float64 arrays, shape (p,)
        Solid angle, and the sum of the squared lengths of the edges: what the
        error of the centre rule scales with.
    """

    normal: Floats
    radius_rad: Floats
    middle: Floats
    bound_rad: Floats
    owner: Ints
    area_sr: Floats
    edge_rad2: Floats

    def __len__(self) -> int:
        return int(self.owner.size)

    def take(self, which: Ints | Bools, owner: Ints) -> Pieces:
        """Return the pieces named, with new owners."""
        return Pieces(
            self.normal[which],
            self.radius_rad[which],
            self.middle[which],
            self.bound_rad[which],
            owner,
            self.area_sr[which],
            self.edge_rad2[which],
        )

    @classmethod
    def stack(cls, parts: list[Pieces]) -> Pieces:
        """Put pieces one after the other; owners are kept, caps padded to one number."""
        caps = max((p.normal.shape[1] for p in parts), default=1)
        normal = [
            np.concatenate((p.normal, *[p.normal[:, :1]] * (caps - p.normal.shape[1])), axis=1)
            for p in parts
        ]
        none = np.empty(0)
        return cls(
            np.concatenate([np.empty((0, caps, 3)), *normal]),
            np.concatenate([none, *(p.radius_rad for p in parts)]),
            np.concatenate([np.empty((0, 3)), *(p.middle for p in parts)]),
            np.concatenate([none, *(p.bound_rad for p in parts)]),
            np.concatenate([np.empty(0, dtype=np.int64), *(p.owner for p in parts)]),
            np.concatenate([none, *(p.area_sr for p in parts)]),
            np.concatenate([none, *(p.edge_rad2 for p in parts)]),
        )


def pieces_of_circles(centre: Floats, radius_rad: Floats, owner: Ints) -> Pieces:
    """Make pieces of circles: centres (p, 3), radii (p,) in radians."""
    perimeter = 2 * np.pi * np.sin(np.minimum(radius_rad, np.pi / 2))
    return Pieces(
        centre[:, None, :],
        radius_rad,
        centre,
        radius_rad,
        owner,
        2 * np.pi * (1 - np.cos(radius_rad)),
        perimeter**2 / 8,
    )


def pieces_of_rings(vertex: Floats, owner: Ints) -> Pieces:
    """Make pieces of convex rings with great-circle edges.

    Parameters
    ----------
    vertex : float64 array, shape (p, m, 3)
        Unit vectors of the corners in order, either winding.
    owner : int64 array, shape (p,)
        Footprint of each ring.
    """
    following = np.roll(vertex, -1, axis=1)
    normal = np.cross(vertex, following)
    normal /= np.linalg.norm(normal, axis=2, keepdims=True)
    middle = vertex.sum(axis=1)
    middle /= np.linalg.norm(middle, axis=1, keepdims=True)
    inward = np.sign(np.einsum("pkc,pc->p", normal, middle))
    chord = np.linalg.norm(vertex - middle[:, None, :], axis=2)
    return Pieces(
        normal * inward[:, None, None],
        np.full(normal.shape[0], np.pi / 2),
        middle,
        2 * np.arcsin(np.minimum(chord.max(axis=1) / 2, 1.0)),
        owner,
        _ring_area_sr(vertex, middle),
        np.sum((vertex - following) ** 2, axis=(1, 2)),
    )


def _ring_area_sr(vertex: Floats, middle: Floats) -> Floats:
    """Exact solid angle of convex rings (p, m, 3): fans of triangles about the middle.

    Triangle: tan(E/2) = |a·(b×c)| / (1 + a·b + b·c + c·a) (IEEE Trans. Biomed.
    Eng. 30 125, 1983, DOI 10.1109/TBME.1983.325207).
    """
    following = np.roll(vertex, -1, axis=1)
    a = middle[:, None, :]
    volume = np.abs(
        np.einsum("pmc,pmc->pm", np.cross(vertex, following), np.broadcast_to(a, vertex.shape))
    )
    below = (
        1
        + np.sum(a * vertex, axis=2)
        + np.sum(a * following, axis=2)
        + np.sum(vertex * following, axis=2)
    )
    return np.asarray(np.sum(2 * np.arctan2(volume, below), axis=1))


def convex_parts(ring: Floats) -> list[Ints]:
    """Split a simple plane polygon (m, 2) into convex rings of vertex numbers.

    A convex polygon is returned whole; any other is cut into triangles by
    clipping ears.
    """
    left = list(range(len(ring)))
    area2 = float(
        np.sum(ring[:, 0] * np.roll(ring[:, 1], -1) - np.roll(ring[:, 0], -1) * ring[:, 1])
    )
    if area2 < 0:
        left.reverse()

    def turn(i: int, j: int, k: int) -> float:
        (ax, ay), (bx, by), (cx, cy) = ring[i], ring[j], ring[k]
        return float((bx - ax) * (cy - by) - (by - ay) * (cx - bx))

    turns = [turn(left[i - 1], left[i], left[(i + 1) % len(left)]) for i in range(len(left))]
    if min(turns) >= -1e-12 * abs(area2):
        return [np.array(left)]
    parts: list[Ints] = []
    while len(left) > 3:
        best, quality = None, -np.inf
        for place, corner in enumerate(left):
            before, after = left[place - 1], left[(place + 1) % len(left)]
            here = turn(before, corner, after)
            if here <= quality or here < 0:
                continue
            others = [v for v in left if v not in (before, corner, after)]
            blocked = any(
                turn(before, corner, v) >= 0
                and turn(corner, after, v) >= 0
                and turn(after, before, v) >= 0
                for v in others
            )
            if not blocked:
                best, quality = place, here
        if best is None:  # only ears of no area are left
            break
        before, corner, after = left[best - 1], left[best], left[(best + 1) % len(left)]
        if quality > 0:
            parts.append(np.array([before, corner, after]))
        left.pop(best)
    if len(left) == 3 and turn(*left) > 0:
        parts.append(np.array(left))
    return parts


def pieces_of_shape(shape: Circle | Polygon, owner: int) -> Pieces:
    """Make the pieces of one circle or polygon."""
    if isinstance(shape, Circle):
        return pieces_of_circles(
            lonlat_to_vector([shape.lon_deg], [shape.lat_deg]),
            np.radians([shape.radius_deg]),
            np.array([owner]),
        )
    vertex = lonlat_to_vector(shape.vertices_deg[:, 0], shape.vertices_deg[:, 1])
    middle = vertex.sum(axis=0)
    middle /= np.linalg.norm(middle)
    east = np.cross(middle, np.eye(3)[np.abs(middle).argmin()])
    east /= np.linalg.norm(east)
    depth = vertex @ middle
    plane = np.stack((vertex @ east / depth, vertex @ np.cross(middle, east) / depth), axis=1)
    return Pieces.stack(
        [pieces_of_rings(vertex[None, part], np.array([owner])) for part in convex_parts(plane)]
    )


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


def _descend(pieces: Pieces, order: int, within: Spans | None) -> tuple[_Found, _Found, Bools]:
    """Descend from the base cells; return cells inside, undecided cells, their centre rule."""
    piece = np.repeat(np.arange(len(pieces)), 12)
    cell = np.tile(np.arange(12), len(pieces))
    found: list[tuple[Ints, int, Ints]] = []
    # Far above a piece's own size its caps decide nothing that its circle does not.
    size = float(pieces.bound_rad.max(initial=0.0))
    for level in range(order):
        if cell_radius_rad(level) > size:
            keep = _near(pieces, piece, level, cell)
        else:
            inside, touched, _ = _classify(pieces, piece, level, cell)
            found.append((piece[inside], level, cell[inside]))
            keep = touched & ~inside
        if within is not None:
            keep &= _meets(within, level, cell)
        piece, cell = _split(piece[keep], cell[keep])
    inside, touched, centred = _classify(pieces, piece, order, cell)
    found.append((piece[inside], order, cell[inside]))
    rest = touched & ~inside
    kept = _Found(
        np.concatenate([f[0] for f in found]),
        np.concatenate([np.full(f[0].size, f[1]) for f in found]),
        np.concatenate([f[2] for f in found]),
    )
    edge = _Found(piece[rest], np.full(int(rest.sum()), order), cell[rest])
    return kept, edge, centred[rest]


def _to_table(owner: Ints, order: Ints, cell: Ints, owners: int, depth: int) -> SpanTable:
    """Unite the cells of each owner; ``depth`` is the deepest order among them.

    The owner goes above the position in one integer, so that a plain sort of
    starts and of stops does the union of every owner at once.
    """
    bits = 2 * depth + 4
    base = owner << bits
    shift = 2 * (depth - order)
    starts = np.sort(base + (cell << shift))
    stops = np.sort(base + ((cell + 1) << shift))
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


def rasterise(pieces: Pieces, owners: int, order: int, within: Spans | None = None) -> Raster:
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

    Returns
    -------
    Raster
        The three regions of every footprint.
    """
    tables: list[tuple[SpanTable, SpanTable, SpanTable]] = []
    done = 0
    for rows in _chunks(pieces, order):
        end = int(pieces.owner[rows.stop - 1]) + 1
        part = pieces.take(np.arange(rows.start, rows.stop), pieces.owner[rows] - done)
        kept, edge, centred = _descend(part, order, within)
        inner = _to_table(part.owner[kept.piece], kept.order, kept.cell, end - done, order)
        picked = []
        for which in (centred, np.ones_like(centred)):
            picked.append(
                _to_table(
                    part.owner[np.concatenate((kept.piece, edge.piece[which]))],
                    np.concatenate((kept.order, edge.order[which])),
                    np.concatenate((kept.cell, edge.cell[which])),
                    end - done,
                    order,
                )
            )
        tables.append((picked[0], inner, picked[1]))
        done = end
    none = np.empty(0, dtype=np.int64)
    tables.append((SpanTable(none, none, np.zeros(owners - done + 1, dtype=np.int64)),) * 3)
    return Raster(
        SpanTable.stack(t[0] for t in tables),
        SpanTable.stack(t[1] for t in tables),
        SpanTable.stack(t[2] for t in tables),
        np.full(owners, order, dtype=np.int64),
    )


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
