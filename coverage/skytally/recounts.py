"""One quantity of the sky counted in other ways over the same exposures."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from astropy_healpix import healpix_to_lonlat
from numpy.typing import NDArray

from skytally.claims_io import Quantity
from skytally.covered import Coverage
from skytally.grouping import expand_ranges
from skytally.other_fields import OtherField, OtherFields
from skytally.skymap import Measure, SkyMap
from skytally.spans import DEG2_PER_SR, Ints, Spans, SpanTable, cell_to_span, spans_to_cells

__all__ = ["Amounts", "Recount", "measure_of"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]

# The cosine of the declination hardly changes across cells of this order.
_FLAT_ORDER = 8


def measure_of(quantity: Quantity, skymap: SkyMap | None) -> Measure:
    """Return a quantity of the sky as a measure: square degrees, or a fraction.

    Raises
    ------
    ValueError
        If it is no measure of the sky, or needs a map.
    """
    if quantity is Quantity.AREA:
        return _in_deg2(Spans.full())
    if skymap is None or not quantity.needs_map:
        raise ValueError(f"{quantity} is no measure of the sky, or needs a map")
    if quantity is Quantity.AREA_IN_90:
        return _in_deg2(skymap.credible_region(0.9))
    return skymap.restricted(0.9) if quantity.is_inside_90 else skymap.probability


def _in_deg2(region: Spans) -> Measure:
    return Measure(region.starts, region.stops, np.full(len(region), DEG2_PER_SR))


@dataclass(frozen=True, eq=False)
class Amounts:
    """What each set of a coverage's patchworks holds of a quantity, kept once it is found."""

    coverage: Coverage

    @cached_property
    def _known(self) -> dict[tuple[Quantity, str | None], tuple[Floats, ...]]:
        return {}

    def of(
        self, quantity: Quantity, skymap: SkyMap | None, chosen: Bools
    ) -> tuple[float, float, float]:
        """Count what some exposures' footprints hold together.

        Returns
        -------
        value, low, high : float
            By the centre rule, at least, and at most.
        """
        patchworks = self.coverage.centre, self.coverage.inner, self.coverage.outer
        key = quantity, None if skymap is None else skymap.label
        if key not in self._known:
            measure = measure_of(quantity, skymap)
            self._known[key] = tuple(patchwork.measure(measure) for patchwork in patchworks)
        footprints = self.coverage.footprints.of(chosen)
        value, low, high = (
            float(amount[patchwork.covered_by(footprints)].sum())
            for patchwork, amount in zip(patchworks, self._known[key])
        )
        return value, low, high


