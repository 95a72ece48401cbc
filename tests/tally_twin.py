"""The tally once more, slowly: every number of DESIGN section 5 pixel by pixel.

Written from the definitions alone and sharing no code with the package. The sky
near the fields is cut into flat NESTED pixels of one order; a region is a set of
pixel numbers, a selection walks over its pixels in plain Python, and times are
whole seconds, so that no comparison of times depends on rounding. healpy, an
independent HEALPix library, gives pixel areas and places pixels in map cells.
"""

from __future__ import annotations

import math
import statistics
from collections import defaultdict
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from datetime import datetime, timedelta

import healpy
import numpy as np

Selection = tuple[str | None, str | None, str | None]  # telescope, band, night


@dataclass(frozen=True)
class PlainMap:
    """Cells as (order, NESTED cell, probability), total one; issue in seconds after the event."""

    label: str
    issued_s: int | None
    cells: list[tuple[int, int, float]]
    distances: list[tuple[float, float, float]] | None = None  # μ, σ, N of each cell, Mpc


@dataclass(frozen=True)
class PlainTelescope:
    """A telescope's own rules; pixels are those of the twin's order."""

    name: str
    longitude_deg: float | None
    depth_system: str
    depth_significance: float
    vega_offset: dict[str, float]  # m_AB − m_Vega
    masked: frozenset[int] = frozenset()
    searchable: frozenset[int] | None = None


@dataclass(frozen=True)
class PlainExposure:
    """One exposure: whole seconds after the event, limit as written, pixels as handed."""

    telescope: str
    band: str
    start_s: int
    duration_s: int
    depth: float | None
    pixels: frozenset[int]
    extinction: float | None = None  # A_b as the log states it

    @property
    def end_s(self) -> int:
        return self.start_s + self.duration_s


@dataclass(frozen=True)
class PlainSource:
    """A source in plain terms; ``magnitude`` by band, or one number for any band.

    It rises in proportion to time until ``rise_days``, then fades; ``curve``, by
    band, is interpolated instead. Efficiency: ``plateau``/(1 + exp((m − limit −
    offset)/width)), a step with width 0.
    """

    name: str
    magnitude: float | dict[str, float]
    fade_per_day: float = 0.0
    rise_days: float = 0.0
    curve: dict[str, list[tuple[float, float]]] | None = None
    flat: bool = False
    offset: float = 0.0
    width: float = 0.0
    plateau: float = 1.0
    visits: int = 1
    gap_s: int = 0


@dataclass(frozen=True)
class PlainCampaign:
    event: datetime
    maps: list[PlainMap]
    telescopes: list[PlainTelescope]
    exposures: list[PlainExposure]
    order: int
    system: str = "AB"
    significance: float = 5.0
    visits: int = 2
    gap_s: int = 1800
    dust: list[tuple[int, int, float]] | None = None  # (order, cell, E(B−V)); holes have none
    coefficients: dict[str, float] = field(default_factory=dict)  # A_b / E(B−V)
    sources: tuple[PlainSource, ...] = ()


@dataclass(frozen=True)
class Judged:
    """An exposure with what the campaign's rules make of it.

    ``limit`` is in the campaign's system and significance, ``depth`` the same less
    the field's extinction where that is known.
    """

    telescope: str
    band: str
    night: str
    start_s: int
    end_s: int
    limit: float | None
    stated_extinction: float | None
    extinction: float | None
    pixels: frozenset[int]

    @property
    def depth(self) -> float | None:
        if self.limit is None or self.extinction is None:
            return self.limit
        return self.limit - self.extinction

    def named(self, selection: Selection) -> bool:
        own = (self.telescope, self.band, self.night)
        return all(want is None or want == have for want, have in zip(selection, own))


@dataclass
class Numbers:
    """What the twin says of one selection on one map."""

    values: dict[str, float | int | str | None]
    timeline: dict[int, tuple[float, float]]  # end in s → cumulative probability, deg²
    as_pointed: dict[str | None, tuple[int, float | None, float]] = field(default_factory=dict)


