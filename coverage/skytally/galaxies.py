"""Galaxies ranked by the probability per volume that a map gives their place in space."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from skytally.errors import UsageError
from skytally.magnitudes import absolute_limit
from skytally.positions_io import Positions
from skytally.spans import Ints

__all__ = ["Ranking", "RankingChoice", "Weight", "check_choice", "rank_galaxies", "weights_of"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


class Weight(StrEnum):
    """What multiplies a galaxy's probability per volume."""

    NONE = "none"
    LUMINOSITY = "luminosity"
    MASS = "mass"


@dataclass(frozen=True)
class RankingChoice:
    """How galaxies are ranked.

    Attributes
    ----------
    weight : Weight
        What multiplies the probability per volume.
    completeness : float or None
        Share of all weight in the volume that the table holds, as its maker
        states it, in (0, 1]; None for no correction.

    Raises
    ------
    UsageError
        If the completeness is no such share.
    """

    weight: Weight = Weight.NONE
    completeness: float | None = None

    def __post_init__(self) -> None:
        value = self.completeness
        if value is not None and not 0 < value <= 1:
            raise UsageError(
                f"the completeness is {value:g}, expected above 0 and at most 1",
                remedy="Give the share of all galaxies, by weight, that the table holds: 0.8, say.",
            )


@dataclass(frozen=True, eq=False)
class Ranking:
    """The galaxies of a table on one map version.

    Attributes
    ----------
    map : str
        The map version.
    choice : RankingChoice
        What was asked for.
    rank : int64 array, shape (n,)
        1 for the greatest share; 0 where a galaxy cannot be ranked.
    share : float64 array, shape (n,)
        Weighted probability per volume, the ranked galaxies' sum being one;
        NaN where a galaxy cannot be ranked.
    observed : int
        Ranked galaxies that an exposure held.
    covered : float or None
        Sum of their shares; None if no galaxy has any probability.
    map_covered : float
        Probability on the sky that the exposures covered, galaxies or not.
    covered_corrected : float or None
        With completeness c, c · covered + (1 − c) · map_covered: what the table
        lacks is taken to lie as the map does.
    unranked : tuple of (str, int)
        Why galaxies are not ranked, and how many.
    """

    map: str
    choice: RankingChoice
    rank: Ints
    share: Floats
    observed: int
    covered: float | None
    map_covered: float
    covered_corrected: float | None
    unranked: tuple[tuple[str, int], ...]

    @property
    def ranked(self) -> int:
        """Number of galaxies that are ranked."""
        return int(np.count_nonzero(self.rank))


def check_choice(positions: Positions, choice: RankingChoice) -> None:
    """Refuse a ranking that no row of the table allows.

    Raises
    ------
    UsageError
        If no row has a distance, or none has what the weight needs.
    """
    needs = {"a distance": ("distance, distance_modulus or redshift", positions.distance_mpc)}
    if choice.weight is not Weight.NONE:
        column = "mass" if choice.weight is Weight.MASS else "magnitude or absolute_magnitude"
        needs[f"what the weight {choice.weight.value} needs"] = (
            column,
            weights_of(positions, choice.weight),
        )
    for what, (columns, values) in needs.items():
        if not np.isfinite(values).any():
            raise UsageError(
                f"no row of {positions.file or 'the position'} has {what}",
                remedy=f"Give a column {columns}, or do not ask for a ranking by it.",
            )


def weights_of(positions: Positions, weight: Weight) -> Floats:
    """Weight of each galaxy up to a common factor, NaN where unknown, shape (n,).

    A luminosity is that of the absolute magnitude, else of the apparent one at
    the distance given, neither corrected for extinction nor for redshift.
    """
    if weight is Weight.NONE:
        return np.ones(len(positions))
    if weight is Weight.MASS:
        return positions.mass
    absolute = np.where(
        np.isfinite(positions.absolute_magnitude),
        positions.absolute_magnitude,
        absolute_limit(positions.magnitude, positions.distance_mpc),
    )
    brightest = np.nanmin(absolute) if np.isfinite(absolute).any() else 0.0
    return np.asarray(10.0 ** (-0.4 * (absolute - brightest)))


def rank_galaxies(
    version: str,
    positions: Positions,
    density_per_mpc3: Floats,
    held: Bools,
    map_covered: float,
    choice: RankingChoice,
) -> Ranking:
    """Rank galaxies on one map version.

    Parameters
    ----------
    version : str
        The map version.
    positions : Positions
        The galaxies.
    density_per_mpc3 : float64 array, shape (n,)
        The map's probability per volume at each; NaN where it is not known.
    held : bool array, shape (n,)
        Which were observed.
    map_covered : float
        Probability that the exposures covered.
    choice : RankingChoice
        Weight and completeness.
    """
    weight = weights_of(positions, choice.weight)
    missing = (
        ("no distance", ~np.isfinite(positions.distance_mpc)),
        ("no mass" if choice.weight is Weight.MASS else "no magnitude", ~np.isfinite(weight)),
        ("the map has no distance there", ~np.isfinite(density_per_mpc3)),
    )
    score = density_per_mpc3 * weight
    known = np.flatnonzero(np.isfinite(score))
    rank = np.zeros(len(positions), dtype=np.int64)
    rank[known[np.argsort(-score[known], kind="stable")]] = np.arange(1, known.size + 1)
    total = float(score[known].sum())
    share = np.full(len(positions), np.nan)
    share[known] = score[known] / total if total > 0 else 0.0
    mine = known[held[known]]
    covered = float(share[mine].sum()) if total > 0 else None
    corrected = None
    if choice.completeness is not None and covered is not None:
        c = choice.completeness
        corrected = c * covered + (1 - c) * map_covered
    return Ranking(
        version,
        choice,
        rank,
        share,
        int(mine.size),
        covered,
        map_covered,
        corrected,
        _reasons(missing),
    )


def _reasons(missing: Sequence[tuple[str, Bools]]) -> tuple[tuple[str, int], ...]:
    """Count galaxies by the first reason that applies."""
    counted = np.zeros(missing[0][1].size, dtype=bool)
    found = []
    for reason, rows in missing:
        number = int((rows & ~counted).sum())
        counted |= rows
        if number:
            found.append((reason, number))
    return tuple(found)
