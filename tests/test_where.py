"""Positions looked up, against brute force with independent code.

Membership and distances to edges: astropy's offset frames and separations, healpy's
cells, spherical-geometry's polygons, and edges sampled point by point. What maps say:
the columns of the example's files by way of astropy and healpy, with scipy's normal
density and quadrature for the published form p(r) = N r² φ((r−μ)/σ)/σ (ApJL 829 L15,
2016, DOI 10.3847/2041-8205/829/1/L15). Magnitudes: astropy's distance moduli.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import astropy_healpix
import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Distance, SkyCoord
from astropy.io import fits
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from deep_sky import distance_map, dust_map, map_of
from scipy.integrate import quad
from scipy.stats import norm
from skytally import held as held_module
from skytally.account import account
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.campaign import load_campaign
from skytally.errors import UsageError
from skytally.footprints import lay_footprints
from skytally.galaxies import RankingChoice, Weight
from skytally.held import PAIRS_LIMIT
from skytally.positions_io import Positions
from skytally.refinement import refine_footprints
from skytally.shapes import AllOf, AnyOf, Circle, NotIn, Polygon
from skytally.skymap_io import circle_skymap
from skytally.spans import Spans
from skytally.where import look_up
from spherical_geometry.polygon import SphericalPolygon

EXAMPLE = Path(__file__).parent.parent / "examples" / "lantern-7"
ARCSEC = 1 / 3600.0
# A detector in the form of an L, one beside it, a triangle on its own.
ELL = np.array([[-0.9, -0.6], [0.3, -0.6], [0.3, -0.1], [-0.4, -0.1], [-0.4, 0.6], [-0.9, 0.6]])
BOX = np.array([[0.4, -0.5], [1.1, -0.5], [1.1, 0.5], [0.4, 0.5]])
WEDGE = np.array([[-0.2, 0.1], [0.3, 0.1], [0.0, 0.8]])
CAMERA = MosaicCamera((ELL, BOX, WEDGE), ("ell", "box", "wedge"))
POINTINGS = [(0.2, 5.0, 33.0), (359.6, 5.3, 190.0), (120.0, 89.7, 71.0), (77.0, -90.0, 10.0)]


def asked(ra, dec, **known):
    """Positions as if from a table."""
    n = len(ra)

    def column(name):
        return np.broadcast_to(np.asarray(known.get(name, np.nan), float), (n,)).copy()

    return Positions(
        file="positions.csv",
        sha256="0" * 64,
        read=n,
        row=np.arange(n) + 2,
        name=np.array([f"Tessel {i}" for i in range(n)], dtype=object),
        ra_deg=np.asarray(ra, float) % 360.0,
        dec_deg=np.asarray(dec, float),
        **{k: column(k) for k in ("distance_mpc", "magnitude", "absolute_magnitude", "mass")},
    )


def look(telescopes, ra, dec, maps=None, **known):
    """Lay a campaign and look positions up."""
    loaded = campaign(telescopes, maps or [circle_skymap(10, 0, 10, label="1")])
    return look_up(loaded, lay_footprints(loaded), asked(ra, dec, **known))


def pairs(answer):
    """Set of (position, name of the exposure)."""
    names = answer.exposures.exposure[answer.visits.exposure]
    return set(zip(answer.visits.position.tolist(), names.tolist(), strict=True))


def around(rng, ra, dec, radius_deg, n):
    """Directions within a radius of a place, by astropy."""
    turn = rng.uniform(0, 360, n) * u.deg
    away = radius_deg * np.sqrt(rng.uniform(0, 1, n)) * u.deg
    found = SkyCoord(ra * u.deg, dec * u.deg).directional_offset_by(turn, away)
    return found.ra.deg, found.dec.deg


def of_regions(shapes, **more):
    """A telescope with one exposure per shape, each handing its region."""
    texts = np.array([f"region {i}" for i in range(len(shapes))], dtype=object)
    log = replace(log_table("Heron", np.full(len(shapes), np.nan), np.nan), region=texts)
    return telescope("Heron", None, log, regions=dict(zip(texts, shapes)), **more)


def tangent_plane(ra, dec, pointing):
    """Gnomonic offsets in degrees by astropy's offset frame; NaN behind the sphere."""
    lon, lat, angle = pointing
    frame = SkyCoord(lon * u.deg, lat * u.deg).skyoffset_frame(rotation=angle * u.deg)
    x, y, z = SkyCoord(ra * u.deg, dec * u.deg).transform_to(frame).cartesian.xyz.value
    x = np.where(x > 0, x, np.nan)
    return np.degrees(y / x), np.degrees(z / x)


def sky_of(offsets, pointing):
    """Directions of gnomonic offsets (n, 2) by the same frame."""
    lon, lat, angle = pointing
    frame = SkyCoord(lon * u.deg, lat * u.deg).skyoffset_frame(rotation=angle * u.deg)
    xi, eta = np.radians(np.asarray(offsets)).T
    found = SkyCoord(
        np.arctan2(xi, 1) * u.rad, np.arctan(eta / np.hypot(1, xi)) * u.rad, frame=frame
    ).icrs
    return found.ra.deg, found.dec.deg


