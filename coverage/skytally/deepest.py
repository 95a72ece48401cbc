"""The deepest limit of every place, band by band, on the patches that were counted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Coverage
from skytally.spans import DEG2_PER_SR, Ints

__all__ = ["BandDepth", "DeepestLimits"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class BandDepth:
    """How deep the places of one band are: areas in square degrees, limits in magnitudes.

    ``over_50`` and ``over_90`` are what at least that share of the area with a
    limit reaches.
    """

    band: str
    area_deg2: float
    without_limit_deg2: float
    shallowest: float
    over_90: float
    over_50: float
    deepest: float


@dataclass(frozen=True, eq=False)
class DeepestLimits:
    """Limits by place: patches along the line, and what each set of footprints reached.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Patches in order, disjoint.
    group : int32 array, shape (n,)
        Which set of footprints covers each patch.
    area_deg2 : float64 array, shape (sets,)
        Area of each set's patches.
    bands : tuple of str
        Bands in which any exposure has a limit.
    limit : float64 array, shape (bands, sets)
        Deepest limit of a single exposure, less Galactic extinction where it is
        known; −inf where only exposures without a limit looked, NaN where none did.
    """

    starts: Ints
    stops: Ints
    group: NDArray[np.int32]
    area_deg2: Floats
    bands: tuple[str, ...]
    limit: Floats

    @classmethod
    def of(cls, coverage: Coverage) -> DeepestLimits:
        """Find the deepest limits of a coverage."""
        o, depth, patchwork = coverage.observations, coverage.corrected_depth, coverage.centre
        known = np.isfinite(depth)
        shown = [band for band in range(len(o.bands)) if (known & (o.band == band)).any()]
        limit = np.full((len(shown), patchwork.sets), np.nan)
        for row, band in zip(limit, shown):
            mine = o.band == band
            row[coverage.exposures.reduce(np.logical_or, mine)] = -np.inf
            deepest = coverage.exposures.reduce(np.maximum, np.where(mine & known, depth, -np.inf))
            np.copyto(row, deepest, where=np.isfinite(deepest))
        return cls(
            patchwork.starts,
            patchwork.stops,
            patchwork.group,
            patchwork.area_sr * DEG2_PER_SR,
            tuple(str(o.bands[band]) for band in shown),
            limit,
        )

    def set_at(self, position: Ints) -> Ints:
        """Set of footprints that covers each position on the line; −1 for none."""
        if self.starts.size == 0:
            return np.full(position.shape, -1, dtype=np.int64)
        patch = np.searchsorted(self.starts, position, side="right") - 1
        inside = (patch >= 0) & (position < self.stops[patch])
        return np.where(inside, self.group[patch], -1)

    def limit_of(self, band: str) -> Floats:
        """Limits of one band, shape (sets,)."""
        return np.asarray(self.limit[self.bands.index(band)])

    def band_depth(self, band: str) -> BandDepth:
        """Sum up the places of one band that has a limit anywhere."""
        limit = self.limit_of(band)
        known = np.isfinite(limit)
        value, area = limit[known], self.area_deg2[known]
        order = np.argsort(-value, kind="stable")
        value, held = value[order], np.cumsum(area[order])
        over_90, over_50 = (
            float(value[min(int(np.searchsorted(held, share * held[-1])), value.size - 1)])
            for share in (0.9 * (1 - 1e-12), 0.5 * (1 - 1e-12))
        )
        return BandDepth(
            band,
            float(held[-1]),
            float(self.area_deg2[np.isneginf(limit)].sum()),
            float(value[-1]),
            over_90,
            over_50,
            float(value[0]),
        )
