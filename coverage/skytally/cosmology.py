"""Luminosity distance to redshift, comoving volume and flat-spectrum reach.

A cosmology is evaluated once on a grid of redshifts; splines through smooth
ratios then answer for arrays of any size.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from astropy import cosmology as astropy_cosmology
from astropy import units as u
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import CubicSpline

from skytally.errors import InputError

__all__ = ["DEFAULT_COSMOLOGY", "Cosmology", "known_cosmologies"]

Floats = NDArray[np.float64]

DEFAULT_COSMOLOGY = "Planck18"
_REDSHIFT_MAX = 1000.0
_KNOTS = 1200


def known_cosmologies() -> tuple[str, ...]:
    """Names that astropy knows."""
    return tuple(astropy_cosmology.available)


@dataclass(frozen=True, eq=False)
class Cosmology:
    """A cosmology as functions of the luminosity distance.

    Relative errors are below 1e-7 up to redshift 1000. All
    functions return NaN for what is negative, missing or beyond redshift 1000.

    Attributes
    ----------
    name : str
        As astropy calls it.
    limit_mpc : float
        Luminosity distance of redshift 1000.
    """

    name: str
    limit_mpc: float
    _hubble_distance_mpc: float
    _log_redshift: CubicSpline
    _log_volume: CubicSpline
    _log_reach: CubicSpline
    _reach_limit_mpc: float

    @classmethod
    def named(cls, name: str = DEFAULT_COSMOLOGY) -> Cosmology:
        """Return one of astropy's cosmologies.

        Raises
        ------
        InputError
            If astropy has none of this name.
        """
        if name not in known_cosmologies():
            raise InputError(
                f"Found cosmology {name!r}, expected one that astropy knows",
                remedy=f"Use one of these names: {', '.join(known_cosmologies())}.",
            )
        return _tabulate(name)

    def redshift(self, distance_mpc: ArrayLike) -> Floats:
        """Redshift at a luminosity distance (Mpc), any shape."""
        distance = self._inside(distance_mpc, self.limit_mpc)
        ratio = np.exp(self._log_redshift(self._position(distance)))
        return np.asarray(distance / self._hubble_distance_mpc * ratio)

    def comoving_volume_per_sr(self, distance_mpc: ArrayLike) -> Floats:
        """Comoving volume (Mpc³) per steradian out to a luminosity distance (Mpc).

        An interval of distances holds the difference of its ends.
        """
        distance = self._inside(distance_mpc, self.limit_mpc)
        return np.asarray(distance**3 * np.exp(self._log_volume(self._position(distance))))

    def flat_spectrum_reach(self, reach_mpc: ArrayLike) -> Floats:
        """Reach (Mpc) with the K-correction of a flat spectrum, K = −2.5 log₁₀(1+z).

        Solves d = reach · √(1+z(d)): the source is seen farther, since a
        constant flux per unit frequency is squeezed into the band.

        Parameters
        ----------
        reach_mpc : array_like
            Luminosity distance that was found with K = 0.
        """
        reach = self._inside(reach_mpc, self._reach_limit_mpc)
        return np.asarray(reach * np.exp(self._log_reach(self._position(reach))))

    def _position(self, distance_mpc: Floats) -> Floats:
        return np.asarray(np.log1p(distance_mpc / self._hubble_distance_mpc))

    @staticmethod
    def _inside(distance_mpc: ArrayLike, limit_mpc: float) -> Floats:
        distance = np.asarray(distance_mpc, dtype=np.float64)
        return np.where((distance >= 0) & (distance <= limit_mpc), distance, np.nan)


@lru_cache(maxsize=8)
def _tabulate(name: str) -> Cosmology:
    model = getattr(astropy_cosmology, name)
    z = np.expm1(np.linspace(0.0, np.log1p(_REDSHIFT_MAX), _KNOTS))[1:]
    hubble = float(model.hubble_distance.to_value(u.Mpc))
    luminosity = model.luminosity_distance(z).to_value(u.Mpc)
    volume = model.comoving_volume(z).to_value(u.Mpc**3) / (4.0 * np.pi)
    shrunk = luminosity / np.sqrt(1.0 + z)

    def spline(at: Floats, ratio: Floats, at_zero: float) -> CubicSpline:
        # The ratios are smooth down to d = 0, where Hubble's law gives their limits,
        # and their logarithms nearly straight in this variable.
        position = np.concatenate(([0.0], np.log1p(at / hubble)))
        return CubicSpline(position, np.log(np.concatenate(([at_zero], ratio))))

    return Cosmology(
        name,
        float(luminosity[-1]),
        hubble,
        spline(luminosity, z * hubble / luminosity, 1.0),
        spline(luminosity, volume / luminosity**3, 1.0 / 3.0),
        spline(shrunk, luminosity / shrunk, 1.0),
        float(shrunk[-1]),
    )