def in_plane(ring, x, y):
    """Even-odd rule in the plane (common practice)."""
    inside = np.zeros(x.shape, dtype=bool)
    for (ax, ay), (bx, by) in zip(ring, np.roll(ring, -1, axis=0)):
        with np.errstate(divide="ignore", invalid="ignore"):
            crosses = ((ay > y) != (by > y)) & (x < (bx - ax) * (y - ay) / (by - ay) + ax)
        inside ^= crosses
    return inside


# --- which exposures held a position ----------------------------------------------------


@pytest.fixture(scope="module")
def mosaics():
    log = log_table("Heron", *np.array(POINTINGS).T[:2], angle=np.array(POINTINGS).T[2])
    return telescope("Heron", CAMERA, log)


@pytest.mark.parametrize("refined", [False, True])
def test_mosaics_hold_what_astropy_says(mosaics, refined):
    rng = np.random.default_rng(1)
    places = [around(rng, lon, lat, 1.6, 1500) for lon, lat, _ in POINTINGS]
    ra, dec = np.concatenate(places, axis=1)
    loaded = campaign([mosaics], [circle_skymap(0, 5, 3, label="1")])
    footprints = lay_footprints(loaded)
    if refined:
        footprints = refine_footprints(footprints, loaded.maps, 1e-4)
    answer = look_up(loaded, footprints, asked(ra, dec))
    expected = set()
    for name, pointing in zip(mosaics.log.exposure, POINTINGS):
        x, y = tangent_plane(ra, dec, pointing)
        inside = np.any([in_plane(ring, x, y) for ring in CAMERA.corners], axis=0)
        expected |= {(int(i), name) for i in np.flatnonzero(inside)}
    assert len(expected) > 1000
    assert pairs(answer) == expected
    counts = np.bincount([i for i, _ in expected], minlength=ra.size)
    assert np.array_equal(answer.exposures_of, counts)


@pytest.mark.parametrize("pointing", POINTINGS)
def test_a_hundredth_of_an_arcsecond_decides_at_an_edge(pointing):
    """The working order's cells are a thousand times wider."""
    rng = np.random.default_rng(2)
    along, off = rng.uniform(-0.29, 0.29, 200), np.repeat([-0.01, 0.01], 100) * ARCSEC
    field = telescope(
        "Plover",
        MosaicCamera.rectangle(0.6, 0.8),
        log_table("Plover", *([v] for v in pointing[:2]), angle=pointing[2]),
    )
    answer = look([field], *sky_of(np.stack((along, 0.4 + off), axis=1), pointing))
    assert np.array_equal(answer.exposures_of, np.repeat([1, 0], 100))
    assert answer.visits.edge_arcsec == pytest.approx(np.full(100, 0.01), abs=1e-5)


def test_circles_hold_what_lies_within_their_radius():
    rng = np.random.default_rng(3)
    lon, lat = np.array([0.1, 359.9, 200.0, 30.0]), np.array([-1.0, 0.5, 89.9, -89.0])
    field = telescope("Avocet", CircleCamera(1.3), log_table("Avocet", lon, lat))
    places = [around(rng, a, b, 1.6, 500) for a, b in zip(lon, lat)]
    ra, dec = np.concatenate(places, axis=1)
    answer = look([field], ra, dec)
    sky = SkyCoord(ra * u.deg, dec * u.deg)
    away = np.array([sky.separation(SkyCoord(a * u.deg, b * u.deg)).deg for a, b in zip(lon, lat)])
    expected = {(int(i), f"{e:04d}") for e, i in zip(*np.nonzero(away <= 1.3))}
    assert pairs(answer) == expected
    exposure = np.array([int(e) for e in answer.exposures.exposure[answer.visits.exposure]])
    edge = (1.3 - away[exposure, answer.visits.position]) * 3600
    assert answer.visits.edge_arcsec == pytest.approx(edge, abs=1e-6)


def test_polygons_hold_what_spherical_geometry_says():
    """Among them one that is not convex, and one over a pole."""
    rng = np.random.default_rng(4)
    rings = [
        np.array([[10.0, -2.0], [14.0, -2.0], [14.0, 0.0], [12.0, 0.0], [12.0, 2.0], [10.0, 2.0]]),
        np.array([[0.0, 88.5], [95.0, 89.0], [170.0, 87.9], [280.0, 88.8]]),
        np.array([[358.0, 20.0], [3.0, 21.0], [0.0, 25.0]]),
    ]
    places = [around(rng, *middle, 3.2, 120) for middle in ((12.0, 0.0), (0.0, 90.0), (0.3, 22.0))]
    ra, dec = np.concatenate(places, axis=1)
    answer = look([of_regions([Polygon(ring) for ring in rings])], ra, dec)
    middles = [(11.0, -1.0), (0.0, 90.0), (0.3, 22.0)]
    expected = set()
    for index, (ring, middle) in enumerate(zip(rings, middles)):
        polygon = SphericalPolygon.from_lonlat(*ring.T, center=middle, degrees=True)
        inside = [polygon.contains_lonlat(a, b, degrees=True) for a, b in zip(ra, dec)]
        expected |= {(int(i), f"{index:04d}") for i in np.flatnonzero(inside)}
    assert len(expected) > 100
    assert pairs(answer) == expected


