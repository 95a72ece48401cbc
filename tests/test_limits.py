"""What could have been seen, against a million events drawn from the map.

The draws (see `deep_sky.Draws`) share no code with the package: healpy, numeric
integration, FITS's tangent plane and astropy's cosmology. Four standard errors of
a share p of n draws, 4 √(p(1−p)/n), are allowed, no more.
"""

from __future__ import annotations

from dataclasses import replace

import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Distance
from astropy.cosmology import Planck18
from campaign_builder import EVENT_MJD, log_table, telescope
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
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import trapezoid
from scipy.special import expit
from skytally.cameras import CircleCamera
from skytally.cosmology import Cosmology
from skytally.covered import TallySettings
from skytally.skymap import SkyMap
from skytally.sources import Detection, Source
from skytally.space import Space
from skytally.spans import Spans
from skytally.tally import tally_maps

PLANCK = Cosmology.named("Planck18")
COEFFICIENTS = {"g": 3.3, "r": 2.3}
# What the steps of the integral over a detection curve may cost in probability.
ALLOWED = 1e-4
SETTINGS = TallySettings(EVENT_MJD, 2, 30.0)
FADING = Source("Ember", None, "fade", {"g": -16.6, "r": -16.2}, fade_per_day=0.9, rise_days=0.4)
CURVE = Source(
    "Beacon",
    ("r",),
    "light curve",
    {},
    curves={"r": (np.array([0.1, 0.6, 1.9]), np.array([-14.5, -16.9, -15.1]))},
)
GRADUAL = Detection(offset=-0.2, width=0.25, plateau=0.9)

SOURCES = {
    "step": constant(-15.5),
    "twice": constant(-16.0, visits=2, gap_minutes=90.0),
    "three times": constant(-16.5, visits=3, gap_minutes=600.0),
    "per band": constant({"g": -16.5, "r": -14.5}, bands=("g", "r")),
    "fading": FADING,
    "light curve": CURVE,
    "gradual": constant(-15.5, detection=GRADUAL),
    "gradual twice": constant(-16.0, detection=GRADUAL, visits=2, gap_minutes=90.0),
    "gradual, three times": constant(-16.5, detection=GRADUAL, visits=3, gap_minutes=600.0),
    "gradual fading, flat": replace(FADING, detection=GRADUAL, k_correction="flat"),
    "offset": constant(-15.5, detection=Detection(offset=-0.6)),
    "plateau": constant(-15.5, detection=Detection(plateau=0.7)),
    "plateau twice": constant(-16.0, detection=Detection(plateau=0.7), visits=2),
    "steep": constant(-15.5, detection=Detection(width=0.02)),
    "flat spectrum": constant(-15.5, k_correction="flat"),
}


def told(source, days, band):
    """Absolute magnitude of the sources above, written out by hand."""
    if source.kind == "light curve":
        inside = (band == "r") and 0.1 <= days <= 1.9
        if not inside:
            return np.nan
        if days <= 0.6:
            return -14.5 + (days - 0.1) / 0.5 * (-16.9 + 14.5)
        return -16.9 + (days - 0.6) / 1.3 * (-15.1 + 16.9)
    m = source.magnitudes
    peak = m[band] if isinstance(m, dict) else m
    if source.kind == "constant":
        return peak
    if days < 0.4:
        return peak - 2.5 * np.log10(days / 0.4)
    return peak + 0.9 * (days - 0.4)


