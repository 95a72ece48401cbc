"""Closed forms of the distance distribution along a direction, and over the sky.

Along a direction the published form (ApJL 829 L15, 2016, DOI
10.3847/2041-8205/829/1/L15) is p(r) = N r² φ((r−μ)/σ)/σ for r ≥ 0, φ the unit
normal density. N here is always the value that makes p integrate to one; the
rounded N of a file only tells which directions have no distance, and
`normalisation_error` says how far the two are apart. Distances may be in any
one unit, Mpc throughout skytally.

Over the sky each direction counts with its probability.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq
from scipy.special import ndtri

from skytally.distance_integrals import (
    FAR,
    LEAST_RATIO,
    Floats,
    Scaled,
    broadcast,
    central_moments,
    integral,
    position_of_ratio,
    relative,
    unit_density,
    whole_integral,
)

__all__ = [
    "cdf",
    "density",
    "has_distance",
    "interval_probability",
    "marginal_cdf",
    "marginal_density",
    "marginal_moments",
    "marginal_quantile",
    "moments",
    "moments_beyond",
    "normalisation",
    "normalisation_error",
    "parameters_from_moments",
    "quantile",
    "survival",
]

Bools = NDArray[np.bool_]


def _proper(mu: Floats, sigma: Floats) -> Bools:
    return np.isfinite(mu) & np.isfinite(sigma) & (sigma > 0)


def has_distance(mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike) -> Bools:
    """Whether each direction has a distance distribution at all.

    Published maps mark directions without one by μ = ±∞ or N = 0; a σ that is
    not a positive number, or an N that is not finite, says no more.

    Parameters
    ----------
    mu, sigma, norm : array_like
        Parameters of the file; they broadcast.
    """
    mu, sigma, norm = broadcast(mu, sigma, norm)
    return _proper(mu, sigma) & np.isfinite(norm) & (norm > 0)


def normalisation(mu: ArrayLike, sigma: ArrayLike) -> Floats:
    """N that makes the density integrate to one, in 1/unit².

    Parameters
    ----------
    mu, sigma : array_like
        Parameters; they broadcast. NaN is returned where μ is not finite or σ
        is not a positive number; inf where μ/σ is below about −38, as N then
        exceeds double precision (the other functions do not need it).
    """
    mu, sigma = broadcast(mu, sigma)
    result = np.full(mu.shape, np.nan)
    good = _proper(mu, sigma)
    value, exponent = whole_integral(mu[good] / sigma[good])
    with np.errstate(over="ignore"):
        result[good] = np.exp(-exponent) / (value * sigma[good] ** 2)
    return result


def normalisation_error(mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike) -> Floats:
    """Relative excess of a file's N over the exact one; NaN without distance."""
    mu, sigma, norm = broadcast(mu, sigma, norm)
    result = np.full(mu.shape, np.nan)
    good = has_distance(mu, sigma, norm)
    result[good] = norm[good] / normalisation(mu[good], sigma[good]) - 1.0
    return result


def density(distance: ArrayLike, mu: ArrayLike, sigma: ArrayLike) -> Floats:
    """Probability per unit distance, p(r); 0 for r < 0.

    Parameters
    ----------
    distance, mu, sigma : array_like
        Distance and parameters, in one unit; they broadcast. NaN is returned
        where μ is not finite or σ is not a positive number.
    """
    distance, mu, sigma = broadcast(distance, mu, sigma)
    result = np.full(mu.shape, np.nan)
    good = _proper(mu, sigma)
    r, s, m = distance[good], sigma[good], mu[good] / sigma[good]
    result[good] = unit_density(np.maximum(r / s, 0.0), m, whole_integral(m)) / s
    return result


def interval_probability(
    low: ArrayLike, high: ArrayLike, mu: ArrayLike, sigma: ArrayLike
) -> Floats:
    """Probability that the distance lies between two values.

    Relative error below 1e-10 wherever the result is above 1e-12, for μ/σ from
    −10 to 50 (held against 50-digit arithmetic).

    Parameters
    ----------
    low, high, mu, sigma : array_like
        Limits (below 0 counts as 0, inf is allowed) and parameters, in one
        unit; they broadcast. An interval with high ≤ low has probability 0.
        NaN is returned where μ is not finite or σ is not a positive number.
    """
    low, high, mu, sigma = broadcast(low, high, mu, sigma)
    result = np.full(mu.shape, np.nan)
    good = _proper(mu, sigma)
    s, m = sigma[good], mu[good] / sigma[good]
    start = np.maximum(low[good] / s, 0.0)
    part = integral(2, start, np.maximum(high[good] / s, start), m)
    result[good] = relative(part, whole_integral(m))
    return result


