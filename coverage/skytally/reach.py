"""How far a source would have been seen, place by place.

A place is looked at by a few exposures; each has a reach, the luminosity distance
at which the source would be at its limit. Ordered by falling reach, the visit at
which the source has been in enough exposures, far enough apart in time, decides
how far it would have been seen there.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.cosmology import Cosmology
from skytally.covered import visits_of
from skytally.grouping import expand_ranges
from skytally.magnitudes import extinction_coefficient, reach_mpc
from skytally.observations import SECONDS_PER_DAY, Observations
from skytally.overlay import Overlay
from skytally.patchwork import Patchwork
from skytally.sources import Source
from skytally.spans import Ints

__all__ = [
    "Visits",
    "absolute_magnitudes",
    "deciding_visits",
    "order_by_reach",
    "seen_share",
    "visit_reach",
]

Floats = NDArray[np.float64]

# Times are compared in whole milliseconds; rounding moves a difference by up to one.
_SLACK_MS = 1


@dataclass(frozen=True, eq=False)
class Visits:
    """Which exposures looked at each place, and how deep.

    Attributes
    ----------
    place, exposure : int64 arrays, shape (visits,)
        Pairs, places rising and exposures in time order within each.
    limit : float64 array, shape (visits,)
        Limiting magnitude less Galactic extinction where that is known; NaN
        where the exposure states none.
    places : int
        Number of places.
    """

    place: Ints
    exposure: Ints
    limit: Floats
    places: int

    @classmethod
    def of(
        cls,
        patchwork: Patchwork,
        overlay: Overlay,
        observations: Observations,
        coefficients: Mapping[str, float],
    ) -> Visits:
        """List the visits of an overlay's places."""
        group, exposure = visits_of(patchwork, observations)
        count = np.bincount(group, minlength=patchwork.sets)
        first = np.cumsum(count) - count
        place, row = expand_ranges(first[overlay.place_set], count[overlay.place_set])
        exposure = exposure[row]
        dust = _coefficients(observations, coefficients)[exposure] * overlay.place_ebv[place]
        stated = observations.extinction[exposure]
        extinction = np.where(np.isfinite(stated), stated, dust)
        limit = observations.depth[exposure] - np.where(np.isfinite(extinction), extinction, 0.0)
        return cls(place, exposure, limit, overlay.places)


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


def visit_reach(visits: Visits, source: Source, magnitude: Floats, cosmology: Cosmology) -> Floats:
    """Reach of each visit in Mpc; 0 where the source is unseen, (visits,).

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


def order_by_reach(place: Ints, reach: Floats) -> Ints:
    """Order of the visits: places rising, reach falling within each."""
    return np.lexsort((-reach, place))


def deciding_visits(
    place: Ints, start_mjd: Floats, visits: int, gap_minutes: float
) -> tuple[Ints, Ints]:
    """Find where, along falling reach, each place has been seen often enough.

    Parameters
    ----------
    place : int64 array, shape (n,)
        Place of each visit, rising; reach falls within each place.
    start_mjd : float64 array, shape (n,)
        Start of each visit.
    visits : int
        In how many exposures the source must be.
    gap_minutes : float
        How far the first and the last of these must be apart.

    Returns
    -------
    place, visit : int64 arrays
        The places where the condition is met, and the row that meets it.
    """
    if place.size == 0:
        return place, place
    begin = np.flatnonzero(np.diff(place, prepend=-1))
    rank = np.arange(place.size) - np.repeat(begin, np.diff(np.append(begin, place.size)))
    enough = rank + 1 >= visits
    if visits > 1 and gap_minutes > 0:
        # Milliseconds as integers below a place's own offset: a running maximum
        # along the whole array then starts anew at every place.
        moment = _milliseconds(start_mjd)
        width = moment.max() + 1
        offset = np.cumsum(rank == 0).astype(np.int64) * width
        latest = np.maximum.accumulate(moment + offset) - offset
        earliest = width - 1 - (np.maximum.accumulate(width - 1 - moment + offset) - offset)
        enough &= latest - earliest >= _gap_ms(gap_minutes)
    row = np.flatnonzero(enough)
    first = row[np.flatnonzero(np.diff(place[row], prepend=-1))]
    return place[first], first


def _milliseconds(start_mjd: Floats) -> Ints:
    """Starts after the first of them."""
    passed = (start_mjd - start_mjd.min()) * SECONDS_PER_DAY * 1000
    return np.asarray(np.round(passed), dtype=np.int64)


def _gap_ms(gap_minutes: float) -> int:
    return max(round(gap_minutes * 60_000) - _SLACK_MS, 0)


def seen_share(
    place: Ints, start_mjd: Floats, efficiency: Floats, visits: int, gap_minutes: float
) -> tuple[Ints, Floats]:
    """Probability of seeing a source often enough, exposures being independent.

    Parameters
    ----------
    place : int64 array, shape (n,)
        Place of each visit, rising; visits in time order within each.
    start_mjd : float64 array, shape (n,)
        Start of each visit.
    efficiency : float64 array, shape (n, nodes)
        Probability of detection in each visit, at each node of distance.
    visits : int
        In how many exposures the source must be.
    gap_minutes : float
        How far the first and the last of these must be apart.

    Returns
    -------
    place : int64 array, shape (m,)
        The places in ``place``.
    share : float64 array, shape (m, nodes)
        For one visit 1 − Π(1 − ε). For more, summed over the visit i of the
        first detection: enough others after i, less those cases where all of
        them fall within the gap.
    """
    begin = np.flatnonzero(np.diff(place, prepend=-1))
    efficiency = np.minimum(efficiency, 1 - 1e-15)
    missed = np.log1p(-efficiency)
    if visits == 1:
        return place[begin], -np.expm1(np.add.reduceat(missed, begin, axis=0))
    segment = np.repeat(np.arange(begin.size), np.diff(begin, append=place.size))
    running = np.concatenate((np.zeros((1, missed.shape[1])), np.cumsum(missed, axis=0)))
    moment, gap = _milliseconds(start_mjd), _gap_ms(gap_minutes)
    line = segment * (moment.max() + gap + 2) + moment
    # With no gap asked for, any later visit will do.
    later = np.maximum(np.searchsorted(line, line + gap, side="left"), np.arange(place.size) + 1)
    after = np.arange(place.size) + 1
    end = np.append(begin[1:], place.size)[segment]

    def fewer(last: Ints) -> Floats:
        if visits == 2:
            return np.asarray(np.exp(running[last] - running[after]))
        return _fewer(efficiency, after, last, visits - 1)

    before = np.exp(running[:-1] - running[begin][segment])
    none_later = np.exp(running[end] - running[later])
    enough = 1 - fewer(end) - (1 - fewer(later)) * none_later
    return place[begin], np.add.reduceat(efficiency * before * enough, begin, axis=0)


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
