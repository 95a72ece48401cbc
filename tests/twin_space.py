"""The tally's third dimension once more, slowly: every direction and every look by itself.

Written from the definitions alone, like `tally_twin`, and sharing no code with the
package. Distances follow p(r) ∝ r² exp(−(r−μ)²/2σ²), integrated by Gauss and
Legendre's rule; redshifts and comoving volumes are astropy's (Planck18), and
whether a source is seen often enough is counted from the first exposure that shows
it to the last.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from itertools import pairwise

import healpy
import numpy as np
from astropy import units as u
from astropy.cosmology import Planck18
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import ndtr
from tally_twin import (
    Judged,
    PlainCampaign,
    PlainMap,
    PlainSource,
    Selection,
    dust_of,
    judge,
    selections,
)

__all__ = ["Deep", "SeenOnMap", "TwinMap"]

NODES, WEIGHTS = np.polynomial.legendre.leggauss(80)
BINS = 1500  # of distance, for a detection that fails gradually
SECONDS_PER_DAY = 86400
MAGNITUDES = np.arange(-26.0, -7.9, 0.25)
PEAKS, RATES = np.linspace(-20.0, -10.5, 20), np.linspace(0.0, 1.9, 20)


# --- distances --------------------------------------------------------------------------


def shape(r, mu, sigma):
    """p(r) but for a constant; no larger than r²."""
    return r**2 * np.exp(0.5 * (np.minimum(mu, 0) / sigma) ** 2 - 0.5 * ((r - mu) / sigma) ** 2)


def span(mu, sigma):
    """Distances outside of which less than 1e-20 lies."""
    far = mu + np.sqrt(np.minimum(mu, 0) ** 2 + 100 * sigma**2)
    return np.maximum(mu - 10 * sigma, 0.0), far


def integral(low, high, mu, sigma, power=0):
    """∫ r^power shape(r) dr, row by row."""
    half = (high - low)[:, None] / 2
    r = (high + low)[:, None] / 2 + half * NODES
    values = r**power * shape(r, mu[:, None], sigma[:, None])
    return (half * values) @ WEIGHTS


def within(reach, mu, sigma, power=0):
    """∫ r^power p(r) dr out to a reach; 0 without distance (μ NaN)."""
    found = np.zeros(mu.size)
    some = np.flatnonzero(np.isfinite(mu) & (reach > 0))
    mu, sigma, reach = mu[some], sigma[some], reach[some]
    near, far = span(mu, sigma)
    found[some] = integral(near, np.clip(reach, near, far), mu, sigma, power)
    found[some] /= integral(near, far, mu, sigma)
    return found


def chance_within(reach, mu, sigma):
    """F(reach) by the closed form as published (ApJL 829 L15, 2016), by quadrature below μ = −3σ.

    The form's N is the one that makes F(∞) one.
    """
    reach, mu, sigma = np.broadcast_arrays(reach, mu, sigma)
    found = np.zeros(mu.shape)
    proper = np.isfinite(mu) & (reach > 0)
    plain = proper & (mu > -3 * sigma)
    m, s = mu[plain], sigma[plain]
    a, b = -m / s, (reach[plain] - m) / s

    def part(high):
        edge = 2 * m * s * (density(high) - density(a))
        edge += s**2 * (np.nan_to_num(high * density(high)) - a * density(a))
        return (m**2 + s**2) * (ndtr(high) - ndtr(a)) - edge

    found[plain] = part(b) / part(np.full(m.shape, 40.0))
    hard = proper & ~plain
    found[hard] = within(reach[hard], mu[hard], sigma[hard])
    return found


def density(x):
    """The unit normal density."""
    return np.exp(-0.5 * np.minimum(np.abs(x), 40.0) ** 2) / math.sqrt(2 * math.pi)


_Z = np.geomspace(1e-8, 20.0, 3000)
_DISTANCE = Planck18.luminosity_distance(_Z).to_value(u.Mpc)
_REDSHIFT = CubicSpline(np.log(_DISTANCE), np.log(_Z))
_COMOVING = CubicSpline(
    np.log(_DISTANCE), np.log(Planck18.comoving_volume(_Z).to_value(u.Mpc**3) / (4 * np.pi))
)
_FAINTNESS = 5 * np.log10(_DISTANCE) + 25 - 2.5 * np.log10(1 + _Z)
_FLAT_REACH = CubicSpline(_FAINTNESS, np.log(_DISTANCE))


def redshift(distance):
    return np.exp(_REDSHIFT(np.log(distance)))


def comoving(distance):
    """Comoving volume per steradian, Mpc³."""
    found = np.zeros(np.shape(distance))
    some = np.asarray(distance) > 0
    found[some] = np.exp(_COMOVING(np.log(np.asarray(distance)[some])))
    return found


# --- sources ----------------------------------------------------------------------------


def absolute(source: PlainSource, days: float, band: str) -> float | None:
    """Absolute magnitude; None where nothing would be seen, or nothing is said."""
    if source.curve is not None:
        points = source.curve.get(band, [])
        for (a, m), (b, n) in pairwise(points):
            if a <= days <= b:
                return m + (n - m) * (days - a) / (b - a)
        return None
    peak = source.magnitude
    if isinstance(peak, dict):
        if band not in peak:
            return None
        peak = peak[band]
    if days >= source.rise_days:
        return peak + source.fade_per_day * (days - source.rise_days)
    return peak - 2.5 * math.log10(days / source.rise_days) if days > 0 else None


def reach(source: PlainSource, brightest: float) -> float:
    """Distance in Mpc at which the distance modulus (with K) has this value."""
    if source.flat:
        return float(np.exp(_FLAT_REACH(brightest)))
    return 10 ** (brightest / 5 - 5)


def far_enough(source: PlainSource, looks: list[tuple[int, float]]) -> float:
    """Greatest distance at which the looks (start, reach) beyond it are enough; 0 for none."""
    for limit in sorted({r for _, r in looks if r > 0}, reverse=True):
        starts = [start for start, r in looks if r >= limit]
        if len(starts) >= source.visits and max(starts) - min(starts) >= source.gap_s:
            return limit
    return 0.0


def chance(source: PlainSource, looks: list[tuple[int, np.ndarray]]) -> np.ndarray:
    """Chance of being seen often enough, given start and efficiency of each look.

    Summed over the first look and the last that show the source: these far enough
    apart, none before or after, and enough between.
    """
    looks = sorted(looks, key=lambda look: look[0])
    shape_ = looks[0][1].shape if looks else ()
    total = np.zeros(shape_)
    before = np.ones(shape_)
    after = [np.ones(shape_)]
    for _, seen in reversed(looks):
        after.append(after[-1] * (1 - seen))
    after.reverse()  # after[i]: none from look i on
    for i, (start, seen) in enumerate(looks):
        if source.visits == 1:
            total += before * seen
            before = before * (1 - seen)
            continue
        # How many of the looks between have shown it: exactly 0, 1, …, or more.
        count = [np.ones(shape_), *(np.zeros(shape_) for _ in range(source.visits))]
        for j in range(i + 1, len(looks)):
            if looks[j][0] - start >= source.gap_s:
                enough = sum(count[source.visits - 2 :])
                total += before * seen * enough * looks[j][1] * after[j + 1]
            hit = looks[j][1]
            more = count[-1] + count[-2] * hit
            count[1:-1] = [
                count[k] * (1 - hit) + count[k - 1] * hit for k in range(1, len(count) - 1)
            ]
            count[-1] = more
            count[0] = count[0] * (1 - hit)
        before = before * (1 - seen)
    return total


# --- maps -------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class TwinMap:
    """A map with distances: cells, and which cell each covered pixel lies in (−1: none)."""

    plain: PlainMap
    held: np.ndarray
    solid_sr: np.ndarray
    mu: np.ndarray  # NaN without distance
    sigma: np.ndarray
    cell: np.ndarray  # by covered pixel
    weight: np.ndarray  # by covered pixel

    @classmethod
    def of(cls, plain: PlainMap, pixels: np.ndarray, order: int) -> TwinMap:
        orders, cells, held = (np.array(column) for column in zip(*plain.cells))
        mu, sigma, norm = (np.array(column, dtype=float) for column in zip(*plain.distances))
        known = np.isfinite(mu) & (norm > 0) & (held > 0)
        sizes = np.array([healpy.nside2pixarea(1 << int(o)) for o in orders])
        lon, lat = healpy.pix2ang(1 << order, pixels, nest=True, lonlat=True)
        cell, weight = np.full(pixels.size, -1), np.zeros(pixels.size)
        for level in np.unique(orders):
            at = healpy.ang2pix(1 << int(level), lon, lat, nest=True, lonlat=True)
            number = {int(cells[i]): i for i in np.flatnonzero(orders == level)}
            for i, one in enumerate(at.tolist()):
                if one in number:
                    cell[i] = number[one]
                    weight[i] = held[number[one]] * healpy.nside2pixarea(1 << order)
                    weight[i] /= sizes[number[one]]
        mu = np.where(known, mu, np.nan)
        return cls(plain, held, sizes, mu, sigma, cell, weight)

    @property
    def known(self) -> np.ndarray:
        return np.isfinite(self.mu)

    def by_pixel(self, values: np.ndarray, missing: float) -> np.ndarray:
        return np.append(values, missing)[self.cell]

    def moments(self) -> tuple[float, float]:
        """Mean and standard deviation of the distance over the sky."""
        held = self.held[self.known]
        first, second = (
            float(held @ self.integral_of(power)[self.known] / held.sum()) for power in (1, 2)
        )
        return first, math.sqrt(second - first**2)

    def integral_of(self, power: int) -> np.ndarray:
        return within(np.full(self.mu.size, np.inf), self.mu, self.sigma, power)

    def credible(self, level: float) -> tuple[np.ndarray, np.ndarray] | None:
        """Near and far end of each cell's part of the smallest volume that holds a level.

        Probability per steradian and Mpc³ falls from its peak as a Gauss curve, so
        what exceeds a threshold is an interval; the threshold is solved for.
        """
        some = np.flatnonzero(self.known)
        mu, sigma = self.mu[some], self.sigma[some]
        whole = integral(*span(mu, sigma), mu, sigma)
        peak = np.log(self.held[some] / self.solid_sr[some] / whole)
        target = level * self.held.sum()
        if self.held[some].sum() <= target * (1 + 1e-9):
            return None

        def ends(threshold):
            width = np.minimum(mu, 0) ** 2 + 2 * sigma**2 * (peak - threshold)
            half = np.sqrt(np.where(peak > threshold, width, 0.0))
            low = np.where(peak > threshold, np.maximum(mu - half, 0.0), 0.0)
            return low, np.where(peak > threshold, mu + half, 0.0)

        def excess(threshold):
            low, high = ends(threshold)
            return float(self.held[some] @ (integral(low, high, mu, sigma) / whole) - target)

        near, far = np.zeros(self.mu.size), np.zeros(self.mu.size)
        near[some], far[some] = ends(brentq(excess, peak.max() - 200, peak.max(), xtol=1e-13))
        return near, far


@dataclass(frozen=True)
class SeenOnMap:
    """What one selection could have seen of one source on one map."""

    probability: float
    beyond: float
    without: float
    reach: tuple[float | None, float | None, float | None]
    volume: tuple[float, float]  # Mpc³ of luminosity distance, and comoving
    volume_90_within: tuple[float, float] | None


# --- the campaign -----------------------------------------------------------------------


class Deep:
    """Everything that the twin says of the third dimension of a campaign."""

    def __init__(self, campaign: PlainCampaign) -> None:
        self.campaign = campaign
        self.exposures: list[Judged] = judge(campaign)
        self.pixels = np.array(
            sorted(set().union(*(e.pixels for e in self.exposures))), dtype=np.int64
        )
        reddening = {} if campaign.dust is None else dust_of(campaign)
        self.ebv = [reddening.get(pixel) for pixel in self.pixels.tolist()]
        self.seen: list[tuple[int, ...]] = [
            tuple(i for i, e in enumerate(self.exposures) if pixel in e.pixels)
            for pixel in self.pixels.tolist()
        ]
        self.area_sr = healpy.nside2pixarea(1 << campaign.order)
        self.maps = {
            m.label: TwinMap.of(m, self.pixels, campaign.order)
            for m in campaign.maps
            if m.distances is not None
        }
        self.maps = {label: m for label, m in self.maps.items() if m.known.any()}
        self.reach_of = cache(self._reach_of)
        self.curve_of = cache(self._curve_of)

    def selections(self) -> list[Selection]:
        return list(selections(self.campaign, self.exposures))

    def looks(self, selection: Selection) -> list[tuple[tuple[int, ...], float | None]]:
        """For every pixel which of the selection's exposures saw it, and the dust there."""
        mine = {i for i, e in enumerate(self.exposures) if e.named(selection)}
        return [
            (tuple(i for i in seen if i in mine), ebv) for seen, ebv in zip(self.seen, self.ebv)
        ]

    def limit(self, exposure: int, ebv: float | None) -> float | None:
        """Limit at one place, less extinction where that is known."""
        e = self.exposures[exposure]
        if e.limit is None:
            return None
        if e.stated_extinction is not None:
            return e.limit - e.stated_extinction
        if ebv is None or e.band not in self.campaign.coefficients:
            return e.limit
        return e.limit - self.campaign.coefficients[e.band] * ebv

    def brightness(self, source: PlainSource, exposure: int) -> float | None:
        """Absolute magnitude at the middle of an exposure."""
        e = self.exposures[exposure]
        return absolute(source, (e.start_s + e.end_s) / 2 / SECONDS_PER_DAY, e.band)

    def _modulus(self, source: int, exposure: int, ebv: float | None) -> float | None:
        """Distance modulus, K-correction included, at which a source is at the limit."""
        limit = self.limit(exposure, ebv)
        magnitude = self.brightness(self.campaign.sources[source], exposure)
        return None if limit is None or magnitude is None else limit - magnitude

    def _reach_of(self, source: int, seen: tuple[int, ...], ebv: float | None) -> float:
        plain, looks = self.campaign.sources[source], []
        for i in seen:
            modulus = self._modulus(source, i, ebv)
            if modulus is not None:
                looks.append((self.exposures[i].start_s, reach(plain, modulus + plain.offset)))
        return far_enough(plain, looks)

    def _curve_of(
        self, source: int, seen: tuple[int, ...], ebv: float | None, edges: tuple[float, ...]
    ) -> np.ndarray:
        """Chance of being seen in each bin of distance, at its middle."""
        plain = self.campaign.sources[source]
        r = (np.array(edges[1:]) + np.array(edges[:-1])) / 2
        faint = 5 * np.log10(r) + 25 - (2.5 * np.log10(1 + redshift(r)) if plain.flat else 0)
        looks = []
        for i in seen:
            modulus = self._modulus(source, i, ebv)
            if modulus is None:
                continue
            x = faint - modulus - plain.offset
            if plain.width:
                with np.errstate(over="ignore"):
                    efficiency = plain.plateau / (1 + np.exp(x / plain.width))
            else:
                efficiency = np.where(x <= 0, plain.plateau, 0.0)
            looks.append((self.exposures[i].start_s, efficiency))
        return chance(plain, looks) if looks else np.zeros(r.size)

    def reaches(self, source: int, selection: Selection) -> np.ndarray:
        """Reach at every pixel; −1 where the selection did not look."""
        return np.array(
            [self.reach_of(source, *look) if look[0] else -1.0 for look in self.looks(selection)]
        )

    @cache  # noqa: B019 - a twin lives as long as its campaign
    def edges(self, source: int, label: str) -> tuple[float, ...]:
        """Bins of distance for a source that is not certainly seen."""
        plain, skymap = self.campaign.sources[source], self.maps[label]
        _, far = span(skymap.mu[skymap.known], skymap.sigma[skymap.known])
        if plain.width:
            return tuple(np.linspace(0.0, far.max(), BINS + 1).tolist())
        single = {(i, ebv) for seen, ebv in zip(self.seen, self.ebv) for i in seen}
        moduli = {self._modulus(source, i, ebv) for i, ebv in single} - {None}
        steps = sorted({reach(plain, m + plain.offset) for m in moduli})
        return (0.0, *steps, max([far.max(), *steps]) * 1.001)

    @cache  # noqa: B019
    def bins(self, source: int, label: str, power: int = 0) -> np.ndarray:
        """∫ r^power p(r) dr over every bin, for each cell that is covered."""
        skymap, edges = self.maps[label], np.array(self.edges(source, label))
        some = np.unique(skymap.cell[skymap.cell >= 0])
        found = np.zeros((skymap.mu.size + 1, edges.size - 1))
        upto = chance_within(edges, skymap.mu[some][:, None], skymap.sigma[some][:, None])
        found[some] = np.diff(upto, axis=1)
        return found if power == 0 else found * ((edges[1:] + edges[:-1]) / 2)

    def detected(self, source: int, label: str, selection: Selection, power: int = 0) -> np.ndarray:
        """∫ r^power p(r) × (chance of being seen) dr at every pixel."""
        plain, skymap = self.campaign.sources[source], self.maps[label]
        if plain.width == 0 and plain.plateau == 1:
            far = np.maximum(self.reaches(source, selection), 0.0)
            mu, sigma = skymap.by_pixel(skymap.mu, np.nan), skymap.by_pixel(skymap.sigma, np.nan)
            return within(far, mu, sigma, power) if power else chance_within(far, mu, sigma)
        edges, bins = self.edges(source, label), self.bins(source, label, power)
        return np.array(
            [
                float(bins[cell] @ self.curve_of(source, *look, edges)) if look[0] else 0.0
                for cell, look in zip(skymap.cell, self.looks(selection))
            ]
        )

    def source_row(
        self,
        source: int,
        label: str,
        selection: Selection,
        shell: tuple[np.ndarray, np.ndarray] | None,
    ) -> SeenOnMap:
        """All numbers of one source, selection and map."""
        skymap = self.maps[label]
        far = self.reaches(source, selection)
        covered = far >= 0
        far = np.maximum(far, 0.0)
        value = float(skymap.weight @ self.detected(source, label, selection))
        lost = covered & ~skymap.by_pixel(skymap.known, False)
        without = float(skymap.weight[lost].sum())
        total = float(skymap.weight[covered].sum())
        inside = None
        if shell is not None:
            near, end = (skymap.by_pixel(one, 0.0)[covered] for one in shell)
            inside = self.shell(near, np.minimum(end, far[covered]))
        return SeenOnMap(
            value,
            max(total - without - value, 0.0),
            without,
            reach_numbers(far[covered], skymap.weight[covered]),
            (
                float(self.area_sr * (far[covered] ** 3).sum() / 3),
                float(self.area_sr * comoving(far[covered]).sum()),
            ),
            inside,
        )

    def shell(self, near: np.ndarray, far: np.ndarray) -> tuple[float, float]:
        """Volume of pixels between two distances, of luminosity distance and comoving."""
        some = far > near
        near, far = near[some], far[some]
        return (
            float(self.area_sr * (far**3 - near**3).sum() / 3),
            float(self.area_sr * (comoving(far) - comoving(near)).sum()),
        )

    def covered_shell(
        self, label: str, selection: Selection, shell: tuple[np.ndarray, np.ndarray]
    ) -> tuple[float, float]:
        """Part of a credible volume in the directions of a selection."""
        mine = np.array([bool(seen) for seen, _ in self.looks(selection)], dtype=bool)
        return self.shell(*(self.maps[label].by_pixel(one, 0.0)[mine] for one in shell))

    def deepest(self, band: str | None, fade: float = 0.0) -> list[float | None]:
        """Deepest limit at every pixel, less what a source has faded by."""
        found = []
        for seen, ebv in self.looks((None, band, None)):
            limits = [
                limit
                - fade * (self.exposures[i].start_s + self.exposures[i].end_s) / 2 / SECONDS_PER_DAY
                for i in seen
                if (limit := self.limit(i, ebv)) is not None
            ]
            found.append(max(limits, default=None))
        return found

    def by_limit(self, label: str, deepest: list[float | None]) -> Callable[[float], float]:
        """Detectable probability against absolute magnitude, given each pixel's limit."""
        skymap, held = self.maps[label], defaultdict(float)
        for cell, limit, weight in zip(skymap.cell.tolist(), deepest, skymap.weight.tolist()):
            if limit is not None and cell >= 0 and skymap.known[cell]:
                held[cell, limit] += weight
        cell = np.array([c for c, _ in held], dtype=int)
        limit, weight = np.array([m for _, m in held]), np.array(list(held.values()))
        mu, sigma = skymap.mu[cell], skymap.sigma[cell]

        def detectable(magnitude: float) -> float:
            if not weight.size:
                return 0.0
            return float(weight @ chance_within(10 ** ((limit - magnitude) / 5 - 5), mu, sigma))

        return detectable


def reach_numbers(far, weight) -> tuple[float | None, float | None, float | None]:
    """Least, median by probability, greatest; None where nothing is reached."""
    if not (far > 0).any():
        return None, None, None
    held, middle = 0.0, None
    for value, own in sorted(zip(far.tolist(), weight.tolist())):
        held += own
        if middle is None and held >= weight.sum() / 2 * (1 - 1e-12):
            middle = value
    return float(far[far > 0].min()), middle, float(far.max())
