"""What is left of a map: against the tally, drawn events, quadrature and general HEALPix tools."""

from __future__ import annotations

from dataclasses import replace

import astropy_healpix
import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Distance
from astropy.io import fits
from astropy.table import QTable
from campaign_builder import EVENT_MJD
from deep_sky import (
    Draws,
    constant,
    coverage_of,
    distance_map,
    dust_map,
    exact_coverage,
    fields,
    map_of,
    often,
    source_rows,
    spans_of_cells,
)
from scipy.integrate import trapezoid
from scipy.special import expit
from skytally.cosmology import Cosmology
from skytally.distance import moments
from skytally.leftover import left_over
from skytally.skymap_io import read_skymap, write_skymap
from skytally.sources import Detection, Source
from skytally.space import Space
from skytally.spans import Spans

PLANCK = Cosmology.named("Planck18")
COEFFICIENTS = {"g": 3.3, "r": 2.3}

SOURCES = {
    "step": constant(-15.5),
    "bright": constant(-40.0),
    "twice": constant(-16.0, visits=2, gap_minutes=90.0),
    "fading": Source("Ember", None, "fade", -16.5, fade_per_day=0.8),
    "gradual": constant(-15.5, detection=Detection(-0.2, 0.25, 0.9)),
    "gradual twice": constant(
        -16.0, detection=Detection(-0.2, 0.25, 0.9), visits=2, gap_minutes=90.0
    ),
    "plateau": constant(-15.5, detection=Detection(plateau=0.7), k_correction="flat"),
}


def left(coverage, skymap, source, dust=None):
    return left_over(coverage, skymap, source, EVENT_MJD, PLANCK, dust, COEFFICIENTS)


@pytest.fixture(scope="module")
def night():
    skymap = distance_map()
    telescopes = fields()
    return skymap, telescopes, coverage_of(telescopes, skymap)


@pytest.mark.parametrize("dust", [None, dust_map()], ids=["clear", "dusty"])
@pytest.mark.parametrize("name", SOURCES)
def test_what_is_left_is_one_less_what_would_have_been_seen(night, name, dust):
    skymap, _, coverage = night
    source = SOURCES[name]
    space = Space.of(skymap, PLANCK)
    row = source_rows(coverage, space, [source], dust, COEFFICIENTS)[0]
    found = left(coverage, skymap, source, dust)
    assert found.remaining == pytest.approx(1 - row.probability, abs=1e-9)
    assert found.skymap.probability.total == pytest.approx(1.0, abs=1e-12)
    # Probability without distance cannot have been seen.
    after = Space.of(found.skymap, PLANCK)
    assert after.probability_without * found.remaining == pytest.approx(
        space.probability_without, rel=1e-9
    )


def test_left_of_coverage_alone(night):
    skymap, _, coverage = night
    union = Spans.from_intervals(coverage.centre.starts, coverage.centre.stops)
    found = left(coverage, skymap, None)
    covered = skymap.probability.of_region(union)
    assert found.remaining == pytest.approx(1 - covered, rel=1e-9)
    assert found.skymap.probability.total == pytest.approx(1.0, abs=1e-12)
    # Outside the fields all is as it was, but for the norm; edges are averaged over 3.4 arcmin.
    outside = ~union
    assert found.skymap.probability.of_region(outside) == pytest.approx(1.0, abs=1e-2)
    detail = 1 << (2 * (29 - 10))
    whole = [p for p in skymap.starts if not union.intersection(Spans(np.array([p, p + detail])))]
    assert len(whole) > 30
    np.testing.assert_allclose(
        found.skymap.density_at(np.array(whole)),
        skymap.density_at(np.array(whole)) / found.remaining,
        rtol=1e-12,
    )


def test_left_of_coverage_alone_on_a_map_without_distances(night):
    skymap, _, coverage = night
    flat = replace(skymap, distance=None)
    assert left(coverage, flat, None).remaining == left(coverage, skymap, None).remaining
    assert left(coverage, flat, constant(-16.0)) is None


def test_direction_by_direction_against_a_fine_grid(night):
    """Centres of order-10 cells, the detail that is promised, in or out of every field."""
    skymap, _, coverage = night
    found = left(coverage, skymap, None)
    union = Spans.from_intervals(coverage.centre.starts, coverage.centre.stops)
    near = healpy.query_disc(1024, healpy.ang2vec(150, 20, lonlat=True), 0.15, nest=True)
    shift = 2 * (29 - 10)
    cells = Spans.from_cells(10, near)
    held = np.array([union.intersection(Spans.from_cells(10, c[None])).length for c in near[::97]])
    share = 1 - held / float(1 << shift)
    position = (near[::97] << shift) + 5
    expected = skymap.density_at(position) * share / found.remaining
    np.testing.assert_allclose(found.skymap.density_at(position), expected, rtol=1e-9, atol=1e-12)
    assert (share == 0).any()
    assert (share == 1).any()
    assert cells.length == near.size << shift


