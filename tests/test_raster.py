"""Footprints on the line against closed forms and independent libraries."""

import healpy
import numpy as np
import pytest
from matplotlib.path import Path as PlanePath
from skytally.cameras import CircleCamera, MosaicCamera, lay_camera, lay_outlines
from skytally.raster import (
    cell_radius_rad,
    cell_width_rad,
    convex_parts,
    rasterise,
    rasterise_shape,
)
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon, lonlat_to_vector
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR, Spans
from spherical_geometry.polygon import SphericalPolygon

# Cap of radius r: 2π(1 − cos r). Polygons: spherical-geometry (PyPI), an independent library.


def cap_sr(radius_deg):
    return 2 * np.pi * (1 - np.cos(np.radians(radius_deg)))


def smaller_side_sr(ring):
    """Solid angle of a ring's smaller side by spherical-geometry."""
    area = SphericalPolygon.from_lonlat(*ring.T).area()
    return min(area, FULL_SKY_SR - area)


def order_for(size_deg, cells=200):
    """Order at which a field is about so many cells wide."""
    return int(np.clip(np.ceil(np.log2(cells * cell_width_rad(0) / np.radians(size_deg))), 0, 20))


@pytest.mark.parametrize("order", range(30))
def test_cell_radius_is_the_greatest(order):
    assert cell_radius_rad(order) == pytest.approx(healpy.max_pixrad(1 << order), rel=1e-7)


def test_two_thousand_brackets_hold_the_exact_area():
    rng = np.random.default_rng(20310314)
    worst = 0.0
    for number in range(2000):
        lon = rng.uniform(-180, 360)
        # A fifth of the shapes sits on or near a pole.
        lat = (
            np.degrees(np.arcsin(rng.uniform(-1, 1)))
            if number % 5
            else rng.choice([-1, 1]) * (90 - 10 ** rng.uniform(-3, 1))
        )
        size = 10 ** rng.uniform(np.log10(5 / 60), 1.2)
        order = order_for(size, 60)
        if number % 2:
            exact = cap_sr(size / 2)
            raster = rasterise_shape(Circle(lon, lat, size / 2), order)
        else:
            height = size * rng.uniform(1, 3)
            camera = MosaicCamera.rectangle(size, height)
            at = np.array([lon]), np.array([lat]), np.array([rng.uniform(0, 360)])
            raster = rasterise(lay_camera(camera, *at), 1, order)
            # Solid angle of a rectangle seen face on at unit distance, half sides a and b:
            # 4 atan(ab / √(1 + a² + b²)) (common practice).
            a, b = np.radians(size) / 2, np.radians(height) / 2
            exact = 4 * np.arctan(a * b / np.sqrt(1 + a * a + b * b))
        low, value, high = (t.area_sr()[0] for t in (raster.inner, raster.centre, raster.outer))
        assert low <= exact <= high
        assert low <= value <= high
        worst = max(worst, abs(value / exact - 1))
    assert worst < 0.03  # at 60 cells across


@pytest.mark.parametrize("lat", [0, 30, 41.81, -60, 89.9, -90])
@pytest.mark.parametrize("lon", [0, 359.99, 123.4])
@pytest.mark.parametrize("angle", [0, 33, 90])
def test_gapped_mosaic_area_against_spherical_geometry(lon, lat, angle):
    side, step = 0.30, 0.33
    at = (np.arange(4) - 1.5) * step
    square = side / 2 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    camera = MosaicCamera(
        tuple(square + np.array([x, y]) for x in at for y in at), tuple(str(i) for i in range(16))
    )
    pointing = np.array([float(lon)]), np.array([float(lat)]), np.array([float(angle)])
    exact = sum(smaller_side_sr(ring) for ring in lay_outlines(camera, *pointing))
    pieces = lay_camera(camera, *pointing)
    assert pieces.area_sr.sum() == pytest.approx(exact, rel=1e-6)
    raster = rasterise(pieces, 1, 14)
    assert raster.centre.area_sr()[0] == pytest.approx(exact, rel=1e-2)
    assert raster.inner.area_sr()[0] < exact < raster.outer.area_sr()[0]


