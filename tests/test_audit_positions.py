"""Planted faults of position and their clean twins; rows against an independent ephemeris.

PyPI "ephem" is the independent ephemeris and the independent Galactic frame, healpy the
independent HEALPix.
"""

from dataclasses import replace
from pathlib import Path

import ephem
import healpy as hp
import numpy as np
import pytest
from campaign_builder import campaign, log_table
from skytally.audit_positions import Limits, position_findings
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.campaign import Site, Telescope, load_campaign
from skytally.pointings import angle_to_nearest, coarse_region, pointings_of
from skytally.region_text import parse_region
from skytally.skymap_io import circle_skymap
from skytally.spans import Spans

NIGHT = 62_000.0  # 2028-08-17, 0:00 UTC
EPHEM_ZERO = 15019.5
HERON = Site(0.0, -25.0, 0.0)
FIELD = CircleCamera(0.8)
READINGS = {
    "ra-in-hours",
    "positions-in-radians",
    "ra-dec-swapped",
    "positions-galactic",
    "dec-sign-lost",
}


def codes(found, severity=None):
    return {x.code for x in found if severity in (None, x.severity)}


def observer(site):
    there = ephem.Observer()
    there.lon, there.lat = np.radians(site.longitude_deg), np.radians(site.latitude_deg)
    there.elevation, there.pressure = site.height_m, 0
    return there


def equatorial(site, mjd, altitude, azimuth):
    """ICRS position (to 0.01 deg) that stands so at a site."""
    there = observer(site)
    there.date = mjd - EPHEM_ZERO
    ra, dec = there.radec_of(np.radians(azimuth), np.radians(altitude))
    return np.degrees(float(ra)), np.degrees(float(dec))


def fields(ra, dec, seed=0, count=40, spread=5.0):
    """Distinct fields around a place, evenly within a square of the sky."""
    rng = np.random.default_rng(seed)
    east, north = rng.uniform(-spread, spread, (2, count))
    return (ra + east / np.cos(np.radians(dec))) % 360, np.clip(dec + north, -89, 89)


def heron(ra, dec, *, site=HERON, camera=FIELD, hours=1.0, **more):
    """A telescope with one exposure a minute, from so many hours after midnight UTC on."""
    start = NIGHT + hours / 24 + np.arange(len(ra)) / 1440
    return Telescope(
        "Heron", site, camera, "a camera", log_table("Heron", ra, dec, start=start), **more
    )


def check(telescopes, maps, limits=lambda _: Limits()):
    return position_findings(campaign(telescopes, maps), limits)


@pytest.fixture(scope="module")
def skymap():
    """90 % within 7 deg of a place that is high over the site from 1 to 3 h UTC."""
    return circle_skymap(30, -15, 7, label="1")


# --- readings of a whole log --------------------------------------------------------------


def hours(ra, dec):
    return ra / 15, dec


def radians(ra, dec):
    return np.radians(ra), np.radians(dec)


def swapped(ra, dec):
    return dec % 360, ra  # the reader wraps negative right ascensions


def galactic(ra, dec):
    places = [ephem.Galactic(ephem.Equatorial(*np.radians(x))) for x in zip(ra, dec)]
    return np.degrees([x.lon for x in places]), np.degrees([x.lat for x in places])


def unsigned(ra, dec):
    return ra, np.abs(dec)


FAULTS = {
    "ra-in-hours": hours,
    "positions-in-radians": radians,
    "ra-dec-swapped": swapped,
    "positions-galactic": galactic,
    "dec-sign-lost": unsigned,
}


def test_a_clean_log_has_no_findings(skymap):
    assert check([heron(*fields(30, -15))], [skymap]) == []


@pytest.mark.parametrize("site", [HERON, None], ids=["ground", "space"])
@pytest.mark.parametrize("code", FAULTS)
def test_a_log_written_otherwise_is_found_and_named(code, site, skymap):
    ra, dec = FAULTS[code](*fields(30, -15))
    found = check([heron(ra, dec, site=site)], [skymap])
    readings = [x for x in found if x.code in READINGS]
    assert [x.code for x in readings] == [code]
    finding = readings[0]
    assert finding.severity == "error"
    assert finding.rows == tuple(range(2, 42))
    assert "0 of 40 pointings lie on the map" in finding.text
    assert "Nothing was converted" in finding.done
    # Where nothing moved, the numbers are those of the log.
    assert ("above the horizon" in finding.text) == (site is not None)


