"""The campaign file as a model: which tables and keys there are, and of what kind.

Nothing that the file names is opened here, only looked for.
"""

from __future__ import annotations

import re
from datetime import datetime
from difflib import get_close_matches
from pathlib import Path
from typing import Annotated, Literal

from pydantic import (
    AfterValidator,
    AwareDatetime,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    PlainValidator,
    ValidationInfo,
)
from pydantic_core import PydanticCustomError

from skytally.cosmology import DEFAULT_COSMOLOGY, known_cosmologies
from skytally.errors import RegionError
from skytally.findings import CODES, SEVERITIES, Severity
from skytally.region_text import parse_region

__all__ = [
    "TABLES",
    "AuditTable",
    "CameraTable",
    "CircleCameraTable",
    "ClaimTable",
    "DefaultsTable",
    "DepthTable",
    "DetectionTable",
    "EventTable",
    "ExtinctionTable",
    "ImagesTable",
    "LogFileTable",
    "MapTable",
    "MosaicCameraTable",
    "RectangleCameraTable",
    "ReportTable",
    "SettingsTable",
    "SourceTable",
    "Table",
    "TelescopeTable",
    "is_region_text",
]

NAME_LIMIT = 100
MAGNITUDE_LIMIT = 50.0
FIRST_YEAR, LAST_YEAR = 1900, 2180  # inside what logs may state

# A region text names a shape and then holds numbers; anything else in a mask is a file.
_REGION_TEXT = re.compile(
    r"\s*(polygon|circle|box|position|union|intersection|difference|not)\b[\s('\"].*\d", re.I | re.S
)
# Two letters at least before the colon, so that a drive letter is a path.
_URL = re.compile(r"\s*[a-z][a-z0-9+.-]+:/", re.I)


def is_region_text(text: str) -> bool:
    """Tell whether an entry of a mask is a region text rather than the name of a file."""
    return _REGION_TEXT.match(text) is not None


def _refusal(expected: str, remedy: str = "") -> PydanticCustomError:
    """Return an error of our own; both texts reach the user as they are."""
    return PydanticCustomError("own", "refused", {"expected": expected, "remedy": remedy})


def _name(text: str) -> str:
    text = text.strip()
    if not text or len(text) > NAME_LIMIT or not text.isprintable():
        raise _refusal(f"printable text of 1 to {NAME_LIMIT} characters on one line")
    return text


def _shown(text: str) -> str:
    """Refuse text with characters that would steer what shows it."""
    if not all(c.isprintable() or c in "\n\u00a0" for c in text):
        raise _refusal("text of characters that can be seen")
    return text


def _pattern(text: str) -> str:
    """Refuse what cannot name a file on this machine."""
    if _URL.match(text):
        raise _refusal(
            "a file on this machine, not a URL",
            "Download it first and give its path; nothing is fetched over the network.",
        )
    if not text.strip() or not text.isprintable():
        raise _refusal("the path of a file")
    return text


def _local_file(text: str, info: ValidationInfo) -> str:
    """Refuse a path at which no plain file can be read."""
    context: dict[str, Path] = info.context or {}
    path = context["base"] / _pattern(text)
    try:
        if path.is_dir():
            raise _refusal("a file, but this is a directory", "Name the file inside it.")
        if path.is_file():
            return text
        exists = path.exists()
    except OSError as problem:
        raise _refusal(f"a readable file, but the system says: {problem.strerror}") from None
    if exists:
        raise _refusal("a plain file, but this is a device or a pipe")
    tilde = " A leading ~ is not expanded: write the path in full." if text[:1] == "~" else ""
    raise _refusal(
        f"an existing file, but there is none at {path}",
        f"Paths are relative to the folder of the campaign file.{tilde}",
    )


def _region_or_moc(text: str, info: ValidationInfo) -> str:
    if not is_region_text(text):
        return _local_file(text, info)
    try:
        parse_region(text)
    except RegionError as fault:
        raise _refusal(f"a region, but {fault.message.rstrip('.')}", fault.remedy or "") from None
    return text


def _moment(moment: datetime) -> datetime:
    if not FIRST_YEAR <= moment.year <= LAST_YEAR:
        raise _refusal(f"a year from {FIRST_YEAR} to {LAST_YEAR}", "Correct the date.")
    return moment


