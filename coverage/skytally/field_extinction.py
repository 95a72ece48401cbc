"""Galactic extinction of each exposure, and how it is said."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from skytally.dust import Dust
from skytally.footprints import Footprints
from skytally.magnitudes import extinction_coefficient

__all__ = ["bands_without_coefficient", "field_extinction"]

Floats = NDArray[np.float64]


def field_extinction(
    footprints: Footprints, dust: Dust | None, coefficients: Mapping[str, float]
) -> Floats:
    """Extinction A_b of each exposure in magnitudes; NaN where none is known, (exposures,).

    The log's own value comes first; else the mean E(B−V) over the footprint by
    the dust map, times the coefficient of the band.
    """
    o = footprints.observations
    stated = o.extinction
    if dust is None:
        return stated
    ebv = dust.mean_of_table(footprints.raster.centre)[o.footprint]
    values = [extinction_coefficient(band, coefficients) for band in o.bands]
    per_band = np.array([np.nan if v is None else v for v in values] or [np.nan])
    return np.where(np.isfinite(stated), stated, ebv * per_band[o.band])


def bands_without_coefficient(
    footprints: Footprints, dust: Dust | None, coefficients: Mapping[str, float]
) -> list[str]:
    """Bands that a dust map cannot be applied to for want of a coefficient."""
    o = footprints.observations
    if dust is None:
        return []
    stated = np.isfinite(o.extinction)
    return [
        band
        for index, band in enumerate(o.bands)
        if extinction_coefficient(band, coefficients) is None and not stated[o.band == index].all()
    ]
