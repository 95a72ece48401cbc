"""What can be ruled out: detectable probability against absolute magnitude and fading.

Every curve is for a source that one exposure is enough to see (a step at the
limit), without K-correction, as bright in every band that counts.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from skytally.covered import Coverage
from skytally.distance import density
from skytally.grouping import sum_by
from skytally.limits import Scene
from skytally.magnitudes import absolute_limit, reach_mpc
from skytally.space import Space
from skytally.spans import Ints
from skytally.tally import TallyRow

__all__ = [
    "AbsoluteLimit",
    "DepthHistogram",
    "DistanceProfile",
    "ExclusionCurve",
    "FadingPlane",
    "absolute_limits",
    "depth_histograms",
    "distance_profile",
    "exclusion_curves",
    "fading_plane",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

MAGNITUDES = np.arange(-26.0, -7.9, 0.25)
PEAKS = np.linspace(-20.0, -10.5, 20)
RATES = np.linspace(0.0, 1.9, 20)
_BIN_MAG = 0.25
_PROFILE_NODES = 121


@dataclass(frozen=True)
class ExclusionCurve:
    """Detectable probability of a constant source against its absolute magnitude.

    ``band`` None is all bands, the source being as bright in each.
    ``magnitude_50`` and ``magnitude_90`` are where the curve crosses 50 and
    90 % of all the map's probability; None where it is not reached.
    ``highest`` is the fraction that an ever brighter source comes to: the
    covered probability with a distance and a limit.
    """

    map: str
    band: str | None
    magnitude: tuple[float, ...]
    probability: tuple[float, ...]
    magnitude_50: float | None
    magnitude_90: float | None
    highest: float


@dataclass(frozen=True)
class FadingPlane:
    """Detectable probability by magnitude at the event (columns) and fade in mag/day (rows)."""

    map: str
    peak: tuple[float, ...]
    fade_per_day: tuple[float, ...]
    probability: tuple[tuple[float, ...], ...]


@dataclass(frozen=True)
class AbsoluteLimit:
    """Absolute magnitude at the median limit, M = m − A − 5 log₁₀(d/10 pc).

    ``near``, ``mean`` and ``far`` are the map's mean distance less its standard
    deviation, itself, and plus; a limit is None where the distance is not above 0.
    ``extinction`` is the median A of the exposures, None where none is known.
    """

    map: str
    telescope: str
    band: str
    depth: float
    extinction: float | None
    near_mpc: float
    mean_mpc: float
    far_mpc: float
    limit_near: float | None
    limit_mean: float
    limit_far: float


@dataclass(frozen=True)
class DistanceProfile:
    """Probability per Mpc against luminosity distance.

    Of the whole map (with distance), of the covered part, and of the part within
    which each source in ``sources`` would have been seen in as many exposures
    as it asks for; where detection is gradual, with half the plateau's
    efficiency in each.
    """

    map: str
    distance_mpc: tuple[float, ...]
    whole: tuple[float, ...]
    covered: tuple[float, ...]
    sources: tuple[str, ...]
    within_reach: tuple[tuple[float, ...], ...]


@dataclass(frozen=True)
class DepthHistogram:
    """Covered probability by the deepest limit of one band.

    ``probability[i]`` lies between ``edges[i]`` and ``edges[i + 1]``; what was
    covered by exposures without a limit is ``without_limit``.
    """

    map: str
    band: str
    edges: tuple[float, ...]
    probability: tuple[float, ...]
    without_limit: float


@dataclass(frozen=True, eq=False)
class _Deepest:
    """Probability gathered by what decides the answer: map cell and deepest limit."""

    space: Space
    cell: Ints
    limit: Floats
    probability: Floats

    @classmethod
    def of(cls, scene: Scene, limit: Floats) -> _Deepest:
        """Gather a scene by each place's effective limit, shape (places,), −inf for none."""
        overlay = scene.overlay
        limits, which = np.unique(limit, return_inverse=True)
        known = (overlay.cell >= 0) & scene.space.known[overlay.cell]
        known &= np.isfinite(limit)[overlay.place]
        key = overlay.cell[known] * limits.size + which[overlay.place[known]]
        key, group = np.unique(key, return_inverse=True)
        held = sum_by(group, overlay.probability[known], key.size)
        cell, rank = np.divmod(key, max(limits.size, 1))
        return cls(scene.space, cell, limits[rank] if limits.size else np.empty(0), held)

    def detectable(self, magnitude: float) -> float:
        """Detectable probability of a constant absolute magnitude."""
        reach = reach_mpc(self.limit, magnitude)
        return float(np.sum(self.probability * self.space.within(self.cell, reach)))


def _deepest_limit(scene: Scene, chosen: Bools, dimming: Floats | None = None) -> Floats:
    """Deepest limit of each place among chosen exposures, −inf for none, shape (places,).

    ``dimming``, shape (exposures,), is what the source has faded by the time of
    each exposure.
    """
    visits = scene.visits
    limit = visits.limit if dimming is None else visits.limit - dimming[visits.exposure]
    use = chosen[visits.exposure] & np.isfinite(limit)
    place, limit = visits.place[use], limit[use]
    deepest = np.full(visits.places, -np.inf)
    begin = np.flatnonzero(np.diff(place, prepend=-1))
    if begin.size:
        deepest[place[begin]] = np.maximum.reduceat(limit, begin)
    return deepest


