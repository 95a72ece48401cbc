"""One map version in three dimensions: distances per cell and the credible volumes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from skytally.cosmology import Cosmology
from skytally.distance import cdf, has_distance, marginal_moments, moments, moments_beyond
from skytally.distance_integrals import whole_integral
from skytally.grouping import AnyInts
from skytally.skymap import Measure, SkyMap
from skytally.spans import UNIT_SR, Ints
from skytally.volume import CredibleVolume, credible_volume, shell_volume

__all__ = ["Distances", "Space", "blocks"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# So many σ beyond μ the distribution's rest is below double precision.
_SURE_SIGMA = 9.0
# With μ/σ below this the short form of the distribution loses digits.
_LEAST_M = -3.0
# A distance in place of an infinite one.
_FARTHEST_MPC = 1e30
# So few numbers at once that all that is made of them stays in the cache.
_AT_ONCE = 8192


def blocks(count: int) -> Iterator[slice]:
    """Cut so many rows into runs that fit the cache."""
    return (slice(first, first + _AT_ONCE) for first in range(0, count, _AT_ONCE))


@dataclass(frozen=True, eq=False)
class Distances:
    """Distance distributions of n rows, ready to be asked often.

    With t = r/σ, m = μ/σ and b = t − m the chance of lying beyond r is
    [(m²+1) Φ(−b) + (b+2m) φ(b)] / W, W the same at t = 0.

    Attributes
    ----------
    per_sigma, m, tail, log_edge : float64 arrays, shape (n,)
        1/σ, m, (m²+1)/W and ln(1/(√2π W)); without distance 0 and what else
        gives a chance of 0.
    """

    per_sigma: Floats
    m: Floats
    tail: Floats
    log_edge: Floats

    @classmethod
    def of(cls, mu: Floats, sigma: Floats) -> Distances:
        """Prepare distributions from their parameters, NaN without distance."""
        known = np.isfinite(mu)
        m = np.where(known, mu, 0.0) / np.where(known, sigma, 1.0)
        value, exponent = whole_integral(m)
        return cls(
            np.where(known, 1.0, 0.0) / np.where(known, sigma, 1.0),
            m,
            np.where(known & (m >= _LEAST_M), (m * m + 1.0) / value, 2.0),
            np.where(known, -np.log(np.sqrt(2.0 * np.pi) * value) - exponent, -np.inf),
        )

    def take(self, rows: AnyInts) -> Distances:
        """Return the distributions of the rows named."""
        rows = np.asarray(rows, dtype=np.intp)
        return Distances(self.per_sigma[rows], self.m[rows], self.tail[rows], self.log_edge[rows])

    @cached_property
    def hard(self) -> tuple[Ints, Floats, Floats]:
        """Rows to which the short form does not apply, and their μ and σ."""
        rows = np.flatnonzero(self.m < _LEAST_M)
        sigma = 1.0 / self.per_sigma[rows]
        return rows, self.m[rows] * sigma, sigma

    @cached_property
    def sure_mpc(self) -> Floats:
        """Distance beyond which nothing lies that double precision would show; (n,)."""
        farthest = np.maximum(self.m, 0.0) + _SURE_SIGMA
        return np.divide(farthest, self.per_sigma, np.zeros(self.m.size), where=self.per_sigma > 0)

    def within(self, reach_mpc: Floats) -> Floats:
        """Chance of lying within a finite reach > 0, shape (n,); 0 without distance."""
        b = reach_mpc * self.per_sigma
        b -= self.m
        edge = b * b
        edge *= -0.5
        edge += self.log_edge
        np.exp(edge, out=edge)
        edge *= b + 2.0 * self.m
        chance = ndtr(-b)
        chance *= self.tail
        chance += edge
        np.subtract(1.0, chance, out=chance)
        rows, *parameters = self.hard
        if rows.size:
            reach = np.broadcast_to(reach_mpc, chance.shape)[rows]
            chance[rows] = cdf(reach, *parameters)
        return chance

    def moments_beyond(self, distance_mpc: Floats) -> Floats:
        """Integrals of p, r p and r² p beyond a distance ≥ 0, (3, n); 1, 0, 0 without distance.

        Of t^k φ(t−m), k = 2, 3, 4, by parts, as in `skytally.distance_integrals`.
        """
        m, m2 = self.m, self.m * self.m
        t = np.clip(distance_mpc, 0.0, _FARTHEST_MPC) * self.per_sigma
        b = t - m
        below = self.tail / (m2 + 1.0) * ndtr(-b)
        edge = np.exp(self.log_edge - 0.5 * b * b)
        sigma = np.divide(1.0, self.per_sigma, np.zeros(m.size), where=self.per_sigma > 0)
        found = np.stack(
            [
                (m2 + 1.0) * below + (t + m) * edge,
                (m * (m2 + 3.0) * below + (t * (t + m) + m2 + 2.0) * edge) * sigma,
                (
                    (m2 * (m2 + 6.0) + 3.0) * below
                    + (t * (t * (t + m) + m2 + 3.0) + m * (m2 + 5.0)) * edge
                )
                * sigma**2,
            ]
        )
        rows, *parameters = self.hard
        if rows.size:
            distance = np.broadcast_to(distance_mpc, m.shape)[rows]
            found[:, rows] = moments_beyond(distance, *parameters)
        return found

    def density(self, distance_mpc: Floats) -> Floats:
        """Probability per Mpc at a distance ≥ 0; 0 without distance."""
        t = distance_mpc * self.per_sigma
        b = t - self.m
        return np.asarray(self.per_sigma * t * t * np.exp(self.log_edge - 0.5 * b * b))


@dataclass(frozen=True, eq=False)
class Space:
    """A map version that carries distances.

    Attributes
    ----------
    skymap : SkyMap
        With its distance layer.
    cosmology : Cosmology
        For redshifts and comoving volumes.
    mu_mpc, sigma_mpc : float64 arrays, shape (cells,)
        Parameters of the cells; NaN where a cell is without distance.
    """

    skymap: SkyMap
    cosmology: Cosmology
    mu_mpc: Floats
    sigma_mpc: Floats

    @classmethod
    def of(cls, skymap: SkyMap, cosmology: Cosmology) -> Space | None:
        """Return the map's third dimension, None if no cell has a distance."""
        layer = skymap.distance
        if layer is None:
            return None
        good = has_distance(layer.mu_mpc, layer.sigma_mpc, layer.norm_per_mpc2)
        good &= skymap.density_per_sr > 0
        if not good.any():
            return None
        return cls(
            skymap,
            cosmology,
            np.where(good, layer.mu_mpc, np.nan),
            np.where(good, layer.sigma_mpc, np.nan),
        )

    @property
    def known(self) -> Bools:
        """Which cells have a distance, shape (cells,)."""
        return np.isfinite(self.mu_mpc)

    @cached_property
    def solid_angle_sr(self) -> Floats:
        """Size of each cell, shape (cells,)."""
        return (self.skymap.stops - self.skymap.starts).astype(np.float64) * UNIT_SR

    @cached_property
    def probability(self) -> Floats:
        """Probability of each cell, shape (cells,)."""
        return self.skymap.probability.amount

    @cached_property
    def probability_without(self) -> float:
        """Probability of all cells without distance."""
        return float(self.probability[~self.known].sum())

    @cached_property
    def moments(self) -> tuple[float, float]:
        """Mean and standard deviation of the distance over the sky, Mpc."""
        norm = np.where(self.known, 1.0, 0.0)
        return marginal_moments(self.probability, self.mu_mpc, self.sigma_mpc, norm)

    @cached_property
    def extent_mpc(self) -> tuple[float, float]:
        """Distances between which all but a few millionths of the probability lie."""
        mu, sigma = self.mu_mpc[self.known], self.sigma_mpc[self.known]
        mean, _ = moments(mu, sigma)
        # Near 0 the probability grows as r³ or faster: at a hundredth of the mean it is 5e-6.
        return 0.01 * float(mean.min()), float(np.max(np.maximum(mu, 0.0) + _SURE_SIGMA * sigma))

    @cached_property
    def least_spread(self) -> float:
        """Standard deviation of the distance over its mean, that of the narrowest hundredth."""
        mean, sd = moments(self.mu_mpc[self.known], self.sigma_mpc[self.known])
        return float(np.quantile(sd / mean, 0.01))

    @cached_property
    def distances(self) -> Distances:
        """Distributions of the cells, and after the last that of no cell."""
        return Distances.of(np.append(self.mu_mpc, np.nan), np.append(self.sigma_mpc, np.nan))

    def within(self, cell: AnyInts, reach_mpc: Floats) -> Floats:
        """Probability that something in a cell lies within a reach; 0 without distance.

        Parameters
        ----------
        cell : int64 array, shape (n,)
            Cell of the map; −1, off the map, gives 0.
        reach_mpc : float64 array, shape (n,)
            Luminosity distance.
        """
        value = np.empty(cell.size)
        reach = np.clip(reach_mpc, 0.0, _FARTHEST_MPC)
        for block in blocks(cell.size):
            value[block] = self.distances.take(cell[block]).within(reach[block])
        value[reach == 0] = 0.0
        return value

    def credible(self, level: float) -> CredibleVolume | None:
        """Smallest volume (Mpc³ of luminosity distance) that holds a level of all probability."""
        return {0.5: self._credible_50, 0.9: self._credible_90}[level]

    @cached_property
    def _credible_50(self) -> CredibleVolume | None:
        return self._solve(0.5)

    @cached_property
    def _credible_90(self) -> CredibleVolume | None:
        return self._solve(0.9)

    def _solve(self, level: float) -> CredibleVolume | None:
        layer = self.skymap.distance
        assert layer is not None  # `of` returns None without it
        return credible_volume(
            level,
            self.skymap.density_per_sr,
            self.solid_angle_sr,
            self.mu_mpc,
            self.sigma_mpc,
            layer.norm_per_mpc2,
        )

    def comoving_per_sr(self, distance_mpc: Floats) -> Floats:
        """Comoving volume (Mpc³) per steradian out to a luminosity distance (Mpc), (n,)."""
        # A reach beyond the cosmology's table, redshift 1000, adds nothing to speak of.
        return self.cosmology.comoving_volume_per_sr(
            np.minimum(distance_mpc, 0.999 * self.cosmology.limit_mpc)
        )

    def comoving_shell(self, solid_angle_sr: Floats, low: Floats, high: Floats) -> Floats:
        """Comoving volume (Mpc³) between two luminosity distances (Mpc), shape (n,)."""
        between = self.comoving_per_sr(high) - self.comoving_per_sr(low)
        return solid_angle_sr * np.maximum(between, 0.0)

    def credible_volumes(self, level: float) -> tuple[float, float] | None:
        """Credible volume in Mpc³ of luminosity distance and in comoving Mpc³."""
        found = self.credible(level)
        if found is None:
            return None
        comoving = self.comoving_shell(self.solid_angle_sr, found.r_low, found.r_high)
        return found.volume, float(comoving.sum())

    def credible_densities(self) -> tuple[Measure, Measure] | None:
        """90 % volume per steradian as measures, Mpc³ and comoving Mpc³; None without one."""
        found = self.credible(0.9)
        if found is None:
            return None
        one = np.ones(found.r_low.size)
        volumes = (
            shell_volume(one, found.r_low, found.r_high),
            self.comoving_shell(one, found.r_low, found.r_high),
        )
        starts, stops = self.skymap.starts, self.skymap.stops
        return Measure(starts, stops, volumes[0]), Measure(starts, stops, volumes[1])

    @cached_property
    def _shell_90(self) -> Floats:
        """Ends of each cell's part of the 90 % volume as volumes per steradian; (n + 1, 4).

        Near and far end in Mpc³, then in comoving Mpc³. The last row, that of no
        cell, is 0, as are all without such a volume.
        """
        found = self.credible(0.9)
        ends = np.zeros((self.mu_mpc.size + 1, 4))
        if found is not None:
            for column, distance in enumerate((found.r_low, found.r_high)):
                ends[:-1, column] = distance**3 / 3
                ends[:-1, 2 + column] = self.comoving_per_sr(distance)
        return ends

    def credible_shell(
        self, cell: AnyInts, solid_angle_sr: Floats, volume_per_sr: Floats, comoving_per_sr: Floats
    ) -> tuple[float, float]:
        """Part of the 90 % volume in pieces of cells out to a reach, both kinds of Mpc³.

        Parameters
        ----------
        cell, solid_angle_sr : arrays, shape (n,)
            Cell of the map (−1 gives 0) and size of each piece.
        volume_per_sr, comoving_per_sr : arrays, shape (n,)
            Volume out to the reach, d³/3, and what `comoving_per_sr` gives for it.
        """
        total = np.zeros(2)
        for block in blocks(cell.size):
            near, far, near_comoving, far_comoving = self._shell_90[cell[block]].T
            inside = np.minimum(far, volume_per_sr[block]) - near
            total[0] += solid_angle_sr[block] @ np.maximum(inside, 0.0)
            inside = np.minimum(far_comoving, comoving_per_sr[block]) - near_comoving
            total[1] += solid_angle_sr[block] @ np.maximum(inside, 0.0)
        return float(total[0]), float(total[1])
