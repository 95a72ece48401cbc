"""Observation logs into columns: every row is used, or set aside with its reason."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from difflib import get_close_matches
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from skytally.errors import LogError, RegionError
from skytally.image_io import ImageOptions, read_images
from skytally.local_files import is_url, read_local_file
from skytally.log_cells import (
    MISSING_WORDS,
    TIME_SCALES,
    UNIT_DEGREES,
    UNIT_SECONDS,
    CellFault,
    is_number,
    read_angle,
    read_cells,
    read_declination,
    read_depth,
    read_duration,
    read_right_ascension,
    read_times,
    shown,
    visible,
)
from skytally.log_columns import ALIASES, find_columns, listed, mapping_remedy, normalise_name
from skytally.log_regions import is_moc_path
from skytally.observations import LogTable, SetAside
from skytally.region_text import parse_region
from skytally.table_io import SIZE_LIMIT_BYTES, TextTable, parse_table

__all__ = ["ImageOptions", "LogOptions", "read_images", "read_log"]

# Of the values of ObsLocTAP's execution_status, the one that means it happened.
PERFORMED = "Performed"
EARLY = "before the event"
EXTINCTION_LIMIT = 50.0  # magnitudes; more is another unit


@dataclass(frozen=True)
class LogOptions:
    """How a log is to be read.

    Attributes
    ----------
    columns : mapping
        Canonical name to column of the file; wins over every known name.
    time_scale : str
        Scale of the times: "utc", "tai", "tt" or "tdb".
    accept : tuple of str, optional
        Values of the quality column that count, whatever the case of letters.
    ra_unit : str, optional
        "deg" or "hour"; otherwise sexagesimal text is in hours and numbers
        are in the unit that the file states, or degrees.
    delimiter, decimal : str, optional
        Of a CSV; otherwise found from the header, and a decimal comma is
        understood wherever the delimiter is not a comma.
    band, duration, angle, depth : optional
        Used where the column or the value is missing (seconds, degrees).
    not_before_mjd : float, optional
        Exposures that start earlier (UTC) are set aside as reference.
    use_fov : bool
        Whether a row without region gets a circle from its field-of-view
        diameter (`s_fov`).
    """

    columns: Mapping[str, str] = field(default_factory=dict)
    time_scale: str = "utc"
    accept: tuple[str, ...] | None = None
    ra_unit: str | None = None
    delimiter: str | None = None
    decimal: str | None = None
    band: str | None = None
    duration: float | None = None
    angle: float | None = None
    depth: float | None = None
    not_before_mjd: float | None = None
    use_fov: bool = False


def read_log(path: str | Path, telescope: str, options: LogOptions | None = None) -> LogTable:
    """Read a log of executed observations.

    Parameters
    ----------
    path : str or Path
        CSV, ECSV, FITS table or VOTable, plain or gzip, of at most 256 MB; the
        format is told by content.
    telescope : str
        Whose log it is.
    options : LogOptions, optional
        How to read it.

    Returns
    -------
    LogTable
        Rows used, rows set aside, notes.

    Raises
    ------
    LogError
        If the file cannot be read as a table, a needed column is missing, it
        holds no rows, or no row is usable and most of them are at fault.
    """
    options = options or LogOptions()
    _check_options(options, path)
    raw, sha256 = read_local_file(path, size_limit_bytes=SIZE_LIMIT_BYTES, error=LogError)
    table = parse_table(raw, path, LogError, options.delimiter)
    reading = _Reading(table, options, path, telescope)
    if not table.rows and not table.broken:
        raise LogError(
            "the log has a header but no data rows",
            file=path,
            remedy="Give the complete log, or leave this telescope out.",
        )
    return reading.log(sha256)


def _check_options(options: LogOptions, path: str | Path) -> None:
    for key in options.columns:
        if key not in ALIASES:
            near = get_close_matches(key, ALIASES, n=1, cutoff=0.0)[0]
            raise LogError(
                f"columns maps {key!r}, which is no column of a log",
                file=path,
                remedy=f"The nearest is {near!r}; all are {', '.join(ALIASES)}.",
            )
    for name, value, known in (
        ("time_scale", options.time_scale, TIME_SCALES),
        ("ra_unit", options.ra_unit, (None, "deg", "hour")),
        ("decimal", options.decimal, (None, ".", ",")),
    ):
        if value not in known:
            words = ", ".join(repr(x) for x in known if x is not None)
            raise LogError(f"{name} is {value!r}", file=path, remedy=f"Set it to one of {words}.")
    if options.accept is not None and not options.accept:
        raise LogError(
            "accept is an empty list, so no row could count",
            file=path,
            remedy="Name the values that count, or leave accept out.",
        )


class _Reading:
    """One log on its way from text cells to columns."""

    def __init__(
        self, table: TextTable, options: LogOptions, path: str | Path, telescope: str
    ) -> None:
        self._table = table
        self._options = options
        self._path = path
        self._telescope = telescope
        self._notes = list(table.notes)
        self._aside: dict[int, tuple[str, str, str]] = {}
        self._count = len(table.rows)
        self._comma = options.decimal == "," or (
            options.decimal is None and table.kind == "CSV" and table.delimiter != ","
        )
        self._at = find_columns(table, options.columns, path, self._notes)
        self._names = [
            visible(_text(cell)) or f"row {row}"
            for cell, row in zip(self._cells("exposure"), table.rows, strict=True)
        ]

    def log(self, sha256: str) -> LogTable:
        """Read all columns; the first reason found for a row is the one given."""
        self._filter_quality()
        start = self._start()
        region = [_text(x) for x in self._cells("region")]
        ra, dec = self._position(region)
        self._check_regions(region)
        angle = self._angle()
        duration = self._duration(start)
        band = [visible(_text(x)) or self._options.band or "" for x in self._cells("band")]
        depth = self._magnitude("depth", self._options.depth)
        extinction = self._extinction()
        fov = self._fields_of_view(region, ra, dec)
        self._set_aside_early(start)
        self._set_aside_duplicates(zip(start, ra, dec, angle, band, region, strict=True))
        used = np.array([i for i in range(self._count) if i not in self._aside], dtype=np.int64)
        self._note_duration(duration, used)
        set_aside = self._listed()
        self._refuse_if_hopeless(len(used), set_aside)
        early = [i for i, aside in self._aside.items() if aside[0] == EARLY]
        whole = LogTable(
            telescope=self._telescope,
            file=str(self._path),
            sha256=sha256,
            read=self._count + len(self._table.broken),
            row=np.array(self._table.rows, dtype=np.int64),
            exposure=_objects(self._names),
            ra_deg=ra,
            dec_deg=dec,
            angle_deg=angle,
            start_mjd=start,
            duration_s=np.nan_to_num(duration, nan=0.0),
            band=_objects(band),
            depth=depth,
            extinction=extinction,
            region=_objects(region),
            fov_deg=fov,
            set_aside=set_aside,
            notes=tuple(self._notes),
        )
        early_rows = whole.take(np.array(sorted(early), dtype=np.int64))
        return replace(whole.take(used), before_event=early_rows if early else None)

    def _cells(self, canonical: str) -> Sequence[str]:
        """Cells of a column; all empty where the file has none."""
        at = self._at.get(canonical)
        return [""] * self._count if at is None else self._table.columns[at]

    def _name(self, canonical: str) -> str:
        """Name of a column as the file writes it."""
        at = self._at.get(canonical)
        return canonical if at is None else visible(self._table.names[at])

    def _unit(self, canonical: str, known: Mapping[str, float], default: str) -> str:
        """Stated unit of a column; empty, and noted, where it is not a known one."""
        at = self._at.get(canonical)
        unit = "" if at is None else self._table.units[at]
        if unit not in known:
            self._notes.append(
                f"Column {self._name(canonical)!r} states the unit {shown(unit)}, which is "
                f"not known; its numbers are read as {default}."
            )
            return ""
        return unit

    def _put_aside(self, index: int, reason: str, detail: str, canonical: str) -> None:
        self._aside.setdefault(index, (reason, detail, self._name(canonical)))

    def _put_aside_cells(self, canonical: str, faults: Mapping[int, CellFault]) -> None:
        cells, name = self._cells(canonical), self._name(canonical)
        for index, fault in faults.items():
            detail = fault.sentence(name, cells[index])
            self._put_aside(index, fault.reason, detail, canonical)

    def _filter_quality(self) -> None:
        accept = self._options.accept
        quality, status = self._at.get("quality"), self._at.get("execution_status")
        if quality is None and status is None and accept is not None:
            raise LogError(
                "accept lists values, but the log has no quality column",
                file=self._path,
                remedy=mapping_remedy("quality", self._table),
            )
        if quality is not None and normalise_name(self._name("quality")) != "execution_status":
            if accept is None:
                self._note_qualities()
            else:
                self._filter("quality", accept)
                accept = None
        elif quality is not None:
            self._filter("quality", accept or (PERFORMED,))
        if status is not None and status != quality:
            self._filter("execution_status", accept or (PERFORMED,))

    def _note_qualities(self) -> None:
        values = list(dict.fromkeys(visible(x) or "nothing" for x in self._cells("quality")))
        self._notes.append(
            f"Column {self._name('quality')!r} holds {listed(values)}; no accepted values are "
            "given (accept = [...]), so every row counts."
        )

    def _filter(self, canonical: str, accept: Sequence[str]) -> None:
        accepted = {x.strip().casefold() for x in accept}
        for index, cell in enumerate(self._cells(canonical)):
            if cell.casefold() not in accepted:
                detail = (
                    f"Column {self._name(canonical)!r} holds {shown(cell)}, not one of the "
                    f"accepted values ({', '.join(accept)}); add it to accept if it should count."
                )
                self._put_aside(index, "not accepted", detail, canonical)

    def _start(self) -> NDArray[np.float64]:
        scale = self._options.time_scale
        start, faults, stated = read_times(self._cells("start"), scale, self._comma)
        self._put_aside_cells("start", faults)
        self._put_aside_missing("start", start)
        if stated:
            self._notes.append(
                f"{stated} start times say themselves that they are UTC (Z or an offset) and "
                f"are taken as such, not as {scale.upper()}."
            )
        return start

    def _put_aside_missing(self, canonical: str, values: NDArray[np.float64]) -> None:
        fault = CellFault("missing", "", "fill it in, or take the row out of the log")
        indices = np.flatnonzero(np.isnan(values)).tolist()
        self._put_aside_cells(canonical, dict.fromkeys(indices, fault))

    def _position(self, region: list[str]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Right ascension and declination; needed in rows that give no region."""
        option, comma = self._options.ra_unit, self._comma
        units = [self._unit(x, UNIT_DEGREES, "degrees") for x in ("ra", "dec")]
        ra, ra_faults = read_cells(
            self._cells("ra"), lambda x: read_right_ascension(x, units[0], option, comma)
        )
        dec, dec_faults = read_cells(
            self._cells("dec"), lambda x: read_declination(x, units[1], comma)
        )
        given = np.array([bool(x) for x in region], dtype=bool)
        for canonical, values, faults in (("ra", ra, ra_faults), ("dec", dec, dec_faults)):
            cells = self._cells(canonical)
            # A binary table writes a missing number as NaN.
            kept = {i: x for i, x in faults.items() if not (given[i] and cells[i] == "nan")}
            self._put_aside_cells(canonical, kept)
            self._put_aside_missing(canonical, np.where(given, 0.0, values))
        one_missing = np.isnan(ra) | np.isnan(dec)
        ra[one_missing] = dec[one_missing] = np.nan
        self._note_right_ascension(ra)
        return ra, dec

    def _note_right_ascension(self, ra: NDArray[np.float64]) -> None:
        if self._options.ra_unit is not None:
            return
        cells = self._cells("ra")
        known = np.flatnonzero(np.isfinite(ra)).tolist()
        numbers = [i for i in known if is_number(cells[i], self._comma)]
        name = self._name("ra")
        if 0 < len(numbers) < len(known):
            self._notes.append(
                f"Column {name!r} mixes plain numbers ({len(numbers)} of {len(known)}), read as "
                "degrees, and sexagesimal values, read as hours; set ra_unit if this is wrong."
            )
        elif len(numbers) >= 5 and (ra[numbers] <= 24.0).all():
            self._notes.append(
                f"All right ascensions in column {name!r} lie in 0 to 24 and are read as "
                'degrees; they may be hours: set ra_unit = "hour" or "deg" to say which.'
            )

    def _check_regions(self, region: list[str]) -> None:
        """Set aside rows whose region text is none; MOC files are read later."""
        problems: dict[str, str] = {}
        for text in dict.fromkeys(region):
            try:
                if is_url(text):
                    problems[text] = "a URL where a local path is expected; fetch the file first"
                elif text and not is_moc_path(text):
                    parse_region(text)
            except RegionError as exc:
                problems[text] = f"which is no region ({exc.message}); correct the text"
        for index, text in enumerate(region):
            if text in problems:
                detail = f"Column {self._name('region')!r} holds {shown(text)}, {problems[text]}."
                self._put_aside(index, "unreadable", detail, "region")

    def _angle(self) -> NDArray[np.float64]:
        unit = self._unit("angle", UNIT_DEGREES, "degrees")
        angle, faults = read_cells(self._cells("angle"), lambda x: read_angle(x, unit, self._comma))
        self._put_aside_cells("angle", faults)
        return np.nan_to_num(angle, nan=self._options.angle or 0.0)

    def _duration(self, start: NDArray[np.float64]) -> NDArray[np.float64]:
        """Seconds, from the end where the log states no exposure time; NaN where unknown."""
        unit = self._unit("duration", UNIT_SECONDS, "seconds")
        duration, faults = read_cells(
            self._cells("duration"), lambda x: read_duration(x, unit, self._comma)
        )
        self._put_aside_cells("duration", faults)
        if "end" in self._at:
            end, end_faults, _ = read_times(
                self._cells("end"), self._options.time_scale, self._comma
            )
            needed = np.isnan(duration)
            self._put_aside_cells("end", {i: x for i, x in end_faults.items() if needed[i]})
            elapsed = (end - start) * 86400.0
            early = CellFault("unreadable", "before the start", "correct start or end")
            wrong = np.flatnonzero(needed & (elapsed < 0)).tolist()
            self._put_aside_cells("end", dict.fromkeys(wrong, early))
            duration = np.where(needed, elapsed, duration)
        default = self._options.duration
        return duration if default is None else np.where(np.isnan(duration), default, duration)

    def _note_duration(self, duration: NDArray[np.float64], used: NDArray[np.int64]) -> None:
        unknown = int(np.isnan(duration[used]).sum())
        if unknown:
            self._notes.append(
                f"{unknown} of {len(used)} exposures have no exposure time and count as 0 s "
                "long; set a default duration if it is known."
            )

    def _magnitude(self, canonical: str, default: float | None) -> NDArray[np.float64]:
        """Magnitudes; an unreadable one is noted and counts as missing."""
        cells = self._cells(canonical)
        values, faults = read_cells(cells, lambda x: read_depth(x, self._comma))
        if faults:
            said = [f"row {self._table.rows[i]} ({shown(cells[i])})" for i in faults]
            self._notes.append(
                f"Column {self._name(canonical)!r} is no magnitude in {listed(said)}; these "
                "exposures count, with the value missing."
            )
        return values if default is None else np.where(np.isnan(values), default, values)

    def _extinction(self) -> NDArray[np.float64]:
        """A_b in magnitudes; a row with one that no dust gives is set aside."""
        values = self._magnitude("extinction", None)
        wrong = np.flatnonzero((values < 0) | (values > EXTINCTION_LIMIT)).tolist()
        fault = CellFault(
            "unreadable",
            f"no extinction in magnitudes (0 to {EXTINCTION_LIMIT:g})",
            "give A_b in magnitudes, or leave the cell empty",
        )
        self._put_aside_cells("extinction", dict.fromkeys(wrong, fault))
        return values

    def _fields_of_view(
        self, region: list[str], ra: NDArray[np.float64], dec: NDArray[np.float64]
    ) -> NDArray[np.float64] | None:
        """Stated diameters (ObsCore 1.1, 3.3.1.3); rows without region may get a circle of it."""
        if "fov" not in self._at:
            return None
        unit = self._unit("fov", UNIT_DEGREES, "degrees")
        fov, faults = read_cells(self._cells("fov"), lambda x: read_angle(x, unit, self._comma))
        if self._options.use_fov:
            for index in np.flatnonzero(np.isfinite(ra) & (fov > 0)):
                if not region[index]:
                    region[index] = f"circle {ra[index]!s} {dec[index]!s} {fov[index] / 2!s}"
            self._put_aside_cells("fov", {i: x for i, x in faults.items() if not region[i]})
        return fov

    def _set_aside_early(self, start: NDArray[np.float64]) -> None:
        limit = self._options.not_before_mjd
        if limit is None:
            return
        cells, name = self._cells("start"), self._name("start")
        for index in np.flatnonzero(start < limit).tolist():
            detail = (
                f"Column {name!r} holds {shown(cells[index])}, "
                f"{(limit - start[index]) * 24:.2f} h before the event; the exposure is kept "
                "as reference only, so correct the time if it is wrong."
            )
            self._put_aside(index, EARLY, detail, "start")

    def _set_aside_duplicates(self, keys: Sequence[object] | zip[object]) -> None:
        first: dict[str, int] = {}
        for index, key in enumerate(keys):
            if index in self._aside:
                continue
            same = first.setdefault(repr(key), index)
            if same != index:
                detail = (
                    f"Column {self._name('start')!r} holds {shown(self._cells('start')[index])}, "
                    "and start, position, band and region are all those of row "
                    f"{self._table.rows[same]}; take one of the two out."
                )
                self._put_aside(index, "duplicate", detail, "start")

    def _listed(self) -> tuple[SetAside, ...]:
        file = str(self._path)
        rows = [
            SetAside(
                self._telescope, file, self._table.rows[i], self._names[i], reason, detail, column
            )
            for i, (reason, detail, column) in self._aside.items()
        ]
        rows += [
            SetAside(self._telescope, file, row, "", "unreadable", detail)
            for row, detail in self._table.broken
        ]
        return tuple(sorted(rows, key=lambda x: x.row))

    def _refuse_if_hopeless(self, used: int, set_aside: tuple[SetAside, ...]) -> None:
        faults = [x for x in set_aside if x.is_fault]
        if used or 2 * len(faults) <= len(set_aside):
            return
        raise LogError(
            f"no row of {len(set_aside)} can be used; the first fault: {faults[0].detail}",
            file=self._path,
            row=faults[0].row,
            column=faults[0].column or None,
        )


def _text(cell: str) -> str:
    """Text of a cell, empty where a word in it means missing."""
    return "" if cell.lower() in MISSING_WORDS else cell


def _objects(values: Sequence[str]) -> NDArray[np.object_]:
    array = np.empty(len(values), dtype=object)
    array[:] = values
    return array
