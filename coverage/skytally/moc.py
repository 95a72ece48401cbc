"""MOC files and texts: regions in the interchange form of the MOC standard (IVOA MOC 2.0).

We read and write them ourselves, because the library made for it drops what it
does not understand (a cell number that is no integer, a range turned round)
and wraps what lies outside, where a user needs to be told. Its objects are
taken and returned in `to_mocpy` and `from_mocpy`; no other module imports it.
"""

from __future__ import annotations

import io
import json
import re
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from mocpy import MOC
from numpy.typing import NDArray

from skytally.errors import RegionError
from skytally.local_files import expand, header_value, open_fits, read_local_file, write_whole
from skytally.spans import LINE_END, LINE_ORDER, Ints, Spans, spans_to_cells, uniq_to_cell

__all__ = ["from_mocpy", "parse_moc_ascii", "read_moc", "to_ascii", "to_mocpy", "write_moc"]

SIZE_LIMIT_BYTES = 512 << 20

_MAP_IS_NO_MOC = "A probability map is no MOC; write its region as a MOC first."
_TOKEN = re.compile(r"(?:(\d+)/)?(?:(\d+)(?:-(\d+))?)?")


def read_moc(path: str | Path) -> Spans:
    """Read a spatial MOC from a local file: FITS, JSON or ASCII, told by its content.

    FITS may be plain or gzip, with NUNIQ (MOC 1.1 and 2.0) or RANGE ordering.

    Raises
    ------
    RegionError
        If it is not a readable file, not a MOC, or not a MOC of the sky.
    """
    data, _ = read_local_file(path, size_limit_bytes=SIZE_LIMIT_BYTES, error=RegionError)
    whole = expand(data, path, size_limit_bytes=SIZE_LIMIT_BYTES, error=RegionError)
    if whole.startswith(b"SIMPLE  ="):
        return _read_fits(whole, path)
    try:
        text = whole.decode("utf-8-sig")
    except UnicodeDecodeError as cause:
        raise RegionError(
            "this is neither FITS nor text, expected a MOC as FITS, JSON or ASCII",
            file=path,
            remedy="Check that it is the right file.",
        ) from cause
    try:
        return _parse_json(text) if text.lstrip().startswith("{") else parse_moc_ascii(text)
    except RegionError as fault:
        raise RegionError(fault.message, file=path, remedy=fault.remedy) from fault


def _checked_range(order: int, first: int, last: int, shown: str) -> tuple[int, int]:
    """Span of the cells first … last of an order, as Python integers of any size."""
    if not 0 <= order <= LINE_ORDER:
        raise RegionError(
            f"MOC order {order} in {shown!r}, expected 0 to {LINE_ORDER}",
            remedy="Write a MOC as order/cells, such as 6/12-15 20.",
        )
    end = 12 << (2 * order)
    if not 0 <= first <= last < end:
        raise RegionError(
            f"MOC cells {shown!r} at order {order}, expected numbers rising within 0 to {end - 1}",
            remedy="Check the order that stands before the cells.",
        )
    shift = 2 * (LINE_ORDER - order)
    return first << shift, (last + 1) << shift


def _from_ranges(ranges: list[tuple[int, int]]) -> Spans:
    table = np.array(ranges, dtype=np.int64).reshape(-1, 2)
    return Spans.from_intervals(table[:, 0], table[:, 1])


def parse_moc_ascii(text: str) -> Spans:
    """Read the ASCII form of a MOC, such as ``1/1-2 4 2/12-14 21 8/``.

    Cells may be separated by blanks, new lines (MOC 2.0, section 4.3.2) or
    commas (MOC 1.1). The order alone at the end states the resolution only.

    Raises
    ------
    RegionError
        Naming the first part that does not fit.
    """
    order: int | None = None
    ranges: list[tuple[int, int]] = []
    tokens = text.replace(",", " ").split()
    for token in tokens:
        match = _TOKEN.fullmatch(token)
        if match is None or (order is None and match[1] is None):
            raise RegionError(
                f"{token[:40]!r} is not part of a MOC of the sky",
                remedy="Write a MOC as order/cells, such as 6/12-15 20.",
            )
        if match[1] is not None:
            order = _digits(match[1], token)
            _checked_range(order, 0, 0, token)
        if match[2] is not None and order is not None:
            first = _digits(match[2], token)
            last = first if match[3] is None else _digits(match[3], token)
            ranges.append(_checked_range(order, first, last, token))
    if not tokens:
        raise RegionError(
            "the text is empty, expected a MOC",
            remedy="Write a MOC as order/cells; 0/ is the empty one.",
        )
    return _from_ranges(ranges)


