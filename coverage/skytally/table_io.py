"""Tables of text cells from CSV, ECSV, FITS and VOTable; nothing is guessed.

Every cell stays text until somebody knows what it should mean, so that names
such as `0012` or `1e5` survive and a single `N/A` spoils no column.
"""

from __future__ import annotations

import csv
import io
import re
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits, votable
from astropy.table import Table

from skytally.ecsv_header import EcsvFault, read_ecsv_header
from skytally.errors import InputError
from skytally.local_files import expand, open_fits
from skytally.votable_check import check_votable

__all__ = ["SIZE_LIMIT_BYTES", "TextTable", "parse_table", "split_unit"]

SIZE_LIMIT_BYTES = 256 * 1024**2

_CELL_LIMIT = 1_100_000
_COLUMN_LIMIT = 2_000
_ROW_LIMIT = 5_000_000
# Rows times columns; each cell takes some sixty bytes of memory.
_CELLS_LIMIT = 20_000_000
_DELIMITERS = (",", ";", "\t")
_UTF16 = (b"\xff\xfe", b"\xfe\xff")
# How the VOTable reader writes a fault: file, line, column, code and a sentence.
_LIBRARY_REASON = re.compile(r"\S*:\d+:\d+: [EW]\d+: (.+)")


@dataclass(frozen=True)
class TextTable:
    """A table as written.

    Attributes
    ----------
    kind : str
        "CSV", "ECSV", "FITS" or "VOTable".
    names : tuple of str
        Column names, stripped.
    units : tuple of str
        Unit of each column in lower case, empty where none is stated.
    columns : tuple of list of str
        Cells by column, stripped; empty where masked.
    rows : tuple of int
        Line in a text file (the first is 1), else row (the first is 1).
    broken : tuple of (int, str)
        Rows that could not be split into cells, each with a sentence.
    delimiter : str
        What separates cells; empty for binary tables.
    notes : tuple of str
        What the reader assumed.
    """

    kind: str
    names: tuple[str, ...]
    units: tuple[str, ...]
    columns: tuple[list[str], ...]
    rows: tuple[int, ...]
    broken: tuple[tuple[int, str], ...] = ()
    delimiter: str = ""
    notes: tuple[str, ...] = ()


def parse_table(
    raw: bytes, file: str | Path, error: type[InputError], delimiter: str | None = None
) -> TextTable:
    """Tell the format by content and read the table.

    Parameters
    ----------
    raw : bytes
        The whole file, plain or gzip.
    file : str or Path
        Its name, for messages.
    error : type
        Which of our exceptions to raise.
    delimiter : str, optional
        Cell separator of a CSV; found from the header line where not given.

    Raises
    ------
    InputError
        Of the type ``error``, for anything that cannot be read as a table.
    """
    raw = bytes(expand(raw, file, size_limit_bytes=SIZE_LIMIT_BYTES, error=error))
    if raw.startswith(b"SIMPLE  ="):
        return _fits_table(raw, file, error)
    if raw.startswith(_UTF16):
        raise error("the text is UTF-16", file=file, remedy="Save the file as UTF-8.")
    if b"\0" in raw:
        raise error(
            "the content is binary, but neither FITS nor gzip",
            file=file,
            remedy="Give a CSV, ECSV, FITS or VOTable file.",
        )
    if not raw.strip(b" \t\r\n\xef\xbb\xbf"):
        raise error("the file is empty", file=file, remedy="Give a table with a header line.")
    if raw.removeprefix(b"\xef\xbb\xbf").lstrip().startswith(b"<"):
        return _votable(raw, file, error)
    notes: tuple[str, ...] = ()
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        text = raw.decode("latin-1")
        notes = ("The file is not UTF-8 and was read as Latin-1; check names with accents.",)
    _check_counts(1, max(text.count("\n"), text.count("\r")), file, error)
    lines = re.split(r"\r\n|\n|\r", text)  # splitlines() also splits at control characters
    if lines[0].startswith("# %ECSV"):
        return _ecsv(lines, file, error, notes)
    return _csv(lines, file, error, delimiter, notes)


class _Records:
    """Hand lines to a CSV reader, without comments and blank lines between records."""

    def __init__(self, lines: list[str]) -> None:
        self._lines = enumerate(lines, start=1)
        self.between = True
        self.first_line = 0

    def __iter__(self) -> Iterator[str]:
        return self

    def __next__(self) -> str:
        for number, line in self._lines:
            if self.between:
                stripped = line.strip()
                if not stripped or stripped.startswith("#"):
                    continue
                self.between = False
                self.first_line = number
            return line + "\n"
        raise StopIteration