def cdf(distance: ArrayLike, mu: ArrayLike, sigma: ArrayLike) -> Floats:
    """Probability F(R) that the distance is at most R; as `interval_probability`."""
    return interval_probability(0.0, distance, mu, sigma)


def survival(distance: ArrayLike, mu: ArrayLike, sigma: ArrayLike) -> Floats:
    """Probability 1 − F(R) that the distance exceeds R, without cancellation."""
    return interval_probability(distance, np.inf, mu, sigma)


def quantile(probability: ArrayLike, mu: ArrayLike, sigma: ArrayLike) -> Floats:
    """Distance below which a probability lies, the inverse of `cdf`.

    Parameters
    ----------
    probability : array_like
        In [0, 1]; NaN is returned elsewhere.
    mu, sigma : array_like
        Parameters; all three broadcast.
    """
    probability, mu, sigma = broadcast(probability, mu, sigma)
    result = np.full(mu.shape, np.nan)
    good = _proper(mu, sigma)
    result[good & (probability == 0)] = 0.0
    result[good & (probability == 1)] = np.inf
    good &= (probability > 0) & (probability < 1)
    s = sigma[good]
    result[good] = s * _quantile(probability[good], mu[good] / s)
    return result


def _quantile(q: Floats, m: Floats) -> Floats:
    """Newton's method on ln F (or ln(1−F) above the median), kept inside a bracket."""
    mean, sd, _ = central_moments(m)
    low, high = np.zeros(m.shape), np.maximum(m, 0.0) + FAR
    t = np.clip(mean + sd * ndtri(q), mean * np.minimum(np.cbrt(q), 0.5), high)
    open_ = np.arange(m.size)
    for _ in range(100):
        if open_.size == 0:
            break
        here, p, n = t[open_], q[open_], m[open_]
        total = whole_integral(n)
        lower = p <= 0.5
        part = integral(2, np.where(lower, 0.0, here), np.where(lower, here, np.inf), n)
        held = relative(part, total)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            excess = np.where(lower, 1.0, -1.0) * np.log(held / np.where(lower, p, 1.0 - p))
            step = excess * held / unit_density(here, n, total)
            guess = np.where(lower, here * np.exp(-step / here), here - step)
        low[open_] = np.where(excess < 0, here, low[open_])
        high[open_] = np.where(excess < 0, high[open_], here)
        inside = (guess > low[open_]) & (guess < high[open_])
        t[open_] = np.where(inside, guess, 0.5 * (low[open_] + high[open_]))
        open_ = open_[np.abs(t[open_] - here) > 1e-13 * here]
    return t


def moments(mu: ArrayLike, sigma: ArrayLike) -> tuple[Floats, Floats]:
    """Mean and standard deviation of the distance.

    Not μ and σ: the factor r² and the cut at zero both shift them.

    Parameters
    ----------
    mu, sigma : array_like
        Parameters; they broadcast. NaN is returned where μ is not finite or σ
        is not a positive number.
    """
    mu, sigma = broadcast(mu, sigma)
    mean, sd = np.full(mu.shape, np.nan), np.full(mu.shape, np.nan)
    good = _proper(mu, sigma)
    s = sigma[good]
    unit_mean, unit_sd, _ = central_moments(mu[good] / s)
    mean[good], sd[good] = unit_mean * s, unit_sd * s
    return mean, sd


def moments_beyond(
    distance: ArrayLike, mu: ArrayLike, sigma: ArrayLike
) -> tuple[Floats, Floats, Floats]:
    """Integrals of p, r p and r² p beyond a distance; parts of one direction add up.

    Parameters
    ----------
    distance, mu, sigma : array_like
        Lower limit (below 0 counts as 0) and parameters, in one unit; they
        broadcast. NaN is returned where μ is not finite or σ is not a positive
        number.
    """
    distance, mu, sigma = broadcast(distance, mu, sigma)
    result = np.full((3, *mu.shape), np.nan)
    good = _proper(mu, sigma)
    s, m = sigma[good], mu[good] / sigma[good]
    start, end = np.maximum(distance[good] / s, 0.0), np.full(m.shape, np.inf)
    total = whole_integral(m)
    for k in range(3):
        result[k, good] = s**k * relative(integral(2 + k, start, end, m), total)
    return result[0], result[1], result[2]


