"""What the cells of a log may hold: text into numbers, or the reason why not."""

from __future__ import annotations

import re
import warnings
from collections.abc import Callable, Sequence
from datetime import date

import numpy as np
from astropy.time import Time
from astropy.utils import iers
from numpy.typing import NDArray

__all__ = [
    "MISSING_WORDS",
    "TIME_SCALES",
    "UNIT_DEGREES",
    "UNIT_SECONDS",
    "CellFault",
    "is_number",
    "read_angle",
    "read_cells",
    "read_declination",
    "read_depth",
    "read_duration",
    "read_number",
    "read_right_ascension",
    "read_times",
    "shown",
    "visible",
]

TIME_SCALES = ("utc", "tai", "tt", "tdb")
MISSING_WORDS = frozenset({"", "n/a", "na", "null", "none", "-", "--"})

_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_SEXAGESIMAL = re.compile(
    r"([+-]?)\s*([0-9]{1,3})\s*([:hd°\s])\s*([0-9]{1,2}(?:\.[0-9]*)?)"
    r"(?:\s*([:m'′\s])\s*(?:([0-9]{1,2}(?:\.[0-9]*)?)\s*(?:[s\"″]|'')?)?)?"
)
_ISO = re.compile(
    r"([0-9]{4})[-/]([0-9]{2})[-/]([0-9]{2})[T ]\s*([0-9]{2}):([0-9]{2})"
    r"(?::([0-9]{2}(?:[.,][0-9]*)?))?\s*(Z|UTC?|[+-][0-9]{2}(?::?[0-9]{2})?)?",
    re.IGNORECASE,
)
_DATE_ALONE = re.compile(r"[0-9]{4}[-/][0-9]{2}[-/][0-9]{2}")
_LIMIT_SIGN = re.compile(r"(?:>=|<=|[><≥≤~≳≲])?\s*(.*?)\s*\*?")
_NINES = re.compile(r"[+-]?9{2,}(?:\.(?:9*0*))?")
# No value needs more; it also keeps the patterns above from searching long blanks.
_CELL_LENGTH = 80
_MJD_OF_YEAR_ONE = date(1858, 11, 17).toordinal()
_MJD_RANGE = (10_000.0, 120_000.0)  # 1886 to 2187
_JD_OF_MJD_ZERO = 2_400_000.5
UNIT_SECONDS = {
    **dict.fromkeys(("", "s", "sec", "secs", "second", "seconds"), 1.0),
    **dict.fromkeys(("ms", "msec"), 1e-3),
    **dict.fromkeys(("min", "mins", "minute", "minutes"), 60.0),
    **dict.fromkeys(("h", "hr", "hour", "hours"), 3600.0),
    **dict.fromkeys(("d", "day", "days"), 86400.0),
}
UNIT_DEGREES = {
    **dict.fromkeys(("", "deg", "degree", "degrees", "°"), 1.0),
    **dict.fromkeys(("h", "hr", "hour", "hours", "hourangle"), 15.0),
    **dict.fromkeys(("rad", "radian", "radians"), 180.0 / np.pi),
    **dict.fromkeys(("arcmin",), 1.0 / 60.0),
    **dict.fromkeys(("arcsec",), 1.0 / 3600.0),
}


class CellFault(Exception):
    """A cell that cannot be used.

    Attributes
    ----------
    reason : str
        "missing" or "unreadable".
    why : str
        End of a sentence that begins with the column and its value.
    remedy : str
        What to do, as an imperative without its full stop.
    """

    def __init__(self, reason: str, why: str, remedy: str) -> None:
        super().__init__(why)
        self.reason = reason
        self.why = why
        self.remedy = remedy

    def sentence(self, column: str, value: str) -> str:
        """One sentence that names column and value and says what to do."""
        if self.reason == "missing":
            return f"Column {column!r} holds {shown(value)}, no value; {self.remedy}."
        return f"Column {column!r} holds {shown(value)}, {self.why}; {self.remedy}."


