"""Times of exposures: planted faults beside clean logs.

Nights are made with the low-precision formulae for the Sun and sidereal time of the
Astronomical Almanac, page C5 and section B (from memory; good to 0.02°), which share no
code with the package.
"""

from __future__ import annotations

from dataclasses import replace
from datetime import date, datetime, timedelta

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import AltAz, EarthLocation, get_sun
from astropy.time import Time
from astropy.utils import iers
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from deep_sky import distance_map
from skytally.audit_times import time_findings
from skytally.campaign import Site, load_campaign
from skytally.region_text import parse_region

SECOND, MINUTE, HOUR = 1 / 86400, 1 / 1440, 1 / 24
HEAD = "exposure,ra,dec,start,duration,band"
CAMPAIGN = """
[event]
name = "Lantern 7"
time = {time}

[[map]]
version = "1 first"
circle = {{ ra = 150.0, dec = -8.0, radius_90 = 2.0 }}
"""
TELESCOPE = """
[[telescope]]
name = "{name}"
{site}
camera = {{ shape = "circle", radius = 0.5 }}
log = "{name}.csv"
"""


def of_log(log, site=None, maps=(), others=()):
    regions = {text: parse_region(text) for text in set(log.region) - {""}}
    first = telescope("Heron", None, log, regions=regions)
    return campaign([replace(first, site=site), *others], maps)


def by_regions(log, radius):
    """The same log with circles for regions and no pointings."""
    region = [f"CIRCLE ICRS {a:.3f} {d:.3f} {radius}" for a, d in zip(log.ra_deg, log.dec_deg)]
    none = np.full(len(log), np.nan)
    return replace(log, ra_deg=none, dec_deg=none, region=np.array(region, dtype=object))


def found(log, *codes, **more):
    """The findings on one log of these kinds, all of them if none is named."""
    every = time_findings(of_log(log, **more))
    return [f for f in every if not codes or f.code in codes]


def codes(log, **more):
    return [(f.code, f.severity) for f in found(log, **more)]


def sequence(n=40, *, seconds=90.0, overhead=25.0, seed=1, **more):
    """A clean log: n fields one after the other, starts to a tenth of a second."""
    rng = np.random.default_rng(seed)
    gap = seconds + overhead * rng.uniform(0.5, 1.5, n)
    start = np.round((EVENT_MJD + 0.06 + np.cumsum(gap) * SECOND) * 864000) / 864000
    ra, dec = rng.uniform(130, 200, n), rng.uniform(-40, 20, n)
    return log_table("Heron", ra, dec, start=start, duration=seconds, **more)


def to_step(log, seconds, *, cut=False):
    """The same log with its times written to a coarser step."""
    day = np.floor(log.start_mjd)
    count = (log.start_mjd - day) * 86400 / seconds
    count = np.floor(count + 1e-6) if cut else np.round(count)
    return replace(log, start_mjd=day + count * seconds / 86400)


def with_value(log, column, row, value):
    """The log with one value changed, by place."""
    changed = getattr(log, column).copy()
    changed[row] = value
    return replace(log, **{column: changed})


def load(tmp_path, logs, *, time="2031-03-14T05:21:08Z", site=""):
    """A campaign read from files; logs by telescope as lists of rows."""
    text = CAMPAIGN.format(time=time)
    for name, rows in logs.items():
        text += TELESCOPE.format(name=name, site=site)
        (tmp_path / f"{name}.csv").write_text("\n".join([HEAD, *rows]) + "\n")
    (tmp_path / "campaign.toml").write_text(text)
    return load_campaign(tmp_path / "campaign.toml")


def of_campaign(loaded, *codes_):
    return [f for f in time_findings(loaded) if f.code in codes_]


# --- exposures at the same time --------------------------------------------------------


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("step", [None, 1.0, 8.64, 60.0])
@pytest.mark.parametrize(("seconds", "overhead"), [(90, 25), (30, 4), (10, 3), (600, 60)])
def test_one_exposure_after_another_is_in_order(seed, step, seconds, overhead):
    log = sequence(seconds=float(seconds), overhead=float(overhead), seed=seed)
    for cut in (False, True):
        assert found(log if step is None else to_step(log, step, cut=cut)) == []