def _cosmology(name: str) -> str:
    known = known_cosmologies()
    if name in known:
        return name
    near = get_close_matches(name.lower(), {k.lower(): k for k in known}, 1)
    hint = next((f"Did you mean {k}? " for k in known if k.lower() in near), "")
    raise _refusal("a cosmology that astropy knows", f"{hint}Known are {', '.join(known)}.")


def _brief(value: object) -> str:
    """Show one value; what holds others has no depth that is safe to show."""
    match value:
        case dict():
            return "a table"
        case list():
            return "a list"
        case int() if value.bit_length() > 128:
            return "a number of many digits"
    return f"{value!r:.40}"


def _number(value: object, low: float, high: float, what: str) -> float:
    """Check one number of a table by band; nan fails every comparison."""
    if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
        raise _refusal(f"{what} from {low:g} to {high:g}")
    return float(value)


def _per_band(value: object, low: float, high: float, what: str) -> dict[str, float]:
    """Check a table of one number per band."""
    if not isinstance(value, dict) or not value:
        raise _refusal(f"a table in braces with {what} for each band")
    return {
        _name(band): _number(one, low, high, f"in band {band!r}, which holds {_brief(one)}, {what}")
        for band, one in value.items()
    }


def _magnitude(value: object) -> float | dict[str, float]:
    limits = (-MAGNITUDE_LIMIT, MAGNITUDE_LIMIT)
    if isinstance(value, dict):
        return _per_band(value, *limits, "an absolute magnitude")
    return _number(value, *limits, "an absolute magnitude")


def _listed(value: object) -> object:
    return [value] if isinstance(value, str) else value


def _file_alone(key: str) -> BeforeValidator:
    """Let a text stand for the table that holds only its file."""
    return BeforeValidator(lambda value: {key: value} if isinstance(value, str) else value)


Name = Annotated[str, AfterValidator(_name)]
Shown = Annotated[str, AfterValidator(_shown)]
FilePattern = Annotated[str, AfterValidator(_pattern)]
LocalFile = Annotated[str, AfterValidator(_local_file)]
RegionOrMoc = Annotated[str, AfterValidator(_region_or_moc)]
Moment = Annotated[AwareDatetime, AfterValidator(_moment)]
MagnitudeSystem = Literal["AB", "Vega"]
Cosmology = Annotated[str, AfterValidator(_cosmology)]
Magnitude = Annotated[float | dict[str, float], PlainValidator(_magnitude)]
Coefficients = Annotated[
    dict[str, float], PlainValidator(lambda value: _per_band(value, 0.0, 50.0, "A_b / E(B-V)"))
]


