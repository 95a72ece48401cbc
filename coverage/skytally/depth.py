"""How deep a selection went, over its exposures and over the probability it covered."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Chosen, Coverage
from skytally.magnitudes import stack_groups
from skytally.observations import Observations

__all__ = ["depth_numbers", "extinction_state"]

Floats = NDArray[np.float64]


def depth_numbers(coverage: Coverage, part: Chosen, probability: Floats) -> dict[str, float | None]:
    """Depth of a selection; magnitudes of different bands are never mixed."""
    o = coverage.observations
    names = (
        "depth_min",
        "depth_median",
        "depth_max",
        "depth_over_50",
        "depth_over_90",
        "depth_stacked_over_50",
        "depth_stacked_over_90",
    )
    chosen = part.selection.chosen
    every = coverage.corrected_depth
    depth = every[chosen]
    depth = depth[np.isfinite(depth)]
    if depth.size == 0 or np.unique(o.band[chosen]).size != 1:
        return dict.fromkeys(names)
    weight = probability[part.covered]
    single = np.full(coverage.centre.sets, -np.inf)
    value = every[part.visit_exposure]
    known = np.isfinite(value)
    np.maximum.at(single, part.visit_set[known], value[known])
    stacked = _stacked(o, every, part, coverage.centre.sets)
    numbers = [
        float(depth.min()),
        float(np.median(depth)),
        float(depth.max()),
        *(_reached(single[part.covered], weight, share) for share in (0.5, 0.9)),
        *(_reached(stacked[part.covered], weight, share) for share in (0.5, 0.9)),
    ]
    return dict(zip(names, numbers))


def _stacked(o: Observations, depth: Floats, part: Chosen, sets: int) -> Floats:
    """Deepest stack of each set: exposures of one telescope, band and night; −inf without."""
    known = np.isfinite(depth[part.visit_exposure])
    group, exposure = part.visit_set[known], part.visit_exposure[known]
    kind = (o.telescope * max(len(o.bands), 1) + o.band) * max(len(o.nights), 1) + o.night
    key = group * (int(kind.max(initial=0)) + 1) + kind[exposure]
    order = np.argsort(key, kind="stable")
    first = np.flatnonzero(np.diff(key[order], prepend=-1))
    best = np.full(sets, -np.inf)
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