class Night:
    """Fields on a map, and the same fields as drawn events see them."""

    def __init__(self, dust):
        self.skymap = distance_map()
        self.space = Space.of(self.skymap, PLANCK)
        self.telescopes = fields(missing=0.1)
        self.dust = dust
        self.coverage = coverage_of(self.telescopes, self.skymap)
        draws = Draws.of(self.skymap)
        inside = np.concatenate([draws.inside(t.log, t.camera) for t in self.telescopes])
        self.total = inside.shape[1]
        some = np.flatnonzero(inside.any(axis=0))
        self.inside = inside[:, some]
        self.draws = Draws(*(getattr(draws, f)[some] for f in draws.__dataclass_fields__))
        logs = [t.log for t in self.telescopes]
        for name in ("start_mjd", "duration_s", "band", "depth"):
            setattr(self, name, np.concatenate([getattr(log, name) for log in logs]))
        self.telescope = np.repeat([t.name for t in self.telescopes], [len(log) for log in logs])
        self.ebv = np.zeros(some.size)
        if dust is not None:
            order = healpy.nside2order(healpy.npix2nside(dust.ebv.size))
            self.ebv = dust.ebv[self.draws.pixel >> (2 * (22 - order))]

    def detected(self, source, seed=2):
        """Which exposure detects which event."""
        rng = np.random.default_rng(seed)
        middle = self.start_mjd + self.duration_s / 86400 / 2 - EVENT_MJD
        k = -2.5 * np.log10(1 + self.draws.redshift) if source.k_correction == "flat" else 0.0
        found = np.zeros(self.inside.shape, dtype=bool)
        for i, band in enumerate(self.band):
            absolute = told(source, middle[i], band)
            faint = absolute + self.draws.modulus + k + COEFFICIENTS[band] * self.ebv
            x = faint - self.depth[i] - source.detection.offset
            if source.detection.width == 0:
                efficiency = source.detection.plateau * (x <= 0)
            else:
                with np.errstate(over="ignore"):
                    efficiency = source.detection.plateau / (1 + np.exp(x / source.detection.width))
            found[i] = self.inside[i] & (rng.random(x.size) < np.nan_to_num(efficiency))
        return found

    def rows(self, *sources):
        return source_rows(self.coverage, self.space, sources, self.dust, COEFFICIENTS)

    def chosen(self, row):
        return ((self.telescope == row.telescope) | (row.telescope is None)) & (
            (self.band == row.band) | (row.band is None)
        )


@pytest.fixture(scope="module")
def night():
    return Night(None)


@pytest.fixture(scope="module")
def dusty():
    return Night(dust_map())


def agrees(value, hits, total):
    share = hits / total
    return abs(value - share) <= 4 * np.sqrt(max(share * (1 - share), 1e-6) / total)


def check(night, source):
    detected = night.detected(source)
    for row in night.rows(source):
        if row.night is not None:
            continue
        mine = night.chosen(row)
        seen = often(detected[mine], night.start_mjd[mine], source.visits, source.gap_minutes)
        assert agrees(row.probability, seen.sum(), night.total), (row, seen.sum())
        assert row.probability_low <= row.probability <= row.probability_high
        covered = night.inside[mine].any(axis=0)
        parts = row.probability + row.probability_beyond + row.probability_without_distance
        assert agrees(parts, covered.sum(), night.total)
        lost = covered & np.isinf(night.draws.distance_mpc)
        assert agrees(row.probability_without_distance, lost.sum(), night.total)


@pytest.mark.parametrize("name", SOURCES)
def test_detectable_probability_against_a_million_draws(night, name):
    check(night, SOURCES[name])


@pytest.mark.parametrize("name", ["step", "twice", "gradual", "fading"])
def test_detectable_probability_behind_dust_against_a_million_draws(dusty, name):
    check(dusty, SOURCES[name])


def test_the_draws_can_fail(night, dusty):
    """The checks above see a tenth of a magnitude, and the dust."""
    row = night.rows(constant(-15.5))[0]
    seen = often(night.detected(constant(-15.6)), night.start_mjd, 1, 0.0)
    assert not agrees(row.probability, seen.sum(), night.total)
    seen = often(dusty.detected(constant(-15.5)), dusty.start_mjd, 1, 0.0)
    assert not agrees(row.probability, seen.sum(), dusty.total)


def squares(first=0, count=24, order=3):
    """Cells of order 3 about (150, 20), to observe whole."""
    patch = healpy.query_disc(1 << order, healpy.ang2vec(150, 20, lonlat=True), 0.5, nest=True)
    return patch[first : first + count]


def plain_map(cell, mu, sigma, order=3):
    return map_of(order, cell, np.arange(1.0, cell.size + 1), mu, sigma)


def tallied(regions, skymap, sources, dust=None, **log):
    coverage = exact_coverage(regions, skymap, **log)
    space = Space.of(skymap, PLANCK)
    return source_rows(coverage, space, sources, dust, COEFFICIENTS)


