"""The distance distribution against 50-digit arithmetic and independent quadrature."""

from __future__ import annotations

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.stats import gamma
from skytally import distance

SIGMA = 37.3
POSITIONS = np.concatenate((np.arange(-10.0, 51.0, 2.5), [-2.01, -1.99, -1e-3, 7e-4, 19.99]))


def exact_probability(low: float, high: float, mu: float, sigma: float) -> mp.mpf:
    """Evaluate the closed form (ApJL 829 L15, 2016) with digits enough to cancel."""
    low_, high_, m = (mp.mpf(v) / mp.mpf(sigma) for v in (low, high, mu))

    def below(t: mp.mpf) -> mp.mpf:
        return (m * m + 1) * mp.ncdf(t - m) - (m + t) * mp.npdf(t - m)

    whole = (m * m + 1) * mp.ncdf(m) + m * mp.npdf(m)
    return (below(high_) - below(low_)) / whole


@pytest.mark.parametrize("m", POSITIONS)
def test_both_tails_keep_ten_digits(m: float) -> None:
    mu = m * SIGMA
    levels = np.concatenate((10.0 ** np.arange(-12, 0), [0.3, 0.5, 0.9, 1 - 1e-4, 1 - 1e-9]))
    grid = SIGMA * np.array([1e-4, 1e-2, 0.1, 0.3, 1, 2, 5, 10, 30, 50, 59])
    values = np.concatenate((distance.quantile(levels, mu, SIGMA), grid))
    below = distance.cdf(values, mu, SIGMA)
    beyond = distance.survival(values, mu, SIGMA)
    tested = 0
    # 50 digits of result and 60 more for what the closed form loses at m = −10.
    with mp.workdps(110):
        for value, lower, upper in zip(values, below, beyond):
            exact = exact_probability(0.0, float(value), mu, SIGMA)
            for got, wanted in ((lower, exact), (upper, 1 - exact)):
                if wanted >= mp.mpf("0.99e-12"):
                    assert abs(mp.mpf(float(got)) / wanted - 1) < 1e-10, value
                    tested += 1
                else:
                    assert 0.0 <= got < 1e-12
    assert tested > 25


@pytest.mark.parametrize("m", [-10.0, -1.0, 0.3, 5.0, 50.0])
@pytest.mark.parametrize("width", [1e-6, 1e-3, 0.3])
def test_narrow_intervals_do_not_cancel(m: float, width: float) -> None:
    mu = m * SIGMA
    low = float(distance.quantile(0.4, mu, SIGMA))
    high = low * (1.0 + width)
    with mp.workdps(110):
        exact = exact_probability(low, high, mu, SIGMA)
    got = distance.interval_probability(low, high, mu, SIGMA)
    assert float(got) == pytest.approx(float(exact), rel=1e-10)


@pytest.mark.parametrize("m", [-2000.0, -60.0, -38.0, -37.0, -30.0, 300.0])
def test_far_outside_the_grid_it_still_holds(m: float) -> None:
    # Real maps hold cells with μ far below zero.
    values = distance.quantile([1e-9, 0.1, 0.5, 0.999], m, 1.0)
    for value, got in zip(values, distance.cdf(values, m, 1.0)):
        with mp.workdps(60):
            # The integral itself, its greatest value taken out: t² exp(m t − t²/2).
            top = mp.mpf(max(m, 0.0))
            scale = 1 / mp.mpf(max(-m, 1.0))

            def integrand(t: mp.mpf, top: mp.mpf = top) -> mp.mpf:
                return t * t * mp.exp((t - top) * (m - (t + top) / 2))

            start = max(top - 15, mp.mpf(0))
            steps = [start + k * scale for k in range(0, 61, 4)]
            whole = mp.quad(integrand, [*steps, steps[-1] + 40 * scale])
            inside = [s for s in steps if s < value]
            part = mp.quad(integrand, [*inside, mp.mpf(float(value))])
        assert float(got) == pytest.approx(float(part / whole), rel=1e-9)


