"""Galactic dust maps (HEALPix FITS) → a function on the line."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from skytally.dust import Dust
from skytally.errors import MapError
from skytally.healpix_table import (
    MISSING_BELOW,
    FlatLayout,
    HealpixTable,
    Layout,
    find_table,
    is_galactic,
    read_layout,
)
from skytally.local_files import expand, open_fits, read_local_file
from skytally.skymap import Floats
from skytally.skymap_frames import galactic_positions
from skytally.spans import LINE_END, Ints, Spans, cell_to_span, spans_to_cells

__all__ = ["EBV_LIMIT", "SIZE_LIMIT_BYTES", "read_dust"]

SIZE_LIMIT_BYTES = 1 << 30
EBV_LIMIT = 50.0  # magnitudes; more is another quantity or unit

_NAMES = ("ebv", "e(b-v)", "e_bv", "e_b_v", "ebmv", "reddening")
_UNITS = ("", "mag", "mags", "magnitude", "none", "unknown")
_NEED = "Give a HEALPix map of the whole sky with E(B-V) in magnitudes in a column EBV."
# Dust maps do not resolve less than some arcminutes, so finer cells are averaged to
# these of 3.4′, and a Galactic map of order 8 or less is sampled 16 times per cell.
_DEEPEST = 10
_SAMPLED_ORDER = 10
_SAMPLES_DEEPER = 2
_CHUNK = 1 << 18


def read_dust(
    path: str | Path, *, allow_holes: bool = False, size_limit_bytes: int = SIZE_LIMIT_BYTES
) -> Dust:
    """Read a map of the reddening E(B−V) from a local FITS file, plain or gzip.

    Flat maps (RING or NESTED, every pixel or those listed) and multi-order
    maps (UNIQ), in ICRS or Galactic coordinates. The values are intensive:
    cells are averaged where they are resampled, never normalised.

    Parameters
    ----------
    path : str or Path
        The file; URLs are refused.
    allow_holes : bool
        Whether cells may be missing; they are holes of the result.
    size_limit_bytes : int
        Largest size of the file, also when decompressed.

    Raises
    ------
    MapError
        If the file is no such map, states neither ordering nor frame, has
        holes that are not allowed, or a value outside 0 to 50.
    """
    data, _ = read_local_file(path, size_limit_bytes=size_limit_bytes, error=MapError)
    whole = expand(
        data, path, size_limit_bytes=size_limit_bytes, error=MapError, must_begin=b"SIMPLE"
    )
    hdus = open_fits(whole, path, error=MapError)
    dust, galactic, order_max = _read_cells(hdus, path, allow_holes)
    if galactic:
        dust = _to_line(dust, order_max)
    notes = dust.notes
    missing = 1.0 - int(np.sum(dust.stops - dust.starts)) / LINE_END
    if missing > 0:
        notes += (
            f"The dust map has no value over {100 * missing:.3g} % of the sky; limits there are "
            "not corrected for extinction.",
        )
    return Dust(dust.starts, dust.stops, dust.ebv, notes)


def _read_cells(hdus: fits.HDUList, path: str | Path, allow_holes: bool) -> tuple[Dust, bool, int]:
    """Read the cells in the map's own frame; whether that is Galactic; the deepest order."""
    table, name = find_table(hdus, path, _value_column, "dust map", _NEED)
    galactic = is_galactic(table)
    _check_unit(table, name)
    values = table.values(name)
    layout = read_layout(table, name, values.size)
    hole = np.isnan(values) | (values < MISSING_BELOW)
    _check_values(table, name, values, hole, layout)
    if not allow_holes:
        _refuse_holes(table, name, hole, layout)
    rows = np.flatnonzero(~hole)
    order, cell = layout.cells(rows)
    starts, stops = cell_to_span(order, cell)
    rank = np.argsort(starts)
    ebv = values[rows[rank]].astype(np.float64)
    order_max = layout.order_max
    dust = Dust(starts[rank], stops[rank], ebv)
    if isinstance(layout, FlatLayout) and order_max > _DEEPEST:
        dust = _averaged(dust)
        table.notes.append(
            f"The dust map is of order {order_max}; it was averaged to cells of order {_DEEPEST}."
        )
        order_max = _DEEPEST
    return Dust(dust.starts, dust.stops, dust.ebv, tuple(table.notes)), galactic, order_max


