"""The patchwork laid over one map's cells and the dust: where the third dimension is counted.

What an exposure could have seen along a direction is decided by three things: the
set of exposures that looked there, the map cell (its distance distribution) and
the dust in front. Covered sky is cut where any of them changes, and pieces that
share all three are one row.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.dust import Dust
from skytally.grouping import expand_ranges, sum_by
from skytally.patchwork import Patchwork
from skytally.skymap import SkyMap
from skytally.spans import UNIT_SR, Ints

__all__ = ["Overlay"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Overlay:
    """Covered sky by place and map cell; a place is a set of footprints behind one dust cell.

    Attributes
    ----------
    place, cell : int64 arrays, shape (rows,)
        Place, and cell of the map (−1 where the map has none), sorted.
    probability, solid_angle_sr : float64 arrays, shape (rows,)
        What the row holds.
    place_set : int64 array, shape (places,)
        Set of the patchwork of each place, not decreasing.
    place_ebv : float64 array, shape (places,)
        E(B−V) in magnitudes, NaN without a dust map.
    """

    place: Ints
    cell: Ints
    probability: Floats
    solid_angle_sr: Floats
    place_set: Ints
    place_ebv: Floats

    @classmethod
    def build(cls, patchwork: Patchwork, skymap: SkyMap, dust: Dust | None) -> Overlay:
        """Lay a patchwork over a map and, if there is one, a dust map."""
        cuts = [skymap.starts, skymap.stops]
        if dust is not None:
            cuts += [dust.starts, dust.stops]
        starts, stops, group = _cut(patchwork, np.unique(np.concatenate(cuts)))
        cell = _cell_at(skymap.starts, skymap.stops, starts)
        behind = np.zeros(starts.size, dtype=np.int64)
        if dust is not None:
            behind = _cell_at(dust.starts, dust.stops, starts) + 1
        clouds = int(behind.max(initial=0)) + 1
        place_key, place = np.unique(group * clouds + behind, return_inverse=True)
        cells = skymap.starts.size + 1
        row_key, row = np.unique(place * cells + cell + 1, return_inverse=True)
        solid = sum_by(row, (stops - starts).astype(np.float64) * UNIT_SR, row_key.size)
        row_place, row_cell = np.divmod(row_key, cells)
        row_cell -= 1
        density = np.where(row_cell >= 0, skymap.density_per_sr[row_cell], 0.0)
        place_set, place_behind = np.divmod(place_key, clouds)
        ebv = np.full(place_set.size, np.nan)
        if dust is not None:
            ebv = np.where(place_behind > 0, dust.ebv[place_behind - 1], np.nan)
        return cls(row_place, row_cell, density * solid, solid, place_set, ebv)

    @property
    def places(self) -> int:
        """Number of places."""
        return self.place_set.size


def _cut(patchwork: Patchwork, edges: Ints) -> tuple[Ints, Ints, Ints]:
    """Cut patches at edges; return starts, stops and set of the pieces."""
    first = np.searchsorted(edges, patchwork.starts, side="right")
    last = np.searchsorted(edges, patchwork.stops, side="left")
    row, position = expand_ranges(first - 1, last - first + 1)
    if row.size == 0:
        return patchwork.starts, patchwork.stops, patchwork.group
    begin = np.flatnonzero(np.diff(row, prepend=-1))
    starts = edges[np.maximum(position, 0)]
    starts[begin] = patchwork.starts[row[begin]]
    stops = np.append(starts[1:], 0)
    end = np.append(begin[1:], row.size) - 1
    stops[end] = patchwork.stops[row[end]]
    return starts, stops, patchwork.group[row]


def _cell_at(starts: Ints, stops: Ints, position: Ints) -> Ints:
    """Cell that holds each position, −1 for none."""
    cell = np.searchsorted(starts, position, side="right") - 1
    inside = (cell >= 0) & (position < stops[np.maximum(cell, 0)])
    return np.where(inside, cell, -1)
