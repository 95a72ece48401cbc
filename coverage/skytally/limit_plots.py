"""Plots of depth and distance: what was within reach, and what is ruled out."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from skytally.exclusion import DepthHistogram, DistanceProfile, ExclusionCurve, FadingPlane
from skytally.figure_style import (
    ACCENT,
    GREY,
    INK,
    WIDTH_IN,
    new_figure,
    plain_axes,
    short_label,
)
from skytally.plots import MOST_BANDS, end_labels
from skytally.wording import number_text, percent

__all__ = [
    "DISTANCE_IN",
    "EXCLUSION_IN",
    "FADING_IN",
    "MOST_SOURCES",
    "distance_figure",
    "exclusion_figure",
    "fading_figure",
    "fading_levels",
    "histogram_figure",
    "histogram_height",
]

# Sources whose lines can still be told apart in one plot.
MOST_SOURCES = 4
_LINES: tuple[str | tuple[int, tuple[float, ...]], ...] = (
    "-",
    (0, (5, 1.5)),
    (0, (1.2, 1.2)),
    (0, (6, 1.5, 1.2, 1.5)),
)
# Where a distribution has fallen to this part of its peak, the axis ends.
_TAIL = 2e-3
_PANEL_STEP, _PANEL = 1.5, 1.1
DISTANCE_IN, EXCLUSION_IN, FADING_IN = 2.7, 3.0, 3.0


def distance_figure(profile: DistanceProfile) -> Figure:
    """Draw probability against distance: of the map, of what was covered, and within reach."""
    figure = new_figure(DISTANCE_IN)
    axes = figure.add_axes((0.075, 0.15, 0.91, 0.82))
    plain_axes(axes)
    distance = np.array(profile.distance_mpc)
    whole, covered = 100 * np.array(profile.whole), 100 * np.array(profile.covered)
    axes.fill_between(distance, whole, fc="#eef0f2", ec="none")
    axes.plot(distance, whole, color=GREY, lw=1.0)
    axes.fill_between(distance, covered, fc="#c3cbd2", ec="none")
    axes.plot(distance, covered, color=INK, lw=1.3)
    named = [("the whole map", whole, GREY), ("covered", covered, INK)]
    shown = list(zip(profile.sources, profile.within_reach))[:MOST_SOURCES]
    for (name, within), line in zip(shown, _LINES):
        curve = 100 * np.array(within)
        axes.plot(distance, curve, color=ACCENT, lw=1.3, ls=line)
        named.append((f"{short_label(name, 16)} within reach", curve, ACCENT))
    held = np.flatnonzero(whole > _TAIL * whole.max(initial=0.0))
    if held.size:
        axes.set_xlim(max(distance[held[0]] - 0.02 * distance[-1], 0.0), distance[held[-1]])
    axes.set_ylim(0, 1.06 * max(whole.max(initial=0.0), 1e-12))
    axes.set_xlabel("luminosity distance (Mpc)")
    axes.set_ylabel("probability (% per Mpc)")
    _name_curves(axes, distance, named)
    return figure


def _name_curves(
    axes: Axes,
    distance: NDArray[np.float64],
    named: Sequence[tuple[str, NDArray[np.float64], str]],
) -> None:
    """Write the names of curves right of them, with a line to a dot on the falling side of each.

    The curves lie one within the other, so that names from the top down point further in.
    """
    top = float(named[0][1].max(initial=0.0))
    for number, (name, curve, colour) in enumerate(named):
        height = (0.93 - 0.12 * number) * top
        above = np.flatnonzero(curve >= height)
        # A curve that stays lower is named at its peak.
        row = int(above[-1]) if above.size else int(np.argmax(curve))
        place = float(distance[row]), float(curve[row])
        axes.scatter(*place, s=7, color=colour, zorder=5)
        axes.annotate(
            name,
            place,
            (0.76, height),
            textcoords=("axes fraction", "data"),
            fontsize=7,
            va="center",
            arrowprops={"arrowstyle": "-", "color": colour, "lw": 0.6, "relpos": (0.0, 0.5)},
        )


def exclusion_figure(curves: Sequence[ExclusionCurve]) -> Figure:
    """Draw detectable probability against absolute magnitude, band by band and for all."""
    figure = new_figure(EXCLUSION_IN)
    axes = figure.add_axes((0.075, 0.13, 0.745, 0.84))
    plain_axes(axes)
    shown = [curves[0], *sorted(curves[1:], key=lambda c: -c.highest)[:MOST_BANDS]]
    faint, bright = _decisive_range(shown)
    ends = []
    for number, curve in enumerate(shown[1:]):
        colour = (ACCENT, GREY)[number % 2]
        line = _LINES[number // 2 % len(_LINES)]
        _curve(axes, curve, color=colour, ls=line, lw=1.2)
        ends.append((curve.highest, short_label(str(curve.band), 12), colour))
    _curve(axes, shown[0], color=INK, lw=1.8)
    ends.append((shown[0].highest, "all bands", INK))
    axes.set_xlim(faint, bright)
    axes.set_ylim(0, 100)
    for level in (50, 90):
        axes.axhline(level, color=GREY, lw=0.7, ls=(0, (2, 2)), zorder=0)
        axes.text(faint - 0.02 * (faint - bright), level + 1, f"{level} %", fontsize=7, color=GREY)
    axes.set_xlabel("absolute magnitude, brighter to the right")
    axes.set_ylabel("detectable probability (%)")
    end_labels(axes, ends, 100.0)
    return figure


def _curve(axes: Axes, curve: ExclusionCurve, **style: object) -> None:
    axes.plot(curve.magnitude, 100 * np.array(curve.probability), **style)  # type: ignore[arg-type]


def _decisive_range(curves: Sequence[ExclusionCurve]) -> tuple[float, float]:
    """Return the faint and bright magnitudes between which every curve does its rise."""
    low, high = [], []
    for curve in curves:
        magnitude, value = np.array(curve.magnitude), np.array(curve.probability)
        rising = np.flatnonzero((value > 0.005 * curve.highest) & (value < 0.995 * curve.highest))
        if rising.size:
            low.append(magnitude[rising].min())
            high.append(magnitude[rising].max())
    if not low:
        return max(curves[0].magnitude), min(curves[0].magnitude)
    return float(max(high)) + 0.5, float(min(low)) - 0.5


def fading_levels(plane: FadingPlane) -> list[float]:
    """Return the round percentages at which the fading plane has contours; none if it is flat."""
    value = 100 * np.array(plane.probability)
    low, high = float(value.min()), float(value.max())
    ticks = MaxNLocator(9, steps=[1, 2, 5, 10]).tick_values(low, high)
    # A contour just below the plateau would follow nothing but rounding.
    return [float(t) for t in ticks if low < t < high - 0.01 * (high - low)]


def fading_figure(plane: FadingPlane) -> Figure:
    """Draw the fading plane as labelled contours of detectable probability."""
    figure = new_figure(FADING_IN)
    axes = figure.add_axes((0.075, 0.13, 0.91, 0.84))
    plain_axes(axes)
    peak, fade = np.array(plane.peak), np.array(plane.fade_per_day)
    value = 100 * np.array(plane.probability)
    levels = fading_levels(plane)
    shades = _shades(len(levels) + 1)
    axes.contourf(peak, fade, value, levels=[-1.0, *levels, 101.0], colors=shades)
    widths = [1.8 if level == 50 else 0.9 for level in levels]
    axes.contour(peak, fade, value, levels=levels, colors=INK, linewidths=widths)
    axes.set_xlim(*_decisive_peaks(peak, value))
    axes.set_ylim(fade.min(), fade.max())
    _label_contours(axes, plane, levels)
    axes.set_xlabel("absolute magnitude at the event, brighter to the right")
    axes.set_ylabel("fade (mag per day)")
    return figure


def _decisive_peaks(peak: NDArray[np.float64], value: NDArray[np.float64]) -> tuple[float, float]:
    """Return the faint and bright end between which the plane, brightest first, changes."""
    most = value.max()
    some = np.flatnonzero(value.max(axis=0) > 0.01 * most)
    short = np.flatnonzero(value.min(axis=0) < 0.985 * most)
    bright = int(short[0]) - 1 if short.size else 0
    ends = float(peak[some].max()), float(peak[max(bright, 0)])
    # Where all of it happens at one peak there is nothing to leave out.
    return ends if ends[0] > ends[1] else (float(peak.max()), float(peak.min()))


def _label_contours(axes: Axes, plane: FadingPlane, levels: Sequence[float]) -> None:
    """Label each contour where it crosses a row: three rows by turns, so that labels keep apart."""
    value = 100 * np.array(plane.probability)
    last = len(plane.fade_per_day) - 1
    for number, level in enumerate(levels):
        wanted = last * (1 + number % 3) // 4
        crossed = np.flatnonzero((value.min(axis=1) <= level) & (value.max(axis=1) >= level))
        row = int(crossed[np.argmin(np.abs(crossed - wanted))])
        order = np.argsort(value[row], kind="stable")
        peak = float(np.interp(level, value[row][order], np.array(plane.peak)[order]))
        axes.text(
            peak,
            plane.fade_per_day[row],
            f"{level:g} %",
            fontsize=6.5,
            fontweight="bold" if level == 50 else "normal",
            ha="center",
            va="center",
            bbox={"fc": "#ffffff", "ec": "none", "alpha": 0.85, "pad": 0.6},
            clip_on=True,
        )


def _shades(number: int) -> list[tuple[float, float, float]]:
    """Return so many shades from white towards our accent, pale enough for dark labels."""
    part = np.linspace(0.0, 0.45, number)[:, None]
    accent: NDArray[np.float64] = np.array([11, 93, 107]) / 255
    return [(float(r), float(g), float(b)) for r, g, b in 1 - part * (1 - accent)]


def histogram_height(histograms: Sequence[DepthHistogram]) -> float:
    """Return the height of `histogram_figure`, inches."""
    rows = -(-min(len(histograms), MOST_BANDS) // 4)
    return 0.2 + _PANEL_STEP * (rows - 1) + _PANEL + 0.36


def histogram_figure(histograms: Sequence[DepthHistogram]) -> Figure:
    """Draw the covered probability by the deepest limit, a panel per band."""
    shown = histograms[:MOST_BANDS]
    rows = -(-len(shown) // 4)
    columns = -(-len(shown) // rows)
    height = histogram_height(histograms)
    figure = new_figure(height)
    low = min(h.edges[0] for h in shown)
    high = max(h.edges[-1] for h in shown)
    top = 100 * max(max(h.probability) for h in shown) * 1.1
    left = 0.42 / WIDTH_IN
    width = (1 - left - 0.01 - 0.025 * (columns - 1)) / columns
    for place, histogram in enumerate(shown):
        row, column = divmod(place, columns)
        bottom = height - 0.2 - row * _PANEL_STEP - _PANEL
        axes = figure.add_axes(
            (left + column * (width + 0.025), bottom / height, width, _PANEL / height)
        )
        plain_axes(axes)
        axes.stairs(
            100 * np.array(histogram.probability), histogram.edges, fill=True, fc=ACCENT, alpha=0.75
        )
        axes.set_xlim(low - 0.05, high + 0.05)
        axes.set_ylim(0, max(top, 1e-9))
        axes.xaxis.set_major_locator(MaxNLocator(4, integer=True))
        axes.tick_params(labelsize=6.5)
        title = f"band {short_label(histogram.band, 12)}"
        axes.set_title(title, fontsize=7.5, loc="left", pad=3)
        if column:
            axes.set_yticklabels([])
        if histogram.without_limit > 0:
            text = f"no limit: {percent(histogram.without_limit)}"
            axes.text(0.03, 0.95, text, transform=axes.transAxes, fontsize=6.5, va="top")
    step = number_text(shown[0].edges[1] - shown[0].edges[0], 2)
    label = f"probability (% per {step} mag)"
    figure.text(0.004, 0.55, label, rotation=90, va="center", ha="left", fontsize=7)
    figure.text(0.5, 0.02 / height, "deepest limit at each place (mag)", ha="center", va="bottom")
    return figure
