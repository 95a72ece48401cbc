"""Exposures of all telescopes gathered, and their footprints laid on the line."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import date

import numpy as np
from numpy.typing import NDArray

from skytally.cache import Cache
from skytally.cameras import CircleCamera, lay_camera, lay_outlines
from skytally.campaign import LoadedCampaign, Telescope
from skytally.kept_raster import keep_raster
from skytally.magnitudes import change_significance, convert_system
from skytally.observations import SECONDS_PER_DAY, Observations, night_of
from skytally.raster import (
    Pieces,
    Raster,
    pieces_of_shape,
    rasterise,
    rasterise_shape,
    stack_rasters,
)
from skytally.shapes import AnyOf, Circle, Polygon, Shape
from skytally.spans import Ints, Spans
from skytally.working_order import rasterise_shape_to_target, rasterise_to_target

__all__ = ["UNSTATED_BAND", "Footprints", "Progress", "clip_raster", "lay_footprints"]

Floats = NDArray[np.float64]
Progress = Callable[[str, float], None]

# Exposures whose log names no band are a band of their own, so that sums hold.
UNSTATED_BAND = "unstated"

# Stars in a mask are small.
_MASK_ORDER = 16

_MJD_ZERO = date(1858, 11, 17).toordinal()


@dataclass(frozen=True, eq=False)
class Footprints:
    """All exposures and the distinct footprints that they share.

    Attributes
    ----------
    observations : Observations
        Exposures; ``observations.footprint`` points into the raster's owners.
    raster : Raster
        One owner per distinct footprint.
    telescope : int64 array, shape (footprints,)
        Telescope of each footprint.
    pieces : Pieces
        Convex pieces of the footprints that have any, for refining the bracket.
    clips : tuple of (Spans, Raster or None)
        Per telescope: where it is searchable, and the raster of its mask.
    outlines : tuple of tuples of float64 arrays
        Per telescope, rings to draw.
    outlined : tuple of int64 arrays
        Per telescope, the footprint of each ring.
    pieces_per_footprint : int64 array, shape (footprints,)
        Number of convex pieces; 0 for regions known exactly.
    """

    observations: Observations
    raster: Raster
    telescope: Ints
    pieces: Pieces
    clips: tuple[tuple[Spans | None, Raster | None], ...]
    outlines: tuple[tuple[Floats, ...], ...]
    outlined: tuple[Ints, ...]
    pieces_per_footprint: Ints

    def of(self, chosen: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Footprints of the chosen exposures, shape (footprints,)."""
        mask = np.zeros(self.telescope.size, dtype=bool)
        mask[self.observations.footprint[chosen]] = True
        return mask


@dataclass(frozen=True, eq=False)
class _Laid:
    """One telescope's distinct footprints before rasterising."""

    footprint: Ints  # of each exposure
    pieces: Pieces  # of those laid by the camera or given as simple shapes
    other: dict[int, Shape]  # footprints that are not simple
    count: int
    outlines: tuple[Floats, ...]
    outlined: Ints  # footprint of each outline


def lay_footprints(
    campaign: LoadedCampaign,
    progress: Progress | None = None,
    order: int | None = None,
    cache: Cache | None = None,
) -> Footprints:
    """Gather the exposures, lay every distinct footprint, and rasterise it.

    The working order of each footprint is chosen so that its own area and that
    of every band and night of its telescope keep to a stated error, unless one
    ``order`` for all is given: then the raster is an index to the footprints
    and no measure of them. Rasters are kept in a ``cache``, telescope by telescope.
    """
    bands, nights = _names(campaign)
    rasters, pieces, per_footprint, owners = [], [], [], []
    clips, outlines, outlined, columns = [], [], [], []
    first = 0
    for index, telescope in enumerate(campaign.telescopes):
        if progress is not None:
            progress(f"Laying {telescope.name}", index / len(campaign.telescopes))
        laid = _lay(telescope)
        band = np.array([bands.index(b or UNSTATED_BAND) for b in telescope.log.band], dtype=int)
        night = _night(telescope)
        clip = _clips(telescope, cache)
        rasters.append(clip_raster(_rasterise(laid, band, night, order, cache), clip))
        clips.append(clip)
        everything = np.arange(len(laid.pieces))
        pieces.append(laid.pieces.take(everything, laid.pieces.owner + first))
        per_footprint.append(np.bincount(laid.pieces.owner, minlength=laid.count))
        owners.append(np.full(laid.count, index))
        outlines.append(laid.outlines)
        outlined.append(laid.outlined + first)
        columns.append(
            _columns(telescope, campaign, index, band, night, nights, laid.footprint + first)
        )
        first += laid.count
    return Footprints(
        _gather(columns, campaign, bands, nights),
        stack_rasters(rasters),
        np.concatenate([np.empty(0, dtype=np.int64), *owners]).astype(np.int64),
        Pieces.stack(pieces),
        tuple(clips),
        tuple(outlines),
        tuple(outlined),
        np.concatenate([np.empty(0, dtype=np.int64), *per_footprint]).astype(np.int64),
    )


