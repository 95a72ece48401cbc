"""What could have been seen: reach, detectable probability and volume for each source."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Coverage
from skytally.dust import Dust
from skytally.grouping import expand_ranges, sum_by
from skytally.overlay import Overlay
from skytally.patchwork import Patchwork
from skytally.reach import (
    Visits,
    absolute_magnitudes,
    deciding_visits,
    order_by_reach,
    seen_share,
    visit_reach,
)
from skytally.selection import Selection, selections
from skytally.sources import Source
from skytally.space import Space
from skytally.spans import Ints

__all__ = ["Scene", "SeenSource", "SourceRow", "tally_scenes", "tally_sources"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Steps of the integral over a detection curve, in magnitudes of distance modulus:
# so many widths of the logistic, and so many standard deviations of the narrowest
# distances. That errs by less than 1e-4 in probability.
_STEP_WIDTHS, _STEP_SPREADS, _LEAST_STEP_MAG = 0.65, 1.2, 0.005
# So many widths from its middle a logistic is within 1e-5 of its end.
_END_WIDTHS = 10
# Where detection ends abruptly the reaches are the nodes, or so many of them.
_MOST_EDGES = 400
_NUMBERS_AT_ONCE = 2_000_000


@dataclass(frozen=True)
class SourceRow:
    """What one selection could have seen of one source on one map version.

    Probabilities are fractions of all the map's probability. The covered
    probability is the sum of what is detectable, what lies beyond reach or is
    missed, and what is without distance. Distances are luminosity distances;
    reaches are over places weighted by their probability, 0 where an exposure
    states no limit; where detection is gradual, reaches and the volumes within
    them are those of half its plateau.
    """

    map: str
    telescope: str | None
    band: str | None
    night: str | None
    source: str
    reach_min_mpc: float | None
    reach_median_mpc: float | None
    reach_max_mpc: float | None
    probability: float
    probability_low: float
    probability_high: float
    probability_beyond: float
    probability_without_distance: float
    volume_mpc3: float
    volume_comoving_mpc3: float
    volume_90_covered_mpc3: float | None
    volume_90_covered_comoving_mpc3: float | None
    volume_90_within_reach_mpc3: float | None
    volume_90_within_reach_comoving_mpc3: float | None


@dataclass(frozen=True, eq=False)
class Scene:
    """One map's third dimension laid under one patchwork.

    Attributes
    ----------
    space : Space
        The map.
    overlay : Overlay
        Covered sky by place and cell.
    visits : Visits
        Which exposures looked at each place.
    """

    space: Space
    overlay: Overlay
    visits: Visits

    @classmethod
    def of(
        cls,
        space: Space,
        patchwork: Patchwork,
        coverage: Coverage,
        dust: Dust | None,
        coefficients: Mapping[str, float],
    ) -> Scene:
        """Lay a map and the dust under a patchwork."""
        overlay = Overlay.build(patchwork, space.skymap, dust)
        visits = Visits.of(patchwork, overlay, coverage.observations, coefficients)
        return cls(space, overlay, visits)

    @classmethod
    def of_brackets(
        cls, space: Space, coverage: Coverage, dust: Dust | None, coefficients: Mapping[str, float]
    ) -> list[Scene]:
        """Scenes of the centre rule's, the inner and the outer patchwork."""
        patchworks = coverage.centre, coverage.inner, coverage.outer
        return [cls.of(space, p, coverage, dust, coefficients) for p in patchworks]

    def rows_of(self, place: Ints) -> tuple[Ints, Ints]:
        """Overlay rows of each place given: (position in ``place``, row)."""
        first = np.searchsorted(self.overlay.place, np.arange(self.overlay.places + 1))
        return expand_ranges(first[place], np.diff(first)[place])

    def detectable(self, place: Ints, reach_mpc: Floats) -> Floats:
        """Probability within reach at each place given, shape (n,)."""
        position, row = self.rows_of(place)
        held = self.overlay.probability[row] * self.space.within(
            self.overlay.cell[row], reach_mpc[position]
        )
        return sum_by(position, held, place.size)


