"""A campaign in memory: what its file says, with everything that it names loaded."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

from skytally.cameras import Camera
from skytally.claims_io import Claim
from skytally.cosmology import DEFAULT_COSMOLOGY
from skytally.dust import Dust
from skytally.errors import UsageError
from skytally.findings import Severity
from skytally.observations import LogTable
from skytally.shapes import Shape
from skytally.skymap import SkyMap
from skytally.sources import Source
from skytally.spans import Spans

__all__ = ["AuditOptions", "CampaignSettings", "LoadedCampaign", "ReportText", "Site", "Telescope"]


@dataclass(frozen=True)
class Site:
    """Where a telescope stands: degrees east, degrees north, metres above sea level."""

    longitude_deg: float
    latitude_deg: float
    height_m: float


@dataclass(frozen=True)
class CampaignSettings:
    """The choices of a campaign that move a number.

    Attributes
    ----------
    magnitude_system : str
        System in which limits are reported, "AB" or "Vega".
    significance : float
        Significance (σ) to which limits are brought.
    revisit_visits, revisit_gap_minutes : int, float
        A place counts as revisited from so many visits on, the first and the
        last at least so long apart.
    bracket : float
        Width in probability that brackets are tightened to.
    cosmology : str
        Name, as astropy knows it.
    """

    magnitude_system: str = "AB"
    significance: float = 5.0
    revisit_visits: int = 2
    revisit_gap_minutes: float = 30.0
    bracket: float = 0.005
    cosmology: str = DEFAULT_COSMOLOGY


@dataclass(frozen=True)
class AuditOptions:
    """What the audit of one telescope looks for, and how loudly it speaks.

    Attributes
    ----------
    airmass : float
        Airmass above which a pointing is doubted.
    moon_deg : float
        Distance from the Moon, in degrees, below which it is noted.
    demote : mapping of code to severity
        Findings to be given a milder severity.
    silence : frozenset of str
        Codes of findings that are only counted.
    """

    airmass: float = 3.0
    moon_deg: float = 15.0
    demote: Mapping[str, Severity] = field(default_factory=dict)
    silence: frozenset[str] = frozenset()


@dataclass(frozen=True)
class ReportText:
    """Who signs the report: authors, affiliations, acknowledgements; and on what paper."""

    authors: tuple[str, ...] = ()
    affiliations: tuple[str, ...] = ()
    thanks: str = ""
    paper: Literal["A4", "Letter"] = "A4"


@dataclass(frozen=True, eq=False)
class Telescope:
    """One telescope with its log.

    Attributes
    ----------
    name : str
        As the campaign calls it.
    site : Site or None
        None for a spacecraft.
    camera : CircleCamera, MosaicCamera or None
        None where every exposure brings its own region.
    camera_text : str
        The camera in words.
    log : LogTable
        Accepted rows, and the others with their reasons.
    depth_system, depth_significance : str, float
        How the log's limits are to be read: "AB" or "Vega", and their σ.
    vega_offsets : mapping of str to float
        m_AB − m_Vega per band as the user states it.
    mask : tuple of shapes
        Subtracted from every footprint.
    searchable : Spans or None
        Every footprint is cut to it; None for no cut.
    regions : mapping of str to Shape
        The shape of every distinct region cell of the log.
    audit : AuditOptions
        What the audit looks for.
    default_depth : float or None
        The limit that the campaign gives to rows without one.
    """

    name: str
    site: Site | None
    camera: Camera | None
    camera_text: str
    log: LogTable
    depth_system: str = "AB"
    depth_significance: float = 5.0
    vega_offsets: Mapping[str, float] = field(default_factory=dict)
    mask: tuple[Shape, ...] = ()
    searchable: Spans | None = None
    regions: Mapping[str, Shape] = field(default_factory=dict)
    audit: AuditOptions = AuditOptions()
    default_depth: float | None = None


@dataclass(frozen=True, eq=False)
class LoadedCampaign:
    """A campaign file and everything that it names, in memory.

    Attributes
    ----------
    path : Path
        The campaign file.
    event_name, event_mjd : str, float
        The event and its time (UTC, MJD).
    maps : tuple of SkyMap
        In order of issue; in the file's order where a version states no time.
    telescopes : tuple of Telescope
        In the file's order.
    settings : CampaignSettings
        Choices that move a number.
    inputs : tuple of (role, path, sha256)
        Every file read, its path as the campaign names it. Roles: campaign,
        map, log, region, camera, mask, searchable, dust, light curve.
    notes : tuple of str
        What was assumed or noticed.
    report : ReportText
        Authors and thanks.
    sources : tuple of Source
        What might have been there, in the file's order.
    dust : Dust or None
        Galactic reddening; None where no map is named.
    extinction_coefficients : mapping of str to float
        The user's own A_b / E(B−V) per band, before the published ones.
    dust_path : str or None
        The dust map as the campaign names it.
    audit : AuditOptions
        For findings that concern no single telescope.
    claims : tuple of Claim
        What others have stated.
    """

    path: Path
    event_name: str
    event_mjd: float
    maps: tuple[SkyMap, ...]
    telescopes: tuple[Telescope, ...]
    settings: CampaignSettings
    inputs: tuple[tuple[str, str, str], ...]
    notes: tuple[str, ...]
    report: ReportText = ReportText()
    sources: tuple[Source, ...] = ()
    dust: Dust | None = None
    extinction_coefficients: Mapping[str, float] = field(default_factory=dict)
    dust_path: str | None = None
    audit: AuditOptions = AuditOptions()
    claims: tuple[Claim, ...] = ()

    def map(self, version: str | None = None) -> SkyMap:
        """Return one map version, the newest if none is named.

        Raises
        ------
        UsageError
            If there is no such version; the message lists those there are.
        """
        if version is None:
            return self.maps[-1]
        for skymap in self.maps:
            if skymap.label == version:
                return skymap
        raise UsageError(
            f"there is no map version {version!r}",
            remedy=f"Choose one of: {', '.join(repr(m.label) for m in self.maps)}.",
        )
