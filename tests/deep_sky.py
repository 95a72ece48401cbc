"""A map with distances, fields upon it, and events drawn from it: for tests in three dimensions.

What is drawn shares no code with the package: healpy places the events within
the map's cells, distances follow from numeric integration of p(r) ∝ r² exp(−(r−μ)²/2σ²),
fields are cut out in the tangent plane by the formulae of FITS (A&A 395 1077, 2002,
section 5.1.3), and astropy gives redshifts.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import healpy
import numpy as np
from astropy import units as u
from astropy.cosmology import Planck18
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from scipy.integrate import cumulative_trapezoid
from skytally.cameras import MosaicCamera
from skytally.covered import Coverage
from skytally.dust import Dust
from skytally.footprints import lay_footprints
from skytally.limits import Brackets, Scene, tally_sources
from skytally.overlay import Places
from skytally.patchwork import edges_of
from skytally.skymap import DistanceLayer, SkyMap
from skytally.sources import Source
from skytally.spans import FULL_SKY_SR, LINE_ORDER, Spans, cell_to_span

__all__ = [
    "Draws",
    "constant",
    "coverage_of",
    "distance_map",
    "dust_map",
    "exact_coverage",
    "fields",
    "map_of",
    "often",
    "places_of",
    "scene_of",
    "source_rows",
    "spans_of_cells",
]

COARSE, FINE, DRAWN = 4, 5, 22
CENTRE = (150.0, 20.0)


def constant(magnitude, *, bands=None, **more):
    """A source of constant absolute magnitude, the same in any band."""
    return Source("Steady", bands, "constant", magnitude, **more)


def map_of(order, cell, weight, mu, sigma, norm=None, label="1"):
    """A map of NESTED cells; weights in any unit, N as 1 where a cell has a distance."""
    rank = np.argsort(cell_to_span(order, cell)[0])
    order, cell = np.broadcast_to(order, cell.shape)[rank], cell[rank]
    weight, mu, sigma = (np.asarray(a, dtype=float)[rank] for a in (weight, mu, sigma))
    area = FULL_SKY_SR / (12.0 * 4.0**order)
    starts, stops = cell_to_span(order, cell)
    norm = np.isfinite(mu).astype(float) if norm is None else np.asarray(norm, float)[rank]
    layer = DistanceLayer(mu, sigma, norm)
    density = weight / weight.sum() / area
    return SkyMap(starts, stops, density, int(order.max()), distance=layer, label=label)


def distance_map(seed=3, radius_deg=14.0, without=True):
    """An uneven patch of two orders; some cells with μ < 0, some without distance."""
    rng = np.random.default_rng(seed)
    vector = healpy.ang2vec(*CENTRE, lonlat=True)
    patch = healpy.query_disc(1 << COARSE, vector, np.radians(radius_deg), nest=True)
    whole = rng.random(patch.size) < 0.4
    children = (4 * patch[~whole][:, None] + np.arange(4)).ravel()
    order = np.repeat([COARSE, FINE], [int(whole.sum()), children.size])
    cell = np.append(patch[whole], children)
    weight = rng.exponential(1.0, cell.size) * 4.0 ** (COARSE - order)
    mu, sigma = rng.normal(130.0, 35.0, cell.size), rng.uniform(15.0, 45.0, cell.size)
    mu[rng.random(cell.size) < 0.05] = -40.0
    if without:
        mu[rng.random(cell.size) < 0.06] = np.inf
    return map_of(order, cell, weight, mu, sigma)


def fields(seed=5, count=8, size=(8.0, 6.0), depth_sd=0.4, missing=0.0):
    """Two telescopes with two bands, overlapping over three nights."""
    rng = np.random.default_rng(seed)
    made = []
    for name in ("Heron", "Plover"):
        depth = rng.normal(19.6, depth_sd, count).round(2)
        depth[rng.random(count) < missing] = np.nan
        log = log_table(
            name,
            rng.uniform(CENTRE[0] - 9, CENTRE[0] + 9, count),
            rng.uniform(CENTRE[1] - 9, CENTRE[1] + 9, count),
            angle=rng.uniform(0, 360, count),
            start=EVENT_MJD + np.sort(rng.uniform(0.02, 2.5, count)),
            duration=120.0,
            band=rng.choice(["g", "r"], count),
            depth=depth,
        )
        made.append(telescope(name, MosaicCamera.rectangle(*size), log))
    return made


def coverage_of(telescopes, skymap, extinction=None):
    return Coverage.build(lay_footprints(campaign(telescopes, [skymap])), extinction)


def places_of(patchwork, skymap, dust=None):
    """Places of a patchwork over a map and dust."""
    layers = [skymap] if dust is None else [skymap, dust]
    return Places.of(patchwork.cut(edges_of(*layers)), dust)


def scene_of(coverage, space, dust=None, coefficients=None):
    """A map under the centre rule's patchwork."""
    return Scene.of(space, Brackets(coverage, [space], dust, coefficients or {}).centre)


