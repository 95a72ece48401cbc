"""Totals and probabilities against brute force with healpy and exact areas.

healpy (an independent HEALPix library, used in tests only) finds the order-14
pixels whose centres lie in each detector; their union is summed on the map's own
pixels, as the map's file defines them.
"""

import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.io import fits
from campaign_builder import campaign, log_table, telescope
from skytally.account import account
from skytally.cameras import CircleCamera, MosaicCamera, lay_camera, lay_outlines
from skytally.footprints import lay_footprints
from skytally.refinement import refine_footprints
from skytally.shapes import lonlat_to_vector
from skytally.skymap_io import circle_skymap, read_skymap
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR
from spherical_geometry.polygon import SphericalPolygon

BRUTE_NSIDE = 1 << 14


def gapped_mosaic(across=4, side=0.30, gap=0.03):
    at = (np.arange(across) - (across - 1) / 2) * (side + gap)
    square = side / 2 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    rings = tuple(square + np.array([x, y]) for x in at for y in at)
    return MosaicCamera(rings, tuple(map(str, range(len(rings)))))


def density(lon, lat):
    """An uneven, smooth blob about (150, 20), in no particular unit."""
    vector = lonlat_to_vector(lon, lat)
    one = vector @ lonlat_to_vector(150, 20)
    two = vector @ lonlat_to_vector(158, 24)
    return np.exp(400 * (one - 1)) + 0.5 * np.exp(1500 * (two - 1))


def flat_values(nside, nest, galactic):
    lon, lat = healpy.pix2ang(nside, np.arange(12 * nside**2), nest=nest, lonlat=True)
    if galactic:
        place = SkyCoord(l=lon * u.deg, b=lat * u.deg, frame="galactic").icrs
        lon, lat = place.ra.deg, place.dec.deg
    value = density(lon, lat)
    return value / value.sum()


def write_flat(path, value, ordering, coordsys):
    table = fits.BinTableHDU.from_columns([fits.Column("PROB", "D", array=value, unit="pix-1")])
    table.header.update(
        PIXTYPE="HEALPIX",
        ORDERING=ordering,
        COORDSYS=coordsys,
        NSIDE=healpy.get_nside(value),
        INDXSCHM="IMPLICIT",
    )
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)


def write_multi_order(path, coarse, fine, split):
    """Cells of two orders: the fine ones where ``split`` marks their parent."""
    ratio = (fine // coarse) ** 2
    value = flat_values(fine, True, False)
    cells = np.arange(12 * coarse**2)
    kept = cells[~split]
    children = (cells[split][:, None] * ratio + np.arange(ratio)).ravel()
    uniq = np.concatenate((4 * coarse**2 + kept, 4 * fine**2 + children))
    probability = np.concatenate((value.reshape(-1, ratio).sum(axis=1)[~split], value[children]))
    area = np.concatenate(
        (
            np.full(kept.size, FULL_SKY_SR / cells.size),
            np.full(children.size, FULL_SKY_SR / value.size),
        )
    )
    columns = [
        fits.Column("UNIQ", "K", array=uniq),
        fits.Column("PROBDENSITY", "D", array=probability / area, unit="sr-1"),
    ]
    table = fits.BinTableHDU.from_columns(columns)
    table.header.update(PIXTYPE="HEALPIX", ORDERING="NUNIQ", COORDSYS="C", INDXSCHM="EXPLICIT")
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)