def test_mocs_hold_their_cells_and_know_no_edge():
    rng = np.random.default_rng(5)
    cells = healpy.query_disc(1 << 6, healpy.ang2vec(40, -30, lonlat=True), 0.06, nest=True)
    fine = rng.choice(12 * 4**8, 40, replace=False)
    region = Spans.from_cells(6, cells) | Spans.from_cells(8, fine)
    ra, dec = np.concatenate((around(rng, 40, -30, 5, 3000), around(rng, 5, 5, 9, 500)), axis=1)
    wide = healpy.ang2pix(8, 5.0, 5.0, nest=True, lonlat=True)
    answer = look([of_regions([region, Spans.from_cells(3, np.array([wide]))])], ra, dec)
    inside = np.isin(healpy.ang2pix(1 << 6, ra, dec, nest=True, lonlat=True), cells)
    inside |= np.isin(healpy.ang2pix(1 << 8, ra, dec, nest=True, lonlat=True), fine)
    coarse = healpy.ang2pix(8, ra, dec, nest=True, lonlat=True) == wide
    expected = {(int(i), "0000") for i in np.flatnonzero(inside)}
    expected |= {(int(i), "0001") for i in np.flatnonzero(coarse)}
    assert pairs(answer) == expected
    assert np.isnan(answer.visits.edge_arcsec).all()
    width = [healpy.nside2resol(1 << order, arcmin=True) * 60 for order in (8, 3)]
    assert answer.exposures.edge_cell_arcsec == pytest.approx(width, rel=1e-12)


def test_masks_and_searchable_regions_take_away():
    rng = np.random.default_rng(6)
    searchable = healpy.query_disc(1 << 7, healpy.ang2vec(20, 10, lonlat=True), 0.02, nest=True)
    square = np.array([[19.0, 9.0], [19.3, 9.0], [19.3, 9.3], [19.0, 9.3]])
    field = telescope(
        "Plover",
        CircleCamera(2.0),
        log_table("Plover", [20.0], [10.0]),
        mask=(Circle(20.5, 10.2, 0.3), Polygon(square)),
        searchable=Spans.from_cells(7, searchable),
    )
    whole = telescope("Heron", CircleCamera(2.0), log_table("Heron", [20.0], [10.0]))
    ra, dec = around(rng, 20, 10, 2.2, 4000)
    answer = look([field, whole], ra, dec)
    sky = SkyCoord(ra * u.deg, dec * u.deg)
    near = sky.separation(SkyCoord(20 * u.deg, 10 * u.deg)).deg <= 2.0
    star = sky.separation(SkyCoord(20.5 * u.deg, 10.2 * u.deg)).deg <= 0.3
    polygon = SphericalPolygon.from_lonlat(*square.T, center=(19.1, 9.1), degrees=True)
    boxed = np.array([polygon.contains_lonlat(a, b, degrees=True) for a, b in zip(ra, dec)])
    inside = np.isin(healpy.ang2pix(1 << 7, ra, dec, nest=True, lonlat=True), searchable)
    kept = near & ~star & ~boxed & inside
    assert min((near & star).sum(), (near & boxed).sum(), (near & ~inside).sum()) > 10
    assert np.array_equal(answer.exposures_of, kept.astype(int) + near)
    assert answer.searchable == ("Plover",)


def test_compound_regions_hold_what_their_parts_say():
    one, two, three = Circle(50, 0, 2), Circle(52, 1, 2), Circle(51, 0.5, 0.8)
    cells = Spans.from_cells(4, np.unique(healpy.ang2pix(16, [50, 51], [0, 1], lonlat=True)))
    shapes = [AllOf((one, NotIn(three))), AnyOf((one, AllOf((two, NotIn(one))))), NotIn(two)]
    shapes.append(AllOf((AnyOf((one, two)), NotIn(cells))))
    rng = np.random.default_rng(7)
    ra, dec = around(rng, 51, 0.5, 4, 2000)
    answer = look([of_regions(shapes)], ra, dec)
    sky = SkyCoord(ra * u.deg, dec * u.deg)
    a, b, c = (
        sky.separation(SkyCoord(s.lon_deg * u.deg, s.lat_deg * u.deg)).deg <= s.radius_deg
        for s in (one, two, three)
    )
    line = healpy.ang2pix(1 << 29, ra, dec, nest=True, lonlat=True)
    inside = [a & ~c, a | (b & ~a), ~b, (a | b) & ~cells.contains(line)]
    expected = {
        (int(i), f"{k:04d}") for k, where in enumerate(inside) for i in np.flatnonzero(where)
    }
    assert pairs(answer) == expected


# --- distance to the nearest edge -------------------------------------------------------

SAMPLES = 6000


def sampled_ring(ra, dec):
    """Points along the great circles between corners, by spherical interpolation."""
    corner = SkyCoord(ra * u.deg, dec * u.deg)
    points = []
    for here, there in zip(corner, np.roll(corner, -1)):
        step = here.separation(there) * np.linspace(0, 1, SAMPLES)
        points.append(here.directional_offset_by(here.position_angle(there), step))
    return [p.ra.deg for p in points], [p.dec.deg for p in points]


def nearest(ra, dec, edges):
    """Arcseconds from each position to the nearest sampled point, and the samples' spacing."""
    points = SkyCoord(np.ravel(edges[0]) * u.deg, np.ravel(edges[1]) * u.deg)
    steps = points[1:].separation(points[:-1]).arcsec
    spacing = np.delete(steps, np.arange(SAMPLES - 1, steps.size, SAMPLES)).max()
    away = [SkyCoord(a * u.deg, b * u.deg).separation(points).arcsec.min() for a, b in zip(ra, dec)]
    return np.array(away), spacing