@pytest.fixture
def cells():
    """A map of 24 cells, two of them without distance."""
    cell = squares()
    mu = np.linspace(60.0, 200.0, cell.size)
    mu[[3, 8]] = np.inf
    return cell, plain_map(cell, mu, np.full(cell.size, 25.0))


def share_of(cell, chosen, limits=None):
    """Fraction of the map of `cells` in some of its cells with a distance."""
    weight = np.arange(1.0, cell.size + 1)
    keep = np.isin(np.arange(cell.size), chosen) & ~np.isin(np.arange(cell.size), [3, 8])
    return weight[keep].sum() / weight.sum()


@pytest.mark.parametrize("k_correction", ["none", "flat"])
@pytest.mark.parametrize("detection", [Detection(), Detection(width=0.3), Detection(offset=-2.0)])
@pytest.mark.parametrize("magnitude", [-45.0, -70.0, -200.0])
def test_what_is_infinitely_bright_is_seen_wherever_there_is_a_distance_and_a_limit(
    cells, k_correction, detection, magnitude
):
    cell, skymap = cells
    source = constant(magnitude, k_correction=k_correction, detection=detection)
    regions = [spans_of_cells(3, cell[:8]), spans_of_cells(3, cell[6:12])]
    row = tallied(regions, skymap, [source])[0]
    assert row.probability == pytest.approx(share_of(cell, range(12)), rel=1e-9)
    assert row.probability_beyond == pytest.approx(0.0, abs=1e-9)
    assert row.probability_without_distance == pytest.approx((4 + 9) / 300)
    # Without a limit an exposure covers, but shows nothing.
    row = tallied(regions, skymap, [source], depth=np.array([20.0, np.nan]))[0]
    assert row.probability == pytest.approx(share_of(cell, range(8)), rel=1e-9)
    assert row.probability_beyond == pytest.approx(share_of(cell, range(8, 12)), rel=1e-9)


@pytest.mark.parametrize("name", SOURCES)
@pytest.mark.parametrize("depth", [-40.0, np.nan])
def test_without_depth_nothing_is_seen(cells, name, depth):
    cell, skymap = cells
    regions = [spans_of_cells(3, cell[:8]), spans_of_cells(3, cell[6:12])]
    row = tallied(regions, skymap, [SOURCES[name]], depth=depth)[0]
    assert row.probability == pytest.approx(0.0, abs=1e-15)
    assert row.probability_beyond == pytest.approx(share_of(cell, range(12)), rel=1e-9)
    assert row.volume_mpc3 == pytest.approx(0.0, abs=1e-9)


@st.composite
def nights(draw):
    """Regions of whole cells, starts in minutes, bands and limits of up to six exposures."""
    n = draw(st.integers(1, 6))
    integers = st.lists(st.integers(0, 23), min_size=1, max_size=8)
    return (
        [draw(integers) for _ in range(n)],
        np.sort([draw(st.integers(1, 400)) for _ in range(n)]) / 1440,
        [draw(st.sampled_from(["g", "r"])) for _ in range(n)],
        np.array([draw(st.sampled_from([18.0, 19.5, 20.0, 20.7, np.nan])) for _ in range(n)]),
    )


detections = st.sampled_from(
    [Detection(), Detection(-0.3, 0.2, 0.95), Detection(plateau=0.8), Detection(0.2)]
)


@settings(max_examples=40, derandomize=True, deadline=None)
@given(
    nights(),
    detections,
    st.sampled_from([(1, 0.0), (2, 30.0), (3, 60.0)]),
    st.sampled_from(["none", "flat"]),
    st.floats(-18, -13),
)
def test_deeper_brighter_and_more_never_see_less(observed, detection, wanted, flat, magnitude):
    chosen, days, band, depth = observed
    cell = squares()
    skymap = plain_map(cell, np.linspace(60.0, 200.0, cell.size), np.full(cell.size, 25.0))
    regions = [spans_of_cells(3, cell[c]) for c in chosen]
    log = {"start": EVENT_MJD + days, "band": band, "depth": depth}

    def seen(at=magnitude, regions=regions, **changed):
        source = constant(
            at, detection=detection, visits=wanted[0], gap_minutes=wanted[1], k_correction=flat
        )
        return tallied(regions, skymap, [source], **(log | changed))[0].probability

    value, slack = seen(), 1e-12 if detection.width == 0 and detection.plateau == 1 else 2e-4
    assert 0 <= value <= 1
    assert seen(at=magnitude - 0.3) >= value - slack
    assert seen(depth=depth + 0.3) >= value - slack
    fewer = {k: v[:-1] for k, v in log.items()}
    if len(days) > 1:
        assert seen(regions=regions[:-1], **fewer) <= value + slack