class Table(BaseModel):
    """A table of the campaign file; a description completes the sentence "Give …"."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)


class EventTable(Table):
    """``[event]``."""

    name: Name = Field(description="the event's name in quotes")
    time: Moment = Field(
        description="the event's time without quotes, such as 2031-03-14T05:21:08Z"
    )


class RevisitTable(Table):
    """``[settings] revisit``."""

    visits: int = Field(
        default=2, ge=2, le=1000, description="how many visits make a place revisited"
    )
    gap_minutes: float = Field(
        default=30.0, ge=0, description="the least time between first and last visit, in minutes"
    )


class SettingsTable(Table):
    """``[settings]``."""

    magnitude_system: MagnitudeSystem = Field(
        default="AB", description="the system in which limits are reported"
    )
    significance: float = Field(
        default=5.0,
        gt=0,
        le=100,
        description="the significance, in sigma, to which limits are brought",
    )
    bracket: float = Field(
        default=0.005,
        gt=0,
        lt=1,
        description="the width in probability that brackets are tightened to",
    )
    revisit: RevisitTable = Field(
        default=RevisitTable(), description="{ visits = 2, gap_minutes = 30 }"
    )
    cosmology: Cosmology = Field(
        default=DEFAULT_COSMOLOGY, description="the name of one of astropy's cosmologies"
    )


class MapCircleTable(Table):
    """``[[map]] circle``."""

    ra: float = Field(ge=0, le=360, description="the centre's right ascension in degrees (ICRS)")
    dec: float = Field(ge=-90, le=90, description="the centre's declination in degrees (ICRS)")
    radius_90: float = Field(
        gt=0, le=90, description="the radius that holds 90 % of the probability, in degrees"
    )


class MapTable(Table):
    """``[[map]]``."""

    version: Name = Field(description='what this version is called, such as "1 first"')
    file: LocalFile | None = Field(default=None, description="the map's FITS file")
    circle: MapCircleTable | None = Field(
        default=None, description="{ ra = 150.2, dec = -8.1, radius_90 = 2.5 }, all in degrees"
    )
    issued: Moment | None = Field(
        default=None, description="when this version was issued, such as 2031-03-14T05:27:00Z"
    )


class SiteTable(Table):
    """``[[telescope]] site``."""

    longitude: float = Field(ge=-180, le=360, description="the longitude in degrees east")
    latitude: float = Field(ge=-90, le=90, description="the latitude in degrees")
    height: float = Field(
        default=0.0, ge=-1000, le=50_000, description="the height above sea level in metres"
    )


class RectangleCameraTable(Table):
    """``camera = { shape = "rectangle", … }``."""

    shape: Literal["rectangle"]
    width: float = Field(gt=0, lt=120, description="the field's full width in degrees")
    height: float = Field(gt=0, lt=120, description="the field's full height in degrees")


class CircleCameraTable(Table):
    """``camera = { shape = "circle", … }``."""

    shape: Literal["circle"]
    radius: float = Field(gt=0, le=90, description="the field's radius in degrees")


class MosaicCameraTable(Table):
    """``camera = { shape = "mosaic", … }``."""

    shape: Literal["mosaic"]
    file: LocalFile = Field(description="the table of detector corners (detector, xi, eta)")


CameraTable = RectangleCameraTable | CircleCameraTable | MosaicCameraTable


class ColumnsTable(Table):
    """``log = { columns = { … } }``: what the file calls each column."""

    exposure: Name | None = Field(default=None, description="the column with the exposures' names")
    ra: Name | None = Field(default=None, description="the column with right ascensions")
    dec: Name | None = Field(default=None, description="the column with declinations")
    angle: Name | None = Field(default=None, description="the column with position angles")
    start: Name | None = Field(default=None, description="the column with start times")
    duration: Name | None = Field(default=None, description="the column with durations in seconds")
    band: Name | None = Field(default=None, description="the column with bands")
    depth: Name | None = Field(default=None, description="the column with limiting magnitudes")
    quality: Name | None = Field(default=None, description="the column with the quality or status")
    region: Name | None = Field(
        default=None, description="the column with region texts or MOC files"
    )
    extinction: Name | None = Field(default=None, description="the column with extinctions A_b")


class LogFileTable(Table):
    """``[[telescope]] log``."""

    file: LocalFile = Field(description="the log's file")
    columns: ColumnsTable = Field(
        default=ColumnsTable(), description='{ ra = "RA_DEG", start = "UTC" }'
    )
    time_scale: Literal["utc", "tai", "tt", "tdb"] = Field(
        default="utc", description="the time scale of the log's times"
    )
    accept: list[Shown] | None = Field(
        default=None,
        min_length=1,
        description='the accepted values of the quality column: ["done"]',
    )
    ra_unit: Literal["deg", "hour"] | None = Field(
        default=None, description="the unit of right ascensions written as plain numbers"
    )
    delimiter: str | None = Field(
        default=None,
        min_length=1,
        max_length=1,
        description='the character between the columns, such as ";" or "\\t"',
    )
    decimal: Literal[".", ","] | None = Field(default=None, description="the decimal sign")


def _codes(value: object) -> tuple[str, ...]:
    """Check a list of codes of findings."""
    if not isinstance(value, list | tuple) or not all(isinstance(code, str) for code in value):
        raise _refusal('a list of codes in quotes, such as ["moon-near"]')
    for code in value:
        if code not in CODES:
            near = get_close_matches(code, CODES, 1)
            hint = f"Did you mean {near[0]}? " if near else ""
            raise _refusal(
                f"codes of findings, and {code!r:.40} is none",
                f"{hint}skytally check prints the code of each finding.",
            )
    return tuple(value)


def _demoted(value: object) -> dict[str, Severity]:
    """Check a table of a milder severity for each code."""
    if not isinstance(value, dict):
        raise _refusal('a table in braces, such as { "low-airmass" = "note" }')
    for code, severity in zip(_codes(list(value)), value.values()):
        if severity not in SEVERITIES[1:]:
            raise _refusal(f'"caution" or "note" for {code}', "To drop it, put it into silence.")
    return value


class AuditTable(Table):
    """``[audit]`` and ``[[telescope]] audit``: what the audit is to look for, and how loudly."""

    airmass: float | None = Field(
        default=None, gt=1, le=40, description="the airmass above which a pointing is doubted"
    )
    moon: float | None = Field(
        default=None, ge=0, le=180, description="the degrees from the Moon that are noted"
    )
    demote: Annotated[dict[str, Severity], PlainValidator(_demoted)] = Field(
        default={}, description='{ "airmass-high" = "note" }'
    )
    silence: Annotated[tuple[str, ...], PlainValidator(_codes)] = Field(
        default=(), description='["moon-near"]'
    )


class ClaimTable(Table):
    """``[[claim]]``: a number that somebody has stated, or a file of them."""

    file: LocalFile | None = Field(default=None, description="a table of claims")
    telescope: str | None = Field(default=None, description='a telescope\'s name, or "all"')
    map: str | None = Field(default=None, description="the map version; the newest if not given")
    band: str | None = Field(default=None, description="the band in quotes")
    night: str | None = Field(default=None, description='the night in quotes: "2031-03-14"')
    quantity: str | None = Field(default=None, description='what is stated: "probability"')
    value: str | None = Field(default=None, description='the value in quotes: "43.5 %"')
    stated_by: str | None = Field(default=None, description="who states it, in quotes")
    where: str | None = Field(default=None, description="where it is stated, in quotes")


class ImagesTable(Table):
    """``[[telescope]] images``."""

    files: FilePattern = Field(description='the pattern of the image files: "frames/*.fits"')
    start: Name = Field(default="DATE-OBS", description="the header keyword of the start time")
    duration: Name = Field(
        default="EXPTIME", description="the header keyword of the duration in seconds"
    )
    band: Name = Field(default="FILTER", description="the header keyword of the band")
    depth: Name | None = Field(
        default=None, description="the header keyword of the limiting magnitude"
    )
    exposure: Name | None = Field(
        default=None, description="the header keyword of the exposure's name"
    )


class DefaultsTable(Table):
    """``[[telescope]] defaults``: what holds where the log says nothing."""

    band: Name | None = Field(default=None, description="the band in quotes")
    duration: float | None = Field(default=None, ge=0, description="the exposure time in seconds")
    angle: float | None = Field(
        default=None, ge=-360, le=360, description="the position angle in degrees east of north"
    )
    depth: float | None = Field(default=None, ge=-50, le=50, description="the limiting magnitude")


class DepthTable(Table):
    """``[[telescope]] depth``: how the log's limits are to be read."""

    system: MagnitudeSystem = Field(default="AB", description="the system of the log's limits")
    significance: float = Field(
        default=5.0, gt=0, le=100, description="the significance of the log's limits, in sigma"
    )
    vega_offset: dict[Name, float] = Field(
        default_factory=dict, description="m_AB - m_Vega for each band, such as { r = 0.16 }"
    )


