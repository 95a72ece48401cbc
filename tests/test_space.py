"""A map in three dimensions: moments, credible volumes and reach, against brute force."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from astropy.cosmology import WMAP9, Planck18, z_at_value
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from deep_sky import distance_map, map_of
from scipy.integrate import quad, trapezoid
from skytally import distance
from skytally.audit_maps import map_findings, sum_findings, version_findings
from skytally.cosmology import Cosmology
from skytally.skymap import SkyMap
from skytally.skymap_io import read_skymap
from skytally.space import Distances, Space

PLANCK = Cosmology.named("Planck18")
EXAMPLES = Path(__file__).parent.parent / "examples" / "lantern-7" / "maps"


def shape(r, mu, sigma):
    """r² φ((r−μ)/σ) up to a factor, of any μ."""
    return r**2 * np.exp(-0.5 * ((r - mu) / sigma) ** 2 + 0.5 * (min(mu, 0.0) / sigma) ** 2)


def grid_of(skymap, step):
    """Probability and size of every voxel (cell × step of distance) of cells with distance."""
    layer = skymap.distance
    good = np.flatnonzero(np.isfinite(layer.mu_mpc))
    edges = np.arange(0.0, 600.0 + step / 2, step)
    fine = np.linspace(edges[:-1], edges[1:], 9, axis=-1)
    held, size = [], []
    area = 4 * np.pi * (skymap.stops - skymap.starts)[good] / (12 * 4.0**29)
    weight = skymap.density_per_sr[good] * area
    for mu, sigma, w, a in zip(layer.mu_mpc[good], layer.sigma_mpc[good], weight, area):
        part = trapezoid(shape(fine, mu, sigma), fine, axis=-1)
        held.append(w * part / part.sum())
        size.append(a * np.diff(edges**3) / 3)
    return np.array(held), np.array(size), edges


def voxel_volume(skymap, level, step):
    held, size, _ = grid_of(skymap, step)
    order = np.argsort(-(held / size), axis=None)
    below = np.cumsum(held.ravel()[order])
    return float(np.interp(level, below, np.cumsum(size.ravel()[order])))


@pytest.mark.parametrize("level", [0.5, 0.9])
def test_credible_volume_against_voxels_that_shrink(level):
    skymap = distance_map(radius_deg=9.0, seed=11)
    space = Space.of(skymap, PLANCK)
    volume, _ = space.credible_volumes(level)
    error = [abs(voxel_volume(skymap, level, step) / volume - 1) for step in (20.0, 6.0, 2.0)]
    assert error[0] > error[1] > error[2]
    assert error[2] < 2e-3


def test_comoving_volume_of_the_credible_volume_against_astropy():
    """The voxels inside, each as large as astropy says."""
    skymap = distance_map(radius_deg=9.0, seed=11)
    volume, comoving = Space.of(skymap, PLANCK).credible_volumes(0.9)
    held, size, edges = grid_of(skymap, 2.0)
    order = np.argsort(-(held / size), axis=None)
    inside = np.zeros(held.size, dtype=bool)
    inside[order[np.cumsum(held.ravel()[order]) <= 0.9]] = True
    z = np.linspace(1e-6, 0.2, 4000)
    at = np.interp(
        edges,
        np.append(0, Planck18.luminosity_distance(z).to_value(u.Mpc)),
        np.append(0, Planck18.comoving_volume(z).to_value(u.Mpc**3)),
    )
    ratio = np.diff(at) / (4 * np.pi) / (np.diff(edges**3) / 3)
    inside = inside.reshape(held.shape)
    expected = (size * inside * ratio).sum() / (size * inside).sum()
    assert comoving / volume == pytest.approx(expected, rel=1e-3)
    assert 0.8 < expected < 0.95


@pytest.mark.parametrize(("name", "model"), [("Planck18", Planck18), ("WMAP9", WMAP9)])
def test_comoving_shell_against_astropy(name, model):
    space = Space.of(distance_map(), Cosmology.named(name))
    low, high = np.array([0.0, 50.0, 300.0, 90.0]), np.array([100.0, 60.0, 8000.0, 20.0])
    got = space.comoving_shell(np.full(4, 0.25), low, high)

    def inside(d):
        if d == 0:
            return 0.0
        z = z_at_value(model.luminosity_distance, d * u.Mpc)
        return model.comoving_volume(z).to_value(u.Mpc**3)

    expected = [0.25 / (4 * np.pi) * max(inside(b) - inside(a), 0.0) for a, b in zip(low, high)]
    np.testing.assert_allclose(got, expected, rtol=1e-5)
    far = space.comoving_shell(np.ones(2), np.zeros(2), np.array([1e12, np.inf]))
    # astropy's own volume at redshift 1000, less than a thousandth of it aside.
    np.testing.assert_allclose(
        far, model.comoving_volume(1000).to_value(u.Mpc**3) / (4 * np.pi), rtol=1e-3
    )


def test_within_against_quadrature():
    skymap = map_of(2, np.arange(5), np.ones(5), [90.0, -80.0, np.inf, 400.0, 0.0], [30.0] * 5)
    space = Space.of(skymap, PLANCK)
    layer = skymap.distance
    for cell in range(5):
        for reach in (-1.0, 0.0, 1.0, 40.0, 95.0, 350.0, 5e3, np.inf):
            got = space.within(np.array([cell]), np.array([reach]))[0]
            mu, sigma = layer.mu_mpc[cell], layer.sigma_mpc[cell]
            if not np.isfinite(mu) or reach <= 0:
                assert got == 0.0
                continue
            end = max(mu, 0) + 12 * sigma
            part, whole = (
                quad(shape, 0, min(r, end), (mu, sigma), epsabs=0, points=[max(min(mu, r), 0)])[0]
                for r in (reach, end)
            )
            assert got == pytest.approx(part / whole, rel=1e-7, abs=1e-12)
    assert space.within(np.array([-1, -1]), np.array([100.0, np.inf])).tolist() == [0.0, 0.0]


def test_moments_against_quadrature():
    skymap = distance_map(seed=2)
    space = Space.of(skymap, PLANCK)
    held, first, second = 0.0, 0.0, 0.0
    for weight, mu, sigma in zip(
        space.probability, skymap.distance.mu_mpc, skymap.distance.sigma_mpc
    ):
        if not np.isfinite(mu):
            continue
        r = np.linspace(0, max(mu, 0) + 12 * sigma, 20_001)
        p = shape(r, mu, sigma)
        p *= weight / trapezoid(p, r)
        held, first, second = (
            total + trapezoid(p * r**k, r) for k, total in enumerate((held, first, second))
        )
    mean, sd = space.moments
    assert held + space.probability_without == pytest.approx(1.0)
    assert space.probability_without > 0.01
    assert mean == pytest.approx(first / held, rel=1e-7)
    assert sd == pytest.approx(np.sqrt(second / held - (first / held) ** 2), rel=1e-6)


@pytest.mark.parametrize("name", ["arc", "update"])
def test_the_examples_headers_agree_with_their_cells(name):
    """As on published maps: DISTMEAN and DISTSTD are moments over the sky, not μ and σ."""
    skymap = read_skymap(EXAMPLES / f"{name}.fits.gz", label=name)
    space = Space.of(skymap, PLANCK)
    layer = skymap.distance
    assert space.moments == pytest.approx((layer.header_mean_mpc, layer.header_sd_mpc), rel=1e-6)
    assert map_findings([(skymap, space)]) == []


def stated(mean, sd):
    """The map of `distance_map` with header values that many times its own."""
    skymap = distance_map()
    space = Space.of(skymap, PLANCK)
    own = space.moments
    layer = replace(
        skymap.distance,
        header_mean_mpc=None if mean is None else mean * own[0],
        header_sd_mpc=None if sd is None else sd * own[1],
    )
    skymap = replace(skymap, distance=layer, label="2 update")
    return skymap, Space.of(skymap, PLANCK)


@pytest.mark.parametrize(
    ("mean", "sd", "named"),
    [
        (1.0, 1.0, []),
        (1.0005, 0.9995, []),
        (None, None, []),
        (1.01, 1.0, ["DISTMEAN"]),
        (0.99, None, ["DISTMEAN"]),
        (1.0, 1.002, ["DISTSTD"]),
        (np.nan, -1.0, ["DISTMEAN", "DISTSTD"]),
    ],
)
def test_a_header_that_disagrees_with_the_cells_is_a_finding(mean, sd, named):
    pair = stated(mean, sd)
    found = map_findings([pair, (pair[0], None)])
    assert [f.text.split(" = ")[0].split()[-1] for f in found] == named
    for finding in found:
        assert (finding.code, finding.severity) == ("map-distance-header", "caution")
        assert finding.subject == "2 update"
        assert finding.done
        assert finding.remedy


HOUR = 1 / 24


def versions(*issued_h, listed=None, last_h=30.0):
    """A campaign of map versions issued so many hours after the event, None where not stated.

    ``listed``: their order in the campaign file; ``last_h``: when the last exposure began.
    """
    skymap = distance_map()
    maps = [
        replace(
            skymap,
            label=str(i),
            path=f"{i}.fits",
            issued_mjd=None if hours is None else EVENT_MJD + hours * HOUR,
        )
        for i, hours in enumerate(issued_h, 1)
    ]
    start = EVENT_MJD + np.array([0.5, last_h]) * HOUR
    heron = telescope("Heron", None, log_table("Heron", [1.0, 2.0], [0.0, 0.0], start=start))
    order = listed or range(1, len(maps) + 1)
    inputs = tuple(("map", f"{i}.fits", "0" * 64) for i in order)
    return replace(campaign([heron], maps), inputs=inputs)


def version_codes(*args, **more):
    return [(f.code, f.severity, f.subject) for f in version_findings(versions(*args, **more))]


def test_versions_as_they_should_be_give_no_findings():
    assert version_codes(0.1, 3.0, 29.9) == []
    assert version_codes(None) == []
    assert version_codes(0.1, None, 3.0) == []
    assert version_findings(campaign([], [])) == []


@pytest.mark.parametrize(("hours", "severity"), [(-0.1, "caution"), (-0.2, "error")])
def test_a_version_issued_before_the_event(hours, severity):
    """Some alerts are sent minutes ahead of the event (common practice), none hours."""
    assert version_codes(hours, 3.0) == [("map-before-event", severity, "1")]


def test_versions_in_another_order_than_issued():
    """Loaded in order of issue; the inputs stand as the campaign file lists them."""
    assert version_codes(0.1, 3.0, 9.0, listed=(2, 1, 3)) == [("map-order", "caution", "3")]
    (finding,) = version_findings(versions(0.1, 3.0, 9.0, listed=(1, 3, 2)))
    assert "lists 3 before" in finding.text
    # Without all times of issue they stay in the file's order, and 3 is taken for the newest.
    # One file for two versions has no place of its own.
    again = versions(0.1, 3.0, 9.0)
    maps = (*again.maps[:2], replace(again.maps[2], path="1.fits"))
    assert version_findings(replace(again, maps=maps, inputs=again.inputs[:2])) == []
    assert version_codes(9.0, None, 3.0) == [("map-order", "caution", "3")]


def test_a_version_that_nobody_followed_is_a_note():
    assert version_codes(0.1, 3.0, 42.0) == [("map-after-exposures", "note", "3")]
    (finding,) = version_findings(versions(0.1, 42.0))
    assert "12.0 h after" in finding.text
    assert version_codes(0.1, 31.0, 42.0)[0] == ("map-after-exposures", "note", "2")
    empty = replace(versions(0.1, 42.0), telescopes=())
    assert version_findings(empty) == []


@pytest.mark.parametrize(
    ("total", "severities"),
    [
        (1.0, []),
        (1.0 + 2e-6, []),  # the rounding of float32 cells
        (0.9999, ["note"]),
        (1.00002, ["note"]),
        (1.0051, ["caution"]),
        (0.992, ["caution"]),
    ],
)
def test_a_file_that_does_not_sum_to_one(total, severities):
    found = sum_findings([(replace(distance_map(), label="2 arc"), total)])
    assert [f.severity for f in found] == severities
    for finding in found:
        assert (finding.code, finding.subject) == ("map-not-normalised", "2 arc")
        assert f"{total:.6g}" in finding.text


def test_without_distance_there_is_no_space():
    skymap = distance_map()
    n = skymap.starts.size
    assert Space.of(replace(skymap, distance=None), PLANCK) is None
    for change in (
        {"mu_mpc": np.full(n, np.inf)},
        {"sigma_mpc": np.zeros(n)},
        {"norm_per_mpc2": np.zeros(n)},
    ):
        other = replace(skymap, distance=replace(skymap.distance, **change))
        assert Space.of(other, PLANCK) is None


def test_cells_without_probability_do_not_count():
    skymap: SkyMap = distance_map(without=False)
    density = skymap.density_per_sr.copy()
    density[::2] = 0.0
    density /= density @ Space.of(skymap, PLANCK).solid_angle_sr
    half = replace(skymap, density_per_sr=density)
    space = Space.of(half, PLANCK)
    assert not space.known[::2].any()
    assert space.known[1::2].all()
    assert space.probability_without == 0.0


def test_a_level_that_the_distances_do_not_reach_has_no_volume():
    mu = np.full(10, 100.0)
    mu[:3] = np.nan
    skymap = map_of(2, np.arange(10), np.ones(10), mu, np.full(10, 20.0))
    space = Space.of(skymap, PLANCK)
    assert space.credible_volumes(0.9) is None
    assert space.credible_densities() is None
    volume, _ = space.credible_volumes(0.5)
    assert volume == pytest.approx(voxel_volume(replace(skymap), 0.5, 1.0), rel=1e-3)


def test_parts_of_the_volume_add_up():
    """Cells in pieces, out to reaches in steps: the sum is the whole volume, both kinds."""
    skymap = distance_map()
    space = Space.of(skymap, PLANCK)
    cell = np.repeat(np.arange(skymap.starts.size), 3)
    solid = (np.outer(space.solid_angle_sr, [0.5, 0.3, 0.2])).ravel()

    def out_to(reach, cell=cell, solid=solid):
        reach = np.full(cell.size, reach)
        return space.credible_shell(cell, solid, reach**3 / 3, space.comoving_per_sr(reach))

    far = out_to(np.inf)
    assert far == pytest.approx(space.credible_volumes(0.9), rel=1e-9)
    whole = space.credible_densities()
    assert (whole[0].total, whole[1].total) == pytest.approx(far, rel=1e-9)
    near = [out_to(r)[0] for r in (0.0, 90.0, 150.0)]
    assert near[0] == 0.0
    assert 0.0 < near[1] < near[2] < far[0]
    assert out_to(np.inf, np.array([-1]), np.ones(1)) == (0.0, 0.0)


def test_extent_holds_all_but_millionths():
    for seed in range(5):
        space = Space.of(distance_map(seed=seed), PLANCK)
        near, far = space.extent_mpc
        cells = np.flatnonzero(space.known)
        low, high = (space.within(cells, np.full(cells.size, r)) for r in (near, far))
        assert low.max() < 5e-6
        assert high.min() > 1 - 1e-9


def test_prepared_distances_against_the_closed_forms():
    """`skytally.distance` (itself held against 50 digits) for m = μ/σ from −40 to 30."""
    ratio = np.array([-40.0, -9.0, -3.01, -2.99, -2.0, -0.5, 0.0, 0.7, 3.0, 11.0, 30.0])
    mu, sigma = np.append(30.0 * ratio, np.nan), np.append(np.full(ratio.size, 30.0), 1.0)
    prepared = Distances.of(mu, sigma)
    for r in (1e-3, 4.0, 31.0, 97.0, 250.0, 930.0, 5e3):
        for got, expected in (
            (prepared.within(np.full(mu.size, r)), distance.cdf(r, mu, sigma)),
            (prepared.within(r), distance.cdf(r, mu, sigma)),
            (prepared.density(r), distance.density(r, mu, sigma)),
        ):
            assert got[-1] == 0.0
            np.testing.assert_allclose(got[:-1], expected[:-1], rtol=1e-12, atol=2e-13)
        got, expected = prepared.moments_beyond(r), distance.moments_beyond(r, mu, sigma)
        whole = np.array(distance.moments_beyond(0.0, mu, sigma))
        assert got[:, -1].tolist() == [1.0, 0.0, 0.0]
        np.testing.assert_allclose(
            got[:, :-1] / whole[:, :-1], np.array(expected)[:, :-1] / whole[:, :-1], atol=2e-13
        )
    for rows in (np.array([3, 3, 11, 0]), np.array([-1, 5])):
        assert prepared.take(rows).within(80.0).tolist() == prepared.within(80.0)[rows].tolist()
    sure = prepared.sure_mpc
    assert sure[-1] == 0.0
    np.testing.assert_allclose(distance.cdf(sure[:-1], mu[:-1], sigma[:-1]), 1.0, atol=1e-15)
