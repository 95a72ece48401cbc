"""Findings on footprints: regions as they are written, their size, and where they lie."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from skytally.audit_rows import counted, row_words
from skytally.campaign_data import LoadedCampaign, Telescope
from skytally.findings import Finding, Severity
from skytally.footprints import Footprints
from skytally.pointings import angle_to_nearest, camera_reach_deg, coarse_region, pointings_of
from skytally.shapes import AllOf, AnyOf, NotIn, Polygon, Shape, lonlat_to_vector
from skytally.skymap import Measure
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR

__all__ = ["footprint_findings"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_AS_LOGGED = "The numbers are as logged."
# What `Polygon` says of edges that cross.
_CROSSED = "(a bow-tie)"
_MAP_LEVEL = 0.999
_SIZE_SLACK = 1.4


def footprint_findings(campaign: LoadedCampaign, footprints: Footprints) -> list[Finding]:
    """Check every log's regions and footprints against themselves and the maps.

    Parameters
    ----------
    campaign : LoadedCampaign
        Maps, telescopes and logs.
    footprints : Footprints
        As laid for the campaign.

    Returns
    -------
    list of Finding
        At most one of a kind for each telescope.
    """
    found: list[Finding] = []
    for telescope in campaign.telescopes:
        found += _crossed(telescope)
        found += _both_windings(telescope)
        found += _circles(telescope)
        found += _other_size(telescope)
    found += _vast(campaign, footprints)
    return found + _off_the_map(campaign, footprints)


def _finding(
    code: str,
    severity: Severity,
    telescope: Telescope,
    rows: Ints,
    text: str,
    remedy: str,
    done: str = _AS_LOGGED,
) -> Finding:
    return Finding(
        code, severity, telescope.name, tuple(np.sort(rows).tolist()), text, done, remedy
    )


# --- regions as they are written --------------------------------------------------------


def _crossed(telescope: Telescope) -> list[Finding]:
    """Gather the rows set aside because the edges of their polygon cross."""
    aside = [x.row for x in telescope.log.set_aside if _CROSSED in x.detail]
    if not aside:
        return []
    return [
        _finding(
            "crossed-polygon",
            "caution",
            telescope,
            np.array(aside),
            f"The corners in {row_words(aside)} are in an order that makes edges cross "
            "(a bow-tie), so that the field is not known.",
            "Write the corners in order around the field.",
            "These rows are set aside; their exposures do not count.",
        )
    ]


def _both_windings(telescope: Telescope) -> list[Finding]:
    """Note polygons whose corners run the other way than those of most rows."""
    log = telescope.log
    clockwise: dict[str, bool | None] = {"": None}
    for text, shape in telescope.regions.items():
        # The corners of a box are not the log's own.
        own = "BOX" not in text.upper()
        ways = {_is_clockwise(ring) for ring in _polygons(shape) if own}
        # A mosaic may well hold both, the same in every row.
        clockwise[text] = ways.pop() if len(ways) == 1 else None
    way = [clockwise[text] for text in log.region]
    one, other = (np.array([x is turned for x in way], dtype=bool) for turned in (True, False))
    if not one.any() or not other.any():
        return []
    few, name = (one, "clockwise") if one.sum() <= other.sum() else (other, "counter-clockwise")
    rows = log.row[few]
    return [
        _finding(
            "ring-reversed",
            "note",
            telescope,
            rows,
            f"Corners run {name} on the sky (north up, east to the left) in "
            f"{row_words(rows.tolist())} and the other way round in "
            f"{counted(int((one | other).sum() - few.sum()), 'row', 'rows')}. By the letter of "
            "the standards (STC, DALI) one of the two means everything outside its ring.",
            "Nothing, unless a region was meant to leave the field out.",
            "Either way round, the field is the smaller side of the ring.",
        )
    ]


def _polygons(shape: Shape) -> Iterator[Polygon]:
    """Yield every polygon that a shape is made of."""
    if isinstance(shape, Polygon):
        yield shape
    elif isinstance(shape, AnyOf | AllOf):
        for part in shape.parts:
            yield from _polygons(part)
    elif isinstance(shape, NotIn):
        yield from _polygons(shape.part)


def _is_clockwise(polygon: Polygon) -> bool:
    """Tell whether corners run from north over west, as the sky is seen from the ground."""
    ring = lonlat_to_vector(*polygon.vertices_deg.T)
    # Seen from inside the sphere, the right-handed turn about the outward normal (from
    # east to north) runs clockwise.
    return bool(np.cross(ring, np.roll(ring, -1, axis=0)).sum(axis=0) @ ring.sum(axis=0) > 0)


def _circles(telescope: Telescope) -> list[Finding]:
    """Note fields that are circles of a stated diameter for want of a camera."""
    log = telescope.log
    if telescope.camera is not None or log.fov_deg is None:
        return []
    own = [
        text == f"circle {ra!s} {dec!s} {fov / 2!s}"
        for text, ra, dec, fov in zip(log.region, log.ra_deg, log.dec_deg, log.fov_deg, strict=True)
    ]
    rows = log.row[np.array(own, dtype=bool)]
    if not rows.size:
        return []
    return [
        _finding(
            "field-as-circle",
            "note",
            telescope,
            rows,
            f"For want of a camera or a region, the fields of {row_words(rows.tolist())} are "
            "circles of the field of view that the log states (s_fov), which a camera that is "
            "not round does not fill.",
            "Give the camera, or regions, if the field is not round.",
            "The whole circle counts as covered.",
        )
    ]


def _other_size(telescope: Telescope) -> list[Finding]:
    """Report a camera that is much smaller or larger than the field that the log states."""
    log, camera = telescope.log, telescope.camera
    if camera is None or log.fov_deg is None:
        return []
    round_deg = 2 * float(np.sqrt(camera.area_deg2 / np.pi))
    across_deg = 2 * camera_reach_deg(camera)
    # A stated size may be a side, a diagonal or a diameter.
    other = (log.fov_deg < round_deg / _SIZE_SLACK) | (log.fov_deg > across_deg * _SIZE_SLACK)
    other &= (log.region == "").astype(bool)
    if not other.any():
        return []
    rows, stated = log.row[other], log.fov_deg[other]
    extent = f"{stated.min():.3g}" + (f" to {stated.max():.3g}" if np.ptp(stated) > 0 else "")
    return [
        _finding(
            "camera-of-another-size",
            "caution",
            telescope,
            rows,
            f"The log states fields {extent} deg across in {row_words(rows.tolist())}; the "
            f"camera ({telescope.camera_text}) is {across_deg:.3g} deg across, and its area is "
            f"that of a circle of {round_deg:.3g} deg.",
            "See which of the two is right: the stated size is a diameter in degrees.",
            "The camera counts, not the stated size.",
        )
    ]


# --- footprints as they lie -------------------------------------------------------------


def _vast(campaign: LoadedCampaign, footprints: Footprints) -> list[Finding]:
    """Report footprints larger than a hemisphere."""
    area = footprints.raster.centre.area_sr()
    found = []
    for index, telescope in enumerate(campaign.telescopes):
        rows = _rows_with(footprints, index, area > FULL_SKY_SR / 2)
        if not rows.size:
            continue
        largest = area[footprints.telescope == index].max() * DEG2_PER_SR
        found.append(
            _finding(
                "footprint-vast",
                "caution",
                telescope,
                rows,
                f"More than half of the sky is covered at once in {row_words(rows.tolist())}: up "
                f"to {largest:,.0f} deg².",
                "If no instrument sees so much, look for a radius or a size in another unit "
                "than degrees, or for a region that means its own outside.",
            )
        )
    return found


def _rows_with(footprints: Footprints, index: int, chosen: NDArray[np.bool_]) -> Ints:
    """Rows of one telescope's log whose footprints are chosen."""
    observations = footprints.observations
    mine = (observations.telescope == index) & chosen[observations.footprint]
    return np.sort(observations.row[mine])


