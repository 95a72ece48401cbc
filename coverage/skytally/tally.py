"""The accounting: area, probability, credit, depth and time for every selection."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from skytally.footprints import Footprints
from skytally.grouping import expand_ranges, sum_by
from skytally.magnitudes import stack_groups
from skytally.observations import Observations
from skytally.patchwork import Patchwork
from skytally.skymap import Measure, SkyMap
from skytally.spans import DEG2_PER_SR, Ints
from skytally.times import hours_since, mjd_to_iso

__all__ = [
    "AsPointed",
    "Coverage",
    "Selection",
    "TallyRow",
    "TallySettings",
    "Timeline",
    "maps_in_force",
    "selections",
    "tally_as_pointed",
    "tally_map",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


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


@dataclass(frozen=True)
class TallySettings:
    """What counts as a revisit, and when the event was."""

    event_mjd: float
    revisit_visits: int
    revisit_gap_minutes: float


@dataclass(frozen=True, eq=False)
class Selection:
    """A choice of exposures: all, or those of a telescope, a band, both, or a night.

    Attributes
    ----------
    telescope, band, night : str or None
        None means all.
    chosen : bool array, shape (exposures,)
        The exposures selected.
    peers : int64 array, shape (exposures,)
        Number of the selection of the same kind that each exposure belongs to:
        telescopes among telescopes, bands among bands, …; uniqueness and
        credit are counted among these.
    peer : int
        This selection's own number among its peers.
    """

    telescope: str | None
    band: str | None
    night: str | None
    chosen: Bools
    peers: Ints
    peer: int


def selections(observations: Observations) -> list[Selection]:
    """List the selections of DESIGN section 6 in the order of the rows."""
    o = observations
    both = o.telescope * max(len(o.bands), 1) + o.band
    found = [
        Selection(None, None, None, np.ones(len(o), dtype=bool), np.zeros(len(o), dtype=int), 0)
    ]
    for index, name in enumerate(o.telescopes):
        found.append(Selection(name, None, None, o.telescope == index, o.telescope, index))
    for index, name in enumerate(o.bands):
        found.append(Selection(None, name, None, o.band == index, o.band, index))
    for peer in np.unique(both):
        telescope, band = divmod(int(peer), len(o.bands))
        found.append(
            Selection(o.telescopes[telescope], o.bands[band], None, both == peer, both, int(peer))
        )
    for index, name in enumerate(o.nights):
        found.append(Selection(None, None, name, o.night == index, o.night, index))
    return found


@dataclass(frozen=True, eq=False)
class Coverage:
    """What was covered by what, before any map is looked at.

    Attributes
    ----------
    footprints : Footprints
        Exposures and their rasterised footprints.
    centre, inner, outer : Patchwork
        The patchwork by the centre rule, and those of the two brackets.
    """

    footprints: Footprints
    centre: Patchwork
    inner: Patchwork
    outer: Patchwork

    @classmethod
    def build(cls, footprints: Footprints) -> Coverage:
        """Cut the line once for each of the three regions."""
        raster = footprints.raster
        return cls(
            footprints,
            Patchwork.build(raster.centre),
            Patchwork.build(raster.inner),
            Patchwork.build(raster.outer),
        )

    @property
    def observations(self) -> Observations:
        """The exposures."""
        return self.footprints.observations

    @cached_property
    def visits(self) -> tuple[Ints, Ints]:
        """Pairs of set and exposure, sets rising and exposures in time order within each."""
        by_footprint = np.argsort(self.observations.footprint, kind="stable")
        count = np.bincount(
            self.observations.footprint, minlength=self.footprints.raster.order.size
        )
        before = np.cumsum(count) - count
        members = self.centre.members
        row, place = expand_ranges(before[members], count[members])
        exposure, group = by_footprint[place], self.centre.set_of_member[row]
        order = np.argsort(group * max(len(self.observations), 1) + exposure)
        return group[order], exposure[order]


@dataclass(frozen=True, eq=False)
class _Sets:
    """What each set of the patchwork is worth on one map, arrays of shape (sets,)."""

    probability: Floats
    probability_50: Floats
    probability_90: Floats
    area_sr: Floats
    area_50_sr: Floats
    area_90_sr: Floats

    @classmethod
    def of(cls, patchwork: Patchwork, skymap: SkyMap) -> _Sets:
        region_50, region_90 = skymap.credible_region(0.5), skymap.credible_region(0.9)
        return cls(
            patchwork.measure(skymap.probability),
            patchwork.measure(skymap.restricted(0.5)),
            patchwork.measure(skymap.restricted(0.9)),
            patchwork.area_sr(),
            patchwork.measure(Measure.area(region_50)),
            patchwork.measure(Measure.area(region_90)),
        )


@dataclass(frozen=True, eq=False)
class _Chosen:
    """The part of a coverage that one selection sees, whatever the map."""

    selection: Selection
    covered: Bools
    covered_inner: Bools
    covered_outer: Bools
    footprints: Bools
    revisited: Bools
    visit_set: Ints
    visit_exposure: Ints
    first_end: Floats  # per set; inf where not covered


def _choose(coverage: Coverage, selection: Selection, settings: TallySettings) -> _Chosen:
    footprints = coverage.footprints.of(selection.chosen)
    group, exposure = coverage.visits
    mine = selection.chosen[exposure]
    group, exposure = group[mine], exposure[mine]
    sets = coverage.centre.sets
    count = np.bincount(group, minlength=sets)
    start, end = coverage.observations.start_mjd, coverage.observations.end_mjd
    first_start, last_start = np.full(sets, np.inf), np.full(sets, -np.inf)
    first_end = np.full(sets, np.inf)
    np.minimum.at(first_start, group, start[exposure])
    np.maximum.at(last_start, group, start[exposure])
    np.minimum.at(first_end, group, end[exposure])
    gap = settings.revisit_gap_minutes / 1440.0
    # A nanosecond of slack: MJD in double precision resolves no better than a microsecond.
    apart = np.where(count > 0, last_start, 0.0) - np.where(count > 0, first_start, 0.0)
    return _Chosen(
        selection,
        count > 0,
        coverage.inner.covered_by(footprints),
        coverage.outer.covered_by(footprints),
        footprints,
        (count >= settings.revisit_visits) & (apart >= gap - 1e-11),
        group,
        exposure,
        first_end,
    )


def tally_map(
    coverage: Coverage,
    skymap: SkyMap,
    settings: TallySettings,
    chosen: Sequence[Selection] | None = None,
) -> tuple[list[TallyRow], list[Timeline]]:
    """Tally every selection on one map version."""
    wanted = selections(coverage.observations) if chosen is None else list(chosen)
    sets = _Sets.of(coverage.centre, skymap)
    inner = coverage.inner.measure(skymap.probability), coverage.inner.area_sr()
    outer = coverage.outer.measure(skymap.probability), coverage.outer.area_sr()
    strip = _boundary_probability(coverage, skymap)
    shares: dict[int, _Shares] = {}
    rows, timelines = [], []
    for selection in wanted:
        part = _choose(coverage, selection, settings)
        if id(selection.peers) not in shares:
            shares[id(selection.peers)] = _Shares.of(coverage, selection.peers, sets.probability)
        low, high = (
            float(m[0][c].sum())
            for m, c in ((inner, part.covered_inner), (outer, part.covered_outer))
        )
        area_low, area_high = (
            float(m[1][c].sum() * DEG2_PER_SR)
            for m, c in ((inner, part.covered_inner), (outer, part.covered_outer))
        )
        share = shares[id(selection.peers)]
        c = part.covered
        error = _centre_rule_error(coverage, strip, part.footprints, high - low)
        depth = _depths(coverage, part, sets.probability)
        o = coverage.observations
        rows.append(
            TallyRow(
                map=skymap.label,
                telescope=selection.telescope,
                band=selection.band,
                night=selection.night,
                exposures=int(selection.chosen.sum()),
                area_deg2=float(sets.area_sr[c].sum() * DEG2_PER_SR),
                area_low_deg2=area_low,
                area_high_deg2=area_high,
                area_in_50_deg2=float(sets.area_50_sr[c].sum() * DEG2_PER_SR),
                area_in_90_deg2=float(sets.area_90_sr[c].sum() * DEG2_PER_SR),
                probability=float(sets.probability[c].sum()),
                probability_low=low,
                probability_high=high,
                probability_error=error,
                probability_in_50=float(sets.probability_50[c].sum()),
                probability_in_90=float(sets.probability_90[c].sum()),
                probability_unique=share.unique.get(selection.peer, 0.0),
                probability_credit=share.credit.get(selection.peer, 0.0),
                probability_revisited=float(sets.probability[part.revisited].sum()),
                **depth,
                volume_90_covered_mpc3=None,
                first_start=_iso(o.start_mjd[selection.chosen], np.min),
                last_end=_iso(o.end_mjd[selection.chosen], np.max),
            )
        )
        timelines.append(_timeline(part, skymap.label, sets, settings.event_mjd))
    return rows, timelines


def _iso(mjd: Floats, pick: object) -> str | None:
    return mjd_to_iso(float(pick(mjd))) if mjd.size else None  # type: ignore[operator]


@dataclass(frozen=True)
class _Shares:
    """Probability that each peer covered alone, and its equal share of what several did."""

    unique: dict[int, float]
    credit: dict[int, float]

    @classmethod
    def of(cls, coverage: Coverage, peers: Ints, probability: Floats) -> _Shares:
        group, exposure = coverage.visits
        if group.size == 0:
            return cls({}, {})
        width = int(peers.max()) + 1
        pair = np.unique(group * width + peers[exposure])
        group, peer = np.divmod(pair, width)
        sharing = np.bincount(group, minlength=coverage.centre.sets)[group]
        credit = np.bincount(peer, probability[group] / sharing, width)
        unique = np.bincount(peer, np.where(sharing == 1, probability[group], 0.0), width)
        numbers = [int(p) for p in np.unique(peer)]
        return cls({p: float(unique[p]) for p in numbers}, {p: float(credit[p]) for p in numbers})


def _boundary_probability(coverage: Coverage, skymap: SkyMap) -> Floats:
    """Probability in each footprint's undecided cells at its working order, (footprints,)."""
    raster = coverage.footprints.raster
    p = skymap.probability
    return np.maximum(p.of_table(raster.outer) - p.of_table(raster.inner), 0.0)


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


