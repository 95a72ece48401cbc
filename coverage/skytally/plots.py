"""Plots of numbers: probability against time, shares of the credit, depth against time."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullLocator
from numpy.typing import NDArray

from skytally.figure_style import (
    GREY,
    INK,
    RULE,
    WIDTH_IN,
    new_figure,
    plain_axes,
    short_label,
    style_of,
    swatch,
)
from skytally.results import Results
from skytally.tally import TallyRow, Timeline
from skytally.wording import limit_rows, percent

__all__ = [
    "CREDIT_IN",
    "MOST_BANDS",
    "MOST_LABELS",
    "TIMELINE_IN",
    "credit_figure",
    "depth_bands",
    "depth_figure",
    "depth_height",
    "end_labels",
    "telescope_timelines",
    "timeline_figure",
]

# Lines that can carry a label at their end without crowding.
MOST_LABELS = 9
MOST_BANDS = 8
TIMELINE_IN, CREDIT_IN = 2.9, 1.2
# From this probability covered on, one bar has room for the shares as well.
_ONE_BAR = 0.3
_SAMPLES_PER_INCH = 192
_VECTOR_POINTS = 2000
# Height of a band's panel with its axis and title, inches, and of the panel alone.
_PANEL_STEP, _PANEL = 1.6, 1.22


def telescope_timelines(results: Results) -> list[tuple[int, Timeline]]:
    """Return each telescope's timeline on the newest map with its index, where it has steps."""
    index = {t.name: number for number, t in enumerate(results.telescopes)}
    return [
        (index[line.telescope], line)
        for line in results.timelines
        if line.map == results.newest.version
        and line.telescope is not None
        and line.band is None
        and line.night is None
        and line.hours
    ]


def timeline_figure(results: Results) -> Figure:
    """Draw cumulative probability against hours since the event, all and by telescope."""
    total = next(
        line
        for line in results.timelines
        if line.map == results.newest.version
        and (line.telescope, line.band, line.night) == (None, None, None)
    )
    figure = new_figure(TIMELINE_IN)
    axes = figure.add_axes((0.075, 0.14, 0.735, 0.74))
    plain_axes(axes)
    versions = [(m.hours, m.version) for m in results.maps if m.hours is not None]
    low, high, is_log = _time_axis(axes, [*total.hours, *(h for h, _ in versions)])
    ends = []
    for index, line in telescope_timelines(results):
        style = style_of(index)
        _steps(axes, line, (low, high), color=style.colour, ls=style.line, lw=1.1)
        ends.append((line.probability[-1], short_label(line.telescope or "", 20), style.colour))
    _steps(axes, total, (low, high), color=INK, lw=1.8)
    ends.append((total.probability[-1], "all together", INK))
    top = 100 * max(total.probability[-1], 1e-9) * 1.06
    axes.set_ylim(0, top)
    axes.set_ylabel("probability covered (%)")
    axes.set_xlabel("hours since the event" + (" (logarithmic)" if is_log else ""))
    end_labels(axes, ends, top)
    _mark_versions(axes, versions, is_log=is_log)
    return figure


def _steps(axes: Axes, line: Timeline, span: tuple[float, float], **style: object) -> None:
    x = [span[0], *line.hours, span[1]]
    y = [0.0, *(100 * p for p in line.probability), 100 * line.probability[-1]]
    axes.plot(x, y, drawstyle="steps-post", solid_joinstyle="miter", **style)  # type: ignore[arg-type]


def _time_axis(axes: Axes, hours: Sequence[float]) -> tuple[float, float, bool]:
    """Scale the time axis: logarithmic where all is later and spans a factor of thirty."""
    first, last = min(hours), max(hours)
    is_log = first > 0 and last / first > 30
    if is_log:
        low, high = first / 1.3, last * 1.1
        axes.set_xscale("log")
        axes.xaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        axes.xaxis.set_minor_locator(NullLocator())
        axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    else:
        room = 0.03 * max(last - min(first, 0.0), 1e-3)
        low, high = min(first, 0.0) - (room if first < 0 else 0), last + room
    axes.set_xlim(low, high)
    return low, high, is_log


def end_labels(axes: Axes, ends: Sequence[tuple[float, str, str]], top: float) -> None:
    """Write each line's name at its right end, moved apart where they would touch.

    ``ends`` holds a probability, a name and a colour each; what is in our ink is the
    whole, and bold. ``top`` is the end of the axis in percent.
    """
    kept = sorted(sorted(ends)[-MOST_LABELS:])
    least = 0.062 * top
    places: list[float] = []
    for value, _, _ in kept:
        wanted = 100 * value
        places.append(max(wanted, places[-1] + least) if places else max(wanted, 0.3 * least))
    # Push back down what was pushed above the top.
    limit = top
    for number in range(len(places) - 1, -1, -1):
        places[number] = min(places[number], limit)
        limit = places[number] - least
    for (value, name, colour), y in zip(kept, places):
        text = f"{name} {percent(value)}"
        axes.annotate(
            text,
            (1.0, 100 * value),
            (1.035, y),
            xycoords=("axes fraction", "data"),
            textcoords=("axes fraction", "data"),
            fontsize=7,
            va="center",
            fontweight="bold" if colour == INK else "normal",
            arrowprops={
                "arrowstyle": "-",
                "color": colour,
                "lw": 0.9,
                "shrinkA": 2,
                "shrinkB": 0,
                "relpos": (0.0, 0.5),
            },
        )


