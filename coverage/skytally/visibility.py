"""How high a pointing stood at a site, and where the Sun and the Moon were."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from skytally.shapes import lonlat_to_vector

__all__ = ["Visibility", "airmass_at", "sun_altitude", "visibility"]

Floats = NDArray[np.float64]

# Between support points the Earth's orientation and the site's place are interpolated:
# in half an hour the site departs from its chord by 14 km, 0.002 deg at the Moon.
_SUPPORT_SECONDS = 1800.0
# So are the Sun and the Moon, the latter within 0.001 deg over an hour.
_NODES_PER_DAY = 24.0
_FAR_KM = 1e18


@dataclass(frozen=True, eq=False)
class Visibility:
    """What a site saw of n pointings.

    All arrays are float64 of shape (n,), in degrees, without refraction; NaN where
    the pointing or the time is NaN.

    Attributes
    ----------
    altitude_deg : array
        Of the pointing above the horizon.
    airmass : array
        At that altitude; infinite below the horizon.
    sun_altitude_deg, moon_altitude_deg : arrays
        Of the centres of the Sun and the Moon.
    moon_distance_deg : array
        From the pointing to the centre of the Moon as seen from the site.
    """

    altitude_deg: Floats
    airmass: Floats
    sun_altitude_deg: Floats
    moon_distance_deg: Floats
    moon_altitude_deg: Floats


def visibility(
    ra_deg: ArrayLike,
    dec_deg: ArrayLike,
    mjd: ArrayLike,
    longitude_deg: float,
    latitude_deg: float,
    height_m: float,
) -> Visibility:
    """Find altitude, airmass, Sun and Moon for n pointings of one site.

    The Earth's rotation is taken to follow UTC, from which it departs by up to 0.9 s, and
    its poles to stay where they are on average, which they do within 1″: no table of the
    Earth's rotation is needed, and directions are good to about 0.01 deg at any date.

    Parameters
    ----------
    ra_deg, dec_deg : float64 arrays, shape (n,)
        Pointings (ICRS, degrees).
    mjd : float64 array, shape (n,)
        Times (UTC).
    longitude_deg, latitude_deg, height_m : float
        Site: degrees east, geodetic degrees north, metres above sea level.

    Returns
    -------
    Visibility
        Arrays of shape (n,).
    """
    ra, dec, time = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(x, float)) for x in (ra_deg, dec_deg, mjd))
    )
    known = np.isfinite(ra) & np.isfinite(dec) & np.isfinite(time)
    found = np.full((4, time.size), np.nan)
    if known.any():
        when = time[known]
        with _any_date():
            places = [_star_places(ra[known], dec[known])]
            places += [_body_places(name, when) for name in ("sun", "moon")]
            star, sun, moon = _directions(places, when, (longitude_deg, latitude_deg, height_m))
        found[:, known] = _altitude(star), _altitude(sun), _angle(star, moon), _altitude(moon)
    altitude, sun_altitude_deg, moon_distance, moon_altitude = found
    return Visibility(
        altitude, airmass_at(altitude), sun_altitude_deg, moon_distance, moon_altitude
    )


def sun_altitude(
    mjd: ArrayLike, longitude_deg: float, latitude_deg: float, height_m: float
) -> Floats:
    """Altitude of the Sun's centre at a site, as in `visibility`.

    Parameters
    ----------
    mjd : float64 array, shape (n,)
        Times (UTC).
    longitude_deg, latitude_deg, height_m : float
        Site: degrees east, geodetic degrees north, metres above sea level.

    Returns
    -------
    float64 array, shape (n,)
        Degrees, without refraction; NaN where the time is NaN.
    """
    time = np.atleast_1d(np.asarray(mjd, float))
    known = np.isfinite(time)
    altitude = np.full(time.shape, np.nan)
    if known.any():
        when, site = time[known], (longitude_deg, latitude_deg, height_m)
        with _any_date():
            (sun,) = _directions([_body_places("sun", when)], when, site)
        altitude[known] = _altitude(sun)
    return altitude


def airmass_at(altitude_deg: ArrayLike) -> Floats:
    """Airmass at altitudes: a fit to a standard atmosphere (Applied Optics 28 4735, 1989).

    DOI 10.1364/AO.28.004735; about 38 at the horizon and 1 at the zenith.

    Parameters
    ----------
    altitude_deg : float64 array
        Degrees above the horizon.

    Returns
    -------
    float64 array
        Same shape; infinite below the horizon, NaN where the altitude is NaN.
    """
    altitude = np.asarray(altitude_deg, float)
    above = np.maximum(altitude, 0.0)
    airmass = 1.0 / (np.sin(np.radians(above)) + 0.50572 * (above + 6.07995) ** -1.6364)
    return np.asarray(np.where(altitude < 0, np.inf, airmass))


@contextmanager
def _any_date() -> Iterator[None]:
    """Set astropy up, for a while, so that it fetches nothing and accepts any date."""
    from astropy import units
    from astropy.coordinates.erfa_astrom import ErfaAstromInterpolator, erfa_astrom
    from astropy.utils import iers

    # UT1 is UTC and the poles are where they were meant to be: near enough here, the same
    # with every edition of the tables, and no second spent on reading them.
    angle, columns = [0.0, 0.0] * units.arcsec, ("PM_x", "PM_y", "dX_2000A", "dY_2000A")
    steady = iers.IERS(
        {"MJD": [-1e6, 1e6] * units.d, "UT1_UTC": [0.0, 0.0] * units.s}
        | dict.fromkeys(columns, angle)
    )
    with (
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("auto_max_age", None),
        iers.earth_orientation_table.set(steady),
        erfa_astrom.set(ErfaAstromInterpolator(_SUPPORT_SECONDS * units.s)),
        warnings.catch_warnings(),
    ):
        # Leap seconds to come are not known, and move nothing here by an arcsecond.
        warnings.simplefilter("ignore")
        yield


def _star_places(ra_deg: Floats, dec_deg: Floats) -> Floats:
    """Barycentric places, shape (3, n), km, so far away that nothing has a parallax."""
    return _FAR_KM * lonlat_to_vector(ra_deg, dec_deg).T


def _body_places(name: str, mjd: Floats) -> Floats:
    """Barycentric places, shape (3, n), km, of the Sun or the Moon as the Earth saw them."""
    from astropy import units
    from astropy.coordinates import ICRS, get_body
    from astropy.time import Time

    before = np.floor(mjd * _NODES_PER_DAY)
    nodes = np.unique(np.concatenate((before, before + 1)))
    times = Time(nodes / _NODES_PER_DAY, format="mjd", scale="utc")
    # The ephemeris that comes with astropy, so that no file is needed.
    body = get_body(name, times, ephemeris="builtin").transform_to(ICRS())
    places = body.cartesian.xyz.to_value(units.km)
    return np.array([np.interp(mjd * _NODES_PER_DAY, nodes, axis) for axis in places])


def _directions(places: list[Floats], mjd: Floats, site: tuple[float, float, float]) -> Floats:
    """Unit vectors on the site's horizon (north, east, up), shape (k, 3, n), of k places."""
    from astropy import units
    from astropy.coordinates import ICRS, AltAz, CartesianRepresentation, EarthLocation
    from astropy.time import Time

    longitude, latitude, height = site
    location = EarthLocation.from_geodetic(
        longitude * units.deg, latitude * units.deg, height * units.m
    )
    # All in one go, so that the Earth's orientation is worked out once.
    times = Time(np.tile(mjd, len(places)), format="mjd", scale="utc")
    position = ICRS(CartesianRepresentation(np.concatenate(places, axis=1) * units.km))
    horizon = position.transform_to(AltAz(obstime=times, location=location))
    vector = horizon.cartesian.xyz.to_value(units.km)
    unit = vector / np.linalg.norm(vector, axis=0)
    return np.asarray(unit, dtype=float).reshape(3, len(places), mjd.size).swapaxes(0, 1)


def _altitude(direction: Floats) -> Floats:
    return np.asarray(np.degrees(np.arctan2(direction[2], np.hypot(direction[0], direction[1]))))


def _angle(one: Floats, other: Floats) -> Floats:
    """Angle between unit vectors (3, n), degrees, exact for small ones too."""
    across = np.linalg.norm(np.cross(one, other, axis=0), axis=0)
    return np.asarray(np.degrees(np.arctan2(across, np.sum(one * other, axis=0))))