def judge(campaign: PlainCampaign) -> list[Judged]:
    """Apply nights, masks, magnitudes and extinction."""
    rules = {t.name: t for t in campaign.telescopes}
    reddening = {} if campaign.dust is None else dust_of(campaign)
    judged = []
    for e in campaign.exposures:
        rule = rules[e.telescope]
        pixels = e.pixels - rule.masked
        if rule.searchable is not None:
            pixels &= rule.searchable
        judged.append(
            Judged(
                e.telescope,
                e.band or "unstated",
                night(campaign.event + timedelta(seconds=e.start_s), rule.longitude_deg),
                e.start_s,
                e.end_s,
                limit(campaign, rule, e),
                e.extinction,
                extinction(campaign, e, pixels, reddening),
                pixels,
            )
        )
    return judged


def night(start: datetime, longitude_deg: float | None) -> str:
    """Date of the evening: local mean time is UTC + 4 min per degree east; it breaks at noon."""
    east = 0.0 if longitude_deg is None else longitude_deg
    east = east - 360 if east > 180 else east
    return (start + timedelta(minutes=4 * east) - timedelta(hours=12)).date().isoformat()


def limit(campaign: PlainCampaign, rule: PlainTelescope, e: PlainExposure) -> float | None:
    """A limit brought to the campaign's system and significance."""
    if e.depth is None:
        return None
    depth = e.depth - 2.5 * math.log10(campaign.significance / rule.depth_significance)
    if rule.depth_system == campaign.system:
        return depth
    offset = rule.vega_offset[e.band]
    return depth + offset if campaign.system == "AB" else depth - offset


def dust_of(campaign: PlainCampaign) -> dict[int, float]:
    """E(B−V) of every pixel of the twin's order that the dust map knows."""
    found = {}
    for order, cell, ebv in campaign.dust or ():
        step = 4 ** (campaign.order - order)
        found.update(dict.fromkeys(range(cell * step, (cell + 1) * step), ebv))
    return found


def extinction(
    campaign: PlainCampaign, e: PlainExposure, pixels: frozenset[int], reddening: dict[int, float]
) -> float | None:
    """A_b: the log's own, or the field's mean E(B−V), holes left out, times the coefficient."""
    if e.extinction is not None:
        return e.extinction
    known = [reddening[p] for p in pixels if p in reddening]
    if not known or e.band not in campaign.coefficients:
        return None
    return campaign.coefficients[e.band] * math.fsum(known) / len(known)


def flat(skymap: PlainMap, pixels: list[int], order: int) -> dict[int, float]:
    """Probability of each pixel."""
    lon, lat = healpy.pix2ang(1 << order, np.array(pixels, dtype=np.int64), nest=True, lonlat=True)
    area = healpy.nside2pixarea(1 << order)
    value = dict.fromkeys(pixels, 0.0)
    for level in sorted({cell[0] for cell in skymap.cells}):
        listed = {c: p for o, c, p in skymap.cells if o == level}
        share = area / healpy.nside2pixarea(1 << level)
        cells = healpy.ang2pix(1 << level, lon, lat, nest=True, lonlat=True)
        for pixel, cell in zip(pixels, cells.tolist()):
            value[pixel] += listed.get(cell, 0.0) * share
    return value


def credible(skymap: PlainMap, level: float) -> PlainMap:
    """Cells in order of falling density up to and including the one that reaches the level."""
    held, kept = 0.0, []
    for order, cell, amount in sorted(skymap.cells, key=lambda c: -c[2] * 4.0 ** c[0]):
        kept.append((order, cell, amount))
        held += amount
        if held >= level * (1 - 1e-12):
            break
    return PlainMap(skymap.label, skymap.issued_s, kept)