def test_a_sign_lost_in_a_log_of_both_hemispheres_is_found():
    # Two places, one on either side of the equator; only the southern signs can be lost.
    maps = [circle_skymap(30, -20, 5, label="1"), circle_skymap(30, 1, 2, label="2")]
    south, north = fields(30, -20, spread=3.0), fields(30, 1, 1, 12, spread=0.9)
    ra, dec = np.concatenate((south, north), axis=1)
    assert check([heron(ra, dec)], maps) == []
    finding = next(x for x in check([heron(ra, np.abs(dec))], maps) if x.code in READINGS)
    assert (finding.code, finding.severity) == ("dec-sign-lost", "error")
    assert "As logged, 12 of 52 pointings lie" in finding.text
    assert "If the 40 others are read as declinations that have lost" in finding.text


def test_right_ascensions_below_24_that_are_right_are_no_hours():
    assert check([heron(*fields(12, -15))], [circle_skymap(12, -15, 7, label="1")]) == []


def test_where_two_readings_fit_both_are_named():
    logged = np.linspace(1.9, 2.1, 21), np.linspace(0.05, 0.15, 21)
    # Closed form: hours put them about (30, 0.1), radians about (114.6, 5.7).
    maps = [circle_skymap(30, 0.1, 5, label="1"), circle_skymap(114.6, 5.7, 9, label="2")]
    found = check([heron(*logged, site=None)], maps)
    finding = next(x for x in found if x.code in READINGS)
    assert finding.code == "ra-in-hours"
    assert "Read as radians, they fit too" in finding.text
    alone = check([heron(*logged, site=None)], maps[:1])
    assert "fit too" not in next(x for x in alone if x.code in READINGS).text


def test_the_other_logs_say_where_fields_belong(skymap):
    # 12 deg from the middle is off the 90 % region (7 deg), but another log's fields reach
    # from there out to 30 deg. Those on or beside the 99 % region bear witness; the
    # farther ones would be off the map themselves.
    bridge = np.linspace(30, 60, 31), np.full(31, -15.0)
    other = replace(heron(*bridge), name="Plover")
    for middle, expected in ((42, True), (56, False)):
        ra, dec = fields(middle, -15, spread=1.5)
        misread = heron(ra / 15, dec)
        assert not READINGS & codes(check([misread], [skymap]))
        assert ("ra-in-hours" in codes(check([misread, other], [skymap]))) == expected


def test_a_log_off_the_map_that_no_reading_mends_is_left_alone(skymap):
    found = check([heron(*fields(30, 40))], [skymap])
    assert not READINGS & codes(found)


def test_a_wrong_clock_is_not_taken_for_wrong_positions(skymap):
    found = check([heron(*fields(30, -15), hours=13.0)], [skymap])
    assert codes(found) == {"below-horizon", "sun-up"}


def test_a_map_of_much_of_the_sky_proves_nothing():
    wide = circle_skymap(30, -15, 70, label="1")
    ra, dec = fields(30, -15)
    assert not READINGS & codes(check([heron(*galactic(ra, dec), site=None)], [wide]))


def test_one_or_two_pointings_prove_nothing(skymap):
    ra, dec = fields(30, -15, count=2)
    assert not READINGS & codes(check([heron(ra / 15, dec)], [skymap]))
    ra, dec = np.repeat(ra, 30), np.repeat(dec, 30)
    assert not READINGS & codes(check([heron(ra / 15, dec)], [skymap]))


def test_clean_logs_anywhere_on_the_sky_raise_no_false_error():
    # Logs drawn from the map itself, a third of their fields elsewhere (calibration).
    rng = np.random.default_rng(4)
    for _ in range(30):
        ra, dec = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-1, 1)))
        size = rng.uniform(1, 15)
        on = fields(ra, dec, int(rng.integers(1e6)), 40, size * 0.7)
        off = fields(rng.uniform(0, 360), rng.uniform(-80, 80), 7, 19, 10.0)
        log = np.concatenate((on, off), axis=1)
        found = check([heron(*log, site=None)], [circle_skymap(ra, dec, size, label="1")])
        assert codes(found) == {"visibility-not-checked"}


def test_many_rows_are_judged_by_some_of_them(skymap):
    ra, dec = fields(30, -15, count=6000)
    log = heron(ra / 15, dec, site=None)
    finding = check([log], [skymap])[0]
    assert finding.code == "ra-in-hours"
    assert "of 2000 pointings" in finding.text
    assert len(finding.rows) == 6000


# --- what the site saw --------------------------------------------------------------------


def seen_by_ephem(site, ra, dec, mjd):
    """Altitudes of field, Sun and Moon and the distance of the Moon, degrees, (4, n)."""
    there, rows = observer(site), []
    for one_ra, one_dec, when in zip(ra, dec, mjd):
        there.date = when - EPHEM_ZERO
        star = ephem.FixedBody()
        star._ra, star._dec, star._epoch = np.radians(one_ra), np.radians(one_dec), ephem.J2000
        sun, moon = ephem.Sun(), ephem.Moon()
        for body in (star, sun, moon):
            body.compute(there)
        apart = ephem.separation((star.az, star.alt), (moon.az, moon.alt))
        rows.append((star.alt, sun.alt, moon.alt, apart))
    return np.degrees(np.array(rows, dtype=float).T)