def _off_the_map(campaign: LoadedCampaign, footprints: Footprints) -> list[Finding]:
    """Report telescopes whose every footprint lies outside every version of the map."""
    touches = np.zeros(footprints.telescope.size, dtype=bool)
    for skymap in campaign.maps:
        region = Measure.area(skymap.credible_region(_MAP_LEVEL))
        touches |= region.of_table(footprints.raster.centre) > 0
    covers = footprints.raster.centre.area_sr() > 0
    outside = [
        index
        for index in range(len(campaign.telescopes))
        if (covers & (footprints.telescope == index)).any()
        and not (touches & (footprints.telescope == index)).any()
    ]
    everyone = len(outside) == len(campaign.telescopes)
    wide, _ = coarse_region(campaign.maps, _MAP_LEVEL)
    return [_outside(campaign.telescopes[index], wide, everyone) for index in outside]


def _outside(telescope: Telescope, wide: Floats, everyone: bool) -> Finding:
    text = f"Every footprint lies outside the {100 * _MAP_LEVEL:g} % region of every map version"
    pointings = pointings_of(telescope)
    known = np.isfinite(pointings.ra_deg)
    if known.any():
        field = lonlat_to_vector(pointings.ra_deg[known], pointings.dec_deg[known])
        text += f"; the nearest is centred about {angle_to_nearest(field, wide).min():.0f} deg away"
    if everyone:
        text += ". So do those of all telescopes"
    return _finding(
        "outside-map",
        "caution",
        telescope,
        telescope.log.row,
        f"{text}.",
        "Check that the maps are those of this event."
        if everyone
        else "Check that this log is of this event, and the positions in it.",
    )
