"""Footprints as campaigns lay them: working orders, masks, unions, odd shapes, odd places.

Expected areas are closed forms (cap 2π(1 − cos r); a rectangle seen face on at unit
distance 4 atan(ab / √(1 + a² + b²)), a and b the tangents' half sides; both common
practice), lenses of two caps by the Gauss–Bonnet theorem, or come from
spherical-geometry (PyPI), an independent library.
"""

from dataclasses import replace

import healpy
import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from skytally.account import account
from skytally.cameras import CircleCamera, MosaicCamera, lay_outlines
from skytally.footprints import UNSTATED_BAND, lay_footprints
from skytally.refinement import refine_footprints
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon
from skytally.skymap_io import circle_skymap
from skytally.spans import FULL_SKY_SR, Spans, cell_to_span
from skytally.working_order import ORDER_CAP
from spherical_geometry.polygon import SphericalPolygon


def cap_sr(radius_deg):
    return 2 * np.pi * (1 - np.cos(np.radians(radius_deg)))


def lens_sr(distance_deg, radius_deg):
    """Overlap of two equal caps."""
    d, r = np.radians(distance_deg), np.radians(radius_deg)
    half = np.arccos(np.tan(d / 2) / np.tan(r))
    corner = np.arccos((np.cos(d) - np.cos(r) ** 2) / np.sin(r) ** 2)
    return 2 * np.pi - 4 * half * np.cos(r) - 2 * corner


def rectangle_sr(width_deg, height_deg):
    """Solid angle of a gnomonic rectangle; offsets are angles read as tangents."""
    a, b = np.radians(width_deg) / 2, np.radians(height_deg) / 2
    return 4 * np.arctan(a * b / np.sqrt(1 + a * a + b * b))


def of_regions(shapes, **more):
    """A telescope with one exposure per shape, each handing its region."""
    texts = np.array([f"region {i}" for i in range(len(shapes))], dtype=object)
    log = replace(log_table("Heron", np.full(len(shapes), np.nan), np.nan), region=texts)
    return telescope("Heron", None, log, regions=dict(zip(texts, shapes)), **more)


def lay(*telescopes):
    return lay_footprints(campaign(telescopes, [circle_skymap(0, 0, 10, label="1")]))


def areas(footprints):
    """Low, value, high of every footprint in steradians, (3, footprints)."""
    raster = footprints.raster
    return np.stack([t.area_sr() for t in (raster.inner, raster.centre, raster.outer)])


def random_places(rng, n):
    """Uniform on the sphere, a few at poles and at RA 0."""
    ra, dec = rng.uniform(0, 360, n), np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
    ra[::7], dec[1::7], dec[2::7] = 0.0, 90.0, -89.99
    return ra, dec


# --- working orders --------------------------------------------------------------------


def test_few_small_fields_go_deep_and_thousands_stay_shallow():
    """The aims of DESIGN section 4: up to order 18, near order 11."""
    rng = np.random.default_rng(1)
    deep = lay(telescope("Heron", MosaicCamera.rectangle(0.1, 0.1), log_table("H", [10.0], [5.0])))
    many = lay(
        telescope(
            "Heron", MosaicCamera.rectangle(1.6, 1.2), log_table("H", *random_places(rng, 2000))
        )
    )
    assert 16 <= deep.raster.order[0] <= 19
    assert many.raster.order.min() >= 10
    assert np.quantile(many.raster.order, 0.9) <= 12
    assert many.raster.order.max() <= 15


def test_working_orders_are_reported():
    field = telescope(
        "Plover", MosaicCamera.rectangle(1.6, 1.2), log_table("Plover", [10.0, 12.0], [0.0, 0.0])
    )
    exact = of_regions([Spans.from_cells(6, np.array([100])), Spans.from_cells(6, np.array([200]))])
    loaded = campaign([field, exact], [circle_skymap(10, 0, 10, label="1")])
    order = lay_footprints(loaded).raster.order
    plover, heron = account(loaded).telescopes
    assert (plover.order_min, plover.order_max) == (order[:2].min(), order[:2].max())
    assert plover.order_min >= 10
    assert (heron.order_min, heron.order_max) == (None, None)
    assert list(order[2:]) == [-1, -1]