def test_the_rows_of_every_finding_are_those_of_an_independent_ephemeris():
    rng = np.random.default_rng(8)
    count = 1500
    ra, dec = rng.uniform(0, 360, count), np.degrees(np.arcsin(rng.uniform(-1, 1, count)))
    start = NIGHT + np.sort(rng.uniform(0, 20, count))
    log = replace(log_table("Heron", ra, dec, start=start, duration=1200.0))
    scope = Telescope("Heron", Site(20.0, -25.0, 0.0), FIELD, "a camera", log)
    found = {x.code: set(x.rows) for x in check([scope], [circle_skymap(0, 0, 60, label="1")])}
    altitude, sun, moon, apart = seen_by_ephem(scope.site, ra, dec, start + 600 / 86400)
    # Refraction lifts 36 arcminutes at the horizon (common practice); airmass 3 is an
    # altitude of 19.3 deg, where 1/sin is 3.03 and the curvature of the air takes 1 %.
    cases = {
        "below-horizon": (altitude < -0.6, np.abs(altitude + 0.6) < 0.05),
        "sun-up": (sun > -6, np.abs(sun + 6) < 0.05),
        "high-airmass": ((altitude >= -0.6) & (altitude < 19.3), np.abs(altitude - 19.3) < 0.3),
        "twilight": ((sun <= -6) & (sun > -12), np.abs(sun + 12) < 0.05),
        "near-moon": (
            (apart < 15) & (moon > 0),
            (np.abs(apart - 15) < 0.05) | (np.abs(moon) < 0.05),
        ),
    }
    assert set(found) == set(cases)
    edge = np.abs(altitude + 0.6) < 0.05
    for code, (expected, near) in cases.items():
        certain = ~(near | edge | (np.abs(sun + 6) < 0.05))
        reported = np.isin(log.row, list(found[code]))
        assert expected[certain].sum() > 10, code
        assert (reported == expected)[certain].all(), code


def test_the_limits_are_those_of_each_telescope():
    ra, dec = equatorial(HERON, NIGHT, 25, 80)  # airmass 2.35
    scopes = [replace(heron([ra], [dec], hours=0.0), name=name) for name in ("Heron", "Plover")]
    strict = {"Plover": Limits(airmass=2.0)}
    found = check(scopes, [circle_skymap(ra, dec, 9)], lambda name: strict.get(name, Limits()))
    assert [(x.code, x.subject) for x in found] == [("high-airmass", "Plover")]
    assert "airmass was above 2 (altitude 25." in found[0].text


@pytest.mark.parametrize(("away", "expected"), [(6, True), (14.8, True), (15.2, False)])
@pytest.mark.parametrize("hours", [10.6, 22.6])
def test_the_moon_is_mentioned_while_it_is_near_and_up(away, expected, hours):
    site, when = Site(60.0, -25.0, 0.0), NIGHT + hours / 24
    there, moon = observer(site), ephem.Moon()
    there.date = when - EPHEM_ZERO
    moon.compute(there)
    ra, dec = equatorial(site, when, np.degrees(moon.alt) + away, np.degrees(moon.az))
    log = log_table("Heron", [ra], [dec], start=when, duration=0.0)
    scope = Telescope("Heron", site, FIELD, "a camera", log)
    found = check([scope], [circle_skymap(ra, dec, 9)], lambda _: Limits(airmass=40))
    near = [x for x in found if x.code == "near-moon"]
    assert bool(near) == (expected and moon.alt > 0)
    if near:
        assert near[0].severity == "note"
        assert f"distance {away:.1f} deg" in near[0].text


def test_from_a_mountain_the_horizon_lies_lower():
    # Closed form: the dip from 4500 m is arccos(6371/6375.5) = 2.15 deg; with refraction a
    # field can be seen down to -2.75 deg.
    mountain = Site(0.0, -25.0, 4500.0)
    for site, altitude, code in (
        (mountain, -2.6, "high-airmass"),
        (mountain, -2.9, "below-horizon"),
        (HERON, -0.5, "high-airmass"),
        (HERON, -0.7, "below-horizon"),
    ):
        ra, dec = equatorial(site, NIGHT, altitude, 100)
        log = log_table("Heron", [ra], [dec], start=NIGHT, duration=0.0)
        scope = Telescope("Heron", site, FIELD, "a camera", log)
        found = check([scope], [circle_skymap(ra, dec, 9)])
        assert codes(found) == {code}, altitude


