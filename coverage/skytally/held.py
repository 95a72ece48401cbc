"""Which footprints held a position, exactly, and how far it lay from their edges.

The spans of the outer bracket are an index on the line: they name every footprint
that may hold a position. The answer itself comes from the shapes, not from their
cells: a camera's convex pieces, a region's circles and polygons, the masks. Only a
region that was given in cells (a MOC) is known to no better than these.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from astropy import units as u
from astropy_healpix import lonlat_to_healpix
from numpy.typing import NDArray

from skytally.cameras import MosaicCamera, lay_outlines
from skytally.campaign_data import LoadedCampaign, Telescope
from skytally.errors import UsageError
from skytally.footprints import Footprints
from skytally.grouping import expand_ranges
from skytally.raster import Pieces, convex_parts, pieces_of_shape
from skytally.shapes import AnyOf, Circle, NotIn, Polygon, Shape, lonlat_to_vector
from skytally.spans import LINE_ORDER, Ints, Spans, SpanTable

__all__ = [
    "PAIRS_LIMIT",
    "Held",
    "cell_order_of",
    "find_held",
    "line_of",
    "region_texts",
    "shape_depth",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

PAIRS_LIMIT = 20_000_000
"""Pairs of position and footprint that one call may look at: a few gigabytes."""

# A place on an edge may come out this far outside by rounding alone, radians.
_ROUNDING = 1e-14
# Pairs of position and piece looked at together: bounds memory, feeds the cache.
_PAIRS_AT_ONCE = 500_000


@dataclass(frozen=True, eq=False)
class Held:
    """Pairs of position and footprint that held it, positions rising.

    Attributes
    ----------
    position, footprint : int64 arrays, shape (m,)
        Index of the position as given, and of the footprint.
    edge_rad : float64 array, shape (m,)
        Distance along the sphere to the nearest edge of the detector or region
        that held it, or of a mask; NaN where the edge is not known (a region
        given in cells). Where several detectors held it, that of the one in
        which it lies deepest.
    """

    position: Ints
    footprint: Ints
    edge_rad: Floats


def line_of(ra_deg: Floats, dec_deg: Floats) -> Ints:
    """Positions on the line of directions (ICRS, degrees), shape (n,)."""
    cell = lonlat_to_healpix(ra_deg * u.deg, dec_deg * u.deg, 1 << LINE_ORDER, order="nested")
    return np.asarray(cell, dtype=np.int64)


def find_held(
    campaign: LoadedCampaign, footprints: Footprints, ra_deg: Floats, dec_deg: Floats
) -> Held:
    """Find every footprint that held each position.

    Parameters
    ----------
    campaign : LoadedCampaign
        Whose cameras, regions and masks the footprints were laid from.
    footprints : Footprints
        As laid, refined or not.
    ra_deg, dec_deg : float64 arrays, shape (n,)
        Positions, ICRS.

    Raises
    ------
    UsageError
        If there are more than `PAIRS_LIMIT` pairs to look at.
    """
    vector, line = lonlat_to_vector(ra_deg, dec_deg), line_of(ra_deg, dec_deg)
    position, footprint = _candidates(footprints.raster.outer, line)
    xyz = vector[position]
    inside = np.zeros(position.size, dtype=bool)
    edge = np.full(position.size, np.nan)
    texts = region_texts(campaign, footprints)
    bounds = np.searchsorted(
        footprints.telescope[footprint], np.arange(len(campaign.telescopes) + 1)
    )
    for index, telescope in enumerate(campaign.telescopes):
        rows = np.arange(bounds[index], bounds[index + 1])
        by_camera = texts[footprint[rows]] == ""
        camera = rows[by_camera]
        inside[camera], edge[camera] = _in_camera(
            telescope, footprints, footprint[camera], xyz[camera]
        )
        for part in _runs(footprint, rows[~by_camera]):
            shape = telescope.regions[texts[footprint[part[0]]]]
            inside[part], edge[part] = shape_depth(shape, xyz[part], line[position[part]])
        # Searchable regions are cells themselves: the candidates are cut to them already.
        _apply_mask(telescope, rows[inside[rows]], position, vector, line, inside, edge)
    kept = np.flatnonzero(inside)
    kept = kept[np.lexsort((footprint[kept], position[kept]))]
    return Held(position[kept], footprint[kept], edge[kept])


def _candidates(table: SpanTable, line: Ints) -> tuple[Ints, Ints]:
    """Pairs of position and region that may hold it, regions rising."""
    rank = np.argsort(line)
    ordered = line[rank]
    first = np.searchsorted(ordered, table.starts, side="left")
    count = np.searchsorted(ordered, table.stops, side="left") - first
    total = int(count.sum())
    if total > PAIRS_LIMIT:
        raise UsageError(
            f"these positions lie in {total:,} footprints, counted one by one; "
            f"expected at most {PAIRS_LIMIT:,}",
            remedy="Ask about fewer positions at a time.",
        )
    span, place = expand_ranges(first, count)
    return rank[place], table.owner[span]


def region_texts(campaign: LoadedCampaign, footprints: Footprints) -> NDArray[np.object_]:
    """Region cell of the log behind each footprint, (footprints,); empty for a camera's."""
    o = footprints.observations
    _, example = np.unique(o.footprint, return_index=True)
    texts = np.full(footprints.telescope.size, "", dtype=object)
    for index, telescope in enumerate(campaign.telescopes):
        mine = np.flatnonzero(footprints.telescope == index)
        by_row = np.argsort(telescope.log.row)
        place = np.searchsorted(telescope.log.row[by_row], o.row[example[mine]])
        texts[mine] = telescope.log.region[by_row[place]]
    return texts


