"""Frozen, serialisable results: the one hand-over to everything that shows something."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from skytally.campaign_data import ReportText
from skytally.claims import ClaimVerdict
from skytally.deepest import DeepestLimits
from skytally.exclusion import (
    AbsoluteLimit,
    DepthHistogram,
    DistanceProfile,
    ExclusionCurve,
    FadingPlane,
)
from skytally.findings import Finding
from skytally.limits import SourceRow
from skytally.page_sets import PageSets
from skytally.sharing import Sharing
from skytally.skymap import SkyMap
from skytally.spans import Spans
from skytally.tally import AsPointed, TallyRow, Timeline

__all__ = [
    "Event",
    "ExposureInfo",
    "Identity",
    "InputFile",
    "LogCount",
    "MapInfo",
    "Results",
    "SetAsideInfo",
    "Settings",
    "SkyData",
    "SourceInfo",
    "TelescopeInfo",
]


@dataclass(frozen=True)
class Event:
    """What was followed up: its name and time (UTC, ISO 8601 with Z)."""

    name: str
    time: str
    time_mjd: float


@dataclass(frozen=True)
class InputFile:
    """A file that was read: its role, its path as the campaign names it, its SHA-256."""

    role: str
    path: str
    sha256: str


@dataclass(frozen=True)
class Identity:
    """What results are known by.

    Attributes
    ----------
    fingerprint : str
        Twelve hexadecimal digits of inputs, settings and numbers, which every
        output carries; empty for results that were not accounted for.
    sha256 : str
        Hash of all the numbers.
    parts : tuple of (str, str)
        Hash of each part of them, by its name in the JSON.
    """

    fingerprint: str = ""
    sha256: str = ""
    parts: tuple[tuple[str, str], ...] = ()


@dataclass(frozen=True)
class MapInfo:
    """One map version in numbers; distances and volumes are None without a distance layer."""

    version: str
    issued: str | None
    hours: float | None
    cells: int
    order_max: int
    area_50_deg2: float
    area_90_deg2: float
    distance_mean_mpc: float | None
    distance_sd_mpc: float | None
    volume_50_mpc3: float | None
    volume_90_mpc3: float | None
    probability_without_distance: float | None
    path: str | None
    sha256: str | None
    notes: tuple[str, ...]
    volume_50_comoving_mpc3: float | None = None
    volume_90_comoving_mpc3: float | None = None


@dataclass(frozen=True)
class SourceInfo:
    """One source that limits are stated for: its name, and its assumptions in words."""

    name: str
    text: str


@dataclass(frozen=True)
class TelescopeInfo:
    """One telescope as used: its camera in words and how finely it was rasterised."""

    name: str
    camera: str
    camera_area_deg2: float | None
    site: str | None
    bands: tuple[str, ...]
    exposures: int
    footprints: int
    order_min: int | None
    order_max: int | None
    depth_system: str
    depth_significance: float


@dataclass(frozen=True)
class LogCount:
    """Reconciliation of one log: read = used + set_aside, the latter by reason.

    ``fault`` says why the log could not be read at all; empty where it could.
    """

    telescope: str
    file: str
    read: int
    used: int
    set_aside: int
    reasons: tuple[tuple[str, int], ...]
    fault: str = ""


@dataclass(frozen=True)
class SetAsideInfo:
    """One row that does not count, and why."""

    telescope: str
    file: str
    row: int
    exposure: str
    reason: str
    detail: str


@dataclass(frozen=True)
class ExposureInfo:
    """One accepted exposure as tallied."""

    telescope: str
    exposure: str
    row: int
    start: str
    end: str
    hours: float
    band: str | None
    ra_deg: float | None
    dec_deg: float | None
    area_deg2: float
    depth: float | None
    map_in_force: str | None
    probability_in_force: float | None
    probability_newest: float
    night: str | None = None


@dataclass(frozen=True)
class Settings:
    """Every choice that moves a number."""

    magnitude_system: str
    significance: float
    revisit_visits: int
    revisit_gap_minutes: float
    bracket_target: float
    extinction: str
    cosmology: str = "Planck18"


@dataclass(frozen=True, eq=False)
class SkyData:
    """The geometry behind the numbers, for charts and region files; not in the JSON.

    Attributes
    ----------
    maps : tuple of SkyMap
        In the order of ``Results.maps``.
    covered : tuple of Spans
        Union of each telescope's footprints, in the order of ``Results.telescopes``.
    outlines : tuple of tuples of float64 arrays, shape (m, 2)
        Per telescope, the distinct footprints' outlines as closed rings of
        ICRS lon, lat in degrees (first vertex not repeated); empty where
        regions were given outright as MOC.
    sets : PageSets or None
        Rows of like visits from which any choice of exposures can be tallied.
    deepest : DeepestLimits or None
        The deepest limit of every place by band.
    """

    maps: tuple[SkyMap, ...]
    covered: tuple[Spans, ...]
    outlines: tuple[tuple[NDArray[np.float64], ...], ...]
    sets: PageSets | None = None
    deepest: DeepestLimits | None = None


@dataclass(frozen=True)
class Results:
    """Everything that the report, the circular and the JSON say.

    Maps are in order of issue: the last is the newest. ``rows`` hold, for each
    map in that order, the selections: all; each telescope; each band; each
    telescope and band; each night.
    """

    software: str
    event: Event
    settings: Settings
    inputs: tuple[InputFile, ...]
    maps: tuple[MapInfo, ...]
    telescopes: tuple[TelescopeInfo, ...]
    logs: tuple[LogCount, ...]
    rows: tuple[TallyRow, ...]
    timelines: tuple[Timeline, ...]
    as_pointed: tuple[AsPointed, ...]
    exposures: tuple[ExposureInfo, ...]
    set_aside: tuple[SetAsideInfo, ...]
    notes: tuple[str, ...]
    sky: SkyData = field(repr=False, compare=False)
    findings: tuple[Finding, ...] = ()
    silenced: tuple[Finding, ...] = ()
    claims: tuple[ClaimVerdict, ...] = ()
    sources: tuple[SourceInfo, ...] = ()
    source_rows: tuple[SourceRow, ...] = ()
    exclusions: tuple[ExclusionCurve, ...] = ()
    fading_planes: tuple[FadingPlane, ...] = ()
    absolute_limits: tuple[AbsoluteLimit, ...] = ()
    distance_profiles: tuple[DistanceProfile, ...] = ()
    depth_histograms: tuple[DepthHistogram, ...] = ()
    sharing: tuple[Sharing, ...] = ()
    report: ReportText = field(default_factory=ReportText)
    identity: Identity = field(default_factory=Identity)

    @property
    def newest(self) -> MapInfo:
        """The map version issued last."""
        return self.maps[-1]

    def row(
        self,
        map: str | None = None,
        telescope: str | None = None,
        band: str | None = None,
        night: str | None = None,
    ) -> TallyRow:
        """Return the row of one selection; the newest map if none is named.

        Raises
        ------
        KeyError
            If there is no such row.
        """
        version = self.newest.version if map is None else map
        for row in self.rows:
            if row.map == version and row.selection == (telescope, band, night):
                return row
        raise KeyError((version, telescope, band, night))
