"""How else the positions of a log could be read, where they do not fit as they are written.

Each hypothesis (hours for degrees, and the like) is about a whole log. It is tested on
the maps, the other logs and the site's horizon, and reported; nothing is converted.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from astropy_healpix import healpix_to_xyz
from numpy.typing import NDArray

from skytally.campaign_data import Telescope
from skytally.findings import Finding, Severity
from skytally.pointings import (
    COARSE_ORDER,
    Pointings,
    angle_to_nearest,
    coarse_region,
    middle_mjd,
)
from skytally.shapes import lonlat_to_vector
from skytally.skymap import SkyMap
from skytally.visibility import visibility

__all__ = ["READING_CODES", "Surroundings", "misread_findings"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

_MOST_POINTINGS = 2000  # evenly taken, enough to tell one reading from another
_FEWEST_POINTINGS = 3
# As logged, a field is given the benefit of the doubt: on the 99 % region, or as near to
# it as this. Read otherwise, it must lie on the 90 % region.
_DOUBT_DEG = 3.0
_DOUBT_LEVEL, _STRICT_LEVEL = 0.99, 0.9
_BESIDE_DEG = 1.5  # from another telescope's field, its own radius apart
# Shares of pointings that fit, as logged (for a partial reading) and read otherwise.
_FITS_AS_LOGGED, _FITS_AS_LOGGED_PARTIAL, _FITS = 0.3, 0.5, 0.8
# Shares of the sky that would fit just so: more than the first is no proof, more than the
# second no hint.
_CHANCE_ERROR, _CHANCE_CAUTION = 0.1, 0.3

_Turn = Callable[[Floats, Floats], "tuple[Floats, Floats] | None"]


def _signed(ra_deg: Floats) -> Floats:
    """Right ascensions as they stood before the reader wrapped negative ones."""
    return np.where(ra_deg > 180, ra_deg - 360, ra_deg)


def _from_hours(ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats] | None:
    return (ra_deg * 15 % 360, dec_deg) if ra_deg.max() <= 24 else None


def _from_radians(ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats] | None:
    ra = _signed(ra_deg)
    if ra.min() < -np.pi or ra.max() > 2 * np.pi or np.abs(dec_deg).max() > np.pi / 2:
        return None
    return np.degrees(ra) % 360, np.degrees(dec_deg)


def _from_swapped(ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats] | None:
    dec = _signed(ra_deg)
    return (dec_deg % 360, dec) if np.abs(dec).max() <= 90 else None


def _from_galactic(ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats] | None:
    from astropy import units
    from astropy.coordinates import Galactic, SkyCoord

    place = SkyCoord(ra_deg * units.deg, dec_deg * units.deg, frame=Galactic()).icrs
    return np.asarray(place.ra.deg), np.asarray(place.dec.deg)


def _from_unsigned(ra_deg: Floats, dec_deg: Floats) -> tuple[Floats, Floats] | None:
    return (ra_deg, -dec_deg) if dec_deg.min() >= 0 else None


@dataclass(frozen=True)
class _Reading:
    """Another way to read the positions of a log.

    ``partial``: those positions that fit as logged stay as they are.
    """

    code: str
    words: str
    remedy: str
    turn: _Turn
    partial: bool = False


_READINGS = (
    _Reading(
        "ra-in-hours",
        "right ascensions in hours",
        'If they are, set ra_unit = "hour" for this log.',
        _from_hours,
    ),
    _Reading(
        "positions-in-radians",
        "radians",
        "If they are, convert them to degrees.",
        _from_radians,
    ),
    _Reading(
        "ra-dec-swapped",
        "declination and right ascension in each other's column",
        "If they are, name the columns the other way round in columns = { ra = …, dec = … }.",
        _from_swapped,
    ),
    _Reading(
        "positions-galactic",
        "Galactic longitude and latitude",
        "If they are, convert them to ICRS.",
        _from_galactic,
    ),
    _Reading(
        "dec-sign-lost",
        "declinations that have lost their minus sign",
        "If they have, write the declinations again with their sign.",
        _from_unsigned,
        partial=True,
    ),
)
# Codes of the findings that say so.
READING_CODES = frozenset(reading.code for reading in _READINGS)


class Surroundings:
    """Where fields are expected: on the map versions, and beside other telescopes' fields."""

    def __init__(self, maps: Sequence[SkyMap], pointings: Sequence[Pointings]) -> None:
        self._wide, self._cell_deg = coarse_region(maps, _DOUBT_LEVEL)
        self._core, _ = coarse_region(maps, _STRICT_LEVEL)
        self._fields: list[Floats] = []
        for one in pointings:
            some = one.take(_distinct(one))
            vector = lonlat_to_vector(some.ra_deg, some.dec_deg)
            # A log that is itself off the map bears witness for no other.
            self._fields.append(vector[self._near_map(vector, some.radius_deg, doubt=True)])

    def _near_map(self, vector: Floats, radius_deg: Floats | float, doubt: bool) -> Bools:
        reach = radius_deg + self._cell_deg + (_DOUBT_DEG if doubt else 0.0)
        return angle_to_nearest(vector, self._wide if doubt else self._core) <= reach

    def hold(self, index: int, vector: Floats, radius_deg: Floats | float, doubt: bool) -> Bools:
        """Tell which fields of telescope ``index`` lie where fields are expected, shape (n,)."""
        others = [x for i, x in enumerate(self._fields) if i != index]
        apart = angle_to_nearest(vector, np.concatenate([np.empty((0, 3)), *others]))
        beside = apart <= radius_deg + _BESIDE_DEG + (_DOUBT_DEG if doubt else 0.0)
        return self._near_map(vector, radius_deg, doubt) | beside

    def share_of_sky(self, index: int, radius_deg: float) -> float:
        """Share of the sky on which fields of telescope ``index`` would fit."""
        cell = np.arange(12 * 4**COARSE_ORDER)
        vector = np.stack(healpix_to_xyz(cell, 1 << COARSE_ORDER, order="nested"), axis=1)
        return float(self.hold(index, vector, radius_deg, doubt=False).mean())


