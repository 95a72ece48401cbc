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
from scipy.sparse import csr_array

from skytally.dust import Dust
from skytally.grouping import AnyInts, sum_by, sum_pairs, tell_apart
from skytally.patchwork import CutPatchwork
from skytally.skymap import SkyMap
from skytally.spans import Ints

__all__ = ["Overlay", "Places"]

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Places:
    """Places of covered sky: each is one set of footprints behind one cell of the dust.

    Attributes
    ----------
    cut : CutPatchwork
        Cut at the edges of the dust, and of the maps that are to be laid over it.
    place : int64 array, shape (rows,)
        Place of each row of the cut patchwork.
    place_set : int64 array, shape (places,)
        Set of the patchwork of each place, not decreasing.
    place_cloud : int64 array, shape (places,)
        Cell of the dust map in front; −1 for none.
    place_ebv : float64 array, shape (places,)
        E(B−V) in magnitudes, NaN without a dust map or in a hole of it.
    """

    cut: CutPatchwork
    place: Ints
    place_set: Ints
    place_cloud: Ints
    place_ebv: Floats

    @classmethod
    def of(cls, cut: CutPatchwork, dust: Dust | None) -> Places:
        """Tell the places of a patchwork apart."""
        if dust is None:
            none = np.full(cut.sets, -1)
            return cls(cut, cut.group, np.arange(cut.sets), none, np.full(cut.sets, np.nan))
        cloud = cut.span_of(dust)[cut.interval]
        clouds = dust.starts.size + 1
        first, place = tell_apart((cut.group * clouds + cloud + 1).astype(np.uint64))
        front = cloud[first]
        return cls(cut, place, cut.group[first], front, np.append(dust.ebv, np.nan)[front])

    def __len__(self) -> int:
        return self.place_set.size

    def over(self, skymap: SkyMap) -> Overlay:
        """Lay the places over a map at whose edges, too, the patchwork was cut."""
        cells = skymap.starts.size + 1
        cell = self.cut.span_of(skymap)[self.cut.interval] + 1
        solid = self.cut.solid_angle_sr
        cell, place, solid = sum_pairs(cell, self.place, solid, cells, len(self))
        return Overlay.of(skymap, place, cell - 1, solid, len(self))

    def cells(self, skymap: SkyMap) -> Ints:
        """Cells of such a map that are covered, rising; −1 first where some lie off the map."""
        covered = np.zeros(skymap.starts.size + 1, dtype=bool)
        covered[self.cut.span_of(skymap)[self.cut.interval] + 1] = True
        return np.flatnonzero(covered) - 1


@dataclass(frozen=True, eq=False)
class Overlay:
    """Covered sky by place and map cell.

    Attributes
    ----------
    skymap : SkyMap
        The map.
    place, cell : int32 arrays, shape (rows,)
        Place, and cell of the map (−1 where the map has none), each pair once.
    solid_angle_sr : float64 array, shape (rows,)
        Size of each row.
    places : int
        Number of places.
    """

    skymap: SkyMap
    place: NDArray[np.int32]
    cell: NDArray[np.int32]
    solid_angle_sr: Floats
    places: int

    @classmethod
    def of(
        cls, skymap: SkyMap, place: AnyInts, cell: AnyInts, solid_angle_sr: Floats, places: int
    ) -> Overlay:
        """Keep the numbers of places and cells small."""
        return cls(skymap, place.astype(np.int32), cell.astype(np.int32), solid_angle_sr, places)

    @property
    def probability(self) -> Floats:
        """Probability in each row, shape (rows,)."""
        found = np.append(self.skymap.density_per_sr, 0.0)[self.cell]
        found *= self.solid_angle_sr
        return found

    def joined(self, number: AnyInts, count: int) -> Overlay:
        """Join places: ``number``, shape (places,), is the new place of each, −1 for none.

        Rows are by place, then cell, if they were by cell, as `Places.over` gives them.
        """
        place = number[self.place]
        some = place >= 0
        cells = self.skymap.starts.size + 1
        place, cell, solid = sum_pairs(
            place[some], self.cell[some] + 1, self.solid_angle_sr[some], count, cells
        )
        return Overlay.of(self.skymap, place, cell - 1, solid, count)

    def by_place(self, amount: Floats) -> Floats:
        """Sum amounts, shape (rows,), over each place."""
        return sum_by(self.place, amount, self.places)

    def table(self, cells: Ints) -> csr_array:
        """Probability as a sparse table, shape (places, cells), rows being by place."""
        column = np.empty(self.skymap.starts.size + 1, dtype=np.int32)
        column[cells] = np.arange(cells.size)
        offsets = np.searchsorted(self.place, np.arange(self.places + 1))
        shape = self.places, cells.size
        return csr_array(
            (self.probability, column[self.cell], offsets.astype(np.int32)), shape=shape
        )
