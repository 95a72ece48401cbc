"""How far a source would have been seen, place by place.

A place is looked at by a few exposures; each has a reach, the luminosity distance
at which the source would be at its limit. Ordered by falling reach, the visit at
which the source has been in enough exposures, far enough apart in time, decides
how far it would have been seen there.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.cosmology import Cosmology
from skytally.covered import exposures_of
from skytally.grouping import Lists, distinct
from skytally.magnitudes import extinction_coefficient, reach_mpc
from skytally.observations import SECONDS_PER_DAY, Observations
from skytally.overlay import Places
from skytally.patchwork import Patchwork
from skytally.selection import Selection, selections
from skytally.sources import Source
from skytally.spans import Ints

__all__ = [
    "View",
    "Visits",
    "absolute_magnitudes",
    "deciding_looks",
    "kinds_by_reach",
    "reach_of_looks",
    "seen_share",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Times are compared in whole milliseconds; rounding moves a difference by up to one.
_SLACK_MS = 1
_VISITS_AT_ONCE = 300_000


@dataclass(frozen=True, eq=False)
class View:
    """What one selection sees of the places; many are alike to it, and are of one kind.

    Attributes
    ----------
    selection : Selection
        The exposures.
    seen : Lists
        The looks of each kind of place, in time order.
    kind : int32 array, shape (places,)
        Kind of each place; −1 where the selection did not look.
    """

    selection: Selection
    seen: Lists
    kind: NDArray[np.int32]


@dataclass(frozen=True, eq=False)
class Visits:
    """Which exposures looked at each place, and how deep.

    A look is an exposure behind one cell of the dust: it has one limit.

    Attributes
    ----------
    observations : Observations
        The exposures.
    places : Places
        The places.
    seen : Lists
        The looks at each place, in time order.
    exposure : int64 array, shape (looks,)
        Exposure of each look.
    limit : float64 array, shape (looks,)
        Limiting magnitude less Galactic extinction where that is known; NaN
        where the exposure states none.
    """

    observations: Observations
    places: Places
    seen: Lists
    exposure: Ints
    limit: Floats

    @classmethod
    def of(
        cls,
        patchwork: Patchwork,
        places: Places,
        observations: Observations,
        coefficients: Mapping[str, float],
    ) -> Visits:
        """List the visits of a patchwork's places."""
        count = max(len(observations), 1)
        table = exposures_of(patchwork, observations).table(count)[places.place_set]
        clouds, front = np.unique(places.place_cloud, return_inverse=True)
        lists = Lists.of_table(table)
        look, seen = _looks(lists, front, count)
        ebv = np.full(clouds.size, np.nan)
        ebv[front] = places.place_ebv
        behind, exposure = np.divmod(look, count)
        dust = _coefficients(observations, coefficients)[exposure] * ebv[behind]
        stated = observations.extinction[exposure]
        extinction = np.where(np.isfinite(stated), stated, dust)
        limit = observations.depth[exposure] - np.where(np.isfinite(extinction), extinction, 0.0)
        return cls(observations, places, Lists(lists.offsets, seen), exposure, limit)

    def view(self, selection: Selection) -> View:
        """Find what a selection sees of the places."""
        if selection.chosen.all():
            # No two places have been looked at alike.
            return View(selection, self.seen, np.arange(len(self.seen), dtype=np.int32))
        return View(selection, *self.seen.alike(selection.chosen[self.exposure]))

    @cached_property
    def by_band(self) -> tuple[View, ...]:
        """What all exposures see of the places, then what those of each band do."""
        return tuple(
            self.view(selection)
            for selection in selections(self.observations)
            if selection.telescope is None and selection.night is None
        )


def _looks(lists: Lists, front: Ints, count: int) -> tuple[Ints, NDArray[np.int32]]:
    """Tell apart exposures behind cells of the dust, ``front`` being that of each list.

    Returns
    -------
    look : int64 array
        Distinct looks, cell × ``count`` + exposure, rising.
    seen : int32 array
        Look of each of the lists' exposures.
    """

    def of_block(block: slice) -> Ints:
        part = lists.part(block)
        return np.asarray(front[block][part.owner] * count + part.items)

    blocks = list(lists.blocks(_VISITS_AT_ONCE))
    look = distinct(np.concatenate([front[:0], *(distinct(of_block(b)) for b in blocks)]))
    seen = np.empty(lists.items.size, dtype=np.int32)
    for block in blocks:
        items = slice(*lists.offsets[[block.start, block.stop]])
        seen[items] = np.searchsorted(look, of_block(block))
    return look, seen


