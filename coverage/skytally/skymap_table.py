"""The tables of HEALPix probability maps → cells on the line, in the map's own frame.

Two layouts are in use: multi-order (a UNIQ column says which cell each row is)
and flat (one order, RING or NESTED, every pixel or those that a PIXEL column
lists). Names and units that files use for the same thing are in the tables at
the top.
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
from skytally.skymap import DistanceLayer, Floats
from skytally.spans import FULL_SKY_SR, LINE_END, LINE_ORDER, Ints, cell_to_span, uniq_to_cell

__all__ = ["MapCells", "read_cells"]

_PER_CELL_NAMES = ("prob", "probability", "p")
_DENSITY_NAMES = ("probdensity", "prob_density", "probdens", "density")
_PIXEL_NAMES = ("pixel", "pix", "ipix", "ipixel")
_UNIT_WORDS = {"prob": "pix-1", "probability": "pix-1", "none": ""}
_ORDERINGS = {"RING": False, "NESTED": True, "NEST": True}
_FRAMES = {
    **dict.fromkeys(("C", "CEL", "CELESTIAL", "EQ", "EQUATORIAL", "ICRS"), False),
    **dict.fromkeys(("G", "GAL", "GALACTIC"), True),
}
_DISTANCE_UNITS = {"distmu": u.Mpc, "distsigma": u.Mpc, "distnorm": u.Mpc**-2}
# HEALPix files mark missing values by −1.6375e30, stored in 32 or 64 bits.
_MISSING_BELOW = -1.6e30
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


@dataclass
class _Table:
    """One FITS table with its columns by lower-case name, and the notes made on the way."""

    hdu: fits.BinTableHDU
    path: str | Path
    notes: list[str] = field(default_factory=list)

    @property
    def names(self) -> list[str]:
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


def read_cells(hdus: fits.HDUList, path: str | Path) -> MapCells:
    """Find the map in an open FITS file and read its cells.

    Raises
    ------
    MapError
        If there is no map, or what its header and columns say does not fit.
    """
    table, value_name = _find_table(hdus, path)
    galactic = _frame(table)
    read = _read_multi_order if "uniq" in table.names else _read_flat
    starts, stops, density, rows, order_max = read(table, value_name)
    if not _is_sorted(starts):
        rank = np.argsort(starts)
        starts, stops, density, rows = starts[rank], stops[rank], density[rank], rows[rank]
    distance = _distance(table, rows)
    return MapCells(starts, stops, density, order_max, galactic, distance, tuple(table.notes))


def _is_sorted(values: Ints) -> bool:
    return bool((values[1:] >= values[:-1]).all())


def _find_table(hdus: fits.HDUList, path: str | Path) -> tuple[_Table, str]:
    """Return the table that holds a map, and the name of its value column."""
    seen: list[str] = []
    for hdu in hdus:
        if not isinstance(hdu, fits.BinTableHDU) or isinstance(hdu, fits.CompImageHDU):
            continue
        table = _Table(hdu, path)
        multi_order = "uniq" in table.names
        names = (_DENSITY_NAMES, _PER_CELL_NAMES)
        name = table.first_of((*names[0], *names[1]) if multi_order else (*names[1], *names[0]))
        if name is not None:
            return table, name
        seen += hdu.columns.names
    if not seen:
        raise MapError(
            "the file holds no table, so no probability map",
            file=path,
            remedy="It was cut short, or is the wrong file: give a HEALPix map with a column "
            "PROBDENSITY or PROB.",
        )
    raise MapError(
        f"no table of this file holds a probability map; its columns are {', '.join(seen[:20])}",
        file=path,
        remedy="Give a HEALPix map with a column PROBDENSITY or PROB.",
    )


def _frame(table: _Table) -> bool:
    """Return whether the map is Galactic."""
    stated = table.keyword("COORDSYS")
    if stated not in _FRAMES:
        what = f"COORDSYS is {stated!r}" if stated else "the header states no COORDSYS"
        raise table.fault(
            f"{what}, expected 'C' (ICRS) or 'G' (Galactic)",
            "Ask who made the map for its frame and add the keyword to the table's header.",
        )
    return _FRAMES[stated]


def _kept_rows(
    table: _Table, name: str, values: NDArray[Any], cell_text: Callable[[int], str]
) -> Ints:
    """Return the rows with probability; refuse values that are none."""
    kept = []
    missing = 0
    for low in range(0, values.size, _CHUNK):
        part = values[low : low + _CHUNK].astype(np.float64)
        gap = part < _MISSING_BELOW
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


def _density(table: _Table, name: str, values: Floats, area_sr: Floats | float) -> Floats:
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


def _cell_area_sr(order: Ints | int) -> Any:
    return FULL_SKY_SR / (12.0 * 4.0 ** np.asarray(order))


def _read_multi_order(table: _Table, name: str) -> tuple[Ints, Ints, Floats, Ints, int]:
    if (ordering := table.keyword("ORDERING")) not in {"", "NUNIQ", "UNIQ"}:
        raise table.fault(
            f"the header says ORDERING = {ordering!r}, but there is a UNIQ column",
            "Correct the header to NUNIQ, or remove the column.",
        )
    uniq = table.values("uniq", "iu").astype(np.int64)
    values = table.values(name)
    if values.size != uniq.size:
        raise table.fault(
            f"{values.size} values for {uniq.size} cells", "Write the map again.", name
        )
    wrong = (uniq < 4) | (uniq >= 16 << (2 * LINE_ORDER))
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise table.fault(
            f"row {row + 1} holds {uniq[row]}, expected a NUNIQ number of order 0 to 29, "
            "so at least 4",
            "The file is damaged or its UNIQ column means something else.",
            "uniq",
        )
    order, cell = uniq_to_cell(uniq)
    starts, stops = cell_to_span(order, cell)

    def text(row: int) -> str:
        return f"{order[row]}/{cell[row]} (UNIQ {uniq[row]}, row {row + 1})"

    _check_disjoint(table, starts, stops, text)
    listed = int(np.sum(stops - starts)) / LINE_END
    if listed < 1:
        table.notes.append(
            f"The file lists {100 * listed:.4g} % of the sky"
            + (", though it claims all of it" if table.keyword("OBJECT") == "FULLSKY" else "")
            + "; the rest counts as zero."
        )
    rows = _kept_rows(table, name, values, text)
    density = _density(table, name, values[rows].astype(np.float64), _cell_area_sr(order[rows]))
    return starts[rows], stops[rows], density, rows, int(order.max(initial=0))


def _check_disjoint(
    table: _Table, starts: Ints, stops: Ints, cell_text: Callable[[int], str]
) -> None:
    rank = np.lexsort((stops, starts))
    overlaps = np.flatnonzero(starts[rank[1:]] < stops[rank[:-1]])
    if overlaps.size:
        first, second = sorted((int(rank[overlaps[0]]), int(rank[overlaps[0] + 1])))
        raise table.fault(
            f"cells overlap: {cell_text(first)} and {cell_text(second)}"
            + (f", and {overlaps.size - 1} more pairs" if overlaps.size > 1 else ""),
            "Their probability would count twice; ask who made the map for a repaired one.",
            "uniq",
        )


def _read_flat(table: _Table, name: str) -> tuple[Ints, Ints, Floats, Ints, int]:
    if (ordering := table.keyword("ORDERING")) not in _ORDERINGS:
        what = f"ORDERING is {ordering!r}" if ordering else "the header states no ORDERING"
        raise table.fault(
            f"{what}, expected RING or NESTED",
            "Ask who made the map and add the keyword to the table's header.",
        )
    values = table.values(name)
    pixels = _listed_pixels(table)
    order = _flat_order(table, name, values.size, pixels is not None)
    if pixels is not None:
        _check_pixels(table, pixels, values.size, 12 << (2 * order))

    def text(row: int) -> str:
        return f"{row if pixels is None else pixels[row]} ({ordering})"

    rows = _kept_rows(table, name, values, text)
    cell = rows if pixels is None else pixels[rows]
    if not _ORDERINGS[ordering]:
        cell = _ring_to_nested(cell, order)
    if not _is_sorted(cell):
        rank = np.argsort(cell)
        cell, rows = cell[rank], rows[rank]
    density = _density(table, name, values[rows].astype(np.float64), float(_cell_area_sr(order)))
    return *cell_to_span(order, cell), density, rows, order


def _listed_pixels(table: _Table) -> Ints | None:
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


def _flat_order(table: _Table, name: str, count: int, explicit: bool) -> int:
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


def _check_pixels(table: _Table, pixels: Ints, count: int, end: int) -> None:
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
            "Its probability would count twice; ask who made the map for a repaired one.",
        )
    if count < end:
        table.notes.append(
            f"The file lists {100 * count / end:.4g} % of the sky; the rest counts as zero."
        )


def _ring_to_nested(cell: Ints, order: int) -> Ints:
    nested = np.empty_like(cell)
    for low in range(0, cell.size, _CHUNK):
        nested[low : low + _CHUNK] = ring_to_nested(cell[low : low + _CHUNK], 1 << order)
    return nested


def _distance(table: _Table, rows: Ints) -> DistanceLayer | None:
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
        column[column < _MISSING_BELOW] = np.nan
        column *= float(unit.to(wanted))
        columns[name] = column
    return DistanceLayer(
        columns["distmu"],
        columns["distsigma"],
        columns["distnorm"],
        header_mean_mpc=_header_number(table, "DISTMEAN"),
        header_sd_mpc=_header_number(table, "DISTSTD"),
    )


def _header_number(table: _Table, key: str) -> float | None:
    value = table.header_value(key)
    usable = isinstance(value, int | float) and not isinstance(value, bool) and np.isfinite(value)
    return float(value) if usable else None
