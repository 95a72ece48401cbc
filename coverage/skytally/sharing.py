"""Between telescopes: what pairs share, what each added, and which sets covered what.

Every covered place is held by exactly one set of telescopes, so all that is said
here is a sum over such sets. Only what a telescope added also asks who was first.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Coverage
from skytally.grouping import sum_by
from skytally.patchwork import Patchwork
from skytally.skymap import SkyMap
from skytally.spans import DEG2_PER_SR, Ints
from skytally.times import hours_since

__all__ = ["Sharing", "TelescopeSet", "share_maps"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Ends this close are one moment: start plus duration, as MJD in double precision,
# is rounded at about a microsecond.
_MOMENT_DAYS = 1e-3 / 86400.0


@dataclass(frozen=True)
class TelescopeSet:
    """Sky that exactly these telescopes covered, and no other.

    Attributes
    ----------
    telescopes : tuple of str
        At least one, in the order of the campaign.
    probability : float
        Fraction of the map's total.
    area_deg2 : float
        Solid angle.
    """

    telescopes: tuple[str, ...]
    probability: float
    area_deg2: float


@dataclass(frozen=True)
class Sharing:
    """How the telescopes' coverage of one map version overlaps.

    Per telescope in the order of ``telescopes``, which is that of the campaign;
    probabilities are fractions of the map's total.

    Attributes
    ----------
    map : str
        The map version.
    telescopes : tuple of str
        All of them, those without an exposure too.
    first_hours : tuple of (float or None)
        From the event to the end of each telescope's first exposure that
        covered anything; None where none did.
    added : tuple of float
        Probability of the sky that each was the first to complete, by the end
        of the exposure that first covered each patch; where several completed
        it within the same millisecond, split equally. Sums to the union.
    unique : tuple of float
        Probability that each covered alone, which is by definition what the
        union loses without it.
    credit : tuple of float
        Each patch's probability split equally among the telescopes that
        covered it. Sums to the union.
    pairs : tuple of tuples of float
        Probability that both of a pair covered; symmetric. On the diagonal, what
        one telescope covered.
    sets : tuple of TelescopeSet
        Disjoint; the most probable first. They sum to the union.
    """

    map: str
    telescopes: tuple[str, ...]
    first_hours: tuple[float | None, ...]
    added: tuple[float, ...]
    unique: tuple[float, ...]
    credit: tuple[float, ...]
    pairs: tuple[tuple[float, ...], ...]
    sets: tuple[TelescopeSet, ...]


@dataclass(frozen=True, eq=False)
class _Holders:
    """The distinct sets of telescopes that hold the sets of a patchwork.

    Attributes
    ----------
    held : bool array, shape (k, telescopes)
        Which telescopes belong to each; at least one does.
    which : int64 array, shape (sets,)
        Row of ``held`` for each set of the patchwork.
    """

    held: Bools
    which: Ints

    @classmethod
    def of(cls, patchwork: Patchwork, telescope: Ints, telescopes: int) -> _Holders:
        """Look at a patchwork by the telescope, shape (footprints,), of each footprint."""
        held = np.zeros((patchwork.sets, telescopes), dtype=bool)
        whose = [telescope == index for index in range(telescopes)]
        for index, covered in enumerate(patchwork.covered_by_each(whose)):
            held[:, index] = covered
        packed, which = np.unique(np.packbits(held, axis=1), axis=0, return_inverse=True)
        held = np.unpackbits(packed, axis=1, count=telescopes).astype(bool)
        return cls(held, which.reshape(-1).astype(np.int64))

    def sums(self, amount: Floats) -> Floats:
        """Sum what each set of the patchwork is worth, shape (k,)."""
        return sum_by(self.which, amount, self.held.shape[0])


@dataclass(frozen=True, eq=False)
class _Arrivals:
    """Who completed each set of the patchwork first; one row per set and telescope.

    Attributes
    ----------
    group, telescope : int64 arrays, shape (n,)
        The set, and a telescope that completed it first.
    part : float64 array, shape (n,)
        One over the number of telescopes that did so at the same moment.
    first_end_mjd : float64 array, shape (telescopes,)
        End of each telescope's first exposure that covered anything; inf for none.
    """

    group: Ints
    telescope: Ints
    part: Floats
    first_end_mjd: Floats

    @classmethod
    def of(cls, coverage: Coverage) -> _Arrivals:
        o = coverage.observations
        end = np.stack(
            [
                coverage.exposures.reduce(np.minimum, np.where(o.telescope == t, o.end_mjd, np.inf))
                for t in range(len(o.telescopes))
            ],
            axis=1,
        )
        first = end.min(axis=1, initial=np.inf)
        group, telescope = np.nonzero(end <= first[:, None] + _MOMENT_DAYS)
        first_end = end.min(axis=0, initial=np.inf)
        together = np.bincount(group, minlength=coverage.centre.sets)
        return cls(group, telescope, 1.0 / together[group], first_end)

    def added(self, probability: Floats) -> Floats:
        """Sum what each telescope was the first to complete, shape (telescopes,)."""
        weight = probability[self.group] * self.part
        return sum_by(self.telescope, weight, self.first_end_mjd.size)


def share_maps(coverage: Coverage, maps: Sequence[SkyMap], event_mjd: float) -> Iterator[Sharing]:
    """Say for every map version how the telescopes' coverage overlaps."""
    names = coverage.observations.telescopes
    holders = _Holders.of(coverage.centre, coverage.footprints.telescope, len(names))
    arrivals = _Arrivals.of(coverage)
    first_hours = tuple(
        hours_since(float(end), event_mjd) if np.isfinite(end) else None
        for end in arrivals.first_end_mjd
    )
    area_deg2 = holders.sums(coverage.centre.area_sr) * DEG2_PER_SR
    size = holders.held.sum(axis=1)
    for skymap in maps:
        by_set = coverage.centre.measure(skymap.probability)
        probability = holders.sums(by_set)
        yield Sharing(
            map=skymap.label,
            telescopes=tuple(names),
            first_hours=first_hours,
            added=_floats(arrivals.added(by_set)),
            unique=_floats(np.where(size == 1, probability, 0.0) @ holders.held),
            credit=_floats((probability / size) @ holders.held),
            pairs=_pairs(holders.held, probability),
            sets=tuple(
                TelescopeSet(
                    tuple(name for name, held in zip(names, holders.held[row]) if held),
                    float(probability[row]),
                    float(area_deg2[row]),
                )
                for row in np.lexsort((-area_deg2, -probability))
            ),
        )


def _pairs(held: Bools, amount: Floats) -> tuple[tuple[float, ...], ...]:
    """Sum what each pair of telescopes holds together; amount of each set, shape (k,)."""
    member = held.astype(np.float64)
    both = member.T @ (member * amount[:, None])
    # A sum rounds as its order has it; one half stands for both.
    both = np.triu(both) + np.triu(both, 1).T
    return tuple(_floats(row) for row in both)


def _floats(values: Floats) -> tuple[float, ...]:
    return tuple(map(float, values))