def test_volumes_of_a_cap_against_its_formula_and_astropy():
    """A circle of one depth: Ω d³/3, and Ω/4π of astropy's comoving volume."""
    radius, limit, magnitude = 6.0, 20.3, -15.2
    skymap = plain_map(squares(0, 200), np.full(200, 150.0), np.full(200, 40.0))
    log = log_table("Heron", [150.0], [20.0], depth=limit)
    coverage = coverage_of([telescope("Heron", CircleCamera(radius), log)], skymap)
    space = Space.of(skymap, PLANCK)
    row = source_rows(coverage, space, [constant(magnitude)])[0]
    reach = Distance(distmod=limit - magnitude).to_value(u.Mpc)
    solid = 2 * np.pi * (1 - np.cos(np.radians(radius)))
    redshift = Distance(distmod=limit - magnitude).compute_z(Planck18)
    comoving = Planck18.comoving_volume(redshift).to_value(u.Mpc**3)
    # The circle's own area is within a thousandth.
    assert row.volume_mpc3 == pytest.approx(solid * reach**3 / 3, rel=1e-3)
    assert row.volume_comoving_mpc3 == pytest.approx(solid / (4 * np.pi) * comoving, rel=1e-3)
    ratio = row.volume_comoving_mpc3 / row.volume_mpc3
    assert ratio == pytest.approx(comoving / (4 * np.pi) / (reach**3 / 3), rel=1e-5)
    for value in (row.reach_min_mpc, row.reach_median_mpc, row.reach_max_mpc):
        assert value == pytest.approx(reach, rel=1e-12)


def test_reaches_by_hand(cells):
    """Three places whose weights are 1+2, 3+4 and 5+6 of a map of 300, one without limit."""
    cell, skymap = cells
    regions = [spans_of_cells(3, cell[a : a + 2]) for a in (0, 2, 4)]
    row = tallied(regions, skymap, [constant(-16.0)], depth=np.array([20.0, 19.0, 18.0]))[0]
    reach = [Distance(distmod=m + 16.0).to_value(u.Mpc) for m in (18.0, 19.0, 20.0)]
    # Half of 21 lies among the 11 at limit 18.
    assert row.reach_min_mpc == pytest.approx(reach[0])
    assert row.reach_median_mpc == pytest.approx(reach[0])
    assert row.reach_max_mpc == pytest.approx(reach[2])
    row = tallied(regions, skymap, [constant(-16.0)], depth=np.array([20.0, 19.0, np.nan]))[0]
    assert row.reach_min_mpc == pytest.approx(reach[1])
    assert row.reach_median_mpc == 0.0
    row = tallied(regions, skymap, [constant({"g": -16.0}, bands=("g",))], depth=20.0)[0]
    assert (row.reach_min_mpc, row.reach_median_mpc, row.reach_max_mpc) == (None, None, None)
    assert (row.probability, row.volume_mpc3) == (0.0, 0.0)


def test_reach_of_a_gradual_detection_is_that_of_half_its_plateau(cells):
    cell, skymap = cells
    source = constant(-16.0, detection=Detection(-0.4, 0.2, 0.9))
    row = tallied([spans_of_cells(3, cell[:2])], skymap, [source], depth=20.0)[0]
    expected = Distance(distmod=20.0 - 0.4 + 16.0).to_value(u.Mpc)
    assert row.reach_max_mpc == pytest.approx(expected)


