"""The depth of every place, a chart per band, painted from the patches behind the numbers."""

from __future__ import annotations

from dataclasses import dataclass

import astropy.units as u
import numpy as np
from astropy_healpix import healpix_to_lonlat
from matplotlib.axes import Axes
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from numpy.typing import NDArray

from skytally.deepest import DeepestLimits
from skytally.figure_style import (
    GREY,
    RULE,
    WIDTH_IN,
    hatch_mask,
    new_figure,
    short_label,
)
from skytally.plots import MOST_BANDS, depth_bands
from skytally.projection import Window, galactic_plane, whole_sky_window, zoom_window
from skytally.results import Results
from skytally.shapes import lonlat_to_vector
from skytally.sky_frame import (
    contours,
    paint,
    samples_of,
    scale_bar,
    whole_sky_frame,
    zoom_frame,
)
from skytally.sky_parts import Part, middle_ra, span_middle
from skytally.skymap import SkyMap
from skytally.spans import LINE_ORDER, Ints
from skytally.wording import NBSP

__all__ = ["DepthChart", "depth_chart_of", "limit_steps", "paint_depth", "ramp"]

Floats = NDArray[np.float64]
Bytes = NDArray[np.uint8]

# One hue from light to dark: the deeper, the darker.
_LIGHT, _DARK = np.array(to_rgb("#d7eaec")), np.array(to_rgb("#07424d"))
_MOST_STEPS = 7
# The shallowest part of the area that need not have shades of its own.
_SHALLOW = 0.05
_ROUND = (0.05, 0.1, 0.2, 0.25, 0.5, 1.0, 2.0, 5.0, 50.0)
# Beyond this radius about its middle a region is shown on the whole sky, degrees.
_WIDEST_DEG = 50.0
# What lies within this radius can always be shown together, degrees.
_NEAR_DEG = 6.0
_WIDEST_IN = 3.6
_LEFT, _BETWEEN, _RIGHT = 0.42, 0.16, 0.06
# Above each chart its band and its bar, below a column the labels and what limits mean.
_HEAD, _FOOT, _TERMS, _BAR = 0.44, 0.32, 0.22, 0.08
_DIRECTIONS = 4000


