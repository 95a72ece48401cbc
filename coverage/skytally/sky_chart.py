"""Charts of the sky, painted sample by sample from the spans behind the numbers.

Every sample of a chart is a direction, every direction a position on the line,
and there the map version and the regions are asked what they hold: a chart
cannot show what was not counted.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import astropy.units as u
import numpy as np
from astropy_healpix import healpix_to_lonlat, neighbours
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Ellipse, Rectangle
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from skytally.figure_style import (
    ACCENT,
    GREY,
    INK,
    RULE,
    WIDTH_IN,
    new_figure,
    short_label,
    style_of,
    swatch,
)
from skytally.projection import (
    MOLLWEIDE_X,
    MOLLWEIDE_Y,
    GraticuleLine,
    Window,
    galactic_plane,
    graticule,
    whole_sky_window,
    zoom_window,
)
from skytally.results import Results
from skytally.sky_picture import TAIL, Layer, paint_sky, ramp_key
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Ints, Spans
from skytally.wording import percent

__all__ = [
    "LEAST_PART",
    "Part",
    "credible_parts",
    "versions_figure",
    "versions_height",
    "whole_sky_figure",
    "whole_sky_height",
    "zoom_figure",
    "zoom_height",
]

Floats = NDArray[np.float64]

# Samples per inch: twice what a screen shows, so that print is clean as well.
_SAMPLES_PER_INCH = 192
# More outlines than this are left to the sampled mask.
_MOST_RINGS = 3000
# The frame of a zoom narrower than this is drawn on the whole sky.
_SMALL_ZOOM_DEG = 40.0
_PART_ORDER = 5
# A part of the credible region that holds less than this is no chart of its own.
LEAST_PART = 0.15
_ZOOM_LEFT, _ZOOM_GAP, _ZOOM_HEAD, _ZOOM_FOOT = 0.42, 0.5, 0.06, 0.36
_KEY_ROW_IN = 0.19
_KEY_COLUMNS = 5


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


def _directions(starts: Ints, stops: Ints, cells: Ints) -> Floats:
    """Spread at most a few thousand directions over the spans within given cells."""
    middle = starts + (stops - starts) // 2
    mine = np.isin(middle >> 2 * (LINE_ORDER - _PART_ORDER), cells)
    if mine.any():
        chosen = middle[mine]
    else:
        chosen = (cells << 2 * (LINE_ORDER - _PART_ORDER)) + (
            np.int64(1) << 2 * (LINE_ORDER - _PART_ORDER) - 1
        )
    chosen = chosen[:: max(1, chosen.size // 4000)]
    lon, lat = healpix_to_lonlat(chosen, 1 << LINE_ORDER, order="nested")
    return np.stack((lon.to_value(u.deg), lat.to_value(u.deg)), axis=1)


def whole_sky_height(results: Results) -> float:
    """Return the height of `whole_sky_figure`, inches."""
    return WIDTH_IN * whole_sky_window(0.0).aspect + _key_height(len(_shown(results)))


def whole_sky_figure(results: Results, parts: Sequence[Part]) -> Figure:
    """Draw the newest map version and all footprints on the whole sky.

    ``parts`` are those of the zoom: where it is small, their frames are drawn in.
    """
    skymap = results.sky.maps[-1]
    window = whole_sky_window(_middle_ra(parts[0]))
    shown = _shown(results)
    key = _key_height(len(shown))
    total, height = whole_sky_height(results), WIDTH_IN * window.aspect
    figure = new_figure(total)
    axes = figure.add_axes((0, key / total, 1, height / total))
    samples = _samples(window, WIDTH_IN)
    _paint(axes, window, paint_sky(samples, skymap, _by_telescope(results)))
    _whole_sky_frame(axes, window, labels=True)
    _outlines(axes, window, results, 0.3)
    _contours(axes, window, skymap, samples, labels=True)
    for zoom in _zoom_windows(parts):
        if zoom.right - zoom.left < _SMALL_ZOOM_DEG:
            frame = window.lines([zoom.unproject(zoom.corners)])
            axes.plot(*frame.T, color=INK, lw=0.5, zorder=6)
    _draw_key(figure, results, shown, key)
    return figure


def zoom_height(results: Results, parts: Sequence[Part]) -> float:
    """Return the height of `zoom_figure`, inches."""
    tallest = _zoom_width(len(parts)) * max(window.aspect for window in _zoom_windows(parts))
    return _ZOOM_HEAD + tallest + _ZOOM_FOOT + _key_height(len(_shown(results)))


def zoom_figure(results: Results, parts: Sequence[Part]) -> Figure:
    """Draw one or two parts of the newest version's 90 % region, side by side."""
    skymap = results.sky.maps[-1]
    shown = _shown(results)
    key, height, width = (
        _key_height(len(shown)),
        zoom_height(results, parts),
        _zoom_width(len(parts)),
    )
    figure = new_figure(height)
    for place, window in enumerate(_zoom_windows(parts)):
        own = width * window.aspect
        axes = figure.add_axes(
            (
                (_ZOOM_LEFT + place * (width + _ZOOM_GAP)) / WIDTH_IN,
                1 - (_ZOOM_HEAD + own) / height,
                width / WIDTH_IN,
                own / height,
            )
        )
        samples = _samples(window, width)
        _paint(axes, window, paint_sky(samples, skymap, _by_telescope(results)))
        _zoom_frame(axes, window)
        _outlines(axes, window, results, 0.6)
        _contours(axes, window, skymap, samples, labels=True)
        _scale_bar(axes, window)
    _draw_key(figure, results, shown, key)
    return figure