def _digits(text: str, token: str) -> int:
    if len(text) > 20:
        raise RegionError(
            f"a number of {len(text)} digits in {token[:40]!r}, expected a cell of order 0 to 29",
            remedy="Write a MOC as order/cells, such as 6/12-15 20.",
        )
    return int(text)


def _parse_json(text: str) -> Spans:
    try:
        content = json.loads(text)
    except (ValueError, RecursionError) as cause:
        raise RegionError(
            f"the JSON cannot be read ({cause})",
            remedy="Write a MOC as an object of orders and lists of cells.",
        ) from cause
    ranges: list[tuple[int, int]] = []
    for key, cells in content.items():
        if not re.fullmatch(r"\d{1,2}", key) or not isinstance(cells, list):
            raise RegionError(
                f"key {key[:40]!r} of the JSON MOC, expected an order with a list of cells",
                remedy='Write a MOC of the sky as {"6": [12, 13, 20]}.',
            )
        _checked_range(int(key), 0, 0, key)
        for cell in cells:
            if not isinstance(cell, int) or isinstance(cell, bool):
                raise RegionError(
                    f"cell {cell!r} at order {key} of the JSON MOC, expected an integer",
                    remedy='Write a MOC of the sky as {"6": [12, 13, 20]}.',
                )
            ranges.append(_checked_range(int(key), cell, cell, str(cell)))
    return _from_ranges(ranges)


def _keyword(hdu: fits.BinTableHDU, key: str, default: str, path: str | Path) -> str:
    return str(header_value(hdu.header, key, default, path, RegionError)).strip().upper()


def _moc_table(hdus: fits.HDUList, path: str | Path) -> fits.BinTableHDU:
    """Find the table that states an ordering we know, and check what it covers."""
    found = []
    for hdu in hdus:
        ordering = _keyword(hdu, "ORDERING", "", path)
        if not isinstance(hdu, fits.BinTableHDU):
            continue
        found.append(ordering or "none stated")
        if ordering not in {"NUNIQ", "RANGE"}:
            continue
        kind = _keyword(hdu, "MOCDIM", "SPACE", path)
        frame = _keyword(hdu, "COORDSYS", "C", path)
        if kind != "SPACE":
            raise RegionError(
                f"this is a MOC of dimension {kind}, expected SPACE",
                file=path,
                remedy="Give a MOC of the sky alone.",
            )
        if frame not in {"C", "ICRS"}:
            raise RegionError(
                f"this MOC states COORDSYS = {frame!r}, expected 'C' (ICRS)",
                file=path,
                remedy="Convert it to ICRS; the MOC standard knows no other frame.",
            )
        names = hdu.columns.names
        if len(names) > 1:
            raise RegionError(
                f"this table has {len(names)} columns ({', '.join(names[:8])}), "
                "expected the one of a MOC",
                file=path,
                remedy=_MAP_IS_NO_MOC,
            )
        return hdu
    raise RegionError(
        f"this FITS file holds no MOC (ORDERING of its tables: {', '.join(found)}), "
        "expected ORDERING NUNIQ or RANGE"
        if found
        else "this FITS file holds no table, so no MOC",
        file=path,
        remedy=_MAP_IS_NO_MOC if found else "It was cut short, or is the wrong file.",
    )


def _read_fits(data: bytes, path: str | Path) -> Spans:
    hdu = _moc_table(open_fits(data, path, error=RegionError), path)
    try:
        column = np.asarray(hdu.data.field(0))
    except (TypeError, ValueError, IndexError) as cause:
        raise RegionError(
            "the MOC's table has no column that can be read",
            file=path,
            remedy="Write the MOC again.",
        ) from cause
    if column.dtype.kind not in "iu":
        raise RegionError(
            f"the MOC's numbers are stored as {_kind(column)}, expected integers",
            file=path,
            remedy="Write the MOC again, with a column of 32 or 64 bit integers.",
        )
    numbers = column.ravel().astype(np.int64)
    if _keyword(hdu, "ORDERING", "", path) == "RANGE":
        return _from_range_column(numbers, path)
    try:
        return Spans.from_cells(*uniq_to_cell(numbers))
    except ValueError as cause:
        raise RegionError(
            f"the MOC's numbers run from {numbers.min()} to {numbers.max()}, "
            f"expected NUNIQ numbers in [4, {(16 << (2 * LINE_ORDER)) - 1}]",
            file=path,
            remedy="Write the MOC again.",
        ) from cause


