"""Camera shapes in their own tangent plane."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Camera", "CircleCamera", "MosaicCamera"]


@dataclass(frozen=True)
class CircleCamera:
    """A circular field: all directions within ``radius_deg`` of the pointing."""

    radius_deg: float


@dataclass(frozen=True, eq=False)
class MosaicCamera:
    """One or more polygonal detectors; a rectangle is the case of one.

    Attributes
    ----------
    corners : tuple of float64 arrays, shape (m, 2)
        Per detector, the ring of corner offsets (ξ to the east, η to the
        north, degrees in the gnomonic plane), first corner not repeated.
    names : tuple of str
        Detector names.
    """

    corners: tuple[NDArray[np.float64], ...]
    names: tuple[str, ...]

    @classmethod
    def rectangle(cls, width_deg: float, height_deg: float) -> MosaicCamera:
        """Return a single rectangle: width along ξ, height along η, full sides."""
        x, y = width_deg / 2, height_deg / 2
        return cls((np.array([[-x, -y], [x, -y], [x, y], [-x, y]]),), ("field",))


Camera = CircleCamera | MosaicCamera