def _records(
    lines: list[str], delimiter: str, file: str | Path, error: type[InputError]
) -> Iterator[tuple[int, list[str] | str]]:
    """Yield line number and cells, or line number and why there are none."""
    csv.field_size_limit(max(csv.field_size_limit(), _CELL_LIMIT))
    source = _Records(lines)
    reader = csv.reader(source, delimiter=delimiter, strict=True, skipinitialspace=True)
    while True:
        source.between = True
        try:
            cells = next(reader)
        except StopIteration:
            return
        except csv.Error as exc:
            if "unexpected end" in str(exc):
                raise error(
                    "a quoted cell that begins in this row never ends",
                    file=file,
                    row=source.first_line,
                    remedy='Close the quote, or write a quote inside a cell twice ("").',
                ) from exc
            long = "field limit" in str(exc)
            yield (
                source.first_line,
                f"a cell exceeds {_CELL_LIMIT} characters" if long else str(exc),
            )
            continue
        yield source.first_line, [cell.strip() for cell in cells]


def _find_delimiter(lines: list[str]) -> str:
    """Return the separator that cuts the header line into most cells."""
    header = next((x for x in lines if x.strip() and not x.lstrip().startswith("#")), "")
    outside_quotes = re.sub(r'"[^"]*"', "", header)
    return max(_DELIMITERS, key=outside_quotes.count)


def _csv(
    lines: list[str],
    file: str | Path,
    error: type[InputError],
    delimiter: str | None,
    notes: tuple[str, ...],
) -> TextTable:
    if delimiter is not None and (len(delimiter) != 1 or delimiter in '"#\r\n'):
        raise error(
            f"the delimiter is {delimiter!r}, expected one character",
            file=file,
            remedy='Set delimiter to ",", ";" or "\\t", or leave it out.',
        )
    separator = delimiter or _find_delimiter(lines)
    records = _records(lines, separator, file, error)
    number, header = next(records, (1, "no line is left after comments"))
    if isinstance(header, str):
        raise error(
            f"the header line cannot be read ({header})",
            file=file,
            row=number,
            remedy="The first line that is not a comment must name the columns.",
        )
    _check_counts(len(header), len(lines), file, error)
    names, units = _split_units(header)
    return _collect("CSV", names, units, records, separator, notes)