def _kind(column: NDArray[Any]) -> str:
    return "text" if column.dtype.kind in "SU" else column.dtype.name


def _from_range_column(numbers: Ints, path: str | Path) -> Spans:
    starts, stops = numbers[0::2], numbers[1::2]
    if starts.size != stops.size:
        fault = f"an odd count of range ends ({numbers.size})"
    elif numbers.size and (numbers.min() < 0 or numbers.max() > LINE_END):
        fault = f"range ends from {numbers.min()} to {numbers.max()}"
    elif (starts >= stops).any():
        row = int(np.flatnonzero(starts >= stops)[0])
        fault = f"a range from {starts[row]} to {stops[row]}"
    else:
        return Spans.from_intervals(starts, stops)
    raise RegionError(
        f"the MOC holds {fault}, expected rising pairs within 0 to {LINE_END}",
        file=path,
        remedy="Write the MOC again, with ranges of order-29 cells.",
    )


def write_moc(spans: Spans, path: str | Path, fingerprint: str = "") -> None:
    """Write a region as a standard FITS MOC with NUNIQ ordering, which all versions share.

    ``fingerprint``, if given, says in the header which account the region is from.

    The file appears whole or not at all, and holds no time stamp: the same
    region gives the same bytes.

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    order, cell = spans_to_cells(spans)
    uniq = np.sort(np.left_shift(np.int64(4), 2 * order) + cell)
    table = fits.BinTableHDU.from_columns([fits.Column("UNIQ", "K", array=uniq)])
    deepest = int(order.max(initial=0))
    for key, value, meaning in (
        ("MOCVERS", "2.0", "version of the MOC standard"),
        ("MOCDIM", "SPACE", "a region of the sky"),
        ("PIXTYPE", "HEALPIX", "HEALPix cells"),
        ("ORDERING", "NUNIQ", "order and index in one number"),
        ("COORDSYS", "C", "ICRS"),
        ("MOCORD_S", deepest, "deepest order"),
        ("MOCORDER", deepest, "deepest order, as MOC 1.1 names it"),
        ("MOCTOOL", "skytally", "written by"),
    ):
        table.header[key] = (value, meaning)
    if fingerprint:
        table.header["TALLYID"] = (fingerprint, "fingerprint of the account")
    buffer = io.BytesIO()
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(buffer)
    write_whole(path, buffer.getvalue())


def to_ascii(spans: Spans) -> str:
    """Return the ASCII form of a region (MOC 2.0): order/cells, ranges where cells adjoin."""
    order, cell = spans_to_cells(spans)
    parts = []
    for level in np.unique(order):
        cells = cell[order == level]
        opens = np.flatnonzero(np.diff(cells, prepend=-2) != 1)
        closes = np.append(opens[1:], cells.size) - 1
        runs = [
            str(cells[i]) if i == j else f"{cells[i]}-{cells[j]}" for i, j in zip(opens, closes)
        ]
        parts.append(f"{level}/" + " ".join(runs))
    return " ".join(parts) or "0/"


def to_mocpy(spans: Spans) -> MOC:
    """Return a region as a `mocpy.MOC` of order 29."""
    return MOC.from_depth29_ranges(LINE_ORDER, spans.edges.reshape(-1, 2).astype(np.uint64))


def from_mocpy(moc: MOC) -> Spans:
    """Take a region from a spatial `mocpy.MOC`.

    Raises
    ------
    RegionError
        If the object is not one.
    """
    if not isinstance(moc, MOC):
        raise RegionError(
            f"an object of type {type(moc).__name__}, expected a mocpy.MOC",
            remedy="Give a MOC of the sky.",
        )
    ranges = np.asarray(moc.to_depth29_ranges, dtype=np.uint64).reshape(-1, 2).astype(np.int64)
    return Spans.from_intervals(ranges[:, 0], ranges[:, 1])
