"""The layout that a FITS file states, checked before a library acts on it (FITS 4.0, section 4).

Sizes, counts and the number of columns are numbers that anybody can write into a
header. A library that trusts them counts to a billion, asks for more memory than
there is, or hands out one piece of the file a million times.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import BinaryIO

import numpy as np
from astropy.io import fits

from skytally.errors import InputError

__all__ = ["check_shared_bytes", "is_plausible_unit", "walk_headers"]

HDU_LIMIT = 2_000
HEADER_LIMIT_BYTES = 32 << 20
AXES_LIMIT = COLUMN_LIMIT = 999  # sections 4.4.1 and 7.3.1

_CARD, _BLOCK = 80, 2880
_STATED = re.compile(
    rb"(?:HIERARCH +)?(BITPIX|NAXIS[0-9]{0,3}|PCOUNT|GCOUNT|TFIELDS) *=(.*)", re.IGNORECASE
)
_UNIT = re.compile(rb"(?:HIERARCH +)?([TCB]UNIT[0-9]{0,3}[A-Z]?) *=(.*)", re.IGNORECASE)
_LONG_NUMBER = re.compile(r"(?<![0-9.])[0-9]{4}")
_WHOLE_NUMBER = re.compile(rb" *([+-]?[0-9]{1,18}) *(?:/.*)?")
_LIMITS = {"NAXIS": AXES_LIMIT, "TFIELDS": COLUMN_LIMIT}
_VARIABLE = re.compile(r"[01]?[PQ]([A-Z])")
_ITEM_BYTES = {"I": 2, "J": 4, "K": 8, "E": 4, "D": 8, "C": 8, "M": 16}
_PIXEL_BITS = frozenset({8, 16, 32, 64, -32, -64})

Fault = Callable[[str], InputError]


def is_plausible_unit(text: str) -> bool:
    """Tell whether a unit is safe to be read: a library works powers such as 10**99999999 out."""
    return len(text) <= 80 and text.count("(") <= 1 and _LONG_NUMBER.search(text) is None


def walk_headers(
    stream: BinaryIO, path: str | Path, error: type[InputError]
) -> Iterator[tuple[bytes, int]]:
    """Walk from header to header and refuse sizes that cannot be meant.

    Parameters
    ----------
    stream : binary file
        At its beginning; the data between the headers are skipped, not read.
    path : str or Path
        Its name, for messages.
    error : type
        Which of our exceptions to raise.

    Yields
    ------
    header : bytes
        A sound one. Where none begins, the walk ends: what follows is no FITS.
    end : int
        Where its data end, as it states them.

    Raises
    ------
    InputError
        Of the type ``error``.
    """

    def fault(message: str) -> InputError:
        return error(
            message,
            file=path,
            remedy="The file is damaged, or was not made by a FITS library: "
            "copy or download it again.",
        )

    count = end = headers = 0
    while header := _header(stream, b"XTENSION=" if count else b"SIMPLE", fault):
        count += 1
        headers += len(header)
        if count > HDU_LIMIT:
            raise fault(f"the FITS file has more than {HDU_LIMIT} headers")
        if headers > HEADER_LIMIT_BYTES:
            raise fault(f"the FITS headers take more than {HEADER_LIMIT_BYTES >> 20} MiB")
        size = _data_size(header, fault)
        end += len(header) + size + -size % _BLOCK
        yield header, end
        stream.seek(end)


def _header(stream: BinaryIO, beginning: bytes, fault: Fault) -> bytes:
    """Read one header; nothing where none begins here."""
    block = stream.read(_BLOCK)
    if not block.startswith(beginning):
        return b""
    blocks = [block]
    while not any(block[i : i + 4] == b"END " for i in range(0, len(block), _CARD)):
        block = stream.read(_BLOCK)
        if len(block) < _BLOCK:
            return b""
        blocks.append(block)
        if len(blocks) * _BLOCK > HEADER_LIMIT_BYTES:
            raise fault(f"a FITS header does not end within {HEADER_LIMIT_BYTES >> 20} MiB")
    return b"".join(blocks)


def _data_size(header: bytes, fault: Fault) -> int:
    """Bytes of the data that follow a header, without padding."""
    stated: dict[str, int] = {}
    for at in range(0, len(header), _CARD):
        card = header[at : at + _CARD]
        match = _STATED.match(card)
        if match is None:
            if card.startswith(b"END "):
                break
            _check_unit(card, fault)
            continue
        key = match[1].decode().upper()
        number = _WHOLE_NUMBER.fullmatch(match[2])
        found = match[2].partition(b"/")[0].strip().decode("ascii", "replace")
        if key in stated or number is None:
            what = "stands twice" if key in stated else f"is {found[:30]!r}, no whole number"
            raise fault(f"{key} of a FITS header {what}")
        stated[key] = int(number[1])
        _check_number(key, stated[key], fault)
    axes = [stated.get(f"NAXIS{i + 1}", 0) for i in range(stated.get("NAXIS", 0))]
    if "TFIELDS" in stated and len(axes) == 2 and axes[0] == 0 < axes[1]:
        raise fault(f"a FITS table states {axes[1]} rows of 0 bytes")
    pixels = 1 if axes else 0
    for position, axis in enumerate(axes):
        # Random groups (section 6) write 0 for the first axis.
        pixels *= axis or (1 if position == 0 and "GCOUNT" in stated and len(axes) > 1 else 0)
    size = abs(stated.get("BITPIX", 8)) // 8 * stated.get("GCOUNT", 1)
    size *= stated.get("PCOUNT", 0) + pixels
    if size >= 1 << 60:
        raise fault(f"a FITS header states {size:.3g} bytes of data")
    return size


def _check_unit(card: bytes, fault: Fault) -> None:
    if (match := _UNIT.match(card)) is None:
        return
    key, text = match[1].decode(), match[2].partition(b"'")[2].rpartition(b"'")[0].decode("latin-1")
    # A value that goes on in the next card ends in an ampersand.
    if not is_plausible_unit(text) or text.rstrip().endswith("&"):
        raise fault(f"{key} of a FITS header is {text[:40]!r}, no unit that can be meant")


def _check_number(key: str, value: int, fault: Fault) -> None:
    if key == "BITPIX":
        if value not in _PIXEL_BITS:
            raise fault(f"BITPIX of a FITS header is {value}, expected 8, 16, 32, 64, -32 or -64")
    elif not 0 <= value <= _LIMITS.get(key, value):
        limit = f" to {_LIMITS[key]}" if key in _LIMITS else " or more"
        raise fault(f"{key} of a FITS header is {value}, expected 0{limit}")


def check_shared_bytes(hdu: fits.BinTableHDU, size: int) -> str | None:
    """Say what is wrong where the cells of variable length hold more than the file.

    Each row states where its cell lies (section 7.3.5), so a small file could show
    the same bytes in every row.
    """
    rows = hdu.data.view(np.ndarray)
    total = 0.0
    for name, column in zip(rows.dtype.names or (), hdu.columns, strict=True):
        match = _VARIABLE.match(str(column.format))
        if match is None:
            continue
        lengths, offsets = rows[name].reshape(-1, 2).T
        if (lengths < 0).any() or (offsets < 0).any():
            return f"a cell of column {column.name!r} has a negative length or place"
        total += float(lengths.sum(dtype=np.float64)) * _ITEM_BYTES.get(match[1], 1)
    return f"its cells of variable length state {total:.0f} bytes" if total > size else None
