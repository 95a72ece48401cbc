"""Positions to look up: one from the command line, or a table of them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from skytally.cosmology import Cosmology
from skytally.errors import InputError, UsageError
from skytally.local_files import read_local_file
from skytally.log_cells import (
    MISSING_WORDS,
    UNIT_DEGREES,
    CellFault,
    is_number,
    read_cells,
    read_declination,
    read_depth,
    read_number,
    read_right_ascension,
    shown,
    visible,
)
from skytally.log_columns import listed, normalise_name
from skytally.table_io import SIZE_LIMIT_BYTES, TextTable, parse_table

__all__ = [
    "POSITION_COLUMNS",
    "ROWS_LIMIT",
    "PositionFault",
    "Positions",
    "parse_position",
    "read_positions",
]

Floats = NDArray[np.float64]
Faults = dict[int, CellFault]

ROWS_LIMIT = 100_000

POSITION_COLUMNS: dict[str, tuple[str, ...]] = {
    "name": ("name", "id", "object", "source", "galaxy", "target", "designation"),
    "ra": (
        *("ra", "s_ra", "ra_deg", "right_ascension", "ra_j2000", "raj2000", "ra_icrs"),
        *("ra_hms", "ra_hours"),
    ),
    "dec": (
        *("dec", "s_dec", "dec_deg", "declination", "decl", "dec_j2000", "dej2000", "decj2000"),
        *("dec_icrs", "dec_dms", "de"),
    ),
    "distance": (
        *("distance", "luminosity_distance", "dist", "distance_mpc", "dist_mpc", "d_l", "dl"),
        *("lumdist", "dlum"),
    ),
    "distance_modulus": ("distance_modulus", "distmod", "modulus", "mu"),
    "redshift": ("redshift", "z", "z_cmb", "zcmb", "z_helio", "zhelio", "z_spec", "zspec"),
    "magnitude": ("magnitude", "mag", "apparent_magnitude", "app_mag", "mag_app"),
    "absolute_magnitude": ("absolute_magnitude", "abs_mag", "absmag", "mag_abs"),
    "mass": ("mass", "stellar_mass", "mass_stellar", "mstar", "m_star"),
}
"""What each column may be called, whatever the case; the first present wins (common practice)."""

# What a distance is given by, the first that a row has wins.
_DISTANCES = ("distance", "distance_modulus", "redshift")
_MPC = {"": 1.0, "mpc": 1.0, "gpc": 1e3, "kpc": 1e-3, "pc": 1e-6}
_MODULUS_RANGE = (0.0, 60.0)
_REDSHIFT_RANGE = (1e-8, 1000.0)
# Beside a column of another band, z is a magnitude.
_BANDS_BESIDE_Z = frozenset({"u", "g", "r", "i", "y"})
# A galaxy's own motion, some 300 km/s (common practice), is a tenth of the
# velocity at redshift 0.01.
_DRIFT_REDSHIFT = 0.01
# No galaxy weighs less than so many solar masses, but all their logarithms do.
_LOGARITHMIC_MASS = 20.0


@dataclass(frozen=True)
class PositionFault:
    """A row, or one cell of it, that cannot be used.

    ``row`` is the line of a text file (the first is 1) or row of a binary
    table; ``detail`` a sentence with column, value and what to do.
    """

    row: int
    name: str
    column: str
    detail: str


@dataclass(frozen=True, eq=False)
class Positions:
    """Directions to ask about, with what is known of what lies there.

    All arrays have shape (n,), in the order of the table.

    Attributes
    ----------
    file, sha256 : str or None
        The table, None for a position given by itself.
    read : int
        Rows in the table; equals n + len(set_aside).
    row : int64 array
        Line or row number in the table; 1 for a position given by itself.
    name : object array of str
        Names, never empty.
    ra_deg, dec_deg : float64 arrays
        ICRS; ra in [0, 360).
    distance_mpc : float64 array
        Luminosity distance; NaN where none is given.
    magnitude, absolute_magnitude, mass : float64 arrays
        Apparent and absolute magnitude, and mass in the table's unit; NaN
        where missing.
    set_aside : tuple of PositionFault
        Rows without a usable position.
    unread : tuple of PositionFault
        Cells of the other rows that cannot be used: the value is missing.
    notes : tuple of str
        What the reader assumed or noticed.
    """

    file: str | None
    sha256: str | None
    read: int
    row: NDArray[np.int64]
    name: NDArray[np.object_]
    ra_deg: Floats
    dec_deg: Floats
    distance_mpc: Floats
    magnitude: Floats
    absolute_magnitude: Floats
    mass: Floats
    set_aside: tuple[PositionFault, ...] = ()
    unread: tuple[PositionFault, ...] = ()
    notes: tuple[str, ...] = ()

    def __len__(self) -> int:
        return int(self.row.size)


def parse_position(ra: str, dec: str) -> Positions:
    """Read one position as given on a command line.

    Parameters
    ----------
    ra : str
        Degrees, or hours as `10:23:45.6` or `10h23m45.6s` (ICRS).
    dec : str
        Degrees, or `-31:04:12` or `-31d04m12s`.

    Raises
    ------
    UsageError
        If either is no angle, or lies off the sphere.
    """
    ra, dec = ra.strip(), dec.strip()
    lon = _angle("right ascension", ra, lambda x: read_right_ascension(x, "", None, False))
    lat = _angle("declination", dec, lambda x: read_declination(x, "", False))
    notes: tuple[str, ...] = ()
    if is_number(ra, False) and lon <= 24.0 and not is_number(dec, False):
        notes = (f"Right ascension {ra} is read as degrees; write hours as 10:30:00.",)
    none = np.array([np.nan])
    return Positions(
        None,
        None,
        1,
        np.array([1], dtype=np.int64),
        _objects([f"{ra} {dec}"]),
        np.array([lon]),
        np.array([lat]),
        *(none,) * 4,
        notes=notes,
    )


def _angle(what: str, text: str, read: Callable[[str], float | None]) -> float:
    values, faults = read_cells([text], read)
    if faults:
        raise UsageError(
            f"found {shown(text)} for the {what}, {faults[0].why}",
            remedy=f"{faults[0].remedy[:1].upper()}{faults[0].remedy[1:]}.",
        )
    if np.isnan(values[0]):
        raise UsageError(
            f"found {shown(text)} for the {what}, no value",
            remedy="Give degrees, or sexagesimal text: hours for the right ascension.",
        )
    return float(values[0])


def read_positions(path: str | Path, cosmology: Cosmology) -> Positions:
    """Read a table of positions.

    Parameters
    ----------
    path : str or Path
        CSV, ECSV, FITS table or VOTable, plain or gzip, with at most 100,000
        rows; columns as in `POSITION_COLUMNS`, of which ra and dec are needed.
    cosmology : Cosmology
        Turns redshifts into luminosity distances.

    Raises
    ------
    InputError
        If the file is no such table, or none of its rows can be used.
    """
    raw, sha256 = read_local_file(path, size_limit_bytes=SIZE_LIMIT_BYTES, error=InputError)
    table = parse_table(raw, path, InputError)
    rows = len(table.rows) + len(table.broken)
    if rows == 0:
        raise InputError(
            "the table has a header but no rows",
            file=path,
            remedy="Give one row for each position.",
        )
    if rows > ROWS_LIMIT:
        raise InputError(
            f"the table has {rows:,} rows, expected at most {ROWS_LIMIT:,}",
            file=path,
            remedy="Split it, or keep the rows that matter.",
        )
    return _Reading(table, path).positions(sha256, cosmology)


class _Reading:
    """One table on its way from text cells to columns."""

    def __init__(self, table: TextTable, path: str | Path) -> None:
        self._table = table
        self._path = path
        self._notes = list(table.notes)
        self._unread: list[tuple[int, PositionFault]] = []
        self._comma = table.kind == "CSV" and table.delimiter != ","
        self._at = _find_columns(table, path, self._notes)
        names = self._cells("name")
        self._names = [
            f"row {row}" if name.lower() in MISSING_WORDS else visible(name)
            for name, row in zip(names, table.rows, strict=True)
        ]

    def positions(self, sha256: str, cosmology: Cosmology) -> Positions:
        ra, dec, aside = self._directions()
        distance = self._distance(cosmology)
        magnitude = self._column("magnitude", self._magnitude)
        absolute = self._column("absolute_magnitude", self._magnitude)
        mass = self._column("mass", self._mass)
        used = np.array([i for i in range(len(self._names)) if i not in aside], dtype=np.int64)
        self._note_masses(mass[used])
        set_aside = [
            *aside.values(),
            *(PositionFault(row, "", "", detail) for row, detail in self._table.broken),
        ]
        set_aside.sort(key=lambda fault: fault.row)
        if not used.size:
            raise InputError(
                f"no row of {len(set_aside)} can be used; the first fault: {set_aside[0].detail}",
                file=self._path,
                row=set_aside[0].row,
                column=set_aside[0].column or None,
            )
        return Positions(
            str(self._path),
            sha256,
            len(self._names) + len(self._table.broken),
            np.array(self._table.rows, dtype=np.int64)[used],
            _objects(self._names)[used],
            ra[used],
            dec[used],
            distance[used],
            magnitude[used],
            absolute[used],
            mass[used],
            tuple(set_aside),
            tuple(fault for index, fault in self._unread if index not in aside),
            tuple(self._notes),
        )

    def _cells(self, canonical: str) -> list[str]:
        """Cells of a column; all empty where the table has none."""
        at = self._at.get(canonical)
        return [""] * len(self._table.rows) if at is None else self._table.columns[at]

    def _unit(self, canonical: str, known: dict[str, float]) -> float:
        """Factor of a column's stated unit; one that is not known is refused."""
        at = self._at.get(canonical)
        unit = "" if at is None else self._table.units[at]
        if at is not None and unit not in known:
            raise InputError(
                f"the unit is {shown(unit)}, expected {', '.join(u for u in known if u)}",
                file=self._path,
                column=self._table.names[at],
                remedy="Convert the column, or correct the unit.",
            )
        return known[unit]

    def _fault(self, canonical: str, index: int, fault: CellFault) -> PositionFault:
        column = visible(self._table.names[self._at[canonical]])
        detail = fault.sentence(column, self._cells(canonical)[index])
        return PositionFault(self._table.rows[index], self._names[index], column, detail)

    def _directions(self) -> tuple[Floats, Floats, dict[int, PositionFault]]:
        """Right ascension and declination, and the rows that lack either."""
        comma = self._comma
        for canonical in ("ra", "dec"):
            self._unit(canonical, UNIT_DEGREES)
        unit = {name: self._table.units[self._at[name]] for name in ("ra", "dec")}
        ra, ra_faults = read_cells(
            self._cells("ra"), _or_nan(lambda x: read_right_ascension(x, unit["ra"], None, comma))
        )
        dec, dec_faults = read_cells(
            self._cells("dec"), _or_nan(lambda x: read_declination(x, unit["dec"], comma))
        )
        aside: dict[int, PositionFault] = {}
        absent = CellFault("missing", "", "fill it in, or take the row out of the table")
        for canonical, values, faults in (("ra", ra, ra_faults), ("dec", dec, dec_faults)):
            for index in np.flatnonzero(np.isnan(values)).tolist():
                fault = faults.get(index, absent)
                aside.setdefault(index, self._fault(canonical, index, fault))
        self._note_hours(ra, unit["ra"])
        return ra, dec, aside

    def _note_hours(self, ra: Floats, unit: str) -> None:
        cells = self._cells("ra")
        plain = [i for i in np.flatnonzero(np.isfinite(ra)) if is_number(cells[i], self._comma)]
        if not unit and len(plain) >= 5 and (ra[plain] <= 24.0).all():
            self._notes.append(
                f"All right ascensions in column {self._table.names[self._at['ra']]!r} lie in 0 "
                "to 24 and are read as degrees; write hours as 10:23:45.6."
            )

    def _column(self, canonical: str, read: Callable[[str], float | None]) -> Floats:
        """Read a column that may be missing; cells that cannot be read are noted, by row."""
        if canonical not in self._at:
            return np.full(len(self._names), np.nan)
        values, faults = read_cells(self._cells(canonical), _or_nan(read))
        self._unread += [(i, self._fault(canonical, i, fault)) for i, fault in faults.items()]
        return values

    def _magnitude(self, cell: str) -> float | None:
        return read_depth(cell, self._comma)

    def _mass(self, cell: str) -> float:
        remedy = "give a mass above 0, or leave the cell empty"
        value = read_number(cell, self._comma, remedy)
        if not value > 0:
            raise CellFault("unreadable", "no mass", remedy)
        return value

    def _note_masses(self, mass: Floats) -> None:
        known = mass[np.isfinite(mass)]
        if known.size and known.max() < _LOGARITHMIC_MASS:
            self._notes.append(
                f"All masses in column {self._table.names[self._at['mass']]!r} lie below "
                f"{_LOGARITHMIC_MASS:g} and are used as they stand; if they are logarithms, give "
                "the masses themselves."
            )

    def _distance(self, cosmology: Cosmology) -> Floats:
        """Luminosity distances, by whatever each row gives first."""
        factor = self._unit("distance", _MPC)
        self._unit("distance_modulus", {"": 1.0, "mag": 1.0})
        limit = cosmology.limit_mpc

        def plain(cell: str) -> float:
            return _within(read_number(cell, self._comma, _give("distance")) * factor, limit)

        def modulus(cell: str) -> float:
            remedy = _give("distance modulus")
            value = read_number(cell, self._comma, remedy)
            low, high = _MODULUS_RANGE
            if not low < value < high:
                raise CellFault("unreadable", f"outside {low:g} to {high:g} mag", remedy)
            return float(10.0 ** (value / 5.0 - 5.0))

        def redshift(cell: str) -> float:
            value = read_number(cell, self._comma, _give("redshift"))
            low, high = _REDSHIFT_RANGE
            if not low <= value <= high:
                remedy = "give a distance in Mpc instead, or leave the cell empty"
                raise CellFault("unreadable", "no redshift that gives a distance", remedy)
            return value

        by_redshift = self._column("redshift", redshift)
        ways = (
            self._column("distance", plain),
            self._column("distance_modulus", modulus),
            _luminosity_distance(by_redshift, cosmology),
        )
        self._note_ways(ways)
        distance = np.where(np.isfinite(ways[0]), ways[0], ways[1])
        used = np.isnan(distance) & np.isfinite(ways[2])
        near = int((by_redshift[used] < _DRIFT_REDSHIFT).sum())
        if near:
            self._notes.append(
                f"{near:,} of the distances come from redshifts below {_DRIFT_REDSHIFT:g}, where "
                "a galaxy's own motion changes them by a tenth or more."
            )
        return np.where(used, ways[2], distance)

    def _note_ways(self, ways: tuple[Floats, ...]) -> None:
        given = [
            f"{name.replace('_', ' ')} ({int(np.isfinite(way).sum()):,} rows)"
            for name, way in zip(_DISTANCES, ways, strict=True)
            if np.isfinite(way).any()
        ]
        if len(given) > 1:
            self._notes.append(
                f"The table gives {' and '.join(given)}; each row's distance is by the first of "
                "these that it has."
            )