def test_no_gap_where_the_normal_tail_leaves_double_precision() -> None:
    # Near m = −37.67 the closed form is made of numbers with few digits left and
    # once gave probabilities of 1e5. For m ≪ 0 the distance is close to a gamma
    # distribution of shape 3 and scale 1/|m|, with corrections of order 1/m².
    m = np.concatenate((np.linspace(-39.0, -36.0, 6001), [-37.66868642]))
    for t in (1e-3, 0.05436191, 0.1, 0.3):
        wanted = gamma.cdf(t, 3, scale=-1.0 / m)
        np.testing.assert_allclose(distance.cdf(t, m, 1.0), wanted, rtol=0.02)


@pytest.mark.parametrize("m", POSITIONS[::3])
def test_density_and_moments_against_quadrature(m: float) -> None:
    mu = m * SIGMA
    mean, sd = distance.moments(mu, SIGMA)
    start = max(0.0, mu - 12 * SIGMA)
    end = max(mu, 0.0) + 12 * SIGMA
    points = [float(mean)]

    def integral(power: int) -> float:
        def integrand(r: float) -> float:
            return (r - float(mean)) ** power * float(distance.density(r, mu, SIGMA))

        return float(quad(integrand, start, end, points=points, epsabs=1e-12, limit=200)[0])

    assert integral(0) == pytest.approx(1.0, rel=1e-9)
    assert integral(1) == pytest.approx(0.0, abs=1e-8 * float(sd))
    assert integral(2) == pytest.approx(float(sd) ** 2, rel=1e-8)


def test_density_is_the_published_form() -> None:
    # N r² φ((r−μ)/σ)/σ, ApJL 829 L15 (2016), eq. for p(r | direction).
    r, mu, sigma = np.array([3.0, 40.0, 90.0]), 30.0, 22.0
    norm = distance.normalisation(mu, sigma)
    gauss = np.exp(-0.5 * ((r - mu) / sigma) ** 2) / np.sqrt(2 * np.pi)
    np.testing.assert_allclose(
        distance.density(r, mu, sigma), norm * r**2 * gauss / sigma, rtol=1e-13
    )
    assert distance.density(-1.0, mu, sigma) == 0.0


@pytest.mark.parametrize("m", POSITIONS)
def test_normalisation_and_moments_against_fifty_digits(m: float) -> None:
    mu = m * SIGMA
    with mp.workdps(110):
        x, sigma = mp.mpf(mu) / mp.mpf(SIGMA), mp.mpf(SIGMA)
        second = (x * x + 1) * mp.ncdf(x) + x * mp.npdf(x)
        third = (x**3 + 3 * x) * mp.ncdf(x) + (x * x + 2) * mp.npdf(x)
        fourth = (x**4 + 6 * x**2 + 3) * mp.ncdf(x) + (x**3 + 5 * x) * mp.npdf(x)
        mean, square = sigma * third / second, sigma**2 * fourth / second
        norm, sd = float(1 / (sigma**2 * second)), float(mp.sqrt(square - mean**2))
    assert float(distance.normalisation(mu, SIGMA)) == pytest.approx(norm, rel=1e-11)
    got_mean, got_sd = distance.moments(mu, SIGMA)
    assert float(got_mean) == pytest.approx(float(mean), rel=1e-11)
    assert float(got_sd) == pytest.approx(sd, rel=1e-10)
    # Beyond distance 0 lies everything.
    for got, wanted in zip(distance.moments_beyond(0.0, mu, SIGMA), (1.0, mean, square)):
        assert float(got) == pytest.approx(float(wanted), rel=1e-11)


@pytest.mark.parametrize("m", [-9.0, -0.5, 2.0, 12.0])
@pytest.mark.parametrize("level", [0.1, 0.6, 0.99])
def test_moments_beyond_against_quadrature(m: float, level: float) -> None:
    mu = m * SIGMA
    cut = float(distance.quantile(level, mu, SIGMA))
    end = max(mu, 0.0) + 12 * SIGMA
    for power, got in enumerate(distance.moments_beyond(cut, mu, SIGMA)):

        def integrand(r: float, power: int = power) -> float:
            return r**power * float(distance.density(r, mu, SIGMA))

        middle = [cut + 0.2 * float(got)] if power == 1 else [cut * 1.2]
        wanted = quad(integrand, cut, end, points=middle, epsabs=0, epsrel=1e-10, limit=200)[0]
        assert float(got) == pytest.approx(wanted, rel=1e-8)


