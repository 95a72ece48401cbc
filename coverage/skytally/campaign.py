"""One campaign: its file read and checked, and everything that it names loaded."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TypeVar

import numpy as np

from skytally.camera_io import read_mosaic
from skytally.cameras import Camera, CircleCamera, MosaicCamera
from skytally.campaign_data import (
    AuditOptions,
    CampaignSettings,
    LoadedCampaign,
    ReportText,
    Site,
    Telescope,
)
from skytally.campaign_faults import Entry, key_path, parse_campaign
from skytally.campaign_model import (
    AuditTable,
    CameraTable,
    CircleCameraTable,
    ClaimTable,
    DepthTable,
    ExtinctionTable,
    ImagesTable,
    LogFileTable,
    MapTable,
    RectangleCameraTable,
    ReportTable,
    SettingsTable,
    SiteTable,
    SourceTable,
    TelescopeTable,
    is_region_text,
)
from skytally.campaign_sources import build_source, extinction_notes, source_notes
from skytally.claims_io import Claim, parse_claim, read_claims
from skytally.dust import Dust
from skytally.dust_io import read_dust
from skytally.errors import CampaignError, InputError, SkytallyError
from skytally.light_curve_io import read_light_curve
from skytally.local_files import hashes_as_read
from skytally.log_io import ImageOptions, LogOptions, read_images, read_log
from skytally.log_regions import resolve_regions
from skytally.magnitudes import vega_to_ab
from skytally.moc import read_moc
from skytally.observations import LogTable
from skytally.region_text import parse_region
from skytally.shapes import Shape
from skytally.skymap import SkyMap
from skytally.skymap_io import circle_skymap, read_skymap
from skytally.sources import Source

__all__ = [
    "AuditOptions",
    "CampaignSettings",
    "LoadedCampaign",
    "ReportText",
    "Site",
    "Telescope",
    "load_campaign",
]

Result = TypeVar("Result")

_MJD_ZERO = datetime(1858, 11, 17, tzinfo=UTC)


def load_campaign(path: str | Path) -> LoadedCampaign:
    """Read a campaign file and every map, log, camera and region that it names.

    All faults are gathered before any is reported.

    Raises
    ------
    CampaignError
        If the campaign file has a fault, or several files have: all are listed.
    MapError, LogError, RegionError, InputError
        If a single file has a fault and all else is well.
    """
    path = Path(path)
    parsed = parse_campaign(path)
    event_mjd = None if parsed.event is None else _mjd(parsed.event.time)
    audit = parsed.audit or AuditTable()
    loader = _Loader(path.parent, event_mjd, parsed.settings, audit)
    loader.problems.extend(parsed.problems)
    loader.inputs.append(("campaign", path.name, parsed.sha256))
    maps = [loader.map_version(entry) for entry in parsed.maps]
    telescopes = [loader.telescope(entry) for entry in parsed.telescopes]
    extinction = parsed.extinction or ExtinctionTable()
    dust = loader.dust(extinction)
    sources = [loader.source(entry) for entry in parsed.sources]
    claims = [claim for entry in parsed.claims for claim in loader.claims(entry)]
    loader.raise_faults(path, telescopes)
    if parsed.event is None or event_mjd is None or parsed.settings is None:
        raise AssertionError("a table is missing and no fault was listed")
    found = tuple(m for m in maps if m is not None)
    observers = tuple(t for t in telescopes if t is not None)
    described = tuple(s for s in sources if s is not None)
    loader.notes.extend(_issue_notes(found, event_mjd))
    loader.notes.extend(extinction_notes(extinction))
    loader.notes.extend(source_notes(described, (t.log for t in observers)))
    return LoadedCampaign(
        path=path,
        event_name=parsed.event.name,
        event_mjd=event_mjd,
        maps=_in_order(found),
        telescopes=observers,
        settings=_settings(parsed.settings),
        inputs=tuple(dict.fromkeys(loader.inputs)),
        notes=tuple(loader.notes),
        report=_report(parsed.report or ReportTable()),
        sources=described,
        dust=dust,
        extinction_coefficients=extinction.coefficients,
        dust_path=extinction.map,
        audit=_audit(audit),
        claims=tuple(claims),
    )


class _Loader:
    """Loads what a campaign names and gathers faults, notes and input files."""

    def __init__(
        self,
        base: Path,
        event_mjd: float | None,
        settings: SettingsTable | None,
        audit: AuditTable,
    ) -> None:
        self.base = base
        self.event_mjd = event_mjd
        self.settings = settings
        self.whole_audit = audit
        self.problems: list[str] = []
        self.errors: list[SkytallyError] = []
        self.inputs: list[tuple[str, str, str]] = []
        self.notes: list[str] = []
        self.unread: list[SkytallyError] = []

    def raise_faults(self, path: Path, telescopes: Sequence[Telescope | None]) -> None:
        """Raise a lone fault of a file as it is, otherwise one error that lists all.

        A log that cannot be read is passed over where another telescope's can.
        """
        one_read = any(t is not None and not t.log.fault for t in telescopes)
        if one_read and not self.problems and not self.errors:
            return
        errors = [*self.errors, *self.unread]
        if len(errors) == 1 and not self.problems:
            raise errors[0]
        if self.problems or errors:
            raise CampaignError([*self.problems, *map(str, errors)], file=path)

    def attempt(self, read: Callable[[], Result], file: str) -> Result | None:
        """Return what a reader returns; None, with the fault kept, where it fails."""
        try:
            return read()
        except SkytallyError as fault:
            self.errors.append(fault)
        except OSError as fault:
            self.errors.append(
                InputError(
                    f"cannot be read: {fault.strerror or fault}",
                    file=self.base / file,
                    remedy="Check that the file is there and that you may read it.",
                )
            )
        return None

    def file(self, role: str, name: str, read: Callable[[Path], Result]) -> Result | None:
        """Read one file and note it among the inputs."""

        def read_and_note() -> Result:
            path = self.base / name
            with hashes_as_read() as hashes:
                result = read(path)
            self.inputs.append((role, name, hashes[str(path)]))
            return result

        return self.attempt(read_and_note, name)

    def map_version(self, entry: Entry[MapTable]) -> SkyMap | None:
        """Load one map version."""
        table = entry.table
        issued = None if table.issued is None else _mjd(table.issued)
        if table.file is not None:
            name = table.file
            skymap = self.attempt(
                lambda: read_skymap(self.base / name, label=table.version, issued_mjd=issued), name
            )
            if skymap is None:
                return None
            self.inputs.append(("map", name, skymap.sha256 or ""))
            return replace(skymap, path=name)
        circle = table.circle
        if circle is None:
            return None
        try:
            return circle_skymap(
                circle.ra, circle.dec, circle.radius_90, label=table.version, issued_mjd=issued
            )
        except SkytallyError as fault:
            place = key_path(
                ("map", entry.number - 1), ("circle",), {"version": table.version, "circle": {}}
            )
            self.problems.append(f"{place}: {fault}")
        return None

    def telescope(self, entry: Entry[TelescopeTable]) -> Telescope | None:
        """Load one telescope: log, camera, mask and searchable region."""
        table = entry.table
        log, regions = self._log(table)
        if log is not None:
            log = self._dated(table, log)
        camera = self._camera(table.camera)
        mask = [self._region(text) for text in table.mask or ()]
        searchable = None
        if table.searchable is not None:
            searchable = self.file("searchable", table.searchable, read_moc)
        if log is None:
            return None
        if entry.whole and not log.fault:
            self._need_regions(entry, log)
            self._need_offsets(entry, log)
        self._note_unused(table, log)
        depth = table.depth
        return Telescope(
            name=table.name,
            site=_site(table.site),
            camera=camera,
            camera_text=_camera_text(camera, table),
            log=log,
            depth_system="AB" if depth is None else depth.system,
            depth_significance=5.0 if depth is None else depth.significance,
            vega_offsets={} if depth is None else dict(depth.vega_offset),
            mask=tuple(m for m in mask if m is not None),
            searchable=searchable,
            regions=regions,
            audit=_audit(self.whole_audit, table.audit),
            default_depth=table.defaults.depth,
        )

    def dust(self, table: ExtinctionTable) -> Dust | None:
        """Load the dust map, if one is named."""
        if table.map is None:
            return None
        dust = self.file(
            "dust", table.map, lambda path: read_dust(path, allow_holes=table.allow_holes)
        )
        self.notes.extend(() if dust is None else dust.notes)
        return dust

    def source(self, entry: Entry[SourceTable]) -> Source | None:
        """Load one source with its light curve."""
        table = entry.table
        curves = None
        if table.light_curve is not None:
            curves = self.file("light curve", table.light_curve, read_light_curve)
            if curves is None:
                return None
        system = "AB" if self.settings is None else self.settings.magnitude_system
        return build_source(table, curves, system)

    def claims(self, entry: Entry[ClaimTable]) -> tuple[Claim, ...]:
        """Load one claim, or a file of them."""
        table = entry.table
        stated = table.model_dump(exclude_none=True)
        place = key_path(("claim", entry.number - 1), (), stated)
        if table.file is not None:
            if len(stated) > 1:
                self.problems.append(
                    f"{place}: a file and a claim in one table. Give each a [[claim]] of its own."
                )
            return self.file("claims", table.file, read_claims) or ()
        try:
            return (parse_claim(stated),)
        except InputError as fault:
            self.problems.append(f"{place}: {fault}")
        return ()

    def _log(self, table: TelescopeTable) -> tuple[LogTable | None, dict[str, Shape]]:
        """Load a log or images, and the regions that the rows bring.

        A log that cannot be read stands as one without rows, so that it does
        not stop the others.
        """
        before = len(self.errors)
        log, regions = self._read_log(table)
        if log is None and len(self.errors) > before:
            fault = self.errors.pop()
            self.unread.append(fault)
            file = table.log.file if table.log is not None else ""
            if table.images is not None:
                file = table.images.files
            log = LogTable.unread(table.name, file, self._without_base(str(fault)))
        return log, regions

    def _read_log(self, table: TelescopeTable) -> tuple[LogTable | None, dict[str, Shape]]:
        if table.log is not None:
            name = table.log.file
            options = _log_options(table, table.log, self.event_mjd)
            log = self.attempt(lambda: read_log(self.base / name, table.name, options), name)
        elif table.images is not None:
            name = table.images.files
            images = _image_options(table, table.images, self.event_mjd)
            log = self.attempt(lambda: read_images(name, table.name, images, self.base), name)
        else:
            return None, {}
        if log is None:
            return None, {}
        folder = Path(name).parent
        log, regions, files = resolve_regions(self._named(log), self.base / folder, self.base)
        self.inputs.append(("log", name, log.sha256))
        self.inputs.extend((role, str(folder / file), digest) for role, file, digest in files)
        if len(log) == 0:
            self.notes.append(
                f"{table.name}: no row of {name} counts ({log.read} read, all set aside); "
                "check the event's time and the reasons of the rows."
            )
        return log, regions

    def _without_base(self, text: str) -> str:
        """Name files as the campaign does, not as this machine does."""
        if self.base == Path():
            return text
        inside = text.replace(f"{self.base}{os.sep}", "")
        return inside.replace(str(self.base), "the folder of the campaign file")

    def _dated(self, table: TelescopeTable, log: LogTable) -> LogTable:
        """Note when the log's file was last changed."""
        if table.log is None or log.fault:
            return log
        changed = datetime.fromtimestamp((self.base / table.log.file).stat().st_mtime, UTC)
        return replace(log, modified_mjd=_mjd(changed))

    def _named(self, log: LogTable) -> LogTable:
        """Name the log and its rows' files as the campaign does, not as this machine does."""

        def name(file: str) -> str:
            path = Path(file)
            return str(path.relative_to(self.base)) if path.is_relative_to(self.base) else file

        aside = tuple(replace(row, file=name(row.file)) for row in log.set_aside)
        return replace(log, file=name(log.file), set_aside=aside)

    def _camera(self, table: CameraTable | None) -> Camera | None:
        match table:
            case None:
                return None
            case RectangleCameraTable():
                return MosaicCamera.rectangle(table.width, table.height)
            case CircleCameraTable():
                return CircleCamera(table.radius)
            case _:
                return self.file("camera", table.file, read_mosaic)

    def _region(self, text: str) -> Shape | None:
        """Load one entry of a mask."""
        return parse_region(text) if is_region_text(text) else self.file("mask", text, read_moc)

    def _need_regions(self, entry: Entry[TelescopeTable], log: LogTable) -> None:
        """Without a camera, every accepted row must bring a region."""
        without = np.flatnonzero(log.region == "")
        if entry.table.camera is None and without.size:
            first = int(without[0])
            self.problems.append(
                f"{_place(entry)}: no camera, and {without.size} of {len(log)} rows of {log.file} "
                f"give no region (the first is row {log.row[first]}, {log.exposure[first]}). Give "
                'a camera, such as camera = { shape = "circle", radius = 0.5 }, or fill the '
                "region column."
            )

    def _need_offsets(self, entry: Entry[TelescopeTable], log: LogTable) -> None:
        """Limits that change the magnitude system need an offset in each band."""
        depth = entry.table.depth or DepthTable()
        if self.settings is None or depth.system == self.settings.magnitude_system:
            return
        for band in sorted(set(log.band[np.isfinite(log.depth)])):
            try:
                vega_to_ab(band, depth.vega_offset)
            except SkytallyError as fault:
                self.problems.append(f"{_place(entry, 'depth')}: {fault}")

    def _note_unused(self, table: TelescopeTable, log: LogTable) -> None:
        """Note what was assumed about a telescope, and what of it had no use."""
        if table.depth is None and np.isfinite(log.depth).any():
            self.notes.append(
                f"{table.name}: the campaign states no depth system; its limits are taken as AB "
                "magnitudes at 5 sigma."
            )
        if table.images is not None and table.camera is not None:
            self.notes.append(
                f"{table.name}: the image headers give the footprints; the camera is not used."
            )
        if table.images is not None and table.defaults.angle is not None:
            self.notes.append(
                f"{table.name}: the image headers give the orientation; the default angle is not "
                "used."
            )