def _give(what: str) -> str:
    return f"give a {what} above 0, or leave the cell empty"


def _within(distance_mpc: float, limit_mpc: float) -> float:
    """Refuse what is no luminosity distance in Mpc."""
    if not distance_mpc > 0:
        raise CellFault("unreadable", "no distance", _give("distance"))
    if distance_mpc > limit_mpc:
        raise CellFault(
            "unreadable", "beyond redshift 1000 if it is in Mpc", "state the column's unit"
        )
    return distance_mpc


def _or_nan(read: Callable[[str], float | None]) -> Callable[[str], float | None]:
    """Take the words for a missing value, and NaN as binary tables write it, as missing."""

    def reading(cell: str) -> float | None:
        word = cell.lower()
        return None if word in MISSING_WORDS or word == "nan" else read(cell)

    return reading


def _luminosity_distance(redshift: Floats, cosmology: Cosmology) -> Floats:
    """Luminosity distances (Mpc) of redshifts, NaN where missing, shape (n,).

    The cosmology knows the redshift of a distance; between close points the
    logarithms of the two are straight to a few parts in 10⁸.
    """
    known = np.isfinite(redshift)
    distance = np.full(redshift.shape, np.nan)
    if known.any():
        grid = np.geomspace(1e-13, 1.0, 40_000) * cosmology.limit_mpc
        at = np.log(cosmology.redshift(grid))
        distance[known] = np.exp(np.interp(np.log(redshift[known]), at, np.log(grid)))
    return distance


