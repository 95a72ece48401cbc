"""The accounting: area, probability, credit, depth and time for every selection."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["AsPointed", "TallyRow", "Timeline"]


@dataclass(frozen=True)
class TallyRow:
    """The numbers for one selection of exposures on one map version.

    ``None`` for telescope, band or night means all; ``None`` for a number
    means that it does not exist (never NaN). Areas in square degrees,
    probabilities as fractions of the map's total, magnitudes in the campaign's
    system and significance.
    """

    map: str
    telescope: str | None
    band: str | None
    night: str | None
    exposures: int
    area_deg2: float
    area_low_deg2: float
    area_high_deg2: float
    area_in_50_deg2: float
    area_in_90_deg2: float
    probability: float
    probability_low: float
    probability_high: float
    probability_error: float
    probability_in_50: float
    probability_in_90: float
    probability_unique: float
    probability_credit: float
    probability_revisited: float
    depth_min: float | None
    depth_median: float | None
    depth_max: float | None
    depth_over_50: float | None
    depth_over_90: float | None
    depth_stacked_over_50: float | None
    depth_stacked_over_90: float | None
    volume_90_covered_mpc3: float | None
    first_start: str | None
    last_end: str | None

    @property
    def selection(self) -> tuple[str | None, str | None, str | None]:
        """Telescope, band and night: what was selected."""
        return self.telescope, self.band, self.night


@dataclass(frozen=True)
class Timeline:
    """Cumulative coverage of one selection on one map version.

    One step per exposure end at which new sky was completed, in time order.
    """

    map: str
    telescope: str | None
    band: str | None
    night: str | None
    end: tuple[str, ...]
    hours: tuple[float, ...]
    probability: tuple[float, ...]
    area_deg2: tuple[float, ...]


@dataclass(frozen=True)
class AsPointed:
    """A selection's exposures begun under one map version, judged by two.

    ``map`` was in force when they began (``None``: before the first version);
    ``probability`` is their union on it, ``probability_newest`` the same
    exposures' union on the newest version.
    """

    map: str | None
    telescope: str | None
    band: str | None
    night: str | None
    exposures: int
    probability: float | None
    probability_newest: float