def test_the_parameter_is_not_the_mean() -> None:
    # r² shifts the mean outward of μ: for μ = 3σ by 2 I₁/I₂ ≈ 0.6 σ. And as μ
    # falls, mean and standard deviation approach 3σ²/|μ| and √3σ²/|μ| (a gamma
    # distribution of shape 3).
    mean, sd = distance.moments([30.0, -10000.0], [10.0, 10.0])
    assert mean[0] == pytest.approx(36.0, abs=0.1)
    np.testing.assert_allclose([mean[1], sd[1]], [0.03, np.sqrt(3) * 0.01], rtol=1e-4)


@given(st.floats(-9.9, 60.0), st.floats(1e-3, 1e5))
def test_moments_and_parameters_undo_each_other(m: float, sigma: float) -> None:
    mean, sd = distance.moments(m * sigma, sigma)
    mu, back, norm = distance.parameters_from_moments(mean, sd)
    assert float(mu) == pytest.approx(m * sigma, rel=1e-9, abs=1e-9 * sigma)
    assert float(back) == pytest.approx(sigma, rel=1e-10)
    assert float(norm) == pytest.approx(float(distance.normalisation(m * sigma, sigma)), rel=1e-8)


@given(st.floats(1e-3, 1e5), st.floats(1e-4, 0.577))
def test_parameters_reproduce_the_moments_they_were_made_from(mean: float, share: float) -> None:
    mu, sigma, _ = distance.parameters_from_moments(mean, mean * share)
    got_mean, got_sd = distance.moments(mu, sigma)
    assert float(got_mean) == pytest.approx(mean, rel=1e-10)
    assert float(got_sd) == pytest.approx(mean * share, rel=1e-7)


@pytest.mark.parametrize(
    ("mean", "sd"),
    [(10.0, 5.8), (10.0, 0.0), (0.0, 1.0), (-3.0, 1.0), (np.nan, 1.0), (3.0, np.inf)],
)
def test_impossible_moments_mark_a_direction_without_distance(mean: float, sd: float) -> None:
    # A gamma distribution of shape 3 is the broadest: sd/mean = 1/√3 = 0.577.
    mu, sigma, norm = distance.parameters_from_moments(mean, sd)
    assert (float(mu), float(sigma), float(norm)) == (np.inf, 1.0, 0.0)
    assert not distance.has_distance(mu, sigma, norm)


def test_quantiles_against_a_root_of_fifty_digit_arithmetic() -> None:
    for m, level in ((-8.0, 1e-6), (-1.0, 0.5), (4.0, 0.05), (30.0, 0.95), (50.0, 1 - 1e-6)):
        got = float(distance.quantile(level, m * SIGMA, SIGMA))
        with mp.workdps(60):
            root = mp.findroot(
                lambda r, m=m, level=level: exact_probability(0.0, r, m * SIGMA, SIGMA) - level, got
            )
        assert got == pytest.approx(float(root), rel=1e-11)


@given(st.floats(1e-9, 1 - 1e-9), st.floats(-30.0, 60.0))
def test_quantile_is_the_inverse(level: float, m: float) -> None:
    value = distance.quantile(level, m * SIGMA, SIGMA)
    assert float(distance.cdf(value, m * SIGMA, SIGMA)) == pytest.approx(level, rel=1e-9)


def test_quantiles_at_and_beyond_the_ends() -> None:
    got = distance.quantile([0.0, 1.0, -0.1, 1.1, np.nan], 30.0, 10.0)
    np.testing.assert_array_equal(got, [0.0, np.inf, np.nan, np.nan, np.nan])


def test_ends_of_the_range() -> None:
    m = np.array([-300.0, -5.0, 0.0, 5.0, 500.0])
    np.testing.assert_array_equal(distance.cdf(0.0, m, 1.0), 0.0)
    np.testing.assert_array_equal(distance.cdf(-7.0, m, 1.0), 0.0)
    np.testing.assert_allclose(distance.cdf(np.inf, m, 1.0), 1.0, rtol=1e-14)
    np.testing.assert_array_equal(distance.survival(np.inf, m, 1.0), 0.0)
    np.testing.assert_allclose(distance.survival(0.0, m, 1.0), 1.0, rtol=1e-14)
    np.testing.assert_array_equal(distance.interval_probability(3.0, 2.0, m, 1.0), 0.0)