def test_no_overhead_at_all_is_in_order():
    start = EVENT_MJD + 0.1 + np.arange(200) * 60.0 * SECOND
    log = log_table("Heron", np.full(200, 150.0), np.linspace(0, 9, 200), start=start)
    jitter = np.random.default_rng(2).normal(0, 0.3, 200) * SECOND
    # Exposure times are nominal: half a second in a hundred is not theirs to tell.
    fine = replace(log, start_mjd=start + jitter)
    nominal = replace(fine, duration_s=np.full(200, 60.3))
    for one in (log, fine, nominal, to_step(log, 1.0, cut=True)):
        assert found(one) == []


@pytest.mark.parametrize("step", [None, 1.0])
def test_an_exposure_that_outlasts_the_next_start(step):
    clean = sequence()
    log = with_value(clean, "duration_s", 12, 300.0)
    (finding,) = found(log if step is None else to_step(log, step))
    assert (finding.code, finding.severity) == ("exposures-overlap", "error")
    assert finding.rows == (14, 15)
    assert "row 14 lasts 300 s" in finding.text
    assert "1 exposure still runs" in finding.text
    gap = (clean.start_mjd[13] - clean.start_mjd[12]) * 86400
    slight = with_value(clean, "duration_s", 12, gap + 8.0)
    assert codes(slight) == [("exposures-overlap", "error")]


def test_a_start_that_falls_into_another_exposure():
    clean = sequence()
    log = with_value(clean, "start_mjd", 20, clean.start_mjd[7] + 40 * SECOND)
    (finding,) = found(log)
    assert (finding.code, finding.severity) == ("exposures-overlap", "error")
    assert {9, 22} <= set(finding.rows) <= {9, 10, 22}
    assert "row 22 begins 40 s after it" in finding.text


def test_times_to_the_minute_are_given_their_minute():
    """Forty exposures of 50 s every 62 s: with times cut to the minute, many seem to overlap."""
    start = EVENT_MJD + 0.1 + np.arange(40) * 62.0 * SECOND
    log = log_table("Heron", np.linspace(140, 160, 40), np.zeros(40), start=start, duration=58.0)
    minute = to_step(log, 60.0, cut=True)
    gap = np.diff(minute.start_mjd) * 86400
    assert (gap < 61).any()
    assert found(minute) == []
    # 80 s would not fit between any two starts, yet no pair proves it: the minutes add up.
    (finding,) = found(replace(minute, duration_s=np.full(40, 80.0)))
    assert (finding.code, finding.severity) == ("exposures-overlap", "caution")
    assert len(finding.rows) > 30


def test_a_camera_of_several_channels_is_a_note():
    base = sequence(30)
    rows = np.repeat(np.arange(30), 3)
    log = replace(
        base.take(rows),
        row=np.arange(90) + 2,
        ra_deg=base.ra_deg[rows] + np.tile([0.0, 0.01, -0.02], 30),
        band=np.tile(np.array(["g", "r", "z"], dtype=object), 30),
    )
    (finding,) = found(log)
    assert (finding.code, finding.severity) == ("exposures-simultaneous", "note")
    assert finding.rows == tuple(range(2, 92))
    assert codes(by_regions(log, 1)) == [("exposures-simultaneous", "note")]
    # One channel that overlaps with itself is no better for the others.
    spoilt = with_value(log, "duration_s", 33, 400.0)
    assert ("exposures-overlap", "error") in codes(spoilt)


@pytest.mark.parametrize("lead_s", [0.0, 5.0])
def test_channels_with_exposure_times_of_their_own_are_a_note(lead_s):
    """Two short exposures in one band while the other channel takes a long one."""
    start = EVENT_MJD + 0.1 + (np.arange(20)[:, None] * 260 + np.array([lead_s, 0, 120])) * SECOND
    log = log_table(
        "Heron",
        np.repeat(np.linspace(140, 160, 20), 3),
        np.zeros(60),
        start=start.ravel(),
        duration=np.tile([235.0, 110.0, 110.0], 20),
        band=np.tile(np.array(["r", "g", "g"], dtype=object), 20),
    )
    assert codes(log) == [("exposures-simultaneous", "note")]


def test_one_slip_across_a_change_of_filter_is_no_camera_of_channels():
    log = sequence(40, band=np.array(["g"] * 20 + ["r"] * 20, dtype=object))
    place = with_value(
        with_value(log, "ra_deg", 20, log.ra_deg[19]), "dec_deg", 20, log.dec_deg[19]
    )
    assert codes(with_value(place, "duration_s", 19, 900.0)) == [("exposures-overlap", "error")]