def _mark_versions(axes: Axes, versions: Sequence[tuple[float, str]], *, is_log: bool) -> None:
    """Mark when each map version was issued; names that would touch go a line higher."""
    low, high = axes.get_xlim()
    previous = [-1.0, -1.0]
    for hours, version in versions:
        axes.axvline(hours, color=GREY, lw=0.7, ls=(0, (2, 2)), zorder=0)
        part = (
            (np.log(hours / low) / np.log(high / low)) if is_log else (hours - low) / (high - low)
        )
        name = short_label(version, 18)
        row = 0 if part > previous[0] else 1
        previous[row] = part + 0.016 * (len(name) + 5)
        axes.text(
            hours,
            1.015 + 0.055 * row,
            f"map {name}",
            transform=axes.get_xaxis_transform(),
            fontsize=6.5,
            ha="left" if part < 0.8 else "right",
            va="bottom",
            color=GREY,
        )


def credit_figure(results: Results) -> Figure:
    """Draw the shares of the covered probability that add up to the total, and the rest.

    One bar is all probability. Where little is covered, the shares have a second one.
    """
    total = results.row().probability
    credit = [results.row(telescope=t.name).probability_credit for t in results.telescopes]
    shares = [(index, value) for index, value in enumerate(credit) if value > 0]
    shares.sort(key=lambda share: -share[1])
    is_one = total >= _ONE_BAR
    scale, rows = (1.0, (0.5, 0.83)) if is_one else (1 / total, (0.42, 0.62))
    figure = new_figure(CREDIT_IN)
    axes = figure.add_axes((0.005, 0.0, 0.99, 1.0))
    axes.set_xlim(0, 1)
    axes.set_ylim(0, 1)
    axes.axis("off")
    upper = rows if is_one else (0.74, 0.87)
    _bar(axes, total, 1.0, upper, _hatched_rest(1 - total))
    _sided_text(axes, total)
    if not is_one:
        _bar(axes, 0.0, total, upper, _even(INK, 0.75))
        for above, below in ((0.0, 0.0), (total, 1.0)):
            axes.plot([above, below], [0.74, 0.62], color=GREY, lw=0.5)
    left, tall = 0.0, round((rows[1] - rows[0]) * CREDIT_IN * _SAMPLES_PER_INCH)
    unnamed = []
    for index, value in shares:
        width = value * scale
        picture = swatch(index, _columns(width), tall)
        _bar(axes, left, left + width, rows, picture)
        name, amount = short_label(results.telescopes[index].name, 16), percent(value)
        # About 0.065 inches a letter at this size.
        if width * WIDTH_IN > 0.065 * max(len(name), len(amount)) + 0.05:
            middle = left + width / 2
            axes.text(middle, rows[0] - 0.05, name, fontsize=7, ha="center", va="top")
            axes.text(middle, rows[0] - 0.19, amount, fontsize=7, ha="center", va="top")
        else:
            unnamed.append(f"{name} {amount}")
        left += width
    words = _listed(unnamed, "then " if len(unnamed) < len(shares) else "")
    axes.text(1.0, 0.12, words, fontsize=7, ha="right", va="top")
    axes.set_xlim(0, 1)
    axes.set_ylim(0, 1)
    return figure


def _columns(width: float) -> int:
    """Return the samples across a part of the bar."""
    return max(2, round(width * WIDTH_IN * _SAMPLES_PER_INCH))


def _listed(names: Sequence[str], start: str, most: int = 4) -> str:
    """Name the segments too narrow for a label, in the order of the bar."""
    if not names:
        return ""
    more = f", {len(names) - most} more" if len(names) > most else ""
    return f"{start}{', '.join(names[:most])}{more}"


def _sided_text(axes: Axes, total: float) -> None:
    """Write what the upper bar shows, each on its own side where there is room."""
    covered, rest = f"covered {percent(total)}", f"not covered {percent(1 - total)}"
    axes.text(0.0, 0.89, covered, fontsize=7, va="bottom", ha="left")
    axes.text(1.0, 0.89, rest, fontsize=7, va="bottom", ha="right")


