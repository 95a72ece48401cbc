"""Findings on positions: whether the site could see them, and whether the log was misread."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.audit_rows import row_words
from skytally.campaign_data import LoadedCampaign, Site, Telescope
from skytally.findings import Finding, Severity
from skytally.observations import LogTable
from skytally.pointings import Pointings, middle_mjd, pointings_of
from skytally.readings import Surroundings, misread_findings
from skytally.visibility import Visibility, visibility

__all__ = ["Limits", "position_findings"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_AS_LOGGED = "The numbers are as logged."
_EARTH_RADIUS_M = 6_371_000.0
# Refraction at the horizon, degrees, rounded up (common practice: 34 to 36 arcminutes).
_REFRACTION_DEG = 0.6
# Altitudes of the Sun at the ends of civil and of nautical twilight.
_CIVIL_DEG, _NAUTICAL_DEG = -6.0, -12.0

_PLACE = "Check the site (its longitude is to the east), the time zone and the positions."
_TIME = "Check the time zone of the log and the site's longitude (to the east)."
_DEPTH = "See whether the limits of these exposures hold, and whether time and place do."


@dataclass(frozen=True)
class Limits:
    """Beyond which airmass, and how near the Moon (degrees), a pointing is mentioned."""

    airmass: float = 3.0
    moon_deg: float = 15.0


def position_findings(
    campaign: LoadedCampaign, limits: Callable[[str], Limits] = lambda _: Limits()
) -> list[Finding]:
    """Check every log's positions against its site's sky, the maps and the other logs.

    Parameters
    ----------
    campaign : LoadedCampaign
        Maps, telescopes and logs.
    limits : callable
        The limits for a telescope's name.

    Returns
    -------
    list of Finding
        At most one of a kind for each telescope. A log that fits the maps better when
        read otherwise comes before what its site saw.
    """
    pointings = [pointings_of(telescope) for telescope in campaign.telescopes]
    surroundings = Surroundings(campaign.maps, pointings)
    found: list[Finding] = []
    for index, telescope in enumerate(campaign.telescopes):
        if not len(telescope.log):
            continue
        here, site = pointings[index], telescope.site
        seen = None if site is None else _see(telescope.log, here, site)
        altitude = None if seen is None else seen.altitude_deg
        found += misread_findings(telescope, here, altitude, surroundings, index)
        if site is not None and seen is not None:
            found += _seen_findings(telescope, site, seen, limits(telescope.name))
        found += _unchecked(telescope, altitude)
    return found


def _see(log: LogTable, pointings: Pointings, site: Site) -> Visibility:
    """Visibility of every exposure at its middle; the Sun's even where there is no pointing."""
    known = np.isfinite(pointings.ra_deg)
    ra, dec = np.nan_to_num(pointings.ra_deg), np.nan_to_num(pointings.dec_deg)
    place = site.longitude_deg, site.latitude_deg, site.height_m
    seen = visibility(ra, dec, middle_mjd(log), *place)
    return Visibility(
        np.where(known, seen.altitude_deg, np.nan),
        np.where(known, seen.airmass, np.nan),
        seen.sun_altitude_deg,
        np.where(known, seen.moon_distance_deg, np.nan),
        seen.moon_altitude_deg,
    )


def _seen_findings(
    telescope: Telescope, site: Site, seen: Visibility, limits: Limits
) -> list[Finding]:
    """Gather what a site cannot, or can hardly, have seen."""
    altitude, sun, moon = seen.altitude_deg, seen.sun_altitude_deg, seen.moon_distance_deg
    below = altitude < _horizon_deg(site.height_m)
    low = ~below & (seen.airmass > limits.airmass)
    day = sun > _CIVIL_DEG
    twilight = ~day & (sun > _NAUTICAL_DEG)
    near = (moon < limits.moon_deg) & (seen.moon_altitude_deg > 0)
    between = f"the Sun was between {_NAUTICAL_DEG:g} deg and {_CIVIL_DEG:g} deg"
    cases: list[tuple[str, Severity, Bools, str, Floats, str]] = [
        ("below-horizon", "error", below, "the field was below the horizon", altitude, _PLACE),
        ("sun-up", "error", day, f"the Sun was above {_CIVIL_DEG:g} deg", sun, _TIME),
        (
            "high-airmass",
            "caution",
            low,
            f"the airmass was above {limits.airmass:g}",
            altitude,
            _DEPTH,
        ),
        ("twilight", "caution", twilight, between, sun, _DEPTH),
        (
            "near-moon",
            "note",
            near,
            f"the Moon was up and within {limits.moon_deg:g} deg",
            moon,
            _DEPTH,
        ),
    ]
    return [_finding(telescope, *case) for case in cases if case[2].any()]


def _finding(
    telescope: Telescope,
    code: str,
    severity: Severity,
    chosen: Bools,
    what: str,
    angle_deg: Floats,
    remedy: str,
) -> Finding:
    rows, angles = telescope.log.row[chosen], angle_deg[chosen]
    kind = "distance" if code == "near-moon" else "altitude"
    extent = f"{angles.min():.1f}"
    if rows.size > 1:
        extent += f" to {angles.max():.1f}"
    text = f"In {row_words(rows.tolist())} {what} ({kind} {extent} deg)."
    return Finding(code, severity, telescope.name, tuple(rows.tolist()), text, _AS_LOGGED, remedy)


def _unchecked(telescope: Telescope, altitude_deg: Floats | None) -> list[Finding]:
    """Say what could not be checked: all of a spacecraft's log, or regions without a centre."""
    rows: tuple[int, ...] = ()
    if altitude_deg is None:
        why = "it has no site"
        remedy = "Nothing for a spacecraft; give a site if it stands on the ground."
    else:
        unplaced = telescope.log.row[np.isnan(altitude_deg)]
        if not unplaced.size:
            return []
        rows = tuple(unplaced.tolist())
        why = f"the regions of {row_words(rows)} are too wide to have one altitude"
        remedy = "Nothing, unless such wide regions are a mistake."
    return [
        Finding(
            "visibility-not-checked",
            "note",
            telescope.name,
            rows,
            f"Altitude and distance from the Moon were not checked for {telescope.name}: {why}.",
            _AS_LOGGED,
            remedy,
        )
    ]


def _horizon_deg(height_m: float) -> float:
    """Lowest altitude at which anything can be seen: refraction, and the dip from a height."""
    cosine = _EARTH_RADIUS_M / (_EARTH_RADIUS_M + max(height_m, 0.0))
    return -_REFRACTION_DEG - float(np.degrees(np.arccos(cosine)))
