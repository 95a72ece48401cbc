"""The accounting: area, probability, credit, depth and time for every selection."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from skytally.covered import Chosen, Coverage, TallySettings
from skytally.depth import Depth, extinction_state
from skytally.grouping import sum_by
from skytally.selection import selections
from skytally.skymap import Measure, SkyMap
from skytally.space import Space
from skytally.spans import DEG2_PER_SR, Ints
from skytally.times import hours_since, mjd_to_iso
from skytally.workers import side_by_side

__all__ = [
    "AsPointed",
    "SetWorth",
    "TallyRow",
    "Timeline",
    "maps_in_force",
    "tally_as_pointed",
    "tally_maps",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class TallyRow:
    """The numbers for one selection of exposures on one map version.

    ``None`` for telescope, band or night means all; ``None`` for a number
    means that it does not exist (never NaN). Areas in square degrees,
    probabilities as fractions of the map's total, magnitudes in the campaign's
    system and significance, less Galactic extinction where ``extinction`` says
    so; ``extinction_median`` is the median A_b of the exposures where known.
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
    extinction: str = "not corrected"
    extinction_median: float | None = None
    volume_90_covered_comoving_mpc3: float | None = None

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


@dataclass(frozen=True, eq=False)
class SetWorth:
    """What each set of the patchworks is worth on one map.

    Attributes
    ----------
    probability, probability_50, probability_90, area_50_sr, area_90_sr
        Of each set of the centre rule's patchwork, shape (sets,).
    inner, outer : float64 arrays
        Probability of each set of the two brackets' patchworks.
    strip : float64 array, shape (footprints,)
        Probability in each footprint's undecided cells.
    volume_90, volume_90_comoving : float64 arrays or None
        Part of the 90 % volume in each set's directions, Mpc³, shape (sets,).
    """

    probability: Floats
    probability_50: Floats
    probability_90: Floats
    area_50_sr: Floats
    area_90_sr: Floats
    inner: Floats
    outer: Floats
    strip: Floats
    volume_90: Floats | None
    volume_90_comoving: Floats | None

    @classmethod
    def of(cls, coverage: Coverage, skymap: SkyMap, space: Space | None) -> SetWorth:
        """Sum a map over the sets."""
        raster, whole = coverage.footprints.raster, skymap.probability
        strip = whole.of_table(raster.outer) - whole.of_table(raster.inner)
        volumes = None if space is None else space.credible_densities()
        centre, inner, outer = coverage.cuts([skymap])
        return cls(
            centre.measure(whole),
            centre.measure(skymap.restricted(0.5)),
            centre.measure(skymap.restricted(0.9)),
            centre.measure(Measure.area(skymap.credible_region(0.5))),
            centre.measure(Measure.area(skymap.credible_region(0.9))),
            inner.measure(whole),
            outer.measure(whole),
            np.maximum(strip, 0.0),
            None if volumes is None else centre.measure(volumes[0]),
            None if volumes is None else centre.measure(volumes[1]),
        )


def tally_maps(
    coverage: Coverage,
    maps: Sequence[tuple[SkyMap, Space | None]],
    settings: TallySettings,
    witness: Callable[[SetWorth], None] | None = None,
) -> tuple[list[TallyRow], list[Timeline]]:
    """Tally every selection on every map version, map by map.

    Each map comes with its third dimension, None where it has no distances.
    ``witness`` is shown what the sets are worth on each map, which is costly to
    find twice and large to keep.
    """
    coverage.cuts([skymap for skymap, _ in maps])  # once for all
    parts = _Part.every(coverage, settings)
    rows, timelines = [], []
    for skymap, space in maps:
        sets = SetWorth.of(coverage, skymap, space)
        if witness is not None:
            witness(sets)
        numbers = partial(_Part.numbers, label=skymap.label, sets=sets)
        for row, timeline in side_by_side(numbers, parts):
            rows.append(row)
            timelines.append(timeline)
    return rows, timelines


