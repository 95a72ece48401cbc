"""How deep footprints are rasterised, so that totals meet their error target.

The exact solid angle of every footprint is known in closed form, so the error of
the centre rule can be measured rather than trusted: footprints start at the order
where its standard error suffices, and those groups whose measured error is still
too large go deeper.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.grouping import sum_by
from skytally.raster import (
    Pieces,
    Raster,
    cell_width_rad,
    rasterise,
    rasterise_shape,
    stack_rasters,
)
from skytally.shapes import Shape
from skytally.spans import Ints, SpanTable

__all__ = ["ORDER_CAP", "ORDER_FLOOR", "rasterise_shape_to_target", "rasterise_to_target"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

ORDER_FLOOR, ORDER_CAP = 10, 20
# Relative error allowed in area, half of what DESIGN section 8 grants: of one
# footprint, and of a group that is a row of its own.
_ONE_FOOTPRINT, _ONE_ROW = 0.005, 0.0005
# Standard error of an edge's strip per cell width and length, edges along HEALPix
# rings: rows are 0.65 to 0.77 cell widths apart, and uniform offsets of such
# rows have a standard deviation of 0.29 of that.
_EDGE_ERROR = 0.25
# The same as a share of the undecided cells, about 7.5 cell widths for each of edge.
_STRIP_ERROR = 0.06
# No shape of unknown area stays coarser, for brackets are not refined there.
_SHAPE_FLOOR = 14
# Pieces overlap where their areas exceed the footprint's by more than rounding.
_ROUNDING = 1e-9


@dataclass(frozen=True, eq=False)
class _Model:
    """What is known of each footprint's area and of the centre rule's error in it.

    Attributes
    ----------
    area_sr : float64 array, shape (footprints,)
        Sum of the pieces' exact solid angles.
    relative : float64 array, shape (footprints,)
        Relative standard error of the area per radian of cell width.
    place : int64 array, shape (footprints,)
        Number of the spot that a footprint lies on; footprints of one spot
        share their errors and do not average.
    """

    area_sr: Floats
    relative: Floats
    place: Ints

    @classmethod
    def of(cls, pieces: Pieces, owners: int) -> _Model:
        area = sum_by(pieces.owner, pieces.area_sr, owners)
        edge2 = sum_by(pieces.owner, pieces.edge_rad2, owners)
        # Detectors of one camera lie along common lines: half correlated.
        number = np.bincount(pieces.owner, minlength=owners)
        relative = _EDGE_ERROR * np.sqrt(edge2) * number**0.25 / area
        middle = np.stack(
            [sum_by(pieces.owner, pieces.middle[:, axis], owners) for axis in range(3)], axis=1
        )
        middle /= np.linalg.norm(middle, axis=1, keepdims=True)
        spot = np.floor(middle / np.sqrt(np.median(area))).astype(np.int64)
        place = np.unique(spot, axis=0, return_inverse=True)[1].ravel()
        return cls(area, relative, place.astype(np.int64))


def rasterise_to_target(pieces: Pieces, owners: int, groups: Sequence[Ints]) -> Raster:
    """Rasterise footprints, each as deep as its error target asks.

    Parameters
    ----------
    pieces : Pieces
        Convex pieces with owners in [0, owners), not decreasing, each owner at
        least once.
    owners : int
        Number of footprints.
    groups : sequence of int64 arrays
        Footprints (repeats allowed) whose total must be right as well.

    Returns
    -------
    Raster
        With ``order`` telling how deep each footprint went.
    """
    if owners == 0:
        return stack_rasters([])
    model = _Model.of(pieces, owners)
    groups = [np.unique(group) for group in groups if group.size]
    order = _model_orders(model, groups, sigmas=1.0)
    safe = _model_orders(model, groups, sigmas=3.0)
    raster = _at_orders(pieces, order)
    several = np.bincount(pieces.owner, minlength=owners) > 1
    while True:
        area = raster.centre.area_sr()
        summed = area.copy()
        failing = _failing(model, groups, summed / model.area_sr - 1)
        # Where pieces overlap the union is smaller than their sum, at any order.
        asked = np.flatnonzero(failing & several)
        if asked.size:
            summed[asked] = _summed_sr(pieces, order, asked)
            failing = _failing(model, groups, summed / model.area_sr - 1)
        overlapping = summed > area * (1 + _ROUNDING)
        # There the measured error is not all of the union's, so its standard error must do.
        deeper = np.maximum(order + failing, np.where(overlapping, safe, 0))
        again = np.flatnonzero(np.minimum(deeper, ORDER_CAP) > order)
        if again.size == 0:
            return raster
        order[again] = np.minimum(deeper[again], ORDER_CAP)
        part = _of_owners(pieces, again)
        pick = np.arange(owners)
        pick[again] = owners + np.arange(again.size)
        raster = stack_rasters([raster, _at_orders(part, order[again])]).take(pick)


def _of_owners(pieces: Pieces, owners: Ints) -> Pieces:
    """Pieces of the owners named, rising, which are renumbered from 0."""
    chosen = np.isin(pieces.owner, owners)
    return pieces.take(chosen, np.searchsorted(owners, pieces.owner[chosen]))


def _summed_sr(pieces: Pieces, order: Ints, owners: Ints) -> Floats:
    """Solid angle of the owners' pieces by the centre rule, each by itself, then summed."""
    part = _of_owners(pieces, owners)
    everything = np.arange(len(part))
    alone = _at_orders(part.take(everything, everything), order[owners][part.owner])
    return sum_by(part.owner, alone.centre.area_sr(), owners.size)