@dataclass(frozen=True, eq=False)
class SeenSource:
    """What a source is worth visit by visit, and in which order visits decide.

    Attributes
    ----------
    source, scene
        What is looked for, and where.
    place, exposure : int64 arrays, shape (visits,)
        Visits by place and falling reach.
    start_mjd, reach_mpc : float64 arrays, shape (visits,)
        Start, and luminosity distance at the limit; 0 where unseen.
    worth : float64 array, shape (visits,)
        Probability within this reach at the visit's place (zero for a
        detection curve, which has no single reach).
    """

    source: Source
    scene: Scene
    place: Ints
    exposure: Ints
    start_mjd: Floats
    reach_mpc: Floats
    worth: Floats

    @classmethod
    def of(cls, source: Source, scene: Scene, coverage: Coverage, event_mjd: float) -> SeenSource:
        """Reach of a source in every visit of a scene."""
        magnitude = absolute_magnitudes(source, coverage.observations, event_mjd)
        reach = visit_reach(scene.visits, source, magnitude, scene.space.cosmology)
        order = order_by_reach(scene.visits.place, reach)
        place, exposure, reach = (
            scene.visits.place[order],
            scene.visits.exposure[order],
            reach[order],
        )
        start = coverage.observations.start_mjd[exposure]
        worth = scene.detectable(place, reach) if _is_step(source) else np.zeros(reach.size)
        return cls(source, scene, place, exposure, start, reach, worth)

    def decide(self, chosen: Bools) -> tuple[Ints, Ints]:
        """Places that a selection's exposures see often enough, and the visit that decides."""
        mine = np.flatnonzero(chosen[self.exposure])
        place, row = deciding_visits(
            self.place[mine], self.start_mjd[mine], self.source.visits, self.source.gap_minutes
        )
        return place, mine[row]

    def reach_by_place(self) -> Floats:
        """How far all exposures together would have shown it, 0 where unseen; (places,)."""
        reach = np.zeros(self.scene.overlay.places)
        place, visit = self.decide(np.ones(int(self.exposure.max(initial=-1)) + 1, dtype=bool))
        reach[place] = self.reach_mpc[visit]
        return reach

    def probability(self, chosen: Bools) -> float:
        """Detectable probability of a selection."""
        if _is_step(self.source):
            return float(self.worth[self.decide(chosen)[1]].sum())
        return sum(
            float(np.sum(share * self._held[place]))
            for place, _, share in self._curve_shares(chosen)
        )

    def shares(self, chosen: Bools) -> Iterator[tuple[Ints, Floats, Floats]]:
        """Yield places, distances (m, nodes), and the share seen up to each from the one before."""
        if _is_step(self.source):
            place, visit = self.decide(chosen)
            yield place, self.reach_mpc[visit][:, None], np.ones((place.size, 1))
        else:
            yield from self._curve_shares(chosen)

    def _curve_shares(self, chosen: Bools) -> Iterator[tuple[Ints, Floats, Floats]]:
        """Sample the detection curves between nodes common to all places."""
        mine = np.flatnonzero(chosen[self.exposure] & (self.reach_mpc > 0))
        mine = mine[np.lexsort((self.start_mjd[mine], self.place[mine]))]
        if mine.size == 0:
            return
        nodes = self._nodes
        middles = np.sqrt(nodes * np.append(0.5 * nodes[0], nodes[:-1]))
        gradual = self.source.detection.width > 0
        sampled = np.concatenate((middles, nodes)) if gradual else middles
        cut = np.flatnonzero(np.diff(self.place[mine], prepend=-1))
        block = cut // max(_NUMBERS_AT_ONCE // (sampled.size * self.source.visits), 1)
        starts = cut[np.flatnonzero(np.diff(block, prepend=-1))]
        for begin, end in zip(starts, np.append(starts[1:], mine.size)):
            rows = mine[begin:end]
            place, share = seen_share(
                self.place[rows],
                self.start_mjd[rows],
                self._efficiency(sampled, self.reach_mpc[rows]),
                self.source.visits,
                self.source.gap_minutes,
            )
            if gradual:
                share = _mean_between(*np.hsplit(share, 2))
            yield place, np.broadcast_to(nodes, share.shape), share

    def _efficiency(self, distance: Floats, reach: Floats) -> Floats:
        """Chance that each visit shows a source at each distance, (visits, distances)."""
        detection = self.source.detection
        beyond = 5 * np.log10(distance / reach[:, None])
        if self.source.k_correction == "flat":
            beyond -= 2.5 * np.log10(self._stretch(distance) / self._stretch(reach)[:, None])
        return np.asarray(detection.efficiency(beyond + detection.offset))

    def _stretch(self, distance: Floats) -> Floats:
        """Return 1 + z, that of redshift 1000 beyond it."""
        cosmology = self.scene.space.cosmology
        return 1 + cosmology.redshift(np.minimum(distance, cosmology.limit_mpc))

    @cached_property
    def _nodes(self) -> Floats:
        """Distances (Mpc) from where detection is sure to where it has ended, rising."""
        width = self.source.detection.width
        reach = np.unique(self.reach_mpc[self.reach_mpc > 0])
        if reach.size == 0:
            return reach
        if width == 0:
            kept = np.linspace(0, reach.size - 1, min(reach.size, _MOST_EDGES))
            return np.asarray(reach[kept.astype(int)])
        spread_mag = 5 / np.log(10) * self.scene.space.least_spread
        step = max(min(_STEP_WIDTHS * width, _STEP_SPREADS * spread_mag), _LEAST_STEP_MAG)
        # With a flat spectrum's K-correction a source dims down to half as fast with distance.
        margin = _END_WIDTHS * width * (2 if self.source.k_correction == "flat" else 1)
        near, far = 5 * np.log10(self.scene.space.extent_mpc)
        low = min(max(5 * np.log10(reach[0]) - margin, near), far)
        high = max(min(5 * np.log10(reach[-1]) + margin, far), low)
        return np.asarray(10 ** (np.linspace(low, high, int((high - low) / step) + 2) / 5))

    @cached_property
    def _held(self) -> Floats:
        """Probability of each place between a node and the one before, (places, nodes).

        The same for every selection, so it is made once.
        """
        overlay = self.scene.overlay
        # Many rows lie in few cells: distances are looked up once per cell.
        cells, rank = np.unique(overlay.cell, return_inverse=True)
        held = np.empty((overlay.places, self._nodes.size))
        below = np.zeros(cells.size)
        for number, node in enumerate(self._nodes):
            within = self.scene.space.within(cells, np.full(cells.size, node))
            part = overlay.probability * (within - below)[rank]
            held[:, number] = sum_by(overlay.place, part, overlay.places)
            below = within
        return held