def voxels_of_90(skymap, step=0.25):
    """Cell and distance range of the densest voxels that hold 90 %, and which they are."""
    layer = skymap.distance
    edges = np.arange(0.0, 420.0, step)
    middle = (edges[1:] + edges[:-1]) / 2
    area = (skymap.stops - skymap.starts) * (4 * np.pi / (12 * 4.0**29))
    good = np.flatnonzero(np.isfinite(layer.mu_mpc))
    mu, sigma = layer.mu_mpc[good, None], layer.sigma_mpc[good, None]
    per_mpc = middle**2 * np.exp(-0.5 * ((middle - mu) / sigma) ** 2)
    per_mpc /= per_mpc.sum(axis=1, keepdims=True)
    held = per_mpc * (skymap.density_per_sr * area)[good, None]
    size = area[good, None] * np.diff(edges**3) / 3
    order = np.argsort(-(held / size), axis=None)
    inside = np.zeros(held.size, dtype=bool)
    inside[order[: np.searchsorted(np.cumsum(held.ravel()[order]), 0.9) + 1]] = True
    return good, edges, inside.reshape(held.shape), size


def test_parts_of_the_credible_volume_against_voxels(cells):
    cell, skymap = cells
    mu = np.linspace(60.0, 200.0, cell.size)
    mu[3] = np.inf
    skymap = plain_map(cell, mu, np.full(cell.size, 25.0))
    regions = [spans_of_cells(3, cell[:14]), spans_of_cells(3, cell[10:20])]
    depth = np.array([19.4, 19.9])
    row = tallied(regions, skymap, [constant(-15.8)], depth=depth)[0]
    good, edges, inside, size = voxels_of_90(skymap)
    starts = skymap.starts[good]
    reach = np.zeros(good.size)
    for region, limit in zip(regions, depth):
        here = region.contains(starts)
        found = Distance(distmod=limit + 15.8).to_value(u.Mpc)
        reach[here] = np.maximum(reach[here], found)
    covered = inside & (reach > 0)[:, None]
    within = covered & ((edges[1:] + edges[:-1])[None, :] / 2 <= reach[:, None])
    assert 0.05 < size[within].sum() / size[covered].sum() < 0.95
    assert row.volume_90_covered_mpc3 == pytest.approx(size[covered].sum(), rel=2e-3)
    assert row.volume_90_within_reach_mpc3 == pytest.approx(size[within].sum(), rel=2e-3)
    # Comoving: the same voxels, each times astropy's ratio at its middle.
    z = np.linspace(1e-6, 0.12, 2000)
    luminosity = Planck18.luminosity_distance(z).to_value(u.Mpc)
    volume = Planck18.comoving_volume(z).to_value(u.Mpc**3) / (4 * np.pi)
    at = np.interp(edges, np.append(0, luminosity), np.append(0, volume))
    comoving = size / (np.diff(edges**3) / 3) * np.diff(at)
    for value, where in (
        (row.volume_90_covered_comoving_mpc3, covered),
        (row.volume_90_within_reach_comoving_mpc3, within),
    ):
        assert value == pytest.approx(comoving[where].sum(), rel=2e-3)


def test_the_rows_agree_with_the_tally(night):
    """What was covered is one number, wherever it is printed."""
    plain, _ = tally_maps(night.coverage, [(night.skymap, night.space)], SETTINGS)
    rows = night.rows(constant(-15.5), FADING)
    assert [r.source for r in rows] == ["Steady"] * len(plain) + ["Ember"] * len(plain)
    for row, other in zip(rows, plain + plain):
        assert (row.map, row.telescope, row.band, row.night) == (other.map, *other.selection)
        parts = row.probability + row.probability_beyond + row.probability_without_distance
        assert parts == pytest.approx(other.probability, rel=1e-9)
        assert row.volume_90_covered_mpc3 == pytest.approx(other.volume_90_covered_mpc3, rel=1e-9)
        assert row.volume_90_covered_comoving_mpc3 == pytest.approx(
            other.volume_90_covered_comoving_mpc3, rel=1e-9
        )


def test_without_a_credible_volume_its_parts_are_missing(cells):
    """Where an eighth of the probability is without distance there is no 90 % volume."""
    cell, _ = cells
    mu = np.full(cell.size, 100.0)
    mu[-2:] = np.inf
    skymap = plain_map(cell, mu, np.full(cell.size, 25.0))
    row = tallied([spans_of_cells(3, cell)], skymap, [constant(-16.0)])[0]
    assert row.volume_90_covered_mpc3 is None
    assert row.volume_90_within_reach_comoving_mpc3 is None
    assert row.probability > 0