def _distinct(pointings: Pointings) -> Ints:
    """Places of distinct pointings (to 0.001 deg), in order, not more than there is need for."""
    known = np.flatnonzero(np.isfinite(pointings.ra_deg))
    key = np.round(pointings.ra_deg[known], 3) + 1j * np.round(pointings.dec_deg[known], 3)
    places = np.sort(known[np.unique(key, return_index=True)[1]])
    if places.size > _MOST_POINTINGS:
        places = places[np.linspace(0, places.size - 1, _MOST_POINTINGS).astype(np.int64)]
    return places


@dataclass(frozen=True)
class _Fit:
    """How well one reading of a log fits: pointings judged, where expected, and also up."""

    reading: _Reading
    judged: int
    expected: int
    up: int

    @property
    def share(self) -> float:
        return self.up / self.judged


def misread_findings(
    telescope: Telescope,
    pointings: Pointings,
    altitude_deg: Floats | None,
    surroundings: Surroundings,
    index: int,
) -> list[Finding]:
    """Report the reading under which a log that does not fit would fit, if there is one.

    Parameters
    ----------
    telescope : Telescope
        With its log.
    pointings : Pointings
        Of the accepted exposures.
    altitude_deg : float64 array, shape (n,), or None
        Of the pointings as logged, at the middle of each exposure; None without a site.
    surroundings : Surroundings
        Where fields are expected.
    index : int
        Place of the telescope in the campaign.
    """
    places = _distinct(pointings)
    if places.size < _FEWEST_POINTINGS:
        return []
    some = pointings.take(places)
    vector = lonlat_to_vector(some.ra_deg, some.dec_deg)
    expected = surroundings.hold(index, vector, some.radius_deg, doubt=True)
    up = np.ones(places.size, bool) if altitude_deg is None else altitude_deg[places] > 0
    good = expected & up
    fits = []
    for reading in _READINGS:
        if good.mean() <= (_FITS_AS_LOGGED_PARTIAL if reading.partial else _FITS_AS_LOGGED):
            judged = places[~good] if reading.partial else places
            fit = _fit(reading, telescope, pointings.take(judged), judged, surroundings, index)
            if fit is not None and fit.share >= _FITS:
                fits.append(fit)
    chance = surroundings.share_of_sky(index, float(np.median(some.radius_deg))) if fits else 1.0
    if chance > _CHANCE_CAUTION:
        return []
    # Where the map holds the fields as logged, the clock or the site is as likely at fault.
    sure = chance <= _CHANCE_ERROR and expected.mean() <= _FITS_AS_LOGGED_PARTIAL
    fits.sort(key=lambda fit: -fit.share)
    return [_misreading(telescope, fits, expected, good, "error" if sure else "caution")]


def _fit(
    reading: _Reading,
    telescope: Telescope,
    pointings: Pointings,
    places: Ints,
    surroundings: Surroundings,
    index: int,
) -> _Fit | None:
    """Count how many pointings fit when read otherwise; None where that makes no positions."""
    if places.size < _FEWEST_POINTINGS:
        return None
    turned = reading.turn(pointings.ra_deg, pointings.dec_deg)
    if turned is None:
        return None
    vector = lonlat_to_vector(*turned)
    fits = surroundings.hold(index, vector, pointings.radius_deg, doubt=False)
    expected = int(fits.sum())
    site = telescope.site
    if site is not None and fits.mean() >= _FITS:
        time = middle_mjd(telescope.log)[places]
        place = site.longitude_deg, site.latitude_deg, site.height_m
        fits &= visibility(*turned, time, *place).altitude_deg > 0
    return _Fit(reading, places.size, expected, int(fits.sum()))


def _misreading(
    telescope: Telescope, fits: list[_Fit], expected: Bools, good: Bools, severity: Severity
) -> Finding:
    best = fits[0]
    ground = telescope.site is not None
    where = "on the map or beside the fields of other telescopes"
    logged = f"As logged, {expected.sum()} of {expected.size} pointings lie {where}"
    if ground:
        logged += f", and {good.sum()} of them were above the horizon"
    those = "they" if best.judged == expected.size else f"the {best.judged} others"
    text = f"{logged}. If {those} are read as {best.reading.words}, {best.expected} do"
    text += f", and {best.up} of them were above the horizon." if ground else "."
    if len(fits) > 1:
        text += f" Read as {' or '.join(fit.reading.words for fit in fits[1:])}, they fit too."
    remedy = best.reading.remedy
    if severity == "caution":
        remedy += " It may be chance: look at the site and the times as well."
    rows = tuple(telescope.log.row.tolist())
    return Finding(
        best.reading.code,
        severity,
        telescope.name,
        rows,
        text,
        "The numbers are as logged. Nothing was converted.",
        remedy,
    )