def shape(r, mu, sigma):
    return r**2 * np.exp(-0.5 * ((r - mu) / sigma) ** 2 + 0.5 * (min(mu, 0) / sigma) ** 2)


LIMITS = np.array([19.6, 20.3])
CELLS = [(110.0, 30.0), (180.0, 25.0), (-60.0, 90.0), (400.0, 60.0)]


@pytest.mark.parametrize("visits", [1, 2])
@pytest.mark.parametrize(
    "detection", [Detection(), Detection(0.1, 0.3, 0.95), Detection(plateau=0.6)]
)
def test_moments_of_each_direction_against_quadrature(detection, visits):
    """∫ r^k p(r) (1 − seen(r)) dr on 100,001 points for cells covered by two exposures."""
    mu, sigma = map(np.array, zip(*CELLS))
    skymap = map_of(3, np.arange(4), np.arange(1.0, 5), mu, sigma)
    coverage = exact_coverage([spans_of_cells(3, range(3))] * 2, skymap, depth=LIMITS)
    found = left(coverage, skymap, constant(-16.0, detection=detection, visits=visits))
    assert found.skymap.starts.tolist() == skymap.starts.tolist()
    kept = []
    for cell, (m, s) in enumerate(CELLS):
        r = np.linspace(1e-3, max(m, 0) + 9 * s, 100_001)
        x = -16.0 + 5 * np.log10(r) + 25 - LIMITS[:, None] - detection.offset
        one, two = detection.plateau * (
            (x <= 0) if detection.width == 0 else expit(-x / detection.width)
        )
        seen = one + two - one * two if visits == 1 else one * two
        p = shape(r, m, s)
        rest = p * (1 - seen * (cell < 3)) / trapezoid(p, r)
        held = trapezoid(rest, r)
        mean = trapezoid(rest * r, r) / held
        sd = np.sqrt(trapezoid(rest * r**2, r) / held - mean**2)
        kept.append(held * (cell + 1) / 10)
        layer = found.skymap.distance
        got = moments(layer.mu_mpc[cell], layer.sigma_mpc[cell])
        assert got[0] == pytest.approx(mean, rel=5e-4)
        assert got[1] == pytest.approx(min(sd, mean / np.sqrt(3)), rel=5e-3)
    assert found.remaining == pytest.approx(sum(kept), abs=1e-4)
    assert found.skymap.probability.amount == pytest.approx(np.array(kept) / sum(kept), abs=1e-4)


def test_a_remainder_in_two_heaps_keeps_its_mean():
    """Nearly all seen near by, nothing far off: wider than the form can be."""
    skymap = map_of(3, np.arange(1), [1.0], [-300.0], [110.0])
    coverage = exact_coverage([spans_of_cells(3, [0])], skymap, depth=20.0)
    source = constant(-16.75, detection=Detection(plateau=0.96))
    found = left(coverage, skymap, source)
    reach = Distance(distmod=36.75).to_value(u.Mpc)
    r = np.linspace(0, 900, 200_001)
    rest = shape(r, -300.0, 110.0) * np.where(r <= reach, 0.04, 1.0)
    mean = trapezoid(rest * r, r) / trapezoid(rest, r)
    sd = np.sqrt(trapezoid(rest * r**2, r) / trapezoid(rest, r) - mean**2)
    assert mean / sd < 1.6 < np.sqrt(3)
    layer = found.skymap.distance
    got_mean, got_sd = moments(layer.mu_mpc[0], layer.sigma_mpc[0])
    assert got_mean == pytest.approx(mean, rel=1e-3)
    assert got_sd <= mean / np.sqrt(3)
    assert Space.of(found.skymap, PLANCK).probability_without == 0.0


def test_distances_left_against_drawn_events(night):
    """Of half a million events those that no exposure shows: their mean distance and place."""
    skymap, telescopes, coverage = night
    source = constant(-16.0)
    found = left(coverage, skymap, source)
    draws = Draws.of(skymap, 500_000)
    inside = np.concatenate([draws.inside(t.log, t.camera) for t in telescopes])
    depth = np.concatenate([t.log.depth for t in telescopes])
    seen = often(inside & (draws.modulus - 16.0 <= depth[:, None]), np.zeros(depth.size), 1, 0.0)
    error = 4 * np.sqrt(seen.mean() * (1 - seen.mean()) / seen.size)
    assert found.remaining == pytest.approx(1 - seen.mean(), abs=error)
    far = draws.distance_mpc[~seen & np.isfinite(draws.distance_mpc)]
    mean, sd = Space.of(found.skymap, PLANCK).moments
    assert mean == pytest.approx(far.mean(), abs=4 * far.std() / np.sqrt(far.size))
    assert sd == pytest.approx(far.std(), rel=4 / np.sqrt(far.size))
    # By direction: in the fields less is left.
    cell = astropy_healpix.lonlat_to_healpix(
        draws.ra_deg[~seen] * u.deg, draws.dec_deg[~seen] * u.deg, 16, order="nested"
    )
    count = np.bincount(cell, minlength=12 * 256)
    for pixel in np.argsort(count)[-20:]:
        expected = count[pixel] / cell.size
        got = found.skymap.probability.of_region(Spans.from_cells(4, np.array([pixel])))
        assert got == pytest.approx(expected, abs=4 * np.sqrt(expected / cell.size))