@pytest.fixture(params=["ring", "nested", "multi-order", "galactic"])
def map_and_brute(request, tmp_path):
    """A map as read from its file, and a function pixel centres → density per sr."""
    path = tmp_path / "map.fits"
    if request.param == "multi-order":
        coarse, fine = 32, 256
        lon, lat = healpy.pix2ang(coarse, np.arange(12 * coarse**2), nest=True, lonlat=True)
        split = density(lon, lat) > 0.05
        write_multi_order(path, coarse, fine, split)
        value = flat_values(fine, True, False)
        ratio = (fine // coarse) ** 2
        mean = np.repeat(value.reshape(-1, ratio).mean(axis=1), ratio)
        value = np.where(np.repeat(split, ratio), value, mean)
        nside, nest, galactic = fine, True, False
    else:
        nside = 128
        nest, galactic = request.param == "nested", request.param == "galactic"
        value = flat_values(nside, nest, galactic)
        ordering = "NESTED" if nest else "RING"
        write_flat(path, value, ordering, "G" if galactic else "C")

    def at(lon, lat):
        if galactic:
            place = SkyCoord(ra=lon * u.deg, dec=lat * u.deg, frame="icrs").galactic
            lon, lat = place.l.deg, place.b.deg
        pixel = healpy.ang2pix(nside, lon, lat, nest=nest, lonlat=True)
        return value[pixel] * 12 * nside**2 / FULL_SKY_SR

    return read_skymap(path, label="1"), at


def brute_pixels(camera, log, chosen):
    """Order-14 NESTED pixels whose centres lie in any detector of the chosen exposures."""
    pointings = log.ra_deg[chosen], log.dec_deg[chosen], log.angle_deg[chosen]
    found = []
    if isinstance(camera, CircleCamera):
        for ra, dec in zip(*pointings[:2]):
            centre = healpy.ang2vec(ra, dec, lonlat=True)
            found.append(
                healpy.query_disc(BRUTE_NSIDE, centre, np.radians(camera.radius_deg), nest=True)
            )
    else:
        for ring in lay_outlines(camera, *pointings):
            found.append(healpy.query_polygon(BRUTE_NSIDE, lonlat_to_vector(*ring.T), nest=True))
    return np.unique(np.concatenate(found))


def observed():
    rng = np.random.default_rng(7)
    cameras = {
        "Heron": gapped_mosaic(),
        "Plover": MosaicCamera.rectangle(1.6, 1.2),
        "Avocet": CircleCamera(0.5),
    }
    telescopes = []
    for name, camera in cameras.items():
        n = 14
        log = log_table(
            name,
            rng.uniform(145, 160, n),
            rng.uniform(16, 27, n),
            angle=rng.uniform(0, 360, n) if name == "Plover" else 0.0,
            start=62_000 + np.sort(rng.uniform(0, 2.5, n)),
            band=rng.choice(["g", "r"], n),
            depth=rng.normal(21, 0.3, n).round(2),
        )
        telescopes.append(telescope(name, camera, log))
    return telescopes


def test_probability_area_and_bracket_against_brute_force(map_and_brute):
    skymap, at = map_and_brute
    telescopes = observed()
    results = account(campaign(telescopes, [skymap]))
    cell = FULL_SKY_SR / (12 * BRUTE_NSIDE**2)
    every = []
    for one in telescopes:
        for band in (None, "g", "r"):
            chosen = np.ones(len(one.log), bool) if band is None else one.log.band == band
            pixels = brute_pixels(one.camera, one.log, chosen)
            if band is None:
                every.append(pixels)
            _compare(results.row(None, one.name, band), pixels, at, cell)
    _compare(results.row(), np.unique(np.concatenate(every)), at, cell)


def _compare(row, pixels, at, cell):
    lon, lat = healpy.pix2ang(BRUTE_NSIDE, pixels, nest=True, lonlat=True)
    probability = float(at(lon, lat).sum() * cell)
    assert row.probability == pytest.approx(probability, abs=5e-4)
    assert row.area_deg2 == pytest.approx(pixels.size * cell * DEG2_PER_SR, rel=2e-3)
    assert row.probability_low - 2e-4 <= probability <= row.probability_high + 2e-4


@pytest.mark.parametrize("exposures", [1, 3, 40, 2000])
@pytest.mark.parametrize("shape", ["mosaic", "rectangle", "circle", "small"])
def test_every_total_is_within_a_thousandth(exposures, shape):
    """One exposure or thousands, apart from each other so that exact areas add up."""
    camera = {
        "mosaic": gapped_mosaic(2),
        "rectangle": MosaicCamera.rectangle(1.6, 1.2),
        "circle": CircleCamera(0.5),
        "small": MosaicCamera.rectangle(5 / 60, 5 / 60),
    }[shape]
    # A lattice of places 2.5 deg apart: no two fields of any camera touch.
    dec = np.repeat(
        np.arange(-88.75, 90, 2.5),
        [max(int(360 * np.cos(np.radians(d)) / 2.5), 1) for d in np.arange(-88.75, 90, 2.5)],
    )
    ra = np.concatenate(
        [
            np.arange(n) * 360 / n
            for n in (
                max(int(360 * np.cos(np.radians(d)) / 2.5), 1) for d in np.arange(-88.75, 90, 2.5)
            )
        ]
    )
    rng = np.random.default_rng(exposures)
    pick = rng.permutation(ra.size)[:exposures]
    log = log_table("Heron", ra[pick], dec[pick], band=rng.choice(["g", "r", "i"], exposures))
    skymap = circle_skymap(10, 10, 20, label="1")
    footprints = lay_footprints(campaign([telescope("Heron", camera, log)], [skymap]))
    exact = lay_camera(camera, *(np.zeros(1),) * 3).area_sr.sum()
    area = footprints.raster.centre.area_sr()
    assert np.abs(area / exact - 1).max() < 0.01
    for band in np.unique(log.band):
        mine = log.band == band
        assert area[mine].sum() == pytest.approx(exact * mine.sum(), rel=1e-3)
    assert area.sum() == pytest.approx(exact * exposures, rel=1e-3)
    assert footprints.raster.inner.area_sr().sum() < exact * exposures
    assert footprints.raster.outer.area_sr().sum() > exact * exposures


@pytest.mark.parametrize(("ra", "dec"), [(0.1, 0.0), (200, 89.7), (77, -89.95), (0, 41.8)])
def test_union_of_overlapping_fields_against_spherical_geometry(ra, dec):
    """Two overlapping rectangles: union by an independent polygon library."""
    camera = MosaicCamera.rectangle(1.6, 1.2)
    at = np.array([ra, ra + 0.5 / max(np.cos(np.radians(dec)), 0.1)]), np.array([dec, dec - 0.3])
    log = log_table("Plover", *at, angle=[20.0, 50.0])
    one, two = (
        SphericalPolygon.from_lonlat(*ring.T, center=(lon, lat))
        for ring, lon, lat in zip(lay_outlines(camera, *at, log.angle_deg), *at)
    )
    overlap = one.intersection(two).area()
    exact = (one.area() + two.area() - overlap) * DEG2_PER_SR
    row = account(
        campaign([telescope("Plover", camera, log)], [circle_skymap(ra, dec, 5, label="1")])
    ).row()
    assert overlap > 0
    assert row.area_deg2 == pytest.approx(exact, rel=1e-3)
    assert row.area_low_deg2 <= exact <= row.area_high_deg2


def test_estimated_error_covers():
    """Of 300 selections, the estimated error must cover nineteen of twenty."""
    rng = np.random.default_rng(11)
    camera = MosaicCamera.rectangle(1.6, 1.2)
    covered = []
    for _ in range(60):
        n = int(rng.integers(1, 12))
        log = log_table(
            "Plover",
            rng.uniform(145, 160, n),
            rng.uniform(16, 27, n),
            angle=rng.choice([0.0, 90.0, rng.uniform(0, 360)]),
            band=rng.choice(["g", "r", "i", "z"], n),
        )
        skymap = circle_skymap(152, 21, rng.uniform(3, 12), label="1")
        loaded = campaign([telescope("Plover", camera, log)], [skymap], bracket=1.0)
        rough = account(loaded)
        footprints = lay_footprints(loaded)
        truth = refine_footprints(footprints, [skymap], 1e-5, budget=2e6)
        for index, band in enumerate(footprints.observations.bands):
            mine = truth.of(footprints.observations.band == index)
            table = truth.raster.centre.take(np.flatnonzero(mine))
            exact = skymap.probability.of_region(table.union())
            row = rough.row(None, None, band)
            covered.append(abs(row.probability - exact) <= row.probability_error + 1e-9)
    assert len(covered) >= 100
    assert np.mean(covered) >= 0.95


def test_bracket_meets_its_target_where_the_budget_allows():
    telescopes = observed()
    skymap = circle_skymap(152, 21, 5, label="1")
    loaded = campaign(telescopes, [skymap])
    footprints = lay_footprints(loaded)
    before = account(campaign(telescopes, [skymap], bracket=1.0))
    after = account(loaded)
    assert len(footprints.telescope) == 42
    wide = max(r.probability_high - r.probability_low for r in before.rows)
    assert wide > 0.005
    for row in after.rows:
        assert row.probability_high - row.probability_low <= 0.005
        assert row.probability_low <= row.probability <= row.probability_high
