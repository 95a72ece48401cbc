"""How every figure looks, and how it becomes a piece of a page.

Figures are matplotlib `Figure` objects, never pyplot's: nothing global is
touched. Their SVG is taken apart and put together again, so that no style
sheet, style attribute, comment or metadata of it reaches the page, ids of two
figures never meet, and the same results give the same bytes.
"""

from __future__ import annotations

import base64
import io
import re
import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any
from xml.etree import ElementTree

import matplotlib
import numpy as np
from matplotlib import image
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure
from numpy.typing import NDArray

__all__ = [
    "ACCENT",
    "GREY",
    "INK",
    "RULE",
    "WIDTH_IN",
    "Drawing",
    "Sketch",
    "TelescopeStyle",
    "hatch_mask",
    "is_hatched",
    "new_figure",
    "plain_axes",
    "short_label",
    "style_of",
    "swatch",
    "swatch_svg",
]

INK = "#1d2226"
GREY = "#5a6268"
RULE = "#c9ced2"
ACCENT = "#0b5d6b"
# The text width of an A4 page with the margins of print.css.
WIDTH_IN = 6.7

# Okabe and Ito, Color Universal Design (2008; from memory): told apart with any
# common colour vision. Its yellow is left out: too pale on white.
_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
# Twelve of each kind, so that in grey as well a dozen telescopes can be told apart.
_LINES: tuple[str | tuple[int, tuple[float, ...]], ...] = (
    "-",
    (0, (5, 1.5)),
    (0, (1.2, 1.2)),
    (0, (6, 1.5, 1.2, 1.5)),
    (0, (2.5, 1)),
    (0, (8, 1.5, 1.2, 1.5, 1.2, 1.5)),
    (0, (12, 2)),
    (0, (1.2, 3.5)),
    (0, (5, 4)),
    (0, (8, 1.5, 2.5, 1.5)),
    (0, (4, 1.2, 4, 1.2, 1.2, 1.2)),
    (0, (12, 1.5, 1.2, 1.5, 1.2, 1.5, 1.2, 1.5)),
)
_MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<", "*", ">", "p", "d")
# Patterns repeat every 10 samples: x + y, x − y, x, y, both diagonals, dots; then
# every 20, broader: the same four directions in bands, a grid, and a chequer.
_HATCH_PERIOD = 10
_HATCHES: tuple[Callable[[NDArray[np.int64], NDArray[np.int64]], NDArray[np.bool_]], ...] = (
    lambda x, y: (x + y) % _HATCH_PERIOD < 2,
    lambda x, y: (x - y) % _HATCH_PERIOD < 2,
    lambda x, y: y % _HATCH_PERIOD < 2,
    lambda x, y: x % _HATCH_PERIOD < 2,
    lambda x, y: ((x + y) % _HATCH_PERIOD < 2) | ((x - y) % _HATCH_PERIOD < 2),
    lambda x, y: (x % (_HATCH_PERIOD // 2) < 2) & (y % (_HATCH_PERIOD // 2) < 2),
    lambda x, y: (x + y) % (2 * _HATCH_PERIOD) < 8,
    lambda x, y: (x - y) % (2 * _HATCH_PERIOD) < 8,
    lambda x, y: y % (2 * _HATCH_PERIOD) < 8,
    lambda x, y: x % (2 * _HATCH_PERIOD) < 8,
    lambda x, y: (x % _HATCH_PERIOD < 2) | (y % _HATCH_PERIOD < 2),
    lambda x, y: (x // _HATCH_PERIOD + y // _HATCH_PERIOD) % 2 == 0,
)

_RC: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 7.5,
    "text.color": INK,
    "text.parse_math": False,
    "axes.edgecolor": GREY,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.titlesize": 8,
    "axes.unicode_minus": True,
    "xtick.color": GREY,
    "ytick.color": GREY,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "lines.linewidth": 1.1,
    "svg.fonttype": "none",
    "svg.image_inline": True,
    "path.simplify": True,
}

_LONG_FRACTION = re.compile(r"(\.\d\d)\d+")
_SVG = "http://www.w3.org/2000/svg"
_XLINK = "http://www.w3.org/1999/xlink"


@dataclass(frozen=True)
class TelescopeStyle:
    """How one telescope is drawn everywhere: colour, and line, marker and hatch beside it."""

    colour: str
    line: str | tuple[int, tuple[float, ...]]
    marker: str
    hatch: int


def style_of(index: int) -> TelescopeStyle:
    """Return the style of the telescope with this index.

    Seven colours and twelve hatches have no common factor: 84 styles differ.
    """
    turn = index % len(_HATCHES)
    return TelescopeStyle(
        _COLOURS[index % len(_COLOURS)],
        _LINES[turn],
        _MARKERS[turn],
        turn,
    )


def hatch_mask(hatch: int, shape: tuple[int, int]) -> NDArray[np.bool_]:
    """Return which samples of a grid (rows, columns) a hatch inks."""
    y, x = np.indices(shape)
    return is_hatched(hatch, x, y)


def is_hatched(hatch: int, x: NDArray[np.int64], y: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Return which samples, given by column and row, a hatch inks."""
    return _HATCHES[hatch](x, y)


@dataclass(frozen=True)
class Drawing:
    """One finished figure.

    Attributes
    ----------
    name : str
        Short and unique on the page; made of letters and hyphens.
    title : str
        What is shown.
    caption : str
        Sentences that state what the figure concludes, from the data.
    alt : str
        What a reader who does not see it needs to know.
    height_in : float
        Height in inches; its width is the text width.
    svg : str
        A self-contained ``<svg>`` element for an HTML page.
    """

    name: str
    title: str
    caption: str
    alt: str
    height_in: float
    svg: str


def new_figure(height_in: float, width_in: float = WIDTH_IN) -> Figure:
    """Return an empty figure; call it inside `Sketch.draw` only."""
    figure = Figure(figsize=(width_in, height_in), dpi=144)
    FigureCanvasSVG(figure)
    return figure


@dataclass(frozen=True)
class Sketch:
    """A figure to be drawn: all that a page needs to keep its place.

    Attributes
    ----------
    name, title, caption, alt, height_in
        As in `Drawing`.
    make : callable
        Makes it, of this height, with `new_figure`.
    """

    name: str
    title: str
    caption: str
    alt: str
    height_in: float
    make: Callable[[], Figure]

    def draw(self) -> Drawing:
        """Make the figure in our style."""
        settings: Any = {**_RC, "svg.hashsalt": self.name}
        with matplotlib.rc_context(settings), warnings.catch_warnings():
            # A name in a script that DejaVu lacks: the page's own fonts draw the text.
            warnings.filterwarnings("ignore", message="Glyph .* missing from font")
            warnings.filterwarnings("ignore", message="Matplotlib currently does not support")
            figure = self.make()
            stream = io.StringIO()
            figure.savefig(stream, format="svg", metadata={"Date": None}, transparent=True)
        svg = _clean(stream.getvalue(), self.name, self.alt)
        return Drawing(self.name, self.title, self.caption, self.alt, self.height_in, svg)


def short_label(text: str, most: int = 28) -> str:
    """Return a name fit for a figure: one line, no control characters, not too long."""
    clean = "".join(c if c.isprintable() else " " for c in text).strip()
    return clean if len(clean) <= most else f"{clean[: most - 1].rstrip()}…"


def plain_axes(axes: Axes) -> None:
    """Leave an axes only its left and bottom edge."""
    axes.spines[["top", "right"]].set_visible(False)
    axes.tick_params(length=3, pad=2)


def _clean(text: str, name: str, alt: str) -> str:
    """Rebuild an SVG with presentation attributes for styles and ids of its own."""
    root = ElementTree.fromstring(text)
    for parent in list(root.iter()):
        for child in list(parent):
            if child.tag in {f"{{{_SVG}}}metadata", f"{{{_SVG}}}style"}:
                parent.remove(child)
    kept = _referenced(root)
    for element in root.iter():
        element.tag = str(element.tag).removeprefix(f"{{{_SVG}}}")
        attributes = dict(element.attrib)
        element.attrib.clear()
        attributes.update(_declarations(attributes.pop("style", "")))
        for key, value in attributes.items():
            key = "href" if key == f"{{{_XLINK}}}href" else key
            if key == "id":
                if value not in kept:
                    continue
                value = f"{name}-{value}"
            elif key == "href" and value.startswith("#"):
                value = f"#{name}-{value[1:]}"
            if key in {"d", "points", "x", "y"}:
                # A hundredth of a point is finer than any printer.
                value = _LONG_FRACTION.sub(r"\1", value)
            value = re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", value)
            element.set(key, value)
    for key in ("width", "height", "version"):
        root.attrib.pop(key, None)
    root.set("xmlns", _SVG)
    root.set("role", "img")
    root.set("aria-label", alt)
    root.set("class", "figure")
    root.set("stroke-linejoin", "round")
    return ElementTree.tostring(root, encoding="unicode", short_empty_elements=True)


def _referenced(root: ElementTree.Element) -> set[str]:
    """Return the ids that something in the figure points at."""
    found: set[str] = set()
    for element in root.iter():
        for key, value in element.attrib.items():
            if key.endswith("href") and value.startswith("#"):
                found.add(value[1:])
            found.update(re.findall(r"url\(#([^)]+)\)", value))
    return found


def _declarations(style: str) -> dict[str, str]:
    """Split a style attribute into presentation attributes; the font shorthand in its parts."""
    found: dict[str, str] = {}
    for declaration in style.split(";"):
        key, _, value = declaration.partition(":")
        key, value = key.strip(), value.strip()
        if key == "font":
            match = re.fullmatch(
                r"((?:italic|oblique|bold|\d{3}) )*(?P<size>[\d.]+px) (?P<family>.+)", value
            )
            if match is not None:
                weight = re.search(r"\b(bold|[1-9]00)\b", value.split("px")[0])
                found["font-size"] = match["size"]
                found["font-family"] = match["family"]
                if weight is not None and weight[1] != "400":
                    found["font-weight"] = weight[1]
        elif key and key != "white-space":
            found[key] = value
    return found


def swatch(index: int, width: int = 34, height: int = 20) -> NDArray[np.float64]:
    """Return the picture (height, width, 4) of a telescope's colour and hatch for a key."""
    style = style_of(index)
    colour: Sequence[float] = to_rgb(style.colour)
    picture = np.zeros((height, width, 4))
    picture[..., :3] = colour
    picture[..., 3] = np.where(hatch_mask(style.hatch, (height, width)), 0.95, 0.22)
    return picture


@cache
def swatch_uri(index: int) -> str:
    """Return the same key as a PNG in a ``data:`` URI."""
    rows = np.rint(255 * swatch(index)).astype(np.uint8)
    stream = io.BytesIO()
    image.imsave(stream, rows, format="png", metadata={"Software": "skytally"})
    return f"data:image/png;base64,{base64.b64encode(stream.getvalue()).decode()}"


@cache
def swatch_svg(index: int) -> str:
    """Return the same key as an ``<svg>`` element to stand beside a name."""
    height, width, _ = swatch(index).shape
    return (
        f'<svg class="swatch" viewBox="0 0 {width} {height}" aria-hidden="true">'
        f'<image width="{width}" height="{height}" href="{swatch_uri(index)}"/></svg>'
    )
