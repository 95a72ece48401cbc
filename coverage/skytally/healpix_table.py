"""The tables of HEALPix maps: which cell each row is, in the map's own frame.

Two layouts are in use: multi-order (a UNIQ column says which cell each row is)
and flat (one order, RING or NESTED, every pixel or those that a PIXEL column
lists). What the values mean is for others to say.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from astropy import units as u
from astropy.io import fits
from astropy_healpix.core import ring_to_nested
from numpy.typing import NDArray

from skytally.errors import MapError
from skytally.local_files import header_value
from skytally.spans import LINE_END, LINE_ORDER, Ints, cell_to_span, uniq_to_cell

__all__ = [
    "MISSING_BELOW",
    "FlatLayout",
    "HealpixTable",
    "Layout",
    "MultiOrderLayout",
    "find_table",
    "is_galactic",
    "read_layout",
]

# HEALPix files mark missing values by −1.6375e30, stored in 32 or 64 bits.
MISSING_BELOW = -1.6e30

_PIXEL_NAMES = ("pixel", "pix", "ipix", "ipixel")
_UNIT_WORDS = {"prob": "pix-1", "probability": "pix-1", "none": ""}
_ORDERINGS = {"RING": False, "NESTED": True, "NEST": True}
_FRAMES = {
    **dict.fromkeys(("C", "CEL", "CELESTIAL", "EQ", "EQUATORIAL", "ICRS"), False),
    **dict.fromkeys(("G", "GAL", "GALACTIC"), True),
}
_CHUNK = 1 << 20


@dataclass
class HealpixTable:
    """One FITS table with its columns by lower-case name, and the notes made on the way."""

    hdu: fits.BinTableHDU
    path: str | Path
    notes: list[str] = field(default_factory=list)

    @property
    def names(self) -> list[str]:
        """Column names in lower case."""
        return [name.lower() for name in self.hdu.columns.names]

    def first_of(self, names: tuple[str, ...]) -> str | None:
        """Return the first of some column names that the table has."""
        return next((name for name in names if name in self.names), None)

    def title(self, name: str) -> str:
        """Return a column's name as the file writes it."""
        return str(self.hdu.columns.names[self.names.index(name)])

    def keyword(self, key: str) -> str:
        """Return a header value as upper-case text, empty where it is not stated."""
        return str(self.header_value(key, "")).strip().upper()

    def header_value(self, key: str, default: Any = None) -> Any:
        """Return a header value as it is, the default where it is not stated."""
        return header_value(self.hdu.header, key, default, self.path, MapError)

    def fault(self, message: str, remedy: str, name: str | None = None) -> MapError:
        """Build the error that names this file."""
        column = None if name is None else self.title(name)
        return MapError(message, file=self.path, column=column, remedy=remedy)

    def values(self, name: str, kinds: str = "fiu") -> NDArray[Any]:
        """Return a column end to end (maps come as 1024 pixels per row), not copied if it can."""
        try:
            column = np.asarray(self.hdu.data.field(self.names.index(name)))
        except (TypeError, ValueError, IndexError) as cause:
            raise self.fault(
                f"the column cannot be read ({cause})", "The file is damaged.", name
            ) from cause
        if column.dtype.kind not in kinds:
            wanted = "integers" if kinds == "iu" else "numbers"
            found = "text" if column.dtype.kind in "SU" else f"values of type {column.dtype.name}"
            raise self.fault(
                f"the column holds {found}, expected {wanted}",
                "Write the map again with a numeric column.",
                name,
            )
        return column.reshape(-1)

    def unit(self, name: str) -> u.UnitBase | None:
        """Return a column's unit; None where the file states none."""
        text = str(self.hdu.columns[self.names.index(name)].unit or "").strip()
        text = _UNIT_WORDS.get(text.lower(), text)
        if not text:
            return None
        try:
            return u.Unit(text)
        except (ValueError, TypeError) as cause:
            raise self.fault(
                f"the unit {text!r} is not known",
                "Correct TUNIT in the header: sr-1 or deg-2 for a density, "
                "pix-1 for a probability per pixel, Mpc for a distance.",
                name,
            ) from cause


