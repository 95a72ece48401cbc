"""Where the exposures of a log were pointed, and how near that is to a map's probability."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from astropy_healpix import healpix_to_lonlat, healpix_to_xyz
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from skytally.cameras import Camera, CircleCamera
from skytally.campaign_data import Telescope
from skytally.observations import SECONDS_PER_DAY, LogTable
from skytally.raster import cell_radius_rad
from skytally.shapes import AnyOf, Circle, Polygon, Shape, lonlat_to_vector
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Ints, Spans, cell_to_span, spans_to_cells

__all__ = [
    "Pointings",
    "angle_to_nearest",
    "camera_reach_deg",
    "coarse_region",
    "middle_mjd",
    "pointings_of",
]

Floats = NDArray[np.float64]

COARSE_ORDER = 6
# A larger region has no direction to speak of.
_WIDEST_DEG = 30.0


@dataclass(frozen=True, eq=False)
class Pointings:
    """Where n exposures of one telescope were pointed.

    All arrays are float64 of shape (n,), in degrees.

    Attributes
    ----------
    ra_deg, dec_deg : arrays
        Centre of the field (ICRS), that of the region where the log gives one. NaN
        where the region is too large, or too involved, to have a centre.
    radius_deg : array
        The field lies within so much of it; NaN with the centre.
    """

    ra_deg: Floats
    dec_deg: Floats
    radius_deg: Floats

    def take(self, places: Ints) -> Pointings:
        """Keep the pointings at these places."""
        return Pointings(self.ra_deg[places], self.dec_deg[places], self.radius_deg[places])


def pointings_of(telescope: Telescope) -> Pointings:
    """Find where a telescope's accepted exposures were pointed, in the order of its log."""
    log = telescope.log
    radius = np.full(len(log), camera_reach_deg(telescope.camera))
    ra, dec = log.ra_deg.copy(), log.dec_deg.copy()
    known: dict[str, tuple[float, float, float]] = {}
    for place in np.flatnonzero(log.region != ""):
        text = log.region[place]
        if text not in known:
            known[text] = _centre(telescope.regions[text])
        ra[place], dec[place], radius[place] = known[text]
    return Pointings(ra, dec, radius)


def middle_mjd(log: LogTable) -> Floats:
    """Middle of each accepted exposure (UTC), shape (n,)."""
    return log.start_mjd + log.duration_s / (2 * SECONDS_PER_DAY)


def camera_reach_deg(camera: Camera | None) -> float:
    """Angle from the pointing to the farthest point of a camera's field; 0 without a camera."""
    if camera is None:
        return 0.0
    if isinstance(camera, CircleCamera):
        return camera.radius_deg
    plane = max(float(np.linalg.norm(ring, axis=1).max()) for ring in camera.corners)
    return float(np.degrees(np.arctan(np.radians(plane))))


def _centre(shape: Shape) -> tuple[float, float, float]:
    """Longitude, latitude and radius (degrees) of a cap around a shape; NaN if hardly one."""
    none = (np.nan, np.nan, np.nan)
    caps = _caps(shape)
    if caps is None:
        return none
    lon, lat, radius, weight = caps.T
    vector = lonlat_to_vector(lon, lat)
    middle = weight @ vector
    length = np.linalg.norm(middle)
    if length < 1e-9 * weight.sum():
        return none
    apart = np.degrees(np.arccos(np.clip(vector @ middle / length, -1, 1)))
    reach = float((apart + radius).max())
    if reach > _WIDEST_DEG:
        return none
    x, y, z = middle
    lat_deg = float(np.degrees(np.arctan2(z, np.hypot(x, y))))
    return float(np.degrees(np.arctan2(y, x)) % 360), lat_deg, reach


def _caps(shape: Shape) -> Floats | None:
    """Caps (longitude, latitude, radius, weight; shape (k, 4)) that a shape lies between.

    None for intersections and complements.
    """
    if isinstance(shape, Circle):
        return np.array([[shape.lon_deg, shape.lat_deg, shape.radius_deg, 1.0]])
    if isinstance(shape, Polygon):
        corners = shape.vertices_deg
        rest = np.broadcast_to([0.0, 1.0 / len(corners)], corners.shape)
        return np.concatenate((corners, rest), axis=1)
    if isinstance(shape, Spans) and len(shape):
        starts, stops = cell_to_span(*spans_to_cells(shape))
        size = stops - starts
        # The last of a cell's four children begins at the middle of the cell.
        lon, lat = healpix_to_lonlat(starts + size // 4 * 3, 1 << LINE_ORDER, order="nested")
        return np.stack((lon.deg, lat.deg, np.zeros(size.size), size / size.sum()), axis=1)
    if isinstance(shape, AnyOf):
        parts = [_caps(part) for part in shape.parts]
        known = [part for part in parts if part is not None]
        return np.concatenate(known) if known and len(known) == len(parts) else None
    return None


def coarse_region(maps: Sequence[SkyMap], level: float) -> tuple[Floats, float]:
    """Cells of order 6 that touch the credible region of a level of any map version.

    Returns
    -------
    centres : float64 array, shape (k, 3)
        Unit vectors.
    radius_deg : float
        No cell reaches farther from its centre.
    """
    shift = 2 * (LINE_ORDER - COARSE_ORDER)
    change = np.zeros(12 * 4**COARSE_ORDER + 1, dtype=np.int64)
    for skymap in maps:
        region = skymap.credible_region(level)
        np.add.at(change, region.starts >> shift, 1)
        np.add.at(change, ((region.stops - 1) >> shift) + 1, -1)
    cell = np.flatnonzero(np.cumsum(change)[:-1] > 0)
    centres = healpix_to_xyz(cell, 1 << COARSE_ORDER, order="nested")
    return np.stack(centres, axis=1), float(np.degrees(cell_radius_rad(COARSE_ORDER)))


def angle_to_nearest(of: Floats, targets: Floats) -> Floats:
    """Angle in degrees from unit vectors (n, 3) to the nearest of others (k, 3).

    Infinite where there are no others.
    """
    if not len(targets):
        return np.full(len(of), np.inf)
    chord, _ = cKDTree(targets).query(of)
    return np.asarray(2 * np.degrees(np.arcsin(np.clip(chord / 2, 0, 1))))