def test_repeated_pointings_share_one_footprint():
    log = log_table("Heron", [10.0, 11.0, 10.0, 10.0], [5.0, 5.0, 5.0, 5.0], angle=[0, 0, 0, 30])
    footprints = lay(telescope("Heron", MosaicCamera.rectangle(1, 1), log))
    assert footprints.telescope.size == 3
    assert list(footprints.observations.footprint) == [0, 1, 0, 2]
    regions = [Circle(1, 2, 3), Circle(1, 2, 4)]
    one = of_regions(regions)
    log = replace(one.log, region=np.array(["region 0", "region 0"], dtype=object))
    assert lay(replace(one, log=log)).telescope.size == 1


# --- masks and searchable regions ---------------------------------------------------------


@pytest.mark.parametrize("radius", [0.05, 0.2, 0.5])
def test_a_mask_inside_the_field_is_subtracted(radius):
    rng = np.random.default_rng(2)
    ra, dec = random_places(rng, 20)
    for one, (lon, lat) in enumerate(zip(ra, dec)):
        log = log_table("Heron", [lon], [lat], angle=[rng.uniform(0, 360)])
        field = telescope(
            "Heron", MosaicCamera.rectangle(1.6, 1.2), log, mask=(Circle(lon, lat, radius),)
        )
        exact = rectangle_sr(1.6, 1.2) - cap_sr(radius)
        low, value, high = areas(lay(field))[:, 0]
        assert low <= exact <= high, one
        assert low <= value <= high
        assert value == pytest.approx(exact, rel=1.5e-3)


def test_masks_that_overlap_count_once():
    log = log_table("Heron", [200.0], [-40.0])
    centre = 200.0, -40.0
    masks = (Circle(*centre, 0.3), Circle(200.0, -40.2, 0.3))
    field = telescope("Heron", MosaicCamera.rectangle(2.0, 2.0), log, mask=masks)
    exact = rectangle_sr(2.0, 2.0) - 2 * cap_sr(0.3) + lens_sr(0.2, 0.3)
    low, value, high = areas(lay(field))[:, 0]
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)


def test_a_mask_across_the_edge_against_spherical_geometry():
    rng = np.random.default_rng(3)
    for lon, lat in ((0.0, 0.0), (120.0, 88.0), (359.9, -41.8), (33.0, 60.0)):
        angle = rng.uniform(0, 360, 1)
        at = np.array([lon]), np.array([lat])
        (ring,) = lay_outlines(MosaicCamera.rectangle(1.6, 1.2), *at, angle)
        (other,) = lay_outlines(
            MosaicCamera.rectangle(1.0, 0.8), at[0], at[1] + 0.5, angle + rng.uniform(10, 80)
        )
        one = SphericalPolygon.from_lonlat(*ring.T, center=(lon, lat))
        two = SphericalPolygon.from_lonlat(*other.T, center=(lon, lat + 0.5))
        overlap = one.intersection(two).area()
        assert 0 < overlap < one.area()
        field = telescope(
            "Heron",
            MosaicCamera.rectangle(1.6, 1.2),
            log_table("Heron", *at, angle=angle),
            mask=(Polygon(other),),
        )
        low, value, high = areas(lay(field))[:, 0]
        assert low <= one.area() - overlap <= high
        assert value == pytest.approx(one.area() - overlap, rel=1.5e-3)


def test_masks_of_any_kind():
    """A MOC, and 'everything but': only what lies within 0.4° is left."""
    log = log_table("Heron", [77.0], [12.0])
    field = telescope("Heron", MosaicCamera.rectangle(2.0, 2.0), log)
    inside = replace(field, mask=(NotIn(Circle(77.0, 12.0, 0.4)),))
    low, value, high = areas(lay(inside))[:, 0]
    assert low <= cap_sr(0.4) <= high
    assert value == pytest.approx(cap_sr(0.4), rel=2e-3)
    cells = healpy.query_disc(
        1 << 8, healpy.ang2vec(77, 12, lonlat=True), np.radians(0.5), nest=True
    )
    taken = replace(field, mask=(Spans.from_cells(8, cells),))
    exact = rectangle_sr(2.0, 2.0) - cells.size * healpy.nside2pixarea(1 << 8)
    low, value, high = areas(lay(taken))[:, 0]
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)


