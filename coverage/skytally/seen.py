"""What would have been seen of a source: look by look, and against distance."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from skytally.cosmology import Cosmology
from skytally.grouping import Lists
from skytally.reach import (
    Visits,
    absolute_magnitudes,
    deciding_looks,
    reach_of_looks,
    seen_share,
)
from skytally.sources import Source
from skytally.space import Space, blocks
from skytally.spans import Ints

__all__ = ["DetectionCurve", "SeenSource", "Shells", "detection_nodes"]

Floats = NDArray[np.float64]

# Steps of the integral over a detection curve, in magnitudes of distance modulus:
# so many widths of the logistic, and so many standard deviations of the narrowest
# distances. That errs by less than 1e-4 in probability.
_STEP_WIDTHS, _STEP_SPREADS, _LEAST_STEP_MAG = 0.65, 1.2, 0.005
# So many widths from its middle a logistic is within 1e-5 of its end.
_END_WIDTHS = 10
# Where detection ends abruptly the reaches are the nodes, or so many of them.
_MOST_EDGES = 400
_NUMBERS_AT_ONCE = 400_000


@dataclass(frozen=True, eq=False)
class SeenSource:
    """What a source is worth in each look, whatever the map.

    Attributes
    ----------
    source, visits
        What is looked for, and what looked.
    cosmology : Cosmology
        For its K-correction.
    start_mjd, reach_mpc : float64 arrays, shape (looks,)
        Start, and luminosity distance at the limit; 0 where unseen.
    """

    source: Source
    visits: Visits
    cosmology: Cosmology
    start_mjd: Floats
    reach_mpc: Floats

    @classmethod
    def of(
        cls,
        source: Source,
        visits: Visits,
        event_mjd: float,
        cosmology: Cosmology,
    ) -> SeenSource:
        """Find the reach of a source in every look."""
        magnitude = absolute_magnitudes(source, visits.observations, event_mjd)
        reach = reach_of_looks(visits, source, magnitude, cosmology)
        start = visits.observations.start_mjd[visits.exposure]
        return cls(source, visits, cosmology, start, reach)

    @property
    def is_step(self) -> bool:
        """Whether an exposure certainly shows everything down to some magnitude."""
        return self.source.detection.width == 0 and self.source.detection.plateau == 1

    @property
    def is_once(self) -> bool:
        """Whether the one exposure that reaches farthest decides."""
        return self.is_step and self.source.visits == 1

    def reach_at(self, seen: Lists) -> Floats:
        """How far each list of looks would have shown the source, 0 where unseen; (lists,)."""
        look = deciding_looks(
            seen, self.reach_mpc, self.start_mjd, self.source.visits, self.source.gap_minutes
        )
        return np.append(self.reach_mpc, 0.0)[look]

    def faintness(self, distance_mpc: Floats) -> Floats:
        """Apparent less absolute magnitude at a distance, but for a constant; (n,)."""
        modulus = 5 * np.log10(distance_mpc)
        if self.source.k_correction == "flat":
            # Beyond redshift 1000 it stays as it is there.
            known = np.minimum(distance_mpc, self.cosmology.limit_mpc)
            modulus -= 2.5 * np.log10(1 + self.cosmology.redshift(known))
        return modulus

    @cached_property
    def faintest(self) -> Floats:
        """`faintness` at the reach of each look; −inf where unseen, (looks,)."""
        found = np.full(self.reach_mpc.size, -np.inf)
        reached = self.reach_mpc > 0
        found[reached] = self.faintness(self.reach_mpc[reached])
        return found


def detection_nodes(seen: SeenSource, spaces: Sequence[Space]) -> Floats:
    """Distances (Mpc) from where detection is sure to where it has ended, rising.

    Fine enough for the source on every one of the maps.
    """
    source = seen.source
    width = source.detection.width
    reach = np.unique(seen.reach_mpc[seen.reach_mpc > 0])
    if reach.size == 0:
        return reach
    if width == 0:
        kept = np.linspace(0, reach.size - 1, min(reach.size, _MOST_EDGES))
        return np.asarray(reach[kept.astype(int)])
    spread_mag = 5 / np.log(10) * min(space.least_spread for space in spaces)
    step = max(min(_STEP_WIDTHS * width, _STEP_SPREADS * spread_mag), _LEAST_STEP_MAG)
    # With a flat spectrum's K-correction a source dims down to half as fast with distance.
    margin = _END_WIDTHS * width * (2 if source.k_correction == "flat" else 1)
    nearest, farthest = zip(*(space.extent_mpc for space in spaces))
    near, far = 5 * np.log10(min(nearest)), 5 * np.log10(max(farthest))
    low = min(max(5 * np.log10(reach[0]) - margin, near), far)
    high = max(min(5 * np.log10(reach[-1]) + margin, far), low)
    return np.asarray(10 ** (np.linspace(low, high, int((high - low) / step) + 2) / 5))


@dataclass(frozen=True, eq=False)
class Shells:
    """Chance that something in a map's cells lies between a node and the one before.

    Attributes
    ----------
    cells : int64 array, shape (n,)
        Cells of the map; −1 for what lies off it.
    chance : float64 array, shape (n, nodes)
        0 without distance.
    """

    cells: Ints
    chance: Floats

    @classmethod
    def of(cls, space: Space, cells: Ints, nodes: Floats) -> Shells:
        """Cut the distance distributions of cells at nodes (Mpc)."""
        chance = np.empty((cells.size, nodes.size))
        for block in blocks(cells.size):
            distances = space.distances.take(cells[block])
            before = np.zeros(distances.m.size)
            for number, node in enumerate(nodes):
                within = distances.within(node)
                chance[block, number] = within - before
                before = within
        return cls(cells, chance)


@dataclass(frozen=True, eq=False)
class DetectionCurve:
    """Chance of seeing a source against its distance.

    Attributes
    ----------
    seen : SeenSource
        The source.
    nodes : float64 array
        As `detection_nodes` chooses them.
    """

    seen: SeenSource
    nodes: Floats

    @cached_property
    def _sampled(self) -> Floats:
        """Middles between the nodes and, where detection is gradual, the nodes; `faintness`."""
        middles = np.sqrt(self.nodes * np.append(0.5 * self.nodes[:1], self.nodes[:-1]))
        gradual = self.seen.source.detection.width > 0
        distances = np.concatenate((middles, self.nodes)) if gradual else middles
        return self.seen.faintness(distances)

    def shares(self, seen: Lists) -> Floats:
        """Chance that each list of looks shows the source between a node and the one before.

        Shape (lists, nodes).
        """
        # Only the looks in these lists, renumbered: they are few where lists are neighbours.
        here = np.zeros(self.seen.reach_mpc.size, dtype=bool)
        here[seen.items] = True
        number = np.cumsum(here, dtype=np.int32) - 1
        source = self.seen.source
        beyond = self._sampled - self.seen.faintest[here][:, None]
        share = seen_share(
            Lists(seen.offsets, number[seen.items]),
            self.seen.start_mjd[here],
            source.detection.efficiency(beyond + source.detection.offset),
            source.visits,
            source.gap_minutes,
        )
        if source.detection.width == 0:
            return share
        return _mean_between(*np.hsplit(share, 2))

    def blocks(self, seen: Lists) -> Iterator[slice]:
        """Cut lists into runs whose shares fit into memory."""
        if self.nodes.size == 0:
            return iter(())
        most = max(_NUMBERS_AT_ONCE // self._sampled.size, 1)
        if self.seen.source.visits > 1:
            return seen.blocks(most)
        return (slice(first, first + most) for first in range(0, len(seen), most))

    def probability(self, seen: Lists, maps: Sequence[tuple[csr_array, Shells]]) -> Floats:
        """Probability that the source would have been seen, on each of the maps.

        Parameters
        ----------
        seen : Lists
            The looks at each place.
        maps : sequence of (sparse table, Shells)
            Of each map what its cells hold at these places, `Overlay.table`, and the cells cut.
        """
        found = np.zeros(len(maps))
        for block in self.blocks(seen):
            shares = self.shares(seen.part(block))
            for number, (table, shells) in enumerate(maps):
                found[number] += np.einsum("pn,pn", shares, table[block] @ shells.chance)
        return found


def _mean_between(middle: Floats, end: Floats) -> Floats:
    """Mean of a smooth curve over intervals, as the increments of another weight it.

    The midpoint rule and the trapezoid rule, in the proportion in which the
    leading errors of ∫ S dF cancel (Richardson's extrapolation).
    """
    begin = np.concatenate((middle[:, :1], end[:, :-1]), axis=1)
    return np.asarray((8 * middle - begin - end) / 6)
