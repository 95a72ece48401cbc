"""Claims: numbers that somebody has stated, as text, and what they stand for."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from decimal import Decimal
from difflib import get_close_matches
from enum import StrEnum
from functools import cached_property
from pathlib import Path

from skytally.errors import InputError
from skytally.local_files import read_local_file
from skytally.log_cells import shown
from skytally.log_columns import normalise_name
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR
from skytally.table_io import TextTable, parse_table
from skytally.times import iso_to_mjd

__all__ = ["ALL", "Claim", "Quantity", "Stated", "parse_claim", "read_claims"]

SIZE_LIMIT_BYTES = 16 * 1024**2
TEXT_LIMIT = 2_000
# The word that stands for all telescopes together.
ALL = "all"

_REQUIRED = ("telescope", "quantity", "value")
_NAMES = ("telescope", "map", "quantity", "value", "stated_by", "where", "band", "night")
_COLUMNS_REMEDY = f"A claim has {', '.join(_NAMES)}; only {', '.join(_REQUIRED)} must be there."
_VALUE = re.compile(
    r"([+-]?(?:[0-9]+(?:[.,][0-9]*)?|[.,][0-9]+)(?:e[+-]?[0-9]{1,2})?)\s*([^0-9.,].*)?", re.I
)
# A comma before three digits may separate thousands or decimals.
_AMBIGUOUS = re.compile(r"[+-]?[0-9]{1,3},[0-9]{3}")
_TIME = re.compile(
    r"([0-9]{4}-[0-9]{2}-[0-9]{2})[T ]\s*([0-9]{2}:[0-9]{2})(:[0-9]{2}(?:\.[0-9]{1,6})?)?"
    r"\s*(Z|UTC?|[+-][0-9]{2}:[0-9]{2})?",
    re.I,
)
_SECONDS_PER_DAY = 86400.0
_MAGNITUDE_LIMIT = 50.0
_COUNT_LIMIT = 10_000_000


class Quantity(StrEnum):
    """What a claim is about."""

    AREA = "area"
    AREA_IN_90 = "area_in_90"
    PROBABILITY = "probability"
    PROBABILITY_IN_90 = "probability_in_90"
    DEPTH_MEDIAN = "depth_median"
    EXPOSURES = "exposures"
    FIRST_START = "first_start"
    LAST_END = "last_end"

    @property
    def is_area(self) -> bool:
        """Whether it is measured in square degrees."""
        return self in {Quantity.AREA, Quantity.AREA_IN_90}

    @property
    def is_probability(self) -> bool:
        """Whether it is a fraction of all probability."""
        return self in {Quantity.PROBABILITY, Quantity.PROBABILITY_IN_90}

    @property
    def is_inside_90(self) -> bool:
        """Whether only the 90 % region counts."""
        return self in {Quantity.AREA_IN_90, Quantity.PROBABILITY_IN_90}

    @property
    def is_time(self) -> bool:
        """Whether it is a moment."""
        return self in {Quantity.FIRST_START, Quantity.LAST_END}

    @property
    def needs_map(self) -> bool:
        """Whether its value depends on the map version."""
        return self.is_probability or self.is_inside_90


# Other names for the same quantities, as `normalise_name` leaves them.
_QUANTITY_NAMES: dict[str, Quantity] = {
    **{quantity.value: quantity for quantity in Quantity},
    "median_depth": Quantity.DEPTH_MEDIAN,
    "number_of_exposures": Quantity.EXPOSURES,
}
_AREA_UNITS = frozenset(
    {"", "deg2", "deg^2", "deg**2", "deg²", "sq deg", "sq. deg", "sq. deg.", "sqdeg"}
    | {"square degree", "square degrees"}
)
_PERCENT = frozenset({"%", "percent", "per cent"})


@dataclass(frozen=True)
class Stated:
    """A stated value as a number, and what its digits leave open.

    Attributes
    ----------
    number : float
        Square degrees, a fraction, magnitudes, a count, or MJD (UTC).
    low, high : float
        The values that are stated like this: half a unit of the last digit
        to either side. Times are often cut rather than rounded, so for them a
        whole unit follows.
    decimals : int
        Digits after the point, of a percentage where ``percent``; negative
        where a power of ten is the last digit.
    percent : bool
        Whether it was written as a percentage.
    """

    number: float
    low: float
    high: float
    decimals: int
    percent: bool = False


@dataclass(frozen=True)
class Claim:
    """One number that somebody has stated.

    Attributes
    ----------
    telescope : str
        A telescope's name, or "all".
    quantity : Quantity
        What was stated.
    value : str
        As stated, its digits kept: "43.5 %", "0.435", "254 deg2", "20.1",
        "2031-03-14T05:49Z". Times without a zone are UTC; a decimal comma is
        understood.
    map : str or None
        Map version; None for the newest.
    band, night : str or None
        None for all; a night is the date of its evening.
    stated_by, where : str
        Who stated it, and in what.

    Raises
    ------
    InputError
        If the value is not one of the quantity.
    """

    telescope: str
    quantity: Quantity
    value: str
    map: str | None = None
    band: str | None = None
    night: str | None = None
    stated_by: str = ""
    where: str = ""

    def __post_init__(self) -> None:
        _ = self.stated  # a claim that cannot be read does not come to be

    @cached_property
    def stated(self) -> Stated:
        """The value as a number."""
        text = self.value.strip().replace("\u2212", "-")
        if self.quantity.is_time:
            return _time(text)
        return _number(text, self.quantity)


def _refusal(value: str, why: str, remedy: str) -> InputError:
    return InputError(f"found {shown(value)}, {why}", column="value", remedy=remedy)


def _number(text: str, quantity: Quantity) -> Stated:
    """Read a number with its unit; the text has no other minus sign than a hyphen."""
    example, units, limit, what = _expected(quantity)
    match = _VALUE.fullmatch(text)
    if match is None:
        raise _refusal(text, f"not {what}", f"Write the number alone, such as {example}.")
    if _AMBIGUOUS.fullmatch(match[1]):
        plain, point = match[1].replace(",", ""), match[1].replace(",", ".")
        raise _refusal(text, "and a comma may mean two things", f"Write {plain} or {point}.")
    unit = " ".join((match[2] or "").lower().split())
    percent = quantity.is_probability and unit in _PERCENT
    if unit not in units:
        raise _refusal(text, f"and the unit {shown(unit)} is not known here", f"Write {example}.")
    digits = Decimal(match[1].replace(",", "."))
    exponent = digits.as_tuple().exponent
    assert isinstance(exponent, int)  # the pattern lets neither nan nor infinity pass
    scale = 0.01 if percent else 1.0
    number, half = float(digits) * scale, 0.5 * 10.0**exponent * scale
    least = -limit if quantity is Quantity.DEPTH_MEDIAN else 0.0
    if not least <= number <= limit:
        remedy = f"Write {example}."
        if quantity.is_probability and not percent and number <= 100:
            remedy = f"Write {match[1]} % if a percentage is meant, else a fraction up to 1."
        raise _refusal(text, f"expected {what} from {least:g} to {limit:g}", remedy)
    if quantity is Quantity.EXPOSURES and number != int(number):
        raise _refusal(text, f"expected {what}", f"Write {example}.")
    return Stated(number, number - half, number + half, -exponent, percent)


def _expected(quantity: Quantity) -> tuple[str, frozenset[str], float, str]:
    """An example, the units, the greatest number, and what it is in words."""
    if quantity.is_area:
        return "254 deg2", _AREA_UNITS, FULL_SKY_SR * DEG2_PER_SR, "an area in square degrees"
    if quantity.is_probability:
        return "43.5 % or 0.435", frozenset({"", *_PERCENT}), 1.0, "a probability"
    if quantity is Quantity.EXPOSURES:
        return "120", frozenset({"", "exposures"}), _COUNT_LIMIT, "a whole number of exposures"
    return "20.1", frozenset({"", "mag"}), _MAGNITUDE_LIMIT, "a limiting magnitude"


def _time(text: str) -> Stated:
    """Read a moment; the last digit written is that of the minute or finer."""
    example = "2031-03-14T05:49:30Z"
    match = _TIME.fullmatch(text)
    if match is None:
        raise _refusal(text, "not a date and time", f"Write it as {example}.")
    day, minute, seconds, zone = match.groups()
    offset = zone if zone and zone[0] in "+-" else "+00:00"
    try:
        number = iso_to_mjd(f"{day}T{minute}{_full_seconds(seconds)}{offset}")
    except ValueError as cause:
        raise _refusal(text, "no such date and time", f"Write it as {example}.") from cause
    decimals = len(seconds.partition(".")[2]) if seconds else 0
    unit = (60.0 if seconds is None else 10.0**-decimals) / _SECONDS_PER_DAY
    return Stated(number, number - unit / 2, number + unit, decimals)


def _full_seconds(seconds: str | None) -> str:
    """Seconds as ISO 8601 text with six decimals."""
    whole, _, fraction = (seconds or ":00").partition(".")
    return f"{whole}.{fraction:0<6}"


def parse_claim(entry: Mapping[str, object]) -> Claim:
    """Check one claim as it stands in a table.

    Parameters
    ----------
    entry : mapping of str to text
        With the keys telescope, quantity and value, and any of map, band,
        night, stated_by and where; an empty text is as good as none.

    Raises
    ------
    InputError
        Naming the key as its column.
    """
    for key in entry:
        if key not in _NAMES:
            raise InputError("this is not known in a claim", column=key, remedy=_hint(key, _NAMES))
    text = {key: _text(key, value) for key, value in entry.items()}
    for key in _REQUIRED:
        if not text.get(key):
            raise InputError(
                f"the {key} is missing", column=key, remedy=f"Give the {key}. {_COLUMNS_REMEDY}"
            )
    return Claim(
        telescope=text["telescope"],
        quantity=_quantity(text["quantity"]),
        value=text["value"],
        map=text.get("map") or None,
        band=text.get("band") or None,
        night=_night(text.get("night", "")),
        stated_by=text.get("stated_by", ""),
        where=text.get("where", ""),
    )


def _hint(word: str, known: tuple[str, ...]) -> str:
    near = get_close_matches(word.lower(), known, 1)
    return f"{f'Did you mean {near[0]}? ' if near else ''}{_COLUMNS_REMEDY}"


def _text(key: str, value: object) -> str:
    if not isinstance(value, str):
        raise InputError(
            f"found {shown(str(value))} without quotes, expected text",
            column=key,
            remedy="Put it in quotes, as it was stated; its digits tell how it was rounded.",
        )
    value = value.strip()
    if len(value) > TEXT_LIMIT or not value.isprintable():
        raise InputError(
            f"found {shown(value)}, expected one line of at most {TEXT_LIMIT} printable characters",
            column=key,
            remedy="Shorten it, or take out what does not print.",
        )
    return value


def _quantity(text: str) -> Quantity:
    name = normalise_name(text.replace("%", ""))
    if name in _QUANTITY_NAMES:
        return _QUANTITY_NAMES[name]
    near = get_close_matches(name, _QUANTITY_NAMES, 1)
    raise InputError(
        f"found {shown(text)}, not a quantity that can be checked",
        column="quantity",
        remedy=f"{f'Did you mean {_QUANTITY_NAMES[near[0]]}? ' if near else ''}"
        f"Choose one of {', '.join(Quantity)}.",
    )


def _night(text: str) -> str | None:
    if not text:
        return None
    try:
        return date.fromisoformat(text).isoformat()
    except ValueError as cause:
        raise InputError(
            f"found {shown(text)}, not a date",
            column="night",
            remedy="Give the date of the evening, such as 2031-03-14.",
        ) from cause


def read_claims(path: str | Path) -> tuple[Claim, ...]:
    """Read claims from a table.

    Parameters
    ----------
    path : str or Path
        A table (CSV or ECSV, at most 16 MB) with the columns `telescope`,
        `quantity` and `value`, and any of `map`, `stated_by`, `where`, `band`
        and `night`; see `Claim`.

    Returns
    -------
    tuple of Claim
        In the order of the file.

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
    names = _columns(table, path)
    if not table.rows:
        raise InputError(
            "the table of claims has no rows", file=path, remedy="Give one row per claim."
        )
    claims = []
    for row, cells in zip(table.rows, zip(*table.columns)):
        try:
            claims.append(parse_claim(dict(zip(names, cells))))
        except InputError as fault:
            title = table.names[names.index(fault.column)] if fault.column in names else None
            raise InputError(
                fault.message, file=path, row=row, column=title, remedy=fault.remedy
            ) from fault
    return tuple(claims)


def _columns(table: TextTable, path: str | Path) -> list[str]:
    """Canonical names of the columns; an unknown one, or one twice, is an error."""
    names = [normalise_name(title) for title in table.names]
    for name, title in zip(names, table.names):
        if name not in _NAMES:
            raise InputError(
                "this column is not known in a table of claims",
                file=path,
                column=title,
                remedy=_hint(name, _NAMES),
            )
    for name in _NAMES:
        if names.count(name) > 1 or (name in _REQUIRED and name not in names):
            raise InputError(
                f"the table of claims has {names.count(name)} columns {name!r}, expected one",
                file=path,
                remedy=_COLUMNS_REMEDY,
            )
    return names