def parameters_from_moments(mean: ArrayLike, sd: ArrayLike) -> tuple[Floats, Floats, Floats]:
    """Find μ, σ and N from a mean and a standard deviation, as published with the form.

    Parameters
    ----------
    mean, sd : array_like
        Moments; they broadcast.

    Returns
    -------
    mu, sigma, norm : float64 arrays
        Where no distribution of this form has such moments (both must be
        positive and finite, with sd < mean/√3, and μ/σ comes out above −1000)
        the mark of a direction without distance: inf, 1 and 0.
    """
    mean, sd = broadcast(mean, sd)
    mu, sigma, norm = np.full(mean.shape, np.inf), np.ones(mean.shape), np.zeros(mean.shape)
    possible = np.isfinite(mean) & np.isfinite(sd) & (mean > 0) & (sd > 0)
    ratio = np.divide(mean, sd, out=np.zeros(mean.shape), where=possible)
    possible &= ratio > LEAST_RATIO
    m = position_of_ratio(ratio[possible])
    sigma[possible] = mean[possible] / central_moments(m)[0]
    mu[possible] = m * sigma[possible]
    norm[possible] = normalisation(mu[possible], sigma[possible])
    return mu, sigma, norm


@dataclass(frozen=True, eq=False)
class _Sky:
    """The directions with distance, their weights summing to one."""

    weight: Floats
    sigma: Floats
    m: Floats
    whole: Scaled

    @classmethod
    def of(cls, weight: ArrayLike, mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike) -> _Sky | None:
        weights, mu, sigma, norm = broadcast(weight, mu, sigma, norm)
        good = has_distance(mu, sigma, norm) & (weights > 0)
        if not good.any():
            return None
        m = mu[good] / sigma[good]
        return cls(weights[good] / weights[good].sum(), sigma[good], m, whole_integral(m))

    def cdf(self, distance: float) -> float:
        t = max(distance, 0.0) / self.sigma
        part = integral(2, np.zeros(t.shape), t, self.m)
        return float(self.weight @ relative(part, self.whole))

    def density(self, distance: float) -> float:
        t = max(distance, 0.0) / self.sigma
        return float((self.weight / self.sigma) @ unit_density(t, self.m, self.whole))


def _each(distance: ArrayLike, function: Callable[[float], float] | None) -> Floats:
    """Apply a scalar function to each value, NaN without one; shape as given."""
    values = np.asarray(distance, dtype=np.float64)
    if function is None:
        return np.full(values.shape, np.nan)
    return np.array([function(float(v)) for v in values.ravel()]).reshape(values.shape)


def marginal_cdf(
    distance: ArrayLike, weight: ArrayLike, mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike
) -> Floats:
    """Probability over the whole sky that the distance is at most R, where there is one.

    Parameters
    ----------
    distance : array_like
        Distances R, any shape, in the unit of μ and σ.
    weight : array_like, shape (n,)
        Probability of each direction, ≥ 0. Directions without distance are
        left out and the others weighted to a sum of one.
    mu, sigma, norm : array_like, shape (n,)
        Parameters of the file, norm as in `has_distance`.

    Returns
    -------
    float64 array
        Shape of ``distance``; NaN if no direction has a distance.
    """
    sky = _Sky.of(weight, mu, sigma, norm)
    return _each(distance, None if sky is None else sky.cdf)


def marginal_density(
    distance: ArrayLike, weight: ArrayLike, mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike
) -> Floats:
    """Probability per unit distance over the whole sky; arguments as `marginal_cdf`."""
    sky = _Sky.of(weight, mu, sigma, norm)
    return _each(distance, None if sky is None else sky.density)


def marginal_quantile(
    probability: ArrayLike, weight: ArrayLike, mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike
) -> Floats:
    """Distance below which a probability in (0, 1) of the whole sky lies; NaN elsewhere.

    The other arguments are those of `marginal_cdf`.
    """
    sky = _Sky.of(weight, mu, sigma, norm)
    if sky is None:
        return _each(probability, None)
    mean, sd, _ = central_moments(sky.m)
    ends = sky.sigma * mean

    def solve(p: float) -> float:
        if not 0 < p < 1:
            return np.nan
        # One direction's quantile would bracket; doubling from the farthest mean is enough.
        high = float(np.max(ends + sky.sigma * sd))
        while sky.cdf(high) < p:
            high *= 2.0
        return float(brentq(lambda r: sky.cdf(r) - p, 0.0, high, xtol=1e-12 * high, rtol=1e-14))

    return _each(probability, solve)


def marginal_moments(
    weight: ArrayLike, mu: ArrayLike, sigma: ArrayLike, norm: ArrayLike
) -> tuple[float, float]:
    """Mean and standard deviation of the distance over the whole sky.

    Arguments as `marginal_cdf`; NaN if no direction has a distance.
    """
    sky = _Sky.of(weight, mu, sigma, norm)
    if sky is None:
        return np.nan, np.nan
    mean, sd = (sky.sigma * value for value in central_moments(sky.m)[:2])
    average = float(sky.weight @ mean)
    return average, float(np.sqrt(sky.weight @ (sd**2 + (mean - average) ** 2)))