def _runs(footprint: Ints, rows: Ints) -> Iterator[Ints]:
    """Cut rows into runs of one footprint each."""
    if rows.size:
        yield from np.split(rows, np.flatnonzero(np.diff(footprint[rows])) + 1)


# --- cameras ---------------------------------------------------------------------------


def _in_camera(
    telescope: Telescope, footprints: Footprints, footprint: Ints, xyz: Floats
) -> tuple[Bools, Floats]:
    """Tell whether directions lie in a detector of a pointing, and how deep, (m,) each."""
    depth = np.full(footprint.size, -np.inf)
    first = np.searchsorted(footprints.pieces.owner, footprint)
    count = footprints.pieces_per_footprint[footprint]
    group = np.cumsum(count) // _PAIRS_AT_ONCE
    for block in _runs(group, np.arange(footprint.size)):
        pair, piece = expand_ranges(first[block], count[block])
        pair = block[pair]
        near = _near(footprints.pieces, piece, xyz[pair])
        pair, piece = pair[near], piece[near]
        deep = _depth_in_pieces(footprints.pieces, piece, xyz[pair])
        held = deep >= -_ROUNDING
        pair, deep = pair[held], deep[held]
        part = piece[held] - first[pair]
        _measure_split_detectors(telescope, footprints, footprint[pair], part, xyz[pair], deep)
        np.maximum.at(depth, pair, deep)
    inside = depth > -np.inf
    return inside, np.where(inside, np.maximum(depth, 0.0), np.nan)


def _near(pieces: Pieces, piece: Ints, xyz: Floats) -> Bools:
    """Tell which directions lie in the circle around their piece."""
    limit = np.cos(np.minimum(pieces.bound_rad, np.pi)) - _ROUNDING
    along = np.einsum("nc,nc->n", pieces.middle[piece], xyz)
    return np.asarray(along >= limit[piece])


def _depth_in_pieces(pieces: Pieces, piece: Ints, xyz: Floats) -> Floats:
    """How far inside its convex piece each direction lies, radians; negative outside.

    Inside, the perpendicular to the nearest of the caps' edges ends on the
    piece's own boundary, so it is the distance to that.
    """
    depth = np.full(piece.size, np.inf)
    for cap in range(pieces.normal.shape[1]):
        normal = pieces.normal[piece, cap]
        np.minimum(depth, pieces.radius_rad[piece] - _angle(normal, xyz), out=depth)
    return depth


