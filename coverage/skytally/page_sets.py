"""Sets of visits and what each is worth: what a page needs to tally any choice exactly.

A choice of telescopes, bands, a time cut and a least number of visits asks one
thing of a place: which visits it had. Places that had the same visits are one
row, known by the sum of fixed random numbers of these visits. For a campaign of
many fields that would be more than a page can carry. Then less is told apart,
so that more places are alike: of each telescope and band only the first few
visits, and of these only in which step of time they ended. Every number remains
exact for the choices that can still be made; the others are not offered.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Coverage, exposures_of
from skytally.grouping import Lists, expand_ranges, sum_by
from skytally.observations import Observations
from skytally.spans import DEG2_PER_SR, Ints
from skytally.tally import SetWorth

__all__ = ["MOST_BYTES", "MapWorth", "PageSets", "SetMerger", "VisitKinds"]

Floats = NDArray[np.float64]

# What the rows may take before they are packed; as text in a page it is about as much.
MOST_BYTES = 4_000_000
_SEED = 31
# Where everything together is too large, tried in this order: how many visits of one
# telescope in one band are told apart, and in which steps of time, in hours.
_FEWER = (
    (3, (0.0, 1.0, 3.0)),
    (2, (0.0, 1.0, 3.0, 6.0, 12.0)),
    (1, (0.0, 1.0, 3.0, 6.0, 12.0, 24.0, np.inf)),
)
_WHOLE_BYTES, _SHORT_BYTES = 8, 4


@dataclass(frozen=True, eq=False)
class VisitKinds:
    """What is told apart of a visit, in order of the steps.

    Attributes
    ----------
    step_mjd : float64 array, shape (steps,)
        Times at which a cut may fall, rising: exposures that ended by then count.
    telescope, band, night, step : int64 arrays, shape (kinds,)
        Of each kind; ``night`` is 0 where nights are not told apart.
    start_mjd : float64 array, shape (kinds,)
        Start of the exposures; NaN where starts are not told apart.
    of_exposure : int64 array, shape (exposures,)
        The kind of each exposure.
    """

    step_mjd: Floats
    telescope: Ints
    band: Ints
    night: Ints
    step: Ints
    start_mjd: Floats
    of_exposure: Ints

    def __len__(self) -> int:
        return int(self.step.size)

    @classmethod
    def whole(cls, o: Observations) -> VisitKinds:
        """Tell apart every start, end, night, telescope and band."""
        ends, step = np.unique(o.end_mjd, return_inverse=True)
        table = np.stack((step, o.telescope, o.band, o.night), axis=1).astype(np.float64)
        table, kind = np.unique(np.column_stack((table, o.start_mjd)), axis=0, return_inverse=True)
        step, telescope, band, night = table[:, :4].astype(np.int64).T
        return cls(ends, telescope, band, night, step, table[:, 4], kind.reshape(-1))

    @classmethod
    def coarse(cls, o: Observations, hours: float, event_mjd: float) -> VisitKinds:
        """Tell apart telescope, band and steps of some hours since the event.

        Zero hours is a step for every end, infinity one for all.
        """
        if hours == 0 or not np.isfinite(hours):
            ends, step = np.unique(o.end_mjd, return_inverse=True)
            if hours:
                ends, step = ends[-1:], np.zeros_like(step)
        else:
            # A step holds what ends by its end, whatever the rounding of its days.
            number = np.ceil((o.end_mjd - event_mjd) * 24.0 / hours - 1e-7)
            number, step = np.unique(number, return_inverse=True)
            ends = event_mjd + number * hours / 24.0
        table = np.stack((step, o.telescope, o.band), axis=1)
        table, kind = np.unique(table, axis=0, return_inverse=True)
        step, telescope, band = table.T
        none = np.full(step.size, np.nan)
        return cls(ends, telescope, band, np.zeros_like(step), step, none, kind.reshape(-1))


@dataclass(frozen=True, eq=False)
class MapWorth:
    """What the rows are worth on one map version.

    Attributes
    ----------
    probability : float64 array, shape (forms, rows)
        By the centre rule; with brackets also the certain and the possible.
    probability_50, probability_90, area_90_deg2 : float64 arrays, shape (rows,)
        Inside the credible regions, by the centre rule.
    strip : float64 array, shape (footprints,)
        Probability in each footprint's undecided cells.
    """

    probability: Floats
    probability_50: Floats
    probability_90: Floats
    area_90_deg2: Floats
    strip: Floats


@dataclass(frozen=True, eq=False)
class PageSets:
    """Rows of places with like visits, and everything that a choice is tallied from.

    Attributes
    ----------
    kinds : VisitKinds
        The visits that are told apart.
    most_visits : int or None
        Of each telescope and band, visits beyond this are left out, so that no
        more may be asked for; None: all are there, starts and nights too.
    step_hours : float
        Length of a step of time; 0 where every end is one.
    members : int64 array, shape (m,)
        Kinds of the visits that each row had, row after row, rising within each.
    offsets : int64 array, shape (rows + 1,)
        Where each row's members begin.
    area_deg2 : float64 array, shape (forms, rows)
        As `MapWorth.probability`.
    worth : dict of str to MapWorth
        By map version.
    depth : float64 array, shape (exposures,)
        Limits less Galactic extinction where known; NaN for none.
    footprint : int64 array, shape (exposures,)
        Footprint of each exposure.
    pieces : int64 array, shape (footprints,)
        Convex pieces of each footprint.
    outlined : tuple of int64 arrays
        Per telescope, the footprint of each ring of ``SkyData.outlines``.
    """

    kinds: VisitKinds
    most_visits: int | None
    step_hours: float
    members: Ints
    offsets: Ints
    area_deg2: Floats
    worth: dict[str, MapWorth]
    depth: Floats
    footprint: Ints
    pieces: Ints
    outlined: tuple[Ints, ...]

    @property
    def has_brackets(self) -> bool:
        """Whether the certain and the possible coverage are there as well."""
        return len(self.area_deg2) == 3

    @property
    def is_whole(self) -> bool:
        """Whether every visit is there, with its start and night."""
        return self.most_visits is None

    @cached_property
    def rows(self) -> int:
        """Number of rows."""
        return self.offsets.size - 1


class SetMerger:
    """Gathers a coverage's sets into rows, and sums what each map gives them.

    Show it what `tally_maps` finds, map by map, then take the result.

    Parameters
    ----------
    coverage : Coverage
        Whose sets are gathered.
    maps : int
        Number of map versions to come.
    event_mjd : float
        Where steps of time are counted from.
    most_bytes : float
        What the rows may take before they are packed.
    """

    def __init__(
        self, coverage: Coverage, maps: int, event_mjd: float, most_bytes: float = MOST_BYTES
    ) -> None:
        self._coverage = coverage
        self._worth: list[MapWorth] = []
        self._gathered, self._most_visits, self._step_hours = _gather_within(
            coverage, maps, event_mjd, most_bytes
        )

    def witness(self, sets: SetWorth) -> None:
        """Sum what the sets are worth on the next map."""
        sums = self._gathered.sums
        self._worth.append(
            MapWorth(
                sums(sets.probability, sets.inner, sets.outer),
                sums(sets.probability_50)[0],
                sums(sets.probability_90)[0],
                sums(sets.area_90_sr)[0] * DEG2_PER_SR,
                sets.strip,
            )
        )

    def take(self, labels: Sequence[str]) -> PageSets:
        """Return the rows, the maps under their labels in the order they were shown."""
        coverage, footprints = self._coverage, self._coverage.footprints
        areas = (coverage.centre.area_sr, coverage.inner.area_sr, coverage.outer.area_sr)
        return PageSets(
            self._gathered.kinds,
            self._most_visits,
            self._step_hours,
            self._gathered.members(),
            np.concatenate(([0], np.cumsum(self._gathered.count))).astype(np.int64),
            self._gathered.sums(*areas) * DEG2_PER_SR,
            dict(zip(labels, self._worth, strict=True)),
            coverage.corrected_depth,
            coverage.observations.footprint,
            footprints.pieces_per_footprint,
            footprints.outlined,
        )


def _gather_within(
    coverage: Coverage, maps: int, event_mjd: float, most_bytes: float
) -> tuple[_Gathered, int | None, float]:
    """Gather the sets so that they fit, with as much told apart as can be.

    Also returns the visits that are told apart, and the length of a step in hours.
    """
    o = coverage.observations
    visits = _Visits.of(coverage.exposures)

    def fits(gathered: _Gathered, forms: int, width: int) -> bool:
        # Inside a credible region about two rows in three are worth all or nothing.
        columns = forms * (maps + 1) + maps
        return bool(gathered.rows * columns * width + gathered.entries <= most_bytes)

    if visits.group.size <= most_bytes:
        brackets = [_Visits.of(exposures_of(p, o)) for p in (coverage.inner, coverage.outer)]
        for parts in ([visits, *brackets], [visits]):
            gathered = _Gathered.of(parts, VisitKinds.whole(o))
            if fits(gathered, len(parts), _WHOLE_BYTES):
                return gathered, None, 0.0
    for most, steps in _FEWER:
        visits = visits.first_of_each(o, most)
        *finer, coarsest = steps
        gathered = _Gathered.of([visits], VisitKinds.coarse(o, coarsest, event_mjd))
        if most == 1 or fits(gathered, 1, _SHORT_BYTES):
            break
    for hours in finer:
        finely = _Gathered.of([visits], VisitKinds.coarse(o, hours, event_mjd))
        if fits(finely, 1, _SHORT_BYTES):
            return finely, most, hours
    return gathered, most, coarsest


@dataclass(frozen=True, eq=False)
class _Visits:
    """Pairs of set and exposure, shape (visits,), sets rising."""

    group: NDArray[np.integer]
    exposure: NDArray[np.integer]
    sets: int

    @classmethod
    def of(cls, exposures: Lists) -> _Visits:
        """Pair each set with the exposures in its list."""
        return cls(exposures.owner, exposures.items, len(exposures))

    def first_of_each(self, o: Observations, most: int) -> _Visits:
        """Keep of each set, telescope and band those that ended first."""
        pair = o.telescope * len(o.bands) + o.band
        order = np.lexsort((o.end_mjd, pair))
        rank = np.empty(len(o), dtype=np.int64)
        rank[order] = np.arange(len(o))
        # One sort of whole numbers, far quicker than that of several columns; in
        # place, for there may be many millions.
        key = self.group * np.int64(len(o))
        key += rank[self.exposure]
        key.sort()
        place = (key % len(o)).astype(np.int32)
        key //= len(o)
        sorted_pair = pair[order].astype(np.int32)[place]
        fresh = np.ones(key.size, dtype=bool)
        fresh[1:] = (key[1:] != key[:-1]) | (sorted_pair[1:] != sorted_pair[:-1])
        kept = fresh.copy()
        for later in range(1, most):
            kept[later:] |= fresh[:-later]
        group, exposure = key[kept].astype(np.int32), order.astype(np.int32)[place[kept]]
        return replace(self, group=group, exposure=exposure)


@dataclass(frozen=True, eq=False)
class _Gathered:
    """Sets of one or three patchworks in rows of like visits, however many of each kind.

    Attributes
    ----------
    kinds : VisitKinds
        What is told apart.
    group, kind : int arrays, shape (visits,)
        The sets of all patchworks, one after the other, and their visits.
    bounds : int64 array
        Where each patchwork's sets begin, and the number of all.
    row : int64 array, shape (all sets,)
        The row of each set.
    begins, count : int64 arrays, shape (rows,)
        The visits of one set of each row.
    """

    kinds: VisitKinds
    group: NDArray[np.integer]
    kind: NDArray[np.integer]
    bounds: Ints
    row: Ints
    begins: Ints
    count: Ints

    @classmethod
    def of(cls, parts: Sequence[_Visits], kinds: VisitKinds) -> _Gathered:
        """Gather the sets of some patchworks."""
        name = np.random.default_rng(_SEED).integers(1, 2**63, len(kinds), dtype=np.uint64)
        bounds = np.cumsum([0] + [part.sets for part in parts])
        group = np.concatenate([part.group + int(base) for part, base in zip(parts, bounds)])
        exposure = np.concatenate([part.exposure for part in parts])
        kind = kinds.of_exposure.astype(np.int32)[exposure]
        begins = np.searchsorted(group, np.arange(bounds[-1] + 1))
        count = np.diff(begins)
        key = np.zeros(bounds[-1], dtype=np.uint64)
        visited = count > 0
        if visited.any():
            key[visited] = np.add.reduceat(name[kind], begins[:-1][visited])
        _, example, row = np.unique(key, return_index=True, return_inverse=True)
        return cls(kinds, group, kind, bounds, row, begins[example], count[example])

    @property
    def rows(self) -> int:
        """Number of rows."""
        return int(self.count.size)

    @property
    def entries(self) -> int:
        """Number of visits in all rows."""
        return int(self.count.sum())

    def members(self) -> Ints:
        """Kinds of each row's visits, row after row, rising within each."""
        row, place = expand_ranges(self.begins, self.count)
        width = max(len(self.kinds), 1)
        return np.asarray(np.sort(row * width + self.kind[place]) % width)

    def sums(self, *amounts: Floats) -> Floats:
        """Sum amounts of the sets of the first patchworks by row, shape (forms, rows)."""
        parts = [self.row[low:high] for low, high in zip(self.bounds, self.bounds[1:])]
        return np.array([sum_by(part, amount, self.rows) for part, amount in zip(parts, amounts)])