def selections(campaign: PlainCampaign, exposures: list[Judged]) -> Iterator[Selection]:
    """All; each telescope; each band; each telescope and band; each night."""
    yield (None, None, None)
    yield from ((t.name, None, None) for t in campaign.telescopes)
    yield from ((None, band, None) for band in {e.band for e in exposures})
    yield from ((*pair, None) for pair in {(e.telescope, e.band) for e in exposures})
    yield from ((None, None, one) for one in {e.night for e in exposures})


def peer_of(selection: Selection) -> Callable[[Judged], Selection]:
    """The selection of the same kind that an exposure belongs to."""
    by = [part is not None for part in selection]
    return lambda e: tuple(  # type: ignore[return-value]
        have if used else None for used, have in zip(by, (e.telescope, e.band, e.night))
    )


def tally(campaign: PlainCampaign) -> dict[tuple[str, Selection], Numbers]:
    """Every number for every map version and selection."""
    exposures = judge(campaign)
    pixels = sorted(set().union(*(e.pixels for e in exposures)))
    seen: dict[int, list[Judged]] = {
        pixel: [e for e in exposures if pixel in e.pixels] for pixel in pixels
    }
    weights = {m.label: flat(m, pixels, campaign.order) for m in campaign.maps}
    found = {}
    for skymap in campaign.maps:
        inside = {
            level: flat_mask(credible(skymap, level), pixels, campaign.order)
            for level in (0.5, 0.9)
        }
        for selection in selections(campaign, exposures):
            numbers = tally_one(campaign, exposures, seen, selection, weights[skymap.label], inside)
            numbers.as_pointed = as_pointed(campaign, exposures, selection, weights)
            found[skymap.label, selection] = numbers
    return found


def flat_mask(region: PlainMap, pixels: list[int], order: int) -> set[int]:
    """Pixels in cells of a map, whatever these hold."""
    ones = PlainMap("", None, [(o, c, 1.0) for o, c, _ in region.cells])
    return {pixel for pixel, value in flat(ones, pixels, order).items() if value > 0}


def tally_one(
    campaign: PlainCampaign,
    exposures: list[Judged],
    seen: dict[int, list[Judged]],
    selection: Selection,
    weight: dict[int, float],
    inside: dict[float, set[int]],
) -> Numbers:
    """One selection on one map."""
    area = healpy.nside2pixarea(1 << campaign.order, degrees=True)
    mine = [e for e in exposures if e.named(selection)]
    visits = {
        pixel: [e for e in all_of_it if e.named(selection)] for pixel, all_of_it in seen.items()
    }
    covered = [pixel for pixel, own in visits.items() if own]
    peer = peer_of(selection)
    unique = credit = revisited = 0.0
    for pixel in covered:
        sharing = len({peer(e) for e in seen[pixel]})
        credit += weight[pixel] / sharing
        unique += weight[pixel] if sharing == 1 else 0.0
        starts = [e.start_s for e in visits[pixel]]
        if len(starts) >= campaign.visits and max(starts) - min(starts) >= campaign.gap_s:
            revisited += weight[pixel]
    values: dict[str, float | int | str | None] = {
        "exposures": len(mine),
        "area_deg2": area * len(covered),
        "area_in_50_deg2": area * len(inside[0.5].intersection(covered)),
        "area_in_90_deg2": area * len(inside[0.9].intersection(covered)),
        "probability": sum(weight[p] for p in covered),
        "probability_in_50": sum(weight[p] for p in covered if p in inside[0.5]),
        "probability_in_90": sum(weight[p] for p in covered if p in inside[0.9]),
        "probability_unique": unique,
        "probability_credit": credit,
        "probability_revisited": revisited,
        "first_start": iso(campaign, min((e.start_s for e in mine), default=None)),
        "last_end": iso(campaign, max((e.end_s for e in mine), default=None)),
        **correction(mine),
        **depths(mine, {p: visits[p] for p in covered}, weight),
    }
    return Numbers(values, timeline({p: visits[p] for p in covered}, weight, area))


