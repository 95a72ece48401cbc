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

__all__ = ["Visits", "absolute_magnitudes", "deciding_visits", "order_by_reach", "seen_share"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


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


def visit_reach(
    visits: Visits, magnitude: Floats, k_correction: str, cosmology: Cosmology
) -> Floats:
    """Reach of each visit in Mpc; 0 where the source is unseen, (visits,)."""
    reach = reach_mpc(visits.limit, magnitude[visits.exposure])
    reach = np.where(np.isfinite(reach), reach, 0.0)
    return cosmology.flat_spectrum_reach(reach) if k_correction == "flat" else reach


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
        moment = np.round((start_mjd - start_mjd.min()) * SECONDS_PER_DAY * 1000).astype(np.int64)
        width = np.int64(moment.max()) + 1
        offset = np.cumsum(rank == 0).astype(np.int64) * width
        latest = np.maximum.accumulate(moment + offset) - offset
        earliest = width - 1 - (np.maximum.accumulate(width - 1 - moment + offset) - offset)
        enough &= latest - earliest >= np.int64(round(gap_minutes * 60_000))
    row = np.flatnonzero(enough)
    first = row[np.flatnonzero(np.diff(place[row], prepend=-1))]
    return place[first], first


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
    visits : {1, 2}
        In how many exposures the source must be.
    gap_minutes : float
        How far apart two of them must be.

    Returns
    -------
    place : int64 array, shape (m,)
        The places in ``place``.
    share : float64 array, shape (m, nodes)
        For one visit 1 − Π(1 − ε). For two: the first detection at visit i and
        any detection at least the gap later, summed over i.
    """
    begin = np.flatnonzero(np.diff(place, prepend=-1))
    missed = np.log1p(-np.minimum(efficiency, 1 - 1e-15))
    total = np.add.reduceat(missed, begin, axis=0)
    if visits == 1:
        return place[begin], -np.expm1(total)
    length = np.diff(np.append(begin, place.size))
    segment = np.repeat(np.arange(begin.size), length)
    running = np.concatenate((np.zeros((1, missed.shape[1])), np.cumsum(missed, axis=0)))
    before = running[:-1] - running[begin][segment]
    moment = np.round((start_mjd - start_mjd.min()) * SECONDS_PER_DAY * 1000).astype(np.int64)
    gap = np.int64(round(gap_minutes * 60_000))
    width = np.int64(moment.max()) + gap + 2
    # With no gap asked for, the second detection is any later visit.
    later = np.searchsorted(segment * width + moment, segment * width + moment + gap, side="left")
    later = np.maximum(later, np.arange(place.size) + 1)
    end = np.append(begin[1:], place.size)[segment]
    after = running[end] - running[np.minimum(later, end)]
    first = np.minimum(efficiency, 1 - 1e-15) * np.exp(before) * -np.expm1(after)
    return place[begin], np.add.reduceat(first, begin, axis=0)