def shown(value: str) -> str:
    """Quote a cell for a message, shortened and without control characters."""
    if not value:
        return "nothing"
    clean = "".join(c if c.isprintable() else "?" for c in value)
    return repr(clean if len(clean) <= 60 else clean[:57] + "...")


def visible(text: str) -> str:
    """Return a name from a file with a mark for each character that is not to be seen.

    Such characters steer a terminal, turn the direction of writing round, or make
    two names look like one. Names that differ still differ from one without them.
    """
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else "\ufffd" for c in text)


def read_cells(
    cells: Sequence[str], read: Callable[[str], float | None]
) -> tuple[NDArray[np.float64], dict[int, CellFault]]:
    """Read one column of text.

    Parameters
    ----------
    cells : sequence of str
        Shape (n,).
    read : callable
        Returns the value of a cell, None where it is missing, or raises
        `CellFault`.

    Returns
    -------
    values : float64 array, shape (n,)
        NaN where missing or unreadable.
    faults : dict
        The unreadable cells by index.
    """
    values = np.full(len(cells), np.nan)
    faults: dict[int, CellFault] = {}
    for index, cell in enumerate(cells):
        try:
            if len(cell) > _CELL_LENGTH:
                raise _unreadable(f"{len(cell)} characters long", "give one value in the cell")
            value = read(cell)
        except CellFault as fault:
            faults[index] = fault
            continue
        if value is not None:
            values[index] = value
    return values, faults


def _unreadable(why: str, remedy: str) -> CellFault:
    return CellFault("unreadable", why, remedy)


def _number(cell: str, comma: bool) -> float | None:
    """Value of a plain number, None where the text is none or overflows."""
    text = cell.replace("\u2212", "-")
    if comma and text.count(",") == 1 and "." not in text:
        text = text.replace(",", ".")
    if _NUMBER.fullmatch(text) is None:
        return None
    value = float(text)
    return value if np.isfinite(value) else None


def is_number(cell: str, comma: bool) -> bool:
    """Tell whether a cell is one plain number."""
    return len(cell) <= _CELL_LENGTH and _number(cell, comma) is not None


def _is_missing(cell: str) -> bool:
    return cell.lower() in MISSING_WORDS


def _is_sentinel(cell: str) -> bool:
    """Tell whether a number is written in nines alone: -99, 99.9, -9999.0."""
    return _NINES.fullmatch(cell) is not None


def read_number(cell: str, comma: bool, remedy: str) -> float:
    """Value of a plain number.

    Raises
    ------
    CellFault
        If the text is none, with ``remedy``, which does not end in a full stop.
    """
    value = _number(cell, comma)
    if value is None:
        why = "not a number"
        if "," in cell and not comma:
            remedy = f'{remedy}; for decimal commas set decimal = ","'
        raise _unreadable(why, remedy)
    return value


def _sexagesimal(cell: str, comma: bool) -> tuple[float, str] | None:
    """Value in its first unit and the mark after it, None where the text is something else."""
    text = cell.replace("\u2212", "-")
    if comma:
        text = text.replace(",", ".")
    match = _SEXAGESIMAL.fullmatch(text)
    if match is None:
        return None
    sign, whole, mark, minutes, _, seconds = match.groups()
    minute, second = float(minutes), float(seconds or 0.0)
    if minute >= 60 or second > 60:
        raise _unreadable("with minutes or seconds above 59", "correct the value")
    value = int(whole) + minute / 60.0 + second / 3600.0
    return (-value if sign == "-" else value), mark