def _split_units(header: list[str]) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Read a unit in brackets at the end of a column name: `exptime (min)`."""
    return tuple(header), tuple(split_unit(name)[1] for name in header)


def split_unit(name: str) -> tuple[str, str]:
    """Split a column name into what stands before a unit in brackets at its end, and the unit."""
    text = name.rstrip()
    opened = max(text.rfind("("), text.rfind("["))
    inside = text[opened + 1 : -1]
    if opened < 0 or text[-1] not in ")]" or ")" in inside or "]" in inside:
        return name, ""
    return text[:opened].rstrip(), inside.strip().lower()


def _check_counts(columns: int, rows: int, file: str | Path, error: type[InputError]) -> None:
    """Refuse a table whose cells would fill the memory."""
    for count, limit, what in (
        (columns, _COLUMN_LIMIT, "columns"),
        (rows, _ROW_LIMIT, "rows"),
        (columns * rows, _CELLS_LIMIT, "cells"),
    ):
        if count > limit:
            raise error(
                f"the table has {count:,} {what}, expected at most {limit:,}",
                file=file,
                remedy="Check that it is the right file; leave out columns that nobody needs, or "
                "split it.",
            )


def _collect(
    kind: str,
    names: tuple[str, ...],
    units: tuple[str, ...],
    records: Iterator[tuple[int, list[str] | str]],
    separator: str,
    notes: tuple[str, ...],
) -> TextTable:
    """Sort records into columns; those with too few or too many cells are broken."""
    good: list[list[str]] = []
    rows: list[int] = []
    broken: list[tuple[int, str]] = []
    width = len(names)
    for number, cells in records:
        if isinstance(cells, str):
            broken.append((number, f"The row cannot be split into cells ({cells}); mend it."))
            continue
        if len(cells) > width and not any(cells[width:]):
            cells = cells[:width]
        if len(cells) != width:
            broken.append(
                (
                    number,
                    f"The row has {len(cells)} cells where the header has {width}; "
                    "complete it, or put cells that hold the separator in quotes.",
                )
            )
            continue
        good.append(cells)
        rows.append(number)
    columns = tuple(list(x) for x in zip(*good)) if good else tuple([] for _ in names)
    return TextTable(kind, names, units, columns, tuple(rows), tuple(broken), separator, notes)


def _ecsv(
    lines: list[str], file: str | Path, error: type[InputError], notes: tuple[str, ...]
) -> TextTable:
    """Read ECSV: units from the YAML header, cells by the CSV reader."""
    header = [x[2:] for x in lines[: _first_data_line(lines)] if x.startswith("# ")]
    try:
        described, delimiter = read_ecsv_header(header[1:])
    except EcsvFault as exc:
        raise error(
            f"the ECSV header cannot be read ({exc})",
            file=file,
            row=1,
            remedy="Write the table again, or save it as plain CSV.",
        ) from exc
    _check_counts(len(described), len(lines), file, error)
    if delimiter not in {" ", ","}:
        raise error(
            f"the ECSV delimiter is {delimiter!r}, expected a space or a comma",
            file=file,
            row=1,
            remedy="Write the table again, or save it as plain CSV.",
        )
    records = _records([x.rstrip() for x in lines], delimiter, file, error)
    number, names = next(records, (1, "no line is left after comments"))
    if isinstance(names, str) or names != list(described):
        raise error(
            f"the ECSV header describes the columns {', '.join(list(described)[:20])[:400]}, "
            "but the line below it names others",
            file=file,
            row=number,
            remedy="Write the table again, or save it as plain CSV.",
        )
    units = tuple(described[name].lower() for name in names)
    return _collect("ECSV", tuple(names), units, records, delimiter, notes)


def _first_data_line(lines: list[str]) -> int:
    """Return the index of the first line that is no comment."""
    return next((i for i, x in enumerate(lines) if not x.startswith("#")), len(lines))


def _fits_table(raw: bytes, file: str | Path, error: type[InputError]) -> TextTable:
    with open_fits(raw, file, error=error) as hdus:
        tables = [x for x in hdus if isinstance(x, fits.BinTableHDU | fits.TableHDU)]
        tables = [x for x in tables if not isinstance(x, fits.CompImageHDU)]
        if not tables:
            raise error(
                "the FITS file holds no table",
                file=file,
                remedy='Give images with images = "...", and a log as a table.',
            )
        header = tables[0].header
        _check_counts(header.get("TFIELDS", 0), header.get("NAXIS2", 0), file, error)
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # odd units and the like: cells stay text
                table = Table.read(tables[0], format="fits")
        except Exception as exc:  # damaged FITS raises many kinds
            raise error(
                "the FITS table cannot be read",
                file=file,
                remedy="Fetch or write the file again.",
            ) from exc
    return _from_astropy("FITS", table, {}, _first_of(len(tables)), file, error)


def _first_of(count: int) -> tuple[str, ...]:
    return (f"The file holds {count} tables; the first is read.",) if count > 1 else ()


def _votable(raw: bytes, file: str | Path, error: type[InputError]) -> TextTable:
    check_votable(raw, file, error)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # small breaches of the standard are common
            document = votable.parse(io.BytesIO(raw), verify="ignore")
            elements = list(document.iter_tables())
            if not elements:
                raise error("the VOTable holds no TABLE", file=file, remedy="Write it again.")
            table = elements[0].to_table(use_names_over_ids=True)
            kinds = {x.name: str(x.xtype or "") for x in elements[0].fields}
    except InputError:
        raise
    except Exception as exc:  # damaged VOTables raise many kinds
        raise error(
            f"the VOTable cannot be read{_reason(exc)}",
            file=file,
            remedy="Fetch or write the file again.",
        ) from exc
    return _from_astropy("VOTable", table, kinds, _first_of(len(elements)), file, error)


def _from_astropy(
    kind: str,
    table: Table,
    shape_kinds: dict[str, str],
    notes: tuple[str, ...],
    file: str | Path,
    error: type[InputError],
) -> TextTable:
    """Turn a typed table into text cells; masked cells become empty."""
    _check_counts(len(table.columns), len(table), file, error)
    columns = tuple(
        _cells(table[name], shape_kinds.get(name, "").lower()) for name in table.colnames
    )
    names = tuple(str(name).strip() for name in table.colnames)
    units = tuple(str(table[name].unit or "").lower() for name in table.colnames)
    return TextTable(kind, names, units, columns, tuple(range(1, len(table) + 1)), (), "", notes)


def _cells(column: Any, shape_kind: str) -> list[str]:
    """Text of each cell, the shortest that reads back as the same number."""
    values = np.ma.asarray(column)
    if values.ndim > 1 or values.dtype.kind == "O":
        word = shape_kind if shape_kind in {"circle", "polygon"} else ""
        return [_joined(cell, word) for cell in values]
    masked = np.ma.getmaskarray(values)
    plain = np.ma.getdata(values)
    if plain.dtype.kind == "S":
        plain = np.char.decode(plain, "latin-1")
    texts = plain.astype(str).tolist()
    return ["" if hidden else text.strip() for text, hidden in zip(texts, masked.tolist())]


def _joined(cell: Any, word: str) -> str:
    """Text of a cell that holds several values, such as a DALI polygon."""
    if cell is np.ma.masked or cell is None:
        return ""
    if isinstance(cell, str | bytes):
        return cell.strip() if isinstance(cell, str) else cell.decode("latin-1").strip()
    if np.ma.asarray(cell).dtype.kind in "US":
        # Text of variable length in FITS comes as its characters; its own array drops blanks.
        letters = np.asarray(cell).astype("U").ravel().tolist()
        if all(len(x) <= 1 for x in letters):
            return "".join(x or " " for x in letters).strip()
    shown = [str(x) for x in np.ma.compressed(np.ma.ravel(cell))]
    return " ".join([word, *shown]).strip() if shown else ""


def _reason(exc: BaseException) -> str:
    """Return in brackets what the VOTable reader found, where it says so itself."""
    found = _LIBRARY_REASON.match(str(exc))
    return "" if found is None else f" ({found[1][:160].rstrip()})"