@pytest.mark.parametrize("detector", [0, 1, 2])
@pytest.mark.parametrize("pointing", [POINTINGS[0], POINTINGS[2]])
def test_nearest_edge_of_a_detector_by_sampling_its_edges(mosaics, detector, pointing):
    """In the L the cuts between its convex parts must not count."""
    rng = np.random.default_rng(8)
    ring = CAMERA.corners[detector]
    x, y = rng.uniform(ring.min(axis=0), ring.max(axis=0), (150, 2)).T
    inside = in_plane(ring, x, y)
    ra, dec = sky_of(np.stack((x, y), axis=1)[inside], pointing)
    field = replace(mosaics, log=mosaics.log.take(np.array([POINTINGS.index(pointing)])))
    answer = look([field], ra, dec)
    assert np.array_equal(answer.visits.position, np.arange(ra.size))
    away, spacing = nearest(ra, dec, sampled_ring(*sky_of(ring, pointing)))
    difference = away - answer.visits.edge_arcsec
    assert difference.min() > -1e-4
    assert difference.max() < spacing
    assert spacing < 1.0


def test_nearest_edge_counts_masks_and_polygons_not_convex():
    ring = np.array(
        [[10.0, -2.0], [14.0, -2.0], [14.0, 0.0], [12.0, 0.0], [12.0, 2.0], [10.0, 2.0]]
    )
    star = Circle(11.0, -1.0, 0.4)
    rng = np.random.default_rng(9)
    ra, dec = around(rng, 11.3, -0.7, 2.0, 150)
    answer = look([of_regions([Polygon(ring)], mask=(star,))], ra, dec)
    at = answer.visits.position
    assert at.size > 40
    edges = sampled_ring(*ring.T)
    away, spacing = nearest(ra[at], dec[at], edges)
    middle = SkyCoord(star.lon_deg * u.deg, star.lat_deg * u.deg)
    beside = SkyCoord(ra[at] * u.deg, dec[at] * u.deg).separation(middle).arcsec - 0.4 * 3600
    difference = np.minimum(away, beside) - answer.visits.edge_arcsec
    assert (beside < away).sum() > 5
    assert difference.min() > -1e-4
    assert difference.max() < spacing


def test_nearest_edge_where_shapes_meet():
    """Intersections end at the nearest edge; in a union the deepest part counts."""
    one, two = Circle(50, 0, 2), Circle(52, 0, 2)
    cells = Spans.from_cells(2, np.arange(192))
    shapes = [AllOf((one, two)), AnyOf((one, two)), AllOf((one, NotIn(two))), AllOf((one, cells))]
    ra = np.array([50.3, 51.0, 48.5])
    answer = look([of_regions(shapes)], ra, np.zeros(3))
    found = {
        (int(p), answer.exposures.exposure[e]): edge
        for p, e, edge in zip(
            answer.visits.position, answer.visits.exposure, answer.visits.edge_arcsec
        )
    }
    degrees = {
        **{(0, "0000"): 0.3, (1, "0000"): 1.0},
        **{(0, "0001"): 1.7, (1, "0001"): 1.0, (2, "0001"): 0.5},
        **{(2, "0002"): 0.5},
        **{(0, "0003"): np.nan, (1, "0003"): np.nan, (2, "0003"): np.nan},
    }
    assert found.keys() == degrees.keys()
    for key, value in degrees.items():
        assert found[key] == pytest.approx(value * 3600, abs=1e-6, nan_ok=True)


# --- what the exposures say -------------------------------------------------------------


@cache
def night():
    """Two telescopes, three bands, limits missing here and there, one of them after a pause."""
    rng = np.random.default_rng(10)
    n = 40
    depth = rng.normal(21.0, 0.6, n)
    depth[rng.random(n) < 0.25] = np.nan
    first = log_table(
        "Heron",
        100 + rng.uniform(-2, 2, n),
        rng.uniform(-2, 2, n),
        start=EVENT_MJD + rng.permutation(n) / 48,
        band=rng.choice(["g", "r", "w"], n).astype(object),
        depth=depth,
    )
    stated = np.where(rng.random(n) < 0.3, rng.uniform(0, 0.6, n), np.nan)
    first = replace(first, extinction=stated)
    second = log_table(
        "Plover", [100.0, 100.0], [0.0, 0.0], start=[EVENT_MJD + 0.11, EVENT_MJD + 3], depth=np.nan
    )
    return (
        telescope("Heron", CircleCamera(1.1), first),
        telescope("Plover", MosaicCamera.rectangle(2, 2), second),
    )


def brute_visits(loaded, ra, dec):
    """Every (start, telescope, exposure, band, depth, stated extinction) that held a place."""
    found = []
    here = SkyCoord(ra * u.deg, dec * u.deg)
    for one in loaded.telescopes:
        log = one.log
        for k in range(len(log)):
            middle = SkyCoord(log.ra_deg[k] * u.deg, log.dec_deg[k] * u.deg)
            if isinstance(one.camera, CircleCamera):
                inside = here.separation(middle).deg <= one.camera.radius_deg
            else:
                pointing = (log.ra_deg[k], log.dec_deg[k], log.angle_deg[k])
                inside = np.max(np.abs(tangent_plane(ra, dec, pointing))) <= 1.0
            if inside:
                row = (log.start_mjd[k], one.name, log.exposure[k], log.band[k])
                found.append((*row, log.depth[k], log.extinction[k]))
    return sorted(found)