def read_right_ascension(cell: str, unit: str, option: str | None, comma: bool) -> float | None:
    """Right ascension in degrees, in [0, 360); None where missing.

    Sexagesimal text is in hours unless its mark or ``option`` ("deg") says
    degrees; a plain number is in the column's unit unless ``option`` says
    otherwise.

    Raises
    ------
    CellFault
        If the text is no angle, or the angle lies outside -180 to 360 degrees.
    """
    if _is_missing(cell):
        return None
    remedy = "give degrees in 0 to 360, or hours as 10:23:45.6"
    value = _number(cell, comma)
    if value is not None:
        known = {"deg": "deg", "hour": "hour"}.get(option or "", unit)
        degrees = value * UNIT_DEGREES.get(known, 1.0)
    else:
        parts = _sexagesimal(cell, comma)
        if parts is None:
            degrees = read_number(cell, comma, remedy)
        else:
            in_degrees = parts[1] in "d°" or (option == "deg" and parts[1] != "h")
            degrees = parts[0] * (1.0 if in_degrees else 15.0)
    if not -180.0 <= degrees <= 360.0:
        raise _unreadable(f"{degrees:g} degrees of right ascension, outside 0 to 360", remedy)
    wrapped = degrees % 360.0
    return wrapped if wrapped < 360.0 else 0.0


def read_declination(cell: str, unit: str, comma: bool) -> float | None:
    """Declination in degrees; None where missing.

    Raises
    ------
    CellFault
        If the text is no angle, or lies outside -90 to 90 degrees.
    """
    if _is_missing(cell):
        return None
    remedy = "give degrees in -90 to 90, or -31:04:12"
    value = _number(cell, comma)
    if value is not None:
        degrees = value * UNIT_DEGREES.get(unit, 1.0)
    else:
        parts = _sexagesimal(cell, comma)
        if parts is not None and parts[1] == "h":
            raise _unreadable("a declination in hours", remedy)
        degrees = read_number(cell, comma, remedy) if parts is None else parts[0]
    if not -90.0 <= degrees <= 90.0:
        raise _unreadable("a declination outside -90 to 90", remedy)
    return degrees


def read_angle(cell: str, unit: str, comma: bool) -> float | None:
    """Position angle in degrees; None where missing.

    Raises
    ------
    CellFault
        If the text is no number, or lies outside -360 to 360 degrees.
    """
    if _is_missing(cell) or cell.lower() == "nan":
        return None
    remedy = "give the position angle in degrees east of north"
    degrees = read_number(cell, comma, remedy) * UNIT_DEGREES.get(unit, 1.0)
    if not -360.0 <= degrees <= 360.0:
        raise _unreadable("an angle outside -360 to 360 degrees", remedy)
    return degrees


def read_duration(cell: str, unit: str, comma: bool) -> float | None:
    """Exposure time in seconds; None where missing.

    Raises
    ------
    CellFault
        If the text is no number, or the number is negative.
    """
    if _is_missing(cell) or cell.lower() == "nan" or (cell[:1] == "-" and _is_sentinel(cell)):
        return None
    remedy = "give the exposure time in seconds, or leave the cell empty"
    seconds = read_number(cell, comma, remedy) * UNIT_SECONDS.get(unit, 1.0)
    if seconds < 0:
        raise _unreadable("a negative exposure time", remedy)
    return seconds


def read_depth(cell: str, comma: bool) -> float | None:
    """Limiting magnitude or another magnitude; None where missing.

    The signs of a limit (`>20.5`, `<20.5`, `20.5*`) are taken off; numbers in
    nines alone (`-99`, `99.9`) mean missing.

    Raises
    ------
    CellFault
        If the text is none of these.
    """
    match = _LIMIT_SIGN.fullmatch(cell)
    bare = match.group(1) if match else cell
    if _is_missing(bare) or bare.lower() == "nan":
        return None
    if _is_sentinel(bare.replace(",", ".") if comma else bare):
        return None
    return read_number(bare, comma, "give a magnitude, or leave the cell empty")