def _model_orders(model: _Model, groups: Sequence[Ints], sigmas: float) -> Ints:
    """Order at which so many standard errors fit into the targets, (footprints,)."""
    width = 2 * _ONE_FOOTPRINT / sigmas / model.relative
    for group in groups:
        spread = _spread(model, group, model.relative)
        width[group] = np.minimum(width[group], 2 * _ONE_ROW / sigmas / spread)
    order = np.ceil(np.log2(cell_width_rad(0) / width)).astype(np.int64)
    return np.clip(order, ORDER_FLOOR, ORDER_CAP)


def _spread(model: _Model, group: Ints, error: Floats) -> float:
    """Error of a group's union from its footprints' errors: it averages over places only."""
    places = np.unique(model.place[group]).size
    return float(np.sqrt(np.mean(error[group] ** 2) / places))


def _failing(model: _Model, groups: Sequence[Ints], error: Floats) -> Bools:
    """Tell which footprints must go deeper for their own or a group's measured error."""
    failing = np.abs(error) > _ONE_FOOTPRINT
    for group in groups:
        area = model.area_sr[group]
        total = abs(float(np.sum(error[group] * area))) / float(np.sum(area))
        if max(total, _spread(model, group, error)) > _ONE_ROW:
            failing[group] = True
    return failing


def _at_orders(pieces: Pieces, order: Ints) -> Raster:
    """Rasterise footprints, each at the order given for it."""
    parts, owners = [], []
    for level in np.unique(order):
        mine = np.flatnonzero(order == level)
        parts.append(rasterise(_of_owners(pieces, mine), mine.size, int(level)))
        owners.append(mine)
    return stack_rasters(parts).take(np.argsort(np.concatenate(owners)))


def rasterise_shape_to_target(shape: Shape, companions: int) -> Raster:
    """Rasterise a shape whose exact solid angle is not known: an intersection, a complement.

    There is no error to measure, so three standard errors must fit into what is
    allowed. Each step descends only the cells that the one before left undecided.

    Parameters
    ----------
    shape : Shape
        Any.
    companions : int
        Footprints, itself included, over which its error averages in the
        smallest row that it belongs to.

    Returns
    -------
    Raster
        Of one owner.
    """
    allowed = 2 * min(_ONE_FOOTPRINT, _ONE_ROW * float(np.sqrt(companions)))
    order = _SHAPE_FLOOR
    raster = rasterise_shape(shape, order)
    while order < ORDER_CAP:
        kept = raster.inner.region(0)
        undecided = raster.outer.region(0) - kept
        error = 3 * _STRIP_ERROR * undecided.area_sr
        if error <= allowed * float(raster.centre.area_sr()[0]):
            break
        order += 1
        deeper = rasterise_shape(shape, order, within=undecided)
        centre, inner, outer = (
            SpanTable.from_regions([kept | (table.region(0) & undecided)])
            for table in (deeper.centre, deeper.inner, deeper.outer)
        )
        raster = Raster(centre, inner, outer, deeper.order)
    return raster