@dataclass(frozen=True, eq=False)
class Recount:
    """Ways of counting one quantity of the sky over some exposures.

    Attributes
    ----------
    amounts : Amounts
        What the footprints hold.
    fields : OtherFields
        The same footprints, laid otherwise.
    quantity : Quantity
        An area or a probability.
    skymap : SkyMap or None
        The map version, where the quantity needs one.
    chosen : bool array, shape (exposures,)
        The exposures.
    """

    amounts: Amounts
    fields: OtherFields
    quantity: Quantity
    skymap: SkyMap | None
    chosen: Bools

    @property
    def coverage(self) -> Coverage:
        """The footprints as laid."""
        return self.amounts.coverage

    @cached_property
    def measure(self) -> Measure:
        """What is counted."""
        return measure_of(self.quantity, self.skymap)

    @cached_property
    def telescopes(self) -> list[int]:
        """Telescopes that took any of the exposures."""
        return [
            int(index) for index in np.unique(self.coverage.observations.telescope[self.chosen])
        ]

    @cached_property
    def _each(self) -> Floats:
        """What each footprint holds by itself, shape (footprints,)."""
        return self.measure.of_table(self.coverage.footprints.raster.centre)

    def on(self, skymap: SkyMap) -> float:
        """Count on another map."""
        return self.amounts.of(self.quantity, skymap, self.chosen)[0]

    def normalised(self) -> float | None:
        """Divide what is covered of the 90 % region by all that it holds."""
        if self.skymap is None:
            return None
        covered = self.amounts.of(Quantity.PROBABILITY_IN_90, self.skymap, self.chosen)[0]
        return covered / self.skymap.restricted(0.9).total

    def exposures_summed(self) -> float:
        """Add up the exposures."""
        return float(self._each[self.coverage.observations.footprint[self.chosen]].sum())

    def fields_summed(self) -> float:
        """Add up the distinct fields."""
        return float(self._each[self.coverage.footprints.of(self.chosen)].sum())

    def telescopes_summed(self) -> float | None:
        """Add up the telescopes' unions; None for one telescope."""
        taken = self.coverage.observations.telescope
        if len(self.telescopes) < 2:
            return None
        return sum(
            self.amounts.of(self.quantity, self.skymap, self.chosen & (taken == index))[0]
            for index in self.telescopes
        )

    def laid(self, kind: OtherField, *, rough: bool = False) -> float | None:
        """Count fields laid otherwise; None where that changes none of them.

        ``rough`` allows an error of a tenth for less work.
        """
        tables = self._tables(kind, rough)
        if tables is None:
            return None
        chosen = [table.take(np.unique(self._owners(index))) for index, table in tables]
        return self.measure.of_region(SpanTable.stack(chosen).union())

    def laid_summed(self, kind: OtherField, *, rough: bool = False) -> float | None:
        """Add up the exposures' fields laid otherwise; else as `laid`."""
        tables = self._tables(kind, rough)
        if tables is None:
            return None
        return float(sum(self.measure.of_table(t)[self._owners(i)].sum() for i, t in tables))

    def _tables(self, kind: OtherField, rough: bool) -> list[tuple[int, SpanTable]] | None:
        """Fields of each telescope laid otherwise; None where that changes nothing."""
        found = [(index, self.fields.of(kind, index, rough)) for index in self.telescopes]
        if all(table is None for _, table in found):
            return None
        return [(i, self.fields.as_laid(i) if t is None else t) for i, t in found]

    def _owners(self, telescope: int) -> Ints:
        """The chosen exposures' footprints among those of one telescope."""
        o, footprints = self.coverage.observations, self.coverage.footprints
        mine = np.flatnonzero(footprints.telescope == telescope)
        here = self.chosen & (o.telescope == telescope)
        return np.asarray(np.searchsorted(mine, o.footprint[here]))

    @cached_property
    def _flat(self) -> Measure:
        """Area of the union in degrees of right ascension times degrees of declination."""
        centre = self.coverage.centre
        rows = centre.covered_by(self.coverage.footprints.of(self.chosen))[centre.group]
        region = Spans.from_intervals(centre.starts[rows], centre.stops[rows])
        if self.skymap is not None and self.quantity.is_inside_90:
            region &= self.skymap.credible_region(0.9)
        return _flat_area(region)

    def flat(self) -> float | None:
        """Count the area flat; None for probabilities."""
        return self._flat.total if self.quantity.is_area else None

    def flat_summed(self) -> float | None:
        """Count the exposures' areas flat and add them up; None for probabilities."""
        if not self.quantity.is_area:
            return None
        each = self._flat.of_table(self.coverage.footprints.raster.centre)
        return float(each[self.coverage.observations.footprint[self.chosen]].sum())


def _flat_area(region: Spans) -> Measure:
    """Return the area of a region as if degrees of right ascension were degrees on the sky."""
    order, cell = spans_to_cells(region)
    split = 2 * np.maximum(_FLAT_ORDER - order, 0)
    first = np.left_shift(cell, split)
    row, cell = expand_ranges(first, np.left_shift(np.ones_like(first), split))
    order = np.maximum(order, _FLAT_ORDER)[row]
    cosine = np.empty(cell.size)
    for level in np.unique(order):
        here = order == level
        _, lat = healpix_to_lonlat(cell[here], 1 << int(level), order="nested")
        cosine[here] = np.cos(lat.rad)
    return Measure(*cell_to_span(order, cell), DEG2_PER_SR / cosine)
