"""Windows on the sky: equal-area projections, their samples, lines and graticules.

The projections are Mollweide for the whole sky and Lambert's zenithal equal-area
for a part of it, as the FITS world coordinate standard defines them (MOL and
ZEA; Calabretta and Greisen, A&A 395, 1077, 2002) and astropy's WCS computes
them. Plane coordinates are degrees; right ascension grows to the left.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache

import astropy.units as u
import numpy as np
from astropy.coordinates import SkyCoord
from astropy.wcs import WCS
from astropy_healpix import lonlat_to_healpix
from numpy.typing import NDArray

from skytally.shapes import lonlat_to_vector
from skytally.spans import LINE_ORDER, Ints

__all__ = [
    "GraticuleLine",
    "Window",
    "galactic_plane",
    "graticule",
    "whole_sky_window",
    "zoom_window",
]

Floats = NDArray[np.float64]

# The axes of the Mollweide ellipse in plane degrees: 2√2 and √2 radians.
MOLLWEIDE_X = float(np.degrees(2 * np.sqrt(2)))
MOLLWEIDE_Y = float(np.degrees(np.sqrt(2)))
_RA_STEPS = (60.0, 30.0, 15.0, 7.5, 5.0, 2.5, 1.25, 0.5, 0.25, 0.125, 0.05, 0.025)
_DEC_STEPS = (30.0, 20.0, 10.0, 5.0, 2.0, 1.0, 0.5, 1 / 3, 1 / 6, 1 / 12, 1 / 30, 1 / 60)
# Longest piece of a great circle that is drawn straight, degrees.
_STRAIGHT_DEG = 1.5


@dataclass(frozen=True, eq=False)
class Window:
    """A rectangle of a projection's plane.

    Attributes
    ----------
    code : str
        ``MOL`` or ``ZEA``.
    lon_deg, lat_deg : float
        Where the plane's origin lies on the sky (ICRS).
    left, right, bottom, top : float
        The rectangle, plane degrees, left < right.
    """

    code: str
    lon_deg: float
    lat_deg: float
    left: float
    right: float
    bottom: float
    top: float

    @cached_property
    def _wcs(self) -> WCS:
        wcs = WCS(naxis=2)
        wcs.wcs.ctype = [f"RA---{self.code}", f"DEC--{self.code}"]
        wcs.wcs.crval = [self.lon_deg, self.lat_deg]
        wcs.wcs.cdelt = [-1.0, 1.0]
        wcs.wcs.crpix = [0.0, 0.0]
        wcs.wcs.set()
        return wcs

    @property
    def aspect(self) -> float:
        """Height over width."""
        return (self.top - self.bottom) / (self.right - self.left)

    @property
    def corners(self) -> Floats:
        """The rectangle's corners in the plane, shape (4, 2), in order around it."""
        x, y = (self.left, self.right), (self.bottom, self.top)
        return np.array([[x[0], y[0]], [x[1], y[0]], [x[1], y[1]], [x[0], y[1]]])

    def project(self, lonlat_deg: Floats) -> Floats:
        """Plane coordinates, shape (n, 2), of directions (n, 2) in degrees."""
        if len(lonlat_deg) == 0:
            return np.empty((0, 2))
        return np.asarray(self._wcs.wcs_world2pix(lonlat_deg, 0)) + 1.0

    def unproject(self, plane: Floats) -> Floats:
        """Directions (n, 2) in degrees of plane coordinates (n, 2) on the sky."""
        return np.asarray(self._wcs.wcs_pix2world(plane - 1.0, 0))

    def grid(self, columns: int) -> tuple[Floats, Floats]:
        """Centres of square samples: x of shape (columns,), y of shape (rows,), rising."""
        rows = max(1, round(columns * self.aspect))
        across = (np.arange(columns, dtype=np.float64) + 0.5) / columns
        up = (np.arange(rows, dtype=np.float64) + 0.5) / rows
        x: Floats = self.left + (self.right - self.left) * across
        y: Floats = self.bottom + (self.top - self.bottom) * up
        return x, y

    def sample(self, columns: int) -> Ints:
        """Positions on the line of the grid's samples, shape (rows, columns); −1 off the sky."""
        x, y = np.meshgrid(*self.grid(columns))
        shown = self.on_sky(x, y)
        lon, lat = self.unproject(np.stack((x[shown], y[shown]), axis=1)).T
        good = np.isfinite(lon) & np.isfinite(lat)
        if not good.all():
            shown[shown] = good
            lon, lat = lon[good], lat[good]
        position = np.full(shown.shape, -1, dtype=np.int64)
        position[shown] = lonlat_to_healpix(
            lon * u.deg, np.clip(lat, -90, 90) * u.deg, 1 << LINE_ORDER, order="nested"
        )
        return position

    def on_sky(self, x: Floats, y: Floats) -> NDArray[np.bool_]:
        """Tell which plane coordinates show a direction."""
        if self.code == "MOL":
            inside = (x / MOLLWEIDE_X) ** 2 + (y / MOLLWEIDE_Y) ** 2 < 1 - 1e-9
        else:
            inside = np.hypot(x, y) < np.degrees(2.0) - 1e-6
        return np.asarray(inside)

    def shows(self, lonlat_deg: Floats) -> NDArray[np.bool_]:
        """Tell which directions (n, 2) in degrees lie in the rectangle, shape (n,)."""
        x, y = self.project(lonlat_deg).T
        across, up = (self.left < x) & (x < self.right), (self.bottom < y) & (y < self.top)
        return np.asarray(across & up)

    def lines(self, rings: Iterable[Floats]) -> Floats:
        """Project closed rings, one after the other with a row of NaN between.

        Long edges follow their great circles, what crosses the seam of the
        projection or leaves the window far behind is broken there.

        Parameters
        ----------
        rings : iterable of float64 arrays, shape (m, 2)
            Longitude and latitude in degrees; the first vertex is not repeated.

        Returns
        -------
        float64 array, shape (n, 2)
            Plane coordinates to draw as one path.
        """
        gap = np.full((1, 2), np.nan)
        pieces = [piece for ring in rings for piece in (ring, ring[:1], gap)]
        return self.trace(_follow(np.concatenate(pieces))) if pieces else np.empty((0, 2))

    def trace(self, lonlat_deg: Floats) -> Floats:
        """Project a line (n, 2) vertex by vertex; NaN interrupts it, and so does the seam."""
        known = np.isfinite(lonlat_deg[:, 0])
        plane = np.full(lonlat_deg.shape, np.nan)
        plane[known] = self.project(lonlat_deg[known])
        # No followed edge makes such a jump in the plane.
        return _break(plane, 60.0 if self.code == "MOL" else 30.0, self._near(plane))

    def _near(self, plane: Floats) -> NDArray[np.bool_]:
        """Tell which points lie in or just around the window."""
        margin = 0.05 * (self.right - self.left)
        x, y = plane.T
        with np.errstate(invalid="ignore"):
            return np.asarray(
                (x > self.left - margin)
                & (x < self.right + margin)
                & (y > self.bottom - margin)
                & (y < self.top + margin)
            )


