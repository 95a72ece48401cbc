"""A campaign's fields laid in other ways than the camera and the log say.

Coverage is often estimated from simpler fields than those on the sky: the outline
of a mosaic without its gaps, a circle around the corners, a width in degrees of
right ascension. Such fields are laid here at the same pointings, so that a number
that was found with them can be recognised.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import ConvexHull

from skytally.cameras import CircleCamera, MosaicCamera, lay_camera
from skytally.campaign_data import LoadedCampaign, Telescope
from skytally.covered import Coverage
from skytally.footprints import clip_raster
from skytally.grouping import sum_by
from skytally.raster import (
    Pieces,
    cell_width_rad,
    pieces_of_rings,
    pieces_of_shape,
    rasterise,
)
from skytally.shapes import AnyOf, Circle, Polygon, Shape, lonlat_to_vector
from skytally.spans import Ints, SpanTable

__all__ = ["OtherField", "OtherFields"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Relative standard error that the area of all fields together may have, at first and at last,
# and what an edge adds to it per cell width and length (as for the working order).
_ROUGH_TARGET, _TARGET, _EDGE_ERROR = 1e-2, 5e-4, 0.25
_ORDERS = (8, 18)
# Nearer to a pole than this a field's corners have no plain right ascension.
_POLE_DEG = 89.9


class OtherField(StrEnum):
    """What a field is taken to be."""

    RECTANGLE = "rectangle"  # the smallest rectangle around the detectors, unmasked
    OUTLINE = "outline"  # their convex outline, unmasked
    CIRCLE = "circle"  # the circle through the farthest corner, unmasked
    NARROW = "narrow"  # offsets to the east counted in degrees of right ascension


@dataclass(frozen=True, eq=False)
class OtherFields:
    """The fields of a campaign, laid in other ways when first asked for.

    Attributes
    ----------
    campaign : LoadedCampaign
        Cameras, regions, masks.
    coverage : Coverage
        The footprints as they are.
    """

    campaign: LoadedCampaign
    coverage: Coverage

    @cached_property
    def _known(self) -> dict[tuple[OtherField, int, bool], SpanTable | None]:
        return {}

    def of(self, kind: OtherField, telescope: int, rough: bool) -> SpanTable | None:
        """Lay the fields of one telescope, one owner per footprint of its own, in order.

        None where that changes nothing: the camera is what is asked for, or
        regions were given outright. ``rough`` allows an error of a tenth for less
        work.
        """
        if kind is OtherField.OUTLINE and _is_rectangular(self.campaign.telescopes[telescope]):
            kind = OtherField.RECTANGLE
        key = kind, telescope, rough
        if key not in self._known:
            self._known[key] = self._lay(kind, telescope, _ROUGH_TARGET if rough else _TARGET)
        return self._known[key]

    def as_laid(self, telescope: int) -> SpanTable:
        """Return the fields of one telescope as they are, one owner per footprint of its own."""
        footprints = self.coverage.footprints
        return footprints.raster.centre.take(np.flatnonzero(footprints.telescope == telescope))

    def _lay(self, kind: OtherField, index: int, target: float) -> SpanTable | None:
        footprints = self.coverage.footprints
        mine = np.flatnonzero(footprints.telescope == index)
        telescope = self.campaign.telescopes[index]
        pieces = _pieces(kind, telescope, *self._examples(index, mine))
        if pieces is None:
            return None
        changed = np.unique(pieces.owner)
        pieces = pieces.take(np.arange(len(pieces)), np.searchsorted(changed, pieces.owner))
        raster = rasterise(pieces, changed.size, _order(pieces, changed.size, target))
        searchable, mask = footprints.clips[index]
        raster = clip_raster(raster, (searchable, mask if kind is OtherField.NARROW else None))
        pick = mine.copy()
        pick[changed] = footprints.telescope.size + np.arange(changed.size)
        return SpanTable.stack([footprints.raster.centre, raster.centre]).take(pick)

    def _examples(self, index: int, mine: Ints) -> tuple[tuple[Floats, Floats, Floats], list[str]]:
        """Pointing and region text of each footprint of a telescope."""
        o, log = self.coverage.observations, self.campaign.telescopes[index].log
        _, first = np.unique(o.footprint, return_index=True)
        example = first[mine]
        place = {int(row): number for number, row in enumerate(log.row)}
        texts = [str(log.region[place[int(o.row[exposure])]]) for exposure in example]
        return (o.ra_deg[example], o.dec_deg[example], o.angle_deg[example]), texts


def _is_rectangular(telescope: Telescope) -> bool:
    """Tell whether the outline of a telescope's camera, if it has one, is a plain rectangle."""
    if not isinstance(telescope.camera, MosaicCamera):
        return True
    corners = np.concatenate(telescope.camera.corners)
    sides = np.ptp(corners, axis=0)
    # In two dimensions what the library calls volume is the area.
    return bool(ConvexHull(corners).volume >= sides[0] * sides[1] * (1 - 1e-9))