def tally_sources(
    coverage: Coverage,
    space: Space,
    sources: Sequence[Source],
    event_mjd: float,
    dust: Dust | None,
    coefficients: Mapping[str, float],
) -> list[SourceRow]:
    """Tally every source for every selection on one map version with distances."""
    scenes = Scene.of_brackets(space, coverage, dust, coefficients)
    return tally_scenes(coverage, scenes, sources, event_mjd)


def tally_scenes(
    coverage: Coverage, scenes: Sequence[Scene], sources: Sequence[Source], event_mjd: float
) -> list[SourceRow]:
    """Tally every source for every selection, given the map's scenes.

    ``scenes`` are as `Scene.of_brackets` makes them.
    """
    rows = []
    for source in sources:
        seen = [SeenSource.of(source, scene, coverage, event_mjd) for scene in scenes]
        volumes = _Volumes.of(seen[0])
        for selection in selections(coverage.observations):
            rows.append(_row(scenes[0].space, selection, seen, volumes))
    return rows


@dataclass(frozen=True, eq=False)
class _Volumes:
    """Volumes per visit of the centre rule's scene, and what each place holds."""

    reach_mpc3: Floats  # (visits,)
    reach_comoving: Floats
    within_mpc3: Floats
    within_comoving: Floats
    covered_mpc3: Floats  # (places,)
    covered_comoving: Floats
    probability: Floats
    without: Floats

    @classmethod
    def of(cls, seen: SeenSource) -> _Volumes:
        scene = seen.scene
        overlay, space = scene.overlay, scene.space
        solid = sum_by(overlay.place, overlay.solid_angle_sr, overlay.places)
        position, row = scene.rows_of(seen.place)
        within, within_comoving = space.credible_shell(
            overlay.cell[row], overlay.solid_angle_sr[row], seen.reach_mpc[position]
        )
        far = np.full(overlay.cell.size, np.inf)
        covered, covered_comoving = space.credible_shell(overlay.cell, overlay.solid_angle_sr, far)
        unknown = (overlay.cell < 0) | ~space.known[overlay.cell]
        zero = np.zeros(seen.reach_mpc.size)
        return cls(
            solid[seen.place] * seen.reach_mpc**3 / 3,
            space.comoving_shell(solid[seen.place], zero, seen.reach_mpc),
            sum_by(position, within, seen.place.size),
            sum_by(position, within_comoving, seen.place.size),
            sum_by(overlay.place, covered, overlay.places),
            sum_by(overlay.place, covered_comoving, overlay.places),
            sum_by(overlay.place, overlay.probability, overlay.places),
            sum_by(overlay.place, np.where(unknown, overlay.probability, 0.0), overlay.places),
        )