def test_one_pair_of_channels_that_start_as_one_is_a_note():
    log = sequence(40, band=np.array(["g", "r"] * 20, dtype=object))
    for column in ("ra_deg", "dec_deg", "start_mjd"):
        log = with_value(log, column, 21, getattr(log, column)[20])
    (finding,) = found(log)
    assert (finding.code, finding.severity) == ("exposures-simultaneous", "note")
    assert finding.rows == (22, 23)


def test_other_fields_in_other_bands_at_once_are_an_error():
    """A mount points one way at a time, whatever the band."""
    log = sequence(40, band=np.array(["g", "r"] * 20, dtype=object))
    assert found(log) == []
    spoilt = with_value(log, "start_mjd", 21, log.start_mjd[20])
    (finding,) = found(spoilt)
    assert (finding.code, finding.severity) == ("exposures-overlap", "error")
    assert finding.rows == (22, 23)


def test_detectors_in_rows_of_their_own_are_a_note():
    base = sequence(10)
    log = replace(base.take(np.repeat(np.arange(10), 4)), row=np.arange(40) + 2)
    region = [f"CIRCLE ICRS {150 + i} {j} 0.2" for i in range(10) for j in range(4)]
    log = replace(log, region=np.array(region, dtype=object))
    assert codes(log) == [("exposures-simultaneous", "note")]
    # The longest of the rows is what the next exposure waits for.
    long = with_value(log, "duration_s", 15, 400.0)
    assert ("exposures-overlap", "error") in codes(long)
    # Where a single start was copied down by mistake, it is an error.
    slip = with_value(base, "start_mjd", 5, base.start_mjd[4])
    assert codes(slip) == [("exposures-overlap", "error")]


def test_several_cameras_in_one_log_are_something_to_look_at():
    one, two = sequence(seed=1), sequence(seed=2)
    columns = ("ra_deg", "dec_deg", "start_mjd", "duration_s", "band", "exposure", "angle_deg")
    columns += ("depth", "extinction", "region")
    both = {name: np.concatenate([getattr(one, name), getattr(two, name)]) for name in columns}
    log = replace(one, read=80, row=np.arange(80) + 2, **both)
    assert codes(log) == [("exposures-overlap", "caution")]


def test_a_log_sent_twice_is_not_an_overlap_as_well():
    clean = sequence()
    coarse = to_step(clean, 1.0)
    columns = ("ra_deg", "dec_deg", "duration_s", "band", "angle_deg", "depth", "extinction")
    both = {name: np.tile(getattr(clean, name), 2) for name in (*columns, "region")}
    log = replace(
        clean,
        read=80,
        row=np.arange(80) + 2,
        exposure=np.array([str(i) for i in range(80)], dtype=object),
        start_mjd=np.concatenate((clean.start_mjd, coarse.start_mjd)),
        **both,
    )
    assert found(log) == []


# --- durations, odd and identical times ------------------------------------------------


def test_exposure_times_of_nothing_and_of_hours():
    clean = sequence(seconds=30.0, overhead=9000.0)
    log = clean
    for row in (3, 4, 9, 30):
        log = with_value(log, "duration_s", row, 0.0)
    (zero,) = found(log)
    assert (zero.code, zero.severity, zero.rows) == ("duration-zero", "caution", (5, 6, 11, 32))
    assert "4 of 40 exposures have" in zero.text
    (long,) = found(with_value(clean, "duration_s", 8, 7201.0), "duration-long")
    assert (long.severity, long.rows) == ("caution", (10,))
    assert found(with_value(clean, "duration_s", 8, 3600.0), "duration-long") == []


def test_every_exposure_at_one_time():
    log = replace(sequence(12), start_mjd=np.full(12, EVENT_MJD + 0.1))
    (finding,) = found(log)
    assert (finding.code, finding.severity) == ("start-identical", "error")
    assert finding.rows == tuple(range(2, 14))
    # The detectors of one exposure, or too few rows to tell.
    one_field = replace(log, ra_deg=np.linspace(150, 152, 12), dec_deg=np.linspace(0, 2, 12))
    assert codes(one_field) == [("start-identical", "caution")]
    assert found(log.take(np.arange(4)), "start-identical") == []
    # Regions are as far apart as their centres; vast ones are nowhere.
    assert codes(by_regions(log, 1)) == [("start-identical", "error")]
    assert codes(by_regions(one_field, 1)) == [("start-identical", "caution")]
    assert codes(by_regions(log, 60)) == [("start-identical", "caution")]


