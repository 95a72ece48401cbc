"""Volumes: shells within a solid angle, and the smallest volume of a probability.

The credible volume is solved for on the closed forms of `skytally.distance`:
no voxels, hence no grid to choose and nothing lost between its points.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.optimize import brentq

from skytally.distance import has_distance
from skytally.distance_integrals import (
    Floats,
    Scaled,
    broadcast,
    integral,
    relative,
    whole_integral,
)

__all__ = ["CredibleVolume", "credible_volume", "shell_volume"]


def shell_volume(solid_angle_sr: ArrayLike, low: ArrayLike, high: ArrayLike) -> Floats:
    """Volume between two distances within a solid angle, Ω (high³ − low³)/3.

    Parameters
    ----------
    solid_angle_sr, low, high : array_like
        Steradians and distances; they broadcast. An interval with high ≤ low
        has volume 0, so a reach cuts one by ``np.minimum(high, reach)``.
    """
    solid, low, high = broadcast(solid_angle_sr, low, high)
    return solid * np.maximum(high**3 - low**3, 0.0) / 3.0


@dataclass(frozen=True, eq=False)
class CredibleVolume:
    """The smallest volume that holds a given probability.

    Attributes
    ----------
    level : float
        Share of *all* the map's probability, that without distance included.
    probability : float
        What the volume holds, equal to level × all to rounding.
    threshold : float
        Least probability per unit volume inside; can be 0 where it is below
        the least double.
    volume : float
        In the cube of the distance unit.
    r_low, r_high : float64 arrays, shape (n,)
        The part of each direction inside; both 0 where there is none.
    """

    level: float
    probability: float
    threshold: float
    volume: float
    r_low: Floats
    r_high: Floats


def credible_volume(
    level: float,
    density_per_sr: ArrayLike,
    solid_angle_sr: ArrayLike,
    mu: ArrayLike,
    sigma: ArrayLike,
    norm: ArrayLike,
) -> CredibleVolume | None:
    """Find the smallest volume holding a level of all the map's probability.

    The probability per unit volume is ρ p(r)/r² = ρ N φ((r−μ)/σ)/σ, so what
    lies above a threshold is one interval of r in each direction, cut at 0.

    Parameters
    ----------
    level : float
        In (0, 1).
    density_per_sr, solid_angle_sr : array_like, shape (n,)
        Probability per steradian and size of each direction.
    mu, sigma, norm : array_like, shape (n,)
        Parameters of the file, norm as in `has_distance`.

    Returns
    -------
    CredibleVolume or None
        None where the directions with distance hold no more than the level.

    Raises
    ------
    ValueError
        If the level is not in (0, 1).
    """
    if not 0.0 < level < 1.0:
        raise ValueError(f"a credible level lies between 0 and 1, not at {level}")
    density_per_sr, solid, mu, sigma, norm = broadcast(
        density_per_sr, solid_angle_sr, mu, sigma, norm
    )
    held = density_per_sr * solid
    target = level * float(held.sum())
    good = np.flatnonzero(has_distance(mu, sigma, norm) & (held > 0))
    if float(held[good].sum()) <= target * (1.0 + 1e-9):
        return None
    shells = _Shells.of(density_per_sr[good], held[good], mu[good], sigma[good])
    threshold = shells.solve(target)
    low, high = shells.intervals(threshold)
    r_low, r_high = np.zeros(held.shape), np.zeros(held.shape)
    r_low[good], r_high[good] = low * sigma[good], high * sigma[good]
    return CredibleVolume(
        level,
        shells.probability(threshold),
        float(np.exp(threshold)),
        float(shell_volume(solid, r_low, r_high).sum()),
        r_low,
        r_high,
    )


@dataclass(frozen=True, eq=False)
class _Shells:
    """What each direction holds above a threshold of ln(probability per volume).

    ``peak`` is the greatest value of that in a direction: at μ, or at 0 where
    μ < 0.
    """

    held: Floats
    m: Floats
    total: Scaled
    peak: Floats

    @classmethod
    def of(cls, density_per_sr: Floats, held: Floats, mu: Floats, sigma: Floats) -> _Shells:
        m = mu / sigma
        total = whole_integral(m)
        below = np.minimum(m, 0.0)
        # The sum of exponents first: for m far below zero they are large and cancel.
        exponent = total[1] + 0.5 * below * below
        scale = density_per_sr / (np.sqrt(2.0 * np.pi) * total[0])
        return cls(held, m, total, np.log(scale) - 3.0 * np.log(sigma) - exponent)

    def intervals(self, threshold: float) -> tuple[Floats, Floats]:
        """Interval of t in each direction, (0, 0) where it has none."""
        drop = 2.0 * np.maximum(self.peak - threshold, 0.0)
        below = np.maximum(-self.m, 0.0)
        half = np.sqrt(below * below + drop)
        low = np.maximum(self.m - half, 0.0)
        with np.errstate(invalid="ignore"):
            high = np.where(self.m > 0, self.m + half, drop / (half + below))
        return np.where(drop > 0, low, 0.0), np.where(drop > 0, high, 0.0)

    def probability(self, threshold: float) -> float:
        """Probability of all the intervals."""
        low, high = self.intervals(threshold)
        inside = np.flatnonzero(high > low)
        part = integral(2, low[inside], high[inside], self.m[inside])
        total = self.total[0][inside], self.total[1][inside]
        return float(self.held[inside] @ relative(part, total))

    def above(self, threshold: float) -> _Shells:
        """Only the directions that have an interval."""
        some = np.flatnonzero(self.peak > threshold)
        total = self.total[0][some], self.total[1][some]
        return _Shells(self.held[some], self.m[some], total, self.peak[some])

    def solve(self, target: float) -> float:
        """Threshold at which the intervals hold a probability."""
        step = 1.0
        upper = float(self.peak.max())
        lower = upper - step
        while self.probability(lower) < target:
            step *= 2.0
            upper, lower = lower, lower - step
        few = self.above(lower)
        return float(brentq(lambda x: few.probability(x) - target, lower, upper, xtol=1e-12))