@pytest.mark.parametrize(
    "ring",
    [
        [[10, 10], [14, 10], [14, 14], [12, 11], [10, 14]],  # concave
        [[358, -2], [2, -2], [2, 2], [0, -1], [358, 2]],  # concave across RA 0
        [[0, 80], [90, 80], [180, 80], [270, 80]],  # around the pole
        [[0, 0], [5, 0], [5, 1], [1, 1], [1, 4], [5, 4], [5, 5], [0, 5]],  # a C
    ],
)
@pytest.mark.parametrize("reverse", [False, True])
def test_polygon_area_and_winding(ring, reverse):
    ring = np.array(ring[::-1] if reverse else ring, dtype=float)
    exact = smaller_side_sr(ring)
    raster = rasterise_shape(Polygon(ring), 14)
    assert raster.centre.area_sr()[0] == pytest.approx(exact, rel=2e-3)
    assert raster.inner.area_sr()[0] <= exact <= raster.outer.area_sr()[0]


@pytest.mark.parametrize(
    ("lon", "lat", "angle"), [(0, 0, 0), (359.5, 89, 30), (120, -89.9, 10), (45, 41.8, 77)]
)
def test_centre_rule_cell_by_cell(lon, lat, angle):
    """Against healpy's cell centres, projected by hand and judged in the plane."""
    order = 7
    concave = np.array([[-3, -2], [3, -2], [3, 2], [0, -1], [-3, 2]], dtype=float)
    triangle = np.array([[4, -2], [6, -2], [5, 3]], dtype=float)
    camera = MosaicCamera((concave, triangle), ("a", "b"))
    pointing = np.array([float(lon)]), np.array([float(lat)]), np.array([float(angle)])
    raster = rasterise(lay_camera(camera, *pointing), 1, order)
    cell = np.arange(12 << (2 * order))
    # Gnomonic projection (A&A 395 1077, 2002, section 5.1.3), then the position angle.
    ra, dec, pa = np.radians([lon, lat, angle])
    cra, cdec = np.radians(healpy.pix2ang(1 << order, cell, nest=True, lonlat=True))
    cosc = np.sin(dec) * np.sin(cdec) + np.cos(dec) * np.cos(cdec) * np.cos(cra - ra)
    x = np.cos(cdec) * np.sin(cra - ra) / cosc
    y = (np.cos(dec) * np.sin(cdec) - np.sin(dec) * np.cos(cdec) * np.cos(cra - ra)) / cosc
    offset = np.degrees(
        np.stack((x * np.cos(pa) - y * np.sin(pa), x * np.sin(pa) + y * np.cos(pa)), axis=1)
    )
    expected = np.zeros(cell.size, dtype=bool)
    for ring in (concave, triangle):
        expected |= (cosc > 0) & PlanePath(ring).contains_points(offset)
    got = raster.centre.region(0).contains(cell << (2 * (29 - order)))
    assert expected.sum() > 50
    np.testing.assert_array_equal(got, expected)


def test_circles_cell_by_cell_against_healpy_disc():
    rng = np.random.default_rng(5)
    for _ in range(40):
        lon, lat = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-1, 1)))
        radius = rng.uniform(0.5, 100)
        expected = healpy.query_disc(
            64, healpy.ang2vec(lon, lat, lonlat=True), np.radians(radius), nest=True
        )
        raster = rasterise_shape(Circle(lon, lat, radius), 6)
        assert raster.centre.region(0) == Spans.from_cells(6, expected)


def test_boolean_shapes_bracket_and_value():
    a, b = Circle(10, 0, 3), Circle(14, 0, 3)
    order = 10
    one = cap_sr(3)
    # Lens of two equal caps by the Gauss–Bonnet theorem, from its two arcs.
    d, r = np.radians(4), np.radians(3)
    half = np.arccos(np.tan(d / 2) / np.tan(r))
    corner = np.arccos((np.cos(d) - np.cos(r) ** 2) / np.sin(r) ** 2)
    lens = 2 * np.pi - 4 * half * np.cos(r) - 2 * corner
    for shape, exact in [
        (AllOf((a, b)), lens),
        (AnyOf((a, b)), 2 * one - lens),
        (NotIn(a), FULL_SKY_SR - one),
        (AllOf((a, NotIn(b))), one - lens),
    ]:
        raster = rasterise_shape(shape, order)
        low, value, high = (t.area_sr()[0] for t in (raster.inner, raster.centre, raster.outer))
        assert low <= exact <= high
        assert value == pytest.approx(exact, rel=3e-3)