def _coefficients(observations: Observations, own: Mapping[str, float]) -> Floats:
    """A_b / E(B−V) of each exposure's band, NaN where nobody gives one; (exposures,)."""
    values = [extinction_coefficient(band, own) for band in observations.bands]
    return np.array([np.nan if v is None else v for v in values] or [np.nan])[observations.band]


def absolute_magnitudes(source: Source, observations: Observations, event_mjd: float) -> Floats:
    """Absolute magnitude at the middle of each exposure; NaN where it is unseen, (exposures,)."""
    middle = (observations.start_mjd + observations.end_mjd) / 2 - event_mjd
    magnitude = np.full(len(observations), np.nan)
    for index, band in enumerate(observations.bands):
        rows = observations.band == index
        magnitude[rows] = source.absolute_magnitude(middle[rows], band)
    return magnitude


def reach_of_looks(
    visits: Visits, source: Source, magnitude: Floats, cosmology: Cosmology
) -> Floats:
    """Reach of each look in Mpc; 0 where the source is unseen, (looks,).

    Where detection is gradual, it is how far the efficiency is at least half
    the plateau's. ``magnitude`` is absolute, shape (exposures,).
    """
    limit = visits.limit + source.detection.offset
    reach = reach_mpc(limit, magnitude[visits.exposure])
    reach = np.where(np.isfinite(reach), reach, 0.0)
    if source.k_correction == "flat":
        corrected = cosmology.flat_spectrum_reach(reach)
        # Beyond the cosmology's table, redshift 1000, nothing is left to be reached.
        reach = np.where(np.isnan(corrected), np.maximum(reach, cosmology.limit_mpc), corrected)
    return reach


def kinds_by_reach(
    seen: Lists, reach_mpc: Floats, chosen: Bools
) -> tuple[NDArray[np.int32], Floats]:
    """Tell places apart by their greatest reach, which decides where one exposure is enough.

    Parameters
    ----------
    seen : Lists
        Looks at each place.
    reach_mpc, chosen : float64 and bool arrays, shape (looks,)
        Reach of each look, 0 for none, and whether it counts.

    Returns
    -------
    kind : int32 array, shape (places,)
        Kind of each place; −1 where no chosen look was.
    reach : float64 array, shape (kinds,)
        Greatest reach, falling; 0 where the chosen looks show nothing.
    """
    falling, number = np.unique(-reach_mpc, return_inverse=True)
    first = seen.reduce(np.minimum, np.where(chosen, number, falling.size))
    occurs = np.zeros(falling.size + 1, dtype=bool)
    occurs[first] = True
    kept = np.flatnonzero(occurs[:-1])
    kind = np.full(falling.size + 1, -1, dtype=np.int32)
    kind[kept] = np.arange(kept.size)
    return kind[first], -falling[kept]


def deciding_looks(
    seen: Lists, reach_mpc: Floats, start_mjd: Floats, visits: int, gap_minutes: float
) -> Ints:
    """Find the look at which, along falling reach, a source has been seen often enough.

    Parameters
    ----------
    seen : Lists
        Looks at each place.
    reach_mpc, start_mjd : float64 arrays, shape (looks,)
        Reach and start of each look; a reach of 0 is none.
    visits : int
        In how many exposures the source must be.
    gap_minutes : float
        How far the first and the last of these must be apart.

    Returns
    -------
    int64 array, shape (places,)
        The look at each place; −1 where the source would not have been seen.
    """
    order = np.argsort(-reach_mpc, kind="stable")
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    if visits == 1:
        found = seen.reduce(np.minimum, rank)
    else:
        moment, gap = _milliseconds(start_mjd[order]), _gap_ms(gap_minutes)
        parts = map(seen.part, seen.blocks(_VISITS_AT_ONCE))
        found = np.concatenate(
            [rank[:0], *(_deciding_ranks(part, rank, moment, visits, gap) for part in parts)]
        )
    look = np.append(order, -1)[found]
    return np.where(np.append(reach_mpc, 0.0)[look] > 0, look, -1)