class TelescopeTable(Table):
    """``[[telescope]]``."""

    name: Name = Field(description="the telescope's name in quotes")
    site: SiteTable | None = Field(
        default=None, description="{ longitude = 21.4, latitude = -31.1, height = 1790 }"
    )
    camera: Annotated[CameraTable, Field(discriminator="shape")] | None = Field(
        default=None,
        description='a camera, such as { shape = "rectangle", width = 1.6, height = 1.2 }',
    )
    log: Annotated[LogFileTable, _file_alone("file")] | None = Field(
        default=None, description='a log, such as { file = "logs/heron.csv" }'
    )
    images: Annotated[ImagesTable, _file_alone("files")] | None = Field(
        default=None, description='images, such as { files = "frames/*.fits" }'
    )
    defaults: DefaultsTable = Field(
        default=DefaultsTable(), description='{ band = "r", duration = 60 }'
    )
    depth: DepthTable | None = Field(
        default=None, description='{ system = "AB", significance = 5 }'
    )
    mask: Annotated[list[RegionOrMoc], Field(min_length=1), BeforeValidator(_listed)] | None = (
        Field(default=None, description="a MOC file, or a list of region texts and MOC files")
    )
    searchable: LocalFile | None = Field(default=None, description="a MOC file")
    audit: AuditTable = Field(default=AuditTable(), description="{ airmass = 3.0, moon = 15.0 }")