@dataclass(frozen=True, eq=False)
class MultiOrderLayout:
    """Rows that are cells of any order.

    Attributes
    ----------
    uniq, order, cell : int64 arrays, shape (n,)
        NUNIQ number, order and NESTED index of each row; the cells are disjoint.
    """

    uniq: Ints
    order: Ints
    cell: Ints

    @property
    def order_max(self) -> int:
        """Deepest order of the file."""
        return int(self.order.max(initial=0))

    @property
    def listed(self) -> float:
        """Fraction of the sky that the rows list."""
        starts, stops = cell_to_span(self.order, self.cell)
        return int(np.sum(stops - starts)) / LINE_END

    def cells(self, rows: Ints) -> tuple[Ints, Ints]:
        """Orders and NESTED indices of some rows."""
        return self.order[rows], self.cell[rows]

    def text(self, row: int) -> str:
        """Name the cell of a row as its file does."""
        return f"{self.order[row]}/{self.cell[row]} (UNIQ {self.uniq[row]}, row {row + 1})"


@dataclass(frozen=True, eq=False)
class FlatLayout:
    """Rows that are pixels of one order.

    Attributes
    ----------
    order : int
        Of all pixels.
    count : int
        How many rows there are.
    pixels : int64 array, shape (count,), or None
        Which pixel each row is; None where the rows are all pixels in order.
    ordering : str
        As the header states it.
    """

    order: int
    count: int
    pixels: Ints | None
    ordering: str

    @property
    def order_max(self) -> int:
        """Order of the file."""
        return self.order

    @property
    def listed(self) -> float:
        """Fraction of the sky that the rows list."""
        return self.count / (12 << (2 * self.order))

    def cells(self, rows: Ints) -> tuple[int, Ints]:
        """Order, and NESTED indices of some rows."""
        cell = rows if self.pixels is None else self.pixels[rows]
        if _ORDERINGS[self.ordering]:
            return self.order, cell
        nested = np.empty_like(cell)
        for low in range(0, cell.size, _CHUNK):
            part = cell[low : low + _CHUNK]
            nested[low : low + _CHUNK] = ring_to_nested(part, 1 << self.order)
        return self.order, nested

    def text(self, row: int) -> str:
        """Name the pixel of a row as its file does."""
        return f"{row if self.pixels is None else self.pixels[row]} ({self.ordering})"


Layout = MultiOrderLayout | FlatLayout


def find_table(
    hdus: fits.HDUList,
    path: str | Path,
    choose: Callable[[HealpixTable], str | None],
    kind: str,
    remedy: str,
) -> tuple[HealpixTable, str]:
    """Return the first table with a value column, and the name of that column.

    Parameters
    ----------
    hdus : HDUList
        The open file.
    path : str or Path
        Its name, for messages.
    choose : callable
        Returns the lower-case name of a table's value column, or None.
    kind, remedy : str
        What is looked for, such as "probability map", and what to give.

    Raises
    ------
    MapError
        If there is none.
    """
    seen: list[str] = []
    for hdu in hdus:
        if not isinstance(hdu, fits.BinTableHDU) or isinstance(hdu, fits.CompImageHDU):
            continue
        table = HealpixTable(hdu, path)
        name = choose(table)
        if name is not None:
            return table, name
        seen += hdu.columns.names
    if not seen:
        raise MapError(
            f"the file holds no table, so no {kind}",
            file=path,
            remedy=f"It was cut short, or is the wrong file: {remedy[:1].lower()}{remedy[1:]}",
        )
    raise MapError(
        f"no table of this file holds a {kind}; its columns are {', '.join(seen[:20])}",
        file=path,
        remedy=remedy,
    )


def is_galactic(table: HealpixTable) -> bool:
    """Tell whether the map is Galactic; else it is ICRS.

    Raises
    ------
    MapError
        If the header states no frame, or another.
    """
    stated = table.keyword("COORDSYS")
    if stated not in _FRAMES:
        what = f"COORDSYS is {stated!r}" if stated else "the header states no COORDSYS"
        raise table.fault(
            f"{what}, expected 'C' (ICRS) or 'G' (Galactic)",
            "Ask who made the map for its frame and add the keyword to the table's header.",
        )
    return _FRAMES[stated]


def read_layout(table: HealpixTable, name: str, count: int) -> Layout:
    """Find out which cell each row of a table is.

    Parameters
    ----------
    table : HealpixTable
        The table.
    name : str
        Lower-case name of its value column, for messages.
    count : int
        How many values that column holds.

    Raises
    ------
    MapError
        If header and columns do not fit together, or a cell is listed twice.
    """
    return (_multi_order if "uniq" in table.names else _flat)(table, name, count)