def _night(telescope: Telescope) -> Ints:
    longitude = None if telescope.site is None else telescope.site.longitude_deg
    return night_of(telescope.log.start_mjd, longitude)


def _names(campaign: LoadedCampaign) -> tuple[list[str], list[int]]:
    """All bands (in order of first appearance, sorted) and all nights of the campaign."""
    bands = sorted({b for t in campaign.telescopes for b in t.log.band if b}, key=_band_rank)
    if any(not b for t in campaign.telescopes for b in t.log.band):
        bands.append(UNSTATED_BAND)
    nights = sorted({int(n) for t in campaign.telescopes for n in _night(t)})
    return bands, nights


def _band_rank(band: str) -> tuple[int, str]:
    """From blue to red as the trade lists bands; unknown names last, by alphabet."""
    order = ["u", "U", "B", "g", "V", "r", "R", "i", "I", "z", "y", "Y", "J", "H", "K", "Ks"]
    return (order.index(band) if band in order else len(order), band)


def _columns(
    telescope: Telescope,
    campaign: LoadedCampaign,
    index: int,
    band: Ints,
    night: Ints,
    nights: Sequence[int],
    footprint: Ints,
) -> dict[str, NDArray[np.generic]]:
    """Columns of `Observations` for one telescope, in the order of its log."""
    log = telescope.log
    return {
        "telescope": np.full(len(log), index),
        "night": np.searchsorted(np.array(nights, dtype=np.int64), night),
        "band": band,
        "footprint": footprint,
        "row": log.row,
        "exposure": log.exposure,
        "ra_deg": log.ra_deg,
        "dec_deg": log.dec_deg,
        "angle_deg": log.angle_deg,
        "start_mjd": log.start_mjd,
        "end_mjd": log.start_mjd + log.duration_s / SECONDS_PER_DAY,
        "depth": _depth(telescope, campaign),
        "extinction": log.extinction,
    }


def _depth(telescope: Telescope, campaign: LoadedCampaign) -> Floats:
    """Limits in the campaign's system and significance."""
    settings = campaign.settings
    depth = change_significance(
        telescope.log.depth, telescope.depth_significance, settings.significance
    )
    if telescope.depth_system == settings.magnitude_system:
        return depth
    converted = depth.copy()
    for band in set(telescope.log.band[np.isfinite(depth)]):
        rows = telescope.log.band == band
        converted[rows] = convert_system(
            depth[rows],
            band,
            telescope.depth_system,
            settings.magnitude_system,
            telescope.vega_offsets,
        )
    return converted


def _gather(
    columns: list[dict[str, NDArray[np.generic]]],
    campaign: LoadedCampaign,
    bands: Sequence[str],
    nights: Sequence[int],
) -> Observations:
    """Join the telescopes' columns and sort by start."""
    joined = {name: np.concatenate([c[name] for c in columns]) for name in columns[0]}
    order = np.lexsort((joined["row"], joined["telescope"], joined["start_mjd"]))
    return Observations(
        telescopes=tuple(t.name for t in campaign.telescopes),
        bands=tuple(bands),
        nights=tuple(date.fromordinal(_MJD_ZERO + n).isoformat() for n in nights),
        **{name: column[order] for name, column in joined.items()},
    )


