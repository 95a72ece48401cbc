"""The tables of HEALPix probability maps → cells on the line, in the map's own frame.

Names and units that files use for the same thing are in the tables at the top.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy import units as u
from astropy.io import fits
from numpy.typing import NDArray

from skytally.healpix_table import (
    MISSING_BELOW,
    HealpixTable,
    Layout,
    MultiOrderLayout,
    find_table,
    is_galactic,
    read_layout,
)
from skytally.skymap import DistanceLayer, Floats
from skytally.spans import FULL_SKY_SR, Ints, cell_to_span

__all__ = ["MapCells", "read_cells"]

_PER_CELL_NAMES = ("prob", "probability", "p")
_DENSITY_NAMES = ("probdensity", "prob_density", "probdens", "density")
_DISTANCE_UNITS = {"distmu": u.Mpc, "distsigma": u.Mpc, "distnorm": u.Mpc**-2}
_CHUNK = 1 << 20


@dataclass(frozen=True, eq=False)
class MapCells:
    """Cells of a map that hold probability, sorted along the line of the map's own frame.

    Attributes
    ----------
    starts, stops : int64 arrays, shape (n,)
        The cells as disjoint spans.
    density_per_sr : float64 array, shape (n,)
        Probability per steradian, finite, > 0, not yet normalised.
    order_max : int
        Deepest order of the file, 0 to 29.
    galactic : bool
        Whether the frame is Galactic; else ICRS.
    distance : DistanceLayer or None
        Distance parameters of the cells.
    notes : tuple of str
        What was assumed or noticed.
    """

    starts: Ints
    stops: Ints
    density_per_sr: Floats
    order_max: int
    galactic: bool
    distance: DistanceLayer | None = None
    notes: tuple[str, ...] = ()


def read_cells(hdus: fits.HDUList, path: str | Path) -> MapCells:
    """Find the map in an open FITS file and read its cells.

    Raises
    ------
    MapError
        If there is no map, or what its header and columns say does not fit.
    """
    table, name = find_table(
        hdus,
        path,
        _value_column,
        "probability map",
        "Give a HEALPix map with a column PROBDENSITY or PROB.",
    )
    galactic = is_galactic(table)
    values = table.values(name)
    layout = read_layout(table, name, values.size)
    _note_rest(table, layout)
    rows = _kept_rows(table, name, values, layout.text)
    order, cell = layout.cells(rows)
    starts, stops = cell_to_span(order, cell)
    del cell
    if not (starts[1:] >= starts[:-1]).all():
        rank = np.argsort(starts)
        starts, stops, rows = starts[rank], stops[rank], rows[rank]
        order = order if isinstance(order, int) else order[rank]
    area_sr = FULL_SKY_SR / (12.0 * 4.0 ** np.asarray(order))
    density = _density(table, name, values[rows].astype(np.float64), area_sr)
    distance = _distance(table, rows)
    notes = tuple(table.notes)
    return MapCells(starts, stops, density, layout.order_max, galactic, distance, notes)


def _value_column(table: HealpixTable) -> str | None:
    density_first = "uniq" in table.names
    names = (_DENSITY_NAMES, _PER_CELL_NAMES)
    return table.first_of(sum(names if density_first else names[::-1], ()))


def _note_rest(table: HealpixTable, layout: Layout) -> None:
    """Say what becomes of the sky that a map does not list."""
    if layout.listed < 1:
        claims = isinstance(layout, MultiOrderLayout) and table.keyword("OBJECT") == "FULLSKY"
        table.notes.append(
            f"The file lists {100 * layout.listed:.4g} % of the sky"
            + (", though it claims all of it" if claims else "")
            + "; the rest counts as zero."
        )


def _kept_rows(
    table: HealpixTable, name: str, values: NDArray[Any], cell_text: Callable[[int], str]
) -> Ints:
    """Return the rows with probability; refuse values that are none."""
    kept = []
    missing = 0
    for low in range(0, values.size, _CHUNK):
        part = values[low : low + _CHUNK].astype(np.float64)
        gap = part < MISSING_BELOW
        wrong = ~np.isfinite(part) | ((part < 0) & ~gap)
        if wrong.any():
            row = int(np.flatnonzero(wrong)[0])
            raise table.fault(
                f"cell {cell_text(low + row)} holds {part[row]:g}, "
                "expected a finite number that is not negative",
                "Ask who made the map for a repaired one; such a cell has no meaning.",
                name,
            )
        missing += int(gap.sum())
        kept.append(np.flatnonzero(part > 0) + low)
    if missing:
        table.notes.append(f"{missing} cells are marked as missing; they count as zero.")
    return np.concatenate(kept or [np.empty(0, dtype=np.int64)])


def _density(table: HealpixTable, name: str, values: Floats, area_sr: Floats) -> Floats:
    """Turn the values of a column into probability per steradian."""
    unit = table.unit(name)
    if unit is None and name in _DENSITY_NAMES:
        table.notes.append(f"Column {table.title(name)} states no unit; taken as per steradian.")
        return values
    if unit is None or unit.is_equivalent(u.pix**-1) or unit == u.dimensionless_unscaled:
        return values / area_sr
    if not unit.is_equivalent(u.sr**-1):
        raise table.fault(
            f"the unit {unit} is neither a probability per cell nor one per solid angle",
            "Correct TUNIT in the header: sr-1, deg-2 or pix-1.",
            name,
        )
    return values * float(unit.to(u.sr**-1))


def _distance(table: HealpixTable, rows: Ints) -> DistanceLayer | None:
    """Read the distance columns of some rows, in Mpc; None where the map has none."""
    present = [name for name in _DISTANCE_UNITS if name in table.names]
    if not present:
        return None
    if len(present) < len(_DISTANCE_UNITS):
        table.notes.append(
            f"Of the distance columns only {', '.join(map(table.title, present))} is there; "
            "the map is read without distances."
        )
        return None
    columns: dict[str, Floats] = {}
    for name, wanted in _DISTANCE_UNITS.items():
        values = table.values(name)
        if values.size <= rows.max(initial=-1):
            raise table.fault("the column is shorter than the map", "Write the map again.", name)
        unit = table.unit(name) or wanted
        if not unit.is_equivalent(wanted):
            raise table.fault(f"the unit is {unit}, expected {wanted}", "Correct TUNIT.", name)
        column = values[rows].astype(np.float64)
        column[column < MISSING_BELOW] = np.nan
        column *= float(unit.to(wanted))
        columns[name] = column
    return DistanceLayer(
        columns["distmu"],
        columns["distsigma"],
        columns["distnorm"],
        header_mean_mpc=_header_number(table, "DISTMEAN"),
        header_sd_mpc=_header_number(table, "DISTSTD"),
    )


def _header_number(table: HealpixTable, key: str) -> float | None:
    value = table.header_value(key)
    usable = isinstance(value, int | float) and not isinstance(value, bool) and np.isfinite(value)
    return float(value) if usable else None
