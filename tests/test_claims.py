"""Claims checked: verdicts, and the ways of counting that are named.

Every planted number is found here by other means than the package's: closed forms
of solid angles, sums by hand, healpy (an independent HEALPix library, tests only).
"""

from __future__ import annotations

import math
import re
from dataclasses import replace

import healpy
import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from skytally.account import account, lay_coverage
from skytally.cameras import CircleCamera, MosaicCamera, lay_outlines
from skytally.claims import Verdict, check_claims
from skytally.claims_io import Claim, Quantity
from skytally.observations import SetAside
from skytally.shapes import AnyOf, Circle, Polygon, lonlat_to_vector
from skytally.skymap import SkyMap
from skytally.spans import Spans, cell_to_span
from skytally.times import mjd_to_iso
from spherical_geometry.polygon import SphericalPolygon

DEG2 = float(np.degrees(1.0) ** 2)
CELL_3 = healpy.nside2pixarea(8, degrees=True)

SIDE, GAP = 0.5, 0.1
SQUARE = SIDE / 2 * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
STEP = SIDE + GAP
MOSAIC = MosaicCamera(
    tuple(SQUARE + STEP / 2 * np.array([x, y]) for x in (-1, 1) for y in (-1, 1)),
    ("A", "B", "C", "D"),
)
CROSS = MosaicCamera(
    tuple(SQUARE + STEP * np.array([x, y]) for x, y in ((0, 0), (1, 0), (-1, 0), (0, 1), (0, -1))),
    ("A", "B", "C", "D", "E"),
)


def rectangle_deg2(width, height):
    """Solid angle of a gnomonic rectangle, 4 arctan(ab / √(1 + a² + b²)) for half sides a, b."""
    a, b = np.radians(width) / 2, np.radians(height) / 2
    return 4 * math.atan(a * b / math.sqrt(1 + a * a + b * b)) * DEG2


def cap_deg2(radius):
    return 2 * math.pi * (1 - math.cos(math.radians(radius))) * DEG2


def flat_map(label, cells, order, *, low=(), issued=0.0):
    """A map that spreads 0.9 evenly over some cells, and 0.1 over others (1 and 0 if none)."""
    held = 0.9 if len(low) else 1.0
    cell = np.concatenate((np.asarray(cells), np.asarray(low))).astype(np.int64)
    density = np.where(np.arange(cell.size) < len(cells), held / len(cells), 0.1 / max(len(low), 1))
    start, stop = cell_to_span(order, cell)
    rank = np.argsort(start)
    return SkyMap(
        start[rank],
        stop[rank],
        density[rank] / healpy.nside2pixarea(1 << order),
        order,
        label=label,
        issued_mjd=EVENT_MJD + issued,
    )


EVERYWHERE = flat_map("1 even", np.arange(768), 3)


def isolated(n=6, dec=-30.0, repeats=1):
    """Pointings 4° apart along a parallel, each taken so many times."""
    ra = 20 + 4.0 / np.cos(np.radians(dec)) * np.arange(n)
    return np.tile(ra, repeats), np.full(n * repeats, dec)


def heron(camera, ra, dec, **more):
    own = {
        key: more.pop(key) for key in ("angle", "start", "duration", "band", "depth") if key in more
    }
    return telescope("Heron", camera, log_table("Heron", ra, dec, **own), **more)


def of_regions(shapes, name="Heron", **more):
    """A telescope with one exposure per shape, each handing its region."""
    texts = np.array([f"region {i}" for i in range(len(shapes))], dtype=object)
    log = replace(log_table(name, np.full(len(shapes), np.nan), np.nan), region=texts)
    return telescope(name, None, log, regions=dict(zip(texts, shapes)), **more)


class Desk:
    """A campaign laid and tallied once, and claims on it."""

    def __init__(self, telescopes, maps=(EVERYWHERE,), **settings):
        self.campaign = campaign(telescopes, maps, **settings)
        self.coverage = lay_coverage(self.campaign)
        self.results = account(self.campaign, coverage=self.coverage)

    def ask(self, quantity, value, who="Heron", **more):
        claim = Claim(who, Quantity(quantity), value, **more)
        (verdict,) = check_claims([claim], self.campaign, self.coverage, self.results.rows)
        assert verdict.claim is claim
        return verdict


