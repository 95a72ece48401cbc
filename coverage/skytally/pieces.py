"""Convex pieces of footprints: intersections of spherical caps.

A great-circle edge is a cap of 90°, a circle is one cap. A convex piece is a list
of caps; any simple polygon is a few convex pieces.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from skytally.shapes import Circle, Polygon, lonlat_to_vector
from skytally.spans import Ints

__all__ = ["Pieces", "convex_parts", "pieces_of_circles", "pieces_of_rings", "pieces_of_shape"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Pieces:
    """Convex pieces of footprints, each an intersection of spherical caps.

    Attributes
    ----------
    normal : float64 array, shape (p, k, 3)
        Unit vectors to the caps' centres; the first is repeated where a piece
        has fewer caps than others.
    radius_rad : float64 array, shape (p,)
        Radius of a piece's caps: π/2 for great-circle edges, else the circle's.
    middle : float64 array, shape (p, 3)
        Centre of a circle around the piece.
    bound_rad : float64 array, shape (p,)
        Its radius.
    owner : int64 array, shape (p,)
        Footprint of each piece, not decreasing.
    area_sr, edge_rad2 : float64 arrays, shape (p,)
        Solid angle, and the sum of the squared lengths of the edges: what the
        error of the centre rule scales with.
    """

    normal: Floats
    radius_rad: Floats
    middle: Floats
    bound_rad: Floats
    owner: Ints
    area_sr: Floats
    edge_rad2: Floats

    def __len__(self) -> int:
        return int(self.owner.size)

    def take(self, which: Ints | Bools, owner: Ints) -> Pieces:
        """Return the pieces named, with new owners."""
        return Pieces(
            self.normal[which],
            self.radius_rad[which],
            self.middle[which],
            self.bound_rad[which],
            owner,
            self.area_sr[which],
            self.edge_rad2[which],
        )

    @classmethod
    def stack(cls, parts: list[Pieces]) -> Pieces:
        """Put pieces one after the other; owners are kept, caps padded to one number."""
        caps = max((p.normal.shape[1] for p in parts), default=1)
        normal = [
            np.concatenate((p.normal, *[p.normal[:, :1]] * (caps - p.normal.shape[1])), axis=1)
            for p in parts
        ]
        none = np.empty(0)
        return cls(
            np.concatenate([np.empty((0, caps, 3)), *normal]),
            np.concatenate([none, *(p.radius_rad for p in parts)]),
            np.concatenate([np.empty((0, 3)), *(p.middle for p in parts)]),
            np.concatenate([none, *(p.bound_rad for p in parts)]),
            np.concatenate([np.empty(0, dtype=np.int64), *(p.owner for p in parts)]),
            np.concatenate([none, *(p.area_sr for p in parts)]),
            np.concatenate([none, *(p.edge_rad2 for p in parts)]),
        )


def pieces_of_circles(centre: Floats, radius_rad: Floats, owner: Ints) -> Pieces:
    """Make pieces of circles: centres (p, 3), radii (p,) in radians."""
    perimeter = 2 * np.pi * np.sin(np.minimum(radius_rad, np.pi / 2))
    return Pieces(
        centre[:, None, :],
        radius_rad,
        centre,
        radius_rad,
        owner,
        2 * np.pi * (1 - np.cos(radius_rad)),
        perimeter**2 / 8,
    )


def pieces_of_rings(vertex: Floats, owner: Ints) -> Pieces:
    """Make pieces of convex rings with great-circle edges.

    Parameters
    ----------
    vertex : float64 array, shape (p, m, 3)
        Unit vectors of the corners in order, either winding.
    owner : int64 array, shape (p,)
        Footprint of each ring.
    """
    following = np.roll(vertex, -1, axis=1)
    normal = np.cross(vertex, following)
    normal /= np.linalg.norm(normal, axis=2, keepdims=True)
    middle = vertex.sum(axis=1)
    middle /= np.linalg.norm(middle, axis=1, keepdims=True)
    inward = np.sign(np.einsum("pkc,pc->p", normal, middle))
    chord = np.linalg.norm(vertex - middle[:, None, :], axis=2)
    return Pieces(
        normal * inward[:, None, None],
        np.full(normal.shape[0], np.pi / 2),
        middle,
        2 * np.arcsin(np.minimum(chord.max(axis=1) / 2, 1.0)),
        owner,
        _ring_area_sr(vertex, middle),
        np.sum((vertex - following) ** 2, axis=(1, 2)),
    )


def _ring_area_sr(vertex: Floats, middle: Floats) -> Floats:
    """Exact solid angle of convex rings (p, m, 3): fans of triangles about the middle.

    Triangle: tan(E/2) = |a·(b×c)| / (1 + a·b + b·c + c·a) (IEEE Trans. Biomed.
    Eng. 30 125, 1983, DOI 10.1109/TBME.1983.325207).
    """
    following = np.roll(vertex, -1, axis=1)
    a = middle[:, None, :]
    volume = np.abs(
        np.einsum("pmc,pmc->pm", np.cross(vertex, following), np.broadcast_to(a, vertex.shape))
    )
    below = (
        1
        + np.sum(a * vertex, axis=2)
        + np.sum(a * following, axis=2)
        + np.sum(vertex * following, axis=2)
    )
    return np.asarray(np.sum(2 * np.arctan2(volume, below), axis=1))


def convex_parts(ring: Floats) -> list[Ints]:
    """Split a simple plane polygon (m, 2) into convex rings of vertex numbers.

    A convex polygon is returned whole; any other is cut into triangles by
    clipping ears.
    """
    left = list(range(len(ring)))
    area2 = float(
        np.sum(ring[:, 0] * np.roll(ring[:, 1], -1) - np.roll(ring[:, 0], -1) * ring[:, 1])
    )
    if area2 < 0:
        left.reverse()

    def turn(i: int, j: int, k: int) -> float:
        (ax, ay), (bx, by), (cx, cy) = ring[i], ring[j], ring[k]
        return float((bx - ax) * (cy - by) - (by - ay) * (cx - bx))

    turns = [turn(left[i - 1], left[i], left[(i + 1) % len(left)]) for i in range(len(left))]
    if min(turns) >= -1e-12 * abs(area2):
        return [np.array(left)]
    parts: list[Ints] = []
    while len(left) > 3:
        best, quality = None, -np.inf
        for place, corner in enumerate(left):
            before, after = left[place - 1], left[(place + 1) % len(left)]
            here = turn(before, corner, after)
            if here <= quality or here < 0:
                continue
            others = [v for v in left if v not in (before, corner, after)]
            blocked = any(
                turn(before, corner, v) >= 0
                and turn(corner, after, v) >= 0
                and turn(after, before, v) >= 0
                for v in others
            )
            if not blocked:
                best, quality = place, here
        if best is None:  # only ears of no area are left
            break
        before, corner, after = left[best - 1], left[best], left[(best + 1) % len(left)]
        if quality > 0:
            parts.append(np.array([before, corner, after]))
        left.pop(best)
    if len(left) == 3 and turn(*left) > 0:
        parts.append(np.array(left))
    return parts


def pieces_of_shape(shape: Circle | Polygon, owner: int) -> Pieces:
    """Make the pieces of one circle or polygon."""
    if isinstance(shape, Circle):
        return pieces_of_circles(
            lonlat_to_vector([shape.lon_deg], [shape.lat_deg]),
            np.radians([shape.radius_deg]),
            np.array([owner]),
        )
    vertex = lonlat_to_vector(shape.vertices_deg[:, 0], shape.vertices_deg[:, 1])
    middle = vertex.sum(axis=0)
    middle /= np.linalg.norm(middle)
    east = np.cross(middle, np.eye(3)[np.abs(middle).argmin()])
    east /= np.linalg.norm(east)
    depth = vertex @ middle
    plane = np.stack((vertex @ east / depth, vertex @ np.cross(middle, east) / depth), axis=1)
    return Pieces.stack(
        [pieces_of_rings(vertex[None, part], np.array([owner])) for part in convex_parts(plane)]
    )
