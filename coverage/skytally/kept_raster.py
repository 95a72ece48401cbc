"""Rasters kept between runs."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from skytally.cache import Arrays, Cache, key_of
from skytally.raster import Raster
from skytally.spans import LINE_END, Ints, SpanTable

__all__ = ["keep_raster"]


def keep_raster(
    cache: Cache | None,
    what: str,
    parts: Callable[[], tuple[object, ...]],
    make: Callable[[], Raster],
) -> Raster:
    """Return a raster from the cache, or make it and keep it there.

    Parameters
    ----------
    cache : Cache or None
        With None nothing is looked up or kept.
    what : str
        Which kind of raster it is.
    parts : callable
        Returns everything that decides the raster, as `key_of` takes it.
    make : callable
        Makes the raster.
    """
    if cache is None:
        return make()
    key = key_of(what, *parts())
    found = cache.fetch(key)
    if found is not None:
        return _unpacked(found)
    raster = make()
    cache.store(key, _packed(raster))
    return raster


def _packed(raster: Raster) -> Arrays:
    tables = (raster.centre, raster.inner, raster.outer)
    return [raster.order, *(array for table in tables for array in _packed_table(table))]


def _unpacked(arrays: Arrays) -> Raster:
    order, *rest = arrays
    centre, inner, outer = (_unpacked_table(*rest[first : first + 4]) for first in (0, 4, 8))
    return Raster(centre, inner, outer, order)


def _packed_table(table: SpanTable) -> Arrays:
    """Return the shift and three arrays: positions without the zeros that all of them end in."""
    bits = int(np.bitwise_or.reduce(table.starts) | np.bitwise_or.reduce(table.stops))
    shift = (bits & -bits).bit_length() - 1 if bits else 0
    kind: type[Any] = np.uint32 if LINE_END >> shift < 1 << 32 else np.int64
    return [
        np.array([shift]),
        (table.starts >> shift).astype(kind),
        (table.stops >> shift).astype(kind),
        table.offsets,
    ]


def _unpacked_table(
    shift: Ints, starts: NDArray[Any], stops: NDArray[Any], offsets: Ints
) -> SpanTable:
    return SpanTable(
        starts.astype(np.int64) << shift[0], stops.astype(np.int64) << shift[0], offsets
    )
