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

from skytally.grouping import AnyInts, Lists, sum_by, sum_pairs
from skytally.limits import Scene
from skytally.magnitudes import absolute_limit, reach_mpc
from skytally.reach import Visits
from skytally.space import Space, blocks
from skytally.spans import Ints
from skytally.tally import TallyRow
from skytally.workers import side_by_side

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
    "fading_planes",
]

Floats = NDArray[np.float64]

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
    cell: AnyInts
    limit: Floats
    probability: Floats

    @classmethod
    def of(cls, scene: Scene, limits: _Limits, kind: AnyInts) -> _Deepest:
        """Gather covered sky, given the kind, shape (places,), that has the limit of each place."""
        space, overlay = scene.space, scene.overlay
        number = np.append(limits.deepest, -1)[kind][overlay.place]
        some = (number >= 0) & np.append(space.known, False)[overlay.cell]
        number, cell, held = sum_pairs(
            number[some],
            overlay.cell[some],
            overlay.probability[some],
            limits.value.size,
            space.known.size,
        )
        return cls(space, cell, limits.value[number], held)

    def detectable(self, magnitude: Floats) -> Floats:
        """Detectable probability of constant absolute magnitudes, shape (n,)."""
        found = np.zeros(magnitude.size)
        reach = reach_mpc(self.limit, 0.0)
        nearer = reach_mpc(0.0, magnitude) / reach_mpc(0.0, 0.0)
        for block in blocks(self.cell.size):
            distances, held = self.space.distances.take(self.cell[block]), self.probability[block]
            # Where everything is within reach nothing need be looked up.
            sure = float(np.max(distances.sure_mpc / reach[block]))
            found += np.where(nearer > sure, held.sum(), 0.0)
            for number in np.flatnonzero(nearer <= sure):
                found[number] += held @ distances.within(reach[block] * nearer[number])
        return found

    def crossing(self, share: float, curve: Floats) -> float | None:
        """Absolute magnitude at which the curve crosses a share; None if it does not."""
        if float(self.probability.sum()) <= share:
            return None
        # Distance moduli of 1e-10 and 1e9 Mpc: nothing and everything is within reach.
        ends = self.limit.min() - 70.0, self.limit.max() + 25.0
        magnitude = np.concatenate((ends[:1], MAGNITUDES, ends[1:]))
        last = np.flatnonzero(np.concatenate(([True], curve > share)))[-1]

        def excess(magnitude: float) -> float:
            return float(self.detectable(np.array([magnitude]))[0]) - share

        return float(brentq(excess, magnitude[last], magnitude[last + 1], xtol=1e-6))


@dataclass(frozen=True, eq=False)
class _Limits:
    """Deepest limit of lists of looks.

    ``value`` are the distinct limits, rising; ``deepest``, shape (lists,), is the
    number of each list's deepest among them, −1 for none.
    """

    value: Floats
    deepest: Ints

    @classmethod
    def of(cls, seen: Lists, limit: Floats) -> _Limits:
        """Find them, given the limit of each look, NaN for none."""
        stated = np.isfinite(limit)
        number = np.full(limit.size, -1)
        value, number[stated] = np.unique(limit[stated], return_inverse=True)
        return cls(value, seen.reduce(np.maximum, number))


def exclusion_curves(scene: Scene) -> list[ExclusionCurve]:
    """Make the curve of every band, and of all bands together first."""
    visits = scene.visits
    curves = []
    for view in visits.by_band:
        part = _Deepest.of(scene, _Limits.of(view.seen, visits.limit), view.kind)
        value = part.detectable(MAGNITUDES)
        curves.append(
            ExclusionCurve(
                scene.space.skymap.label,
                view.selection.band,
                tuple(map(float, MAGNITUDES)),
                tuple(map(float, value)),
                part.crossing(0.5, value),
                part.crossing(0.9, value),
                float(part.probability.sum()),
            )
        )
    return curves


def fading_planes(visits: Visits, scenes: Sequence[Scene], event_mjd: float) -> list[FadingPlane]:
    """Detectable probability of sources fading linearly from their magnitude at the event.

    The scenes are those of several maps under the places of the visits.
    """
    o = visits.observations
    days = ((o.start_mjd + o.end_mjd) / 2 - event_mjd)[visits.exposure]
    everywhere = np.arange(len(visits.seen))

    def of_rate(rate: float) -> list[Floats]:
        limits = _Limits.of(visits.seen, visits.limit - rate * days)
        return [_Deepest.of(scene, limits, everywhere).detectable(PEAKS) for scene in scenes]

    planes = zip(*side_by_side(of_rate, map(float, RATES)))
    return [
        FadingPlane(
            scene.space.skymap.label,
            tuple(map(float, PEAKS)),
            tuple(map(float, RATES)),
            tuple(tuple(map(float, row)) for row in plane),
        )
        for scene, plane in zip(scenes, planes)
    ]


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
    # Out to how many of the nodes each row is seen; then what each cell holds by that number.
    everywhere = np.full(overlay.places, nodes.size)
    parts = [everywhere, *(np.searchsorted(nodes, reach, side="right") for _, reach in reaches)]
    cells, count = space.known.size, nodes.size + 1
    sums = np.zeros((1 + len(parts), nodes.size))
    for block in blocks(cells):
        distances = space.distances.take(np.arange(cells)[block])
        per_mpc = np.stack([distances.density(node) for node in nodes], axis=1)
        sums[0] += space.probability[block] @ per_mpc
        # The rows of an overlay are by cell.
        rows = slice(*np.searchsorted(overlay.cell, (block.start, block.stop)))
        cell, place = overlay.cell[rows] - block.start, overlay.place[rows]
        for row, part in enumerate(parts, 1):
            by_number = sum_by(
                cell * count + part[place], overlay.probability[rows], per_mpc.shape[0] * count
            )
            beyond = np.cumsum(by_number.reshape(-1, count)[:, :0:-1], axis=1)[:, ::-1]
            sums[row] += np.einsum("cn,cn->n", beyond, per_mpc)
    whole, covered, *within = (tuple(map(float, row)) for row in sums)
    return DistanceProfile(
        space.skymap.label,
        tuple(map(float, nodes)),
        whole,
        covered,
        tuple(name for name, _ in reaches),
        tuple(within),
    )


def depth_histograms(scene: Scene) -> list[DepthHistogram]:
    """Histogram the covered probability by the deepest limit, band by band."""
    found = []
    for view in scene.visits.by_band:
        if view.selection.band is None:
            continue
        covered = view.kind >= 0
        held = scene.overlay.by_place(scene.overlay.probability)[covered]
        weight = sum_by(view.kind[covered], held, len(view.seen))
        limits = _Limits.of(view.seen, scene.visits.limit)
        deep = limits.deepest >= 0
        if not deep.any():
            continue
        limit = limits.value[limits.deepest]
        low = np.floor(limit[deep].min() / _BIN_MAG)
        count = int(np.floor(limit[deep].max() / _BIN_MAG) - low) + 1
        edges = (low + np.arange(count + 1)) * _BIN_MAG
        which = np.floor(limit[deep] / _BIN_MAG).astype(np.int64) - int(low)
        found.append(
            DepthHistogram(
                scene.space.skymap.label,
                view.selection.band,
                tuple(map(float, edges)),
                tuple(map(float, sum_by(which, weight[deep], count))),
                float(weight[~deep].sum()),
            )
        )
    return found
