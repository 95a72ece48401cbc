"""What was covered by which exposures, before any map is looked at."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.footprints import Footprints
from skytally.grouping import expand_ranges
from skytally.observations import Observations
from skytally.patchwork import Patchwork
from skytally.selection import Selection
from skytally.spans import Ints

__all__ = ["Chosen", "Coverage", "TallySettings", "visits_of"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class TallySettings:
    """What counts as a revisit, and when the event was."""

    event_mjd: float
    revisit_visits: int
    revisit_gap_minutes: float


@dataclass(frozen=True, eq=False)
class Coverage:
    """What was covered by what, before any map is looked at.

    Attributes
    ----------
    footprints : Footprints
        Exposures and their rasterised footprints.
    extinction : float64 array, shape (exposures,)
        Galactic extinction A_b of each exposure, NaN where none is known.
    centre, inner, outer : Patchwork
        The patchwork by the centre rule, and those of the two brackets.
    """

    footprints: Footprints
    extinction: Floats
    centre: Patchwork
    inner: Patchwork
    outer: Patchwork

    @classmethod
    def build(cls, footprints: Footprints, extinction: Floats | None = None) -> Coverage:
        """Cut the line once for each of the three regions.

        ``extinction`` is that of each exposure as in the attribute; the logs'
        own where it is left out.
        """
        raster = footprints.raster
        return cls(
            footprints,
            footprints.observations.extinction if extinction is None else extinction,
            Patchwork.build(raster.centre),
            Patchwork.build(raster.inner),
            Patchwork.build(raster.outer),
        )

    @property
    def observations(self) -> Observations:
        """The exposures."""
        return self.footprints.observations

    @cached_property
    def corrected_depth(self) -> Floats:
        """Limits less the extinction where one is known, shape (exposures,)."""
        known = np.isfinite(self.extinction)
        return self.observations.depth - np.where(known, self.extinction, 0.0)

    @cached_property
    def visits(self) -> tuple[Ints, Ints]:
        """Pairs of set and exposure of the centre rule's patchwork; see `visits_of`."""
        return visits_of(self.centre, self.observations)


def visits_of(patchwork: Patchwork, observations: Observations) -> tuple[Ints, Ints]:
    """Pairs of set and exposure, sets rising and exposures in time order within each."""
    exposures = max(len(observations), 1)
    by_footprint = np.argsort(observations.footprint, kind="stable")
    count = np.bincount(
        observations.footprint, minlength=int(patchwork.members.max(initial=-1)) + 1
    )
    before = np.cumsum(count) - count
    members = patchwork.members
    row, place = expand_ranges(before[members], count[members])
    exposure, group = by_footprint[place], patchwork.set_of_member[row]
    order = np.argsort(group * exposures + exposure)
    return group[order], exposure[order]


@dataclass(frozen=True, eq=False)
class Chosen:
    """The part of a coverage that one selection sees, whatever the map.

    Attributes
    ----------
    selection : Selection
        The exposures.
    footprints : bool array, shape (footprints,)
        Their footprints.
    covered, covered_inner, covered_outer : bool arrays
        Sets of the three patchworks that they cover.
    revisited : bool array, shape (sets,)
        Sets visited often enough, the first and last visit far enough apart.
    visit_set, visit_exposure : int64 arrays, shape (visits,)
        Pairs of set and chosen exposure, exposures in time order within a set.
    first_end_mjd : float64 array, shape (sets,)
        End of the exposure that first completed each set; inf where none did.
    """

    selection: Selection
    footprints: Bools
    covered: Bools
    covered_inner: Bools
    covered_outer: Bools
    revisited: Bools
    visit_set: Ints
    visit_exposure: Ints
    first_end_mjd: Floats

    @classmethod
    def of(cls, coverage: Coverage, selection: Selection, settings: TallySettings) -> Chosen:
        """Look at a coverage through one selection."""
        footprints = coverage.footprints.of(selection.chosen)
        group, exposure = coverage.visits
        mine = selection.chosen[exposure]
        group, exposure = group[mine], exposure[mine]
        first = np.flatnonzero(np.diff(group, prepend=-1))
        last = np.append(first, group.size)[1:] - 1
        here = group[first]
        start, end = coverage.observations.start_mjd, coverage.observations.end_mjd
        # A microsecond of slack: double precision resolves MJD no better.
        gap = settings.revisit_gap_minutes / 1440.0 - 1e-11
        often = last - first + 1 >= settings.revisit_visits
        apart = start[exposure[last]] - start[exposure[first]] >= gap
        covered, revisited = (np.zeros(coverage.centre.sets, dtype=bool) for _ in range(2))
        covered[here] = True
        revisited[here] = often & apart
        first_end = np.full(coverage.centre.sets, np.inf)
        if first.size:
            first_end[here] = np.minimum.reduceat(end[exposure], first)
        return cls(
            selection,
            footprints,
            covered,
            coverage.inner.covered_by(footprints),
            coverage.outer.covered_by(footprints),
            revisited,
            group,
            exposure,
            first_end,
        )