def test_searchable_cells_within_a_field_are_all_that_counts():
    cells = healpy.query_disc(
        1 << 9, healpy.ang2vec(300, -60, lonlat=True), np.radians(0.4), nest=True
    )[::2]
    field = telescope(
        "Heron",
        CircleCamera(1.0),
        log_table("Heron", [300.0], [-60.0]),
        searchable=Spans.from_cells(9, cells),
    )
    exact = cells.size * healpy.nside2pixarea(1 << 9)
    # The cells lie wholly inside, so nothing is undecided.
    assert areas(lay(field))[:, 0] == pytest.approx([exact] * 3, rel=1e-12)


@pytest.mark.parametrize(("lon", "lat", "share"), [(0, 70, 2), (90, 60, 2), (12, 90, 4)])
def test_a_searchable_base_cell_cuts_a_circle_along_meridians(lon, lat, share):
    """Base cell 0 is bounded by the meridians 0° and 90° above latitude asin(2/3)."""
    field = telescope(
        "Heron",
        CircleCamera(3.0),
        log_table("Heron", [float(lon)], [float(lat)]),
        searchable=Spans.from_cells(0, np.array([0])),
    )
    low, value, high = areas(lay(field))[:, 0]
    assert low <= cap_sr(3.0) / share <= high
    assert value == pytest.approx(cap_sr(3.0) / share, rel=1e-3)


def test_mask_and_searchable_hold_after_refining():
    """The tightened bracket still holds the exact area, and masked sky stays out."""
    lon, lat = 150.0, 20.0
    searchable = Spans.from_cells(
        6,
        healpy.query_disc(64, healpy.ang2vec(lon, lat, lonlat=True), np.radians(4), nest=True),
    )
    mask = Circle(lon, lat, 0.3)
    field = telescope(
        "Heron",
        MosaicCamera.rectangle(1.6, 1.2),
        log_table("Heron", [lon], [lat], angle=[25.0]),
        mask=(mask,),
        searchable=searchable,
    )
    maps = [circle_skymap(lon, lat, 1.0, label="1")]
    before = lay_footprints(campaign([field], maps))
    after = refine_footprints(before, maps, 1e-4)
    exact = rectangle_sr(1.6, 1.2) - cap_sr(0.3)
    low, value, high = areas(after)[:, 0]
    assert high - low < 0.7 * np.ptp(areas(before)[:, 0])
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)
    inside = healpy.query_disc(
        1 << 12, healpy.ang2vec(lon, lat, lonlat=True), np.radians(0.28), nest=True
    )
    starts, _ = cell_to_span(12, inside)
    assert not after.raster.centre.region(0).contains(starts).any()


# --- intersections, complements --------------------------------------------------------------


def shape_cases(lon, lat):
    """Shapes that are not circles or polygons, with exact solid angles."""
    a, b = Circle(lon, lat - 0.15, 0.5), Circle(lon, lat + 0.15, 0.5)
    return [
        (AllOf((a, b)), lens_sr(0.3, 0.5)),
        (AllOf((a, NotIn(b))), cap_sr(0.5) - lens_sr(0.3, 0.5)),
        (AllOf((Circle(lon, lat, 2.0), NotIn(Circle(lon, lat, 1.5)))), cap_sr(2.0) - cap_sr(1.5)),
        (AnyOf((AllOf((a, b)), Circle(lon, lat, 1.0))), cap_sr(1.0)),
        (NotIn(Circle(lon, lat, 40.0)), FULL_SKY_SR - cap_sr(40.0)),
        (AllOf((Circle(lon, lat, 0.5), Spans.full())), cap_sr(0.5)),
    ]


@pytest.mark.parametrize(("lon", "lat"), [(0.0, 0.0), (210.0, 41.8), (5.0, -89.7), (359.9, 70.0)])
def test_intersections_and_complements(lon, lat):
    for shape, exact in shape_cases(lon, lat):
        low, value, high = areas(lay(of_regions([shape])))[:, 0]
        assert low <= exact <= high
        assert low <= value <= high
        assert value == pytest.approx(exact, rel=1e-3)


