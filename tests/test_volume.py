"""The credible volume against a shell known by hand and voxels that shrink."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import erf
from skytally.distance import cdf
from skytally.volume import credible_volume, shell_volume

FULL_SKY = 4 * np.pi


def a_sky(seed: int, count: int = 40) -> dict[str, np.ndarray]:
    """Directions of equal size, near and far, some with μ < 0, one without distance."""
    rng = np.random.default_rng(seed)
    solid = np.full(count, FULL_SKY / count)
    weight = rng.exponential(1.0, count)
    mu, sigma = rng.normal(100.0, 40.0, count), rng.uniform(15.0, 40.0, count)
    mu[:6] *= -1.5
    norm = np.ones(count)
    mu[7], norm[7] = np.inf, 0.0
    return {
        "density_per_sr": weight / weight.sum() / solid,
        "solid_angle_sr": solid,
        "mu": mu,
        "sigma": sigma,
        "norm": norm,
    }


@pytest.mark.parametrize("level", [0.5, 0.9])
def test_one_gaussian_shell(level: float) -> None:
    # The whole sky alike, σ ≪ μ: by symmetry the volume is a shell μ ± hσ. Its
    # content is ∫ t² φ(t−m) over ±h by hand: (m²+1) erf(h/√2) − 2h φ(h), over m²+1.
    mu, sigma = 400.0, 10.0
    m = mu / sigma

    def content(h: float) -> float:
        gauss = np.exp(-h * h / 2) / np.sqrt(2 * np.pi)
        return float(erf(h / np.sqrt(2)) - 2 * h * gauss / (m * m + 1))

    h = brentq(lambda x: content(x) - level, 0.1, 9.0, xtol=1e-14)
    got = credible_volume(level, [1 / FULL_SKY] * 2, [FULL_SKY / 2] * 2, mu, sigma, 1.0)
    assert got is not None
    np.testing.assert_allclose(got.r_low, mu - h * sigma, rtol=1e-10)
    np.testing.assert_allclose(got.r_high, mu + h * sigma, rtol=1e-10)
    wanted = FULL_SKY / 3 * ((mu + h * sigma) ** 3 - (mu - h * sigma) ** 3)
    assert got.volume == pytest.approx(wanted, rel=1e-9)
    assert got.probability == pytest.approx(level, rel=1e-12)
    peak = 1 / (FULL_SKY * np.sqrt(2 * np.pi) * sigma * sigma**2 * (m * m + 1))
    assert got.threshold == pytest.approx(peak * np.exp(-h * h / 2), rel=1e-10)


def voxel_volume(sky: dict[str, np.ndarray], level: float, step: float) -> float:
    """Sort voxels (a direction, a step of r) by density and add until the level."""
    use = sky["norm"] > 0
    edges = np.arange(0.0, 400.0 + step / 2, step)
    below = cdf(edges, sky["mu"][use, None], sky["sigma"][use, None])
    held = (sky["density_per_sr"] * sky["solid_angle_sr"])[use, None] * np.diff(below, axis=1)
    size = sky["solid_angle_sr"][use, None] * np.diff(edges**3) / 3
    order = np.argsort(-(held / size), axis=None)
    total = np.cumsum(held.ravel()[order])
    return float(np.interp(level, total, np.cumsum(size.ravel()[order])))


@pytest.mark.parametrize("level", [0.5, 0.9])
def test_voxels_converge_on_it_as_they_shrink(level: float) -> None:
    sky = a_sky(5)
    got = credible_volume(level, **sky)
    assert got is not None
    error = [abs(voxel_volume(sky, level, step) / got.volume - 1) for step in (8.0, 2.0, 0.5)]
    assert error[0] > error[1] > error[2]
    assert error[2] < 1e-4


def test_the_intervals_end_where_the_density_meets_the_threshold() -> None:
    sky = a_sky(6)
    got = credible_volume(0.8, **sky)
    assert got is not None
    for row in np.flatnonzero(got.r_high > 0):
        tiny = 1e-4 * sky["sigma"][row]
        for end in (got.r_low[row], got.r_high[row]):
            if end == 0.0:
                continue
            # Density per volume from F over a sliver of r, not from the code's own form.
            r = end + np.array([-tiny, tiny])
            share = np.diff(cdf(r, sky["mu"][row], sky["sigma"][row]))[0]
            here = sky["density_per_sr"][row] * share * 3 / (r[1] ** 3 - r[0] ** 3)
            assert here == pytest.approx(got.threshold, rel=1e-6)


def test_it_holds_what_it_says_and_the_volume_is_its_shells() -> None:
    sky = a_sky(7)
    got = credible_volume(0.9, **sky)
    assert got is not None
    use = sky["norm"] > 0
    high = cdf(got.r_high[use], sky["mu"][use], sky["sigma"][use])
    low = cdf(got.r_low[use], sky["mu"][use], sky["sigma"][use])
    weight = (sky["density_per_sr"] * sky["solid_angle_sr"])[use]
    assert weight @ (high - low) == pytest.approx(0.9, rel=1e-10)
    assert got.r_low[7] == got.r_high[7] == 0.0
    wanted = np.sum(sky["solid_angle_sr"] * (got.r_high**3 - got.r_low**3)) / 3
    assert got.volume == pytest.approx(wanted, rel=1e-13)


def test_the_volume_grows_with_the_level() -> None:
    volumes = [credible_volume(level, **a_sky(8)) for level in (0.1, 0.3, 0.5, 0.7, 0.9)]
    sizes = [v.volume for v in volumes if v is not None]
    assert len(sizes) == 5
    assert np.all(np.diff(sizes) > 0)


@pytest.mark.parametrize("m", [-45.0, -20.0, -3.0, 0.0])
def test_directions_with_mu_at_or_below_zero(m: float) -> None:
    # Alone on the sky the interval is [0, R] with F(R) the level.
    got = credible_volume(0.7, 1 / FULL_SKY, [FULL_SKY], m * 20.0, 20.0, 1.0)
    assert got is not None
    assert got.r_low[0] == 0.0
    assert cdf(got.r_high[0], m * 20.0, 20.0) == pytest.approx(0.7, rel=1e-10)


def test_the_level_is_of_all_the_probability() -> None:
    # Half of the probability has no distance: 0.4 of all is 0.8 of the rest.
    solid = [FULL_SKY / 2, FULL_SKY / 2]
    half = credible_volume(0.4, [1 / FULL_SKY] * 2, solid, [100.0, np.inf], 10.0, [1.0, 0.0])
    alone = credible_volume(0.8, [2 / FULL_SKY], solid[:1], 100.0, 10.0, 1.0)
    assert half is not None
    assert alone is not None
    assert half.volume == pytest.approx(alone.volume, rel=1e-10)
    for level in (0.5, 0.9):
        args = ([1 / FULL_SKY] * 2, solid, [100.0, np.inf], 10.0, [1.0, 0.0])
        assert credible_volume(level, *args) is None


@pytest.mark.parametrize("level", [0.0, 1.0, -0.1, np.nan])
def test_a_level_outside_zero_to_one_is_refused(level: float) -> None:
    with pytest.raises(ValueError, match="between 0 and 1"):
        credible_volume(level, **a_sky(9))


def test_shells() -> None:
    # A ball of radius 3 less one of radius 2, and an interval that a reach has emptied.
    wanted = [4 / 3 * np.pi * (27 - 8), 0.0]
    np.testing.assert_allclose(shell_volume(FULL_SKY, 2.0, [3.0, 1.0]), wanted, rtol=1e-14)
