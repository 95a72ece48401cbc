"""Shapes on the sky, as regions are described before they become spans."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from skytally.errors import RegionError
from skytally.spans import Spans

__all__ = ["AllOf", "AnyOf", "Circle", "NotIn", "Polygon", "Shape", "lonlat_to_vector"]


def lonlat_to_vector(lon_deg: ArrayLike, lat_deg: ArrayLike) -> NDArray[np.float64]:
    """Unit vectors, shape (..., 3), of directions in degrees."""
    lon, lat = np.radians(np.asarray(lon_deg, float)), np.radians(np.asarray(lat_deg, float))
    return np.stack((np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)), axis=-1)


@dataclass(frozen=True)
class Circle:
    """All directions within a radius (degrees, 0 < radius ≤ 180) of a centre (ICRS, degrees)."""

    lon_deg: float
    lat_deg: float
    radius_deg: float

    def __post_init__(self) -> None:
        values = (self.lon_deg, self.lat_deg, self.radius_deg)
        if not all(np.isfinite(values)):
            raise RegionError(
                f"a circle has a number that is not finite: {values}",
                remedy="Give centre and radius as plain degrees.",
            )
        if abs(self.lat_deg) > 90:
            raise RegionError(
                f"latitude {self.lat_deg:g} is outside -90 to 90",
                remedy="Give declinations in degrees.",
            )
        if not 0 < self.radius_deg <= 180:
            raise RegionError(
                f"a circle's radius is {self.radius_deg:g}, expected above 0 and up to 180 degrees",
                remedy="Give the radius, not the diameter, in degrees.",
            )


@dataclass(frozen=True, eq=False)
class Polygon:
    """A simple polygon with great-circle edges; either winding means the smaller side.

    Attributes
    ----------
    vertices_deg : float64 array, shape (m, 2), m ≥ 3
        Longitude and latitude (ICRS, degrees); the first vertex is not repeated.

    Raises
    ------
    RegionError
        If a vertex is not finite or off the sphere, two neighbours coincide,
        fewer than three are left, edges cross (a bow-tie), or the ring does
        not fit into an open hemisphere.
    """

    vertices_deg: NDArray[np.float64]

    def __post_init__(self) -> None:
        ring = np.asarray(self.vertices_deg, dtype=float)
        if ring.ndim != 2 or ring.shape[1] != 2 or not np.isfinite(ring).all():
            raise RegionError(
                "a polygon has a vertex that is not a pair of finite numbers",
                remedy="Give every vertex as longitude and latitude in degrees.",
            )
        if np.abs(ring[:, 1]).max(initial=0) > 90:
            worst = ring[np.abs(ring[:, 1]).argmax(), 1]
            raise RegionError(
                f"latitude {worst:g} is outside -90 to 90",
                remedy="Give vertices as longitude, latitude in degrees.",
            )
        vector = lonlat_to_vector(ring[:, 0], ring[:, 1])
        differs = np.linalg.norm(vector - np.roll(vector, 1, axis=0), axis=1) > 1e-10
        ring, vector = ring[differs], vector[differs]
        if len(ring) < 3:
            raise RegionError(
                f"a polygon has {len(ring)} distinct vertices, expected at least 3",
                remedy="List each corner once, in order around the field.",
            )
        middle = vector.sum(axis=0)
        if (
            np.linalg.norm(middle) < 1e-9
            or (vector @ middle <= 1e-6 * np.linalg.norm(middle)).any()
        ):
            raise RegionError(
                "a polygon does not fit into a hemisphere, so its inside is ambiguous",
                remedy="Split it into smaller polygons, or give a MOC.",
            )
        if _crosses_itself(vector):
            raise RegionError(
                "a polygon's edges cross (a bow-tie)",
                remedy="List the corners in order around the field.",
            )
        object.__setattr__(self, "vertices_deg", ring)


def _crosses_itself(vector: NDArray[np.float64]) -> bool:
    """Tell whether two edges that are not neighbours meet; vector (m, 3) in a hemisphere."""
    count = len(vector)
    if count < 4:
        return False
    middle = vector.sum(axis=0)
    middle /= np.linalg.norm(middle)
    east = np.cross(middle, np.eye(3)[np.abs(middle).argmin()])
    east /= np.linalg.norm(east)
    north = np.cross(middle, east)
    depth = vector @ middle
    # Great circles are straight in the gnomonic plane about the middle.
    plane = np.stack((vector @ east / depth, vector @ north / depth), axis=1)
    a, b = plane, np.roll(plane, -1, axis=0)

    def side(
        p: NDArray[np.float64], q: NDArray[np.float64], r: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Twice the signed area of p, q, r for all pairs, (m, m)."""
        along, across = q - p, r - p
        twice = along[..., 0] * across[..., 1] - along[..., 1] * across[..., 0]
        return np.asarray(twice, dtype=np.float64)

    a1, b1, a2, b2 = a[:, None], b[:, None], a[None], b[None]
    s1, s2 = np.sign(side(a1, b1, a2)), np.sign(side(a1, b1, b2))
    s3, s4 = np.sign(side(a2, b2, a1)), np.sign(side(a2, b2, b1))
    meets = (s1 * s2 <= 0) & (s3 * s4 <= 0) & ~((s1 == 0) & (s2 == 0))
    row, column = np.indices((count, count))
    apart = (row - column) % count
    return bool((meets & (apart != 0) & (apart != 1) & (apart != count - 1)).any())


@dataclass(frozen=True, eq=False)
class AnyOf:
    """The union of shapes."""

    parts: tuple[Shape, ...]


@dataclass(frozen=True, eq=False)
class AllOf:
    """The intersection of shapes."""

    parts: tuple[Shape, ...]


@dataclass(frozen=True, eq=False)
class NotIn:
    """The whole sky without a shape."""

    part: Shape


Shape: TypeAlias = "Circle | Polygon | AnyOf | AllOf | NotIn | Spans"