@pytest.mark.parametrize("minute", [0, 37, 59])
def test_starts_that_have_lost_their_minutes(minute):
    clean = sequence(40, overhead=700.0)
    hour = np.floor(clean.start_mjd * 24) / 24
    for seconds in (np.zeros(40), np.random.default_rng(3).uniform(0, 59, 40)):
        lost = replace(clean, start_mjd=hour + minute * MINUTE + seconds * SECOND)
        finding = found(lost, "start-same-minute")[0]
        assert finding.severity == "caution"
        assert f"begin {minute} minute" in finding.text
        assert len(finding.rows) == 40
    assert found(clean) == []


def test_a_burst_within_one_minute_is_in_order():
    start = EVENT_MJD + 0.1 + np.concatenate([np.arange(10), 3600 + np.arange(10)]) * 1.0 * SECOND
    log = log_table("Heron", np.full(20, 150.0), np.zeros(20), start=start, duration=0.9)
    assert found(log) == []


# --- dates -----------------------------------------------------------------------------


def test_counted_exposures_before_the_event_are_an_error():
    log = with_value(sequence(), "start_mjd", 0, EVENT_MJD - 0.1)
    (finding,) = found(log)
    assert (finding.code, finding.severity, finding.rows) == ("start-before-event", "error", (2,))


def test_rows_of_another_year_among_the_others(tmp_path):
    rows = [f"a{i},15{i},-8,2031-03-14T20:0{i}:00,30,r" for i in range(8)]
    reference = [f"r{i},15{i},-8,2030-03-14T20:0{i}:00,30,r" for i in range(2)]
    loaded = load(tmp_path, {"Heron": [*reference, *rows]})
    assert time_findings(loaded) == []
    rows[4] = rows[4].replace("2031", "2030")
    (finding,) = time_findings(load(tmp_path, {"Heron": [*reference, *rows]}))
    assert (finding.code, finding.severity, finding.rows) == ("start-long-before", "caution", (8,))
    assert "2030-03-14 20:04 UTC" in finding.text


def test_exposures_long_after_all_the_others():
    clean = sequence()
    late = with_value(clean, "start_mjd", 5, EVENT_MJD + 365)
    (finding,) = found(late)
    assert (finding.code, finding.severity, finding.rows) == ("start-long-after", "caution", (7,))
    # A campaign that goes on, by itself or with others, is none of that.
    again = replace(clean, start_mjd=clean.start_mjd + np.repeat(np.arange(8) * 25.0, 5))
    assert found(again) == []
    other = telescope("Plover", None, log_table("Plover", [1.0], [1.0], start=EVENT_MJD + 20))
    month = with_value(clean, "start_mjd", 39, EVENT_MJD + 40)
    assert [f.code for f in found(month)] == ["start-long-after"]
    assert found(month, others=[other]) == []
    skymap = replace(distance_map(), issued_mjd=EVENT_MJD + 15)
    assert found(month, maps=[skymap]) == []


def test_exposures_after_the_log_was_written():
    clean = sequence()
    end = float(clean.start_mjd.max())
    assert found(replace(clean, modified_mjd=end + 0.1)) == []
    assert found(replace(clean, modified_mjd=EVENT_MJD - 0.1)) == []
    middle = float(clean.start_mjd[20]) + MINUTE
    (finding,) = found(replace(clean, modified_mjd=middle))
    assert (finding.code, finding.severity) == ("start-after-file", "caution")
    assert set(finding.rows) == set(clean.row[clean.start_mjd > middle + 10 * MINUTE])
    later = replace(clean, start_mjd=clean.start_mjd + 2)
    assert codes(replace(later, modified_mjd=middle)) == [("start-after-file", "error")]


# --- clocks ----------------------------------------------------------------------------