def _deciding_ranks(seen: Lists, rank: Ints, moment: Ints, visits: int, gap_ms: int) -> Ints:
    """Rank at which each list of looks is enough, −1 for none; ``moment`` is by rank, in ms."""
    place = seen.owner.astype(np.int64)
    line = np.sort(place * rank.size + rank[seen.items]) - place * rank.size
    number = np.arange(place.size) - seen.offsets[place]
    enough = number + 1 >= visits
    if gap_ms > 0:
        # A running maximum along all the lists starts anew at every place, for
        # each place lies above the ones before.
        moment = moment[line]
        width = int(moment.max(initial=0)) + 1
        offset = place * width
        latest = np.maximum.accumulate(moment + offset) - offset
        earliest = width - 1 - (np.maximum.accumulate(width - 1 - moment + offset) - offset)
        enough &= latest - earliest >= gap_ms
    row = np.flatnonzero(enough)
    row = row[np.flatnonzero(np.diff(place[row], prepend=-1))]
    found = np.full(len(seen), -1)
    found[place[row]] = line[row]
    return found


def _milliseconds(start_mjd: Floats) -> Ints:
    """Starts after the first of them."""
    passed = (start_mjd - start_mjd.min(initial=np.inf)) * SECONDS_PER_DAY * 1000
    return np.asarray(np.round(passed), dtype=np.int64)


def _gap_ms(gap_minutes: float) -> int:
    return max(round(gap_minutes * 60_000) - _SLACK_MS, 0)


def seen_share(
    seen: Lists, start_mjd: Floats, efficiency: Floats, visits: int, gap_minutes: float
) -> Floats:
    """Probability of seeing a source often enough, exposures being independent.

    Parameters
    ----------
    seen : Lists
        Looks at each place, in time order.
    start_mjd : float64 array, shape (looks,)
        Start of each look.
    efficiency : float64 array, shape (looks, nodes)
        Probability of detection in each look, at each node of distance.
    visits : int
        In how many exposures the source must be.
    gap_minutes : float
        How far the first and the last of these must be apart.

    Returns
    -------
    float64 array, shape (places, nodes)
        For one visit 1 − Π(1 − ε). For more, summed over the visit i of the
        first detection: enough others after i, less those cases where all of
        them fall within the gap.
    """
    efficiency = np.minimum(efficiency, 1 - 1e-15)
    missed = np.log1p(-efficiency)
    if visits == 1:
        return -np.expm1(seen.sums(missed))
    segment, begin = seen.owner.astype(np.int64), seen.offsets[:-1]
    efficiency, missed = efficiency[seen.items], missed[seen.items]
    running = np.concatenate((np.zeros((1, missed.shape[1])), np.cumsum(missed, axis=0)))
    moment, gap = _milliseconds(start_mjd)[seen.items], _gap_ms(gap_minutes)
    line = segment * (int(moment.max(initial=0)) + gap + 2) + moment
    after = np.arange(segment.size) + 1
    # With no gap asked for, any later visit will do.
    later = np.maximum(np.searchsorted(line, line + gap, side="left"), after)
    end = seen.offsets[1:][segment]

    def fewer(last: Ints) -> Floats:
        if visits == 2:
            return np.asarray(np.exp(running[last] - running[after]))
        return _fewer(efficiency, after, last, visits - 1)

    before = np.exp(running[:-1] - running[begin][segment])
    none_later = np.exp(running[end] - running[later])
    enough = 1 - fewer(end) - (1 - fewer(later)) * none_later
    return np.asarray(np.add.reduceat(efficiency * before * enough, begin, axis=0))


def _fewer(efficiency: Floats, first: Ints, last: Ints, count: int) -> Floats:
    """Probability of fewer than ``count`` detections in visits first[i] … last[i] − 1."""
    longest = int(np.max(last - first))
    exactly = np.zeros((min(count, longest + 1), *efficiency.shape))
    exactly[0] = 1.0
    for step in range(longest):
        live = np.flatnonzero(first + step < last)
        hit = efficiency[first[live] + step]
        before = exactly[:, live]
        exactly[:, live] = before * (1 - hit)
        exactly[1:, live] += before[:-1] * hit
    return np.asarray(exactly.sum(axis=0))
