"""What every chart of the sky is framed with: contours, graticule, Galactic plane, scale bar."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Ellipse
from matplotlib.patheffects import Normal, Stroke
from numpy.typing import NDArray

from skytally.figure_style import GREY, INK
from skytally.projection import (
    MOLLWEIDE_X,
    MOLLWEIDE_Y,
    GraticuleLine,
    Window,
    galactic_plane,
    graticule,
)
from skytally.skymap import SkyMap
from skytally.spans import Ints

__all__ = [
    "contours",
    "paint",
    "samples_of",
    "scale_bar",
    "whole_sky_frame",
    "zoom_frame",
]

Floats = NDArray[np.float64]

# Samples per inch: twice what a screen shows, so that print is clean as well.
SAMPLES_PER_INCH = 192
# Least distance of labels beside one another and of labels one above the other, inches.
_TICK_WIDTH_IN, _TICK_HEIGHT_IN = 0.44, 0.2
# Where else along a contour its label may stand, in parts of its length.
_AROUND = (0.0, 0.2, -0.2, 0.4)
_LABEL_BOX: dict[str, Any] = {
    "boxstyle": "square,pad=0.1",
    "facecolor": "white",
    "edgecolor": "none",
    "alpha": 0.8,
}


def samples_of(window: Window, width_in: float) -> Ints:
    """Return the positions on the line that a chart of some width is drawn from."""
    return window.sample(round(width_in * SAMPLES_PER_INCH))


def paint(axes: Axes, window: Window, picture: NDArray[np.uint8]) -> None:
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


def contours(
    axes: Axes,
    window: Window,
    skymap: SkyMap,
    position: Ints,
    *,
    labels: bool = True,
    weight: float = 1.0,
) -> None:
    """Draw the edges of the 50 % and 90 % regions, found from samples of the window.

    ``weight`` scales the lines. Not thinned, they have a pale rim, to be seen over footprints.
    """
    # In a zoom every other sample will do: the steps stay finer than the line.
    step = 2 if window.code == "ZEA" else 1
    x, y = (centres[::step] for centres in window.grid(position.shape[1]))
    position = position[::step, ::step]
    level = skymap.credible_level_at(position)
    level[position < 0] = 1.0
    placed: list[Floats] = []
    for edge, width, dashes in ((0.9, 0.7, (3.5, 1.5)), (0.5, 0.9, None)):
        if not (level.min() <= edge < level.max()):
            continue
        drawn = axes.contour(x, y, level, [edge], colors=[INK], linewidths=width * weight, zorder=4)
        if weight >= 1:
            rim = Stroke(linewidth=width + 0.9, foreground="white", alpha=0.7)
            drawn.set_path_effects([rim, Normal()])
        if dashes is not None:
            drawn.set_linestyle((0, dashes))
        if labels:
            pieces = drawn.get_paths()[0].to_polygons(closed_only=False)
            _label_contour(axes, window, [np.asarray(piece) for piece in pieces], edge, placed)


def _label_contour(
    axes: Axes, window: Window, pieces: Sequence[Floats], level: float, placed: list[Floats]
) -> None:
    """Write the level on the longest pieces of its contour, the 90 % one at another place.

    A contour too small to carry its label goes without, and so does one with a label
    near by: their places are kept in ``placed``.
    """
    longest = sorted(pieces, key=len, reverse=True)[:2]
    least = 0.1 * (window.right - window.left)
    for piece in longest:
        if len(piece) < 12 or np.hypot(*np.ptp(piece, axis=0)) < least:
            continue
        inset = 0.03 * (window.right - window.left)
        wanted = 0.3 if level > 0.6 else 0.65
        places = piece[[int(len(piece) * (wanted + step) % len(piece)) for step in _AROUND]]
        places = places[_well_inside(window, places, inset)]
        if len(places) == 0:
            continue
        place = places[0]
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


def _well_inside(window: Window, plane: Floats, inset: float) -> NDArray[np.bool_]:
    """Tell which points keep a distance from the frame, or from the rim of the whole sky."""
    x, y = plane.T
    inside = (window.left + inset < x) & (x < window.right - inset)
    inside &= (window.bottom + inset < y) & (y < window.top - inset)
    if window.code == "MOL":
        inside &= np.hypot(x / (MOLLWEIDE_X - inset), y / (MOLLWEIDE_Y - inset)) < 1
    return np.asarray(inside)


def _plot_graticule(axes: Axes, lines: Sequence[GraticuleLine]) -> None:
    gap = np.full((1, 2), np.nan)
    pieces = [piece for line in lines for piece in (line.plane, gap)]
    if pieces:
        # One path: a path each takes its time.
        axes.plot(*np.concatenate(pieces).T, color=GREY, lw=0.35, alpha=0.55, zorder=2)


def _plot_galactic_plane(axes: Axes, window: Window) -> None:
    path = galactic_plane(window)
    if len(path):
        axes.plot(*path.T, color=INK, lw=0.6, ls=(0, (1, 2)), zorder=2)


def whole_sky_frame(axes: Axes, window: Window, *, labels: bool) -> None:
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
                    bbox=_LABEL_BOX,
                    zorder=5,
                )
        elif not line.is_meridian and line.value_deg:
            x, y = np.nanmin(line.plane[:, 0]), line.plane[0, 1]
            axes.text(x - 2, y, line.label, fontsize=5.5, ha="right", va="center", zorder=5)


def zoom_frame(axes: Axes, window: Window) -> None:
    """Draw graticule and Galactic plane, and label the lines where they meet the frame."""
    for spine in axes.spines.values():
        spine.set_linewidth(0.6)
    lines = graticule(window)
    _plot_graticule(axes, lines)
    _plot_galactic_plane(axes, window)
    if window.shows(np.array([[0.0, 90.0], [0.0, -90.0]])).any():
        _label_lines(axes, window, lines)
        return
    x_ticks, y_ticks = [], []
    for line in lines:
        if line.is_meridian:
            x_ticks += [(x, line.label) for x in _crossings(line.plane, 1, window.bottom)]
        else:
            y_ticks += [(y, line.label) for y in _crossings(line.plane, 0, window.left)]
    wide, tall = _size_in(axes)
    x_ticks = _apart(x_ticks, window.left, window.right, _TICK_WIDTH_IN / wide)
    y_ticks = _apart(y_ticks, window.bottom, window.top, _TICK_HEIGHT_IN / tall)
    axes.set_xticks([x for x, _ in x_ticks], [label for _, label in x_ticks], fontsize=6)
    axes.set_yticks([y for y, _ in y_ticks], [label for _, label in y_ticks], fontsize=6)
    axes.tick_params(length=2.5, pad=1.5)


def _size_in(axes: Axes) -> tuple[float, float]:
    """Return width and height of a chart, inches."""
    return axes.bbox.width / axes.figure.dpi, axes.bbox.height / axes.figure.dpi


def _label_lines(axes: Axes, window: Window, lines: Sequence[GraticuleLine]) -> None:
    """Label lines where they run: about a pole they meet a frame anywhere, or nowhere.

    Meridians at their ends, parallels one beside the other up the middle.
    """
    scale = (window.right - window.left) / _size_in(axes)[0]
    across, up = 0.28 * scale, 0.1 * scale
    middle = np.array([window.left + window.right, window.bottom + window.top]) / 2
    placed: list[Floats] = []
    for line in sorted(lines, key=lambda one: one.is_meridian):
        x, y = line.plane.T
        with np.errstate(invalid="ignore"):
            inside = (x > window.left + across) & (x < window.right - across)
            inside &= (y > window.bottom + up) & (y < window.top - up)
            # Where the scale bar stands.
            inside &= (x < window.right - 1.3 * scale) | (y > window.bottom + 0.4 * scale)
        points = line.plane[inside]
        if len(points) == 0:
            continue
        outward = np.abs(points - middle) @ [1.0, float(line.is_meridian)]
        place = points[np.argmax(outward) if line.is_meridian else np.argmin(outward)]
        if any((np.abs(place - other) < (2 * across, 1.5 * up)).all() for other in placed):
            continue
        placed.append(place)
        axes.text(
            float(place[0]),
            float(place[1]),
            line.label.replace("\n", " "),
            fontsize=5.5,
            ha="center",
            va="center",
            color=INK,
            zorder=5,
            bbox=_LABEL_BOX,
        )


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


def scale_bar(axes: Axes, window: Window) -> None:
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
        bbox=_LABEL_BOX,
    )
