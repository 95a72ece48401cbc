"""Altitudes, Sun and Moon against an independent ephemeris library and closed forms."""

import warnings

import ephem
import numpy as np
import pytest
from astropy.coordinates.erfa_astrom import erfa_astrom
from astropy.utils import iers
from skytally.visibility import airmass_at, sun_altitude, visibility

# Invented sites: degrees east, degrees north, metres.
SITES = [
    (-95.32, -25.41, 2210.0),
    (2.64, 51.2, 80.0),
    (104.87, 0.0, 4500.0),
    (179.9, -77.8, 10.0),
    (-128.15, 68.0, 1905.0),
]
MJD_2024, MJD_2036 = 60310.0, 64693.0
EPHEM_ZERO = 15019.5  # that library counts days from 1899-12-31 12:00 (its documentation)


def drawn(seed, count=120):
    """Pointings over the whole sky and times over twelve years."""
    rng = np.random.default_rng(seed)
    ra = rng.uniform(0, 360, count)
    dec = np.degrees(np.arcsin(rng.uniform(-1, 1, count)))
    return ra, dec, rng.uniform(MJD_2024, MJD_2036, count)


def from_ephem(ra, dec, mjd, site):
    """Altitudes of star, Sun and Moon and the distance of the Moon, all topocentric."""
    observer = ephem.Observer()
    observer.lon, observer.lat = np.radians(site[0]), np.radians(site[1])
    observer.elevation, observer.pressure = site[2], 0  # no refraction
    rows = []
    for one_ra, one_dec, when in zip(ra, dec, mjd):
        observer.date = when - EPHEM_ZERO
        star = ephem.FixedBody()
        star._ra, star._dec, star._epoch = np.radians(one_ra), np.radians(one_dec), ephem.J2000
        sun, moon = ephem.Sun(), ephem.Moon()
        for body in (star, sun, moon):
            body.compute(observer)
        apart = ephem.separation((star.az, star.alt), (moon.az, moon.alt))
        rows.append((star.alt, sun.alt, moon.alt, apart))
    return np.degrees(np.array(rows, dtype=float).T)


@pytest.mark.parametrize("site", SITES)
def test_altitudes_and_the_moon_agree_with_an_independent_ephemeris(site):
    # PyPI "ephem", an independent implementation with its own theories of Sun and Moon.
    ra, dec, mjd = drawn(11)
    star, sun, moon, apart = from_ephem(ra, dec, mjd, site)
    ours = visibility(ra, dec, mjd, *site)
    # UT1 − UTC, which that library takes as zero, is below 0.9 s or 0.004 deg.
    assert np.abs(ours.altitude_deg - star).max() < 0.02
    assert np.abs(ours.sun_altitude_deg - sun).max() < 0.02
    assert np.abs(ours.moon_altitude_deg - moon).max() < 0.02
    assert np.abs(ours.moon_distance_deg - apart).max() < 0.02
    assert np.abs(sun_altitude(mjd, *site) - sun).max() < 0.02


def test_the_moon_is_seen_from_the_site_and_not_from_the_middle_of_the_earth():
    # From opposite sites the Moon's two altitudes sum to minus its parallaxes, which lie
    # between 53.9 and 61.5 arcminutes at the horizon (common practice): near the horizon
    # of both, the sum is twice that.
    mjd = MJD_2024 + np.arange(3000) * 0.01
    here = visibility(0.0, 0.0, mjd, 30.0, 20.0, 0.0).moon_altitude_deg
    there = visibility(0.0, 0.0, mjd, -150.0, -20.0, 0.0).moon_altitude_deg
    low = np.abs(here) < 3
    assert low.sum() > 20
    parallax = -60 * (here + there)[low] / 2
    assert parallax.min() > 53.5
    assert parallax.max() < 61.6


def test_the_celestial_pole_stands_at_the_latitude():
    # Closed form; at the epoch J2000.0 (MJD 51544.5) the pole of date is that of the frame,
    # up to nutation and aberration (about 30 arcseconds).
    for latitude in (-77.8, -25.4, 0.3, 51.2):
        seen = visibility([0.0, 0.0], [90.0, -90.0], 51544.5, 12.0, latitude, 0.0)
        assert seen.altitude_deg == pytest.approx([latitude, -latitude], abs=0.01)