def _place(entry: Entry[TelescopeTable], *keys: str) -> str:
    names = {"name": entry.table.name, **dict.fromkeys(keys)}
    return key_path(("telescope", entry.number - 1), keys, names)


def _log_options(table: TelescopeTable, log: LogFileTable, event_mjd: float | None) -> LogOptions:
    defaults = table.defaults
    return LogOptions(
        columns=log.columns.model_dump(exclude_none=True),
        time_scale=log.time_scale,
        accept=None if log.accept is None else tuple(log.accept),
        ra_unit=log.ra_unit,
        delimiter=log.delimiter,
        decimal=log.decimal,
        band=defaults.band,
        duration=defaults.duration,
        angle=defaults.angle,
        depth=defaults.depth,
        not_before_mjd=event_mjd,
        use_fov=table.camera is None,
    )


def _image_options(
    table: TelescopeTable, images: ImagesTable, event_mjd: float | None
) -> ImageOptions:
    return ImageOptions(
        start=images.start,
        duration=images.duration,
        band=images.band,
        depth=images.depth,
        exposure=images.exposure,
        not_before_mjd=event_mjd,
        default_band=table.defaults.band,
        default_duration=table.defaults.duration,
        default_depth=table.defaults.depth,
    )


def _camera_text(camera: Camera | None, table: TelescopeTable) -> str:
    if table.images is not None:
        return "footprints from the images"
    match table.camera:
        case RectangleCameraTable(width=width, height=height):
            return f"rectangle {width:g} x {height:g} deg"
        case CircleCameraTable(radius=radius):
            return f"circle of radius {radius:g} deg"
        case None:
            return "regions from the log"
    count = len(camera.corners) if isinstance(camera, MosaicCamera) else 0
    return f"mosaic of {count} detector{'' if count == 1 else 's'}"