def source_rows(coverage, space, sources, dust=None, coefficients=None):
    """Tally sources on one map."""
    brackets = Brackets(coverage, [space], dust, coefficients or {})
    return tally_sources(brackets, sources, EVENT_MJD)


def spans_of_cells(order, cell):
    return Spans.from_cells(order, np.asarray(cell, dtype=np.int64))


def exact_coverage(regions, skymap, **log):
    """One telescope whose exposures are regions of whole cells, known exactly."""
    n = len(regions)
    table = log_table("Heron", np.full(n, np.nan), np.full(n, np.nan), **log)
    table.region[:] = [str(i) for i in range(n)]
    mine = telescope("Heron", None, table, regions=dict(zip(table.region, regions)))
    return coverage_of([mine], skymap)


def dust_map(order=3, seed=9, scale=0.3):
    """E(B−V) over the whole sky, cell by cell."""
    cell = np.arange(12 * 4**order)
    value = np.random.default_rng(seed).exponential(scale, cell.size)
    return Dust(*cell_to_span(order, cell), value)


@dataclass(frozen=True, eq=False)
class Draws:
    """Events drawn from a map: cell, place and distance of each."""

    cell: np.ndarray
    pixel: np.ndarray
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    distance_mpc: np.ndarray  # inf without distance: such an event is never seen

    @classmethod
    def of(cls, skymap, count=1_000_000, seed=1):
        rng = np.random.default_rng(seed)
        length = skymap.stops - skymap.starts
        held = skymap.density_per_sr * length
        cell = np.sort(rng.choice(held.size, count, p=held / held.sum()))
        shift = 2 * (LINE_ORDER - DRAWN)
        pixel = (skymap.starts[cell] >> shift) + (
            rng.random(count) * (length[cell] >> shift)
        ).astype(np.int64)
        ra, dec = healpy.pix2ang(1 << DRAWN, pixel, nest=True, lonlat=True)
        return cls(cell, pixel, ra, dec, cls._distances(skymap, cell, rng))

    @staticmethod
    def _distances(skymap, cell, rng):
        layer = skymap.distance
        distance = np.full(cell.size, np.inf)
        cut = np.flatnonzero(np.diff(cell, prepend=-1, append=-2))
        for first, last in pairwise(cut):
            mu, sigma = layer.mu_mpc[cell[first]], layer.sigma_mpc[cell[first]]
            if not np.isfinite(mu):
                continue
            r = np.linspace(0.0, max(mu, 0.0) + 9 * sigma, 3001)
            shape = r**2 * np.exp(-0.5 * ((r - mu) / sigma) ** 2 + 0.5 * (min(mu, 0) / sigma) ** 2)
            below = cumulative_trapezoid(shape, r, initial=0.0)
            share = rng.random(last - first)
            distance[first:last] = np.interp(share, below / below[-1], r)
        return distance

    @property
    def modulus(self):
        return 5 * np.log10(self.distance_mpc) + 25

    @property
    def redshift(self):
        """From astropy's luminosity distances on a fine grid."""
        z = np.linspace(0.0, 0.3, 3001)
        at = np.append(0.0, Planck18.luminosity_distance(z[1:]).to_value(u.Mpc))
        return np.interp(self.distance_mpc, at, z)

    def inside(self, log, camera):
        """Which events lie in each exposure of a rectangle, (exposures, events)."""
        width, height = np.radians(np.ptp(camera.corners[0], axis=0))
        found = []
        for ra, dec, angle in zip(*np.radians([log.ra_deg, log.dec_deg, log.angle_deg])):
            turn, at = np.radians(self.ra_deg) - ra, np.radians(self.dec_deg)
            depth = np.sin(dec) * np.sin(at) + np.cos(dec) * np.cos(at) * np.cos(turn)
            xi = np.cos(at) * np.sin(turn) / depth
            eta = (np.cos(dec) * np.sin(at) - np.sin(dec) * np.cos(at) * np.cos(turn)) / depth
            x = xi * np.cos(angle) - eta * np.sin(angle)
            y = xi * np.sin(angle) + eta * np.cos(angle)
            found.append((depth > 0) & (np.abs(x) <= width / 2) & (np.abs(y) <= height / 2))
        return np.array(found)


def often(detected, start_mjd, visits, gap_minutes):
    """Which events are in so many exposures, first and last so far apart; (events,)."""
    start = np.asarray(start_mjd)[:, None] * 1440.0
    first = np.where(detected, start, np.inf).min(axis=0)
    last = np.where(detected, start, -np.inf).max(axis=0)
    return (detected.sum(axis=0) >= visits) & (last - first >= gap_minutes - 1e-6)
