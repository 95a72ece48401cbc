"""Outlines of fields to lay over a chart, so that a page can tell them apart."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import ConvexHull, QhullError

from skytally.figure_style import Drawing
from skytally.projection import Window
from skytally.results import Results
from skytally.sky_parts import zooms

__all__ = ["chart_overlays"]

Floats = NDArray[np.float64]

# More corners than this and only the outer edge of a camera is drawn; more fields
# than this and only the most probable are.
MOST_CORNERS = 20_000
MOST_FIELDS = 500
# Steps of an outline in one unit of the drawing.
_STEPS = 10
_RECTANGLE = re.compile(
    r'<path d="M ([\d.]+) ([\d.]+) +L ([\d.]+) \2 +L \3 ([\d.]+) +L \1 \4 +L \1 \2 +z ?"'
)


def chart_overlays(results: Results, figures: Mapping[str, Drawing]) -> dict[str, Any]:
    """Return the outlines of the fields shown in the zoom, as paths of its drawing.

    Returns
    -------
    dict
        ``panels``: for each, its ``box`` in the drawing (left, top, width, height)
        and ``paths`` as pairs of footprint and path, in steps of a tenth of a unit
        from the box's corner, the largest first; ``left``: fields without an
        outline, ``cut``: fields left out since there are many, ``hulls``: whether
        only the outer edge of cameras is drawn.
    """
    rings = _rings_by_field(results)
    worth = _worth_by_field(results)
    fields = sorted(rings, key=lambda field: (-worth[field], field))
    shown = fields[:MOST_FIELDS]
    hulls = sum(len(ring) for field in shown for ring in rings[field]) > MOST_CORNERS
    panels = []
    boxes = _boxes(figures["zoom"]) if "zoom" in figures else []
    for window, box in zip((zoom.window for zoom in zooms(results.sky.maps[-1])), boxes):
        paths = []
        for field in shown:
            path = window.lines(rings[field])
            if len(path) and _meets(path, window):
                line = _hull(path) if hulls and len(rings[field]) > 1 else path
                paths.append((_extent(path), field, _path(_placed(line, window, box))))
        paths.sort(key=lambda item: (-item[0], item[1]))
        panels.append({"box": box, "paths": [(field, text) for _, field, text in paths if text]})
    return {
        "panels": panels,
        "left": len(worth) - len(fields),
        "cut": len(fields) - len(shown),
        "hulls": hulls,
    }


def _rings_by_field(results: Results) -> dict[int, list[Floats]]:
    sets = results.sky.sets
    found: dict[int, list[Floats]] = {}
    if sets is not None:
        for rings, fields in zip(results.sky.outlines, sets.outlined):
            for ring, field in zip(rings, fields.tolist()):
                found.setdefault(field, []).append(ring)
    return found


def _worth_by_field(results: Results) -> dict[int, float]:
    sets = results.sky.sets
    assert sets is not None
    return {
        field: exposure.probability_newest
        for field, exposure in zip(sets.footprint.tolist(), results.exposures)
    }


def _boxes(drawing: Drawing) -> Iterator[list[float]]:
    """Yield the frames of a drawing's panels in order; the first rectangle is its paper."""
    for frame in list(_RECTANGLE.finditer(drawing.svg))[1:]:
        left, bottom, right, top = map(float, frame.groups())
        yield [left, top, round(right - left, 3), round(bottom - top, 3)]


def _meets(line: Floats, window: Window) -> bool:
    """Tell whether a line's extent meets the frame: one just outside cannot be pointed at."""
    (left, bottom), (right, top) = np.nanmin(line, axis=0), np.nanmax(line, axis=0)
    across = left < window.right and right > window.left
    return bool(across and bottom < window.top and top > window.bottom)


def _placed(line: Floats, window: Window, box: Sequence[float]) -> Floats:
    """Return plane coordinates as steps from the upper left corner of a box."""
    x = (line[:, 0] - window.left) / (window.right - window.left) * box[2]
    y = (window.top - line[:, 1]) / (window.top - window.bottom) * box[3]
    return np.stack((x, y), axis=1) * _STEPS


def _hull(line: Floats) -> Floats:
    """Return the closed outer edge of a line's vertices; the line itself where it has none."""
    points = line[np.isfinite(line[:, 0])]
    try:
        corners = ConvexHull(points).vertices
    except (QhullError, ValueError):
        return line
    return np.asarray(points[np.append(corners, corners[0])])


def _extent(line: Floats) -> float:
    return float(np.prod(np.nanmax(line, axis=0) - np.nanmin(line, axis=0)))


def _path(steps: Floats) -> str:
    """Return the path of a line that NaN interrupts, in whole steps."""
    parts = []
    for piece in np.split(steps, np.flatnonzero(np.isnan(steps[:, 0]))):
        whole = np.rint(piece[np.isfinite(piece[:, 0])]).astype(int)
        if len(whole) > 1:
            move, *rest = np.diff(whole, axis=0, prepend=0).tolist()
            text = " ".join(f"{x} {y}" for x, y in rest)
            parts.append(f"M{move[0]} {move[1]}l{text}".replace(" -", "-"))
    return "".join(parts)