def _follow(line: Floats) -> Floats:
    """Insert vertices so that no step along a great circle exceeds 1.5 degrees.

    Rows of NaN, shape (2,), part one line from the next.
    """
    vector = lonlat_to_vector(line[:, 0], line[:, 1])
    chord = np.linalg.norm(np.diff(vector, axis=0), axis=1)
    steps = np.ceil(np.degrees(np.nan_to_num(chord)) / _STRAIGHT_DEG).astype(int).clip(1)
    if (steps == 1).all():
        return line
    row = np.repeat(np.arange(steps.size), steps)
    number = np.arange(row.size) - np.repeat(np.cumsum(steps) - steps, steps)
    added = np.flatnonzero(number)
    part = (number / steps[row])[added, None]
    between = vector[row[added]] * (1 - part) + vector[row[added] + 1] * part
    followed = np.concatenate((line[row], line[-1:]))
    x, y, z = between.T
    followed[added, 0] = np.degrees(np.arctan2(y, x)) % 360
    followed[added, 1] = np.degrees(np.arctan2(z, np.hypot(x, y)))
    return followed


def _break(plane: Floats, seam: float, near: NDArray[np.bool_]) -> Floats:
    """Put NaN into long jumps, and drop what the window does not show."""
    with np.errstate(invalid="ignore"):
        jump = np.hypot(*np.diff(plane, axis=0).T) > seam
    plane = np.insert(plane, np.flatnonzero(jump) + 1, np.nan, axis=0)
    near = np.insert(near, np.flatnonzero(jump) + 1, False)
    # One neighbour outside is kept, so that a line runs up to the frame.
    shown = near.copy()
    shown[1:] |= near[:-1]
    shown[:-1] |= near[1:]
    plane[~shown] = np.nan
    keep = np.isfinite(plane[:, 0])
    keep[1:] |= keep[:-1]
    return plane[keep]