def almanac(site, mjd, ra, dec):
    """Altitudes of the Sun and of targets, degrees."""
    days = np.asarray(mjd) - 51544.5
    anomaly = np.radians(357.528 + 0.9856003 * days)
    ecliptic = 280.460 + 0.9856474 * days + 1.915 * np.sin(anomaly) + 0.020 * np.sin(2 * anomaly)
    tilt = np.radians(23.439 - 4e-7 * days)
    sun_ra = np.arctan2(np.cos(tilt) * np.sin(np.radians(ecliptic)), np.cos(np.radians(ecliptic)))
    sun_dec = np.arcsin(np.sin(tilt) * np.sin(np.radians(ecliptic)))
    sidereal = np.radians(280.46062 + 360.98564737 * days + site.longitude_deg)

    def altitude(a, d):
        lat = np.radians(site.latitude_deg)
        sine = np.sin(lat) * np.sin(d) + np.cos(lat) * np.cos(d) * np.cos(sidereal - a)
        return np.degrees(np.arcsin(sine))

    return altitude(sun_ra, sun_dec), altitude(np.radians(ra), np.radians(dec))


def dark_night(site, *, seed=0, n=50, sun=-14.0, share=1.0, after=0.0, field=330.0):
    """A log of one dark night at a site: fields about one right ascension while they are up."""
    rng = np.random.default_rng(seed)
    fine = EVENT_MJD + after + np.arange(0.0, 1.5, MINUTE)
    ra, dec = field + rng.uniform(-6, 6, fine.size), -10 + rng.uniform(-6, 6, fine.size)
    sun_altitude, altitude = almanac(site, fine, ra, dec)
    good = np.flatnonzero((sun_altitude < sun) & (altitude > 15))
    # One night only: up to the first hour without any.
    stop = np.flatnonzero(np.diff(good) > 60)
    good = good[: stop[0] + 1] if stop.size else good
    good = good[: max(n, int(share * good.size))]
    rows = good[np.linspace(0, good.size - 1, n).astype(int)]
    assert np.unique(rows).size == n
    return log_table("Heron", ra[rows], dec[rows], start=fine[rows], duration=30.0)


def moved(log, hours):
    return replace(log, start_mjd=log.start_mjd + hours * HOUR)


SITES = {
    9: Site(135.2, -28.0, 900.0),
    7: Site(104.87, -23.9, 640.0),
    -6: Site(-95.32, -25.41, 2210.0),
    -10: Site(-150.0, 12.0, 3000.0),
    1: Site(2.64, -19.27, 1480.0),
}


def test_the_formulae_of_these_tests_agree_with_astropy():
    """Its Sun and its horizon, in a year that its tables of the Earth's rotation cover."""
    site, mjd = SITES[-6], 58_000 + np.linspace(0, 365, 50)
    place = EarthLocation.from_geodetic(site.longitude_deg * u.deg, site.latitude_deg * u.deg)
    time = Time(mjd, format="mjd", scale="utc")
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        sun = get_sun(time).transform_to(AltAz(obstime=time, location=place)).alt.deg
    assert np.abs(almanac(site, mjd, 150.0, -10.0)[0] - sun).max() < 0.02


@pytest.mark.parametrize("zone", SITES)
def test_a_log_in_utc_is_in_order(zone):
    site = SITES[zone]
    assert found(dark_night(site), site=site) == []
    assert found(dark_night(site, share=0.2, n=20), site=site) == []


@pytest.mark.parametrize("zone", [9, 7, -10])
def test_a_log_in_local_time_is_an_error_that_says_so(zone):
    site = SITES[zone]
    # Late enough that no row falls before the event.
    local = moved(dark_night(site, after=0.6 if zone > 0 else 1.0), zone)
    sun, altitude = almanac(site, local.start_mjd, local.ra_deg, local.dec_deg)
    impossible = (sun > -6) | (altitude < 0)
    assert impossible.mean() > 0.5
    (finding,) = found(local, site=site)
    assert (finding.code, finding.severity) == ("clock-shifted", "error")
    assert finding.rows == tuple(local.row)
    assert f"in {impossible.sum()} of 50 rows" in finding.text
    way = "earlier" if zone > 0 else "later"
    assert f"{abs(zone)} h {way}, 50 of 50" in finding.text
    assert f"UTC{zone:+d}" in finding.text
    assert "No time was moved" in finding.done


def test_a_shift_of_which_less_than_half_shows_is_something_to_look_at():
    site = SITES[7]
    late = moved(dark_night(site, after=0.6), 3)
    sun, altitude = almanac(site, late.start_mjd, late.ra_deg, late.dec_deg)
    assert 0.2 < ((sun > -6) | (altitude < 0)).mean() < 0.5
    (finding,) = found(late, site=site)
    assert (finding.code, finding.severity) == ("clock-shifted", "caution")