BAD = [(np.inf, 1.0), (-np.inf, 1.0), (np.nan, 1.0), (5.0, 0.0), (5.0, -1.0), (5.0, np.nan)]


@pytest.mark.parametrize(("mu", "sigma"), BAD)
def test_without_parameters_there_is_no_number(mu: float, sigma: float) -> None:
    assert not distance.has_distance(mu, sigma, 1.0)
    numbers = [
        distance.cdf(1.0, mu, sigma),
        distance.survival(1.0, mu, sigma),
        distance.density(1.0, mu, sigma),
        distance.quantile(0.5, mu, sigma),
        distance.normalisation(mu, sigma),
        distance.normalisation_error(mu, sigma, 1.0),
        *distance.moments(mu, sigma),
        *distance.moments_beyond(1.0, mu, sigma),
    ]
    assert np.isnan(numbers).all()


def test_the_norm_of_a_file_marks_and_is_checked() -> None:
    np.testing.assert_array_equal(
        distance.has_distance(30.0, 10.0, [1e-3, 0.0, -1.0, np.nan, np.inf]),
        [True, False, False, False, False],
    )
    norm = distance.normalisation(30.0, 10.0)
    assert distance.normalisation_error(30.0, 10.0, 1.001 * norm) == pytest.approx(1e-3)


@pytest.fixture
def sky() -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(11)
    weight, mu = rng.uniform(0, 1, 60), rng.normal(90.0, 60.0, 60)
    sigma, norm = rng.uniform(10.0, 40.0, 60), np.ones(60)
    mu[3], norm[17] = np.inf, 0.0
    return weight, mu, sigma, norm


def test_the_sky_is_the_weighted_sum_of_its_directions(sky: tuple[np.ndarray, ...]) -> None:
    weight, mu, sigma, _ = sky
    keep = np.delete(np.arange(60), [3, 17])
    share = weight[keep] / weight[keep].sum()
    # Draws from each direction by its quantiles: the sky's mean, spread and share below.
    grid = (np.arange(2000) + 0.5) / 2000
    draws = distance.quantile(grid, mu[keep, None], sigma[keep, None])
    mean, sd = distance.marginal_moments(*sky)
    assert mean == pytest.approx(share @ draws.mean(axis=1), rel=1e-4)
    second = share @ (draws**2).mean(axis=1)
    assert sd == pytest.approx(np.sqrt(second - mean**2), rel=2e-3)
    values = np.array([[20.0, 80.0], [150.0, 400.0]])
    below = np.array([[share @ (draws <= v).mean(axis=1) for v in row] for row in values])
    np.testing.assert_allclose(distance.marginal_cdf(values, *sky), below, atol=5e-4)


def test_the_density_of_the_sky_integrates_to_its_cumulative(sky: tuple[np.ndarray, ...]) -> None:
    area, _ = quad(lambda r: float(distance.marginal_density(r, *sky)), 0, 120, epsabs=1e-9)
    assert area == pytest.approx(float(distance.marginal_cdf(120.0, *sky)), abs=1e-8)


def test_quantiles_of_the_sky(sky: tuple[np.ndarray, ...]) -> None:
    levels = np.array([1e-6, 0.05, 0.5, 0.95, 1 - 1e-9])
    values = distance.marginal_quantile(levels, *sky)
    np.testing.assert_allclose(distance.marginal_cdf(values, *sky), levels, rtol=1e-8)
    assert np.isnan(distance.marginal_quantile([0.0, 1.0, np.nan], *sky)).all()


def test_a_sky_without_distance_has_no_numbers() -> None:
    nowhere = ([0.5, 0.5], [np.inf, 3.0], [1.0, 1.0], [0.0, 0.0])
    assert np.isnan(distance.marginal_cdf([1.0, 2.0], *nowhere)).all()
    assert np.isnan(distance.marginal_density(1.0, *nowhere))
    assert np.isnan(distance.marginal_quantile(0.5, *nowhere))
    assert np.isnan(distance.marginal_moments(*nowhere)).all()