def test_first_last_and_deepest_by_band_against_a_loop():
    rng = np.random.default_rng(11)
    ra, dec = around(rng, 100, 0, 3.5, 40)
    sky = distance_map_near(100.0, 0.0)
    dust = dust_map(seed=1)
    loaded = replace(
        campaign(night(), [sky]), dust=dust, extinction_coefficients={"g": 3.3, "r": 2.3}
    )
    answer = look_up(loaded, lay_footprints(loaded), asked(ra, dec, distance_mpc=77.0))
    e, v, d = answer.exposures, answer.visits, answer.deepest
    limits = 0
    for index in range(40):
        expected = brute_visits(loaded, ra[index], dec[index])
        rows = v.exposure[v.position == index]
        told = list(zip(e.start_mjd[rows], e.telescope[rows], e.exposure[rows], e.band[rows]))
        assert told == [x[:4] for x in expected]
        assert answer.exposures_of[index] == len(expected)
        if not expected:
            assert (answer.first[index], answer.last[index]) == (-1, -1)
            assert not (d.position == index).any()
            continue
        assert e.exposure[answer.first[index]] == expected[0][2]
        assert e.exposure[answer.last[index]] == expected[-1][2]
        assert e.hours[answer.last[index]] == pytest.approx(
            (expected[-1][0] - EVENT_MJD) * 24, abs=6e-5
        )
        pixel = healpy.ang2pix(1 << 29, ra[index], dec[index], nest=True, lonlat=True)
        ebv = dust.ebv[(dust.starts <= pixel) & (pixel < dust.stops)]
        for band in {x[3] for x in expected}:
            (row,) = np.flatnonzero((d.position == index) & (d.band == band))
            taken = {"g": 3.3, "r": 2.3, "w": np.nan}[band] * (ebv[0] if ebv.size else np.nan)
            options = [
                (x[4] - np.nan_to_num(a), x[4], a)
                for x in expected
                if x[3] == band and np.isfinite(x[4])
                for a in [x[5] if np.isfinite(x[5]) else taken]
            ]
            if not options:
                assert np.isnan([d.depth[row], d.absolute_mean[row], d.absolute_own[row]]).all()
                continue
            limits += 1
            limit, depth, extinction = max(options, key=lambda x: x[0])
            assert d.depth[row] == depth
            assert d.extinction[row] == pytest.approx(extinction, nan_ok=True)
            modulus = Distance(77 * u.Mpc).distmod.value
            assert d.absolute_own[row] == pytest.approx(limit - modulus, abs=1e-9)
    assert limits > 30
    assert answer.extinction == "partly corrected"


def distance_map_near(lon, lat):
    """A patch of the sky with distances about a place."""
    cell = healpy.query_disc(16, healpy.ang2vec(lon, lat, lonlat=True), 0.2, nest=True)
    rng = np.random.default_rng(12)
    weight = rng.exponential(1.0, cell.size)
    mu, sigma = rng.uniform(60, 160, cell.size), rng.uniform(15, 45, cell.size)
    return map_of(np.full(cell.size, 4), cell, weight, mu, sigma)


def test_equal_limits_name_the_earliest_exposure():
    log = log_table("Heron", [30.0] * 3, [0.0] * 3, start=EVENT_MJD + np.array([0.3, 0.1, 0.2]))
    answer = look([telescope("Heron", CircleCamera(1.0), log)], [30.2], [0.1])
    assert answer.exposures.exposure[answer.deepest.exposure[0]] == "0001"
    assert (answer.first[0], answer.last[0]) == (0, 2)


def test_limits_come_in_the_campaigns_system_and_significance():
    """From 3σ to 5σ, 2.5 log₁₀(5/3) shallower (background-limited, common practice)."""
    log = log_table("Heron", [30.0], [0.0], depth=21.0)
    field = telescope("Heron", CircleCamera(1.0), log, depth_significance=3.0)
    answer = look([field], [30.0], [0.0])
    expected = 21.0 - 2.5 * np.log10(5 / 3)
    assert answer.exposures.depth[0] == pytest.approx(expected)
    assert answer.deepest.depth[0] == pytest.approx(expected)


def test_nothing_observed_is_an_answer():
    answer = look(
        [telescope("Heron", CircleCamera(1.0), log_table("Heron", [], []))], [1, 2], [3, 4]
    )
    assert list(answer.exposures_of) == [0, 0]
    assert answer.visits.position.size == answer.deepest.position.size == 0
    assert answer.extinction == ""


def test_too_many_pairs_are_refused(monkeypatch):
    log = log_table("Heron", [30.0] * 4, [0.0] * 4, angle=[0, 10, 20, 30])
    field = telescope("Heron", MosaicCamera.rectangle(1, 1), log)
    assert PAIRS_LIMIT >= 10_000_000
    monkeypatch.setattr(held_module, "PAIRS_LIMIT", 7)
    with pytest.raises(UsageError, match=r"8 footprints.*at most 7.*fewer positions"):
        look([field], [30.0, 30.1], [0.0, 0.0])
    assert look([field], [30.0], [0.0]).exposures_of[0] == 4


# --- what the maps say ------------------------------------------------------------------


@cache
def example():
    loaded = load_campaign(EXAMPLE / "campaign.toml")
    return loaded, lay_footprints(loaded)


