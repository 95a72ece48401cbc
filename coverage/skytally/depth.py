"""How deep a selection went, over its exposures and over the probability it covered."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Chosen, Coverage
from skytally.grouping import Lists
from skytally.magnitudes import stack_groups
from skytally.observations import Observations
from skytally.selection import Selection
from skytally.spans import Ints

__all__ = ["Depth", "extinction_state"]

Floats = NDArray[np.float64]

_SHARES = 0.5, 0.9
_VISITS_AT_ONCE = 1_000_000  # bounds memory


@dataclass(frozen=True, eq=False)
class Depth:
    """Limits of a selection; magnitudes of different bands are never mixed.

    Attributes
    ----------
    depth : float64 array, shape (n,)
        Limits of its exposures where known; none of several bands.
    single, stacked : _Ranked
        Deepest limit, and deepest stack, over each kind of sky that the
        selection sees.
    """

    depth: Floats
    single: _Ranked
    stacked: _Ranked

    @classmethod
    def of(cls, coverage: Coverage, selection: Selection, exposures: Lists) -> Depth:
        """Gather the limits of a selection, whatever the map.

        ``exposures`` are those of each kind of sky that it sees.
        """
        o, chosen = coverage.observations, selection.chosen
        every = coverage.corrected_depth
        known = np.isfinite(every)
        depth = every[chosen & known]
        if depth.size == 0 or np.unique(o.band[chosen]).size != 1:
            none = _Ranked.of(depth[:0])
            return cls(depth[:0], none, none)
        single = exposures.reduce(np.maximum, np.where(known, every, -np.inf))
        blocks = map(exposures.part, exposures.blocks(_VISITS_AT_ONCE))
        stacked = np.concatenate([single[:0], *(_stacked(o, every, block) for block in blocks)])
        return cls(depth, _Ranked.of(single), _Ranked.of(stacked))

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
            *self.single.reached(weight),
            *self.stacked.reached(weight),
        ]
        return dict(zip(names, numbers))


@dataclass(frozen=True, eq=False)
class _Ranked:
    """Depths of n kinds of sky, deepest first, −inf without one; and which kind has which."""

    depth: Floats
    kind: Ints

    @classmethod
    def of(cls, depth: Floats) -> _Ranked:
        order = np.argsort(-depth)
        return cls(depth[order], order)

    def reached(self, weight: Floats) -> list[float | None]:
        """Depths that the shares of the weight of all kinds reach; None if so much has none."""
        held = np.cumsum(weight[self.kind])
        total = float(held[-1]) if held.size else 0.0
        if total <= 0:
            return [None for _ in _SHARES]
        wanted = np.array(_SHARES) * total * (1 - 1e-12)
        place = np.minimum(np.searchsorted(held, wanted), self.kind.size - 1)
        return [float(depth) if np.isfinite(depth) else None for depth in self.depth[place]]


def _stacked(o: Observations, depth: Floats, exposures: Lists) -> Floats:
    """Deepest stack over each kind: exposures of one telescope, band and night; −inf without."""
    known = np.isfinite(depth[exposures.items])
    group, exposure = exposures.owner[known].astype(np.int64), exposures.items[known]
    stack = (o.telescope * max(len(o.bands), 1) + o.band) * max(len(o.nights), 1) + o.night
    key = group * (int(stack.max(initial=0)) + 1) + stack[exposure]
    order = np.argsort(key, kind="stable")
    first = np.flatnonzero(np.diff(key[order], prepend=-1))
    best = np.full(len(exposures), -np.inf)
    if first.size:
        np.maximum.at(best, group[order][first], stack_groups(depth[exposure[order]], first))
    return best


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
