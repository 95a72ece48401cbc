"""Light curves of sources from small tables."""

from __future__ import annotations

from difflib import get_close_matches
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from skytally.errors import InputError
from skytally.local_files import read_local_file
from skytally.log_cells import CellFault, read_cells, read_number, shown, visible
from skytally.log_columns import normalise_name
from skytally.table_io import TextTable, parse_table

__all__ = ["read_light_curve"]

SIZE_LIMIT_BYTES = 16 * 1024**2
DAYS_LIMIT = 100_000.0
MAGNITUDE_LIMIT = 50.0

_NAMES = ("days", "band", "magnitude")
_UNITS = {"days": ("", "d", "day", "days"), "magnitude": ("", "mag", "abmag", "mag(ab)")}
_COLUMNS_REMEDY = (
    "A light curve has the columns days (since the event), band and magnitude (absolute)."
)

Floats = NDArray[np.float64]


def read_light_curve(path: str | Path) -> dict[str, tuple[Floats, Floats]]:
    """Read the light curve of a source.

    Parameters
    ----------
    path : str or Path
        A table (CSV or ECSV, at most 16 MB) with the columns `days` (since the
        event), `band` and `magnitude` (absolute), the rows of each band in
        order of time, at least two.

    Returns
    -------
    dict of str to (days, magnitude)
        For each band, in the order in which the file names them.

    Raises
    ------
    InputError
        If the file is no such table, or a row cannot be used.
    """
    raw, _ = read_local_file(path, size_limit_bytes=SIZE_LIMIT_BYTES, error=InputError)
    table = parse_table(raw, path, InputError)
    if table.broken:
        row, detail = table.broken[0]
        raise InputError(detail, file=path, row=row)
    at = _columns(table, path)
    if not table.rows:
        raise InputError(
            "the light curve has no rows",
            file=path,
            remedy="Give one row per time and band, at least two for each band.",
        )
    days = _numbers(table, at["days"], 0.0, DAYS_LIMIT, path)
    magnitude = _numbers(table, at["magnitude"], -MAGNITUDE_LIMIT, MAGNITUDE_LIMIT, path)
    bands = [visible(band) for band in table.columns[at["band"]]]
    curves = {}
    for band in dict.fromkeys(bands):
        rows = np.array([i for i, b in enumerate(bands) if b == band], dtype=np.int64)
        _check_rows(table, at, band, days[rows], rows, path)
        curves[band] = days[rows], magnitude[rows]
    return curves


def _columns(table: TextTable, path: str | Path) -> dict[str, int]:
    """Find the three columns; another one, or one twice, is an error."""
    bare = [normalise_name(x) for x in table.names]
    for name, title in zip(bare, table.names, strict=True):
        if name not in _NAMES:
            near = get_close_matches(name, _NAMES, 1)
            hint = f"Did you mean {near[0]}? " if near else ""
            raise InputError(
                "this column is not known in a light curve",
                file=path,
                column=title,
                remedy=f"{hint}{_COLUMNS_REMEDY}",
            )
    for name in _NAMES:
        if bare.count(name) != 1:
            raise InputError(
                f"the light curve has {bare.count(name)} columns {name!r}, expected one",
                file=path,
                remedy=_COLUMNS_REMEDY,
            )
    at = {name: bare.index(name) for name in _NAMES}
    for name, known in _UNITS.items():
        unit = table.units[at[name]]
        if unit not in known:
            raise InputError(
                f"the unit is {unit!r}, expected {known[1]}",
                file=path,
                column=table.names[at[name]],
                remedy="Convert the column, or correct the unit.",
            )
    return at


def _numbers(table: TextTable, column: int, low: float, high: float, path: str | Path) -> Floats:
    """Read a column of which every cell must hold a number within limits."""
    cells, comma = table.columns[column], table.delimiter != ","
    remedy = f"give a number from {low:g} to {high:g}"

    def read(cell: str) -> float:
        value = read_number(cell, comma, remedy)
        if not low <= value <= high:
            raise CellFault("unreadable", f"outside {low:g} to {high:g}", remedy)
        return value

    values, faults = read_cells(cells, read)
    if faults:
        index, fault = next(iter(faults.items()))
        raise InputError(
            f"found {shown(cells[index])}, {fault.why}",
            file=path,
            row=table.rows[index],
            column=table.names[column],
            remedy=f"{fault.remedy[:1].upper()}{fault.remedy[1:]}.",
        )
    return values


def _check_rows(
    table: TextTable,
    at: dict[str, int],
    band: str,
    days: Floats,
    rows: NDArray[np.int64],
    path: str | Path,
) -> None:
    """Refuse a band without name, with a single row, or with times that do not rise."""
    if not band:
        raise InputError(
            "this row has no band",
            file=path,
            row=table.rows[rows[0]],
            column=table.names[at["band"]],
            remedy="Name the band as the logs do.",
        )
    if days.size < 2:
        raise InputError(
            f"band {shown(band)} has one row, expected at least two to interpolate between",
            file=path,
            row=table.rows[rows[0]],
            remedy="Add the times before and after, or take the band out.",
        )
    back = np.flatnonzero(np.diff(days) <= 0)
    if not back.size:
        return
    before, here = int(back[0]), int(back[0]) + 1
    same = days[before] == days[here]
    raise InputError(
        f"band {shown(band)} is at {days[here]:g} days here and at {days[before]:g} days in row "
        f"{table.rows[rows[before]]}; expected times that rise",
        file=path,
        row=table.rows[rows[here]],
        column=table.names[at["days"]],
        remedy="Keep one row for each time and band."
        if same
        else "Sort the rows of each band by time.",
    )