@dataclass(frozen=True, eq=False)
class DepthChart:
    """What a chart of depths shows, and how it is laid out.

    Attributes
    ----------
    bands : tuple of str
        A panel each.
    deepest : DeepestLimits
        Limits of every place.
    window : Window
        The same for all panels.
    terms : str
        System, significance and extinction of the limits.
    """

    bands: tuple[str, ...]
    deepest: DeepestLimits
    window: Window
    terms: str

    @property
    def _columns(self) -> int:
        number = len(self.bands)
        return min(number, 2 if self.window.code == "MOL" or number in (2, 4) else 3)

    @property
    def _size(self) -> tuple[float, float]:
        """Width and height of a panel, inches."""
        columns = self._columns
        width = (WIDTH_IN - _LEFT - _RIGHT - _BETWEEN * (columns - 1)) / columns
        if self.window.code == "ZEA":
            width = min(width, _WIDEST_IN)
        return width, width * self.window.aspect

    @property
    def height_in(self) -> float:
        """Height of the figure, inches."""
        rows = -(-len(self.bands) // self._columns)
        return rows * (self._size[1] + _HEAD + _FOOT) + _TERMS

    def draw(self, skymap: SkyMap) -> Figure:
        """Draw it, with the contours of a map version."""
        figure, total = new_figure(self.height_in), self.height_in
        width, height = self._size
        position = samples_of(self.window, width)
        place = np.where(position < 0, -1, self.deepest.set_at(position))
        for number, band in enumerate(self.bands):
            row, column = divmod(number, self._columns)
            left = _LEFT + column * (width + _BETWEEN)
            top = total - row * (height + _HEAD + _FOOT)
            axes = figure.add_axes(
                (
                    left / WIDTH_IN,
                    (top - _HEAD - height) / total,
                    width / WIDTH_IN,
                    height / total,
                )
            )
            limit = self.deepest.limit_of(band)
            steps, is_open = limit_steps(limit, self.deepest.area_deg2)
            picture = paint_depth(limit, steps, place)
            picture[position < 0] = 0
            paint(axes, self.window, picture)
            self._frame(axes, is_first=column == 0)
            contours(axes, self.window, skymap, position, labels=width > 2.5)
            bar = figure.add_axes(
                (
                    (left + 0.36 * width) / WIDTH_IN,
                    (top - 0.06 - _BAR) / total,
                    0.6 * width / WIDTH_IN,
                    _BAR / total,
                )
            )
            _draw_bar(bar, steps, is_open)
            x, y = left / WIDTH_IN, (top - 0.06 - _BAR / 2) / total
            figure.text(x, y, f"band {short_label(band, 12)}", va="center", fontsize=7.5)
        words = f"deepest limit (mag): {self.terms}"
        figure.text(_LEFT / WIDTH_IN, 0.05 / total, words, fontsize=7, va="bottom")
        _key_without(figure, self._shows_without)
        return figure

    @property
    def is_open(self) -> bool:
        """Whether the palest shade of any panel takes in all that is shallower."""
        area = self.deepest.area_deg2
        return any(limit_steps(self.deepest.limit_of(band), area)[1] for band in self.bands)

    def lines_text(self, part: Part, version: str) -> str:
        """Say what the lines over the charts are, where any are in sight.

        ``part`` is of the region that has contours, ``version`` the map's name.
        """
        text = ""
        if self.window.shows(part.lonlat_deg).any():
            text += f" Contours: 50{NBSP}% and 90{NBSP}% (dashed) of {version}."
        if len(galactic_plane(self.window)):
            text += " Dotted: the Galactic plane."
        return text

    @property
    def _shows_without(self) -> bool:
        return any(bool(np.isneginf(self.deepest.limit_of(band)).any()) for band in self.bands)

    def _frame(self, axes: Axes, *, is_first: bool) -> None:
        if self.window.code == "MOL":
            whole_sky_frame(axes, self.window, labels=True)
            return
        zoom_frame(axes, self.window)
        if is_first:
            scale_bar(axes, self.window)
        else:
            axes.set_yticklabels([])


def depth_chart_of(results: Results, terms: str, part: Part) -> DepthChart | None:
    """Lay out the chart of depths; None without a limit anywhere.

    Parameters
    ----------
    results : Results
        With the deepest limits of every place.
    terms : str
        System, significance and extinction of the limits.
    part : Part
        The most probable part of the newest map, which is shown as well where it is near.
    """
    deepest = results.sky.deepest
    if deepest is None:
        return None
    bands = [str(row.band) for row in depth_bands(results)]
    bands = [band for band in bands if band in deepest.bands][:MOST_BANDS]
    rows = [deepest.bands.index(band) for band in bands]
    limited = np.asarray(np.isfinite(deepest.limit[rows]).any(axis=0))
    if not limited.any():
        return None
    window = _window(_directions(deepest, limited), part)
    return DepthChart(tuple(bands), deepest, window, terms)


def _directions(deepest: DeepestLimits, chosen: NDArray[np.bool_]) -> Floats:
    """Spread at most a few thousand directions, shape (n, 2), over the patches of chosen sets."""
    patch = np.flatnonzero(chosen[deepest.group])
    patch = patch[:: max(1, patch.size // _DIRECTIONS)]
    middle = span_middle(deepest.starts[patch], deepest.stops[patch])
    lon, lat = healpix_to_lonlat(middle, 1 << LINE_ORDER, order="nested")
    return np.stack((lon.to_value(u.deg), lat.to_value(u.deg)), axis=1)


def _window(lonlat_deg: Floats, part: Part) -> Window:
    """Return the window of directions and a part near by: the whole sky if they are far spread."""
    both = np.concatenate((lonlat_deg, part.lonlat_deg))
    for shown in (both, lonlat_deg):
        extent = _radius_deg(shown)
        # The part is there for comparison and must not make what is charted small.
        least = max(2.5 * _radius_deg(lonlat_deg), _NEAR_DEG)
        if extent < _WIDEST_DEG and (shown is lonlat_deg or extent < least):
            return zoom_window(shown, margin=0.06, aspects=(0.6, 1.1))
    return whole_sky_window(middle_ra(part))


def _radius_deg(lonlat_deg: Floats) -> float:
    """Return how far directions reach from their middle, degrees; 180 without one."""
    vector = lonlat_to_vector(*lonlat_deg.T)
    middle = vector.sum(axis=0)
    length = float(np.linalg.norm(middle))
    if length < 1e-9:
        return 180.0
    cosine = float((vector @ middle).min()) / length
    return float(np.degrees(np.arccos(np.clip(cosine, -1, 1))))


def limit_steps(limit: Floats, area: Floats) -> tuple[Floats, bool]:
    """Return round magnitudes, rising, between which limits share a shade.

    A few shallow places would leave all others in one shade: where they matter, the
    first shade takes in all that is shallower.

    Parameters
    ----------
    limit : float64 array, shape (n,)
        At least one is finite.
    area : float64 array, shape (n,)
        Of the places that have it.

    Returns
    -------
    steps : float64 array
        One more than there are shades.
    is_open : bool
        Whether any limit is shallower than the first step.
    """
    known = np.flatnonzero(np.isfinite(limit))
    order = known[np.argsort(limit[known], kind="stable")]
    held = np.cumsum(area[order])
    value = limit[order]
    low = float(value[min(int(np.searchsorted(held, _SHALLOW * held[-1])), value.size - 1)])
    high = float(value[-1])
    for step in _ROUND:
        first, last = np.floor(low / step + 1e-6), np.ceil(high / step - 1e-6)
        if last - first <= _MOST_STEPS:
            break
    steps = np.asarray(step * np.arange(first, max(last, first + 1) + 1))
    return steps, bool(value[0] < steps[0] - 1e-6)


def ramp(number: int) -> Bytes:
    """Return so many shades from light to dark, shape (number, 3); a middle one alone."""
    part = np.linspace(0, 1, number)[:, None] if number > 1 else np.array([[0.6]])
    return np.asarray(np.rint(255 * (_LIGHT + (_DARK - _LIGHT) * part)), dtype=np.uint8)


def paint_depth(limit: Floats, steps: Floats, place: Ints) -> Bytes:
    """Paint the limits of one band.

    Parameters
    ----------
    limit : float64 array, shape (sets,)
        As `DeepestLimits.limit`.
    steps : float64 array, shape (n + 1,)
        Between which limits share a shade.
    place : int64 array, shape (rows, columns)
        The set at each sample; −1 for none.

    Returns
    -------
    uint8 array, shape (rows, columns, 4)
        White where the band did not look, hatched where it has no limit.
    """
    shades = ramp(len(steps) - 1)
    known = np.isfinite(limit)
    shade = np.zeros(limit.size + 1, dtype=np.int8)
    number = np.searchsorted(steps, limit[known] + 1e-9, side="right") - 1
    shade[:-1][known] = 2 + number.clip(0, len(shades) - 1)
    shade[:-1][np.isneginf(limit)] = 1
    white = np.full(3, 255, dtype=np.uint8)
    colours = np.vstack((white, white, shades))
    row = shade[place]
    picture = np.full((*place.shape, 4), 255, dtype=np.uint8)
    picture[..., :3] = colours[row]
    hatched = (row == 1) & hatch_mask(0, (place.shape[0], place.shape[1]))
    picture[hatched, :3] = np.rint(255 * np.array(to_rgb(GREY)))
    return picture


def _draw_bar(axes: Axes, steps: Floats, is_open: bool) -> None:
    """Draw the shades in order, with magnitudes between them; none at an open end."""
    shades = ramp(len(steps) - 1)
    ends = steps[0], steps[-1]
    axes.imshow(shades[None], extent=(*ends, 0, 1), interpolation="none", aspect="auto")
    axes.set_xlim(*ends)
    axes.set_yticks([])
    shown = steps[::-1][:: 1 if len(steps) <= 5 else 2][::-1]
    if is_open and shown[0] == steps[0]:
        shown = shown[1:]
    decimals = 2 if round(100 * (steps[1] - steps[0])) % 10 else 1
    axes.set_xticks(shown, [f"{value:.{decimals}f}" for value in shown], fontsize=6)
    axes.tick_params(length=1.5, pad=1)
    for spine in axes.spines.values():
        spine.set(linewidth=0.4, color=RULE)


def _key_without(figure: Figure, is_shown: bool) -> None:
    """Explain the hatch of what was covered without a limit."""
    if not is_shown:
        return
    total = figure.get_figheight()
    picture = np.full((20, 40, 4), 255, dtype=np.uint8)
    picture[hatch_mask(0, (20, 40)), :3] = np.rint(255 * np.array(to_rgb(GREY)))
    x, y = WIDTH_IN - 1.72, 0.05
    axes = figure.add_axes((x / WIDTH_IN, y / total, 0.2 / WIDTH_IN, 0.1 / total))
    axes.imshow(picture, interpolation="none", aspect="auto")
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set(linewidth=0.4, color=RULE)
    figure.text((x + 0.26) / WIDTH_IN, y / total, "covered without a limit", fontsize=7)
