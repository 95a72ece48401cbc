"""From a loaded campaign to its results: the whole accounting in one call."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from itertools import chain
from typing import TypedDict

import numpy as np
from numpy.typing import NDArray

from skytally import __version__
from skytally.audit import audit
from skytally.cache import Cache
from skytally.campaign import LoadedCampaign, Site, Telescope
from skytally.claims import check_claims
from skytally.cosmology import Cosmology
from skytally.covered import Coverage, TallySettings
from skytally.deepest import DeepestLimits
from skytally.exclusion import (
    AbsoluteLimit,
    DepthHistogram,
    DistanceProfile,
    ExclusionCurve,
    FadingPlane,
    absolute_limits,
    depth_histograms,
    distance_profile,
    exclusion_curves,
    fading_planes,
)
from skytally.field_extinction import field_extinction
from skytally.footprints import Footprints, Progress, lay_footprints
from skytally.limits import Brackets, Scene, SourceRow, tally_sources
from skytally.page_sets import SetMerger
from skytally.refinement import refine_footprints
from skytally.results import (
    Event,
    ExposureInfo,
    InputFile,
    LogCount,
    MapInfo,
    Results,
    SetAsideInfo,
    Settings,
    SkyData,
    SourceInfo,
    TelescopeInfo,
)
from skytally.seen import SeenSource
from skytally.serialise import identified
from skytally.sharing import share_maps
from skytally.skymap import SkyMap
from skytally.space import Space
from skytally.spans import DEG2_PER_SR, Spans
from skytally.tally import TallyRow, maps_in_force, tally_as_pointed, tally_maps
from skytally.times import hours_since, mjd_to_iso
from skytally.workers import side_by_side

__all__ = ["account", "lay_coverage"]

Floats = NDArray[np.float64]


class _Depths(TypedDict):
    """The fields of `Results` that only maps with distances fill."""

    source_rows: tuple[SourceRow, ...]
    exclusions: tuple[ExclusionCurve, ...]
    fading_planes: tuple[FadingPlane, ...]
    absolute_limits: tuple[AbsoluteLimit, ...]
    distance_profiles: tuple[DistanceProfile, ...]
    depth_histograms: tuple[DepthHistogram, ...]


def lay_coverage(
    campaign: LoadedCampaign, progress: Progress | None = None, cache: Cache | None = None
) -> Coverage:
    """Lay every footprint of a campaign on the sky and cut the patchwork.

    ``progress`` is as for `account`, and is told of the first six tenths. Rasterised
    footprints are taken from the ``cache``, if one is given, and kept there.
    """
    footprints = lay_footprints(campaign, _part(progress, 0.0, 0.4), cache=cache)
    footprints = refine_footprints(
        footprints,
        campaign.maps,
        campaign.settings.bracket,
        _part(progress, 0.4, 0.6),
        cache=cache,
    )
    extinction = field_extinction(footprints, campaign.dust, campaign.extinction_coefficients)
    return Coverage.build(footprints, extinction)


def account(
    campaign: LoadedCampaign, progress: Progress | None = None, coverage: Coverage | None = None
) -> Results:
    """Tally a campaign on every map version.

    Parameters
    ----------
    campaign : LoadedCampaign
        As `load_campaign` returns it.
    progress : callable, optional
        Called with a stage in words and the fraction of the whole that is done.
    coverage : Coverage, optional
        What `lay_coverage` made of the same campaign; made here if left out.
    """
    settings = campaign.settings
    coverage = lay_coverage(campaign, progress) if coverage is None else coverage
    footprints = coverage.footprints
    cosmology = Cosmology.named(settings.cosmology)
    spaces = [(skymap, Space.of(skymap, cosmology)) for skymap in campaign.maps]
    tally_settings = TallySettings(
        campaign.event_mjd, settings.revisit_visits, settings.revisit_gap_minutes
    )
    if progress is not None:
        progress("Tallying", 0.6)
    merger = SetMerger(coverage, len(spaces), campaign.event_mjd)
    rows, timelines = tally_maps(coverage, spaces, tally_settings, merger.witness)
    depths = _third_dimension(campaign, coverage, rows, spaces, _part(progress, 0.7, 0.95))
    if progress is not None:
        progress("Tallying as pointed", 0.95)
    findings, silenced = audit(campaign, coverage, spaces)
    results = Results(
        software=f"skytally {__version__}",
        event=Event(campaign.event_name, mjd_to_iso(campaign.event_mjd), campaign.event_mjd),
        settings=Settings(
            settings.magnitude_system,
            settings.significance,
            settings.revisit_visits,
            settings.revisit_gap_minutes,
            settings.bracket,
            _extinction_text(coverage),
            settings.cosmology,
        ),
        inputs=tuple(InputFile(*item) for item in campaign.inputs),
        maps=tuple(_map_info(*pair, campaign.event_mjd) for pair in spaces),
        telescopes=tuple(
            _telescope_info(telescope, index, footprints)
            for index, telescope in enumerate(campaign.telescopes)
        ),
        logs=tuple(_log_count(telescope) for telescope in campaign.telescopes),
        rows=tuple(rows),
        timelines=tuple(timelines),
        as_pointed=tuple(tally_as_pointed(coverage, campaign.maps)),
        sharing=tuple(share_maps(coverage, campaign.maps, campaign.event_mjd)),
        exposures=_exposures(coverage, campaign),
        set_aside=tuple(
            SetAsideInfo(a.telescope, a.file, a.row, a.exposure, a.reason, a.detail)
            for telescope in campaign.telescopes
            for a in telescope.log.set_aside
        ),
        notes=_notes(campaign),
        sky=SkyData(
            campaign.maps,
            _covered(footprints),
            footprints.outlines,
            merger.take([m.label for m in campaign.maps]),
            DeepestLimits.of(coverage),
        ),
        findings=findings,
        silenced=silenced,
        claims=tuple(check_claims(campaign.claims, campaign, coverage, rows)),
        sources=tuple(SourceInfo(source.name, source.text) for source in campaign.sources),
        report=campaign.report,
        **depths,
    )
    return identified(results)


def _part(progress: Progress | None, low: float, high: float) -> Progress | None:
    """Let a stage report from 0 to 1 what is from low to high of the whole."""
    if progress is None:
        return None
    return lambda stage, done: progress(stage, low + (high - low) * done)


def _third_dimension(
    campaign: LoadedCampaign,
    coverage: Coverage,
    rows: Sequence[TallyRow],
    spaces: Sequence[tuple[SkyMap, Space | None]],
    progress: Progress | None,
) -> _Depths:
    """Tally sources and limits on every map version that carries distances."""
    known = [space for _, space in spaces if space is not None]
    if not known:
        return _Depths(
            source_rows=(),
            exclusions=(),
            fading_planes=(),
            absolute_limits=(),
            distance_profiles=(),
            depth_histograms=(),
        )
    brackets = Brackets(coverage, known, campaign.dust, campaign.extinction_coefficients)
    source_rows = tally_sources(brackets, campaign.sources, campaign.event_mjd)
    centre = brackets.centre
    scenes = [Scene.of(space, centre) for space in known]
    seen = [
        SeenSource.of(source, centre, campaign.event_mjd, known[0].cosmology)
        for source in campaign.sources
    ]
    reaches = [(one.source.name, one.reach_at(centre.seen)) for one in seen]
    return _Depths(
        source_rows=tuple(source_rows),
        exclusions=tuple(chain.from_iterable(side_by_side(exclusion_curves, scenes))),
        fading_planes=tuple(fading_planes(centre, scenes, campaign.event_mjd)),
        absolute_limits=tuple(limit for space in known for limit in absolute_limits(rows, space)),
        distance_profiles=tuple(distance_profile(scene, reaches) for scene in scenes),
        depth_histograms=tuple(part for scene in scenes for part in depth_histograms(scene)),
    )


def _extinction_text(coverage: Coverage) -> str:
    """Say in words whether limits are corrected for Galactic extinction."""
    limited = np.isfinite(coverage.observations.depth)
    known = np.isfinite(coverage.extinction[limited])
    if not known.any():
        return "not corrected for Galactic extinction"
    if known.all():
        return "corrected for Galactic extinction"
    return "corrected for Galactic extinction where it is known"


def _map_info(skymap: SkyMap, space: Space | None, event_mjd: float) -> MapInfo:
    issued = skymap.issued_mjd
    mean, sd = (None, None) if space is None else space.moments
    volume_50, volume_90 = (
        (None if space is None else space.credible_volumes(level)) or (None, None)
        for level in (0.5, 0.9)
    )
    return MapInfo(
        version=skymap.label,
        issued=None if issued is None else mjd_to_iso(issued),
        hours=None if issued is None else hours_since(issued, event_mjd),
        cells=int(skymap.starts.size),
        order_max=skymap.order_max,
        area_50_deg2=skymap.credible_region(0.5).area_deg2,
        area_90_deg2=skymap.credible_region(0.9).area_deg2,
        distance_mean_mpc=mean,
        distance_sd_mpc=sd,
        volume_50_mpc3=volume_50[0],
        volume_90_mpc3=volume_90[0],
        probability_without_distance=None if space is None else space.probability_without,
        path=skymap.path,
        sha256=skymap.sha256,
        notes=skymap.notes,
        volume_50_comoving_mpc3=volume_50[1],
        volume_90_comoving_mpc3=volume_90[1],
    )


def _telescope_info(telescope: Telescope, index: int, footprints: Footprints) -> TelescopeInfo:
    mine = footprints.telescope == index
    order = footprints.raster.order[mine]
    order = order[order >= 0]
    bands = footprints.observations.bands
    used = np.unique(footprints.observations.band[footprints.observations.telescope == index])
    site = telescope.site
    return TelescopeInfo(
        name=telescope.name,
        camera=telescope.camera_text,
        camera_area_deg2=None if telescope.camera is None else telescope.camera.area_deg2,
        site=None if site is None else _site_text(site),
        bands=tuple(bands[band] for band in used),
        exposures=len(telescope.log),
        footprints=int(mine.sum()),
        order_min=int(order.min()) if order.size else None,
        order_max=int(order.max()) if order.size else None,
        depth_system=telescope.depth_system,
        depth_significance=telescope.depth_significance,
    )


def _site_text(site: Site) -> str:
    """Longitude east, latitude and height in words."""
    east, north = f"{site.longitude_deg:+.4f} deg east", f"{site.latitude_deg:+.4f} deg north"
    return f"{east}, {north}, {site.height_m:.0f} m"


def _log_count(telescope: Telescope) -> LogCount:
    log = telescope.log
    return LogCount(
        log.telescope,
        log.file,
        log.read,
        len(log),
        len(log.set_aside),
        tuple(sorted(Counter(a.reason for a in log.set_aside).items())),
        log.fault,
    )


def _exposures(coverage: Coverage, campaign: LoadedCampaign) -> tuple[ExposureInfo, ...]:
    """Every accepted exposure, with its own probability then and now."""
    o = coverage.observations
    table = coverage.footprints.raster.centre
    area = table.area_sr() * DEG2_PER_SR
    worth = [skymap.probability.of_table(table) for skymap in campaign.maps]
    force = maps_in_force(o.start_mjd, campaign.maps)

    def number(value: float) -> float | None:
        return float(value) if np.isfinite(value) else None

    return tuple(
        ExposureInfo(
            telescope=o.telescopes[o.telescope[i]],
            exposure=o.exposure[i],
            row=int(o.row[i]),
            start=mjd_to_iso(o.start_mjd[i]),
            end=mjd_to_iso(o.end_mjd[i]),
            hours=hours_since(o.start_mjd[i], campaign.event_mjd),
            band=o.bands[o.band[i]],
            ra_deg=number(o.ra_deg[i]),
            dec_deg=number(o.dec_deg[i]),
            area_deg2=float(area[o.footprint[i]]),
            depth=number(o.depth[i]),
            map_in_force=None if force[i] < 0 else campaign.maps[force[i]].label,
            probability_in_force=None if force[i] < 0 else float(worth[force[i]][o.footprint[i]]),
            probability_newest=float(worth[-1][o.footprint[i]]),
            night=o.nights[o.night[i]],
        )
        for i in range(len(o))
    )


def _notes(campaign: LoadedCampaign) -> tuple[str, ...]:
    """Everything that a reader noticed, with whose it is."""
    notes = list(campaign.notes)
    notes += [f"Map {m.label}: {note}" for m in campaign.maps for note in m.notes]
    notes += [f"{t.name}: {note}" for t in campaign.telescopes for note in t.log.notes]
    return tuple(notes)


def _covered(footprints: Footprints) -> tuple[Spans, ...]:
    """Union of each telescope's footprints."""
    table = footprints.raster.centre
    owner = footprints.telescope[table.owner]
    return tuple(
        Spans.from_intervals(table.starts[owner == index], table.stops[owner == index])
        for index in range(len(footprints.observations.telescopes))
    )