def _depths(coverage: Coverage, part: _Chosen, probability: Floats) -> dict[str, float | None]:
    """Depth of a selection; magnitudes of different bands are never mixed."""
    o = coverage.observations
    names = (
        "depth_min",
        "depth_median",
        "depth_max",
        "depth_over_50",
        "depth_over_90",
        "depth_stacked_over_50",
        "depth_stacked_over_90",
    )
    chosen = part.selection.chosen
    depth = o.depth[chosen]
    depth = depth[np.isfinite(depth)]
    if depth.size == 0 or np.unique(o.band[chosen]).size != 1:
        return dict.fromkeys(names)
    weight = probability[part.covered]
    single = np.full(coverage.centre.sets, -np.inf)
    value = o.depth[part.visit_exposure]
    known = np.isfinite(value)
    np.maximum.at(single, part.visit_set[known], value[known])
    stacked = _stacked(o, part, coverage.centre.sets)
    numbers = [
        float(depth.min()),
        float(np.median(depth)),
        float(depth.max()),
        *(_reached(single[part.covered], weight, share) for share in (0.5, 0.9)),
        *(_reached(stacked[part.covered], weight, share) for share in (0.5, 0.9)),
    ]
    return dict(zip(names, numbers))


def _stacked(o: Observations, part: _Chosen, sets: int) -> Floats:
    """Deepest stack of each set: exposures of one telescope, band and night; −inf without."""
    known = np.isfinite(o.depth[part.visit_exposure])
    group, exposure = part.visit_set[known], part.visit_exposure[known]
    kind = (o.telescope * max(len(o.bands), 1) + o.band) * max(len(o.nights), 1) + o.night
    key = group * (int(kind.max(initial=0)) + 1) + kind[exposure]
    order = np.argsort(key, kind="stable")
    first = np.flatnonzero(np.diff(key[order], prepend=-1))
    best = np.full(sets, -np.inf)
    if first.size:
        np.maximum.at(best, group[order][first], stack_groups(o.depth[exposure[order]], first))
    return best