def _value_column(table: HealpixTable) -> str | None:
    """Return the column of E(B−V): by its name, or the only one that holds decimals."""
    named = table.first_of(_NAMES)
    if named is not None:
        return named
    decimals = [
        name
        for name, column in zip(table.names, table.hdu.columns, strict=True)
        if column.format.lstrip("0123456789")[:1] in {"E", "D"}
    ]
    if len(decimals) != 1:
        return None
    table.notes.append(
        f"Column {table.title(decimals[0])!r} of the dust map is taken as E(B-V) in magnitudes."
    )
    return decimals[0]


def _check_unit(table: HealpixTable, name: str) -> None:
    stated = str(table.hdu.columns[table.names.index(name)].unit or "").strip()
    if stated.lower() not in _UNITS:
        raise table.fault(
            f"the unit is {stated!r}, expected magnitudes of E(B-V)", "Correct TUNIT.", name
        )


def _check_values(
    table: HealpixTable, name: str, values: NDArray[Any], hole: NDArray[np.bool_], layout: Layout
) -> None:
    """Refuse values that are no reddening."""
    wrong = ~hole & ~((values >= 0) & (values <= EBV_LIMIT))
    if wrong.any():
        row = int(wrong.argmax())
        raise table.fault(
            f"{int(wrong.sum())} cells are no E(B-V) of 0 to {EBV_LIMIT:g} magnitudes; the first, "
            f"{layout.text(row)}, holds {values[row]:g}",
            "Check that the column is E(B-V), not A_V, an optical depth or a scaled integer.",
            name,
        )


def _refuse_holes(table: HealpixTable, name: str, hole: NDArray[np.bool_], layout: Layout) -> None:
    """Refuse a map with cells that hold no value, or that does not list the whole sky."""
    remedy = (
        "Give a map of the whole sky, or set allow_holes = true in [extinction]; "
        "limits in the holes are then not corrected."
    )
    if hole.any():
        raise table.fault(
            f"the dust map has holes: {int(hole.sum())} cells hold no value, the first is "
            f"{layout.text(int(hole.argmax()))}",
            remedy,
            name,
        )
    if layout.listed < 1:
        listed = Spans.from_cells(*layout.cells(np.arange(hole.size, dtype=np.int64)))
        order, cell = spans_to_cells(~listed)
        first = int(np.argmin(cell_to_span(order, cell)[0]))
        raise table.fault(
            f"the dust map has holes: it lists {100 * layout.listed:.4g} % of the sky; the first "
            f"cell that is missing is {cell[first]} of order {order[first]} (NESTED)",
            remedy,
        )


def _averaged(dust: Dust) -> Dust:
    """Average cells, all finer than the deepest order wanted, to that order."""
    size = int(cell_to_span(_DEEPEST, np.zeros(1, dtype=np.int64))[1][0])
    cell, first = np.unique(dust.starts // size, return_index=True)
    count = np.diff(first, append=dust.starts.size)
    return Dust(*cell_to_span(_DEEPEST, cell), np.add.reduceat(dust.ebv, first) / count)


def _to_line(dust: Dust, order_max: int) -> Dust:
    """Sample a Galactic map at the sub-cells of ICRS cells and take the mean."""
    order = min(order_max, _DEEPEST)
    depth = max(0, min(_SAMPLES_DEEPER, _SAMPLED_ORDER - order))
    mean = _mean_at(dust.at, order, depth)
    cell = np.flatnonzero(np.isfinite(mean))
    notes = (
        *dust.notes,
        f"The dust map is in Galactic coordinates, order {order_max}; each ICRS cell of order "
        f"{order} got the mean of {4**depth} points in it.",
    )
    return Dust(*cell_to_span(order, cell), mean[cell], notes)


def _mean_at(at: Callable[[Ints], Floats], order: int, depth: int) -> Floats:
    """Mean over the samples of every cell of an order; holes left out, NaN where all are."""
    mean = np.full(12 << (2 * order), np.nan)
    step = _CHUNK >> (2 * depth)
    for low in range(0, mean.size, step):
        cell = np.arange(low, min(low + step, mean.size), dtype=np.int64)
        value = at(galactic_positions(order, cell, depth))
        known = np.isfinite(value)
        count = known.sum(axis=1)
        total = np.where(known, value, 0.0).sum(axis=1)
        np.divide(total, count, mean[low : low + cell.size], where=count > 0)
    return mean
