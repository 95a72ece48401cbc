"""What is ruled out: every curve against the tally of single sources, astropy, and by hand."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Distance
from campaign_builder import EVENT_MJD
from deep_sky import (
    constant,
    coverage_of,
    distance_map,
    dust_map,
    exact_coverage,
    fields,
    map_of,
    scene_of,
    source_rows,
    spans_of_cells,
)
from scipy.integrate import trapezoid
from skytally.cosmology import Cosmology
from skytally.covered import TallySettings
from skytally.exclusion import (
    absolute_limits,
    depth_histograms,
    distance_profile,
    exclusion_curves,
    fading_planes,
)
from skytally.seen import SeenSource
from skytally.sources import Source
from skytally.space import Space
from skytally.spans import Spans
from skytally.tally import tally_maps

PLANCK = Cosmology.named("Planck18")
COEFFICIENTS = {"g": 3.3, "r": 2.3}
BANDS = (None, "g", "r")


class Sky:
    """Fields on a map, perhaps behind dust."""

    def __init__(self, dust=None, size=(8.0, 6.0)):
        self.skymap, self.dust = distance_map(), dust
        self.space = Space.of(self.skymap, PLANCK)
        self.coverage = coverage_of(fields(missing=0.1, size=size), self.skymap)
        self.scene = scene_of(self.coverage, self.space, dust, COEFFICIENTS)

    def rows(self, *sources):
        """Rows by source and band."""
        rows = source_rows(self.coverage, self.space, sources, self.dust, COEFFICIENTS)
        return {(r.source, r.band): r for r in rows if r.telescope is None and r.night is None}


@pytest.fixture(scope="module", params=[None, dust_map()], ids=["clear", "dusty"])
def sky(request):
    return Sky(request.param)


def plane_of(scene):
    (plane,) = fading_planes(scene.visits, [scene], EVENT_MJD)
    return plane


def named(source, name):
    return Source(
        name, source.bands, source.kind, source.magnitudes, fade_per_day=source.fade_per_day
    )


def test_curves_are_tallies_of_constant_sources(sky):
    curves = {c.band: c for c in exclusion_curves(sky.scene)}
    assert tuple(curves) == BANDS
    magnitudes = curves[None].magnitude
    assert magnitudes == tuple(np.linspace(-26, -8, 73))
    picked = range(0, 73, 6)
    rows = sky.rows(*(named(constant(magnitudes[i]), str(i)) for i in picked))
    for band in BANDS:
        for i in picked:
            expected = rows[str(i), band].probability
            assert curves[band].probability[i] == pytest.approx(expected, rel=1e-9, abs=1e-12)
        assert np.all(np.diff(curves[band].probability) <= 1e-12)
        bright = sky.rows(constant(-60.0))["Steady", band]
        assert curves[band].highest == pytest.approx(bright.probability, rel=1e-9)
    assert 0.1 < curves["g"].highest < curves[None].highest < 0.95


def bisected(sky, share, band, bright=-40.0, faint=0.0):
    """Where the tally of a single source meets a share."""
    while faint - bright > 2e-4:
        middle = (bright + faint) / 2
        if sky.rows(constant(middle))["Steady", band].probability > share:
            bright = middle
        else:
            faint = middle
    return faint


def test_crossings_against_bisection():
    sky = Sky(dust_map(), size=(14.0, 12.0))
    for curve in exclusion_curves(sky.scene):
        for share, at in ((0.5, curve.magnitude_50), (0.9, curve.magnitude_90)):
            if curve.highest <= share:
                assert at is None
            else:
                assert at == pytest.approx(bisected(sky, share, curve.band), abs=4e-4)
    both = {c.band: c for c in exclusion_curves(sky.scene)}
    assert both[None].magnitude_50 is not None
    assert both["g"].magnitude_90 is None


@pytest.mark.parametrize("depth", [-30.0, 20.0, 250.0])
def test_crossings_exist_for_any_limit_if_all_the_sky_is_covered(depth):
    """One cell at 100 Mpc ± 1 %: the crossing lies at its modulus of 35."""
    skymap = map_of(2, np.array([5]), [1.0], [100.0], [1.0])
    coverage = exact_coverage([Spans.full()], skymap, depth=depth)
    scene = scene_of(coverage, Space.of(skymap, PLANCK))
    for curve in exclusion_curves(scene):
        assert curve.highest == pytest.approx(1.0)
        assert curve.magnitude_50 == pytest.approx(depth - 35.0, abs=1e-3)
        # The 90 % quantile of 100 ± 1 lies 1.28 σ (normal quantile) beyond, or a little more.
        assert curve.magnitude_90 == pytest.approx(depth - 35.0 - 5 * np.log10(1.0130), abs=1e-3)


def test_nothing_covered_rules_out_nothing():
    skymap = distance_map()
    for regions, depth in (([spans_of_cells(3, [500])], 20.0), ([Spans.full()], np.nan)):
        coverage = exact_coverage(regions, skymap, depth=depth)
        scene = scene_of(coverage, Space.of(skymap, PLANCK))
        for curve in exclusion_curves(scene):
            assert (curve.highest, curve.magnitude_50, curve.magnitude_90) == (0.0, None, None)
            assert not any(curve.probability)
        assert not np.any(plane_of(scene).probability)


def test_fading_plane_is_tallies_of_fading_sources(sky):
    plane = plane_of(sky.scene)
    value = np.array(plane.probability)
    assert value.shape == (len(plane.fade_per_day), len(plane.peak)) == (20, 20)
    assert np.all(np.diff(value, axis=0) <= 1e-12)
    assert np.all(np.diff(value, axis=1) <= 1e-12)
    for row in (0, 7, 19):
        for column in (0, 10, 19):
            source = Source(
                "Ember",
                None,
                "fade",
                plane.peak[column],
                fade_per_day=plane.fade_per_day[row],
            )
            expected = sky.rows(source)["Ember", None].probability
            assert value[row, column] == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_absolute_limits_against_astropy(sky):
    rows, _ = tally_maps(sky.coverage, [(sky.skymap, sky.space)], TallySettings(EVENT_MJD, 2, 30.0))
    limits = absolute_limits(rows, sky.space)
    mean, sd = sky.space.moments
    assert {(one.telescope, one.band) for one in limits} == {
        (t, b) for t in ("Heron", "Plover") for b in ("g", "r")
    }
    o = sky.coverage.observations
    for one in limits:
        mine = (o.telescope == o.telescopes.index(one.telescope)) & (
            o.band == o.bands.index(one.band)
        )
        assert one.depth == pytest.approx(np.nanmedian(o.depth[mine]))
        assert one.extinction is None
        assert (one.near_mpc, one.mean_mpc, one.far_mpc) == pytest.approx(
            (mean - sd, mean, mean + sd)
        )
        for d, got in (
            (mean - sd, one.limit_near),
            (mean, one.limit_mean),
            (mean + sd, one.limit_far),
        ):
            assert got == pytest.approx(one.depth - Distance(d * u.Mpc).distmod.value, abs=1e-9)
    assert (
        absolute_limits(
            rows, Space.of(map_of(1, np.arange(2), [1, 1], [9, 9], [1, 1], label="2"), PLANCK)
        )
        == []
    )


def test_no_absolute_limit_at_a_distance_below_nothing():
    """Most of the probability near, some very far: the mean less the deviation is negative."""
    skymap = map_of(2, np.arange(2), [0.9, 0.1], [10.0, 1000.0], [1.0, 100.0])
    coverage = exact_coverage([Spans.full()], skymap, depth=20.0)
    space = Space.of(skymap, PLANCK)
    rows, _ = tally_maps(coverage, [(skymap, space)], TallySettings(EVENT_MJD, 2, 30.0))
    (one,) = absolute_limits(rows, space)
    assert one.near_mpc < 0
    assert one.limit_near is None
    assert one.limit_far < one.limit_mean < 20.0 - 30.0


def shape(r, mu, sigma):
    """p(r) by its definition, normalised numerically."""
    grid = np.linspace(0.0, max(mu, 0.0) + 10 * sigma, 20_001)
    whole = trapezoid(grid**2 * np.exp(-0.5 * ((grid - mu) / sigma) ** 2), grid)
    return r**2 * np.exp(-0.5 * ((r - mu) / sigma) ** 2) / whole


def test_distance_profile_by_hand():
    """Three cells, two of them covered, one of these without distance."""
    skymap = map_of(2, np.arange(3), [0.5, 0.3, 0.2], [100.0, 150.0, np.inf], [30.0, 20.0, 1.0])
    regions = [spans_of_cells(2, [1, 2]), spans_of_cells(3, [0, 1])]
    coverage = exact_coverage(regions, skymap, depth=np.array([19.8, 19.0]))
    scene = scene_of(coverage, Space.of(skymap, PLANCK))
    seen = SeenSource.of(constant(-16.0), scene.visits, EVENT_MJD, PLANCK)
    profile = distance_profile(scene, [("Steady", seen.reach_at(seen.visits.seen))])
    r = np.array(profile.distance_mpc)
    near, far = 0.5 * shape(r, 100.0, 30.0), 0.3 * shape(r, 150.0, 20.0)
    np.testing.assert_allclose(profile.whole, near + far, rtol=1e-7, atol=1e-15)
    np.testing.assert_allclose(profile.covered, near / 2 + far, rtol=1e-7, atol=1e-15)
    reach = [Distance(distmod=m + 16.0).to_value(u.Mpc) for m in (19.8, 19.0)]
    expected = far * (r <= reach[0]) + near / 2 * (r <= reach[1])
    np.testing.assert_allclose(profile.within_reach[0], expected, rtol=1e-7, atol=1e-15)
    assert profile.sources == ("Steady",)
    # The nodes are fine enough for a chart: the areas are the probabilities.
    assert trapezoid(profile.whole, r) == pytest.approx(0.8, rel=2e-3)


def test_distance_profile_sums_to_the_tally(sky):
    source = constant(-15.5)
    seen = SeenSource.of(source, sky.scene.visits, EVENT_MJD, PLANCK)
    profile = distance_profile(sky.scene, [("Steady", seen.reach_at(seen.visits.seen))])
    row = sky.rows(source)["Steady", None]
    r = np.array(profile.distance_mpc)
    known = row.probability + row.probability_beyond
    assert trapezoid(profile.whole, r) == pytest.approx(1 - sky.space.probability_without, rel=2e-3)
    assert trapezoid(profile.covered, r) == pytest.approx(known, rel=2e-3)
    # Each reach cuts its curve between two nodes.
    assert trapezoid(profile.within_reach[0], r) == pytest.approx(row.probability, rel=2e-2)


def test_depth_histogram_by_hand():
    """Deepest limit of each cell and band; edges are quarters of a magnitude."""
    skymap = map_of(2, np.arange(4), [0.4, 0.3, 0.2, 0.1], [100.0] * 3 + [np.inf], [9.0] * 4)
    coverage = exact_coverage(
        [spans_of_cells(2, c) for c in ([0], [0, 1], [2], [3], [1])],
        skymap,
        depth=np.array([20.3, 20.1, np.nan, 19.5, 23.0]),
        band=["r", "r", "r", "r", "g"],
    )
    scene = scene_of(coverage, Space.of(skymap, PLANCK))
    green, red = depth_histograms(scene)
    assert (red.band, red.edges) == ("r", (19.5, 19.75, 20.0, 20.25, 20.5))
    assert red.probability == pytest.approx((0.1, 0.0, 0.3, 0.4))
    assert red.without_limit == pytest.approx(0.2)
    assert (green.band, green.edges) == ("g", (23.0, 23.25))
    assert green.probability == pytest.approx((0.3,))
    assert green.without_limit == 0.0


def test_depth_histograms_hold_what_was_covered(sky):
    rows, _ = tally_maps(sky.coverage, [(sky.skymap, None)], TallySettings(EVENT_MJD, 2, 30.0))
    covered = {r.band: r.probability for r in rows if r.telescope is None and r.night is None}
    histograms = depth_histograms(sky.scene)
    assert [h.band for h in histograms] == ["g", "r"]
    for one in histograms:
        total = sum(one.probability) + one.without_limit
        assert total == pytest.approx(covered[one.band], rel=1e-9)
        np.testing.assert_allclose(np.diff(one.edges), 0.25)
    assert sum(one.without_limit for one in histograms) > 0