def test_one_footprint_five_arcminutes_across():
    """Within one per cent, whatever the sky position (DESIGN, section 8)."""
    rng = np.random.default_rng(8)
    size = 5 / 60
    for camera, exact in [
        (CircleCamera(size / 2), cap_sr(size / 2)),
        (MosaicCamera.rectangle(size, size), np.radians(size) ** 2),
    ]:
        n = 100
        pointing = rng.uniform(0, 360, n), np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
        raster = rasterise(lay_camera(camera, *pointing, rng.uniform(0, 360, n)), n, 17)
        assert np.abs(raster.centre.area_sr() / exact - 1).max() < 0.01


def test_shared_and_chunked_descents_are_the_same():
    """A footprint's spans do not depend on the company it is rasterised in."""
    rng = np.random.default_rng(3)
    n = 60
    camera = MosaicCamera.rectangle(2.0, 1.0)
    at = rng.uniform(0, 360, n), rng.uniform(-80, 80, n), rng.uniform(0, 360, n)
    together = rasterise(lay_camera(camera, *at), n, 13)
    for one in range(0, n, 7):
        alone = rasterise(lay_camera(camera, *(x[one : one + 1] for x in at)), 1, 13)
        for name in ("centre", "inner", "outer"):
            assert getattr(together, name).region(one) == getattr(alone, name).region(0)


def test_restricted_descent_agrees_inside_its_region():
    camera = MosaicCamera.rectangle(3.0, 2.0)
    pieces = lay_camera(camera, np.array([40.0]), np.array([12.0]), np.array([20.0]))
    window = rasterise_shape(Circle(41, 12.5, 0.8), 9).outer.region(0)
    full = rasterise(pieces, 1, 12)
    part = rasterise(pieces, 1, 12, within=window)
    for name in ("centre", "inner", "outer"):
        inside = getattr(part, name).region(0) & window
        assert inside == getattr(full, name).region(0) & window
        assert inside


def test_rotating_a_camera_leaves_its_area_alone():
    camera = MosaicCamera.rectangle(1.6, 1.2)
    angle = np.linspace(0, 350, 36)
    at = np.full(36, 77.0), np.full(36, -31.0)
    area = rasterise(lay_camera(camera, *at, angle), 36, 15).centre.area_sr()
    assert np.ptp(area) / area.mean() < 2e-3


def test_touching_cells_overstate_a_gapped_mosaic():
    """The usual recipe, once, with healpy's inclusive query: why the centre rule is used."""
    side, step = 0.30, 0.33
    at = (np.arange(4) - 1.5) * step
    square = side / 2 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    camera = MosaicCamera(
        tuple(square + np.array([x, y]) for x in at for y in at), tuple(str(i) for i in range(16))
    )
    pointing = np.array([150.0]), np.array([25.0]), np.zeros(1)
    exact = 16 * side**2
    touching = set()
    for ring in lay_outlines(camera, *pointing):
        corners = lonlat_to_vector(*ring.T)
        touching |= set(healpy.query_polygon(1024, corners, inclusive=True, fact=128, nest=True))
    recipe = len(touching) * FULL_SKY_SR / (12 * 1024**2) * DEG2_PER_SR
    ours = rasterise(lay_camera(camera, *pointing), 1, 14).centre.area_sr()[0] * DEG2_PER_SR
    assert recipe > 1.2 * exact
    assert ours == pytest.approx(exact, rel=1e-3)


def test_convex_parts_cover_a_plane_polygon():
    rng = np.random.default_rng(2)
    for _ in range(200):
        count = rng.integers(4, 12)
        turn = np.sort(rng.uniform(0, 2 * np.pi, count))
        if np.diff(turn, append=turn[0] + 2 * np.pi).max() > 3:
            continue
        radius = rng.uniform(0.3, 1, count)
        ring = radius[:, None] * np.stack((np.cos(turn), np.sin(turn)), axis=1)

        def area(points):
            x, y = points.T
            return 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))

        assert sum(area(ring[p]) for p in convex_parts(ring)) == pytest.approx(area(ring))