def read_times(
    cells: Sequence[str], scale: str, comma: bool
) -> tuple[NDArray[np.float64], dict[int, CellFault], int]:
    """Read a column of times.

    Understood are ISO 8601 date and time (with `T` or a space, `Z` or an
    offset), MJD, and JD; a number's size tells the last two apart.

    Parameters
    ----------
    cells : sequence of str
        Shape (n,).
    scale : str
        One of `TIME_SCALES`; of the times that do not say themselves that they
        are UTC.
    comma : bool
        Whether a comma may stand for the decimal point.

    Returns
    -------
    mjd : float64 array, shape (n,)
        UTC; NaN where missing or unreadable.
    faults : dict
        The unreadable cells by index.
    stated : int
        How many cells say UTC, by `Z` or an offset, against another scale.
    """
    says_utc: list[bool] = []

    def read(cell: str) -> float | None:
        value = _read_time(cell, comma)
        if value is None:
            return None
        says_utc.append(value[1])
        return value[0]

    mjd, faults = read_cells(cells, read)
    if scale == "utc":
        return mjd, faults, 0
    stated = np.zeros(len(mjd), dtype=bool)
    stated[np.isfinite(mjd)] = says_utc
    return np.where(stated, mjd, _to_utc(mjd, scale)), faults, int(stated.sum())


def _read_time(cell: str, comma: bool) -> tuple[float, bool] | None:
    """MJD as written, and whether the text itself says UTC; None where missing."""
    if _is_missing(cell):
        return None
    remedy = "give 2031-03-14T05:21:08, an MJD or a JD"
    match = _ISO.fullmatch(cell)
    if match is not None:
        return _iso(match, remedy)
    if _DATE_ALONE.fullmatch(cell):
        raise _unreadable("a date without a time of day", remedy)
    value = _number(cell, comma)
    if value is None:
        raise _unreadable("not a time", remedy)
    low, high = _MJD_RANGE
    if low <= value <= high:
        return value, False
    if low <= value - _JD_OF_MJD_ZERO <= high:
        return value - _JD_OF_MJD_ZERO, False
    raise _unreadable("a number that is neither an MJD nor a JD", remedy)


def _iso(match: re.Match[str], remedy: str) -> tuple[float, bool]:
    year, month, day, hour, minute, second, zone = match.groups()
    try:
        days = date(int(year), int(month), int(day)).toordinal() - _MJD_OF_YEAR_ONE
    except ValueError as exc:
        raise _unreadable("a date that does not exist", remedy) from exc
    seconds = float((second or "0").replace(",", "."))
    # A leap second is written as 60 (ISO 8601).
    if int(hour) > 23 or int(minute) > 59 or seconds >= 61:
        raise _unreadable("a time of day that does not exist", remedy)
    if not _MJD_RANGE[0] <= days <= _MJD_RANGE[1]:
        raise _unreadable("a year out of range", remedy)
    offset_minutes = 0
    if zone and zone[0] in "+-":
        digits = zone[1:].replace(":", "")
        offset_minutes = int(digits[:2]) * 60 + int(digits[2:] or 0)
        if offset_minutes > 18 * 60:
            raise _unreadable("an offset from UTC beyond 18 hours", remedy)
        offset_minutes = -offset_minutes if zone[0] == "-" else offset_minutes
    whole_minutes = int(hour) * 60 + int(minute) - offset_minutes
    return days + (whole_minutes * 60 + seconds) / 86400.0, bool(zone)


def _to_utc(mjd: NDArray[np.float64], scale: str) -> NDArray[np.float64]:
    """Convert MJD of a time scale to UTC; shape (n,), NaN stays."""
    good = np.isfinite(mjd)
    if not good.any():
        return mjd
    utc = np.full_like(mjd, np.nan)
    # Leap seconds come from the tables installed: nothing may be fetched, and
    # times beyond the tables are warned about once per run of the library.
    with (
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("auto_max_age", None),
        warnings.catch_warnings(),
    ):
        warnings.simplefilter("ignore")
        day = np.floor(mjd[good])
        utc[good] = Time(day, mjd[good] - day, format="mjd", scale=scale).utc.mjd
    return utc