def codes(verdict):
    assert verdict.verdict is Verdict.DIFFERS, verdict.text
    return [one.code for one in verdict.explanations]


def explained(verdict, code, number, tolerance=1e-3):
    """The one explanation of a planted number, which it must yield."""
    assert code in codes(verdict), verdict.text
    (one,) = [one for one in verdict.explanations if one.code == code]
    assert one.value == pytest.approx(number, rel=tolerance)
    assert one.text[:20].lower() in verdict.text.lower()
    return one


# --- verdicts --------------------------------------------------------------------------


def share_map(share):
    """A map over two cells of order 3, of which cell 100 holds a share, with no rounding."""
    start, stop = cell_to_span(3, np.array([100, 500]))
    density = np.array([share, 1 - share]) / healpy.nside2pixarea(8)
    return SkyMap(start, stop, density, 3, label="1", issued_mjd=EVENT_MJD)


CELL = of_regions([Spans.from_cells(3, np.array([100]))])


@pytest.mark.parametrize(
    ("share", "value", "agrees"),
    [
        (0.4346, "43.5 %", True),
        (0.4346, "43.46 %", True),
        (0.4346, "43.4 %", False),
        (0.4346, "43.47 %", False),
        (0.4346, "43 %", True),
        (0.4346, "44 %", False),
        (0.4346, "0.43", True),
        (0.4346, "0.435", True),
        (0.4346, "0.4", True),
        # Halfway, either rounding is honest.
        (0.4350, "43 %", True),
        (0.4350, "44 %", True),
        (0.4350, "0.43", True),
        (0.4350, "43.5 %", True),
        (0.4351, "43 %", False),
        (0.4999, "50 %", True),
        (0.9996, "100 %", True),
    ],
)
def test_agreement_is_within_the_stated_digits(share, value, agrees):
    verdict = Desk([CELL], [share_map(share)]).ask("probability", value)
    assert (verdict.verdict is Verdict.AGREES) == agrees
    assert verdict.own == pytest.approx(share, rel=1e-12)
    assert verdict.map == "1"
    if agrees:
        assert verdict.explanations == ()
        assert "agrees" in verdict.text


@pytest.mark.parametrize(
    ("value", "agrees"),
    [
        # The cell is 4π/768 sr = 53.7148 deg².
        ("53.7 deg2", True),
        ("53.71", True),
        ("54 deg2", True),
        ("5e1 deg2", True),
        ("53 deg2", False),
        ("53.72", False),
        ("53.8 deg2", False),
    ],
)
def test_areas_that_are_known_exactly(value, agrees):
    verdict = Desk([CELL]).ask("area", value)
    assert (verdict.verdict is Verdict.AGREES) == agrees, verdict.text
    assert verdict.own == pytest.approx(CELL_3, rel=1e-12)


def test_the_bracket_counts_as_agreement():
    fields = heron(MOSAIC, *isolated())
    desk = Desk([fields], [flat_map("1", np.arange(768), 3)])
    row = desk.results.row(telescope="Heron")
    assert 0 < row.probability_high - row.probability_low < 0.005
    for bound, sign in ((row.probability_low, -1), (row.probability_high, 1)):
        width = row.probability_high - row.probability_low
        inside = desk.ask("probability", f"{bound - sign * 0.1 * width:.9f}")
        beyond = desk.ask("probability", f"{bound + sign * 0.1 * width:.9f}")
        assert inside.verdict is Verdict.AGREES
        assert beyond.verdict is Verdict.DIFFERS
        assert math.copysign(1, beyond.difference) == sign
    # An area is known to 0.1 %, however wide its bracket.
    exact = 6 * 4 * rectangle_deg2(SIDE, SIDE)
    assert row.area_high_deg2 > 1.01 * exact
    assert desk.ask("area", f"{exact:.3f}").verdict is Verdict.AGREES
    assert desk.ask("area", f"{1.005 * exact:.3f}").verdict is Verdict.DIFFERS


def test_a_wide_bracket_counts_for_no_more_than_its_estimated_error():
    desk = Desk([heron(MOSAIC, *isolated())])
    settings = replace(desk.campaign.settings, bracket=1e-7)
    desk.campaign = replace(desk.campaign, settings=settings)  # as if the budget had ended first
    row = desk.results.row(telescope="Heron")
    width = row.probability_high - row.probability_low
    assert width > 1e-7
    assert row.probability_error < width / 4
    beyond = row.probability + 2 * row.probability_error
    assert beyond < row.probability_high
    assert desk.ask("probability", f"{beyond:.9f}").verdict is Verdict.DIFFERS


