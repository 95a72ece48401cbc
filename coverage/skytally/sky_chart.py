"""Charts of the sky, painted sample by sample from the spans behind the numbers.

Every sample of a chart is a direction, every direction a position on the line,
and there the map version and the regions are asked what they hold: a chart
cannot show what was not counted.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from skytally.figure_style import (
    ACCENT,
    INK,
    RULE,
    WIDTH_IN,
    new_figure,
    short_label,
    style_of,
    swatch,
)
from skytally.projection import Window, whole_sky_window
from skytally.results import Results
from skytally.sky_frame import (
    contours,
    paint,
    samples_of,
    scale_bar,
    whole_sky_frame,
    zoom_frame,
)
from skytally.sky_parts import ZOOM_GAP, ZOOM_LEFT, Part, Zoom, middle_ra
from skytally.sky_picture import TAIL, Inks, Layer, paint_sky, ramp_key
from skytally.spans import Spans
from skytally.wording import percent

__all__ = [
    "versions_figure",
    "versions_height",
    "whole_sky_figure",
    "whole_sky_height",
    "zoom_figure",
    "zoom_height",
]

# More outlines than this are left to the sampled mask.
_MOST_RINGS = 3000
# The frame of a zoom narrower than this is drawn on the whole sky.
_SMALL_ZOOM_DEG = 75.0
_ZOOM_HEAD, _ZOOM_FOOT = 0.06, 0.36
_KEY_ROW_IN = 0.19
_KEY_COLUMNS = 5


def whole_sky_height(results: Results) -> float:
    """Return the height of `whole_sky_figure`, inches."""
    return WIDTH_IN * whole_sky_window(0.0).aspect + _key_height(len(_shown(results)))


def whole_sky_figure(results: Results, shown: Sequence[Zoom]) -> Figure:
    """Draw the newest map version and all footprints on the whole sky.

    The frames of the zooms ``shown`` are drawn in, with a letter where there are two.
    """
    skymap = results.sky.maps[-1]
    window = whole_sky_window(middle_ra(shown[0].part))
    telescopes = _shown(results)
    key = _key_height(len(telescopes))
    total, height = whole_sky_height(results), WIDTH_IN * window.aspect
    figure = new_figure(total)
    axes = figure.add_axes((0, key / total, 1, height / total))
    samples = samples_of(window, WIDTH_IN)
    paint(axes, window, paint_sky(samples, skymap, _by_telescope(results)))
    whole_sky_frame(axes, window, labels=True)
    _outlines(axes, window, results, 0.3)
    contours(axes, window, skymap, samples)
    for zoom, letter in zip(shown, _letters(shown)):
        if zoom.window.right - zoom.window.left < _SMALL_ZOOM_DEG:
            frame = window.lines([zoom.window.unproject(zoom.window.corners)])
            axes.plot(*frame.T, color=INK, lw=0.5, zorder=6)
            place = np.nanmin(frame[:, 0]) - 1.0, np.nanmax(frame[:, 1])
            axes.text(*place, letter, fontsize=6.5, ha="right", va="top", zorder=6)
    _draw_key(figure, results, telescopes, key)
    return figure


def _letters(shown: Sequence[Zoom]) -> Sequence[str]:
    return "AB" if len(shown) > 1 else ("",)


def zoom_height(results: Results, shown: Sequence[Zoom]) -> float:
    """Return the height of `zoom_figure`, inches."""
    tallest = max(zoom.height_in for zoom in shown)
    return _ZOOM_HEAD + tallest + _ZOOM_FOOT + _key_height(len(_shown(results)))


def zoom_figure(results: Results, shown: Sequence[Zoom]) -> Figure:
    """Draw one or two parts of the newest version's 90 % region, side by side."""
    skymap = results.sky.maps[-1]
    telescopes = _shown(results)
    key, height = _key_height(len(telescopes)), zoom_height(results, shown)
    figure = new_figure(height)
    left, inks = ZOOM_LEFT, _by_telescope(results)
    for zoom, letter in zip(shown, _letters(shown)):
        window, own = zoom.window, zoom.height_in
        bottom = height - _ZOOM_HEAD - own
        axes = figure.add_axes(
            (left / WIDTH_IN, bottom / height, zoom.width_in / WIDTH_IN, own / height)
        )
        left += zoom.width_in + ZOOM_GAP
        samples = samples_of(window, zoom.width_in)
        paint(axes, window, paint_sky(samples, skymap, inks))
        zoom_frame(axes, window)
        _outlines(axes, window, results, 0.6)
        contours(axes, window, skymap, samples)
        scale_bar(axes, window)
        if letter:
            _corner_letter(axes, letter)
    _draw_key(figure, results, telescopes, key)
    return figure


def _corner_letter(axes: Axes, letter: str) -> None:
    axes.annotate(
        letter,
        (0, 1),
        (4, -4),
        xycoords="axes fraction",
        textcoords="offset points",
        fontsize=9,
        fontweight="bold",
        ha="left",
        va="top",
        zorder=8,
        bbox={"boxstyle": "square,pad=0.2", "facecolor": "white", "edgecolor": "none"},
    )


def versions_height(results: Results) -> float:
    """Return the height of `versions_figure`, inches."""
    columns, width = _versions_grid(results)
    rows = -(-len(results.maps) // columns)
    return rows * (width * whole_sky_window(0.0).aspect + 0.3)


def _versions_grid(results: Results) -> tuple[int, float]:
    """Return the columns of small skies, and the width of each in inches."""
    columns = min(len(results.maps), 3)
    return columns, WIDTH_IN / columns - 0.12


def versions_figure(results: Results, middle: Part) -> Figure:
    """Draw one small sky per map version, with the same footprints and ``middle`` on each."""
    window = whole_sky_window(middle_ra(middle))
    columns, width = _versions_grid(results)
    tall, height = width * window.aspect, versions_height(results)
    samples = samples_of(window, width)
    inks = Inks.of([Layer(Spans.empty().union(*results.sky.covered), ACCENT, None)])
    figure = new_figure(height)
    for place, (info, skymap) in enumerate(zip(results.maps, results.sky.maps)):
        row, column = divmod(place, columns)
        left = (column + 0.5) / columns - width / WIDTH_IN / 2
        axes = figure.add_axes(
            (left, 1 - (row * (tall + 0.3) + 0.22 + tall) / height, width / WIDTH_IN, tall / height)
        )
        paint(axes, window, paint_sky(samples, skymap, inks))
        whole_sky_frame(axes, window, labels=False)
        contours(axes, window, skymap, samples, labels=False, weight=0.6)
        probability = results.row(map=info.version).probability
        axes.set_title(
            f"{short_label(info.version)}: {percent(probability)} covered", fontsize=7, pad=4
        )
    return figure


def _shown(results: Results) -> list[int]:
    """Return the telescopes that covered any sky."""
    return [index for index, region in enumerate(results.sky.covered) if region]


def _by_telescope(results: Results) -> Inks:
    """Return each telescope's region with its colour and hatch."""
    covered, shown = results.sky.covered, _shown(results)
    return Inks.of([Layer(covered[i], style_of(i).colour, style_of(i).hatch) for i in shown])


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