def iso(campaign: PlainCampaign, seconds: int | None) -> str | None:
    if seconds is None:
        return None
    return (campaign.event + timedelta(seconds=seconds)).strftime("%Y-%m-%dT%H:%M:%SZ")


def timeline(
    visits: dict[int, list[Judged]], weight: dict[int, float], area: float
) -> dict[int, tuple[float, float]]:
    """Cumulative probability and area after each exposure end that completed new sky."""
    first = {pixel: min(e.end_s for e in own) for pixel, own in visits.items()}
    return {
        end: (
            sum(weight[p] for p, t in first.items() if t <= end),
            area * sum(1 for t in first.values() if t <= end),
        )
        for end in sorted(set(first.values()))
    }


def correction(mine: list[Judged]) -> dict[str, float | str | None]:
    """Whether the limits are corrected for extinction, and by how much at the median."""
    limited = [e for e in mine if e.limit is not None]
    known = [e.extinction for e in limited if e.extinction is not None]
    if not known:
        return {"extinction": "not corrected", "extinction_median": None}
    state = "corrected" if len(known) == len(limited) else "partly corrected"
    return {"extinction": state, "extinction_median": statistics.median(known)}


def depths(
    mine: list[Judged], visits: dict[int, list[Judged]], weight: dict[int, float]
) -> dict[str, float | None]:
    """Limits of one band over exposures, and over the covered probability."""
    names = (
        "depth_min",
        "depth_median",
        "depth_max",
        "depth_over_50",
        "depth_over_90",
        "depth_stacked_over_50",
        "depth_stacked_over_90",
    )
    known = [e.depth for e in mine if e.depth is not None]
    if not known or len({e.band for e in mine}) > 1:
        return dict.fromkeys(names)
    single, stacked = {}, {}
    for pixel, own in visits.items():
        nights = defaultdict(list)
        for e in own:
            if e.depth is not None:
                nights[e.telescope, e.band, e.night].append(e.depth)
        single[pixel] = max((m for group in nights.values() for m in group), default=None)
        stacked[pixel] = max(
            (1.25 * math.log10(sum(10 ** (0.8 * m) for m in group)) for group in nights.values()),
            default=None,
        )
    return dict(
        zip(
            names,
            (
                min(known),
                statistics.median(known),
                max(known),
                reached(single, weight, 0.5),
                reached(single, weight, 0.9),
                reached(stacked, weight, 0.5),
                reached(stacked, weight, 0.9),
            ),
        )
    )


def reached(depth: dict[int, float | None], weight: dict[int, float], share: float) -> float | None:
    """Greatest limit that at least a share of the covered probability reaches."""
    total = sum(weight[p] for p in depth)
    if total <= 0:
        return None
    for value in sorted({d for d in depth.values() if d is not None}, reverse=True):
        held = sum(weight[p] for p, d in depth.items() if d is not None and d >= value)
        if held >= share * total * (1 - 1e-12):
            return value
    return None


def as_pointed(
    campaign: PlainCampaign,
    exposures: list[Judged],
    selection: Selection,
    weights: dict[str, dict[int, float]],
) -> dict[str | None, tuple[int, float | None, float]]:
    """Exposures by the version in force when they began: count, probability then, and now."""
    begun: dict[str | None, list[Judged]] = defaultdict(list)
    for e in exposures:
        if e.named(selection):
            known = [
                m.label for m in campaign.maps if m.issued_s is None or m.issued_s <= e.start_s
            ]
            begun[known[-1] if known else None].append(e)
    found = {}
    for label, own in begun.items():
        union = set().union(*(e.pixels for e in own))
        newest = weights[campaign.maps[-1].label]
        then = None if label is None else sum(weights[label][p] for p in union)
        found[label] = (len(own), then, sum(newest[p] for p in union))
    return found