def _lay(telescope: Telescope) -> _Laid:
    """Find a telescope's distinct footprints and lay them."""
    log = telescope.log
    keys: dict[tuple[object, ...], int] = {}
    footprint = np.empty(len(log), dtype=np.int64)
    example: list[int] = []
    for place in range(len(log)):
        text = log.region[place]
        pointing = (log.ra_deg[place], log.dec_deg[place], log.angle_deg[place])
        key = (text,) if text else pointing
        footprint[place] = keys.setdefault(key, len(keys))
        if footprint[place] == len(example):
            example.append(place)
    first = np.array(example, dtype=np.int64)
    by_camera = np.array([not log.region[place] for place in first], dtype=bool)
    parts: list[Pieces] = []
    other: dict[int, Shape] = {}
    outlines: list[Floats] = []
    outlined: list[Ints] = []
    if by_camera.any():
        assert telescope.camera is not None  # checked when the campaign was read
        rows = first[by_camera]
        pointings = log.ra_deg[rows], log.dec_deg[rows], log.angle_deg[rows]
        laid = lay_camera(telescope.camera, *pointings)
        parts.append(laid.take(np.arange(len(laid)), np.flatnonzero(by_camera)[laid.owner]))
        outlines.extend(lay_outlines(telescope.camera, *pointings))
        outlined.append(np.repeat(np.flatnonzero(by_camera), len(outlines) // rows.size))
    for owner in np.flatnonzero(~by_camera):
        shape = telescope.regions[log.region[first[owner]]]
        simple = _simple_parts(shape)
        if simple is None:
            other[int(owner)] = shape
        else:
            parts.extend(pieces_of_shape(part, int(owner)) for part in simple)
            outlines.extend(_outline(part) for part in simple)
            outlined.append(np.full(len(simple), owner))
    pieces = Pieces.stack(parts)
    by_owner = np.argsort(pieces.owner, kind="stable")
    return _Laid(
        footprint,
        pieces.take(by_owner, pieces.owner[by_owner]),
        other,
        len(example),
        tuple(outlines),
        np.concatenate([np.empty(0, dtype=np.int64), *outlined]).astype(np.int64),
    )


def _simple_parts(shape: Shape) -> list[Circle | Polygon] | None:
    """Circles and polygons whose union is the shape; None for anything else."""
    if isinstance(shape, Circle | Polygon):
        return [shape]
    if isinstance(shape, AnyOf):
        parts = [_simple_parts(part) for part in shape.parts]
        if all(part is not None for part in parts):
            return [piece for part in parts if part is not None for piece in part]
    return None


def _outline(shape: Circle | Polygon) -> Floats:
    if isinstance(shape, Polygon):
        return np.asarray(shape.vertices_deg)
    (ring,) = lay_outlines(
        CircleCamera(shape.radius_deg),
        np.array([shape.lon_deg]),
        np.array([shape.lat_deg]),
        np.zeros(1),
    )
    return ring


def _rasterise(
    laid: _Laid, band: Ints, night: Ints, order: int | None, cache: Cache | None
) -> Raster:
    """Rasterise one telescope's footprints, each at its own working order or all at one."""
    rows = [laid.footprint[kind == one] for kind in (band, night) for one in np.unique(kind)]
    return keep_raster(
        cache,
        "laid",
        lambda: (laid.pieces, list(laid.other.items()), laid.count, rows, order),
        lambda: _rasterise_rows(laid, rows, order),
    )


def _rasterise_rows(laid: _Laid, rows: Sequence[Ints], order: int | None) -> Raster:
    """Rasterise footprints, so that those of each row keep to the error of their total."""
    simple = np.unique(laid.pieces.owner)
    pieces = laid.pieces.take(
        np.arange(len(laid.pieces)), np.searchsorted(simple, laid.pieces.owner)
    )
    groups = [np.searchsorted(simple, row[np.isin(row, simple)]) for row in rows]
    parts = [
        rasterise_to_target(pieces, simple.size, groups)
        if order is None
        else rasterise(pieces, simple.size, order)
    ]
    owners = [simple]
    other = [np.unique(row[~np.isin(row, simple)]) for row in rows]
    for owner, shape in laid.other.items():
        companions = min(row.size for row in other if owner in row)
        parts.append(
            rasterise_shape_to_target(shape, companions)
            if order is None
            else rasterise_shape(shape, order)
        )
        owners.append(np.array([owner]))
    return stack_rasters(parts).take(np.argsort(np.concatenate(owners)))


def _clips(telescope: Telescope, cache: Cache | None) -> tuple[Spans | None, Raster | None]:
    """Where a telescope is searchable, and its mask as one raster."""
    if not telescope.mask:
        return telescope.searchable, None
    mask = AnyOf(tuple(telescope.mask))
    raster = keep_raster(
        cache, "mask", lambda: (mask, _MASK_ORDER), lambda: rasterise_shape(mask, _MASK_ORDER)
    )
    return telescope.searchable, raster


def clip_raster(raster: Raster, clip: tuple[Spans | None, Raster | None]) -> Raster:
    """Apply a telescope's searchable region and mask to all its footprints."""
    searchable, mask = clip
    centre, inner, outer = raster.centre, raster.inner, raster.outer
    if searchable is not None:
        centre, inner, outer = (t.clip(searchable) for t in (centre, inner, outer))
    if mask is not None:
        # What the mask possibly takes is not certainly covered, and the reverse.
        centre = centre.clip(mask.centre.region(0).complement())
        inner = inner.clip(mask.outer.region(0).complement())
        outer = outer.clip(mask.inner.region(0).complement())
    return Raster(centre, inner, outer, raster.order)
