"""The picture under every chart of the sky: shades of probability, regions inked over them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from skytally.figure_style import is_hatched
from skytally.skymap import SkyMap
from skytally.spans import Ints, Spans

__all__ = ["TAIL", "Inks", "Layer", "paint_sky", "ramp_key"]

Floats = NDArray[np.float64]
Bytes = NDArray[np.uint8]

_STEPS = 20
# The last part of the probability stays white: it often fills the whole sky.
TAIL = 1 / _STEPS
# One hue from light to dark, each step an equal share of the probability. The
# first row is for no probability at all, the second for the tail.
_LIGHT, _DARK = np.array(to_rgb("#f1f3f5")), np.array(to_rgb("#8894a0"))
_RAMP = _LIGHT + (_DARK - _LIGHT) * (np.arange(_STEPS + 1)[:, None] / _STEPS)
_RAMP[:2] = 1.0
_EVEN_INK, _HATCH_INK, _BETWEEN = 0.8, 0.85, 0.2


@dataclass(frozen=True, eq=False)
class Layer:
    """A region to be inked in one colour, evenly where it has no hatch."""

    region: Spans
    colour: str
    hatch: int | None


@dataclass(frozen=True, eq=False)
class Inks:
    """Regions to be inked, the line cut at all of their edges: one search finds who is where.

    Attributes
    ----------
    layers : tuple of Layer
        The later over the earlier.
    edges : int64 array, shape (n,)
        Edges of all regions, rising.
    members : bool array, shape (layers, n)
        Whose the line is from each edge on.
    """

    layers: tuple[Layer, ...]
    edges: Ints
    members: NDArray[np.bool_]

    @classmethod
    def of(cls, layers: Sequence[Layer]) -> Inks:
        """Cut the line."""
        edges = [layer.region.edges for layer in layers]
        owner = np.repeat(np.arange(len(layers)), [one.size for one in edges])
        every = np.concatenate(edges) if edges else np.empty(0, dtype=np.int64)
        order = np.argsort(every, kind="stable")
        owner = owner[order]
        members = np.zeros((len(layers), order.size), dtype=bool)
        for number, member in enumerate(members):
            # Each edge of a region enters or leaves it.
            np.logical_xor.accumulate(owner == number, out=member)
        return cls(tuple(layers), every[order], members)


def paint_sky(position: Ints, skymap: SkyMap, inks: Inks) -> Bytes:
    """Paint a map version and regions over it.

    Parameters
    ----------
    position : int64 array, shape (rows, columns)
        Positions on the line; −1 off the sky.
    skymap : SkyMap
        What is shaded.
    inks : Inks
        What is laid over it.

    Returns
    -------
    uint8 array, shape (rows, columns, 4)
        Red, green, blue and opacity, which is 0 off the sky.
    """
    on_sky = position >= 0
    shade = np.append(_shade(skymap.credible_levels, skymap.density_per_sr), np.int8(0))
    shade = shade[skymap.cell_at(position)]
    image = np.empty((*position.shape, 4), dtype=np.uint8)
    image[..., :3] = _bytes(_RAMP)[shade]
    image[..., 3] = 255 * on_sky
    # Regions cover little of a chart, so only what they cover is mixed as floats.
    place = np.searchsorted(inks.edges, position, side="right") - 1
    inked = np.append(inks.members.any(axis=0), False)[place] & on_sky
    y, x = np.nonzero(inked)
    place = place[inked]
    paper = _RAMP[shade[inked]]
    colour = paper.copy()
    for layer, member in zip(inks.layers, inks.members):
        mine = np.flatnonzero(member[place])
        opacity = _ink(layer.hatch, x[mine], y[mine])[:, None]
        # Darkened by the paper, or in grey a pale ink would not show on a dark shade.
        ink = paper[mine] * np.array(to_rgb(layer.colour))
        colour[mine] += (ink - colour[mine]) * opacity
    image[inked, :3] = _bytes(colour)
    return image


def ramp_key() -> Floats:
    """Return the shades in order, densest first, as a picture (2, steps, 3)."""
    return np.repeat(_RAMP[None, :0:-1], 2, axis=0)


def _shade(level: Floats, density: Floats) -> NDArray[np.int8]:
    """Return the row of the ramp for credible levels and densities."""
    share = np.where(density > 0, 1 - level, 0.0)
    return np.ceil(share * _STEPS - 1e-9).astype(np.int8)


def _ink(hatch: int | None, x: Ints, y: Ints) -> Floats:
    if hatch is None:
        return np.full(x.shape, _EVEN_INK)
    return np.where(is_hatched(hatch, x, y), _HATCH_INK, _BETWEEN)


def _bytes(colour: Floats) -> Bytes:
    return np.rint(255 * colour).astype(np.uint8)