@dataclass(frozen=True, eq=False)
class _Part:
    """A selection's part of a coverage, and what its rows have in common, whatever the map.

    Attributes
    ----------
    coverage : Coverage
        All of it.
    chosen : Chosen
        The selection's.
    sharing : int64 array, shape (sets,)
        How many of the selection's peers cover each set.
    depth : Depth
        Its limits.
    end, hours : tuples of str and of float
        The ends in ``chosen`` as times, and in hours since the event.
    """

    coverage: Coverage
    chosen: Chosen
    sharing: Ints
    depth: Depth
    end: tuple[str, ...]
    hours: tuple[float, ...]

    @classmethod
    def every(cls, coverage: Coverage, settings: TallySettings) -> list[_Part]:
        """Look at a coverage through every selection."""
        parts: list[_Part] = []
        sharing: dict[int, Ints] = {}
        choices = selections(coverage.observations)
        for chosen, exposures in Chosen.every(coverage, choices, settings):
            selection = chosen.selection
            # Peers have one array in common.
            count = sharing.setdefault(
                id(selection.peers), np.zeros(coverage.centre.sets, dtype=np.int64)
            )
            count += chosen.covered
            ends = [float(end) for end in chosen.ends_mjd]
            parts.append(
                cls(
                    coverage,
                    chosen,
                    count,
                    Depth.of(coverage, selection, exposures),
                    tuple(map(mjd_to_iso, ends)),
                    tuple(hours_since(end, settings.event_mjd) for end in ends),
                )
            )
        return parts

    def numbers(self, label: str, sets: SetWorth) -> tuple[TallyRow, Timeline]:
        """Return the selection's row and its timeline on a map."""
        return self.row(label, sets), self.timeline(label, sets)

    def row(self, label: str, sets: SetWorth) -> TallyRow:
        """Sum what a map gives each set over the sets that the selection covers."""
        coverage, part = self.coverage, self.chosen
        selection, o = part.selection, coverage.observations
        covered = part.covered
        extinction, extinction_median = extinction_state(coverage, part)
        low = float(sets.inner[part.covered_inner].sum())
        high = float(sets.outer[part.covered_outer].sum())
        by_kind = part.by_kind(sets.probability)
        alone = covered & (self.sharing == 1)

        def deg2(area_sr: Floats, where: Bools) -> float:
            return float(area_sr[where].sum() * DEG2_PER_SR)

        return TallyRow(
            map=label,
            telescope=selection.telescope,
            band=selection.band,
            night=selection.night,
            exposures=int(selection.chosen.sum()),
            area_deg2=deg2(coverage.centre.area_sr, covered),
            area_low_deg2=deg2(coverage.inner.area_sr, part.covered_inner),
            area_high_deg2=deg2(coverage.outer.area_sr, part.covered_outer),
            area_in_50_deg2=deg2(sets.area_50_sr, covered),
            area_in_90_deg2=deg2(sets.area_90_sr, covered),
            probability=float(by_kind.sum()),
            probability_low=low,
            probability_high=high,
            probability_error=_centre_rule_error(coverage, sets.strip, part.footprints, high - low),
            probability_in_50=float(sets.probability_50[covered].sum()),
            probability_in_90=float(sets.probability_90[covered].sum()),
            probability_unique=float(sets.probability[alone].sum()),
            probability_credit=float((sets.probability[covered] / self.sharing[covered]).sum()),
            probability_revisited=float(by_kind[part.revisited].sum()),
            **self.depth.numbers(by_kind),
            volume_90_covered_mpc3=_volume(sets.volume_90, covered),
            first_start=_iso(o.start_mjd[selection.chosen].min(initial=np.inf)),
            last_end=_iso(o.end_mjd[selection.chosen].max(initial=-np.inf)),
            extinction=extinction,
            extinction_median=extinction_median,
            volume_90_covered_comoving_mpc3=_volume(sets.volume_90_comoving, covered),
        )

    def timeline(self, label: str, sets: SetWorth) -> Timeline:
        """Cumulate what was first completed at each exposure end."""
        part, selection = self.chosen, self.chosen.selection

        def cumulated(amount: Floats) -> tuple[float, ...]:
            found = np.cumsum(sum_by(part.first_end, part.by_kind(amount), len(self.end)))
            return tuple(map(float, found))

        return Timeline(
            label,
            selection.telescope,
            selection.band,
            selection.night,
            self.end,
            self.hours,
            cumulated(sets.probability),
            cumulated(self.coverage.centre.area_sr * DEG2_PER_SR),
        )


def _volume(volume: Floats | None, covered: Bools) -> float | None:
    return None if volume is None else float(volume[covered].sum())


def _iso(mjd: float) -> str | None:
    return mjd_to_iso(float(mjd)) if np.isfinite(mjd) else None


def _centre_rule_error(coverage: Coverage, strip: Floats, footprints: Bools, width: float) -> float:
    """Estimate twice the standard error of a union's probability by the centre rule.

    An edge along a ring errs by 0.06 of what its undecided strip holds; the
    four edges of a piece and the places of a selection are independent, the
    detectors of one camera half so. Only the part of the strips that the union
    leaves open counts. Never more than the bracket.
    """
    mine = strip[footprints]
    total = float(mine.sum())
    if total <= 0:
        return 0.0
    pieces = np.maximum(coverage.footprints.pieces_per_footprint[footprints], 1)
    spread = float(np.sqrt(np.sum((0.06 * mine * pieces**-0.25) ** 2)))
    return min(2 * spread * min(width / total, 1.0), width) if width > 0 else 0.0


def maps_in_force(start_mjd: Floats, maps: Sequence[SkyMap]) -> Ints:
    """Index of the newest map issued before each start; −1 before the first.

    A version without an issue time was in force from the beginning. Where one
    lacks it the maps need not be in order of issue: the last of them counts.
    """
    force = np.full(start_mjd.size, -1, dtype=np.int64)
    for index, skymap in enumerate(maps):
        force[start_mjd >= (-np.inf if skymap.issued_mjd is None else skymap.issued_mjd)] = index
    return force


def tally_as_pointed(coverage: Coverage, maps: Sequence[SkyMap]) -> Iterator[AsPointed]:
    """Judge each selection's exposures by the version in force when they began."""
    force = maps_in_force(coverage.observations.start_mjd, maps)
    cut, centre = coverage.cuts(maps)[0], coverage.centre
    worth = [cut.measure(m.probability) for m in maps]
    parts = [
        (selection, version, selection.chosen & (force == version))
        for selection in selections(coverage.observations)
        for version in np.unique(force[selection.chosen])
    ]
    footprints = [coverage.footprints.of(chosen) for _, _, chosen in parts]
    for part, covered in zip(parts, centre.covered_by_each(footprints)):
        selection, version, chosen = part
        yield AsPointed(
            None if version < 0 else maps[version].label,
            selection.telescope,
            selection.band,
            selection.night,
            int(chosen.sum()),
            None if version < 0 else float(worth[version][covered].sum()),
            float(worth[-1][covered].sum()),
        )