def test_a_shift_that_hardly_shows_is_no_matter_of_the_clock():
    """One hour: the last few rows in daylight, as a late twilight or a slip would be."""
    site = SITES[7]
    late = moved(dark_night(site, after=0.6), 1)
    sun, altitude = almanac(site, late.start_mjd, late.ra_deg, late.dec_deg)
    assert 0 < ((sun > -6) | (altitude < -2)).sum() < 10
    assert found(late, site=site) == []


def test_what_no_shift_mends_is_no_matter_of_the_clock():
    """Days and nights alike: times that were never of exposures."""
    log = dark_night(SITES[7])
    start = EVENT_MJD + 0.6 + np.arange(50) * 0.47 * HOUR
    assert found(replace(log, start_mjd=start), "clock-shifted", site=SITES[7]) == []


@pytest.mark.parametrize("sun", [-13.0, -9.0, -7.0])
def test_twilight_is_no_wrong_clock(sun):
    """A target of opportunity in the last minutes of the night."""
    site = SITES[-6]
    fine = EVENT_MJD + np.arange(0.0, 1.0, MINUTE / 6)
    sun_altitude, altitude = almanac(site, fine, 60.0, 10.0)
    start = fine[(np.abs(sun_altitude - sun) < 0.8) & (altitude > 20)]
    assert start.size >= 20
    log = log_table("Heron", np.full(start.size, 60.0), np.full(start.size, 10.0), start=start)
    assert found(replace(log, duration_s=np.full(start.size, 5.0)), site=site) == []


@pytest.mark.parametrize("radius", [1, 60])
def test_regions_are_judged_by_their_centres_and_vast_ones_by_the_sun_alone(radius):
    site = SITES[9]
    clean = by_regions(dark_night(site, after=0.6), radius)
    assert found(clean, site=site) == []
    assert codes(moved(clean, 9), site=site) == [("clock-shifted", "error")]


def test_reference_in_local_time_is_moved_with_the_rest():
    """No hour brings rows of two days before past the event; they need not come past it."""
    site = SITES[7]
    night = dark_night(site, after=0.6)
    past = replace(night, start_mjd=night.start_mjd - 4.0 * 0.99727)  # sidereal days
    log = replace(moved(night, 7), before_event=moved(past, 7))
    (finding,) = found(log, site=site)
    assert (finding.code, finding.severity) == ("clock-shifted", "error")
    assert "7 h earlier" in finding.text
    assert "of 100 are in the dark" in finding.text


def test_a_region_below_the_horizon_tells_of_the_clock_by_night():
    """Two hours late by the clock, in the dark all the while, but the field had set."""
    site = SITES[7]
    fine = EVENT_MJD + 0.4 + np.arange(0.0, 1.0, MINUTE)
    sun, altitude = almanac(site, fine, 250.0, -10.0)
    start = fine[(sun < -14) & (altitude > 5) & (altitude < 20)]
    late = log_table("Heron", np.full(start.size, 250.0), np.full(start.size, -10.0), duration=30.0)
    late = replace(late, start_mjd=start + 2 * HOUR)
    assert (almanac(site, late.start_mjd, 250.0, -10.0)[0] < -12).all()
    assert codes(by_regions(late, 1), site=site) == [("clock-shifted", "error")]
    assert codes(by_regions(late, 60), site=site) == []


def test_without_a_site_no_clock_is_judged():
    assert found(moved(dark_night(SITES[9], after=0.6), 9)) == []


def test_a_site_on_the_wrong_side_points_to_its_longitude():
    site = SITES[-6]
    wrong = replace(site, longitude_deg=-site.longitude_deg)
    (finding,) = found(dark_night(site, after=0.6), "clock-shifted", site=wrong)
    assert "sign of the site's longitude" in finding.remedy


def csv(log):
    zero = datetime(1858, 11, 17)
    return [
        f"e{i},{ra:.4f},{dec:.4f},{zero + timedelta(days=float(start)):%Y-%m-%dT%H:%M:%S},30,r"
        for i, (ra, dec, start) in enumerate(zip(log.ra_deg, log.dec_deg, log.start_mjd))
    ]


def site_text(site):
    return f"site = {{ longitude = {site.longitude_deg}, latitude = {site.latitude_deg} }}"


