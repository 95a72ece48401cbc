"""What is left: a map version after what would have been seen is taken away."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from skytally.campaign import LoadedCampaign
from skytally.cosmology import Cosmology
from skytally.covered import Coverage
from skytally.distance import moments, parameters_from_moments
from skytally.dust import Dust
from skytally.grouping import expand_ranges, sum_by
from skytally.limits import Scene
from skytally.overlay import Overlay, Places
from skytally.patchwork import edges_of
from skytally.reach import Visits
from skytally.seen import DetectionCurve, SeenSource, detection_nodes
from skytally.skymap import DistanceLayer, SkyMap
from skytally.sources import Source
from skytally.space import Space, blocks
from skytally.spans import LINE_ORDER, UNIT_SR, Ints

__all__ = ["LeftOver", "left_over", "left_overs"]

Floats = NDArray[np.float64]

# Cells that are covered in part are cut to this order, and no finer: a cell of it
# is 3.4 arcmin wide, below any structure that a search would be planned for.
_DETAIL_ORDER = 10
# The distance distribution's mean is more than √3 standard deviations, whatever
# its parameters; a little above, they are of a moderate size.
_LEAST_MEAN_PER_SD = 1.74


@dataclass(frozen=True, eq=False)
class LeftOver:
    """A map version without what would have been seen.

    Attributes
    ----------
    skymap : SkyMap
        Normalised to one.
    remaining : float
        The chance that the source is still out there unseen: the fraction of
        all the map's probability that is left.
    """

    skymap: SkyMap
    remaining: float


def left_over(
    coverage: Coverage,
    skymap: SkyMap,
    source: Source | None,
    event_mjd: float,
    cosmology: Cosmology,
    dust: Dust | None,
    coefficients: Mapping[str, float],
) -> LeftOver | None:
    """Multiply a map by the probability of not having been seen.

    Parameters
    ----------
    coverage : Coverage
        What was observed.
    skymap : SkyMap
        The map version; sums are conserved, averaged over cells of order 10
        where a cell was covered in part.
    source : Source or None
        What was looked for; None takes away whatever was covered, at every
        distance. A map without distances leaves no other choice.

    Returns
    -------
    LeftOver or None
        None for a source on a map without distances.
    """
    fine = _refined(skymap, coverage)
    if source is None:
        return _without_covered(fine, coverage)
    scene = _scene(fine, coverage, cosmology, dust, coefficients)
    return None if scene is None else _without_seen(scene, source, event_mjd)


def left_overs(
    campaign: LoadedCampaign, coverage: Coverage, skymap: SkyMap
) -> dict[str | None, LeftOver]:
    """Take away what was covered, under None, and what each source would have shown of itself.

    Sources are left out where the map has no distances.
    """
    fine = _refined(skymap, coverage)
    found: dict[str | None, LeftOver] = {None: _without_covered(fine, coverage)}
    if campaign.sources:
        cosmology = Cosmology.named(campaign.settings.cosmology)
        dust = campaign.dust, campaign.extinction_coefficients
        scene = _scene(fine, coverage, cosmology, *dust)
        if scene is not None:
            for source in campaign.sources:
                found[source.name] = _without_seen(scene, source, campaign.event_mjd)
    return found


def _scene(
    skymap: SkyMap,
    coverage: Coverage,
    cosmology: Cosmology,
    dust: Dust | None,
    coefficients: Mapping[str, float],
) -> Scene | None:
    """Lay a map under what was covered; None if it has no distances."""
    space = Space.of(skymap, cosmology)
    if space is None:
        return None
    edges = edges_of(skymap) if dust is None else edges_of(skymap, dust)
    places = Places.of(coverage.centre.cut(edges), dust)
    visits = Visits.of(coverage.centre, places, coverage.observations, coefficients)
    return Scene.of(space, visits)


def _refined(skymap: SkyMap, coverage: Coverage) -> SkyMap:
    """Cut the cells that are covered in part to the detail order."""
    length = skymap.stops - skymap.starts
    covered = _covered_length(skymap, coverage)
    part = (covered > 0) & (covered < length)
    step = np.int64(1) << (2 * (LINE_ORDER - _DETAIL_ORDER))
    count = np.where(part, np.maximum(length // step, 1), 1)
    row, number = expand_ranges(np.zeros_like(count), count)
    width = length[row] // count[row]
    starts = skymap.starts[row] + number * width
    layer = skymap.distance
    if layer is not None:
        layer = replace(
            layer,
            mu_mpc=layer.mu_mpc[row],
            sigma_mpc=layer.sigma_mpc[row],
            norm_per_mpc2=layer.norm_per_mpc2[row],
        )
    return replace(
        skymap,
        starts=starts,
        stops=starts + width,
        density_per_sr=skymap.density_per_sr[row],
        order_max=max(skymap.order_max, _DETAIL_ORDER),
        distance=layer,
    )


def _covered_length(skymap: SkyMap, coverage: Coverage) -> Ints:
    """Order-29 cells inside each map cell that are covered; (cells,)."""
    starts, stops = coverage.centre.starts, coverage.centre.stops
    before = np.concatenate(([0], np.cumsum(stops - starts)))

    def until(position: Ints) -> Ints:
        patch = np.searchsorted(starts, position, side="right")
        left = np.append(0, stops)[patch] - position
        return np.asarray(before[patch] - np.maximum(left, 0))

    return until(skymap.stops) - until(skymap.starts)


def _without_covered(skymap: SkyMap, coverage: Coverage) -> LeftOver:
    share = 1.0 - _covered_length(skymap, coverage) / (skymap.stops - skymap.starts)
    return _normalised(skymap, skymap.density_per_sr * share, skymap.distance)


def _without_seen(scene: Scene, source: Source, event_mjd: float) -> LeftOver:
    seen = SeenSource.of(source, scene.visits, event_mjd, scene.space.cosmology)
    overlay = scene.overlay.joined(np.arange(scene.overlay.places), scene.overlay.places)
    taken = _taken_by_reach if seen.is_step else _taken_by_curve
    rows = taken(scene.space, overlay, seen) * overlay.probability
    cells = scene.space.known.size + 1
    return _rebuilt(scene.space, *(sum_by(overlay.cell + 1, part, cells)[1:] for part in rows))


def _taken_by_reach(space: Space, overlay: Overlay, seen: SeenSource) -> Floats:
    """Integrals of p, r p and r² p out to the reach of each row of the overlay; (3, rows)."""
    reach = seen.reach_at(seen.visits.seen)[overlay.place]
    taken = np.zeros((3, reach.size))
    for block in blocks(reach.size):
        distances = space.distances.take(overlay.cell[block])
        taken[:, block] = distances.moments_beyond(np.zeros(1))
        taken[:, block] -= distances.moments_beyond(reach[block])
    return taken


def _taken_by_curve(space: Space, overlay: Overlay, seen: SeenSource) -> Floats:
    """The same over a detection curve."""
    curve = DetectionCurve(seen, detection_nodes(seen, [space]))
    taken = np.zeros((3, overlay.cell.size))
    for some in curve.blocks(seen.visits.seen):
        share = curve.shares(seen.visits.seen.part(some))
        rows = slice(*np.searchsorted(overlay.place, (some.start, some.stop)))
        distances = space.distances.take(overlay.cell[rows])
        place = overlay.place[rows] - some.start
        before = distances.moments_beyond(np.zeros(1))
        for number, node in enumerate(curve.nodes):
            after = distances.moments_beyond(node)
            taken[:, rows] += (before - after) * share[place, number]
            before = after
    return taken


def _rebuilt(space: Space, taken: Floats, first: Floats, second: Floats) -> LeftOver:
    """Take the seen part from each cell and refit its distance to the moments that are left."""
    skymap = space.skymap
    layer = skymap.distance
    assert layer is not None  # the space was made from it
    held = space.probability
    left = np.maximum(held - taken, 0.0)
    left[left < 1e-12 * held] = 0.0
    touched = np.flatnonzero((taken > 0) & (left > 0))
    mean, sd = moments(space.mu_mpc[touched], space.sigma_mpc[touched])
    mean_left = (held[touched] * mean - first[touched]) / left[touched]
    square_left = (held[touched] * (mean**2 + sd**2) - second[touched]) / left[touched]
    spread = np.sqrt(np.maximum(square_left - mean_left**2, 0.0))
    # What is left may be narrower or, with two heaps, wider than the form can be;
    # then its mean is kept, and a spread that the form has.
    spread = np.clip(spread, 1e-3 * mean_left, mean_left / _LEAST_MEAN_PER_SD)
    mu, sigma, norm = (a.copy() for a in (layer.mu_mpc, layer.sigma_mpc, layer.norm_per_mpc2))
    mu[touched], sigma[touched], norm[touched] = parameters_from_moments(mean_left, spread)
    size = (skymap.stops - skymap.starts) * UNIT_SR
    return _normalised(skymap, left / size, DistanceLayer(mu, sigma, norm))


def _normalised(skymap: SkyMap, density: Floats, layer: DistanceLayer | None) -> LeftOver:
    size = (skymap.stops - skymap.starts) * UNIT_SR
    remaining = float(np.sum(density * size))
    keep: Ints = np.flatnonzero(density > 0)
    if layer is not None:
        layer = DistanceLayer(layer.mu_mpc[keep], layer.sigma_mpc[keep], layer.norm_per_mpc2[keep])
    rest = replace(
        skymap,
        starts=skymap.starts[keep],
        stops=skymap.stops[keep],
        density_per_sr=density[keep] / remaining if remaining > 0 else density[keep],
        distance=layer,
        label=f"{skymap.label}, left over",
        path=None,
        sha256=None,
        notes=(),
        file_sum=None,
    )
    return LeftOver(rest, remaining)