def test_a_spacecraft_is_not_checked_and_says_so_once(skymap):
    found = check([heron(*fields(30, -15), site=None)], [skymap])
    assert [(x.code, x.severity, x.rows) for x in found] == [("visibility-not-checked", "note", ())]
    assert "no site" in found[0].text


def test_a_log_without_rows_has_no_findings(skymap):
    for site in (HERON, None):
        assert check([heron(np.empty(0), np.empty(0), site=site)], [skymap]) == []


def test_the_example_campaign_is_clean():
    path = Path(__file__).parent.parent / "examples" / "lantern-7" / "campaign.toml"
    found = position_findings(load_campaign(path))
    assert [(x.code, x.subject) for x in found] == [("visibility-not-checked", "Curlew")]


# --- regions instead of pointings -----------------------------------------------------------


def with_regions(texts, shapes=None):
    scope = heron(np.full(len(texts), np.nan), np.full(len(texts), np.nan), camera=None)
    log = replace(scope.log, region=np.array(texts, dtype=object))
    known = shapes or {text: parse_region(text) for text in texts}
    return replace(scope, log=log, regions=known)


def test_a_region_is_judged_by_its_middle(skymap):
    up = "POLYGON ICRS 29 -16 31 -16 31 -14 29 -14"
    # Dec +70 never rises at latitude -25 (closed form: it culminates at 90 - 95 deg).
    down = "POLYGON ICRS 29 70 33 70 33 72 29 72"
    found = check([with_regions([up, down, "circle 30 80 1", up])], [skymap])
    assert [(x.code, x.rows) for x in found] == [("below-horizon", (3, 4))]


def test_a_region_too_wide_for_one_altitude_is_not_checked_but_its_sun_is(skymap):
    texts = ["circle 30 -15 60", "circle 30 -15 1", "Not (Circle ICRS 30 -15 60)"]
    scope = with_regions(texts)
    found = check([scope], [skymap])
    assert [(x.code, x.rows) for x in found] == [("visibility-not-checked", (2, 4))]
    day = replace(scope, log=replace(scope.log, start_mjd=scope.log.start_mjd + 0.45))
    assert next(x for x in check([day], [skymap]) if x.code == "sun-up").rows == (2, 3, 4)


def test_middles_and_extents_of_regions():
    disc = hp.query_disc(2**8, hp.ang2vec(200, 10, lonlat=True), np.radians(5), nest=True)
    shapes = {
        "moc.fits": Spans.from_cells(8, disc),
        "circle 100 -30 2": parse_region("circle 100 -30 2"),
        "polygon": parse_region("polygon 358 -1 2 -1 2 1 358 1"),
        "pair": parse_region("circle 10 0 1 circle 14 0 1"),
        "wide": parse_region("circle 10 0 31"),
    }
    where = pointings_of(with_regions(list(shapes), shapes))
    # The mean of a disc's pixels is healpy's; closed forms for the others: a square of 4 by
    # 2 deg has its corners at hypot(2, 1).
    mean = np.mean(hp.pix2vec(2**8, disc, nest=True), axis=1)
    lon, lat = hp.vec2ang(mean, lonlat=True)
    assert where.ra_deg[:4] == pytest.approx([lon[0], 100, 0, 12], abs=0.01)
    assert where.dec_deg[:4] == pytest.approx([lat[0], -30, 0, 0], abs=0.01)
    assert where.radius_deg[:4] == pytest.approx([5, 2, np.hypot(2, 1), 3], abs=0.2)
    assert np.isnan(where.ra_deg[4])


def test_the_reach_of_a_camera_is_its_farthest_corner():
    square = MosaicCamera.rectangle(3.0, 4.0)
    where = pointings_of(heron([30.0], [-15.0], camera=square))
    assert where.radius_deg == pytest.approx([2.5], abs=0.01)  # half of a 3-4-5 triangle
    assert pointings_of(heron([30.0], [-15.0])).radius_deg == pytest.approx([0.8])


def test_the_coarse_region_covers_the_region_and_little_more(skymap):
    centres, radius = coarse_region([skymap], 0.9)
    region = skymap.credible_region(0.9)
    vector = np.random.default_rng(1).normal(size=(300_000, 3))
    vector /= np.linalg.norm(vector, axis=1, keepdims=True)
    inside = region.contains(hp.vec2pix(2**29, *vector.T, nest=True))
    assert inside.sum() > 500
    assert angle_to_nearest(vector[inside], centres).max() <= radius
    own = hp.ang2vec(30, -15, lonlat=True)
    assert np.degrees(np.arccos(centres @ own)).max() < 7 + 2 * radius