def columns(name):
    """Raw columns of a map of the example; UNIQ split by its bits (MOC 2.0, section 4.3)."""
    with fits.open(EXAMPLE / "maps" / f"{name}.fits.gz") as hdus:
        data = {key: np.array(hdus[1].data[key], float) for key in hdus[1].columns.names}
        uniq = np.array(hdus[1].data["UNIQ"], dtype=np.int64)
    order = (np.array([int(value).bit_length() - 1 for value in uniq]) - 2) // 2
    return data, order, uniq - 4 * 4**order


def row_at(order, cell, ra, dec):
    """The map row that holds a position, None off the map."""
    for level in np.unique(order):
        pixel = healpy.ang2pix(1 << int(level), ra, dec, nest=True, lonlat=True)
        hit = np.flatnonzero((order == level) & (cell == pixel))
        if hit.size:
            return int(hit[0])
    return None


@pytest.mark.parametrize(("version", "name"), [(1, "arc"), (2, "update")])
def test_densities_and_distances_against_scipy_on_the_example(version, name):
    rng = np.random.default_rng(13)
    data, order, cell = columns(name)
    chosen = rng.choice(order.size, 60, replace=False, p=weighted(data, order))
    ra, dec = np.transpose(
        [healpy.pix2ang(1 << int(order[k]), cell[k], nest=True, lonlat=True) for k in chosen]
    )
    distance = rng.uniform(20, 320, 60)
    loaded, footprints = example()
    answer = look_up(loaded, footprints, asked(ra, dec, distance_mpc=distance)).maps[version]
    area = healpy.nside2pixarea(1) / 4.0**order
    total = np.sum(data["PROBDENSITY"] * area)
    density = data["PROBDENSITY"] / total
    level = credible(density, area)
    checked, untied = 0, 0
    for i, k in enumerate(chosen):
        assert row_at(order, cell, ra[i], dec[i]) == k
        assert answer.density_per_deg2[i] == pytest.approx(density[k] * (np.pi / 180) ** 2)
        # Equally dense cells are told apart by their order alone.
        alone = np.count_nonzero(density == density[k]) == 1
        low, high = level[k]
        assert low - 1e-9 <= answer.credible_level[i] <= high + 1e-9
        assert not alone or answer.credible_level[i] == pytest.approx(high, abs=1e-9)
        untied += alone
        mu, sigma = data["DISTMU"][k], data["DISTSIGMA"][k]
        if not (np.isfinite(mu) and data["DISTNORM"][k] > 0):
            assert np.isnan(answer.density_per_mpc3[i])
            continue
        checked += 1

        def moment(power, mu=mu, sigma=sigma):
            return quad(
                lambda r: r ** (2 + power) * norm.pdf(r, mu, sigma),
                0,
                max(mu, 0) + 12 * sigma,
                epsabs=0,
                points=[max(mu, sigma)],
            )[0]

        whole, mean = moment(0), moment(1) / moment(0)
        per_mpc3 = density[k] / whole * norm.pdf(distance[i], mu, sigma)
        assert answer.density_per_mpc3[i] == pytest.approx(per_mpc3, rel=1e-7)
        # The file's own rounded N says the same less exactly.
        rounded = density[k] * data["DISTNORM"][k] * norm.pdf(distance[i], mu, sigma)
        assert answer.density_per_mpc3[i] == pytest.approx(rounded, rel=1e-3)
        assert answer.distance_mean_mpc[i] == pytest.approx(mean, rel=1e-7)
        sd = np.sqrt(moment(2) / moment(0) - mean**2)
        assert answer.distance_sd_mpc[i] == pytest.approx(sd, rel=1e-6)
    assert min(checked, untied) > 40


def weighted(data, order):
    """Chance of each cell by its probability, with an even part for the outskirts."""
    held = data["PROBDENSITY"] / 4.0**order
    return 0.5 * held / held.sum() + 0.5 / held.size


def credible(density, area):
    """Probability of all denser cells, without and with those as dense."""
    held = density * area
    return np.array([[held[density > d].sum(), held[density >= d].sum()] for d in density])


def test_probability_integrates_to_one_over_a_column_of_space():
    """∫ dP/dV r² dr over a direction is its probability per steradian (quadrature)."""
    loaded, footprints = example()
    r = np.linspace(0.05, 600, 6000)
    answer = look_up(
        loaded, footprints, asked(np.full(r.size, 168.2), np.full(r.size, -13.0), distance_mpc=r)
    )
    for on_map in answer.maps[1:]:
        total = np.trapezoid(on_map.density_per_mpc3 * r**2, r)
        assert total == pytest.approx(on_map.density_per_deg2[0] * (180 / np.pi) ** 2, rel=1e-5)
    assert not answer.maps[0].has_distances
    assert np.isnan(answer.maps[0].density_per_mpc3).all()


def test_absolute_limits_at_the_newest_maps_distance():
    """M = m − A − distance modulus, the modulus by astropy."""
    loaded, footprints = example()
    answer = look_up(loaded, footprints, asked([168.2, 169.0, 167.1], [-13.0, -12.5, -13.5]))
    d, newest = answer.deepest, answer.maps[-1]
    assert newest.version == "3 update"
    assert d.position.size >= 6
    for row, place in enumerate(d.position):
        mean, sd = newest.distance_mean_mpc[place], newest.distance_sd_mpc[place]
        limit = d.depth[row] - d.extinction[row]
        for distance, value in (
            (mean - sd, d.absolute_near[row]),
            (mean, d.absolute_mean[row]),
            (mean + sd, d.absolute_far[row]),
        ):
            assert value == pytest.approx(
                limit - Distance(distance * u.Mpc).distmod.value, abs=1e-9
            )
    assert answer.extinction == "corrected"