class ExtinctionTable(Table):
    """``[extinction]``: Galactic extinction, A_b = coefficient · E(B−V)."""

    map: LocalFile | None = Field(default=None, description="a HEALPix map of E(B-V)")
    coefficients: Coefficients = Field(
        default={}, description="A_b / E(B-V) for each band, such as { w = 2.34 }"
    )
    allow_holes: bool = Field(default=False, description="true or false")


class DetectionTable(Table):
    """``[[source]] detection``: the chance that one exposure shows the source."""

    offset: float = Field(
        default=0.0,
        ge=-10,
        le=10,
        description="the magnitudes from the limit to half the plateau's efficiency",
    )
    width: float = Field(
        default=0.0, ge=0, le=10, description="the width of the logistic in magnitudes; 0: a step"
    )
    plateau: float = Field(
        default=1.0, gt=0, le=1, description="the efficiency for bright sources, such as 0.95"
    )


class SourceTable(Table):
    """``[[source]]``: what might have been there."""

    name: Name = Field(description="the source's name in quotes")
    magnitude: Magnitude | None = Field(
        default=None,
        description="an absolute magnitude: -16.0, or one per band: { r = -16.0, g = -15.5 }",
    )
    fade: float | None = Field(
        default=None, ge=0, le=100, description="how fast it fades, in magnitudes per day"
    )
    rise: float | None = Field(
        default=None, ge=0, le=10_000, description="the days from the event to the peak"
    )
    light_curve: LocalFile | None = Field(
        default=None, description="a table with the columns days, band and magnitude"
    )
    k_correction: Literal["none", "flat"] = Field(
        default="none", description='"none", or "flat" for a flat spectrum'
    )
    visits: int = Field(
        default=1, ge=1, le=1000, description="in how many exposures it must be seen"
    )
    gap_minutes: float = Field(
        default=0.0, ge=0, description="the least time between first and last of them, in minutes"
    )
    detection: DetectionTable = Field(
        default=DetectionTable(), description="{ offset = 0.0, width = 0.2, plateau = 0.95 }"
    )


class ReportTable(Table):
    """``[report]``: who signs the report, and on what paper it is set."""

    authors: list[Name] = Field(
        default_factory=list, description='a list of names: ["A. Observer", "B. Observer"]'
    )
    affiliations: list[Name] = Field(
        default_factory=list, description="a list of affiliations in quotes"
    )
    thanks: Shown = Field(default="", max_length=4000, description="the acknowledgements in quotes")
    paper: Literal["A4", "Letter"] = Field(
        default="A4", description="the size of the PDF's sheets, A4 or Letter"
    )


# Which model stands where; numbers of [[map]], [[telescope]] and [[source]] are left out.
TABLES: dict[tuple[str, ...], type[Table]] = {
    ("event",): EventTable,
    ("settings",): SettingsTable,
    ("settings", "revisit"): RevisitTable,
    ("extinction",): ExtinctionTable,
    ("report",): ReportTable,
    ("audit",): AuditTable,
    ("claim",): ClaimTable,
    ("map",): MapTable,
    ("map", "circle"): MapCircleTable,
    ("source",): SourceTable,
    ("source", "detection"): DetectionTable,
    ("telescope",): TelescopeTable,
    ("telescope", "site"): SiteTable,
    ("telescope", "camera", "rectangle"): RectangleCameraTable,
    ("telescope", "camera", "circle"): CircleCameraTable,
    ("telescope", "camera", "mosaic"): MosaicCameraTable,
    ("telescope", "log"): LogFileTable,
    ("telescope", "log", "columns"): ColumnsTable,
    ("telescope", "images"): ImagesTable,
    ("telescope", "defaults"): DefaultsTable,
    ("telescope", "depth"): DepthTable,
    ("telescope", "audit"): AuditTable,
}