def _order(pieces: Pieces, owners: int, target: float) -> int:
    """Order at which the area of all fields together is as good as it must be."""
    number = np.bincount(pieces.owner, minlength=owners)
    edge = np.sqrt(sum_by(pieces.owner, pieces.edge_rad2, owners)) * number**0.25
    relative = _EDGE_ERROR * edge / sum_by(pieces.owner, pieces.area_sr, owners)
    width = target * np.sqrt(owners) / float(np.mean(relative))
    return int(np.clip(np.ceil(np.log2(cell_width_rad(0) / width)), *_ORDERS))


def _pieces(
    kind: OtherField,
    telescope: Telescope,
    pointings: tuple[Floats, Floats, Floats],
    texts: Sequence[str],
) -> Pieces | None:
    """Pieces of the fields that differ, owners rising; None where none does."""
    parts: list[Pieces] = []
    by_camera = np.flatnonzero([not text for text in texts])
    if by_camera.size:
        laid = _by_camera(kind, telescope, *(value[by_camera] for value in pointings))
        if laid is not None:
            parts.append(laid.take(np.arange(len(laid)), by_camera[laid.owner]))
    for owner, text in enumerate(texts):
        shape = _around(kind, telescope.regions[text]) if text else None
        if shape is not None:
            parts.append(pieces_of_shape(shape, owner))
    if not parts:
        return None
    pieces = Pieces.stack(parts)
    by_owner = np.argsort(pieces.owner, kind="stable")
    return pieces.take(by_owner, pieces.owner[by_owner])


def _by_camera(
    kind: OtherField, telescope: Telescope, ra_deg: Floats, dec_deg: Floats, angle_deg: Floats
) -> Pieces | None:
    camera = telescope.camera
    masked = bool(telescope.mask)
    if not isinstance(camera, MosaicCamera):
        return None
    if kind is OtherField.NARROW:
        return _narrow(camera, ra_deg, dec_deg, angle_deg)
    corners = np.concatenate(camera.corners)
    if kind is OtherField.CIRCLE:
        radius = np.degrees(np.arctan(np.radians(np.linalg.norm(corners, axis=1).max())))
        return lay_camera(CircleCamera(float(radius)), ra_deg, dec_deg, angle_deg)
    if len(camera.convex_corners) == 1 and not masked:
        return None
    if kind is OtherField.OUTLINE:
        ring = corners[ConvexHull(corners).vertices]
    else:
        (x0, y0), (x1, y1) = corners.min(axis=0), corners.max(axis=0)
        ring = np.array([[x0, y0], [x1, y0], [x1, y1], [x0, y1]])
    return lay_camera(MosaicCamera((ring,), ("field",)), ra_deg, dec_deg, angle_deg)


def _narrow(
    camera: MosaicCamera, ra_deg: Floats, dec_deg: Floats, angle_deg: Floats
) -> Pieces | None:
    """Lay corners at right ascension and declination plus their offsets in degrees."""
    owner = np.arange(ra_deg.size)
    cos, sin = np.cos(np.radians(angle_deg))[:, None], np.sin(np.radians(angle_deg))[:, None]
    parts = []
    for ring in camera.convex_corners:
        xi, eta = ring[None, :, 0], ring[None, :, 1]
        lat = dec_deg[:, None] + eta * cos - xi * sin
        if np.abs(lat).max() > _POLE_DEG:
            return None
        lon = ra_deg[:, None] + xi * cos + eta * sin
        parts.append(pieces_of_rings(lonlat_to_vector(lon, lat), owner))
    return Pieces.stack(parts)


def _around(kind: OtherField, shape: Shape) -> Polygon | Circle | None:
    """Outline of a region made of polygons, or a circle around it; None for any other region."""
    polygons = _polygons(shape)
    if not polygons or kind is OtherField.NARROW:
        return None
    vertices = np.concatenate([polygon.vertices_deg for polygon in polygons])
    vector = lonlat_to_vector(vertices[:, 0], vertices[:, 1])
    middle = vector.sum(axis=0)
    middle /= np.linalg.norm(middle)
    depth = vector @ middle
    if kind is OtherField.CIRCLE:
        lon, lat = np.arctan2(middle[1], middle[0]) % (2 * np.pi), np.arcsin(middle[2])
        return Circle(*(float(np.degrees(x)) for x in (lon, lat, np.arccos(depth.min()))))
    if depth.min() <= 0:
        return None
    east = np.cross(middle, np.eye(3)[np.abs(middle).argmin()])
    plane = np.stack((vector @ east, vector @ np.cross(middle, east)), axis=1) / depth[:, None]
    return Polygon(vertices[ConvexHull(plane).vertices])


def _polygons(shape: Shape) -> list[Polygon]:
    """Polygons whose union is the shape; none for anything else."""
    if isinstance(shape, Polygon):
        return [shape]
    if not isinstance(shape, AnyOf):
        return []
    parts = [_polygons(part) for part in shape.parts]
    return [one for part in parts for one in part] if all(parts) else []