def test_a_distance_not_above_zero_gives_no_limit():
    """At μ/σ ≪ 0 the mean is √3 standard deviations or more, so only a map without counts."""
    cell = healpy.ang2pix(16, [30.0], [0.0], nest=True, lonlat=True)
    flat = map_of(np.array([4]), cell, np.ones(1), np.array([np.inf]), np.ones(1))
    field = telescope("Heron", CircleCamera(1.0), log_table("Heron", [30.0], [0.0]))
    answer = look([field], [30.0], [0.0], maps=[flat], distance_mpc=[50.0])
    d = answer.deepest
    assert np.isnan([d.absolute_near[0], d.absolute_mean[0], d.absolute_far[0]]).all()
    assert d.absolute_own[0] == pytest.approx(21 - Distance(50 * u.Mpc).distmod.value)
    assert not answer.maps[0].has_distances


def test_off_the_map_and_in_cells_without_distance():
    sky = distance_map(radius_deg=6.0)
    lon, lat = np.array([150.0, 330.0]), np.array([20.0, -20.0])
    bare = np.flatnonzero(~np.isfinite(sky.distance.mu_mpc))[0]
    order = 29 - int(np.log2(sky.stops[bare] - sky.starts[bare])) // 2
    number = sky.starts[bare] >> (2 * (29 - order))
    inside = astropy_healpix.healpix_to_lonlat(number, 1 << order, order="nested")
    lon, lat = np.append(lon, inside[0].deg), np.append(lat, inside[1].deg)
    field = telescope("Heron", CircleCamera(1.0), log_table("Heron", [150.0], [20.0]))
    on_map = look([field], lon, lat, maps=[sky], distance_mpc=100.0).maps[0]
    assert list(on_map.listed) == [True, False, True]
    assert list(np.isnan(on_map.credible_level)) == [False, True, False]
    assert on_map.density_per_deg2[1] == 0 == on_map.density_per_mpc3[1]
    assert np.isnan(on_map.distance_mean_mpc[1:]).all()
    assert np.isnan(on_map.density_per_mpc3[2])
    assert on_map.density_per_deg2[2] > 0


# --- galaxies ---------------------------------------------------------------------------


def galaxies(n=300, seed=14):
    """Galaxies scattered about a map of known cells, some without this or that."""
    rng = np.random.default_rng(seed)
    ra, dec = around(rng, 150, 20, 11, n)
    known = {
        "distance_mpc": rng.uniform(20, 250, n),
        "magnitude": rng.uniform(12, 18, n),
        "mass": 10 ** rng.uniform(8, 11, n),
    }
    for values in known.values():
        values[rng.random(n) < 0.05] = np.nan
    return asked(ra, dec, **known)


def scores(table, sky, weight):
    """N φ((r−μ)/σ)/σ × density × weight, N by quadrature, galaxy by galaxy."""
    value = np.full(len(table), np.nan)
    for i in range(len(table)):
        line = healpy.ang2pix(1 << 29, table.ra_deg[i], table.dec_deg[i], nest=True, lonlat=True)
        row = np.flatnonzero((sky.starts <= line) & (line < sky.stops))
        r = table.distance_mpc[i]
        if not row.size:
            value[i] = 0.0 * r
            continue
        mu, sigma = sky.distance.mu_mpc[row[0]], sky.distance.sigma_mpc[row[0]]
        if np.isfinite(mu):
            whole = quad(lambda x, m=mu, s=sigma: x**2 * norm.pdf(x, m, s), 0, 600, points=[150])[0]
            value[i] = sky.density_per_sr[row[0]] * norm.pdf(r, mu, sigma) / whole
    if weight is Weight.MASS:
        return value * table.mass
    if weight is Weight.LUMINOSITY:
        far = np.where(np.isfinite(table.distance_mpc), table.distance_mpc, 1.0)
        modulus = Distance(far * u.Mpc).distmod.value
        return value * 10 ** (-0.4 * (table.magnitude - modulus))
    return value


@pytest.mark.parametrize("weight", list(Weight))
def test_galaxies_are_ranked_by_weighted_probability_per_volume(weight):
    table, sky = galaxies(), distance_map(radius_deg=9.0, seed=11)
    log = log_table("Heron", [149.0, 153.0, 150.0], [18.0, 20.5, 22.0])
    loaded = campaign([telescope("Heron", CircleCamera(2.5), log)], [sky])
    choice = RankingChoice(weight, 0.6)
    answer = look_up(loaded, lay_footprints(loaded), table, choice)
    (ranking,) = answer.rankings
    score = scores(table, sky, weight)
    known = np.isfinite(score)
    assert ranking.ranked == known.sum() > 200
    assert dict(ranking.unranked).keys() >= {"no distance", "the map has no distance there"}
    assert sum(number for _, number in ranking.unranked) == (~known).sum()
    share = np.where(known, score / score[known].sum(), np.nan)
    assert ranking.share == pytest.approx(share, rel=1e-7, abs=1e-15, nan_ok=True)
    assert np.array_equal(ranking.rank == 0, ~known)
    order = np.argsort(np.where(known, ranking.rank, len(table) + 1), kind="stable")[: known.sum()]
    assert (np.diff(share[order]) <= 1e-12).all()
    sky_of_table = SkyCoord(table.ra_deg * u.deg, table.dec_deg * u.deg)
    away = [
        sky_of_table.separation(SkyCoord(a * u.deg, b * u.deg)).deg
        for a, b in zip(log.ra_deg, log.dec_deg)
    ]
    seen = np.min(away, axis=0) <= 2.5
    assert ranking.observed == (seen & known).sum()
    covered = share[seen & known].sum()
    assert 0.05 < covered < 0.95
    assert ranking.covered == pytest.approx(covered, rel=1e-7)
    total = account(loaded).row().probability
    assert ranking.map_covered == pytest.approx(total, abs=0.003)
    corrected = 0.6 * ranking.covered + 0.4 * ranking.map_covered
    assert ranking.covered_corrected == pytest.approx(corrected)