def test_a_western_log_in_local_time_falls_before_the_event(tmp_path):
    """All rows are set aside as taken before the event: the audit reads them nevertheless."""
    site = SITES[-6]
    night = dark_night(site)
    event = datetime(1858, 11, 17) + timedelta(days=float(night.start_mjd[0]) - 0.5 * HOUR)
    time = f"{event:%Y-%m-%dT%H:%M:%SZ}"
    other = ["o1,150,-8,2032-01-01T00:00:00,30,r"]
    west = csv(moved(night.take(np.arange(20)), -6))
    loaded = load(tmp_path, {"Heron": west, "Plover": other}, time=time, site=site_text(site))
    assert len(loaded.telescopes[0].log) == 0
    (finding,) = of_campaign(loaded, "clock-shifted")
    assert finding.rows == tuple(range(2, 22))
    assert "6 h later" in finding.text
    true = csv(night.take(np.arange(20)))
    loaded = load(tmp_path, {"Heron": true, "Plover": other}, time=time, site=site_text(site))
    assert of_campaign(loaded, "clock-shifted") == []


def test_dark_rows_that_all_precede_the_event_are_something_to_look_at(tmp_path):
    """The end of a night in local time is still dark: only the event tells."""
    site = SITES[-6]
    night = dark_night(site)
    night = night.take(np.flatnonzero(night.start_mjd > night.start_mjd[-1] - 2.5 * HOUR))
    event = datetime(1858, 11, 17) + timedelta(days=float(night.start_mjd[0]) - 0.5 * HOUR)
    local = moved(night, -6)
    assert (almanac(site, local.start_mjd, 330.0, -10.0)[0] < -12).all()
    files = {"Heron": csv(local), "Plover": ["o1,150,-8,2032-01-01T00:00:00,30,r"]}
    time = f"{event:%Y-%m-%dT%H:%M:%SZ}"
    (finding,) = of_campaign(
        load(tmp_path, files, time=time, site=site_text(site)), "clock-shifted"
    )
    assert finding.severity == "caution"
    assert "in the hours before the event" in finding.text
    assert f"6 h later, {len(night)} of {len(night)}" in finding.text
    # Five hours would leave the first half hour before the event.
    assert "+5" not in finding.text


def test_reference_of_other_nights_is_judged_by_the_sky_alone():
    site = SITES[-6]
    night = dark_night(site)
    past = replace(night, start_mjd=night.start_mjd - 2.0 * 0.99727)  # sidereal days
    assert found(replace(night, before_event=past), site=site) == []


@pytest.mark.parametrize("seed", range(20))
def test_clean_logs_of_any_site_give_no_findings(seed):
    rng = np.random.default_rng(seed)
    site = Site(rng.uniform(-180, 360), rng.uniform(-50, 30), rng.uniform(0, 4000))
    log = dark_night(site, seed=seed, n=int(rng.integers(3, 60)), share=rng.uniform(0.15, 1))
    assert found(log, site=site) == []


# --- day and month ---------------------------------------------------------------------


def swapped(rows):
    """What a spreadsheet of the other convention makes of dates: day and month exchanged."""
    out = []
    for row in rows:
        cells = row.split(",")
        when = date.fromisoformat(cells[3][:10])
        if when.day <= 12:
            cells[3] = f"{when.year}-{when.day:02d}-{when.month:02d}{cells[3][10:]}"
        out.append(",".join(cells))
    return out


def nights(days, month=3):
    return [
        f"e{d}{i},15{i},-8,2031-{month:02d}-{d:02d}T2{i}:{17 * i + d:02d}:00,30,r"
        for d in days
        for i in range(3)
    ]


@pytest.mark.parametrize(
    ("days", "month", "event", "moved_days"),
    [
        ((5, 6, 7), 3, "2031-03-04T05:21:08Z", (5, 6, 7)),
        # Only days up to the twelfth change over; the others stay.
        ((11, 12, 13, 14), 3, "2031-03-10T05:21:08Z", (11, 12)),
        # A month on, with nobody else to say that the campaign was over.
        ((4,), 3, "2031-03-03T05:21:08Z", (4,)),
        # They land before the event and are set aside.
        ((4, 5), 9, "2031-09-03T05:21:08Z", (4, 5)),
    ],
)
def test_day_and_month_in_each_others_place(tmp_path, days, month, event, moved_days):
    rows = nights(days, month)
    clean = load(tmp_path, {"Heron": rows}, time=event)
    assert of_campaign(clean, "day-month-swapped", "start-long-after") == []
    loaded = load(tmp_path, {"Heron": swapped(rows)}, time=event)
    finding = time_findings(loaded)[0]
    assert (finding.code, finding.severity) == ("day-month-swapped", "caution")
    wrong = [i + 2 for i, day in enumerate(np.repeat(days, 3)) if day in moved_days]
    assert finding.rows == tuple(wrong)
    assert f"2031-{month:02d}-{moved_days[0]:02d}" in finding.text
    assert "start-long-after" not in {f.code for f in time_findings(loaded)}