def test_small_intersections_are_within_one_per_cent():
    """5′ across, and their total within a thousandth (DESIGN, section 8)."""
    rng = np.random.default_rng(4)
    side = 5 / 60
    shapes, exact = [], []
    for _ in range(15):  # edges along HEALPix rings: where the centre rule errs most
        lon, lat = rng.uniform(0, 360), rng.uniform(-3, 3)
        ring = side * np.array([[0, 0], [1, 0], [1, 1], [0, 1]]) + np.array([lon, lat])
        shapes.append(AllOf((Polygon(ring), Circle(lon, lat, 2.0))))
        middle = lon + side / 2, lat + side / 2
        exact.append(SphericalPolygon.from_lonlat(*ring.T, center=middle).area())
    for _ in range(15):
        lon, lat = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-1, 1)))
        lat = np.clip(lat, -89.9, 89.9)
        shapes.append(AllOf((Circle(lon, lat - 0.02, 0.06), Circle(lon, lat + 0.02, 0.06))))
        exact.append(lens_sr(0.04, 0.06))
    low, value, high = areas(lay(of_regions(shapes)))
    exact = np.array(exact)
    assert (low <= exact).all()
    assert (exact <= high).all()
    assert np.abs(value / exact - 1).max() < 0.01
    assert value.sum() == pytest.approx(exact.sum(), rel=1e-3)


def test_an_empty_intersection_covers_nothing():
    shapes = [
        AllOf((Circle(0, 0, 1), Circle(10, 0, 1))),
        AllOf((Circle(50, 0, 1), NotIn(Circle(50, 0, 1.5)))),
    ]
    np.testing.assert_array_equal(areas(lay(of_regions(shapes))), np.zeros((3, 2)))


# --- unions in one footprint ----------------------------------------------------------------


def overlapping_pair(share, n=1, rng=None):
    """Two one-degree detectors of which a share is common, and n pointings."""
    square = 0.5 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    step = [0.5 * (1 - share), 0]
    camera = MosaicCamera((square - step, square + step), ("a", "b"))
    at = (np.array([10.0]), np.array([5.0])) if rng is None else random_places(rng, n)
    angle = np.zeros(n) if rng is None else rng.uniform(0, 360, n)
    return telescope("Heron", camera, log_table("Heron", *at, angle=angle))


@pytest.mark.parametrize("share", [0.0005, 0.002, 0.01, 0.1, 0.5, 0.99, 1.0])
def test_overlapping_detectors_count_once(share):
    """The union of both is one rectangle, whatever they share."""
    alone = lay(overlapping_pair(share))
    low, value, high = areas(alone)[:, 0]
    exact = rectangle_sr(2 - share, 1.0)
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)
    # No deeper than three orders below what one rectangle asks for.
    plain = telescope("Heron", MosaicCamera.rectangle(2.0, 1.0), log_table("H", [10.0], [5.0]))
    assert alone.raster.order[0] <= lay(plain).raster.order[0] + 3


@pytest.mark.parametrize("share", [0.0006, 0.001, 0.003, 0.3])
def test_overlaps_do_not_drive_a_night_deep(share):
    """Pinned: overlaps of a thousandth once sent every field to order 18 and deeper."""
    footprints = lay(overlapping_pair(share, 60, np.random.default_rng(5)))
    _, value, _ = areas(footprints)
    exact = rectangle_sr(2 - share, 1.0)
    assert footprints.raster.order.max() <= 15
    assert np.abs(value / exact - 1).max() < 0.01
    assert value.mean() == pytest.approx(exact, rel=1e-3)


@pytest.mark.parametrize(("lon", "lat"), [(0.0, 0.0), (140.0, 89.5), (300.0, -50.0)])
def test_union_of_polygons_given_as_one_region(lon, lat):
    at = np.array([lon, lon]), np.array([lat, lat - 0.4])
    camera = MosaicCamera.rectangle(1.2, 0.9)
    rings = lay_outlines(camera, *at, np.array([10.0, 65.0]))
    one, two = (
        SphericalPolygon.from_lonlat(*ring.T, center=(lon, where))
        for ring, where in zip(rings, at[1])
    )
    exact = one.area() + two.area() - one.intersection(two).area()
    assert exact < one.area() + two.area()
    shape = AnyOf(tuple(Polygon(ring) for ring in rings))
    footprints = lay(of_regions([shape]))
    low, value, high = areas(footprints)[:, 0]
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)
    assert footprints.pieces_per_footprint[0] == 2
    assert footprints.raster.order[0] < ORDER_CAP
    # The same polygon twice is one polygon.
    twice = lay(of_regions([AnyOf((Polygon(rings[0]), Polygon(rings[0])))]))
    assert areas(twice)[1, 0] == pytest.approx(one.area(), rel=1e-3)