def whole_sky_window(lon_deg: float) -> Window:
    """Return the Mollweide window with a given right ascension in the middle."""
    x, y = 1.01 * MOLLWEIDE_X, 1.01 * MOLLWEIDE_Y
    return Window("MOL", lon_deg % 360, 0.0, -x, x, -y, y)


def zoom_window(
    lonlat_deg: Floats, *, margin: float = 0.18, aspects: tuple[float, float] = (0.45, 1.0)
) -> Window:
    """Return an equal-area window that holds directions (n, 2) in degrees.

    Parameters
    ----------
    lonlat_deg : float64 array, shape (n, 2)
        What must be seen; n ≥ 1.
    margin : float
        Free space on each side, in parts of the larger extent.
    aspects : tuple of float
        Least and greatest height over width.
    """
    middle = lonlat_to_vector(lonlat_deg[:, 0], lonlat_deg[:, 1]).sum(axis=0)
    lon = float(np.degrees(np.arctan2(middle[1], middle[0])) % 360)
    lat = float(np.degrees(np.arctan2(middle[2], np.hypot(middle[0], middle[1]))))
    plane = Window("ZEA", lon, lat, -180, 180, -180, 180).project(lonlat_deg)
    low, high = plane.min(axis=0), plane.max(axis=0)
    extent = float(max(*(high - low), 0.05))
    width, height = (high - low) + 2 * margin * extent
    width = max(width, height / aspects[1])
    height = min(max(height, width * aspects[0]), width * aspects[1])
    x, y = (low + high) / 2
    sides = (x - width / 2, x + width / 2, y - height / 2, y + height / 2)
    return Window("ZEA", lon, lat, *map(float, sides))


@dataclass(frozen=True, eq=False)
class GraticuleLine:
    """One meridian or parallel in the plane, and what to write at it.

    Attributes
    ----------
    plane : float64 array, shape (n, 2)
        The line, NaN where it is interrupted.
    label : str
        Hours and degrees for a meridian, degrees for a parallel.
    is_meridian : bool
        Which of the two it is.
    value_deg : float
        Its right ascension or declination.
    """

    plane: Floats
    label: str
    is_meridian: bool
    value_deg: float


@lru_cache(maxsize=4)
def graticule(window: Window) -> tuple[GraticuleLine, ...]:
    """Return meridians and parallels at round numbers, about four each way across the window."""
    if window.code == "MOL":
        return tuple(_graticule(window, (30.0, 30.0), (-180.0, 180.0), (-90.0, 90.0)))
    x, y = window.grid(41)
    columns, rows = np.meshgrid(x, y)
    plane = np.stack((columns.ravel(), rows.ravel()), axis=1)
    lonlat = window.unproject(plane[window.on_sky(*plane.T)])
    turn = (lonlat[:, 0] - window.lon_deg + 180) % 360 - 180
    lat = lonlat[:, 1]
    steps = _nice(_RA_STEPS, _ra_extent(window, x)), _nice(_DEC_STEPS, float(np.ptp(lat)))
    turns = max(float(turn.min()) - steps[0], -180.0), min(float(turn.max()) + steps[0], 180.0)
    lats = max(float(lat.min()) - steps[1], -90.0), min(float(lat.max()) + steps[1], 90.0)
    return tuple(_graticule(window, steps, turns, lats))


