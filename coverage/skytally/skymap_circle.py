"""A position with an error radius as a map version: a symmetric Gaussian on the sphere."""

from __future__ import annotations

import numpy as np
from astropy_healpix import healpix_to_xyz
from scipy.integrate import quad
from scipy.optimize import brentq

from skytally.errors import MapError
from skytally.raster import cell_radius_rad, cell_width_rad
from skytally.shapes import lonlat_to_vector
from skytally.skymap import Floats, SkyMap
from skytally.spans import UNIT_SR, Ints, cell_to_span

__all__ = ["circle_sigma_deg", "circle_skymap"]

# Probability left outside the last cells, before normalising.
_TRUNCATED = 1e-9
_SMALLEST_DEG = 1e-4
# The density is averaged over sub-cells this many orders deeper: 16 per cell.
_SUB_ORDERS = 2


def _held(radius_rad: float, sigma_rad: float) -> float:
    """Integral of exp(−θ²/2σ²) sin θ dθ/σ² from 0 to a radius."""

    def integrand(t: float) -> float:
        return float(np.exp(-t * t / 2) * np.sin(t * sigma_rad) / sigma_rad)

    # Beyond 40 σ nothing is left that a double could hold.
    return float(quad(integrand, 0.0, min(radius_rad / sigma_rad, 40.0), epsabs=1e-13)[0])


def circle_sigma_deg(radius_90_deg: float) -> float:
    """Return σ of the density ∝ exp(−θ²/2σ²) that holds 0.9 within a radius.

    θ is the angular separation from the centre and the integral runs over the
    whole sphere: ∫₀ʳ exp(−θ²/2σ²) sin θ dθ = 0.9 ∫₀^π exp(−θ²/2σ²) sin θ dθ.
    For small radii this is the Rayleigh law, r = σ √(2 ln 10).
    """
    radius = np.radians(radius_90_deg)
    flat = radius / np.sqrt(2 * np.log(10.0))

    def excess(sigma: float) -> float:
        return _held(radius, sigma) / _held(np.pi, sigma) - 0.9

    # The sphere closes in on itself, so σ lies above the flat value only at large radii.
    return float(np.degrees(brentq(excess, 0.5 * flat, 4.0 * flat, xtol=1e-12 * flat)))


def circle_skymap(
    ra_deg: float,
    dec_deg: float,
    radius_90_deg: float,
    *,
    label: str = "",
    issued_mjd: float | None = None,
) -> SkyMap:
    """Build a map version from a position and the radius that holds 90 %.

    Parameters
    ----------
    ra_deg, dec_deg : float
        Centre, ICRS.
    radius_90_deg : float
        In [0.0001, 90].
    label, issued_mjd
        As in `SkyMap`.

    Returns
    -------
    SkyMap
        A Gaussian in the angular separation (see `circle_sigma_deg`) on cells
        of at most σ/18 near the centre, coarser outside; cut where 1e-9 of the
        probability is left, then normalised.

    Raises
    ------
    MapError
        If a number is out of range.
    """
    _check_circle(ra_deg, dec_deg, radius_90_deg)
    sigma = np.radians(circle_sigma_deg(radius_90_deg))
    centre = lonlat_to_vector(ra_deg, dec_deg)
    order, cell = _cells_around(centre, sigma)
    density = _mean_density(order, cell, centre, sigma)
    starts, stops = cell_to_span(order, cell)
    rank = np.argsort(starts)
    starts, stops, density = starts[rank], stops[rank], density[rank]
    density = density / np.sum((stops - starts) * UNIT_SR * density)
    note = (
        f"Built from a position and its 90 % radius of {radius_90_deg:g} deg as a Gaussian in the "
        f"angular separation, sigma {np.degrees(sigma):.6g} deg."
    )
    return SkyMap(
        starts,
        stops,
        density,
        int(order.max()),
        label=label,
        issued_mjd=issued_mjd,
        notes=(note,),
    )


def _check_circle(ra_deg: float, dec_deg: float, radius_90_deg: float) -> None:
    if not np.isfinite([ra_deg, dec_deg, radius_90_deg]).all():
        raise MapError(
            f"the circle's numbers are {ra_deg}, {dec_deg}, {radius_90_deg}, expected finite ones",
            remedy="Give ra, dec and radius_90 in degrees.",
        )
    for name, value, low, high in (
        ("ra", ra_deg, -360.0, 360.0),
        ("dec", dec_deg, -90.0, 90.0),
        ("radius_90", radius_90_deg, _SMALLEST_DEG, 90.0),
    ):
        if not low <= value <= high:
            raise MapError(
                f"the circle's {name} is {value:g}, expected {low:g} to {high:g} degrees",
                remedy="Give ra, dec and radius_90 in degrees.",
            )


def _separation_rad(order: int, cell: Ints, centre: Floats) -> Floats:
    """Angle between a direction and cell centres; by the chord, exact at small angles."""
    vector = np.stack(healpix_to_xyz(cell, 1 << order, order="nested"), axis=-1)
    chord = np.linalg.norm(vector - centre, axis=-1)
    return np.asarray(2 * np.arcsin(np.minimum(chord / 2, 1.0)))


def _cells_around(centre: Floats, sigma: float) -> tuple[Ints, Ints]:
    """Cells that hold the Gaussian, finer where a region's edge would cut more of it."""
    whole = _held(np.pi, sigma)
    edge = brentq(lambda r: 1 - _held(r, sigma) / whole - _TRUNCATED, sigma, min(10 * sigma, np.pi))
    done: list[tuple[Ints, Ints]] = []
    cell = np.arange(12, dtype=np.int64)
    for order in range(30 - _SUB_ORDERS):
        nearest = _separation_rad(order, cell, centre) - cell_radius_rad(order)
        cell, nearest = cell[nearest <= edge], nearest[nearest <= edge]
        # The edge of a region errs by ∝ width² × density: widen as the density falls.
        finest = np.where(nearest < 3 * sigma, 18, np.where(nearest < 4.5 * sigma, 8, 4))
        fine = cell_width_rad(order) * finest <= sigma
        done.append((np.full(int(fine.sum()), order, dtype=np.int64), cell[fine]))
        cell = ((cell[~fine] << 2)[:, np.newaxis] + np.arange(4)).reshape(-1)
        if cell.size == 0:
            break
    orders, cells = (np.concatenate(part) for part in zip(*done))
    return orders, cells


def _mean_density(order: Ints, cell: Ints, centre: Floats, sigma: float) -> Floats:
    """Mean of exp(−θ²/2σ²) over the sub-cells of each cell."""
    mean = np.empty(cell.size)
    for level in np.unique(order):
        ours = order == level
        sub = (cell[ours] << (2 * _SUB_ORDERS))[:, np.newaxis] + np.arange(1 << (2 * _SUB_ORDERS))
        theta = _separation_rad(int(level) + _SUB_ORDERS, sub, centre)
        mean[ours] = np.exp(-0.5 * (theta / sigma) ** 2).mean(axis=1)
    return mean
