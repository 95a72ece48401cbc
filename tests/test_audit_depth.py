"""Limits and names of bands: planted faults beside clean logs.

Limits are drawn about a background-limited law, m = m₁ + 1.25 log₁₀ t (common practice:
the limiting flux falls with the square root of the exposure time).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from campaign_builder import campaign, log_table, telescope
from skytally.audit_depth import band_findings, depth_findings
from skytally.campaign import load_campaign


def of_logs(*logs):
    names = ("Heron", "Plover", "Avocet", "Dunlin")
    return campaign([telescope(n, None, log) for n, log in zip(names, logs)], [])


def night(n=60, *, seed=1, slope=1.25, times=(60.0,), scatter=0.08, bands=("g", "r")):
    """A clean log; limits to a hundredth, thin clouds for a tenth of it."""
    rng = np.random.default_rng(seed)
    duration = rng.choice(times, n)
    band = np.array([bands[i % len(bands)] for i in range(n)], dtype=object)
    zero = np.array([{b: 21.5 - 0.4 * i for i, b in enumerate(bands)}[b] for b in band])
    cloud = np.where(np.arange(n) < n // 10, rng.uniform(0.3, 2.0, n), 0.0)
    depth = zero + slope * np.log10(duration / 60) + rng.normal(0, scatter, n) - cloud
    ra, dec = rng.uniform(0, 360, n), rng.uniform(-60, 60, n)
    return log_table("Heron", ra, dec, duration=duration, band=band, depth=np.round(depth, 2))


def with_depth(log, places, value):
    depth = log.depth.copy()
    depth[places] = value
    return replace(log, depth=depth)


def with_bands(*bands):
    n = 3 * len(bands)
    return log_table(
        "Heron", np.arange(n), np.zeros(n), band=np.repeat(np.array(bands, dtype=object), 3)
    )


# --- limits ----------------------------------------------------------------------------


@pytest.mark.parametrize("seed", range(20))
@pytest.mark.parametrize("slope", [0.0, 1.25, 2.5])
def test_clean_limits_give_no_findings(seed, slope):
    """Any mix of exposure times, limited by the sky, by the detector or by neither."""
    log = night(seed=seed, slope=slope, times=(10.0, 30.0, 60.0, 300.0, 900.0))
    assert depth_findings(of_logs(log)) == []
    assert depth_findings(of_logs(night(seed=seed, scatter=0.001))) == []


def test_missing_limits_are_counted_by_band():
    log = with_depth(night(), [3, 4, 5, 8], np.nan)
    (finding,) = depth_findings(of_logs(log))
    assert (finding.code, finding.severity) == ("depth-missing", "note")
    assert finding.rows == (5, 6, 7, 10)
    assert finding.text.startswith("4 of 60 exposures have no limiting magnitude")
    assert "2 of 30 in g" in finding.text
    assert "2 of 30 in r" in finding.text
    most = with_depth(night(), np.arange(31), np.nan)
    assert [(f.code, f.severity) for f in depth_findings(of_logs(most))] == [
        ("depth-missing", "caution")
    ]
    none = with_depth(night(), np.arange(60), np.nan)
    assert [f.code for f in depth_findings(of_logs(none))] == ["depth-missing"]


@pytest.mark.parametrize(
    ("value", "severity"),
    [
        (31.4, "error"),
        (210.5, "error"),
        (30.01, "error"),
        (0.0, "error"),
        (-21.4, "error"),
        (2.14, "error"),
        (7.9, "caution"),
        (5.5, "caution"),
    ],
)
def test_limits_that_no_telescope_reaches_or_states(value, severity):
    found = depth_findings(of_logs(with_depth(night(), [7, 20], value)))
    assert [(f.code, f.severity) for f in found] == [("depth-out-of-range", severity)]
    assert found[0].rows == (9, 22)
    assert f"{value:g}" in found[0].text


@pytest.mark.parametrize("value", [8.0, 30.0])
def test_the_ends_of_the_range_are_within_it(value):
    codes = [f.code for f in depth_findings(of_logs(with_depth(night(), [7], value)))]
    assert "depth-out-of-range" not in codes


@pytest.mark.parametrize(
    ("change", "words"), [(2.0, "2.0 mag deeper"), (9.0, None), (-9.0, "9.0 mag shallower")]
)
def test_a_limit_that_stands_out_is_named(change, words):
    clean = night(scatter=0.03)
    log = with_depth(clean, [31], clean.depth[31] + change)
    found = [f for f in depth_findings(of_logs(log)) if f.code == "depth-outlier"]
    if clean.depth[31] + change > 30:
        assert found == []  # said to be out of range instead
        return
    (finding,) = found
    assert (finding.severity, finding.rows) == ("caution", (33,))
    assert "Row 33 states" in finding.text
    size = float(finding.text.split(", ")[-1].split()[0])
    assert size == pytest.approx(abs(change), abs=0.11)
    assert words.split()[-1] in finding.text


def test_a_limit_of_a_long_exposure_is_judged_by_its_time():
    """22.75 mag is 1.25 mag deeper than 60 s give, and just what 600 s give."""
    log = night(bands=("r",), scatter=0.03, times=(60.0,) * 3 + (600.0,) * 2)
    assert depth_findings(of_logs(log)) == []
    short = int(np.flatnonzero((log.duration_s == 60) & (np.arange(60) > 10))[0])
    deep = with_depth(log, [short], 21.5 + 1.25 + 2.0)
    (finding,) = depth_findings(of_logs(deep))
    assert (finding.code, finding.rows) == ("depth-outlier", (short + 2,))


@pytest.mark.parametrize("slope", [0.0, 1.25, 2.5])
def test_a_few_long_exposures_follow_their_own_law(slope):
    """A fifth of 1500 s among 60 s: up to 3.5 mag deeper, and as it should be."""
    log = night(80, bands=("r",), slope=slope, times=(60.0,) * 9 + (1500.0,), seed=9)
    assert 8 < (log.duration_s == 1500).sum() < 20
    assert depth_findings(of_logs(log)) == []


def test_a_dark_hour_and_a_fickle_site_are_in_order():
    calm = night(scatter=0.01)
    assert depth_findings(of_logs(with_depth(calm, [30], calm.depth[30] + 1.3))) == []
    assert depth_findings(of_logs(night(200, scatter=0.7))) == []


def test_each_telescope_and_band_is_judged_by_itself():
    deep = night(seed=3)
    deep = replace(deep, depth=deep.depth + 3.0)
    assert depth_findings(of_logs(night(), deep)) == []


def test_too_few_limits_tell_nothing():
    log = night(8, bands=("r",), scatter=0.02)
    few = log.take(np.arange(7))
    assert depth_findings(of_logs(with_depth(few, [5], 25.0))) == []
    assert [f.code for f in depth_findings(of_logs(with_depth(log, [5], 25.0)))] == [
        "depth-outlier"
    ]


def test_the_same_limit_in_every_row_is_a_nominal_value():
    log = night()
    r = log.band == "r"
    nominal = with_depth(log, r, 21.3)
    (finding,) = depth_findings(of_logs(nominal))
    assert (finding.code, finding.severity) == ("depth-identical", "caution")
    assert finding.rows == tuple(log.row[r])
    assert "21.3 in r in all 30 rows" in finding.text
    both = with_depth(nominal, ~r, 21.7)
    (finding,) = depth_findings(of_logs(both))
    assert finding.rows == tuple(log.row)
    # One measured limit among them, or four rows, and it is none.
    assert depth_findings(of_logs(with_depth(nominal, [1], 21.31))) == []
    four = log_table("Heron", np.arange(4), np.zeros(4), depth=21.3)
    assert depth_findings(of_logs(four)) == []
    five = log_table("Heron", np.arange(5), np.zeros(5), depth=21.3)
    assert [f.code for f in depth_findings(of_logs(five))] == ["depth-identical"]


def test_the_campaigns_default_is_said_to_be_one():
    log = log_table("Heron", np.arange(12), np.zeros(12), depth=20.5)
    (finding,) = depth_findings(of_logs(log), {"Heron": 20.5})
    assert (finding.code, finding.severity) == ("depth-default", "note")
    assert finding.rows == tuple(log.row)
    assert "20.50 mag" in finding.text
    # Where some are measured, only the others are the default's.
    some = with_depth(night(), [4, 9], 20.5)
    (finding,) = depth_findings(of_logs(some), {"Heron": 20.5})
    assert (finding.code, finding.rows) == ("depth-default", (6, 11))
    assert [f.code for f in depth_findings(of_logs(log), {"Plover": 20.5})] == ["depth-identical"]


def test_limits_as_logs_write_them(tmp_path):
    """A sentinel is missing, a flux in place of a magnitude is out of range."""
    (tmp_path / "campaign.toml").write_text(
        '[event]\nname = "Lantern 7"\ntime = 2031-03-14T05:21:08Z\n'
        '[[map]]\nversion = "1"\ncircle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }\n'
        '[[telescope]]\nname = "Heron"\ncamera = { shape = "circle", radius = 0.5 }\n'
        'log = "heron.csv"\n'
    )
    limits = ["20.51", "-99", ">20.6", "20.48", "412.0", "", "20.55"]
    rows = [f"15{i},-8,2031-03-14T20:0{i}:00,30,r,{x}" for i, x in enumerate(limits)]
    (tmp_path / "heron.csv").write_text("\n".join(["ra,dec,start,duration,band,depth", *rows]))
    missing, wrong = depth_findings(load_campaign(tmp_path / "campaign.toml"))
    assert (missing.code, missing.rows) == ("depth-missing", (3, 7))
    assert (wrong.code, wrong.severity, wrong.rows) == ("depth-out-of-range", "error", (6,))


def test_a_log_without_rows_has_no_limits():
    assert depth_findings(of_logs(log_table("Heron", [], []))) == []


# --- bands -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    "bands",
    [
        ("g", "r", "i", "z"),
        ("B", "V", "Rc", "Ic"),
        ("r", "Rc"),
        ("J", "H", "Ks"),
        ("w", "clear", "white"),
        ("uvw1", "uvw2"),
        ("Halpha", "H"),
        ("g", "gri"),
        ("F606W", "F814W"),
        ("r", ""),
    ],
)
def test_different_bands_are_left_alone(bands):
    assert band_findings(of_logs(with_bands(*bands))) == []


@pytest.mark.parametrize(
    "bands",
    [
        ("r", "r'"),
        ("r", "r_band"),
        ("r", "r-Band"),
        ("r", "cam2-r"),
        ("r", "rp"),
        ("g", "g filter"),
        ("clear", "Clear"),
        ("R", "Rc"),
        ("K", "Ks"),
        ("r", "r’", "r_p", "cam2_r"),
    ],
)
def test_two_spellings_of_a_band_are_something_to_look_at(bands):
    (finding,) = band_findings(of_logs(with_bands(*bands, "i")))
    assert (finding.code, finding.severity) == ("band-spelt-differently", "caution")
    assert finding.subject in bands
    assert f"{len(bands)} names" in finding.text
    for band in bands:
        assert repr(band) in finding.text
    assert "'i'" not in finding.text


def test_capitals_may_be_another_system():
    """R of the standard-star set is no r: said, and never an error."""
    heron, plover = with_bands("r", "r", "g"), with_bands("R")
    (finding,) = band_findings(of_logs(heron, plover))
    assert (finding.code, finding.severity) == ("band-spelt-differently", "caution")
    assert finding.subject == "r"
    assert "'R' by Plover" in finding.text
    assert "'r' by Heron" in finding.text
    assert "R is not r" in finding.text


def test_each_band_has_a_finding_of_its_own():
    found = band_findings(of_logs(with_bands("r", "g"), with_bands("r'", "g'")))
    assert [f.subject for f in found] == ["g'", "r'"] or [f.subject for f in found] == ["g", "r"]
    assert len(found) == 2