def _mjd(moment: datetime) -> float:
    return (moment - _MJD_ZERO) / timedelta(days=1)


def _in_order(maps: tuple[SkyMap, ...]) -> tuple[SkyMap, ...]:
    """Sort by issue time where every version has one; versions of one time keep their order."""
    times = [m.issued_mjd for m in maps]
    known = [t for t in times if t is not None]
    if len(known) < len(times):
        return maps
    return tuple(maps[i] for i in np.argsort(known, kind="stable"))


def _issue_notes(maps: tuple[SkyMap, ...], event_mjd: float) -> list[str]:
    notes = [
        f"Map version {m.label!r} was issued before the event; check both times."
        for m in maps
        if m.issued_mjd is not None and m.issued_mjd < event_mjd
    ]
    without = [m.label for m in maps if m.issued_mjd is None]
    if len(maps) > 1 and without:
        notes.append(
            f"Map version {without[0]!r} has no issue time, so the versions are taken in the "
            f"order of the campaign file; {maps[-1].label!r} counts as the newest."
        )
    return notes


def _site(table: SiteTable | None) -> Site | None:
    return None if table is None else Site(table.longitude, table.latitude, table.height)


def _settings(table: SettingsTable) -> CampaignSettings:
    return CampaignSettings(
        table.magnitude_system,
        table.significance,
        table.revisit.visits,
        table.revisit.gap_minutes,
        table.bracket,
        table.cosmology,
    )


def _audit(*tables: AuditTable) -> AuditOptions:
    """Merge tables of what to look for, the more particular ones later."""
    options = AuditOptions()
    for table in tables:
        options = AuditOptions(
            options.airmass if table.airmass is None else table.airmass,
            options.moon_deg if table.moon is None else table.moon,
            {**options.demote, **table.demote},
            options.silence | set(table.silence),
        )
    return options


def _report(table: ReportTable) -> ReportText:
    return ReportText(tuple(table.authors), tuple(table.affiliations), table.thanks, table.paper)
