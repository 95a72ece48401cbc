"""What could have been seen: reach, detectable probability and volume for each source."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from operator import itemgetter
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from skytally.cosmology import Cosmology
from skytally.covered import Coverage
from skytally.dust import Dust
from skytally.overlay import Overlay, Places
from skytally.patchwork import Layer, Patchwork
from skytally.reach import View, Visits, kinds_by_reach
from skytally.seen import DetectionCurve, SeenSource, Shells, detection_nodes
from skytally.selection import Selection, selections
from skytally.sources import Source
from skytally.space import Space
from skytally.spans import Ints
from skytally.workers import side_by_side

__all__ = ["Brackets", "Scene", "SourceRow", "tally_sources"]

Floats = NDArray[np.float64]
_Key = tuple[int, int, int]  # map, source and selection

# Bounds what the maps' cells take that are cut along distance, in numbers of 8 bytes.
_SHELLS_AT_ONCE = 20_000_000


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
    """One map's third dimension laid under the places of one patchwork.

    Attributes
    ----------
    space : Space
        The map.
    visits : Visits
        The places, and which exposures looked at them.
    overlay : Overlay
        Covered sky by place and cell.
    """

    space: Space
    visits: Visits
    overlay: Overlay

    @classmethod
    def of(cls, space: Space, visits: Visits) -> Scene:
        """Lay a map, at whose edges the places were cut, under them."""
        return cls(space, visits, visits.places.over(space.skymap))


@dataclass(frozen=True, eq=False)
class Brackets:
    """What looked at the places of the three patchworks, cut at the edges of every map.

    The inner and the outer one are made anew each time: they are large, and asked for once.
    The outer one holds every look of the others.

    Attributes
    ----------
    coverage : Coverage
        What was covered.
    spaces : sequence of Space
        The maps with distances.
    dust : Dust or None
        Dust in front, at whose edges the patchworks are cut, too.
    coefficients : mapping of str to float
        A_b / E(B−V) of bands beside those known.
    """

    coverage: Coverage
    spaces: Sequence[Space]
    dust: Dust | None
    coefficients: Mapping[str, float]

    @cached_property
    def centre(self) -> Visits:
        """By the centre rule."""
        return self._visits(0, self.coverage.centre)

    @property
    def inner(self) -> Visits:
        """What is certainly covered."""
        return self._visits(1, self.coverage.inner)

    @property
    def outer(self) -> Visits:
        """What may be covered."""
        return self._visits(2, self.coverage.outer)

    def _visits(self, which: int, patchwork: Patchwork) -> Visits:
        layers: list[Layer] = [space.skymap for space in self.spaces]
        if self.dust is not None:
            layers.append(self.dust)
        places = Places.of(self.coverage.cuts(layers)[which], self.dust)
        return Visits.of(patchwork, places, self.coverage.observations, self.coefficients)


def tally_sources(
    brackets: Brackets, sources: Sequence[Source], event_mjd: float
) -> list[SourceRow]:
    """Tally every source for every selection on every map version with distances, map by map."""
    spaces, found, rows = brackets.spaces, [], {}
    groups: list[list[_Version]] = []
    nodes: list[Floats | None] = []
    for which in ("outer", "inner", "centre"):
        bracket = _Bracket.of(getattr(brackets, which), sources, event_mjd, spaces[0].cosmology)
        if not groups:
            nodes = [None if s.is_step else detection_nodes(s, spaces) for s in bracket.seen]
            groups = _groups(bracket.visits, spaces, nodes)
        numbers: dict[_Key, tuple[float, SourceRow | None]] = {}
        for group in groups:
            numbers |= bracket.numbers(group, nodes, which == "centre")
            if len(groups) > 1:
                for version in group:
                    version.let_go()
        found.append({key: probability for key, (probability, _) in numbers.items()})
        rows = {key: row for key, (_, row) in numbers.items() if row is not None}
        del bracket  # before the next is made
    high, low, value = found
    return [
        replace(
            row,
            probability=value[key],
            probability_low=min(low[key], value[key]),
            probability_high=max(high[key], value[key]),
            probability_beyond=max(row.probability_beyond - value[key], 0.0),
        )
        for key, row in sorted(rows.items(), key=itemgetter(0))
    ]


@dataclass(frozen=True, eq=False)
class _Version:
    """A map, and its cells that may be covered, cut at nodes by need.

    Attributes
    ----------
    number : int
        Which of the maps it is.
    space : Space
        The map.
    cells : int64 array
        The cells; −1 for what lies off the map.
    nodes : list of float64 array
        Distances for every source whose detection is gradual.
    """

    number: int
    space: Space
    cells: Ints
    nodes: list[Floats]
    _shells: list[Shells] = field(default_factory=list, init=False, repr=False)

    @property
    def shells(self) -> list[Shells]:
        """The cells cut at the nodes of every such source; kept until let go of."""
        if not self._shells:
            self._shells.extend(Shells.of(self.space, self.cells, one) for one in self.nodes)
        return self._shells

    def let_go(self) -> None:
        """Free the memory that the shells take."""
        self._shells.clear()


def _groups(
    outer: Visits, spaces: Sequence[Space], nodes: Sequence[Floats | None]
) -> list[list[_Version]]:
    """Take as many maps together as fit into memory, cut at all of the nodes."""
    gradual = [one for one in nodes if one is not None]
    per_cell = sum(one.size for one in gradual)
    groups: list[list[_Version]] = []
    left = 0
    for number, space in enumerate(spaces):
        cells = outer.places.cells(space.skymap)
        if not groups or left < cells.size * per_cell:
            groups.append([])
            left = _SHELLS_AT_ONCE
        left -= cells.size * per_cell
        groups[-1].append(_Version(number, space, cells, gradual))
    return groups


@dataclass(frozen=True, eq=False)
class _Bracket:
    """What looked at the places of one patchwork, and what it would have shown of each source."""

    visits: Visits
    seen: list[SeenSource]

    @classmethod
    def of(
        cls, visits: Visits, sources: Sequence[Source], event_mjd: float, cosmology: Cosmology
    ) -> _Bracket:
        return cls(visits, [SeenSource.of(s, visits, event_mjd, cosmology) for s in sources])

    def numbers(
        self, versions: Sequence[_Version], nodes: Sequence[Floats | None], wants_rows: bool
    ) -> dict[_Key, tuple[float, SourceRow | None]]:
        """Find the detectable probability by map, source and selection.

        And, if wanted, the row, but for this probability and what it leaves. ``nodes``
        are distances for each source, None where its detection ends abruptly.
        """
        maps = [_Under(v, Scene.of(v.space, self.visits), v.shells) for v in versions]
        gradual = [source for source, one in enumerate(nodes) if one is not None]
        found: dict[_Key, tuple[float, SourceRow | None]] = {}

        def through(numbered: tuple[int, Selection]) -> None:
            which, selection = numbered
            # Kinds of place, by exposures, serve every source; by reach, of which there are
            # far fewer, one that a single exposure shows.
            needs_view = not all(one.is_once for one in self.seen)
            view = self.visits.view(selection) if needs_view else None
            kinds = [self._kinds(one, selection, view) for one in self.seen]
            tables = []
            for of_map in maps:
                overlays = {}
                for source, (one, (kind, reach)) in enumerate(zip(self.seen, kinds)):
                    name = source if one.is_once else -1
                    if name not in overlays:
                        overlays[name] = of_map.scene.overlay.joined(kind, reach.size)
                    part = _Part(selection, overlays[name], of_map.version.space)
                    row = part.row(one.source.name, reach) if wants_rows else None
                    value = part.within(reach) if one.is_step else np.nan
                    found[of_map.version.number, source, which] = value, row
                if gradual:
                    tables.append(overlays[-1].table(of_map.version.cells))
            for place, source in enumerate(gradual):
                assert view is not None  # for this source is not shown by one exposure
                curve = DetectionCurve(self.seen[source], versions[0].nodes[place])
                held = [(table, of_map.shells[place]) for table, of_map in zip(tables, maps)]
                for of_map, value in zip(maps, curve.probability(view.seen, held)):
                    key = of_map.version.number, source, which
                    found[key] = float(value), found[key][1]

        side_by_side(through, enumerate(selections(self.visits.observations)))
        return found

    def _kinds(
        self, one: SeenSource, selection: Selection, view: View | None
    ) -> tuple[NDArray[np.int32], Floats]:
        """Kind of each place for a source, −1 where nobody looked, and the reach of each kind."""
        if view is None or one.is_once:
            chosen = selection.chosen[self.visits.exposure]
            return kinds_by_reach(self.visits.seen, one.reach_mpc, chosen)
        return view.kind, one.reach_at(view.seen)


class _Under(NamedTuple):
    """A map under the places of a bracket, its cells cut for every source seen gradually."""

    version: _Version
    scene: Scene
    shells: list[Shells]


@dataclass(frozen=True, eq=False)
class _Part:
    """One selection's part of a map."""

    selection: Selection
    overlay: Overlay
    space: Space

    def within(self, reach_mpc: Floats) -> float:
        """Probability within the reach of each kind of place."""
        within = self.space.within(self.overlay.cell, reach_mpc[self.overlay.place])
        return float(self.overlay.probability @ within)

    def row(self, source: str, reach: Floats) -> SourceRow:
        """Put the numbers together as if nothing were detectable."""
        overlay, space, selection = self.overlay, self.space, self.selection
        unknown = ~np.append(space.known, False)[overlay.cell]
        without = float(overlay.probability[unknown].sum())
        solid = overlay.by_place(overlay.solid_angle_sr)
        return SourceRow(
            space.skymap.label,
            selection.telescope,
            selection.band,
            selection.night,
            source,
            *_reach_numbers(reach, overlay.by_place(overlay.probability)),
            0.0,
            0.0,
            0.0,
            float(overlay.probability.sum()) - without,
            without,
            float(solid @ reach**3) / 3,
            float(solid @ space.comoving_per_sr(reach)),
            *self._volumes_90(reach),
        )

    def _volumes_90(
        self, reach: Floats
    ) -> tuple[float | None, float | None, float | None, float | None]:
        """Covered part of the 90 % volume, both kinds, and what of it is within reach."""
        overlay, space = self.overlay, self.space
        if space.credible(0.9) is None:
            return None, None, None, None
        rows, place = (overlay.cell, overlay.solid_angle_sr), overlay.place
        far = np.broadcast_to(np.inf, place.shape)
        covered = space.credible_shell(*rows, far, far)
        volume, comoving = reach**3 / 3, space.comoving_per_sr(reach)
        return *covered, *space.credible_shell(*rows, volume[place], comoving[place])


def _reach_numbers(
    reach: Floats, weight: Floats
) -> tuple[float | None, float | None, float | None]:
    """Least, median (by weight) and greatest reach; None where nothing is reached."""
    reached = reach > 0
    if not reached.any():
        return None, None, None
    order = np.argsort(reach)
    held = np.cumsum(weight[order])
    # Where two reaches hold half each, the nearer, however the sum was rounded.
    half = held[-1] / 2 * (1 - 1e-12)
    middle = min(int(np.searchsorted(held, half)), reach.size - 1)
    return float(reach[reached].min()), float(reach[order[middle]]), float(reach.max())
