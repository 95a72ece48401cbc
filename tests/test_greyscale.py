"""What the figures tell by colour, told apart once more after the colour is gone.

Renderings are turned to grey with the relative luminance of WCAG 2.1 and compared
whatever their phase: two patterns are alike if some shift lays one over the other.
"""

from __future__ import annotations

import base64
import io
import re
from itertools import combinations

import numpy as np
import pytest
from matplotlib import image
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from sample_results import sample_results
from skytally.figure_style import WIDTH_IN, style_of, swatch
from skytally.figures import draw_figures
from skytally.sky_picture import Inks, Layer, paint_sky, ramp_key
from skytally.skymap import SkyMap
from skytally.spans import FULL_SKY_SR, Spans, cell_to_span

Floats = np.ndarray
# As many telescopes as have a hatch, a line and a marker of their own.
DOZEN = range(12)


def grey(rgb: Floats) -> Floats:
    """Relative luminance of WCAG 2.1 of colours from 0 to 1, shape (..., 3)."""
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    return np.asarray(linear @ [0.2126, 0.7152, 0.0722])


def inked(picture: Floats) -> Floats:
    """Tell dark from light, half way between the darkest and the lightest grey."""
    return np.asarray(picture < (picture.min() + picture.max()) / 2)


def least_difference(first: Floats, second: Floats) -> float:
    """Share of two periodic patterns that differs, wherever the second is moved to."""
    rows, columns = first.shape
    spectrum = np.fft.fft2(first - 0.5) * np.conj(np.fft.fft2(second - 0.5))
    # Samples that agree less those that do not, for every shift at once.
    agreement = 4 * np.fft.ifft2(spectrum).real / (rows * columns)
    return float((1 - agreement.max()) / 2)


def test_the_measure_knows_a_moved_pattern_from_another() -> None:
    y, x = np.indices((40, 40))
    lines, moved, turned = (x + y) % 10 < 2, (x + y + 3) % 10 < 2, (x - y) % 10 < 2
    assert least_difference(lines, moved) == pytest.approx(0, abs=1e-9)
    assert least_difference(lines, ~lines) > 0.3
    # By hand: of 100 cells 20 in each, 4 in both, wherever they are moved to.
    assert least_difference(lines, turned) == pytest.approx(0.32)


def on_white(picture: Floats) -> Floats:
    """Lay a picture with opacity, shape (..., 4), over white paper."""
    return np.asarray(picture[..., :3] * picture[..., 3:] + 1 - picture[..., 3:])


def test_hatches_in_grey_are_no_two_alike() -> None:
    pictures = [grey(on_white(swatch(index, 40, 40))) for index in DOZEN]
    for picture in pictures:
        assert np.ptp(picture) > 0.15, "the hatch shows in grey"
    for first, second in combinations(map(inked, pictures), 2):
        assert least_difference(first, second) > 0.1


@pytest.mark.parametrize("shade", [0.0, 0.5, 1.0])
def test_footprints_in_grey_are_no_two_alike_on_any_shade(shade: float) -> None:
    """Painted as the charts paint them, over sky of little, some and most probability."""
    start, stop = cell_to_span(0, np.arange(12))
    share = np.array([shade, 1 - shade, *[0.0] * 10]) * 0.98 + 0.02 / 12
    share /= share.sum()
    skymap = SkyMap(start, stop, share * 12 / FULL_SKY_SR, 0)
    region = Spans.from_cells(0, np.array([0]))
    place = np.full((40, 40), start[0] + 5)
    patterns = []
    for index in DOZEN:
        style = style_of(index)
        picture = paint_sky(place, skymap, Inks.of([Layer(region, style.colour, style.hatch)]))
        bright = grey(picture[..., :3] / 255)
        assert np.ptp(bright) > 0.08, "the hatch shows in grey"
        patterns.append(inked(bright))
    for first, second in combinations(patterns, 2):
        assert least_difference(first, second) > 0.1


def rendered(index: int, kind: str) -> Floats:
    """Draw a telescope's line or marker large, in grey, shape (rows, columns)."""
    style = style_of(index)
    figure = Figure(figsize=(4, 0.5) if kind == "line" else (0.5, 0.5), dpi=100)
    canvas = FigureCanvasAgg(figure)
    axes = figure.add_axes((0, 0, 1, 1))
    axes.axis("off")
    axes.set(xlim=(0, 1), ylim=(-1, 1))
    if kind == "line":
        axes.plot([0, 1], [0, 0], color=style.colour, ls=style.line, lw=3)
    else:
        axes.plot([0.5], [0], marker=style.marker, ms=22, color=style.colour, mfc="none", mew=3)
    canvas.draw()
    return grey(np.asarray(canvas.buffer_rgba())[..., :3] / 255)


@pytest.mark.parametrize("kind", ["line", "marker"])
def test_lines_and_markers_in_grey_are_no_two_alike(kind: str) -> None:
    pictures = [rendered(index, kind) for index in DOZEN]
    if kind == "line":
        # Along the middle of each; dashes do not fit the width, so beyond it lies white.
        pictures = [
            np.pad(picture[24:26], ((0, 0), (0, 400)), constant_values=1.0) for picture in pictures
        ]
    for picture in pictures:
        assert picture.min() < 0.55, "it stands out from white paper"
    for first, second in combinations(map(inked, pictures), 2):
        ink = max(first.mean(), second.mean())
        assert least_difference(first, second) > 0.1 * ink


def test_probability_in_grey_rises_with_every_step() -> None:
    bright = grey(ramp_key()[0])
    assert (np.diff(bright) > 0.005).all(), "the densest is the darkest"


def test_the_shares_drawn_are_told_apart_in_grey() -> None:
    """The credit bar as it stands in the page: a pattern for each share, and for what is left."""
    results = sample_results(exposures=60)
    svg = draw_figures(results)["credit"].svg
    found = re.findall(r"data:image/png;base64,([^\"]+)", svg)
    pictures = [image.imread(io.BytesIO(base64.b64decode(data))) for data in found]
    patterns = [inked(grey(on_white(p)))[:40, :60] for p in pictures if min(p.shape[:2]) >= 40]
    patterns = [pattern for pattern in patterns if pattern.shape[1] == 60]
    shares = [results.row(telescope=t.name).probability_credit for t in results.telescopes]
    assert len(patterns) == sum(share * WIDTH_IN * 192 >= 60 for share in shares) + 1
    for first, second in combinations(patterns, 2):
        assert least_difference(first, second) > 0.05