@pytest.mark.parametrize("name", [None, "step", "gradual"])
def test_the_file_is_read_back_here_and_by_general_tools(night, name, tmp_path):
    skymap, _, coverage = night
    found = left(coverage, skymap, SOURCES[name] if name else None)
    path = tmp_path / "left.fits"
    write_skymap(path, found.skymap)
    again = read_skymap(path, label="left")
    edges = Spans.from_intervals(found.skymap.starts, found.skymap.stops)
    position = np.concatenate((found.skymap.starts, edges.stops[:-1]))
    np.testing.assert_allclose(
        again.density_at(position), found.skymap.density_at(position), rtol=1e-9
    )
    assert again.probability.total == pytest.approx(1.0, abs=1e-9)
    assert Space.of(again, PLANCK).moments == pytest.approx(
        Space.of(found.skymap, PLANCK).moments, rel=1e-9
    )
    # astropy reads the table; astropy-healpix and healpy know the cells.
    table = QTable.read(path)
    level, cell = astropy_healpix.uniq_to_level_ipix(np.asarray(table["UNIQ"], dtype=np.int64))
    area = astropy_healpix.nside_to_pixel_area(2**level)
    assert float((table["PROBDENSITY"] * area).sum()) == pytest.approx(1.0, abs=1e-9)
    assert area.sum().to_value(u.sr) == pytest.approx(4 * np.pi, rel=1e-12)
    lon, lat = healpy.pix2ang(2**level, cell, nest=True, lonlat=True)
    assert table["DISTMU"].unit == u.Mpc
    held = np.asarray((table["PROBDENSITY"] * area).to_value(u.one))
    near = healpy.rotator.angdist([lon, lat], [150.0, 20.0], lonlat=True) < np.radians(25)
    assert held[near].sum() == pytest.approx(1.0, abs=1e-9)
    with fits.open(path) as hdus:
        assert hdus[1].header["ORDERING"] == "NUNIQ"
        assert hdus[1].header["MOCORDER"] == level.max()


def test_nothing_covered_leaves_everything():
    skymap = distance_map()
    coverage = exact_coverage([spans_of_cells(3, [500])], skymap)
    for source in (None, *SOURCES.values()):
        found = left(coverage, skymap, source)
        assert found.remaining == pytest.approx(1.0)
        np.testing.assert_allclose(found.skymap.density_per_sr, skymap.density_per_sr)
        np.testing.assert_array_equal(found.skymap.distance.mu_mpc, skymap.distance.mu_mpc)


def test_all_covered_leaves_nothing_or_what_has_no_distance():
    skymap = distance_map()
    coverage = exact_coverage([Spans.full()], skymap)
    found = left(coverage, skymap, None)
    assert found.remaining == 0.0
    assert found.skymap.starts.size == 0
    found = left(coverage, skymap, constant(-60.0))
    without = Space.of(skymap, PLANCK).probability_without
    assert found.remaining == pytest.approx(without, rel=1e-9)
    assert Space.of(found.skymap, PLANCK) is None


@pytest.mark.parametrize("order", [11, 14, 20])
def test_small_cells_that_were_covered_are_gone(order):
    """Not a crumb is left of cells wholly covered, however small; those in part stay whole."""
    first = 12345 << (2 * (order - 9))
    cell = np.arange(first, first + 64)
    skymap = map_of(order, cell, np.arange(1.0, 65), np.full(64, 90.0), np.full(64, 9.0))
    # All but the last cell and a half.
    region = Spans.from_intervals(
        skymap.starts[:1], skymap.stops[62:63] - (skymap.stops - skymap.starts)[62:63] // 2
    )
    coverage = exact_coverage([region], skymap)
    for source in (None, constant(-60.0)):
        found = left(coverage, skymap, source)
        assert found.skymap.starts.tolist() == skymap.starts[62:].tolist()
        assert found.remaining == pytest.approx((31.5 + 64) / 2080, rel=1e-9)


def test_the_map_is_named_for_what_it_is(night):
    skymap, _, coverage = night
    found = left(coverage, replace(skymap, path="first.fits", sha256="0"), None).skymap
    assert found.label == "1, left over"
    assert (found.path, found.sha256, found.notes) == (None, None, ())
    layer = left(
        coverage, replace(skymap, distance=replace(skymap.distance, header_mean_mpc=1.0)), None
    )
    assert layer.skymap.distance.header_mean_mpc is None
