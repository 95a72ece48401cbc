"""One issued map version: a piecewise-constant density on the line.

Cells of any mix of orders are spans of the line, so a density on them has a
cumulative function and the measure of any region is a difference of two of its
values: exact for partly covered cells, with no full-sky array.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.spans import UNIT_SR, Ints, Spans, SpanTable, merge

__all__ = ["DistanceLayer", "Measure", "SkyMap"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Measure:
    """A non-negative density on disjoint spans of the line, zero elsewhere.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        Sorted, disjoint spans.
    density : float64 array, shape (n,)
        Amount per steradian, ≥ 0.
    """

    starts: Ints
    stops: Ints
    density: Floats

    @classmethod
    def area(cls, region: Spans) -> Measure:
        """Return the solid angle (steradians) inside a region as a measure."""
        return cls(region.starts, region.stops, np.ones(len(region)))

    @cached_property
    def amount(self) -> Floats:
        """Amount in each span, shape (n,)."""
        return (self.stops - self.starts) * (self.density * UNIT_SR)

    @cached_property
    def _before(self) -> Floats:
        return np.concatenate(([0.0], np.cumsum(self.amount)))

    @property
    def total(self) -> float:
        """Amount on the whole sky."""
        return float(self._before[-1])

    def cumulative(self, position: Ints) -> Floats:
        """Amount on the line before each position, same shape as given."""
        position = np.asarray(position, dtype=np.int64)
        if self.starts.size == 0:
            return np.zeros(position.shape)
        row = np.searchsorted(self.starts, position, side="right") - 1
        safe = np.maximum(row, 0)
        reach = np.minimum(position, self.stops[safe]) - self.starts[safe]
        value = self._before[safe] + reach * (self.density[safe] * UNIT_SR)
        return np.where(row < 0, 0.0, value)

    def of_intervals(self, starts: Ints, stops: Ints) -> Floats:
        """Amount in each interval of the line, same shape as given."""
        return self.cumulative(stops) - self.cumulative(starts)

    def of_region(self, region: Spans) -> float:
        """Amount inside one region."""
        return float(np.sum(self.of_intervals(region.starts, region.stops)))

    def of_table(self, table: SpanTable) -> Floats:
        """Amount inside each owner's region, shape (owners,)."""
        amount = self.of_intervals(table.starts, table.stops)
        before = np.concatenate(([0.0], np.cumsum(amount)))
        return np.asarray(np.diff(before[table.offsets]))


@dataclass(frozen=True, eq=False)
class DistanceLayer:
    """Distance parameters per map cell, as published (ApJL 829 L15, 2016).

    Attributes
    ----------
    mu_mpc, sigma_mpc, norm_per_mpc2 : float64 arrays, shape (n,)
        p(r) = norm · r² · φ((r−mu)/sigma)/sigma for r ≥ 0. A cell with
        non-finite mu, norm = 0 or sigma ≤ 0 is "without distance".
    header_mean_mpc, header_sd_mpc : float or None
        DISTMEAN and DISTSTD of the file, if it states them.
    """

    mu_mpc: Floats
    sigma_mpc: Floats
    norm_per_mpc2: Floats
    header_mean_mpc: float | None = None
    header_sd_mpc: float | None = None


@dataclass(frozen=True, eq=False)
class SkyMap:
    """One map version, normalised to a total probability of one.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        The map's cells as spans of the line: sorted, disjoint. Sky that the
        file does not list has no row and density zero.
    density_per_sr : float64 array, shape (n,)
        Probability per steradian, finite, ≥ 0.
    order_max : int
        Deepest order among the cells.
    distance : DistanceLayer or None
        Distance parameters in the order of the cells.
    label : str
        The version as the campaign calls it.
    issued_mjd : float or None
        When it was issued (UTC, MJD).
    path, sha256 : str or None
        The file it came from; None for a circle given in the campaign.
    notes : tuple of str
        What the reader changed or noticed: normalised, resampled, …
    file_sum : float or None
        What the probability summed to in the file; None without a file.
    """

    starts: Ints
    stops: Ints
    density_per_sr: Floats
    order_max: int
    distance: DistanceLayer | None = None
    label: str = ""
    issued_mjd: float | None = None
    path: str | None = None
    sha256: str | None = None
    notes: tuple[str, ...] = field(default=())
    file_sum: float | None = None

    @cached_property
    def probability(self) -> Measure:
        """The map itself as a measure with total 1."""
        return Measure(self.starts, self.stops, self.density_per_sr)

    @cached_property
    def _descending(self) -> tuple[Ints, Floats]:
        order = np.argsort(-self.density_per_sr, kind="stable")
        return order, np.cumsum(self.probability.amount[order])

    def credible_cells(self, level: float) -> NDArray[np.bool_]:
        """Mark the cells of the credible region of a level in (0, 1].

        The cells in order of falling density up to and including the one that
        reaches the level.
        """
        order, held = self._descending
        count = int(np.searchsorted(held, level * held[-1] * (1 - 1e-12), side="left")) + 1
        inside = np.zeros(self.starts.size, dtype=bool)
        inside[order[:count]] = True
        return inside

    def credible_region(self, level: float) -> Spans:
        """Return the credible region of a level as spans."""
        inside = self.credible_cells(level)
        return Spans._from_sorted(*merge(self.starts[inside], self.stops[inside]))

    def restricted(self, level: float) -> Measure:
        """Return the map cut to its credible region of a level."""
        inside = self.credible_cells(level)
        return Measure(self.starts[inside], self.stops[inside], self.density_per_sr[inside])

    @cached_property
    def credible_levels(self) -> Floats:
        """Probability of the smallest credible region that holds each cell, shape (n,)."""
        order, held = self._descending
        level = np.empty(order.size)
        level[order] = held / held[-1]
        return level

    def cell_at(self, position: Ints) -> Ints:
        """Find the row of the cell that holds each position on the line; −1 off the map."""
        position = np.asarray(position, dtype=np.int64)
        row = np.searchsorted(self.starts, position, side="right") - 1
        inside = (row >= 0) & (position < self.stops[np.maximum(row, 0)])
        return np.where(inside, row, -1)

    def density_at(self, position: Ints) -> Floats:
        """Probability per steradian at positions on the line; zero off the map."""
        return np.append(self.density_per_sr, 0.0)[self.cell_at(position)]

    def credible_level_at(self, position: Ints) -> Floats:
        """Probability of the smallest credible region that holds each position; 1 off the map."""
        return np.append(self.credible_levels, 1.0)[self.cell_at(position)]