def _objects(values: list[str]) -> NDArray[np.object_]:
    array = np.empty(len(values), dtype=object)
    array[:] = values
    return array


def _find_columns(table: TextTable, path: str | Path, notes: list[str]) -> dict[str, int]:
    """Find which column holds what, by the names understood."""
    bare = [normalise_name(name) for name in table.names]
    unclear = {"z"} if _BANDS_BESIDE_Z & set(bare) else set()
    if unclear & set(bare):
        notes.append(
            "Column 'z' stands beside other bands and is taken for a magnitude; call a column "
            "of redshifts redshift."
        )
    at: dict[str, int] = {}
    for canonical, aliases in POSITION_COLUMNS.items():
        present = [name for name in aliases if name in bare and name not in unclear]
        if not present:
            continue
        at[canonical] = bare.index(present[0])
        if bare.count(present[0]) > 1:
            raise InputError(
                f"{bare.count(present[0])} columns have this name",
                file=path,
                column=table.names[at[canonical]],
                remedy="Give every column its own name.",
            )
        if len(present) > 1:
            others = [repr(table.names[bare.index(name)]) for name in present[1:]]
            notes.append(
                f"Column {table.names[at[canonical]]!r} is read as {canonical.replace('_', ' ')}, "
                f"and {', '.join(others)} left unread; rename columns if this is wrong."
            )
    for needed in ("ra", "dec"):
        if needed not in at:
            raise InputError(
                f"the table has no column for {needed}",
                file=path,
                remedy=f"It has {listed([repr(x) for x in table.names], 30)}: name the columns "
                "ra and dec (ICRS), and if you like name, distance, distance_modulus, redshift, "
                "magnitude, absolute_magnitude, mass.",
            )
    return at