def _angle(one: Floats, other: Floats) -> Floats:
    """Angle between unit vectors (..., 3), accurate at any size."""
    across = np.linalg.norm(np.cross(one, other), axis=-1)
    return np.asarray(np.arctan2(across, np.sum(one * other, axis=-1)))


def _measure_split_detectors(
    telescope: Telescope,
    footprints: Footprints,
    footprint: Ints,
    part: Ints,
    xyz: Floats,
    depth: Floats,
) -> None:
    """Measure anew, in place, where a detector is no single convex piece.

    The cuts between its pieces are no edges. ``part`` is the number of the
    piece among those of its footprint.
    """
    camera = telescope.camera
    if not isinstance(camera, MosaicCamera) or len(camera.convex_corners) == len(camera.corners):
        return
    o = footprints.observations
    _, example = np.unique(o.footprint, return_index=True)
    number = [len(convex_parts(np.asarray(ring, float))) for ring in camera.corners]
    detector = np.repeat(np.arange(len(number)), number)[part]
    for index in np.flatnonzero(np.array(number) > 1):
        rows = np.flatnonzero(detector == index)
        laid, which = np.unique(footprint[rows], return_inverse=True)
        if laid.size == 0:
            continue
        alone = MosaicCamera((camera.corners[index],), (camera.names[index],))
        at = example[laid]
        rings = np.stack(lay_outlines(alone, o.ra_deg[at], o.dec_deg[at], o.angle_deg[at]))
        vertex = lonlat_to_vector(rings[..., 0], rings[..., 1])
        depth[rows] = _distance_to_ring(vertex[which], xyz[rows])


def _distance_to_ring(vertex: Floats, xyz: Floats) -> Floats:
    """Distance (radians) to the nearest edge of rings.

    Parameters
    ----------
    vertex : float64 array, shape (n, m, 3) or (1, m, 3)
        Corners in order, joined by great circles.
    xyz : float64 array, shape (n, 3)
        One direction for each ring, or many for one.
    """
    following = np.roll(vertex, -1, axis=1)
    normal = np.cross(vertex, following)
    normal /= np.linalg.norm(normal, axis=2, keepdims=True)
    here = xyz[:, None, :]
    # The foot of the perpendicular lies on the arc between the planes through its ends.
    onward = np.sum(np.cross(normal, vertex) * here, axis=2) >= 0
    back = np.sum(np.cross(following, normal) * here, axis=2) >= 0
    to_circle = np.abs(np.pi / 2 - _angle(normal, here))
    to_arc = np.where(onward & back, to_circle, _angle(vertex, here))
    return np.asarray(to_arc.min(axis=1))


# --- regions and masks -----------------------------------------------------------------


def shape_depth(shape: Shape, xyz: Floats, line: Ints) -> tuple[Bools, Floats]:
    """Tell whether directions lie in a shape, and how far they are from its edge.

    Parameters
    ----------
    shape : Shape
        Any.
    xyz : float64 array, shape (n, 3)
        Directions.
    line : int64 array, shape (n,)
        The same as positions on the line, for regions given in cells.

    Returns
    -------
    inside : bool array, shape (n,)
        A place on the edge counts as inside.
    edge_rad : float64 array, shape (n,)
        Distance to the edge; NaN where cells decide. Inside a union it is that
        of the part in which a place lies deepest.
    """
    if isinstance(shape, Spans):
        return shape.contains(line), np.full(line.size, np.nan)
    if isinstance(shape, Circle | Polygon):
        return _simple_depth(shape, xyz)
    if isinstance(shape, NotIn):
        inside, edge = shape_depth(shape.part, xyz, line)
        return ~inside, edge
    found = [shape_depth(part, xyz, line) for part in shape.parts]
    within = np.array([one[0] for one in found]).reshape(-1, line.size)
    edges = np.array([one[1] for one in found]).reshape(-1, line.size)
    union = isinstance(shape, AnyOf)
    # A union holds a place if one part does, an intersection lacks it if one
    # part does: then the deciding part with the farthest edge tells. Else all
    # parts agree, and the nearest edge does.
    deciding = within == union
    decided = deciding.any(axis=0)
    farthest = np.fmax.reduce(np.where(deciding, edges, np.nan), axis=0, initial=np.nan)
    nearest = edges.min(axis=0, initial=np.inf)
    return decided == union, np.where(decided, farthest, nearest)