def test_the_sun_stands_overhead_at_the_equinox():
    # On 2024-03-20 at 03:06 UTC the Sun crosses the equator, with an equation of time of
    # −7 min 26 s (almanacs; from memory): it culminates at longitude 180° − 15°(3 h 6 min −
    # 7 min 26 s) = 135.4° and is as far below the horizon on the other side.
    mjd = 60389 + (3 + 6 / 60) / 24
    assert sun_altitude(mjd, 135.4, 0.0, 0.0)[0] > 89.9
    assert sun_altitude(mjd, -44.6, 0.0, 0.0)[0] < -89.9


def test_airmass_agrees_with_a_layered_atmosphere():
    # Brute force: the path through an exponential atmosphere of 8.4 km around a sphere of
    # 6371 km, straight rays, over the path to the zenith.
    z = np.linspace(0, 200, 200_001)
    for altitude, tolerance in ((90, 0.001), (60, 0.002), (30, 0.003), (15, 0.01)):
        sine = np.cos(np.radians(altitude)) * 6371 / (6371 + z)
        path = np.exp(-z / 8.4) / np.sqrt(1 - sine**2)
        expected = np.trapezoid(path, z) / np.trapezoid(np.exp(-z / 8.4), z)
        assert airmass_at(altitude) == pytest.approx(expected, rel=tolerance)
    # "About 38 at the horizon" (common practice).
    assert airmass_at(0.0) == pytest.approx(38, abs=0.5)
    assert np.isinf(airmass_at(-0.001))


def test_the_airmass_belongs_to_the_altitude():
    seen = visibility(*drawn(3), *SITES[0])
    below = seen.altitude_deg < 0
    assert 20 < below.sum() < 100
    assert np.isinf(seen.airmass[below]).all()
    high = seen.altitude_deg > 20
    secant = 1 / np.sin(np.radians(seen.altitude_deg[high]))
    assert seen.airmass[high] == pytest.approx(secant, rel=0.02)  # plane-parallel, common practice


@pytest.fixture
def offline():
    """Keep the library itself from fetching what the test asks it for."""
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        yield


@pytest.mark.usefixtures("offline")
def test_times_far_ahead_and_long_ago_are_quiet_and_leave_the_library_as_it_was():
    before = iers.earth_orientation_table.get(), erfa_astrom.get()
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        seen = visibility(10.0, 20.0, [40_000.0, 62_500.0, 75_000.0], *SITES[0])
    assert np.isfinite(seen.altitude_deg).all()
    assert iers.earth_orientation_table.get() is before[0]
    assert erfa_astrom.get() is before[1]


def test_the_settings_of_the_library_are_left_as_they_were():
    before = iers.conf.auto_download, iers.conf.auto_max_age
    visibility(10.0, 20.0, 62_500.0, *SITES[0])
    assert (iers.conf.auto_download, iers.conf.auto_max_age) == before


def test_a_missing_position_or_time_is_missing_and_an_empty_log_is_empty():
    ra, dec = np.array([10.0, np.nan, 10.0]), np.array([20.0, np.nan, 20.0])
    seen = visibility(ra, dec, [62_000.0, 62_000.0, np.nan], *SITES[0])
    for name in ("altitude_deg", "airmass", "moon_distance_deg"):
        assert np.isnan(getattr(seen, name)).tolist() == [False, True, True]
    assert np.isnan(sun_altitude([62_000.0, np.nan], *SITES[0])).tolist() == [False, True]
    nothing = visibility([], [], [], *SITES[0])
    assert nothing.altitude_deg.shape == nothing.moon_distance_deg.shape == (0,)
    assert sun_altitude([], *SITES[0]).shape == (0,)


def test_one_row_alone_reads_as_it_does_among_many():
    ra, dec, mjd = drawn(5, 200)
    together = visibility(ra, dec, mjd, *SITES[0])
    alone = [visibility(ra[i], dec[i], mjd[i], *SITES[0]) for i in range(0, 200, 40)]
    for name in ("altitude_deg", "sun_altitude_deg", "moon_distance_deg", "moon_altitude_deg"):
        single = np.array([getattr(one, name)[0] for one in alone])
        assert getattr(together, name)[::40] == pytest.approx(single, abs=0.005)
