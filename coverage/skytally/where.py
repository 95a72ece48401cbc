"""What was seen of a position: exposures, depth, and what the maps say of it.

Everything is in columns, so that one position and a hundred thousand are asked
about in the same way.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally import __version__
from skytally.campaign_data import LoadedCampaign
from skytally.cosmology import Cosmology
from skytally.distance import density, moments
from skytally.errors import UsageError
from skytally.footprints import Footprints
from skytally.galaxies import Ranking, RankingChoice, Weight, check_choice, rank_galaxies
from skytally.grouping import expand_ranges
from skytally.held import PAIRS_LIMIT, Held, cell_order_of, find_held, line_of, region_texts
from skytally.magnitudes import absolute_limit, extinction_coefficient
from skytally.observations import Observations
from skytally.positions_io import Positions
from skytally.raster import cell_width_rad
from skytally.skymap import SkyMap
from skytally.space import Space
from skytally.spans import DEG2_PER_SR, Ints

__all__ = [
    "INDEX_ORDER",
    "DeepestLimits",
    "HeldExposures",
    "OnMap",
    "VisitTable",
    "WhereAnswer",
    "choose_ranking",
    "look_up",
]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Objects = NDArray[np.object_]

# Without a ranking the raster only tells which footprints may hold a position; the
# shapes themselves decide. From order 8 to 10 it answers the same, and fastest here.
INDEX_ORDER = 9

_ARCSEC_PER_RAD = float(np.degrees(1.0)) * 3600.0


@dataclass(frozen=True, eq=False)
class HeldExposures:
    """The exposures that held at least one of the positions, by start; shape (e,) each.

    Attributes
    ----------
    telescope, exposure, band : object arrays of str
        Names.
    row : int64 array
        Row in the telescope's log.
    start_mjd, end_mjd : float64 arrays
        UTC.
    hours : float64 array
        From the event to the start.
    depth : float64 array
        Limiting magnitude as the exposure has it, in the campaign's system and
        significance, not corrected for extinction; NaN where it states none.
    edge_cell_arcsec : float64 array
        Width of the finest cell of a region given in cells, whose edges are
        known no better; NaN for all others.
    """

    telescope: Objects
    exposure: Objects
    band: Objects
    row: Ints
    start_mjd: Floats
    end_mjd: Floats
    hours: Floats
    depth: Floats
    edge_cell_arcsec: Floats


@dataclass(frozen=True, eq=False)
class VisitTable:
    """Pairs of position and exposure that held it; shape (v,) each.

    Attributes
    ----------
    position : int64 array
        Index of the position, rising.
    exposure : int64 array
        Index in `HeldExposures`, rising within a position.
    edge_arcsec : float64 array
        Distance along the sky to the nearest edge of the detector, region or
        mask; NaN where a region given in cells leaves it unknown.
    """

    position: Ints
    exposure: Ints
    edge_arcsec: Floats


@dataclass(frozen=True, eq=False)
class DeepestLimits:
    """The deepest exposure of each position and band that was seen; shape (d,) each.

    Attributes
    ----------
    position, exposure : int64 arrays
        Indices as in `VisitTable`.
    band : object array of str
        The band.
    depth : float64 array
        The limit as the exposure has it; NaN where none in this band states one.
    extinction : float64 array
        A_b at the position; NaN where none is known, and nothing is corrected.
    absolute_near, absolute_mean, absolute_far : float64 arrays
        Absolute magnitude at the limit, less the extinction where it is known,
        at the newest map's mean distance in this direction less its standard
        deviation, itself, and plus; NaN without such a distance.
    absolute_own : float64 array
        The same at the distance given with the position; NaN without one.
    """

    position: Ints
    exposure: Ints
    band: Objects
    depth: Floats
    extinction: Floats
    absolute_near: Floats
    absolute_mean: Floats
    absolute_far: Floats
    absolute_own: Floats


@dataclass(frozen=True, eq=False)
class OnMap:
    """What one map version says of each position; arrays of shape (n,).

    Attributes
    ----------
    version : str
        The map version.
    has_distances : bool
        Whether any of its cells has a distance.
    listed : bool array
        Whether the map lists a cell there; where not, its probability is zero.
    credible_level : float64 array
        Probability of the smallest credible region that holds the position;
        NaN where no cell is listed.
    density_per_deg2 : float64 array
        Probability per square degree.
    distance_mean_mpc, distance_sd_mpc : float64 arrays
        Luminosity distance in this direction; NaN without one.
    density_per_mpc3 : float64 array
        Probability per Mpc³ of luminosity distance at the distance given with
        the position; NaN where either has none.
    """

    version: str
    has_distances: bool
    listed: Bools
    credible_level: Floats
    density_per_deg2: Floats
    distance_mean_mpc: Floats
    distance_sd_mpc: Floats
    density_per_mpc3: Floats


@dataclass(frozen=True, eq=False)
class WhereAnswer:
    """What was seen of every position.

    Attributes
    ----------
    software, event_name : str
        What answered, and about which event.
    event_mjd : float
        Its time (UTC).
    magnitude_system, cosmology : str
        Of limits and of distances from redshifts.
    significance : float
        Of limits, in σ.
    inputs : tuple of (role, path, sha256)
        The campaign's files and the table of positions.
    positions : Positions
        As asked for.
    exposures_of : int64 array, shape (n,)
        How many exposures held each position.
    first, last : int64 arrays, shape (n,)
        The first and the last of them by start, as index in ``exposures``; −1 for none.
    exposures, visits, deepest
        See their types.
    maps : tuple of OnMap
        One for each map version, newest last.
    rankings : tuple of Ranking
        One for each map version with distances, where a ranking was asked for.
    extinction : str
        "corrected", "partly corrected" or "not corrected", of the deepest
        limits; empty without any.
    searchable : tuple of str
        Telescopes whose footprints are cut to a region given in cells, whose
        edge is left out of the distances to edges.
    """

    software: str
    event_name: str
    event_mjd: float
    magnitude_system: str
    significance: float
    cosmology: str
    inputs: tuple[tuple[str, str, str], ...]
    positions: Positions
    exposures_of: Ints
    first: Ints
    last: Ints
    exposures: HeldExposures
    visits: VisitTable
    deepest: DeepestLimits
    maps: tuple[OnMap, ...]
    rankings: tuple[Ranking, ...]
    extinction: str
    searchable: tuple[str, ...]


def choose_ranking(
    campaign: LoadedCampaign,
    positions: Positions,
    weight: str | None = None,
    completeness: float | None = None,
) -> RankingChoice | None:
    """Choose how to rank positions: as asked, or else by volume wherever distances allow.

    Raises
    ------
    UsageError
        If there is no such weight, or the completeness is no fraction.
    """
    if weight is not None and weight not in {one.value for one in Weight}:
        raise UsageError(
            f"there is no weight {weight!r}", remedy=f"Choose one of: {', '.join(Weight)}."
        )
    if completeness is not None and not 0 < completeness <= 1:
        raise UsageError(
            f"a completeness of {completeness:g}, expected above 0 and up to 1",
            remedy="Give the share of the weight that the table holds, such as 0.6.",
        )
    rankable = any(skymap.distance is not None for skymap in campaign.maps)
    rankable = rankable and bool(np.isfinite(positions.distance_mpc).any())
    if weight is None and completeness is None and not rankable:
        return None
    return RankingChoice(Weight(weight or Weight.NONE), completeness)


def look_up(
    campaign: LoadedCampaign,
    footprints: Footprints,
    positions: Positions,
    ranking: RankingChoice | None = None,
) -> WhereAnswer:
    """Look positions up among a campaign's exposures and maps.

    Parameters
    ----------
    campaign : LoadedCampaign
        As loaded.
    footprints : Footprints
        Its footprints as laid; that they are refined is not needed.
    positions : Positions
        Where to look.
    ranking : RankingChoice, optional
        Ranks the positions as galaxies.

    Raises
    ------
    UsageError
        If a ranking is asked for that the table or the maps do not allow, or
        far too many footprints lie on too many positions.
    """
    if ranking is not None:
        check_choice(positions, ranking)
    line = line_of(positions.ra_deg, positions.dec_deg)
    held = find_held(campaign, footprints, positions.ra_deg, positions.dec_deg)
    o = footprints.observations
    position, exposure, edge = _visits(held, o)
    shown, which = np.unique(exposure, return_inverse=True)
    visits = VisitTable(position, which.astype(np.int64), edge * _ARCSEC_PER_RAD)
    cosmology = Cosmology.named(campaign.settings.cosmology)
    maps = tuple(_on_map(skymap, cosmology, positions, line) for skymap in campaign.maps)
    extinction = _extinction(campaign, o, position, exposure, line)
    deepest = _deepest(o, visits, exposure, extinction, maps[-1], positions)
    count = np.bincount(position, minlength=len(positions))
    end = np.cumsum(count)
    seen = count > 0
    first, last = (np.full(len(positions), -1) for _ in range(2))
    first[seen], last[seen] = which[(end - count)[seen]], which[end[seen] - 1]
    rankings = _rank(campaign, footprints, positions, maps, seen, ranking)
    settings = campaign.settings
    own = () if positions.file is None else (("positions", positions.file, positions.sha256 or ""),)
    return WhereAnswer(
        f"skytally {__version__}",
        campaign.event_name,
        campaign.event_mjd,
        settings.magnitude_system,
        settings.significance,
        settings.cosmology,
        (*campaign.inputs, *own),
        positions,
        count,
        first,
        last,
        _exposures(campaign, footprints, shown),
        visits,
        deepest,
        maps,
        rankings,
        _extinction_state(deepest),
        tuple(t.name for t in campaign.telescopes if t.searchable is not None),
    )


def _visits(held: Held, o: Observations) -> tuple[Ints, Ints, Floats]:
    """Position, exposure and edge (radians) of every visit, by position and start."""
    by_footprint = np.argsort(o.footprint, kind="stable")
    count = np.bincount(o.footprint, minlength=int(held.footprint.max(initial=-1)) + 1)
    before = np.cumsum(count) - count
    total = int(count[held.footprint].sum())
    if total > PAIRS_LIMIT:
        raise UsageError(
            f"these positions were held {total:,} times, expected at most {PAIRS_LIMIT:,}",
            remedy="Ask about fewer positions at a time.",
        )
    pair, place = expand_ranges(before[held.footprint], count[held.footprint])
    position, exposure = held.position[pair], by_footprint[place]
    order = np.lexsort((exposure, position))
    return position[order], exposure[order], held.edge_rad[pair[order]]


def _exposures(campaign: LoadedCampaign, footprints: Footprints, shown: Ints) -> HeldExposures:
    """List exposures, shape (e,), given by their index."""
    o = footprints.observations
    texts = region_texts(campaign, footprints)[o.footprint[shown]]
    telescope = o.telescope[shown]
    width: dict[tuple[int, str], float] = {}
    for key in set(zip(telescope.tolist(), texts.tolist(), strict=True)):
        order = cell_order_of(campaign.telescopes[key[0]].regions[key[1]]) if key[1] else None
        width[key] = np.nan if order is None else cell_width_rad(order) * _ARCSEC_PER_RAD
    return HeldExposures(
        np.array(o.telescopes, dtype=object)[telescope],
        o.exposure[shown],
        np.array(o.bands, dtype=object)[o.band[shown]],
        o.row[shown],
        o.start_mjd[shown],
        o.end_mjd[shown],
        np.round((o.start_mjd[shown] - campaign.event_mjd) * 24.0, 4),
        o.depth[shown],
        np.array([width[key] for key in zip(telescope.tolist(), texts.tolist())], dtype=float),
    )


def _on_map(skymap: SkyMap, cosmology: Cosmology, positions: Positions, line: Ints) -> OnMap:
    """Look positions up on one map version."""
    row = np.searchsorted(skymap.starts, line, side="right") - 1
    listed = (row >= 0) & (line < skymap.stops[row])
    per_sr = skymap.density_at(line)
    mu, sigma = (np.full(line.size, np.nan) for _ in range(2))
    space = Space.of(skymap, cosmology)
    if space is not None:
        mu[listed], sigma[listed] = space.mu_mpc[row[listed]], space.sigma_mpc[row[listed]]
    mean, sd = moments(mu, sigma)
    own = positions.distance_mpc
    # Per steradian and Mpc, divided by r², is per Mpc³.
    per_mpc3 = per_sr * density(own, mu, sigma) / own**2
    if space is not None:
        per_mpc3[(per_sr == 0) & np.isfinite(own)] = 0.0
    return OnMap(
        skymap.label,
        space is not None,
        listed,
        np.where(listed, skymap.credible_level_at(line), np.nan),
        per_sr / DEG2_PER_SR,
        mean,
        sd,
        per_mpc3,
    )


def _extinction(
    campaign: LoadedCampaign, o: Observations, position: Ints, exposure: Ints, line: Ints
) -> Floats:
    """A_b at the position of each visit, the log's own value first; NaN where unknown, (v,)."""
    stated = o.extinction[exposure]
    if campaign.dust is None:
        return stated
    values = [extinction_coefficient(b, campaign.extinction_coefficients) for b in o.bands]
    coefficient = np.array([np.nan if v is None else v for v in values] or [np.nan])
    dust = coefficient[o.band[exposure]] * campaign.dust.at(line)[position]
    return np.where(np.isfinite(stated), stated, dust)