@pytest.mark.parametrize("name", SOURCES)
def test_no_exposure_and_none_on_the_map(cells, name):
    _, skymap = cells
    log = log_table("Heron", [], [])
    nothing = coverage_of([telescope("Heron", CircleCamera(1.0), log)], skymap)
    space = Space.of(skymap, PLANCK)
    for coverage in (nothing, exact_coverage([Spans.from_cells(3, np.array([500]))], skymap)):
        for row in source_rows(coverage, space, [SOURCES[name]]):
            assert (row.probability, row.probability_high) == (0.0, 0.0)


def test_a_field_of_less_than_a_cell_has_a_bracket_from_nothing(cells):
    """The certain part of a field can be empty."""
    _, skymap = cells
    log = log_table("Heron", [150.0], [20.0], depth=20.0)
    coverage = coverage_of([telescope("Heron", CircleCamera(1e-4), log)], skymap)
    inner = coverage.inner
    coverage = replace(
        coverage,
        inner=replace(
            inner,
            **{f: getattr(inner, f)[:0] for f in ("starts", "stops", "group", "members")},
            offsets=np.zeros(1, dtype=np.int64),
        ),
    )
    space = Space.of(skymap, PLANCK)
    row = source_rows(coverage, space, [constant(-20.0)])[0]
    assert row.probability_low == 0.0
    assert 0.0 < row.probability <= row.probability_high


def test_no_map_cell_is_seen_by_an_exposure_beside_it():
    """Where a map lists part of the sky only, the rest holds nothing and has a volume."""
    cell = squares(0, 4)
    skymap: SkyMap = plain_map(cell, np.full(4, 100.0), np.full(4, 20.0))
    everything = spans_of_cells(3, squares(0, 40))
    row = tallied([everything], skymap, [constant(-16.0)], depth=20.0)[0]
    alone = tallied([spans_of_cells(3, cell)], skymap, [constant(-16.0)], depth=20.0)[0]
    assert row.probability == pytest.approx(alone.probability, rel=1e-12)
    assert row.volume_mpc3 == pytest.approx(10 * alone.volume_mpc3, rel=1e-9)


@pytest.mark.parametrize("k_correction", ["none", "flat"])
@pytest.mark.parametrize("visits", [1, 2])
@pytest.mark.parametrize("width", [0.005, 0.05, 0.2, 1.0, 4.0])
@pytest.mark.parametrize(
    ("mu", "sigma"), [(150.0, 2.0), (150.0, 8.0), (150.0, 40.0), (-50.0, 60.0)]
)
def test_gradual_detection_against_quadrature(mu, sigma, width, visits, k_correction):
    """∫ p(r) S(r) dr of one place and two exposures by the trapezoid rule on 200,001 points."""
    cell = squares(0, 1)
    limits = np.array([20.0, 20.4])
    source = constant(
        -15.6, detection=Detection(0.1, width, 0.95), visits=visits, k_correction=k_correction
    )
    row = tallied(
        [spans_of_cells(3, cell)] * 2, plain_map(cell, [mu], [sigma]), [source], depth=limits
    )[0]
    r = np.linspace(1e-3, max(mu, 0.0) + 9 * sigma, 200_001)
    p = r**2 * np.exp(-0.5 * ((r - mu) / sigma) ** 2)
    z = np.linspace(0, 0.3, 3001)
    at = np.append(0.0, Planck18.luminosity_distance(z[1:]).to_value(u.Mpc))
    k = -2.5 * np.log10(1 + np.interp(r, at, z)) if k_correction == "flat" else 0.0
    x = -15.6 + 5 * np.log10(r) + 25 + k - limits[:, None] - 0.1
    one, two = 0.95 * expit(-x / width)
    seen = one + two - one * two if visits == 1 else one * two
    expected = trapezoid(p * seen, r) / trapezoid(p, r)
    assert row.probability == pytest.approx(expected, abs=ALLOWED)