def _bar(
    axes: Axes, left: float, right: float, rows: tuple[float, float], picture: NDArray[np.float64]
) -> None:
    if right <= left:
        return
    axes.imshow(
        np.rint(255 * picture).astype(np.uint8),
        extent=(left, right, *rows),
        interpolation="none",
        aspect="auto",
    )
    axes.fill_between([left, right], rows[0], rows[1], fc="none", ec=GREY, lw=0.5)


def _even(colour: str, opacity: float) -> NDArray[np.float64]:
    return np.array([[[*to_rgb(colour), opacity]]])


def _hatched_rest(width: float) -> NDArray[np.float64]:
    """Return the picture of what nobody covered: pale lines, wider apart than any hatch."""
    y, x = np.indices((60, _columns(width)))
    picture = np.ones((*x.shape, 4))
    picture[(x + 2 * y) % 30 < 3, :3] = to_rgb(RULE)
    return picture


def depth_bands(results: Results) -> list[TallyRow]:
    """Return the newest map's rows by band that have limits, the most observed first."""
    return sorted(limit_rows(results), key=lambda row: (-row.exposures, row.band))


def _with_limits(results: Results) -> list[int]:
    """Return the telescopes whose exposures have limits."""
    used = {e.telescope for e in results.exposures if e.depth is not None}
    return [i for i, t in enumerate(results.telescopes) if t.name in used]


def _depth_key(shown: Sequence[int]) -> float:
    return 0.1 + 0.18 * -(-len(shown) // 5)


def depth_height(results: Results) -> float:
    """Return the height of `depth_figure`, inches."""
    rows = -(-min(len(depth_bands(results)), MOST_BANDS) // 4)
    return 0.1 + _PANEL_STEP * rows + 0.2 + _depth_key(_with_limits(results))


def depth_figure(results: Results) -> Figure:
    """Draw each exposure's limit against hours since the event, a panel per band."""
    bands = [row.band for row in depth_bands(results)[:MOST_BANDS]]
    rows = -(-len(bands) // 4)
    columns = -(-len(bands) // rows)
    shown = _with_limits(results)
    key, height = _depth_key(shown), depth_height(results)
    figure = new_figure(height)
    depths = [e.depth for e in results.exposures if e.depth is not None and e.band in bands]
    hours = [e.hours for e in results.exposures if e.depth is not None and e.band in bands]
    # No less than a magnitude: finer steps would look like differences.
    room = max(0.08 * np.ptp(depths), (1 - np.ptp(depths)) / 2)
    left = 0.42 / WIDTH_IN
    width = (1 - left - 0.01 - 0.025 * (columns - 1)) / columns
    for place, band in enumerate(bands):
        row, column = divmod(place, columns)
        bottom = height - 0.2 - row * _PANEL_STEP - _PANEL
        axes = figure.add_axes(
            (left + column * (width + 0.025), bottom / height, width, _PANEL / height)
        )
        plain_axes(axes)
        _time_axis(axes, hours)
        axes.set_ylim(max(depths) + room, min(depths) - room)
        axes.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 5, 10]))
        axes.set_title(f"band {short_label(str(band), 12)}", fontsize=7.5, loc="left", pad=3)
        axes.tick_params(labelsize=6.5)
        if column:
            axes.set_yticklabels([])
        _limits(axes, results, str(band), shown)
    figure.text(0.004, 0.5 + key / height / 2, "limit (mag)", rotation=90, va="center", ha="left")
    figure.text(0.5, (key + 0.02) / height, "hours since the event", ha="center", va="bottom")
    _marker_key(figure, results, shown, key)
    return figure


def _limits(axes: Axes, results: Results, band: str, shown: Sequence[int]) -> None:
    for index in shown:
        name = results.telescopes[index].name
        points = [
            (e.hours, e.depth)
            for e in results.exposures
            if e.telescope == name and e.band == band and e.depth is not None
        ]
        if points:
            style = style_of(index)
            axes.plot(
                *np.array(points).T,
                ls="none",
                marker=style.marker,
                ms=2.6,
                mfc="none",
                mec=style.colour,
                mew=0.7,
                rasterized=len(points) > _VECTOR_POINTS,
            )


def _marker_key(figure: Figure, results: Results, shown: Sequence[int], height_in: float) -> None:
    total = figure.get_figheight()
    axes = figure.add_axes((0, 0, 1, height_in / total))
    axes.set_xlim(0, WIDTH_IN)
    axes.set_ylim(height_in, 0)
    axes.axis("off")
    for place, index in enumerate(shown):
        row, column = divmod(place, 5)
        x, y = 0.45 + column * (WIDTH_IN - 0.45) / 5, 0.1 + 0.18 * row
        style = style_of(index)
        axes.plot([x], [y], ls="none", marker=style.marker, ms=3.4, mfc="none", mec=style.colour)
        axes.text(
            x + 0.1, y, short_label(results.telescopes[index].name, 20), fontsize=7, va="center"
        )