def test_dates_that_do_not_all_fit_when_exchanged_stay_as_they_are(tmp_path):
    rows = nights((5, 6)) + [x.replace("2031-03", "2031-08") for x in nights((7,))]
    loaded = load(tmp_path, {"Heron": rows}, time="2031-03-04T05:21:08Z")
    assert [f.code for f in time_findings(loaded)] == ["start-long-after"]


def test_reference_days_before_the_event_is_no_exchanged_date(tmp_path):
    rows = nights((2, 3)) + nights((5, 6))
    loaded = load(tmp_path, {"Heron": rows}, time="2031-03-04T05:21:08Z")
    assert of_campaign(loaded, "day-month-swapped") == []


def test_a_few_days_of_reference_before_many_nights_are_no_exchanged_dates(tmp_path):
    many = nights(range(13, 32)) + nights(range(13, 21), month=4)
    logs = {"Heron": nights((2,)) + many, "Plover": many}
    loaded = load(tmp_path, logs, time="2031-03-04T05:21:08Z")
    assert len(loaded.telescopes[0].log.before_event) == 3
    assert of_campaign(loaded, "day-month-swapped") == []


def test_a_slip_in_some_dates_is_not_the_way_the_log_is_written(tmp_path):
    """Other days up to the twelfth are right as they stand."""
    rows = nights((5, 6, 7, 8, 9)) + swapped(nights((10,)))
    loaded = load(tmp_path, {"Heron": rows}, time="2031-03-04T05:21:08Z")
    (finding,) = time_findings(loaded)
    assert (finding.code, finding.rows) == ("start-long-after", (17, 18, 19))


def test_a_log_does_not_vouch_for_itself(tmp_path):
    """Twenty-four days after everybody else: no pause, but by its own word alone."""
    logs = {"Heron": swapped(nights((4,))), "Plover": nights((5, 10))}
    loaded = load(tmp_path, logs, time="2031-03-03T05:21:08Z")
    (finding,) = time_findings(loaded)
    assert (finding.code, finding.subject) == ("day-month-swapped", "Heron")


def test_other_telescopes_say_how_long_the_campaign_was(tmp_path):
    """A month later is in order when others were still observing."""
    late = nights((3,), month=4)
    others = nights((10, 20, 28)) + nights((9,), month=4)
    event = "2031-03-04T05:21:08Z"
    assert [f.code for f in time_findings(load(tmp_path, {"Heron": late}, time=event))]
    loaded = load(tmp_path, {"Heron": late, "Plover": others}, time=event)
    assert time_findings(loaded) == []


def test_dates_impossible_as_logged_and_possible_exchanged_are_an_error(tmp_path):
    """In another month the field is up by day."""
    site = SITES[7]
    zero = datetime(1858, 11, 17)
    event = (datetime(2031, 2, 9) - zero).days
    night = dark_night(site, after=event + 0.4 - EVENT_MJD, share=0.6, field=150.0)
    rows = csv(night)
    text = {"time": "2031-02-09T05:21:08Z", "site": site_text(site)}
    assert time_findings(load(tmp_path, {"Heron": rows}, **text)) == []
    finding = time_findings(load(tmp_path, {"Heron": swapped(rows)}, **text))[0]
    assert (finding.code, finding.severity) == ("day-month-swapped", "error")
    # A month later the night is much the same, and as logged all could be.
    night = dark_night(
        site, after=(datetime(2031, 2, 3) - zero).days + 0.4 - EVENT_MJD, field=150.0
    )
    rows = csv(night.take(np.arange(12)))
    text["time"] = "2031-02-02T05:21:08Z"
    assert all("2031-02-03" in row for row in rows)
    finding = time_findings(load(tmp_path, {"Heron": swapped(rows)}, **text))[0]
    assert (finding.code, finding.severity) == ("day-month-swapped", "caution")
