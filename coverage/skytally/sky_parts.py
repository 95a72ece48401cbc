"""Where the charts look: the parts of the region that holds most, and a window for each."""

from __future__ import annotations

from dataclasses import dataclass

import astropy.units as u
import numpy as np
from astropy_healpix import healpix_to_lonlat, neighbours
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from skytally.figure_style import WIDTH_IN
from skytally.projection import Window, zoom_window
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Ints, cell_to_span

__all__ = [
    "LEAST_PART",
    "ZOOM_GAP",
    "ZOOM_LEFT",
    "Part",
    "Zoom",
    "credible_parts",
    "middle_ra",
    "span_middle",
    "zooms",
]

Floats = NDArray[np.float64]

_PART_ORDER = 5
# A part of the credible region that holds less than this is no chart of its own.
LEAST_PART = 0.05
# Room for labels left of the first chart and between two, inches.
ZOOM_LEFT, ZOOM_GAP, _ZOOM_RIGHT = 0.42, 0.5, 0.06
# Of two charts neither is narrower than this part of both, nor lower or taller than these inches.
_NARROWEST, _LOWEST, _TALLEST = 0.36, 2.4, 4.0


@dataclass(frozen=True, eq=False)
class Part:
    """A connected part of a credible region.

    Attributes
    ----------
    probability : float
        What it holds, as a fraction of the map.
    lonlat_deg : float64 array, shape (n, 2)
        Directions spread over it, degrees.
    """

    probability: float
    lonlat_deg: Floats


@dataclass(frozen=True, eq=False)
class Zoom:
    """A chart of one part of the credible region.

    Attributes
    ----------
    part : Part
        What it shows.
    window : Window
        Equal-area, about the part's own centre.
    width_in : float
        Width of the chart, inches.
    """

    part: Part
    window: Window
    width_in: float

    @property
    def height_in(self) -> float:
        """Height of the chart, inches."""
        return self.width_in * self.window.aspect


def zooms(skymap: SkyMap, level: float = 0.9) -> list[Zoom]:
    """Return a chart of the credible region, or two of one height where it has two parts.

    Only the two most probable parts are looked at, the second if it holds some
    probability and the first one's chart does not show it anyway.
    """
    first, *others = credible_parts(skymap, level)
    room = WIDTH_IN - ZOOM_LEFT - _ZOOM_RIGHT
    alone = Zoom(first, zoom_window(first.lonlat_deg, aspects=(0.45, 0.7)), room)
    if (
        not others
        or others[0].probability < LEAST_PART
        or alone.window.shows(others[0].lonlat_deg).all()
    ):
        return [alone]
    parts = [first, others[0]]
    natural = [zoom_window(part.lonlat_deg, aspects=(0.5, 1.6)) for part in parts]
    extents = [window.right - window.left for window in natural]
    share = min(max(extents[0] / sum(extents), _NARROWEST), 1 - _NARROWEST)
    widths = [(room - ZOOM_GAP) * part for part in (share, 1 - share)]
    wanted = max(width * window.aspect for width, window in zip(widths, natural))
    height = min(max(wanted, _LOWEST), _TALLEST)
    return [
        Zoom(part, zoom_window(part.lonlat_deg, aspects=(height / width, height / width)), width)
        for part, width in zip(parts, widths)
    ]


def credible_parts(skymap: SkyMap, level: float = 0.9) -> list[Part]:
    """Split a credible region into connected parts, the most probable first.

    Parts are told apart on cells of order 5 (1.8 degrees): what lies closer is one.
    """
    inside = skymap.restricted(level)
    shift = 2 * (LINE_ORDER - _PART_ORDER)
    # A span of a coarse cell holds several cells of this order; a fine one less than one.
    first, last = inside.starts >> shift, (inside.stops - 1) >> shift
    count = last - first + 1
    cell = np.repeat(first, count) + (
        np.arange(count.sum()) - np.repeat(np.cumsum(count) - count, count)
    )
    cells, row = np.unique(cell, return_inverse=True)
    held = np.bincount(row, np.repeat(inside.amount / count, count), cells.size)
    number = _components(cells)
    parts = []
    for part in range(number.max() + 1):
        mine = number == part
        parts.append(
            Part(float(held[mine].sum()), _directions(inside.starts, inside.stops, cells[mine]))
        )
    return sorted(parts, key=lambda p: -p.probability)


def _components(cells: Ints) -> NDArray[np.int64]:
    """Number the connected groups of cells of the part order, corners included."""
    # Where a cell has no neighbour at a corner, the library says −1 with a warning.
    with np.errstate(invalid="ignore"):
        beside = np.asarray(neighbours(cells, 1 << _PART_ORDER, order="nested"))
    place = np.searchsorted(cells, beside).clip(max=cells.size - 1)
    row, column = np.nonzero((cells[place] == beside).T)
    graph = coo_array(
        (np.ones(row.size), (row, place.T[row, column])), shape=(cells.size, cells.size)
    )
    return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)


def span_middle(starts: Ints, stops: Ints) -> Ints:
    """Return a position near the middle of each span: of a cell its centre.

    The last of the four children of a cell begins there, half way along the line is
    an edge.
    """
    return starts + (stops - starts) // 4 * 3


def _directions(starts: Ints, stops: Ints, cells: Ints) -> Floats:
    """Spread at most a few thousand directions over the spans within given cells."""
    middle = span_middle(starts, stops)
    mine = np.isin(middle >> 2 * (LINE_ORDER - _PART_ORDER), cells)
    chosen = middle[mine] if mine.any() else span_middle(*cell_to_span(_PART_ORDER, cells))
    chosen = chosen[:: max(1, chosen.size // 4000)]
    lon, lat = healpix_to_lonlat(chosen, 1 << LINE_ORDER, order="nested")
    return np.stack((lon.to_value(u.deg), lat.to_value(u.deg)), axis=1)


def middle_ra(part: Part) -> float:
    """Return the right ascension, a whole multiple of two hours, that centres a part."""
    lon = np.radians(part.lonlat_deg[:, 0])
    return (
        float(30 * round(np.degrees(np.arctan2(np.sin(lon).sum(), np.cos(lon).sum())) / 30)) % 360
    )