def _reached(depth: Floats, weight: Floats, share: float) -> float | None:
    """Depth that at least a share of the weight reaches; None if so much has no limit."""
    total = float(weight.sum())
    if total <= 0:
        return None
    order = np.argsort(-depth)
    held = np.cumsum(weight[order])
    place = min(int(np.searchsorted(held, share * total * (1 - 1e-12))), depth.size - 1)
    value = float(depth[order[place]])
    return value if np.isfinite(value) else None


def _timeline(part: _Chosen, label: str, sets: _Sets, event_mjd: float) -> Timeline:
    """Cumulate what was first completed at each exposure end."""
    covered = np.flatnonzero(part.covered)
    ends, step = np.unique(part.first_end[covered], return_inverse=True)
    probability = np.cumsum(sum_by(step, sets.probability[covered], ends.size))
    area = np.cumsum(sum_by(step, sets.area_sr[covered], ends.size)) * DEG2_PER_SR
    return Timeline(
        label,
        part.selection.telescope,
        part.selection.band,
        part.selection.night,
        tuple(mjd_to_iso(float(end)) for end in ends),
        tuple(hours_since(float(end), event_mjd) for end in ends),
        tuple(map(float, probability)),
        tuple(map(float, area)),
    )


def maps_in_force(start_mjd: Floats, maps: Sequence[SkyMap]) -> Ints:
    """Index of the newest map issued before each start; −1 before the first.

    A version without an issue time was in force from the beginning.
    """
    issued = np.array([-np.inf if m.issued_mjd is None else m.issued_mjd for m in maps])
    return np.searchsorted(issued, start_mjd, side="right") - 1


def tally_as_pointed(coverage: Coverage, maps: Sequence[SkyMap]) -> Iterator[AsPointed]:
    """Judge each selection's exposures by the version in force when they began."""
    force = maps_in_force(coverage.observations.start_mjd, maps)
    worth = [coverage.centre.measure(m.probability) for m in maps]
    for selection in selections(coverage.observations):
        for version in np.unique(force[selection.chosen]):
            chosen = selection.chosen & (force == version)
            covered = coverage.centre.covered_by(coverage.footprints.of(chosen))
            yield AsPointed(
                None if version < 0 else maps[version].label,
                selection.telescope,
                selection.band,
                selection.night,
                int(chosen.sum()),
                None if version < 0 else float(worth[version][covered].sum()),
                float(worth[-1][covered].sum()),
            )