def test_a_complete_table_needs_no_correction_and_none_is_made_unasked():
    table, sky = galaxies(), distance_map(radius_deg=9.0, seed=11)
    log = log_table("Heron", [149.0], [18.0])
    loaded = campaign([telescope("Heron", CircleCamera(2.5), log)], [sky])
    footprints = lay_footprints(loaded)
    (whole,) = look_up(loaded, footprints, table, RankingChoice(completeness=1.0)).rankings
    (plain,) = look_up(loaded, footprints, table, RankingChoice()).rankings
    assert whole.covered_corrected == whole.covered == plain.covered
    assert plain.covered_corrected is None
    assert look_up(loaded, footprints, table).rankings == ()


def test_covered_map_probability_is_exact_where_cells_are():
    """A region of whole map cells holds exactly their probability."""
    sky = distance_map(radius_deg=9.0, seed=11)
    half = Spans.from_intervals(sky.starts[::2], sky.stops[::2])
    loaded = campaign([of_regions([half])], [sky])
    (ranking,) = look_up(loaded, lay_footprints(loaded), galaxies(), RankingChoice()).rankings
    area = (sky.stops - sky.starts) * (4 * np.pi / (12 * 4.0**29))
    assert ranking.map_covered == pytest.approx(np.sum((sky.density_per_sr * area)[::2]), rel=1e-12)


def test_absolute_magnitudes_come_before_apparent_ones():
    sky = distance_map_near(100.0, 0.0)
    field = telescope("Heron", CircleCamera(1.0), log_table("Heron", [100.0], [0.0]))
    loaded = campaign([field], [sky])
    table = asked(
        [100.0, 100.0],
        [0.0, 0.0],
        distance_mpc=90.0,
        magnitude=15.0,
        absolute_magnitude=[-20, np.nan],
    )
    choice = RankingChoice(Weight.LUMINOSITY)
    (ranking,) = look_up(loaded, lay_footprints(loaded), table, choice).rankings
    brighter = 10 ** (0.4 * (20 + 15.0 - Distance(90 * u.Mpc).distmod.value))
    assert ranking.share[0] / ranking.share[1] == pytest.approx(brighter)


def test_galaxies_off_the_map_are_ranked_last_with_nothing():
    sky = distance_map_near(100.0, 0.0)
    field = telescope("Heron", CircleCamera(1.0), log_table("Heron", [100.0], [0.0]))
    loaded = campaign([field], [sky])
    footprints = lay_footprints(loaded)
    two = asked([280.0, 100.0], [0.0, 0.0], distance_mpc=90.0)
    (ranking,) = look_up(loaded, footprints, two, RankingChoice()).rankings
    assert list(ranking.rank) == [2, 1]
    assert list(ranking.share) == [0, 1]
    none = asked([280.0], [0.0], distance_mpc=90.0)
    (ranking,) = look_up(loaded, footprints, none, RankingChoice(completeness=0.5)).rankings
    assert ranking.covered is None
    assert ranking.covered_corrected is None


@pytest.mark.parametrize("value", [0.0, -0.1, 1.01, np.nan])
def test_a_completeness_that_is_no_share_is_refused(value):
    with pytest.raises(UsageError, match=r"completeness is .*at most 1"):
        RankingChoice(completeness=value)


@pytest.mark.parametrize(
    ("known", "weight", "words"),
    [
        ({}, Weight.NONE, "a distance.*redshift"),
        ({"distance_mpc": 50.0}, Weight.LUMINOSITY, "luminosity needs.*magnitude"),
        ({"distance_mpc": 50.0}, Weight.MASS, "mass needs.*column mass"),
        ({"mass": 1e9}, Weight.MASS, "a distance"),
    ],
)
def test_a_ranking_that_the_table_does_not_allow_is_refused(known, weight, words):
    loaded, footprints = example()
    with pytest.raises(UsageError, match=words):
        look_up(loaded, footprints, asked([168.0], [-13.0], **known), RankingChoice(weight))


def test_a_ranking_without_any_distance_on_the_maps_is_refused():
    field = telescope("Heron", CircleCamera(1.0), log_table("Heron", [30.0], [0.0]))
    loaded = campaign([field], [circle_skymap(30, 0, 5, label="1")])
    with pytest.raises(UsageError, match=r"carries distances.*Ask without"):
        look_up(loaded, lay_footprints(loaded), asked([30], [0], distance_mpc=9.0), RankingChoice())
