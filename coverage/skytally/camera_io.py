"""Mosaic cameras from a small table of detector corners."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from skytally.cameras import MosaicCamera
from skytally.errors import RegionError
from skytally.local_files import read_local_file
from skytally.log_cells import UNIT_DEGREES, read_angle, read_cells, shown
from skytally.log_columns import normalise_name
from skytally.shapes import Polygon
from skytally.table_io import TextTable, parse_table

__all__ = ["read_mosaic"]

SIZE_LIMIT_BYTES = 16 * 1024**2
OFFSET_LIMIT_DEG = 60.0
_CORNER_LIMIT = 500
_NAMES = ("detector", "xi", "eta")


def read_mosaic(path: str | Path) -> MosaicCamera:
    """Read a mosaic camera.

    Parameters
    ----------
    path : str or Path
        A table (CSV or ECSV, at most 16 MB) with the columns `detector`, `xi`
        and `eta`: one row per corner, the corners of a detector one after the
        other in order around it. Offsets from the pointing are in degrees in
        the gnomonic plane, ξ to the east and η to the north at angle 0.

    Returns
    -------
    MosaicCamera
        Detectors in the order of the file.

    Raises
    ------
    RegionError
        If the file cannot be read, an offset is no number or 60° and more,
        a detector's rows do not stand together, or its corners do not make a
        simple polygon.
    """
    raw, _ = read_local_file(path, size_limit_bytes=SIZE_LIMIT_BYTES, error=RegionError)
    table = parse_table(raw, path, RegionError)
    if table.broken:
        row, detail = table.broken[0]
        raise RegionError(detail, file=path, row=row)
    if not table.rows:
        raise RegionError(
            "the camera table has no rows", file=path, remedy="Give one row per detector corner."
        )
    columns = _columns(table, path)
    offsets = np.stack([_offsets(table, columns[x], path) for x in _NAMES[1:]], axis=1)
    detectors = table.columns[columns["detector"]]
    names: list[str] = []
    corners: list[NDArray[np.float64]] = []
    start = 0
    for stop in range(1, len(detectors) + 1):
        if stop < len(detectors) and detectors[stop] == detectors[start]:
            continue
        name, row = detectors[start], table.rows[start]
        if not name or name in names:
            raise RegionError(
                f"the rows of detector {name!r} do not stand together"
                if name
                else "a corner has no detector name",
                file=path,
                row=row,
                column=table.names[columns["detector"]],
                remedy="Write the corners of each detector one after the other, with its name.",
            )
        names.append(name)
        corners.append(_ring(offsets[start:stop], name, path, row))
        start = stop
    return MosaicCamera(tuple(corners), tuple(names))


def _columns(table: TextTable, path: str | Path) -> dict[str, int]:
    bare = [normalise_name(x) for x in table.names]
    for name in _NAMES:
        if bare.count(name) != 1:
            raise RegionError(
                f"the camera table has {bare.count(name)} columns {name!r}, expected one",
                file=path,
                remedy=f"It has {', '.join(table.names[:20])}: name its columns detector, xi, eta.",
            )
    return {name: bare.index(name) for name in _NAMES}


def _offsets(table: TextTable, column: int, path: str | Path) -> NDArray[np.float64]:
    """Offsets of one axis in degrees, shape (n,)."""
    cells, name, unit = table.columns[column], table.names[column], table.units[column]
    if unit not in UNIT_DEGREES:
        raise RegionError(
            f"the unit {unit!r} is not known",
            file=path,
            column=name,
            remedy="Give the offsets in deg, arcmin, arcsec or rad.",
        )
    comma = table.delimiter != ","
    values, faults = read_cells(cells, lambda x: read_angle(x, unit, comma))
    wrong = np.isnan(values) | ~(np.abs(values) < OFFSET_LIMIT_DEG)
    if wrong.any():
        index = int(wrong.argmax())
        why = faults[index].why if index in faults else "missing or not below 60 degrees"
        raise RegionError(
            f"an offset is {shown(cells[index])}, {why}",
            file=path,
            row=table.rows[index],
            column=name,
            remedy="Give the offset of the corner from the pointing, in degrees.",
        )
    return values


def _ring(
    offsets: NDArray[np.float64], name: str, path: str | Path, row: int
) -> NDArray[np.float64]:
    """Corners of one detector, shape (m, 2), checked, the closing one dropped."""
    if len(offsets) > 1 and (offsets[0] == offsets[-1]).all():
        offsets = offsets[:-1]
    try:
        if len(offsets) > _CORNER_LIMIT:
            raise RegionError(f"it has {len(offsets)} corners, expected at most {_CORNER_LIMIT}")
        x, y = np.radians(offsets).T
        # Laid at longitude 0 on the equator, where ξ runs along longitude.
        sky = np.degrees([np.arctan2(x, 1.0), np.arctan2(y, np.hypot(1.0, x))]).T
        if len(Polygon(sky).vertices_deg) != len(offsets):
            raise RegionError("two neighbouring corners are the same")
        area = np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)) / 2
        size = max(np.ptp(x), np.ptp(y))
        if abs(area) <= 1e-6 * size**2:
            raise RegionError("its corners lie on one line")
    except RegionError as exc:
        raise RegionError(
            f"detector {name!r} is no simple polygon: {exc.message}",
            file=path,
            row=row,
            remedy="Write its corners in order around it, each once.",
        ) from exc
    return offsets
