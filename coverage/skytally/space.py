"""One map version in three dimensions: distances per cell and the credible volumes."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.cosmology import Cosmology
from skytally.distance import cdf, has_distance, marginal_moments, moments
from skytally.skymap import Measure, SkyMap
from skytally.spans import UNIT_SR, Ints
from skytally.volume import CredibleVolume, credible_volume, shell_volume

__all__ = ["Space"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# So many σ beyond μ the distribution's rest is below double precision.
_SURE_SIGMA = 9.0


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

    def within(self, cell: Ints, reach_mpc: Floats) -> Floats:
        """Probability that something in a cell lies within a reach; 0 without distance.

        Parameters
        ----------
        cell : int64 array, shape (n,)
            Cell of the map; −1, off the map, gives 0.
        reach_mpc : float64 array, shape (n,)
            Luminosity distance.
        """
        value = np.zeros(cell.size)
        mu, sigma = self.mu_mpc[cell], self.sigma_mpc[cell]
        known = np.isfinite(mu) & (cell >= 0) & (reach_mpc > 0)
        sure = known & (reach_mpc > np.maximum(mu, 0.0) + _SURE_SIGMA * sigma)
        value[sure] = 1.0
        ask = known & ~sure
        value[ask] = cdf(reach_mpc[ask], mu[ask], sigma[ask])
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

    def comoving_shell(self, solid_angle_sr: Floats, low: Floats, high: Floats) -> Floats:
        """Comoving volume (Mpc³) between two luminosity distances (Mpc), shape (n,)."""
        # A reach beyond the cosmology's table, redshift 1000, adds nothing to speak of.
        high = np.minimum(high, 0.999 * self.cosmology.limit_mpc)
        per_sr = self.cosmology.comoving_volume_per_sr
        return solid_angle_sr * np.where(high > low, per_sr(high) - per_sr(low), 0.0)

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

    def credible_shell(
        self, cell: Ints, solid_angle_sr: Floats, reach_mpc: Floats
    ) -> tuple[Floats, Floats]:
        """Part of the 90 % volume in pieces of cells out to a reach, both kinds of Mpc³.

        Parameters
        ----------
        cell, solid_angle_sr, reach_mpc : arrays, shape (n,)
            Cell of the map (−1 gives 0), size of the piece, luminosity distance.
        """
        found = self.credible(0.9)
        if found is None:
            return np.zeros(cell.size), np.zeros(cell.size)
        low = np.where(cell >= 0, found.r_low[cell], 0.0)
        high = np.where(cell >= 0, np.minimum(found.r_high[cell], reach_mpc), 0.0)
        return (
            shell_volume(solid_angle_sr, low, high),
            self.comoving_shell(solid_angle_sr, low, high),
        )
