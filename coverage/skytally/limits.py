"""What could have been seen: reach, detectable probability and volume for each source."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from operator import itemgetter
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Coverage
from skytally.dust import Dust
from skytally.overlay import Overlay, Places
from skytally.patchwork import Layer
from skytally.reach import View, Visits
from skytally.seen import DetectionCurve, SeenSource
from skytally.sources import Source
from skytally.space import Space

__all__ = ["Scene", "SourceRow", "tally_sources", "visits_of_brackets"]

Floats = NDArray[np.float64]
T = TypeVar("T")


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

    def through(self, view: View) -> Overlay:
        """What a selection sees, the places being its kinds of place."""
        return self.overlay.joined(view.kind, len(view.seen))


def visits_of_brackets(
    coverage: Coverage,
    spaces: Sequence[Space],
    dust: Dust | None,
    coefficients: Mapping[str, float],
) -> Iterator[Visits]:
    """Yield the visits of the centre rule's, the inner and the outer patchwork.

    All are cut at the edges of every map.
    """
    layers: list[Layer] = [space.skymap for space in spaces]
    if dust is not None:
        layers.append(dust)
    patchworks = coverage.centre, coverage.inner, coverage.outer
    for patchwork, cut in zip(patchworks, coverage.cuts(layers)):
        places = Places.of(cut, dust)
        yield Visits.of(patchwork, places, coverage.observations, coefficients)


def tally_sources(
    brackets: Sequence[Visits], spaces: Sequence[Space], sources: Sequence[Source], event_mjd: float
) -> list[SourceRow]:
    """Tally every source for every selection on every map version with distances, map by map.

    Parameters
    ----------
    brackets : sequence of Visits
        As `visits_of_brackets` makes them.
    """
    centre, *edges = brackets
    rows = _each(_Part.row, centre, spaces, sources, event_mjd)
    low, high = (_each(_Part.probability, v, spaces, sources, event_mjd) for v in edges)
    return [
        replace(
            row,
            probability_low=min(low[key], row.probability),
            probability_high=max(high[key], row.probability),
        )
        for key, row in sorted(rows.items(), key=itemgetter(0))
    ]


def _each(
    number: Callable[[_Part], T],
    visits: Visits,
    spaces: Sequence[Space],
    sources: Sequence[Source],
    event_mjd: float,
) -> dict[tuple[int, int, int], T]:
    """Find a number for every map, source and selection."""
    views = visits.views
    seen = [SeenSource.of(source, visits, event_mjd, spaces[0].cosmology) for source in sources]
    reach = [[one.reach_at(view.seen) for view in views] for one in seen]
    found = {}
    for version, space in enumerate(spaces):
        scene = Scene.of(space, visits)
        cells = scene.overlay.cells()
        curves = [DetectionCurve(one, space, cells) for one in seen]
        for which, view in enumerate(views):
            overlay = scene.through(view)
            for source, curve in enumerate(curves):
                part = _Part(view, overlay, curve, reach[source][which])
                found[version, source, which] = number(part)
    return found


@dataclass(frozen=True, eq=False)
class _Part:
    """One selection's part of a map, and how far one source would have been seen there."""

    view: View
    overlay: Overlay
    curve: DetectionCurve
    reach_mpc: Floats  # by kind of place

    def probability(self) -> float:
        """Probability that the source would have been seen."""
        if not self.curve.seen.is_step:
            return self.curve.probability(self.overlay, self.view.seen)
        within = self.curve.space.within(self.overlay.cell, self.reach_mpc[self.overlay.place])
        return float(self.overlay.probability @ within)

    def row(self) -> SourceRow:
        """Put the numbers together, the bracket being the value alone."""
        overlay, space, selection = self.overlay, self.curve.space, self.view.selection
        value, reach = self.probability(), self.reach_mpc
        covered = float(overlay.probability.sum())
        unknown = ~np.append(space.known, False)[overlay.cell]
        without = float(overlay.probability[unknown].sum())
        solid = overlay.by_place(overlay.solid_angle_sr)
        return SourceRow(
            space.skymap.label,
            selection.telescope,
            selection.band,
            selection.night,
            self.curve.seen.source.name,
            *_reach_numbers(reach, overlay.by_place(overlay.probability)),
            value,
            value,
            value,
            max(covered - without - value, 0.0),
            without,
            float(solid @ reach**3) / 3,
            float(solid @ space.comoving_per_sr(reach)),
            *self._volumes_90(),
        )

    def _volumes_90(self) -> tuple[float | None, float | None, float | None, float | None]:
        """Covered part of the 90 % volume, both kinds, and what of it is within reach."""
        overlay, space, reach = self.overlay, self.curve.space, self.reach_mpc
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
