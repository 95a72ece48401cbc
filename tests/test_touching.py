"""Cells that touch footprints, against independent HEALPix libraries.

healpy, an independent HEALPix library used in tests only, with a large oversampling factor and
mocpy both list every cell that shares sky with a polygon or a circle.
"""

from __future__ import annotations

import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Latitude, Longitude
from campaign_builder import campaign, log_table, telescope
from mocpy import MOC
from skytally.cameras import CircleCamera, MosaicCamera, lay_outlines
from skytally.covered import Coverage
from skytally.footprints import lay_footprints
from skytally.grouping import expand_ranges
from skytally.shapes import lonlat_to_vector
from skytally.skymap_io import circle_skymap
from skytally.spans import LINE_ORDER, Spans
from skytally.touching import TouchingCells

LEFT, RIGHT = np.array([-0.45, 0.0]), np.array([0.45, 0.1])
SQUARE = 0.4 * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
CAMERAS = {
    "rectangle": MosaicCamera.rectangle(1.6, 1.2),
    "mosaic": MosaicCamera((SQUARE + LEFT, SQUARE + RIGHT), ("A", "B")),
    "triangle": MosaicCamera((np.array([[-1.0, -0.6], [0.9, -0.5], [0.1, 0.8]]),), ("A",)),
    "circle": CircleCamera(0.7),
}
PLACES = [(150.0, 20.0), (359.5, 41.8), (75.0, -86.0)]


def pointings(lon, lat, n=9):
    rng = np.random.default_rng(n)
    ra = (lon + rng.uniform(-3, 3, n) / np.cos(np.radians(lat))) % 360
    return ra, lat + rng.uniform(-2, 2, n), rng.uniform(0, 360, n)


def cells_of(camera, lon, lat, **more):
    ra, dec, angle = pointings(lon, lat)
    one = telescope("Heron", camera, log_table("Heron", ra, dec, angle=angle), **more)
    footprints = lay_footprints(campaign([one], [circle_skymap(lon, lat, 5, label="1")]))
    return TouchingCells(Coverage.build(footprints), np.ones(ra.size, dtype=bool))


def numbers(region, order):
    shift = 2 * (LINE_ORDER - order)
    return set(expand_ranges(region.starts >> shift, (region.stops - region.starts) >> shift)[1])


def by_healpy(camera, lon, lat, order, fact):
    ra, dec, angle = pointings(lon, lat)
    options = {"inclusive": True, "fact": fact, "nest": True}
    if isinstance(camera, CircleCamera):
        radius = np.radians(camera.radius_deg)
        found = [
            healpy.query_disc(1 << order, centre, radius, **options)
            for centre in lonlat_to_vector(ra, dec)
        ]
    else:
        found = [
            healpy.query_polygon(1 << order, lonlat_to_vector(*ring.T), **options)
            for ring in lay_outlines(camera, ra, dec, angle)
        ]
    return set(np.concatenate(found).tolist())


def by_mocpy(camera, lon, lat, order):
    found = set()
    for ring in lay_outlines(camera, *pointings(lon, lat)):
        corners = Longitude(ring[:, 0] * u.deg), Latitude(ring[:, 1] * u.deg)
        found |= set(MOC.from_polygon(*corners, max_depth=order).flatten().tolist())
    return found


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("camera", CAMERAS.values(), ids=CAMERAS.keys())
@pytest.mark.parametrize("order", [4, 7, 9, 11])
def test_the_cells_are_those_of_an_independent_library(camera, place, order):
    cells = cells_of(camera, *place)
    found = numbers(cells.exact(order), order)
    assert len(found) > 2
    if isinstance(camera, CircleCamera):
        # A cell is tested through cells a thousandth of its size, which may take in a sliver more.
        expected = by_healpy(camera, *place, order, fact=1024)
        assert found <= expected
        assert len(expected - found) <= 2 + 0.001 * len(expected)
    else:
        assert found == by_mocpy(camera, *place, order)
    sure, maybe = cells.bounds(order)
    assert numbers(sure, order) <= found <= numbers(maybe, order)


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("camera", CAMERAS.values(), ids=CAMERAS.keys())
@pytest.mark.parametrize("order", [7, 9, 11])
def test_nearly_touching_is_the_inclusive_query_of_common_practice(camera, place, order):
    cells = cells_of(camera, *place)
    found = numbers(cells.nearly(order), order)
    expected = by_healpy(camera, *place, order, fact=4)
    assert numbers(cells.exact(order), order) < found
    # That query also tests the smallest circle around a polygon; ours around a triangle is larger.
    assert expected <= found
    assert len(found - expected) <= (3 if camera is CAMERAS["triangle"] else 0)


def test_cells_of_a_region_known_exactly():
    """By integer division alone: the parents of the region's own cells."""
    rng = np.random.default_rng(5)
    own = np.unique(rng.integers(0, 12 << 16, 300))
    log = log_table("Heron", [np.nan], np.nan)
    log.region[0] = "a"
    one = telescope("Heron", None, log, regions={"a": Spans.from_cells(8, own)})
    footprints = lay_footprints(campaign([one], [circle_skymap(0, 0, 5, label="1")]))
    cells = TouchingCells(Coverage.build(footprints), np.array([True]))
    for order in (4, 6, 8):
        assert numbers(cells.exact(order), order) == set((own >> (2 * (8 - order))).tolist())
        assert cells.nearly(order) == cells.exact(order)
    children = (own[:, None] * 16 + np.arange(16)).ravel()
    assert numbers(cells.exact(10), 10) == set(children.tolist())


def test_a_mask_is_not_touched():
    """A masked half of the sky holds no cell but those that its edge crosses."""
    half = Spans.from_cells(0, np.arange(4))  # the northern faces
    cells = cells_of(CAMERAS["rectangle"], 150.0, 41.8)
    masked = cells_of(CAMERAS["rectangle"], 150.0, 41.8, mask=(half,))
    assert cells.exact(9)
    assert not masked.exact(9)
    assert not masked.nearly(9)