def exclusion_curves(coverage: Coverage, scene: Scene) -> list[ExclusionCurve]:
    """Make the curve of every band, and of all bands together first."""
    o = coverage.observations
    chosen: list[tuple[str | None, Bools]] = [(None, np.ones(len(o), dtype=bool))]
    chosen += [(name, o.band == index) for index, name in enumerate(o.bands)]
    curves = []
    for band, mask in chosen:
        part = _Deepest.of(scene, _deepest_limit(scene, mask))
        value = [part.detectable(float(m)) for m in MAGNITUDES]
        highest = float(part.probability.sum())
        curves.append(
            ExclusionCurve(
                scene.space.skymap.label,
                band,
                tuple(map(float, MAGNITUDES)),
                tuple(value),
                _crossing(part, 0.5, highest),
                _crossing(part, 0.9, highest),
                highest,
            )
        )
    return curves


def _crossing(part: _Deepest, share: float, highest: float) -> float | None:
    """Absolute magnitude at which the curve crosses a share; None if it does not."""
    if highest <= share:
        return None
    # Distance moduli of 1e-10 and 1e9 Mpc: nothing and everything is within reach.
    faint, bright = float(part.limit.max()) + 25.0, float(part.limit.min()) - 70.0
    return float(brentq(lambda m: part.detectable(m) - share, bright, faint, xtol=1e-4))


def fading_plane(coverage: Coverage, scene: Scene, event_mjd: float) -> FadingPlane:
    """Detectable probability of a source fading linearly from its magnitude at the event."""
    o = coverage.observations
    days = (o.start_mjd + o.end_mjd) / 2 - event_mjd
    everything = np.ones(len(o), dtype=bool)
    rows = []
    for rate in RATES:
        part = _Deepest.of(scene, _deepest_limit(scene, everything, float(rate) * days))
        rows.append(tuple(part.detectable(float(peak)) for peak in PEAKS))
    return FadingPlane(
        scene.space.skymap.label,
        tuple(map(float, PEAKS)),
        tuple(map(float, RATES)),
        tuple(rows),
    )


def absolute_limits(rows: Sequence[TallyRow], space: Space) -> list[AbsoluteLimit]:
    """Turn the median limits of a map's rows by telescope and band into absolute ones."""
    mean, sd = space.moments
    found = []
    for row in rows:
        if row.map != space.skymap.label or row.telescope is None or row.band is None:
            continue
        if row.depth_median is None:
            continue
        near, far = mean - sd, mean + sd
        # The rows' depths are already corrected where an extinction is known.
        at_near, at_mean, at_far = map(float, absolute_limit(row.depth_median, [near, mean, far]))
        found.append(
            AbsoluteLimit(
                row.map,
                row.telescope,
                row.band,
                row.depth_median,
                row.extinction_median,
                near,
                mean,
                far,
                at_near if near > 0 else None,
                at_mean,
                at_far,
            )
        )
    return found


def distance_profile(scene: Scene, reaches: Sequence[tuple[str, Floats]]) -> DistanceProfile:
    """Sample the distance distribution of the map and of its parts.

    Parameters
    ----------
    scene : Scene
        The map under the centre rule's patchwork.
    reaches : sequence of (name, array of shape (places,))
        Per source, how far each place would have shown it, Mpc.
    """
    space, overlay = scene.space, scene.overlay
    mean, sd = space.moments
    nodes = np.linspace(0.0, mean + 5 * sd, _PROFILE_NODES)
    known = np.flatnonzero(space.known)
    inside = (overlay.cell >= 0) & space.known[overlay.cell]
    cell, place, held = overlay.cell[inside], overlay.place[inside], overlay.probability[inside]
    covered = sum_by(cell, held, space.probability.size)[known]
    mu, sigma = space.mu_mpc[known], space.sigma_mpc[known]
    rank = np.searchsorted(known, cell)
    whole_at, covered_at = np.empty(nodes.size), np.empty(nodes.size)
    within_at = np.empty((len(reaches), nodes.size))
    for node, distance in enumerate(nodes):
        per_mpc = density(distance, mu, sigma)
        whole_at[node] = np.sum(space.probability[known] * per_mpc)
        covered_at[node] = np.sum(covered * per_mpc)
        for number, (_, reach) in enumerate(reaches):
            seen = reach[place] >= distance
            within_at[number, node] = np.sum((held * per_mpc[rank])[seen])
    return DistanceProfile(
        space.skymap.label,
        tuple(map(float, nodes)),
        tuple(map(float, whole_at)),
        tuple(map(float, covered_at)),
        tuple(name for name, _ in reaches),
        tuple(tuple(map(float, row)) for row in within_at),
    )


def depth_histograms(coverage: Coverage, scene: Scene) -> list[DepthHistogram]:
    """Histogram the covered probability by the deepest limit, band by band."""
    o = coverage.observations
    overlay = scene.overlay
    weight = sum_by(overlay.place, overlay.probability, overlay.places)
    found = []
    for index, band in enumerate(o.bands):
        mask = o.band == index
        covered = np.zeros(overlay.places, dtype=bool)
        covered[scene.visits.place[mask[scene.visits.exposure]]] = True
        limit = _deepest_limit(scene, mask)
        deep = covered & np.isfinite(limit)
        if not deep.any():
            continue
        low = np.floor(limit[deep].min() / _BIN_MAG)
        count = int(np.floor(limit[deep].max() / _BIN_MAG) - low) + 1
        edges = (low + np.arange(count + 1)) * _BIN_MAG
        which = np.floor(limit[deep] / _BIN_MAG).astype(np.int64) - int(low)
        found.append(
            DepthHistogram(
                scene.space.skymap.label,
                band,
                tuple(map(float, edges)),
                tuple(map(float, sum_by(which, weight[deep], count))),
                float(weight[covered & ~deep].sum()),
            )
        )
    return found
