"""How deep a selection went, over its exposures and over the probability it covered."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Chosen, Coverage
from skytally.magnitudes import stack_groups
from skytally.observations import Observations

__all__ = ["Depth", "extinction_state"]

Floats = NDArray[np.float64]

_SHARES = 0.5, 0.9


@dataclass(frozen=True, eq=False)
class Depth:
    """Limits of a selection; magnitudes of different bands are never mixed.

    Attributes
    ----------
    depth : float64 array, shape (n,)
        Limits of its exposures where known; none of several bands.
    single, stacked : float64 arrays, shape (kinds,)
        Deepest limit, and deepest stack, over each kind of sky that the
        selection sees; −inf without one.
    """

    depth: Floats
    single: Floats
    stacked: Floats

    @classmethod
    def of(cls, coverage: Coverage, part: Chosen) -> Depth:
        """Gather the limits of a selection, whatever the map."""
        o, chosen = coverage.observations, part.selection.chosen
        every = coverage.corrected_depth
        known = np.isfinite(every)
        depth = every[chosen & known]
        if depth.size == 0 or np.unique(o.band[chosen]).size != 1:
            return cls(depth[:0], depth[:0], depth[:0])
        single = part.exposures.reduce(np.maximum, np.where(known, every, -np.inf))
        return cls(depth, single, _stacked(o, every, part))

    def numbers(self, weight: Floats) -> dict[str, float | None]:
        """Put the depths in numbers, given the probability of each kind; None without a limit."""
        names = (
            "depth_min",
            "depth_median",
            "depth_max",
            "depth_over_50",
            "depth_over_90",
            "depth_stacked_over_50",
            "depth_stacked_over_90",
        )
        if self.depth.size == 0:
            return dict.fromkeys(names)
        numbers = [
            float(self.depth.min()),
            float(np.median(self.depth)),
            float(self.depth.max()),
            *(_reached(self.single, weight, share) for share in _SHARES),
            *(_reached(self.stacked, weight, share) for share in _SHARES),
        ]
        return dict(zip(names, numbers))


def _stacked(o: Observations, depth: Floats, part: Chosen) -> Floats:
    """Deepest stack over each kind: exposures of one telescope, band and night; −inf without."""
    known = np.isfinite(depth[part.exposures.items])
    group, exposure = part.exposures.owner[known].astype(np.int64), part.exposures.items[known]
    stack = (o.telescope * max(len(o.bands), 1) + o.band) * max(len(o.nights), 1) + o.night
    key = group * (int(stack.max(initial=0)) + 1) + stack[exposure]
    order = np.argsort(key, kind="stable")
    first = np.flatnonzero(np.diff(key[order], prepend=-1))
    best = np.full(len(part.exposures), -np.inf)
    if first.size:
        np.maximum.at(best, group[order][first], stack_groups(depth[exposure[order]], first))
    return best


def _reached(depth: Floats, weight: Floats, share: float) -> float | None:
    """Depth that at least a share of the weight reaches; None if so much has no limit."""
    total = float(weight.sum())
    if total <= 0:
        return None
    order = np.argsort(-depth)
    held = np.cumsum(weight[order])
    place = min(int(np.searchsorted(held, share * total * (1 - 1e-12))), depth.size - 1)
    value = float(depth[order[place]])
    return value if np.isfinite(value) else None


def extinction_state(coverage: Coverage, part: Chosen) -> tuple[str, float | None]:
    """Say whether a selection's limits are corrected for extinction, and the median A_b.

    "corrected", "partly corrected" or "not corrected", of the exposures with a limit.
    """
    mine = part.selection.chosen & np.isfinite(coverage.observations.depth)
    value = coverage.extinction[mine]
    known = np.isfinite(value)
    if not known.any():
        return "not corrected", None
    state = "corrected" if known.all() else "partly corrected"
    return state, float(np.median(value[known]))