# --- poles and RA 0 -----------------------------------------------------------------------


@pytest.mark.parametrize(("lat", "face"), [(90.0, 0), (-90.0, 8), (89.8, 0), (-89.7, 8)])
def test_a_field_over_a_pole(lat, face):
    log = log_table("Heron", [70.0], [lat], angle=[12.0])
    footprints = lay(telescope("Heron", MosaicCamera.rectangle(1.6, 1.2), log))
    low, value, high = areas(footprints)[:, 0]
    exact = rectangle_sr(1.6, 1.2)
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)
    # The pole is the last corner of the northern faces and the first of the southern.
    region = footprints.raster.centre.region(0)
    size = 1 << 58
    for turn in range(4):
        at = (face + turn + 1) * size - 1 if lat > 0 else (face + turn) * size
        assert region.contains(at)


@pytest.mark.parametrize("sign", [1, -1])
def test_a_polygon_around_a_pole(sign):
    ring = np.array([[0, 88.5], [60, 88.0], [130, 88.7], [220, 88.2], [300, 88.4]]) * [1, sign]
    exact = SphericalPolygon.from_lonlat(*ring.T, center=(0, 90.0 * sign)).area()
    low, value, high = areas(lay(of_regions([Polygon(ring)])))[:, 0]
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)


@pytest.mark.parametrize("lon", [0.0, 359.99, 0.3])
def test_a_field_across_right_ascension_zero(lon):
    log = log_table("Heron", [lon], [-12.0], angle=[40.0])
    footprints = lay(telescope("Heron", MosaicCamera.rectangle(1.6, 1.2), log))
    low, value, high = areas(footprints)[:, 0]
    exact = rectangle_sr(1.6, 1.2)
    assert low <= exact <= high
    assert value == pytest.approx(exact, rel=1e-3)
    pixel = healpy.ang2pix(1 << 20, [lon + 0.4, (lon - 0.4) % 360], [-12, -12], True, True)
    assert footprints.raster.centre.region(0).contains(cell_to_span(20, pixel)[0]).all()


# --- exposures gathered ------------------------------------------------------------------------


def test_exposures_are_gathered_in_order_of_start():
    heron = telescope(
        "Heron",
        CircleCamera(1.0),
        log_table(
            "H",
            [1.0, 2.0, 3.0],
            [0, 0, 0],
            start=EVENT_MJD + np.array([0.3, 0.1, 0.2]),
            band=["z", "", "g"],
            duration=864.0,
        ),
    )
    plover = telescope(
        "Plover", CircleCamera(1.0), log_table("P", [4.0], [0], start=EVENT_MJD + 0.15, band="aux")
    )
    o = lay(heron, plover).observations
    assert list(o.ra_deg) == [2.0, 4.0, 3.0, 1.0]
    assert o.telescopes == ("Heron", "Plover")
    # Blue to red, then names of no known place, then what has none.
    assert o.bands == ("g", "z", "aux", UNSTATED_BAND)
    assert [o.bands[b] for b in o.band] == [UNSTATED_BAND, "aux", "g", "z"]
    assert o.end_mjd - o.start_mjd == pytest.approx([0.01, 60 / 86400, 0.01, 0.01], abs=1e-11)


def test_limits_are_brought_to_the_campaigns_system_and_significance():
    """m(5σ) = m(3σ) − 2.5 log₁₀(5/3), and m_AB = m_Vega + offset (DESIGN, section 5)."""
    log = log_table(
        "H", [1.0, 2.0, 3.0], [0, 0, 0], band=["r", "g", "r"], depth=[20.0, 21.0, np.nan]
    )
    one = telescope(
        "Heron",
        CircleCamera(1.0),
        log,
        depth_system="Vega",
        depth_significance=3.0,
        vega_offsets={"r": 0.2, "g": -0.1},
    )
    depth = lay(one).observations.depth
    change = 2.5 * np.log10(5 / 3)
    assert depth == pytest.approx([20.2 - change, 20.9 - change, np.nan], nan_ok=True)