def _row(
    space: Space, selection: Selection, seen: Sequence[SeenSource], volumes: _Volumes
) -> SourceRow:
    """Put one selection's numbers for one source together."""
    centre = seen[0]
    value, low, high = (one.probability(selection.chosen) for one in seen)
    places = np.unique(centre.place[selection.chosen[centre.exposure]])
    place, visit = centre.decide(selection.chosen)
    reach = np.zeros(places.size)
    reach[np.searchsorted(places, place)] = centre.reach_mpc[visit]
    covered = float(volumes.probability[places].sum())
    without = float(volumes.without[places].sum())
    has_90 = space.credible(0.9) is not None

    def total(part: Floats, where: Ints) -> float | None:
        return float(part[where].sum()) if has_90 else None

    return SourceRow(
        space.skymap.label,
        selection.telescope,
        selection.band,
        selection.night,
        centre.source.name,
        *_reach_numbers(reach, volumes.probability[places]),
        value,
        min(low, value),
        max(high, value),
        max(covered - without - value, 0.0),
        without,
        float(volumes.reach_mpc3[visit].sum()),
        float(volumes.reach_comoving[visit].sum()),
        total(volumes.covered_mpc3, places),
        total(volumes.covered_comoving, places),
        total(volumes.within_mpc3, visit),
        total(volumes.within_comoving, visit),
    )


def _mean_between(middle: Floats, end: Floats) -> Floats:
    """Mean of a smooth curve over intervals, as the increments of another weight it.

    The midpoint rule and the trapezoid rule, in the proportion in which the
    leading errors of ∫ S dF cancel (Richardson's extrapolation).
    """
    begin = np.concatenate((middle[:, :1], end[:, :-1]), axis=1)
    return np.asarray((8 * middle - begin - end) / 6)


def _is_step(source: Source) -> bool:
    """Whether an exposure certainly shows everything down to some magnitude."""
    return source.detection.width == 0 and source.detection.plateau == 1


def _reach_numbers(
    reach: Floats, weight: Floats
) -> tuple[float | None, float | None, float | None]:
    """Least, median (by weight) and greatest reach; None where nothing is reached."""
    reached = reach > 0
    if not reached.any():
        return None, None, None
    order = np.argsort(reach)
    held = np.cumsum(weight[order])
    middle = min(int(np.searchsorted(held, held[-1] / 2)), reach.size - 1)
    return float(reach[reached].min()), float(reach[order[middle]]), float(reach.max())
