"""Rows of logs: every one accounted for, none counted twice, planted faults beside clean logs.

What each finding must name is known from how the log was spoilt. The worst rounding of
a start or a coordinate is half a unit of its last digit (a whole one where digits are cut).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from skytally.audit_rows import (
    counted,
    duplicate_findings,
    reconciliation_findings,
    resent_rows,
    row_words,
    time_resolution_s,
)
from skytally.campaign import load_campaign
from skytally.observations import LogTable, SetAside

SECOND = 1 / 86400
COLUMNS = ("ra_deg", "dec_deg", "angle_deg", "start_mjd", "duration_s")
COLUMNS += ("band", "depth", "extinction", "region")
HEAD = "exposure,ra,dec,start,duration,band,depth"
CAMPAIGN = """
[event]
name = "Lantern 7"
time = 2031-03-14T05:21:08Z

[[map]]
version = "1 first"
circle = {{ ra = 150.0, dec = -8.0, radius_90 = 2.0 }}
issued = 2031-03-14T05:27:00Z

[[telescope]]
name = "Heron"
camera = {{ shape = "circle", radius = 0.5 }}
log = {{ file = "heron.csv" {more} }}
"""


def load(tmp_path, rows, *, head=HEAD, more=""):
    """A campaign of one log, read from files."""
    (tmp_path / "campaign.toml").write_text(CAMPAIGN.format(more=more))
    (tmp_path / "heron.csv").write_text("\n".join([head, *rows]) + "\n")
    return load_campaign(tmp_path / "campaign.toml")


def of_log(log, name="Heron"):
    return campaign([telescope(name, None, log)], [])


def night(seed, n=60, *, seconds=90.0, decimals=4):
    """A clean log: n fields of one night, some visited again in the same or another band."""
    rng = np.random.default_rng(seed)
    start = EVENT_MJD + 0.03 + np.cumsum(seconds + rng.uniform(8, 40, n)) * SECOND
    field = rng.integers(0, n // 2, n)
    ra, dec = rng.uniform(0, 360, n)[field], rng.uniform(-80, 80, n)[field]
    band = np.array(["g", "r"], dtype=object)[rng.integers(0, 2, n)]
    return log_table(
        "Heron",
        np.round(ra, decimals),
        np.round(dec, decimals),
        start=np.round(start * 86400, 1) / 86400,
        duration=seconds,
        band=band,
    )


def joined(*logs):
    """Logs one after the other in one file, every row with a name of its own."""
    n = sum(len(x) for x in logs)
    columns = {name: np.concatenate([getattr(x, name) for x in logs]) for name in COLUMNS}
    names = np.array([f"{i:04d}" for i in range(n)], dtype=object)
    return replace(logs[0], read=n, row=np.arange(n) + 2, exposure=names, **columns)


def rounded(log, *, seconds=0.0, degrees=0.0, cut=False):
    """The same log with coarser times and coordinates."""

    def coarse(value, step):
        return (np.floor(value / step) if cut else np.round(value / step)) * step

    whole = np.floor(log.start_mjd)
    start = whole + coarse((log.start_mjd - whole) * 86400, seconds) * SECOND if seconds else None
    return replace(
        log,
        start_mjd=log.start_mjd if start is None else start,
        ra_deg=coarse(log.ra_deg, degrees) if degrees else log.ra_deg,
        dec_deg=coarse(log.dec_deg, degrees) if degrees else log.dec_deg,
    )


# --- words -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        ((12,), "row 12"),
        ((12, 13), "rows 12 and 13"),
        ((12, 13, 15), "rows 12, 13 and 15"),
        (range(12, 54), "rows 12, 13 and 40 more"),
    ],
)
def test_rows_are_named_briefly(rows, words):
    assert row_words(rows) == words


def test_words_agree_with_their_count():
    assert counted(1, "row is", "rows are") == "1 row is"
    assert counted(1200, "row is", "rows are") == "1,200 rows are"


@pytest.mark.parametrize("step", [60.0, 8.64, 1.0, 0.864, 0.0864])
def test_the_resolution_of_times_is_that_they_were_rounded_to(step):
    rng = np.random.default_rng(4)
    seconds = np.round(rng.uniform(0, 86400, 40) / step) * step
    assert time_resolution_s(62939 + seconds / 86400) == step
    assert time_resolution_s(62939 + rng.uniform(0, 1, 40)) == 0.0


# --- duplicates ------------------------------------------------------------------------


def test_exact_duplicates_are_gathered_from_a_file(tmp_path):
    rows = [f"a{i},15{i},-8,2031-03-14T20:0{i}:00,30,r,20.5" for i in range(5)]
    assert duplicate_findings(load(tmp_path, rows)) == []
    (finding,) = duplicate_findings(load(tmp_path, [*rows, rows[1], rows[3]]))
    assert (finding.code, finding.severity) == ("rows-repeated", "note")
    assert finding.subject == "Heron"
    assert finding.rows == (7, 8)
    assert "rows 7 and 8 are set aside" in finding.done


def test_a_duplicate_with_a_name_of_its_own_may_be_an_exposure_of_its_own(tmp_path):
    rows = [f"a{i},15{i},-8,2031-03-14T20:0{i}:00,30,r,20.5" for i in range(5)]
    again = "b7,152,-8,2031-03-14T20:02:00,30,r,20.9"
    (finding,) = duplicate_findings(load(tmp_path, [*rows, again]))
    assert (finding.code, finding.severity) == ("rows-repeated-renamed", "caution")
    assert finding.rows == (7,)
    assert "b7" in finding.text


def test_rows_without_names_that_repeat_are_no_reason_to_look(tmp_path):
    rows = [f"15{i},-8,2031-03-14T20:0{i}:00,30,r" for i in range(5)]
    loaded = load(tmp_path, [*rows, rows[0]], head="ra,dec,start,duration,band")
    (finding,) = duplicate_findings(loaded)
    assert (finding.code, finding.rows) == ("rows-repeated", (7,))


@pytest.mark.parametrize(
    "how",
    [
        {"seconds": 1.0},
        {"seconds": 1.0, "cut": True},
        {"seconds": 0.864},
        {"seconds": 1.0, "degrees": 0.001},
        {"seconds": 1.0, "degrees": 0.01},
        {"seconds": 1.0, "degrees": 15 / 3600, "cut": True},
        {"degrees": 0.0005},
    ],
)
def test_a_log_sent_twice_with_fewer_digits_is_found_whole(how):
    clean = night(seed=3)
    copy = rounded(clean, **how)
    changed = np.flatnonzero(
        (copy.start_mjd != clean.start_mjd)
        | (copy.ra_deg != clean.ra_deg)
        | (copy.dec_deg != clean.dec_deg)
    )
    assert changed.size > 0.8 * len(clean)
    both = joined(clean, copy.take(changed))
    assert np.flatnonzero(resent_rows(both)).tolist() == list(
        range(len(clean), len(clean) + changed.size)
    )
    (finding,) = duplicate_findings(of_log(both))
    assert (finding.code, finding.severity) == ("rows-resent", "caution")
    assert finding.rows == tuple(both.row[len(clean) :])
    for word in ("tallied", "visits", "revisits"):
        assert word in finding.done
    assert duplicate_findings(of_log(clean)) == []
    assert duplicate_findings(of_log(copy)) == []


def test_a_single_row_sent_again_is_found_whichever_copy_comes_first():
    clean = night(seed=5)
    copy = rounded(clean.take(np.array([7])), seconds=1.0)
    assert np.flatnonzero(resent_rows(joined(copy, clean))).tolist() == [8]
    assert np.flatnonzero(resent_rows(joined(clean, copy))).tolist() == [60]


def test_copies_are_found_across_the_end_of_right_ascension():
    one = log_table("Heron", [359.9999], [10.0], start=EVENT_MJD + 0.1, duration=60)
    other = log_table("Heron", [0.0001], [10.0], start=EVENT_MJD + 0.1 + 0.4 * SECOND, duration=60)
    assert resent_rows(joined(one, other)).tolist() == [False, True]


def series(gap_s, duration_s, n=50, *, step_arcsec=0.0, band="r", **more):
    """A series of exposures of one field, moved a little each time."""
    start = EVENT_MJD + 0.1 + np.arange(n) * gap_s * SECOND
    ra = 150 + np.arange(n) * step_arcsec / 3600
    log = log_table("Heron", ra, np.zeros(n), start=start, duration=duration_s, band=band)
    return replace(log, **more)


@pytest.mark.parametrize(
    "log",
    [
        series(60.0, 45.0),
        series(60.0, 45.0, step_arcsec=3.0),
        series(1.0, 0.9),
        series(1.2, 1.0),
        series(0.3, 0.3),
        # Back to back, written to the whole second: some starts seem closer than they were.
        rounded(series(1.5, 1.4), seconds=1.0),
        rounded(series(1.5, 1.4), seconds=1.0, cut=True),
        # Several in one minute, written to the minute; the mount trembles.
        rounded(series(20.0, 15.0, step_arcsec=0.5), seconds=60.0, cut=True),
        # Too far apart for rounding, whatever the times.
        series(0.5, 45.0, n=2, step_arcsec=4.0),
        # Exposure times unknown, names of their own.
        series(1.2, 0.0),
        # Two channels at once.
        series(60.0, 45.0, band=np.array(["g", "r"] * 25, dtype=object)),
    ],
)
def test_dithers_and_short_exposures_back_to_back_are_no_copies(log):
    assert not resent_rows(log).any()


def test_without_exposure_times_the_names_tell():
    clean = replace(night(seed=6), duration_s=np.zeros(60))
    both = joined(clean, rounded(clean, seconds=1.0))
    assert not resent_rows(both).any()
    named = replace(both, exposure=np.tile(clean.exposure, 2))
    assert resent_rows(named).tolist() == [False] * 60 + [True] * 60


def test_detectors_in_rows_of_their_own_are_no_copies():
    """One exposure, sixteen rows: one pointing, regions side by side."""
    log = log_table("Heron", np.full(16, 150.0), np.zeros(16), start=EVENT_MJD + 0.1)
    region = [f"CIRCLE ICRS {150 + 0.3 * (i % 4):.5f} {0.3 * (i // 4):.5f} 0.14" for i in range(16)]
    log = replace(log, region=np.array(region, dtype=object))
    assert not resent_rows(log).any()
    # The same with coarser numbers and times is a copy.
    coarse = [f"circle icrs {150 + 0.3 * (i % 4):.2f} {0.3 * (i // 4):.2f} 0.14" for i in range(16)]
    copy = replace(
        log,
        region=np.array(coarse, dtype=object),
        start_mjd=log.start_mjd + 0.4 * SECOND,
    )
    assert resent_rows(joined(log, copy)).tolist() == [False] * 16 + [True] * 16


def test_regions_without_a_pointing_are_compared_too():
    def fields(shift_s):
        log = log_table("Heron", np.full(6, np.nan), np.full(6, np.nan), duration=40)
        region = np.array([f"fields/f{i}.json" for i in range(6)], dtype=object)
        return replace(log, region=region, start_mjd=log.start_mjd + shift_s * SECOND)

    assert not resent_rows(fields(0)).any()
    assert resent_rows(joined(fields(0), fields(0.7))).tolist() == [False] * 6 + [True] * 6


def test_many_rows_at_once_take_no_longer_than_they_must():
    """All starts alike and all fields different: no pairs, and no square of the rows."""
    rng = np.random.default_rng(8)
    log = log_table("Heron", rng.uniform(0, 360, 20_000), rng.uniform(-80, 80, 20_000), start=1e4)
    assert not resent_rows(log).any()


def test_no_rows_and_one_row_have_no_copies():
    assert resent_rows(log_table("Heron", [], [])).tolist() == []
    assert resent_rows(log_table("Heron", [1.0], [1.0])).tolist() == [False]


# --- read = used + set aside -----------------------------------------------------------


def aside(row, reason, detail="Column 'ra' holds 'x'."):
    return SetAside("Heron", "heron.csv", row, f"e{row}", reason, detail)


def test_what_became_of_the_rows_of_a_file(tmp_path):
    clean = [f"a{i},15{i},-8,2031-03-14T20:0{i}:00,30,r,20.5,ok" for i in range(6)]
    spoilt = [
        *clean,
        "b1,150,-8,2031-03-13T20:00:00,30,r,20.5,ok",
        "b2,150,-8,2031-03-14T21:00:00,30,r,20.5,cloud",
        "b3,150,-8,2031-03-14T21:10:00,30,r,20.5,cloud",
        "b4,north,-8,2031-03-14T21:20:00,30,r,20.5,ok",
        "b5,150,,2031-03-14T21:30:00,30,r,20.5,ok",
        clean[2],
    ]
    head, more = HEAD + ",quality", ', accept = ["ok"]'
    assert reconciliation_findings(load(tmp_path, clean, head=head, more=more)) == []
    sums, faulty = reconciliation_findings(load(tmp_path, spoilt, head=head, more=more))
    assert (sums.code, sums.severity, sums.rows) == ("rows-set-aside", "note", (*range(8, 14),))
    assert "Of 12 rows read, 6 are used and 6 set aside" in sums.text
    for part in ("2 not accepted", "1 before the event", "1 unreadable", "1 missing"):
        assert part in sums.text
    assert "1 duplicate" in sums.text
    assert (faulty.code, faulty.severity, faulty.rows) == ("rows-unreadable", "caution", (11, 12))
    assert "'north'" in faulty.text


def test_rows_that_do_not_add_up_are_an_error():
    log = log_table("Heron", [1.0, 2.0], [0.0, 0.0])
    whole = replace(log, read=3, set_aside=(aside(4, "not accepted"),))
    assert [f.code for f in reconciliation_findings(of_log(whole))] == ["rows-set-aside"]
    found = reconciliation_findings(of_log(replace(whole, read=4)))
    assert [(f.code, f.severity) for f in found] == [
        ("rows-do-not-add-up", "error"),
        ("rows-set-aside", "note"),
    ]
    assert "4 rows were read" in found[0].text


def test_a_log_of_which_nothing_counts_is_an_error(tmp_path):
    early = [f"a{i},15{i},-8,2031-03-13T20:0{i}:00,30,r,20.5" for i in range(3)]
    found = reconciliation_findings(load(tmp_path, early))
    assert [(f.code, f.severity) for f in found] == [
        ("rows-set-aside", "note"),
        ("log-without-exposures", "error"),
    ]
    assert "3 before the event" in found[1].text
    assert found[1].rows == (2, 3, 4)


def test_a_log_that_cannot_be_read_is_an_error_and_nothing_else():
    log = replace(log_table("Heron", [], []), fault="heron.csv: it is empty. Give the log.")
    (finding,) = reconciliation_findings(of_log(log))
    assert (finding.code, finding.severity) == ("log-unreadable", "error")
    assert "it is empty" in finding.text
    assert duplicate_findings(of_log(log)) == []


def test_findings_are_of_the_telescope_they_concern():
    good, bad = night(seed=1), replace(night(seed=2), set_aside=(aside(1, "missing"),), read=61)
    both = campaign([telescope("Heron", None, good), telescope("Plover", None, bad)], [])
    assert {f.subject for f in reconciliation_findings(both)} == {"Plover"}


@pytest.mark.parametrize("seed", range(12))
def test_clean_logs_give_no_findings(seed):
    rng = np.random.default_rng(seed)
    log = night(seed, n=150, seconds=float(rng.uniform(0.5, 600)), decimals=int(rng.integers(2, 6)))
    assert isinstance(log, LogTable)
    for how in ({}, {"seconds": 1.0}, {"seconds": 8.64}, {"seconds": 60.0, "cut": True}):
        loaded = of_log(rounded(log, **how))
        assert duplicate_findings(loaded) == []
        assert reconciliation_findings(loaded) == []
