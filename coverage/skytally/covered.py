"""What was covered by which exposures, before any map is looked at."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.footprints import Footprints
from skytally.grouping import Lists, sum_by
from skytally.observations import Observations
from skytally.patchwork import CutPatchwork, Layer, Patchwork, edges_of
from skytally.selection import Selection
from skytally.spans import Ints

__all__ = ["Chosen", "Coverage", "TallySettings", "exposures_of"]

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
    _cuts: list[tuple[CutPatchwork, ...]] = field(default_factory=list, init=False, repr=False)

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

    def cuts(self, layers: Sequence[Layer]) -> tuple[CutPatchwork, ...]:
        """Cut the three patchworks wherever a layer may change: centre, inner and outer.

        They are kept, and given again where they were cut at all of the edges.
        """
        edges = edges_of(*layers)
        if not self._cuts or not self._cuts[0][0].knows(edges):
            self._cuts[:] = [tuple(p.cut(edges) for p in (self.centre, self.inner, self.outer))]
        return self._cuts[0]

    @cached_property
    def exposures(self) -> Lists:
        """The exposures, in time order, that covered each set of the centre rule's patchwork."""
        return exposures_of(self.centre, self.observations)


def exposures_of(patchwork: Patchwork, observations: Observations) -> Lists:
    """List the exposures, in time order, that covered each set of a patchwork."""
    members = patchwork.lists.table(int(observations.footprint.max(initial=0)) + 1)
    # By exposure, then back by set: counting sorts, which keep the order of time.
    return Lists.of_table(members.tocsc()[:, observations.footprint.astype(np.int32)].tocsr())


@dataclass(frozen=True, eq=False)
class Chosen:
    """The part of a coverage that one selection sees, whatever the map.

    Many sets differ by nothing that the selection sees: they are of one kind,
    known by the list of its exposures there.

    Attributes
    ----------
    selection : Selection
        The exposures.
    footprints : bool array, shape (footprints,)
        Their footprints.
    covered, covered_inner, covered_outer : bool arrays, shape (sets,)
        Which sets of each patchwork the selection covers.
    kind : int32 array, shape (sets,)
        Kind of each set of the centre rule's patchwork; −1 where not covered.
    revisited : bool array, shape (kinds,)
        Kinds that were visited often enough, far enough apart.
    ends_mjd : float64 array, shape (ends,)
        Ends of exposures that completed new sky, rising.
    first_end : int64 array, shape (kinds,)
        Which of these completed each kind first.
    """

    selection: Selection
    footprints: Bools
    covered: Bools
    covered_inner: Bools
    covered_outer: Bools
    kind: NDArray[np.int32]
    revisited: Bools
    ends_mjd: Floats
    first_end: Ints

    @classmethod
    def every(
        cls, coverage: Coverage, choices: Sequence[Selection], settings: TallySettings
    ) -> Iterator[tuple[Chosen, Lists]]:
        """Look at a coverage through one selection after the other.

        With each comes what is too large to keep: the chosen exposures of each kind
        of set, in time order.
        """
        footprints = [coverage.footprints.of(selection.chosen) for selection in choices]
        inner = coverage.inner.covered_by_each(footprints)
        outer = coverage.outer.covered_by_each(footprints)
        for selection, *parts in zip(choices, footprints, inner, outer):
            exposures, kind = coverage.exposures.alike(selection.chosen)
            yield cls._of(coverage, settings, selection, exposures, kind, *parts), exposures

    @classmethod
    def _of(
        cls,
        coverage: Coverage,
        settings: TallySettings,
        selection: Selection,
        exposures: Lists,
        kind: NDArray[np.int32],
        footprints: Bools,
        covered_inner: Bools,
        covered_outer: Bools,
    ) -> Chosen:
        o = coverage.observations
        first, last = exposures.offsets[:-1], exposures.offsets[1:] - 1
        # A microsecond of slack: double precision resolves MJD no better.
        gap = settings.revisit_gap_minutes / 1440.0 - 1e-11
        often = np.diff(exposures.offsets) >= settings.revisit_visits
        passed = o.start_mjd[exposures.items[last]] - o.start_mjd[exposures.items[first]]
        ends, step = np.unique(exposures.reduce(np.minimum, o.end_mjd), return_inverse=True)
        return cls(
            selection,
            footprints,
            kind >= 0,
            covered_inner,
            covered_outer,
            kind,
            often & (passed >= gap),
            ends,
            step,
        )

    def by_kind(self, amount: Floats) -> Floats:
        """Sum what the sets hold, shape (sets,), over those of each kind."""
        return sum_by(self.kind[self.covered], amount[self.covered], self.revisited.size)