def _zoom_width(number: int) -> float:
    """Return the width of each of so many charts side by side, inches."""
    return (WIDTH_IN - _ZOOM_LEFT - 0.06 - _ZOOM_GAP * (number - 1)) / number


def _zoom_windows(parts: Sequence[Part]) -> list[Window]:
    aspects = (0.45, 0.7) if len(parts) == 1 else (0.7, 1.25)
    return [zoom_window(part.lonlat_deg, aspects=aspects) for part in parts]


def versions_height(results: Results) -> float:
    """Return the height of `versions_figure`, inches."""
    columns, width = _versions_grid(results)
    rows = -(-len(results.maps) // columns)
    return rows * (width * whole_sky_window(0.0).aspect + 0.3)


def _versions_grid(results: Results) -> tuple[int, float]:
    """Return the columns of small skies, and the width of each in inches."""
    columns = min(len(results.maps), 3)
    return columns, WIDTH_IN / columns - 0.12


def versions_figure(results: Results, parts: Sequence[Part]) -> Figure:
    """Draw one small sky per map version, with the same footprints on each.

    The most probable of the ``parts`` is turned to the middle.
    """
    window = whole_sky_window(_middle_ra(parts[0]))
    columns, width = _versions_grid(results)
    tall, height = width * window.aspect, versions_height(results)
    samples = _samples(window, width)
    everything = Layer(Spans.empty().union(*results.sky.covered), ACCENT, None)
    figure = new_figure(height)
    for place, (info, skymap) in enumerate(zip(results.maps, results.sky.maps)):
        row, column = divmod(place, columns)
        left = (column + 0.5) / columns - width / WIDTH_IN / 2
        axes = figure.add_axes(
            (left, 1 - (row * (tall + 0.3) + 0.22 + tall) / height, width / WIDTH_IN, tall / height)
        )
        _paint(axes, window, paint_sky(samples, skymap, [everything]))
        _whole_sky_frame(axes, window, labels=False)
        _contours(axes, window, skymap, samples, labels=False)
        probability = results.row(map=info.version).probability
        axes.set_title(
            f"{short_label(info.version)}: {percent(probability)} covered", fontsize=7, pad=4
        )
    return figure


def _shown(results: Results) -> list[int]:
    """Return the telescopes that covered any sky."""
    return [index for index, region in enumerate(results.sky.covered) if region]


def _middle_ra(part: Part) -> float:
    """Return the right ascension, a whole multiple of two hours, that centres a part."""
    lon = np.radians(part.lonlat_deg[:, 0])
    return (
        float(30 * round(np.degrees(np.arctan2(np.sin(lon).sum(), np.cos(lon).sum())) / 30)) % 360
    )


def _by_telescope(results: Results) -> list[Layer]:
    """Return each telescope's region with its colour and hatch."""
    covered, shown = results.sky.covered, _shown(results)
    return [Layer(covered[i], style_of(i).colour, style_of(i).hatch) for i in shown]


def _samples(window: Window, width_in: float) -> Ints:
    """Return the positions on the line that a chart of some width is drawn from."""
    return window.sample(round(width_in * _SAMPLES_PER_INCH))


def _paint(axes: Axes, window: Window, picture: NDArray[np.uint8]) -> None:
    """Lay a picture of the sky over the whole axes."""
    # Bytes, and one composite: the picture compresses to a fraction of a float's.
    axes.imshow(
        picture,
        extent=(window.left, window.right, window.bottom, window.top),
        origin="lower",
        interpolation="none",
        aspect="auto",
        zorder=0,
    )
    axes.set_xlim(window.left, window.right)
    axes.set_ylim(window.bottom, window.top)
    axes.set_xticks([])
    axes.set_yticks([])


def _contours(axes: Axes, window: Window, skymap: SkyMap, position: Ints, *, labels: bool) -> None:
    """Draw the edges of the 50 % and 90 % regions, found from samples of the window."""
    level = skymap.credible_level_at(position)
    level[position < 0] = 1.0
    x, y = window.grid(position.shape[1])
    for edge, width, dashes in ((0.9, 0.7, (3.5, 1.5)), (0.5, 0.9, None)):
        if not (level.min() <= edge < level.max()):
            continue
        drawn = axes.contour(x, y, level, [edge], colors=[INK], linewidths=width, zorder=4)
        if dashes is not None:
            drawn.set_linestyle((0, dashes))
        if labels:
            pieces = drawn.get_paths()[0].to_polygons(closed_only=False)
            _label_contour(axes, window, [np.asarray(piece) for piece in pieces], edge)


def _label_contour(
    axes: Axes, window: Window, pieces: Sequence[NDArray[np.float64]], level: float
) -> None:
    """Write the level on the longest pieces of its contour, the 90 % one at another place.

    A contour too small to carry its label goes without.
    """
    longest = sorted(pieces, key=len, reverse=True)[:2]
    least = 0.1 * (window.right - window.left)
    placed: list[NDArray[np.float64]] = []
    for piece in longest:
        if len(piece) < 12 or np.hypot(*np.ptp(piece, axis=0)) < least:
            continue
        place = piece[int(len(piece) * (0.3 if level > 0.6 else 0.65))]
        inset = 0.03 * (window.right - window.left)
        if not (
            window.left + inset < place[0] < window.right - inset
            and window.bottom + inset < place[1] < window.top - inset
        ):
            place = piece[len(piece) // 2]
        if any(np.hypot(*(place - other)) < 4 * inset for other in placed):
            continue
        placed.append(place)
        axes.text(
            float(place[0]),
            float(place[1]),
            f"{100 * level:.0f} %",
            fontsize=6,
            ha="center",
            va="center",
            clip_on=True,
            zorder=6,
            bbox={
                "boxstyle": "square,pad=0.12",
                "facecolor": "white",
                "edgecolor": "none",
                "alpha": 0.85,
            },
        )


def _outlines(axes: Axes, window: Window, results: Results, width: float) -> None:
    """Draw the outlines as vectors while they are few."""
    if sum(len(rings) for rings in results.sky.outlines) > _MOST_RINGS:
        return
    for index in _shown(results):
        style = style_of(index)
        path = window.lines(results.sky.outlines[index])
        if len(path):
            dashes = style.line if window.code == "ZEA" else "-"
            axes.plot(*path.T, color=style.colour, lw=width, ls=dashes, zorder=3)


def _plot_graticule(axes: Axes, lines: Sequence[GraticuleLine]) -> None:
    for line in lines:
        axes.plot(*line.plane.T, color=GREY, lw=0.35, alpha=0.55, zorder=2)


def _plot_galactic_plane(axes: Axes, window: Window) -> None:
    path = galactic_plane(window)
    if len(path):
        axes.plot(*path.T, color=INK, lw=0.6, ls=(0, (1, 2)), zorder=2)


def _whole_sky_frame(axes: Axes, window: Window, *, labels: bool) -> None:
    """Draw graticule, Galactic plane and rim, and label them."""
    for spine in axes.spines.values():
        spine.set_visible(False)
    axes.patch.set_visible(False)
    lines = graticule(window)
    if labels:
        _plot_graticule(axes, lines)
        _plot_galactic_plane(axes, window)
    rim = Ellipse((0, 0), 2 * MOLLWEIDE_X, 2 * MOLLWEIDE_Y, fill=False, ec=GREY, lw=0.7, zorder=5)
    axes.add_patch(rim)
    if not labels:
        return
    box = {"boxstyle": "square,pad=0.1", "facecolor": "white", "edgecolor": "none", "alpha": 0.75}
    for line in lines:
        if line.is_meridian and line.value_deg % 60 == 0:
            x, y = window.project(np.array([[line.value_deg, 0.0]]))[0]
            if abs(x) < 0.97 * MOLLWEIDE_X:
                axes.text(
                    x,
                    y,
                    line.label,
                    fontsize=5.5,
                    ha="center",
                    va="center",
                    color=INK,
                    bbox=box,
                    zorder=5,
                )
        elif not line.is_meridian and line.value_deg:
            x, y = np.nanmin(line.plane[:, 0]), line.plane[0, 1]
            axes.text(x - 2, y, line.label, fontsize=5.5, ha="right", va="center", zorder=5)


def _zoom_frame(axes: Axes, window: Window) -> None:
    """Draw graticule and Galactic plane, and label the lines where they meet the frame."""
    for spine in axes.spines.values():
        spine.set_linewidth(0.6)
    lines = graticule(window)
    _plot_graticule(axes, lines)
    _plot_galactic_plane(axes, window)
    x_ticks, y_ticks = [], []
    for line in lines:
        if line.is_meridian:
            x_ticks += [(x, line.label) for x in _crossings(line.plane, 1, window.bottom)]
        else:
            y_ticks += [(y, line.label) for y in _crossings(line.plane, 0, window.left)]
    x_ticks = _apart(x_ticks, window.left, window.right, 0.11)
    y_ticks = _apart(y_ticks, window.bottom, window.top, 0.06)
    axes.set_xticks([x for x, _ in x_ticks], [label for _, label in x_ticks], fontsize=6)
    axes.set_yticks([y for y, _ in y_ticks], [label for _, label in y_ticks], fontsize=6)
    axes.tick_params(length=2.5, pad=1.5)


def _crossings(plane: Floats, axis: int, edge: float) -> list[float]:
    """Return where a line crosses a side of the frame, along that side."""
    with np.errstate(invalid="ignore"):
        beyond = plane[:, axis] - edge
        rows = np.flatnonzero(beyond[:-1] * beyond[1:] < 0)
    part = beyond[rows] / (beyond[rows] - beyond[rows + 1])
    along = plane[:, 1 - axis]
    return [float(v) for v in along[rows] + part * (along[rows + 1] - along[rows])]


def _apart(
    ticks: list[tuple[float, str]], low: float, high: float, least: float
) -> list[tuple[float, str]]:
    """Keep the ticks inside the side that leave each other room, in parts of the side."""
    kept: list[tuple[float, str]] = []
    for place, label in sorted(ticks):
        if low < place < high and (not kept or place - kept[-1][0] > least * (high - low)):
            kept.append((place, label))
    return kept


def _scale_bar(axes: Axes, window: Window) -> None:
    """Draw a round length at the lower right; near the middle of the plane it is true."""
    width = window.right - window.left
    minutes = (1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800)
    length = max((m for m in minutes if m / 60 <= width / 5), default=minutes[0]) / 60
    right = window.right - 0.04 * width
    y = window.bottom + 0.05 * width
    label = f"{length:.0f}°" if length >= 1 else f"{round(60 * length)}′"
    axes.plot([right - length, right], [y, y], color=INK, lw=1.6, solid_capstyle="butt", zorder=7)
    axes.text(
        right - length / 2,
        y + 0.012 * width,
        label,
        fontsize=6.5,
        ha="center",
        va="bottom",
        zorder=7,
        bbox={
            "boxstyle": "square,pad=0.1",
            "facecolor": "white",
            "edgecolor": "none",
            "alpha": 0.75,
        },
    )


def _key_height(telescopes: int) -> float:
    return 0.2 + _KEY_ROW_IN * (1 + -(-telescopes // _KEY_COLUMNS))


def _draw_key(figure: Figure, results: Results, shown: Sequence[int], height_in: float) -> None:
    """Explain hatches and shades below the chart."""
    total = figure.get_figheight()
    axes = figure.add_axes((0, 0, 1, (height_in - 0.08) / total))
    axes.set_xlim(0, WIDTH_IN)
    axes.set_ylim(height_in - 0.08, 0)
    axes.axis("off")
    column = WIDTH_IN / _KEY_COLUMNS
    for place, index in enumerate(shown):
        row, across = divmod(place, _KEY_COLUMNS)
        x, y = across * column + 0.05, 0.1 + row * _KEY_ROW_IN
        axes.imshow(
            np.rint(255 * swatch(index)).astype(np.uint8),
            extent=(x, x + 0.18, y + 0.055, y - 0.055),
            interpolation="none",
            aspect="auto",
        )
        name = short_label(results.telescopes[index].name, 20)
        axes.text(x + 0.24, y, name, fontsize=7, va="center")
    y = 0.1 + -(-len(shown) // _KEY_COLUMNS) * _KEY_ROW_IN + 0.04
    _draw_ramp_key(axes, y)
    axes.set_xlim(0, WIDTH_IN)
    axes.set_ylim(height_in - 0.08, 0)


def _draw_ramp_key(axes: Axes, y: float) -> None:
    """Explain shade, contours and the dotted line in one row."""
    axes.imshow(
        ramp_key(), extent=(0.05, 0.95, y + 0.055, y - 0.055), interpolation="none", aspect="auto"
    )
    axes.add_patch(Rectangle((0.05, y - 0.055), 0.9, 0.11, fill=False, ec=RULE, lw=0.5))
    axes.text(
        1.01,
        y,
        f"credible level, 0 % (densest) to {100 * (1 - TAIL):.0f} %",
        fontsize=6.5,
        va="center",
    )
    for x, text, style in (
        (3.35, "50 % region", {"lw": 0.9}),
        (4.4, "90 % region", {"lw": 0.7, "ls": (0, (3.5, 1.5))}),
        (5.45, "Galactic plane", {"lw": 0.6, "ls": (0, (1, 2))}),
    ):
        axes.plot([x, x + 0.22], [y, y], color=INK, **style)
        axes.text(x + 0.28, y, text, fontsize=6.5, va="center")