def _simple_depth(shape: Circle | Polygon, xyz: Floats) -> tuple[Bools, Floats]:
    pieces = pieces_of_shape(shape, 0)
    depth = np.full(len(xyz), -np.inf)
    for piece in range(len(pieces)):
        which = np.full(len(xyz), piece)
        np.maximum(depth, _depth_in_pieces(pieces, which, xyz), out=depth)
    inside = depth >= -_ROUNDING
    if isinstance(shape, Circle):
        return inside, np.abs(depth)
    vertex = lonlat_to_vector(shape.vertices_deg[:, 0], shape.vertices_deg[:, 1])
    return inside, _distance_to_ring(vertex[None], xyz)


def _apply_mask(
    telescope: Telescope,
    rows: Ints,
    position: Ints,
    vector: Floats,
    line: Ints,
    inside: Bools,
    edge: Floats,
) -> None:
    """Take out, in place, what a telescope's mask takes; its edges count as edges.

    ``rows`` are the pairs that its footprints held. Edges of masks given in
    cells are left out: they are not known.
    """
    here, which = np.unique(position[rows], return_inverse=True)
    # A mask farther than every edge of a position changes nothing there.
    reach = np.zeros(here.size)
    np.fmax.at(reach, which, edge[rows])
    masked, distance = np.zeros(here.size, dtype=bool), np.full(here.size, np.inf)
    for shape in telescope.mask:
        near = np.flatnonzero(_within_reach(shape, vector[here], reach))
        taken, away = shape_depth(shape, vector[here[near]], line[here[near]])
        masked[near] |= taken
        distance[near] = np.fmin(distance[near], away)
    inside[rows[masked[which]]] = False
    # minimum, unlike fmin, keeps what is not known as such.
    edge[rows] = np.minimum(edge[rows], distance[which])


def _within_reach(shape: Shape, xyz: Floats, reach: Floats) -> Bools:
    """Tell which directions may lie in a shape or closer to it than their reach."""
    if isinstance(shape, Circle):
        middle = lonlat_to_vector(shape.lon_deg, shape.lat_deg)
        bound = np.radians(shape.radius_deg)
    elif isinstance(shape, Polygon):
        vertex = lonlat_to_vector(shape.vertices_deg[:, 0], shape.vertices_deg[:, 1])
        middle = vertex.sum(axis=0)
        middle /= np.linalg.norm(middle)
        bound = float(_angle(vertex, middle).max())
    else:
        return np.ones(len(xyz), dtype=bool)
    limit = np.cos(np.minimum(bound + reach, np.pi)) - _ROUNDING
    return np.asarray(xyz @ middle >= limit)


def cell_order_of(shape: Shape) -> int | None:
    """Order of the finest cell in a shape's parts given in cells; None if there are none."""
    if isinstance(shape, Spans):
        lowest = shape.edges & -shape.edges  # the lowest bit set tells the cell's size
        bits = int(np.log2(lowest[lowest > 0].min())) if (lowest > 0).any() else 2 * LINE_ORDER
        return LINE_ORDER - min(bits // 2, LINE_ORDER)
    if isinstance(shape, Circle | Polygon):
        return None
    parts = (shape.part,) if isinstance(shape, NotIn) else shape.parts
    orders = [order for order in map(cell_order_of, parts) if order is not None]
    return max(orders, default=None)
