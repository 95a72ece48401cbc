"""Camera shapes in their own tangent plane, and how a pointing lays them on the sky.

A camera's offsets (ξ to the east, η to the north, degrees) are gnomonic (TAN)
standard coordinates about the pointing, so straight edges are great circles.
The position angle turns the η axis from north towards east.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.raster import Pieces, convex_parts, pieces_of_circles, pieces_of_rings
from skytally.shapes import lonlat_to_vector

__all__ = ["Camera", "CircleCamera", "MosaicCamera", "lay_camera", "lay_outlines"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class CircleCamera:
    """A circular field: all directions within ``radius_deg`` of the pointing."""

    radius_deg: float

    @property
    def area_deg2(self) -> float:
        """Solid angle in square degrees: that of a spherical cap."""
        return float(np.degrees(np.degrees(2 * np.pi * (1 - np.cos(np.radians(self.radius_deg))))))


@dataclass(frozen=True, eq=False)
class MosaicCamera:
    """One or more polygonal detectors; a rectangle is the case of one.

    Attributes
    ----------
    corners : tuple of float64 arrays, shape (m, 2)
        Per detector, the ring of corner offsets (ξ to the east, η to the
        north, degrees in the gnomonic plane), first corner not repeated.
    names : tuple of str
        Detector names.
    """

    corners: tuple[NDArray[np.float64], ...]
    names: tuple[str, ...]

    @classmethod
    def rectangle(cls, width_deg: float, height_deg: float) -> MosaicCamera:
        """Return a single rectangle: width along ξ, height along η, full sides."""
        x, y = width_deg / 2, height_deg / 2
        return cls((np.array([[-x, -y], [x, -y], [x, y], [-x, y]]),), ("field",))

    @cached_property
    def convex_corners(self) -> tuple[Floats, ...]:
        """Convex rings that make up the detectors, each of shape (m, 2), degrees."""
        return tuple(
            ring[part] for ring in self.corners for part in convex_parts(np.asarray(ring, float))
        )

    @property
    def area_deg2(self) -> float:
        """Solid angle in square degrees, detectors summed (overlaps count twice)."""
        zero = np.zeros(1)
        pieces = lay_camera(self, zero, zero, zero)
        return float(np.degrees(np.degrees(pieces.area_sr.sum())))


Camera = CircleCamera | MosaicCamera


def _frame(ra_deg: Floats, dec_deg: Floats, angle_deg: Floats) -> tuple[Floats, Floats, Floats]:
    """Unit vectors (n, 3): the pointing, and the directions of ξ and η at it."""
    ra, dec, angle = np.radians(ra_deg), np.radians(dec_deg), np.radians(angle_deg)
    east = np.stack((-np.sin(ra), np.cos(ra), np.zeros_like(ra)), axis=1)
    north = np.stack((-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)), axis=1)
    cos, sin = np.cos(angle)[:, None], np.sin(angle)[:, None]
    return lonlat_to_vector(ra_deg, dec_deg), cos * east - sin * north, sin * east + cos * north


def _deproject(ring: Floats, frame: tuple[Floats, Floats, Floats]) -> Floats:
    """Directions (n, m, 3) of one ring of offsets (m, 2) for n pointings."""
    pointing, xi, eta = (axis[:, None, :] for axis in frame)
    offset = np.radians(ring)
    vector = pointing + offset[None, :, :1] * xi + offset[None, :, 1:] * eta
    return np.asarray(vector / np.linalg.norm(vector, axis=2, keepdims=True))


def lay_camera(camera: Camera, ra_deg: Floats, dec_deg: Floats, angle_deg: Floats) -> Pieces:
    """Lay a camera on the sky at n pointings.

    Parameters
    ----------
    camera : Camera
        The shape.
    ra_deg, dec_deg, angle_deg : float64 arrays, shape (n,)
        Pointings (ICRS) and position angles east of north.

    Returns
    -------
    Pieces
        With owners 0 … n − 1 in the order of the pointings.
    """
    owner = np.arange(ra_deg.size)
    if isinstance(camera, CircleCamera):
        radius = np.full(ra_deg.size, np.radians(camera.radius_deg))
        return pieces_of_circles(lonlat_to_vector(ra_deg, dec_deg), radius, owner)
    frame = _frame(ra_deg, dec_deg, angle_deg)
    pieces = Pieces.stack(
        [pieces_of_rings(_deproject(ring, frame), owner) for ring in camera.convex_corners]
    )
    by_owner = np.argsort(pieces.owner, kind="stable")
    return pieces.take(by_owner, pieces.owner[by_owner])


def lay_outlines(
    camera: Camera, ra_deg: Floats, dec_deg: Floats, angle_deg: Floats
) -> list[Floats]:
    """Outlines to draw: closed rings (m, 2) of ICRS lon, lat in degrees, detector by detector."""
    if isinstance(camera, CircleCamera):
        turn = np.linspace(0, 2 * np.pi, 36, endpoint=False)
        plane = np.degrees(np.tan(np.radians(min(camera.radius_deg, 89.0))))
        rings = [plane * np.stack((np.cos(turn), np.sin(turn)), axis=1)]
    else:
        rings = list(camera.corners)
    frame = _frame(ra_deg, dec_deg, angle_deg)
    laid = [_deproject(ring, frame) for ring in rings]
    outlines = []
    for pointing in range(ra_deg.size):
        for vector in laid:
            x, y, z = vector[pointing].T
            lon = np.degrees(np.arctan2(y, x)) % 360
            outlines.append(np.stack((lon, np.degrees(np.arcsin(np.clip(z, -1, 1)))), axis=1))
    return outlines