def _ra_extent(window: Window, x: Floats) -> float:
    """Right ascension across the window, degrees, at the side where meridians are widest apart."""
    extents = []
    for y in (window.bottom, window.top):
        edge = np.stack((x, np.full(x.size, y)), axis=1)
        edge = edge[window.on_sky(*edge.T)]
        if len(edge) > 1:
            lon = np.unwrap(np.radians(window.unproject(edge)[:, 0]))
            extents.append(float(np.degrees(np.ptp(lon))))
    return min(extents, default=180.0)


def _nice(steps: Sequence[float], extent: float) -> float:
    return next((step for step in steps if extent / step >= 2.5), steps[-1])


def _graticule(
    window: Window,
    steps: tuple[float, float],
    turns: tuple[float, float],
    lats: tuple[float, float],
) -> list[GraticuleLine]:
    """Draw the lines of given steps within ranges of RA, from the middle's, and of declination."""
    ra_step, dec_step = steps
    found = []
    lat = np.linspace(*lats, 181)
    # Meridians stop short of the poles, where they would all run together.
    lat = lat[np.abs(lat) <= 90 - min(dec_step, 10.0)]
    for number in range(round(360 / ra_step)):
        lon = number * ra_step
        plane = window.trace(np.stack((np.full(lat.size, lon), lat), axis=1))
        if len(plane):
            found.append(GraticuleLine(plane, ra_label(lon, ra_step), True, lon))
    # Not quite to the seam, where the two ends of a parallel fall together.
    turn = np.linspace(turns[0] + 1e-6, turns[1] - 1e-6, 721)
    first, last = (
        np.ceil(max(lats[0], -89.999) / dec_step),
        np.floor(min(lats[1], 89.999) / dec_step),
    )
    for number in range(int(first), int(last) + 1):
        value = number * dec_step
        line = np.stack(((turn + window.lon_deg) % 360, np.full(turn.size, value)), axis=1)
        plane = window.trace(line)
        if len(plane):
            found.append(GraticuleLine(plane, dec_label(value, dec_step), False, value))
    return found


def ra_label(lon_deg: float, step_deg: float) -> str:
    """Return a right ascension in hours, and in degrees on the next line."""
    seconds = round(lon_deg * 240)
    hours, rest = divmod(seconds, 3600)
    minutes, seconds = divmod(rest, 60)
    text = f"{hours}h"
    if step_deg < 15:
        text += f"{minutes:02d}m"
    if step_deg < 0.25:
        text += f"{seconds:02d}s"
    return f"{text}\n{lon_deg:.3f}".rstrip("0").rstrip(".") + "°"


def dec_label(lat_deg: float, step_deg: float) -> str:
    """Return a declination in degrees, and arc minutes where the steps ask for them."""
    sign = "−" if lat_deg < 0 else "+" if lat_deg > 0 else ""
    minutes = round(abs(lat_deg) * 60)
    text = f"{sign}{minutes // 60}°"
    return f"{text}{minutes % 60:02d}′" if step_deg < 1 else text


@lru_cache(maxsize=4)
def galactic_plane(window: Window) -> Floats:
    """Return the Galactic equator in the plane, to be drawn as one path."""
    longitude = np.linspace(0.0, 360.0, 1441)
    line = SkyCoord(l=longitude * u.deg, b=np.zeros(1441) * u.deg, frame="galactic").icrs
    return window.trace(np.stack((line.ra.deg, line.dec.deg), axis=1))