def _deepest(
    o: Observations,
    visits: VisitTable,
    exposure: Ints,
    extinction: Floats,
    newest: OnMap,
    positions: Positions,
) -> DeepestLimits:
    """Find the deepest visit of each position and band, and its absolute limits."""
    limit = o.depth[exposure] - np.where(np.isfinite(extinction), extinction, 0.0)
    key = visits.position * max(len(o.bands), 1) + o.band[exposure]
    # The earliest of equals; those without a limit come last.
    order = np.lexsort((exposure, np.where(np.isfinite(limit), -limit, np.inf), key))
    best = order[np.flatnonzero(np.diff(key[order], prepend=-1))]
    position = visits.position[best]
    mean, sd = newest.distance_mean_mpc[position], newest.distance_sd_mpc[position]
    return DeepestLimits(
        position,
        visits.exposure[best],
        np.array(o.bands, dtype=object)[o.band[exposure[best]]],
        o.depth[exposure[best]],
        extinction[best],
        absolute_limit(limit[best], mean - sd),
        absolute_limit(limit[best], mean),
        absolute_limit(limit[best], mean + sd),
        absolute_limit(limit[best], positions.distance_mpc[position]),
    )


def _extinction_state(deepest: DeepestLimits) -> str:
    known = np.isfinite(deepest.extinction[np.isfinite(deepest.depth)])
    if not known.size:
        return ""
    if known.all():
        return "corrected"
    return "partly corrected" if known.any() else "not corrected"


def _rank(
    campaign: LoadedCampaign,
    footprints: Footprints,
    positions: Positions,
    maps: tuple[OnMap, ...],
    seen: Bools,
    choice: RankingChoice | None,
) -> tuple[Ranking, ...]:
    """Rank galaxies on every map version that has distances."""
    if choice is None:
        return ()
    if not any(on_map.has_distances for on_map in maps):
        raise UsageError(
            "no map version carries distances, so galaxies cannot be ranked by volume",
            remedy="Ask without a ranking, or add a map version with distances.",
        )
    covered = footprints.raster.centre.union()
    return tuple(
        rank_galaxies(
            on_map.version,
            positions,
            on_map.density_per_mpc3,
            seen,
            skymap.probability.of_region(covered),
            choice,
        )
        for skymap, on_map in zip(campaign.maps, maps, strict=True)
        if on_map.has_distances
    )