@pytest.fixture(scope="module")
def night():
    """Two telescopes, two bands, two nights, and two maps."""
    rng = np.random.default_rng(11)
    n = 12
    start = EVENT_MJD + np.where(np.arange(n) < 7, 0.2, 1.2) + np.arange(n) / 500
    logs = [
        log_table(
            name,
            150 + rng.uniform(-3, 3, n),
            20 + rng.uniform(-3, 3, n),
            start=start,
            band=["g", "r"] * (n // 2),
            depth=rng.uniform(20, 22, n),
        )
        for name in ("Heron", "Plover")
    ]
    centre = lonlat_to_vector(150, 20)
    near = healpy.query_disc(64, centre, np.radians(6), nest=True)
    far = np.setdiff1d(healpy.query_disc(64, centre, np.radians(9), nest=True), near)
    maps = [
        flat_map("1 first", far, 6, issued=0.01),
        flat_map("2 second", near, 6, low=far, issued=0.02),
    ]
    cameras = MOSAIC, CircleCamera(0.8)
    return Desk([telescope(log.telescope, c, log) for log, c in zip(logs, cameras)], maps)


def test_every_row_of_the_tally_agrees_with_itself(night):
    names = {
        Quantity.AREA: "area_deg2",
        Quantity.AREA_IN_90: "area_in_90_deg2",
        Quantity.PROBABILITY: "probability",
        Quantity.PROBABILITY_IN_90: "probability_in_90",
        Quantity.DEPTH_MEDIAN: "depth_median",
        Quantity.EXPOSURES: "exposures",
        Quantity.FIRST_START: "first_start",
        Quantity.LAST_END: "last_end",
    }
    claims = [
        Claim(row.telescope or "all", quantity, str(value), row.map, row.band, row.night)
        for row in night.results.rows
        for quantity, name in names.items()
        if (value := getattr(row, name)) is not None
    ]
    assert len(claims) > 150
    found = check_claims(claims, night.campaign, night.coverage, night.results.rows)
    for verdict in found:
        assert verdict.verdict is Verdict.AGREES, verdict.text
        assert verdict.own_low <= verdict.own <= verdict.own_high
        assert (verdict.map is None) == (not verdict.claim.quantity.needs_map)


def test_selections_without_a_row_of_their_own(night):
    """A telescope's band on one night, counted by hand."""
    log = night.campaign.telescopes[1].log
    first, last = night.coverage.observations.nights
    mine = (log.band == "r") & (log.start_mjd < EVENT_MJD + 1)
    who = {"who": "plover", "band": "r", "night": first}
    assert night.ask("exposures", str(int(mine.sum())), **who).verdict is Verdict.AGREES
    assert night.ask("exposures", "6", **who).verdict is Verdict.DIFFERS
    depth = f"{np.median(log.depth[mine]):.4f}"
    assert night.ask("depth_median", depth, **who).verdict is Verdict.AGREES
    end = mjd_to_iso(log.start_mjd[mine].max() + 60 / 86400)
    assert night.ask("last_end", end, **who).verdict is Verdict.AGREES
    assert night.ask("last_end", end, **{**who, "night": last}).verdict is Verdict.DIFFERS


def test_the_newest_map_is_meant_where_none_is_named(night):
    one, two = (night.results.row(map=m, telescope="Heron").probability for m in ("1 first", None))
    assert abs(one - two) > 0.05
    assert night.ask("probability", f"{two:.4f}").map == "2 second"
    assert night.ask("probability", f"{two:.4f}").verdict is Verdict.AGREES
    assert night.ask("probability", f"{one:.4f}", map="1 FIRST").verdict is Verdict.AGREES


@pytest.mark.parametrize(
    ("quantity", "more", "words"),
    [
        ("area", {"who": "Hern"}, ["no telescope 'Hern'", "Heron, Plover, all", "mean Heron?"]),
        ("area", {"who": "Dunlin"}, ["no telescope 'Dunlin'", "known: Heron"]),
        ("probability", {"map": "2 secnd"}, ["map version", "1 first, 2 second", "mean 2 second?"]),
        ("area", {"band": "z"}, ["no band 'z'", "known: g, r"]),
        ("area", {"night": "1999-01-01"}, ["no night '1999-01-01'"]),
        ("depth_median", {}, ["2 bands (g, r)", "not mixed", "Name the band"]),
    ],
)
def test_what_cannot_be_checked_says_why(night, quantity, more, words):
    verdict = night.ask(quantity, "0.5", **more)
    assert verdict.verdict is Verdict.UNCHECKED
    assert verdict.own is verdict.difference is None
    assert verdict.explanations == ()
    assert all(word in verdict.text for word in words), verdict.text


def test_a_map_is_no_matter_where_the_quantity_needs_none(night):
    area = night.results.row(telescope="Heron").area_deg2
    assert night.ask("area", f"{area:.3f}", map="9 unheard of").verdict is Verdict.AGREES


def test_logs_without_what_is_asked():
    empty = telescope("Plover", MOSAIC, log_table("Plover", [], []))
    desk = Desk([heron(MOSAIC, *isolated(), depth=np.nan), empty])
    for quantity, value in (("area", "3"), ("exposures", "12"), ("last_end", "2031-03-14T05:49")):
        verdict = desk.ask(quantity, value, who="Plover")
        assert verdict.verdict is Verdict.UNCHECKED
        assert "no accepted exposure of Plover" in verdict.text
    verdict = desk.ask("depth_median", "21")
    assert verdict.verdict is Verdict.UNCHECKED
    assert "limiting magnitude" in verdict.text


# --- words -----------------------------------------------------------------------------


def plain(text):
    return text.replace("\u00a0", " ")


def test_differences_are_worded_with_size_and_direction():
    desk = Desk([CELL], [share_map(0.4346)])
    verdict = desk.ask("probability", "48.7 %")
    assert verdict.difference == pytest.approx(0.0524)
    assert plain(verdict.difference_text) == "5.24 percentage points greater"
    assert plain(verdict.own_text) == "43.46 %"
    verdict = desk.ask("probability", "0.40")
    assert plain(verdict.difference_text) == "0.035 less"
    verdict = desk.ask("area", "64.5 deg2")
    assert plain(verdict.own_text) == "53.71 deg²"
    # 64.5 − 53.7148 = 10.7852, of 53.7148 it is 20.08 %.
    assert plain(verdict.difference_text) == "10.79 deg² (20 %) greater"
    verdict = desk.ask("depth_median", "20.4")
    assert plain(verdict.difference_text) == "0.60 mag shallower"
    assert "AB, 5 sigma, not corrected for Galactic extinction" in verdict.text
    assert plain(desk.ask("exposures", "4").difference_text) == "3 more"
    start = desk.campaign.telescopes[0].log.start_mjd[0]
    for seconds, words in (
        (30, "30 s later"),
        (-3725, "1 h 2 min earlier"),
        (150, "2 min 30 s later"),
        (2 * 86400, "2 d later"),
    ):
        verdict = desk.ask("first_start", mjd_to_iso(start + seconds / 86400))
        assert plain(verdict.difference_text) == words
        assert verdict.own_text == mjd_to_iso(start)


def test_the_words_accuse_nobody(night):
    claims = [
        ("probability", "99 %"),
        ("area", "3 deg2"),
        ("exposures", "99"),
        ("first_start", "2031-03-14T05:49Z"),
        ("depth_median", "12.3"),
    ]
    for quantity, value in claims:
        text = night.ask(quantity, value, band="r").text
        assert not re.search(
            r"wrong|error|mistake|false|fault|incorrect|overstat|inflat|exagg|claim|mislead|fail",
            text,
            re.I,
        ), text


def test_nothing_is_named_where_nothing_fits(night):
    verdict = night.ask("area", "1.2345 deg2")
    assert codes(verdict) == []
    assert "No other way of counting that was tried" in verdict.text


# --- ways of counting ------------------------------------------------------------------


def test_an_older_map():
    """Even maps over more and fewer cells: a field's probability is its area over theirs."""
    few = np.arange(300, 340)
    maps = [
        EVERYWHERE,
        flat_map("2 few", few, 3, issued=0.1),
        flat_map("3 one", [310], 3, issued=1),
    ]
    desk = Desk([of_regions([Spans.from_cells(5, np.array([310 * 16, 310 * 16 + 1]))])], maps)
    assert desk.ask("probability", "12.5 %").verdict is Verdict.AGREES  # 2 of 16 children
    one = explained(desk.ask("probability", "0.3125 %"), "other-map", 2 / 16 / 40)
    assert one.text == "using the older map version 2 few"
    one = explained(desk.ask("probability", "0.3125 %", map="1 even"), "other-map", 2 / 16 / 40)
    assert one.text == "using the newer map version 2 few"
    # A plain area does not move with the map.
    assert codes(desk.ask("area", "0.3125 deg2")) == []


def test_the_90_per_cent_region_taken_as_all():
    """A quarter of the inner region and none of the outer: 0.9/4 of all, 1/4 of the region."""
    skymap = flat_map("1", np.arange(300, 308), 3, low=np.arange(400, 410))
    desk = Desk([of_regions([Spans.from_cells(3, np.array([300, 301]))])], [skymap])
    for quantity in ("probability", "probability_in_90"):
        assert desk.ask(quantity, "22.5 %").verdict is Verdict.AGREES
        explained(desk.ask(quantity, "25.0 %"), "region-normalised", 0.25)


@pytest.mark.parametrize("repeats", [1, 3])
def test_gaps_left_in(repeats):
    desk = Desk([heron(MOSAIC, *isolated(6, repeats=repeats), angle=30.0)])
    assert desk.ask("area", f"{24 * rectangle_deg2(SIDE, SIDE):.2f}").verdict is Verdict.AGREES
    outer = 6 * rectangle_deg2(2 * SIDE + GAP, 2 * SIDE + GAP)
    one = explained(desk.ask("area", f"{outer:.2f} deg2"), "gaps", outer)
    assert one.text == "leaving in the gaps between detectors"
    # The map is even, so the probability is that part of the sky.
    sky = 4 * math.pi * DEG2
    explained(desk.ask("probability", f"{100 * outer / sky:.4f} %"), "gaps", outer / sky)


def test_gaps_of_a_cross_within_its_outline():
    """The convex outline of five detectors in a cross, by spherical-geometry."""
    desk = Desk([heron(CROSS, *isolated(5, dec=10.0))])
    near, far = SIDE / 2, STEP + SIDE / 2
    right = np.array([[far, -near], [far, near], [near, far], [-near, far]])
    ring = np.concatenate((right, -right))
    ra, dec = isolated(5, dec=10.0)
    outline = MosaicCamera((ring,), ("outline",))
    area = sum(
        SphericalPolygon.from_lonlat(*corners.T).area() * DEG2
        for corners in lay_outlines(outline, ra, dec, np.zeros(5))
    )
    explained(desk.ask("area", f"{area:.2f} deg2"), "gaps", area)
    # The rectangle around it is another way to leave the gaps in.
    square = 5 * rectangle_deg2(2 * far, 2 * far)
    explained(desk.ask("area", f"{square:.2f} deg2"), "gaps", square)


def test_gaps_of_regions_made_of_polygons():
    """Two polygons with a gap between them, and the one that holds both."""
    parts = [
        Polygon(np.array([[10.0, -0.5], [10.9, -0.5], [10.9, 0.5], [10.0, 0.5]])),
        Polygon(np.array([[11.1, -0.5], [12.0, -0.5], [12.0, 0.5], [11.1, 0.5]])),
    ]
    desk = Desk([of_regions([AnyOf(tuple(parts))])])
    whole = np.array([[10.0, -0.5], [12.0, -0.5], [12.0, 0.5], [10.0, 0.5]])
    area = SphericalPolygon.from_lonlat(*whole.T).area() * DEG2
    explained(desk.ask("area", f"{area:.3f} deg2"), "gaps", area)
    middle = lonlat_to_vector(*whole.T).sum(axis=0)
    middle /= np.linalg.norm(middle)
    radius = np.degrees(np.arccos(lonlat_to_vector(*whole.T) @ middle)).max()
    circle = cap_deg2(radius)
    explained(desk.ask("area", f"{circle:.3f} deg2"), "circle", circle)


def test_a_mask_left_in():
    star = Circle(20.0, -30.0, 0.2)
    desk = Desk([heron(MosaicCamera.rectangle(1.0, 1.0), *isolated(3), mask=(star,))])
    whole = 3 * rectangle_deg2(1, 1)
    masked = whole - cap_deg2(0.2)
    assert desk.ask("area", f"{masked:.2f} deg2").verdict is Verdict.AGREES
    one = explained(desk.ask("area", f"{whole:.2f} deg2"), "gaps", whole)
    assert one.text == "leaving in what is masked"


def inclusive(pointings, order, fact):
    """Area of the cells of healpy's inclusive query of every detector."""
    cells = [
        healpy.query_polygon(
            1 << order, lonlat_to_vector(*ring.T), inclusive=True, fact=fact, nest=True
        )
        for ring in lay_outlines(MOSAIC, *pointings)
    ]
    return np.unique(np.concatenate(cells)).size * healpy.nside2pixarea(1 << order, degrees=True)


@pytest.fixture(scope="module")
def touched():
    rng = np.random.default_rng(4)
    ra, dec = isolated(12, dec=38.0)
    pointings = ra, dec + rng.uniform(-3, 3, 12), rng.uniform(0, 90, 12)
    return Desk([heron(MOSAIC, *pointings[:2], angle=pointings[2])]), pointings


@pytest.mark.parametrize("order", [4, 5, 6, 7, 8, 9, 10, 11, 12])
def test_touching_cells(touched, order):
    """healpy's inclusive query, tested through cells a thousandth of the size."""
    desk, pointings = touched
    area = inclusive(pointings, order, 1024)
    one = explained(desk.ask("area", f"{area:.2f} deg2"), "touching-cells", area)
    assert one.text.endswith(f"order {order} that touches a field")
    sky = 4 * math.pi * DEG2
    one = explained(desk.ask("probability", f"{area / sky:.7f}"), "touching-cells", area / sky)
    assert f"order {order} " in one.text


@pytest.mark.parametrize("order", [5, 7, 9, 11])
def test_cells_by_the_usual_inclusive_query(touched, order):
    """healpy's inclusive query as it comes, through cells a quarter of the size."""
    desk, pointings = touched
    area = inclusive(pointings, order, 4)
    assert area > 1.002 * inclusive(pointings, order, 1024)
    one = explained(desk.ask("area", f"{area:.2f} deg2"), "nearly-touching-cells", area)
    assert f"order {order} that touches a field or lies within a quarter" in one.text


def test_exposures_added_up():
    desk = Desk([heron(CircleCamera(0.7), *isolated(5, repeats=4))])
    assert desk.ask("area", f"{5 * cap_deg2(0.7):.2f}").verdict is Verdict.AGREES
    area = 20 * cap_deg2(0.7)
    explained(desk.ask("area", f"{area:.2f} deg2"), "exposures-summed", area)
    assert desk.ask("exposures", "20").verdict is Verdict.AGREES
    explained(desk.ask("exposures", "5"), "distinct-fields", 5)


def test_distinct_fields_added_up():
    """Two caps half a radius apart, taken twice: 2 areas, neither the union nor all four."""
    ra = np.array([20.0, 20.35, 20.0, 20.35])
    desk = Desk([heron(CircleCamera(0.7), ra, np.zeros(4))])
    area = 2 * cap_deg2(0.7)
    assert desk.ask("area", f"{area:.3f} deg2").own < 0.75 * area
    explained(desk.ask("area", f"{area:.3f} deg2"), "fields-summed", area)
    explained(desk.ask("area", f"{2 * area:.3f} deg2"), "exposures-summed", 2 * area)


def lens_deg2(distance, radius):
    """Overlap of two equal caps."""
    d, r = math.radians(distance), math.radians(radius)
    half = math.acos(math.tan(d / 2) / math.tan(r))
    corner = math.acos((math.cos(d) - math.cos(r) ** 2) / math.sin(r) ** 2)
    return (2 * math.pi - 4 * half * math.cos(r) - 2 * corner) * DEG2


def test_telescopes_added_up():
    """Two caps that overlap by one telescope, one by both, and one by the other."""
    camera = CircleCamera(0.7)
    one = telescope("Heron", camera, log_table("Heron", [20.0, 20.5, 30.0], np.zeros(3)))
    two = telescope("Plover", camera, log_table("Plover", [30.0, 40.0], np.zeros(2)))
    desk = Desk([one, two])
    cap = cap_deg2(0.7)
    all_sky, area = 4 * math.pi * DEG2, 5 * cap - lens_deg2(0.5, 0.7)
    assert desk.ask("area", f"{area - cap:.3f}", who="all").verdict is Verdict.AGREES
    found = desk.ask("area", f"{area:.3f} deg2", who="ALL")
    assert codes(found) == ["telescopes-summed"]
    explained(found, "telescopes-summed", area)
    found = desk.ask("probability", f"{area / all_sky:.7f}", who="all")
    explained(found, "telescopes-summed", area / all_sky)
    # For one telescope there is nothing to add up.
    assert codes(desk.ask("area", f"{area:.3f} deg2")) == []


@pytest.mark.parametrize("angle", [0.0, 25.0])
def test_circles_of_the_diagonal(angle):
    """Rectangle of 1.6 × 1.2: the diagonal is 2, its half a tangent in the gnomonic plane."""
    desk = Desk([heron(MosaicCamera.rectangle(1.6, 1.2), *isolated(5), angle=angle)])
    radius = math.degrees(math.atan(math.radians(1.0)))
    area = 5 * cap_deg2(radius)
    assert radius == pytest.approx(1, rel=1e-3)
    explained(desk.ask("area", f"{area:.2f} deg2"), "circle", area)
    sky = 4 * math.pi * DEG2
    explained(desk.ask("probability", f"{area / sky:.6f}"), "circle", area / sky)


@pytest.mark.parametrize("dec", [-60.0, 35.0, 70.0])
def test_areas_without_the_cosine_of_the_declination(dec):
    """A cap on a plane chart: ∫∫ dα dδ over it is ∫ arccos-width dδ, by quadrature."""
    radius = 0.8
    desk = Desk([heron(CircleCamera(radius), *isolated(4, dec=dec))])
    delta = np.radians(dec) + np.radians(radius) * np.cos(np.pi * (np.arange(4000) + 0.5) / 4000)
    # At each declination, the hour angle at which the distance is the radius.
    cosine = (np.cos(np.radians(radius)) - np.sin(np.radians(dec)) * np.sin(delta)) / (
        np.cos(np.radians(dec)) * np.cos(delta)
    )
    width = 2 * np.arccos(np.clip(cosine, -1, 1))
    area = 4 * abs(float(np.trapezoid(width, delta))) * DEG2
    # For a small field it is the area over the cosine.
    assert area == pytest.approx(4 * cap_deg2(radius) / math.cos(math.radians(dec)), rel=2e-3)
    explained(desk.ask("area", f"{area:.2f} deg2"), "flat-area", area, tolerance=2e-4)
    twice = Desk([heron(CircleCamera(radius), *isolated(4, dec=dec, repeats=2))])
    found = twice.ask("area", f"{2 * area:.2f} deg2")
    explained(found, "flat-area-summed", 2 * area, tolerance=2e-4)


@pytest.mark.parametrize("dec", [-50.0, 65.0])
def test_widths_in_degrees_of_right_ascension(dec):
    """A box of w degrees of right ascension: w · (sin δ₂ − sin δ₁), less by cos δ than meant."""
    width, height = 1.5, 1.0
    desk = Desk([heron(MosaicCamera.rectangle(width, height), *isolated(6, dec=dec))])
    south, north = np.radians([dec - height / 2, dec + height / 2])
    area = 6 * math.radians(width) * (math.sin(north) - math.sin(south)) * DEG2
    meant = 6 * width * height * math.cos(math.radians(dec))
    assert area == pytest.approx(meant, rel=1e-3)
    explained(desk.ask("area", f"{area:.2f} deg2"), "degrees-of-ra", area)
    sky = 4 * math.pi * DEG2
    explained(desk.ask("probability", f"{area / sky:.7f}"), "degrees-of-ra", area / sky)


def test_two_ways_at_once_where_one_alone_does_not_do():
    """So many exposures times the area of the full field."""
    desk = Desk([heron(MOSAIC, *isolated(4, repeats=3))])
    area = 12 * rectangle_deg2(2 * SIDE + GAP, 2 * SIDE + GAP)
    found = desk.ask("area", f"{area:.2f} deg2")
    assert codes(found) == ["gaps-summed"]
    assert "gaps" in found.text
    assert "adding up the exposures" in found.text


def test_several_ways_that_fit_are_named_as_such():
    """One distinct overlap: with each field taken once, fields and exposures add up alike."""
    desk = Desk([heron(CircleCamera(0.7), np.array([20.0, 20.35]), np.zeros(2))])
    found = desk.ask("area", f"{2 * cap_deg2(0.7):.3f} deg2")
    assert codes(found) == ["exposures-summed", "fields-summed"]
    assert "Two ways of counting give it within its digits" in found.text


def test_the_closest_way_comes_first():
    desk = Desk([heron(MOSAIC, *isolated(6))])
    outer = 6 * rectangle_deg2(2 * SIDE + GAP, 2 * SIDE + GAP)
    found = desk.ask("area", f"{outer:.0f} deg2")
    values = [abs(one.value - found.claim.stated.number) for one in found.explanations]
    assert "gaps" in codes(found)
    assert values == sorted(values)


# --- depths, exposures and times -------------------------------------------------------


def test_depths_without_extinction_and_as_logged():
    """Limits at 3 σ in the Vega system: −2.5 log₁₀(5/3) and +0.16 to the campaign's."""
    log = replace(
        log_table("Heron", *isolated(5), depth=[20.0, 20.5, 21.0, 21.2, 21.4]),
        extinction=np.full(5, 0.3),
    )
    one = telescope(
        "Heron",
        MOSAIC,
        log,
        depth_system="Vega",
        depth_significance=3.0,
        vega_offsets={"r": 0.16},
    )
    desk = Desk([one])
    at_five = 21.0 - 2.5 * math.log10(5 / 3) + 0.16
    assert desk.ask("depth_median", f"{at_five - 0.3:.2f}").verdict is Verdict.AGREES
    found = desk.ask("depth_median", f"{at_five:.2f}")
    explained(found, "no-extinction", at_five)
    assert "corrected for Galactic extinction" in found.text
    explained(desk.ask("depth_median", "21.00 mag"), "as-logged", 21.0)


def test_rows_that_were_set_aside():
    log = log_table("Heron", *isolated(5))
    aside = [
        SetAside("Heron", "Heron.csv", 9, "early", "before the event", "…"),
        SetAside("Heron", "Heron.csv", 10, "clouds", "not accepted", "…"),
    ]
    early = log_table("Heron", [20.0], [0.0], start=[EVENT_MJD - 0.25])
    log = replace(log, read=7, set_aside=tuple(aside), before_event=early)
    desk = Desk([telescope("Heron", MOSAIC, log)])
    assert desk.ask("exposures", "5").verdict is Verdict.AGREES
    explained(desk.ask("exposures", "7"), "all-rows", 7)
    assert codes(desk.ask("exposures", "6")) == []
    assert desk.ask("first_start", mjd_to_iso(EVENT_MJD)).verdict is Verdict.AGREES
    found = desk.ask("first_start", mjd_to_iso(EVENT_MJD - 0.25))
    explained(found, "before-event", EVENT_MJD - 0.25, tolerance=1e-12)
    # What was set aside is told by telescope, not by band.
    assert codes(desk.ask("exposures", "7", band="r")) == []


def test_the_start_of_the_last_exposure():
    desk = Desk([heron(MOSAIC, *isolated(5), duration=600.0)])
    start = EVENT_MJD + 4 / 1440
    assert desk.ask("last_end", mjd_to_iso(start + 600 / 86400)).verdict is Verdict.AGREES
    explained(desk.ask("last_end", mjd_to_iso(start)), "start-of-last", start, tolerance=1e-12)


def test_times_may_be_cut_to_the_minute():
    desk = Desk([heron(MOSAIC, *isolated(1), start=[EVENT_MJD + 59.4 / 86400])])
    day = mjd_to_iso(EVENT_MJD)[:10]
    for text in ("T00:00Z", "T00:01Z", "T00:00:59Z"):
        assert desk.ask("first_start", day + text).verdict is Verdict.AGREES
    for text in ("T00:02Z", "T00:01:00Z", "T00:00:58Z"):
        assert desk.ask("first_start", day + text).verdict is Verdict.DIFFERS