def _multi_order(table: HealpixTable, name: str, count: int) -> MultiOrderLayout:
    if (ordering := table.keyword("ORDERING")) not in {"", "NUNIQ", "UNIQ"}:
        raise table.fault(
            f"the header says ORDERING = {ordering!r}, but there is a UNIQ column",
            "Correct the header to NUNIQ, or remove the column.",
        )
    uniq = table.values("uniq", "iu").astype(np.int64)
    if count != uniq.size:
        raise table.fault(f"{count} values for {uniq.size} cells", "Write the map again.", name)
    wrong = (uniq < 4) | (uniq >= 16 << (2 * LINE_ORDER))
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise table.fault(
            f"row {row + 1} holds {uniq[row]}, expected a NUNIQ number of order 0 to 29, "
            "so at least 4",
            "The file is damaged or its UNIQ column means something else.",
            "uniq",
        )
    layout = MultiOrderLayout(uniq, *uniq_to_cell(uniq))
    _check_disjoint(table, layout)
    return layout


def _check_disjoint(table: HealpixTable, layout: MultiOrderLayout) -> None:
    starts, stops = cell_to_span(layout.order, layout.cell)
    rank = np.lexsort((stops, starts))
    overlaps = np.flatnonzero(starts[rank[1:]] < stops[rank[:-1]])
    if overlaps.size:
        first, second = sorted((int(rank[overlaps[0]]), int(rank[overlaps[0] + 1])))
        raise table.fault(
            f"cells overlap: {layout.text(first)} and {layout.text(second)}"
            + (f", and {overlaps.size - 1} more pairs" if overlaps.size > 1 else ""),
            "What they hold would count twice; ask who made the map for a repaired one.",
            "uniq",
        )


def _flat(table: HealpixTable, name: str, count: int) -> FlatLayout:
    if (ordering := table.keyword("ORDERING")) not in _ORDERINGS:
        what = f"ORDERING is {ordering!r}" if ordering else "the header states no ORDERING"
        raise table.fault(
            f"{what}, expected RING or NESTED",
            "Ask who made the map and add the keyword to the table's header.",
        )
    pixels = _listed_pixels(table)
    order = _flat_order(table, name, count, pixels is not None)
    if pixels is not None:
        _check_pixels(table, pixels, count, 12 << (2 * order))
    return FlatLayout(order, count, pixels, ordering)


def _listed_pixels(table: HealpixTable) -> Ints | None:
    """Return the pixel numbers of an explicit map; None for one that lists every pixel."""
    name = table.first_of(_PIXEL_NAMES)
    if name is not None:
        return table.values(name, "iu").astype(np.int64)
    if table.keyword("INDXSCHM") == "EXPLICIT":
        raise table.fault(
            "the header says INDXSCHM = 'EXPLICIT', but there is no PIXEL column",
            "Correct the header, or write the pixel numbers.",
        )
    return None


def _flat_order(table: HealpixTable, name: str, count: int, explicit: bool) -> int:
    """Return the order of a flat map from NSIDE, or from the number of its pixels."""
    stated = table.header_value("NSIDE")
    if stated is None and explicit:
        raise table.fault(
            "the header states no NSIDE, and the map does not list every pixel",
            "Ask who made the map and add the keyword to the table's header.",
        )
    if stated is None:
        order = next((k for k in range(LINE_ORDER + 1) if 12 << (2 * k) == count), None)
        if order is None:
            raise table.fault(
                f"there are {count} pixels, expected 12·NSIDE² with NSIDE a power of two",
                "The map is incomplete, or needs a PIXEL column.",
                name,
            )
        table.notes.append(f"The header states no NSIDE; {1 << order} from the number of pixels.")
        return order
    powers = [1 << k for k in range(LINE_ORDER + 1)]
    if isinstance(stated, bool) or stated not in powers:
        raise table.fault(
            f"NSIDE is {stated!r}, expected a power of two from 1 to 2^29",
            "Correct the header.",
        )
    order = powers.index(stated)
    if not explicit and count != 12 << (2 * order):
        raise table.fault(
            f"there are {count} pixels, expected {12 << (2 * order)} for NSIDE = {stated}",
            "The map is incomplete, or needs a PIXEL column.",
            name,
        )
    return order


def _check_pixels(table: HealpixTable, pixels: Ints, count: int, end: int) -> None:
    if pixels.size != count:
        raise table.fault(f"{count} values for {pixels.size} pixels", "Write the map again.")
    wrong = (pixels < 0) | (pixels >= end)
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise table.fault(
            f"row {row + 1} names pixel {pixels[row]}, expected 0 to {end - 1}",
            "Correct NSIDE in the header, or the pixel numbers.",
        )
    ranked = np.sort(pixels)
    twice = np.flatnonzero(ranked[1:] == ranked[:-1])
    if twice.size:
        raise table.fault(
            f"pixel {ranked[twice[0]]} is listed more than once",
            "What it holds would count twice; ask who made the map for a repaired one.",
        )
