"""The text of a campaign file checked, and every fault of it put into a plain sentence.

Each table is checked by itself, so that one fault does not hide another.
"""

from __future__ import annotations

import difflib
import hashlib
import json
import re
import tomllib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import date, datetime, time
from pathlib import Path
from typing import Any, Generic, Literal, TypeVar, get_args, get_origin

import annotated_types
from pydantic import AwareDatetime, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from skytally.campaign_model import (
    TABLES,
    AuditTable,
    ClaimTable,
    EventTable,
    ExtinctionTable,
    MapTable,
    ReportTable,
    SettingsTable,
    SourceTable,
    Table,
    TelescopeTable,
)
from skytally.errors import CampaignError
from skytally.local_files import SIZE_VARIABLE, size_limit

__all__ = ["Entry", "ParsedCampaign", "key_path", "parse_campaign"]

SIZE_LIMIT_BYTES = 4_000_000
SHOWN_CHARACTERS = 70
SYNTAX_CHARACTERS = 200
# A file of nothing but faults would take minutes to word.
FAULTS_LIMIT = 100
TABLES_LIMIT = 5_000

# The parser's memory grows with the square of the parts of a key. A part begins where no
# word goes on, so that a long one is not searched from each of its letters.
_LONG_KEY = re.compile(
    r"(?<![A-Za-z0-9_-])"
    r"(?:(?:[A-Za-z0-9_-]++|\"[^\"\n]*+\"|'[^'\n]*+')[ \t]*+\.[ \t]*+){50}"
)

Place = tuple[str | int, ...]
AnyTable = TypeVar("AnyTable", bound=Table)

# Single tables and lists of tables at the top of the file, with what each holds.
_SINGLE = {
    "event": "name and time",
    "settings": "settings",
    "extinction": "map and coefficients",
    "report": "authors and thanks",
    "audit": "airmass, moon, demote and silence",
}
_LISTED = {
    "map": "version and file",
    "telescope": "name, camera and log",
    "source": "name and magnitude",
    "claim": "telescope, quantity and value",
}
_OPTIONAL = ("source", "claim")

# What was expected, by the kind of fault; {…} is filled from the key's own limits.
_EXPECTED = {
    "missing": "{kind}",
    "float_type": "{kind}",
    "finite_number": "{kind}",
    "greater_than": "{kind}",
    "greater_than_equal": "{kind}",
    "less_than": "{kind}",
    "less_than_equal": "{kind}",
    "int_type": "{kind}",
    "int_from_float": "{kind}",
    "int_parsing_size": "{kind}",
    "string_type": "text in double quotes",
    "string_too_short": "text that is not empty",
    "string_too_long": "a shorter text, of at most {limit}",
    "datetime_type": "a date and time without quotes, such as 2031-03-14T05:21:08Z",
    "timezone_aware": "a time that states its zone",
    "literal_error": "one of {kind}",
    "list_type": "a list in square brackets",
    "too_short": "a list with at least one entry",
    "dict_type": "a table in braces",
    "bool_type": "true or false, without quotes",
    "model_type": "a table",
    "model_attributes_type": "a table in braces",
    "union_tag_invalid": 'shape = "rectangle", "circle" or "mosaic"',
    "union_tag_not_found": 'shape = "rectangle", "circle" or "mosaic"',
}
_KINDS: dict[object, str] = {
    str: "text in double quotes",
    AwareDatetime: "a date and time",
}
_REMEDY = {
    "timezone_aware": "Add Z for UTC or an offset such as +02:00.",
    "finite_number": "nan and inf are not accepted.",
}


@dataclass(frozen=True)
class Entry(Generic[AnyTable]):
    """One table of a list such as [[map]].

    Attributes
    ----------
    number : int
        Place in the list, from 1.
    table : Table
        As checked.
    whole : bool
        False where keys at fault were left out: good for finding further
        faults in what the others name, and for nothing else.
    """

    number: int
    table: AnyTable
    whole: bool


@dataclass(frozen=True)
class ParsedCampaign:
    """The tables of a campaign file as far as they hold, and a sentence for each fault.

    Attributes
    ----------
    sha256 : str
        Hash of the file.
    event : EventTable or None
        None where that table is at fault.
    maps, telescopes, sources : tuples of Entry
        What there is to load, in the order of the file.
    problems : tuple of str
        The faults, in the order of the file's tables.
    """

    sha256: str
    event: EventTable | None
    settings: SettingsTable | None
    extinction: ExtinctionTable | None
    report: ReportTable | None
    audit: AuditTable | None
    maps: tuple[Entry[MapTable], ...]
    telescopes: tuple[Entry[TelescopeTable], ...]
    sources: tuple[Entry[SourceTable], ...]
    claims: tuple[Entry[ClaimTable], ...]
    problems: tuple[str, ...]


def parse_campaign(path: Path) -> ParsedCampaign:
    """Read and check a campaign file; files it names are looked for, not opened.

    Raises
    ------
    CampaignError
        If the file cannot be read or is not TOML; other faults are returned.
    """
    content = _read(path)
    raw = _toml(content, path)
    problems: list[str] = []
    context = {"base": path.parent}

    def single(table: type[AnyTable], key: str) -> AnyTable | None:
        value = raw.get(key, {})
        if isinstance(value, dict):
            return _checked(table, value, (key,), context, problems)
        problems.append(
            f"{key}: got {shown(value)}, expected a table. "
            f"Write [{key}] on a line of its own, and below it {_SINGLE[key]}."
        )
        return None

    def listed(table: type[AnyTable], key: str) -> tuple[Entry[AnyTable], ...]:
        entries = []
        for index, row in enumerate(_rows(raw, key, problems)):
            checked = _checked(table, row, (key, index), context, problems)
            kept = checked or _sound_part(table, row, context)
            if kept is not None:
                entries.append(Entry(index + 1, kept, checked is not None))
        return tuple(entries)

    problems.extend(_top_faults(raw))
    parsed = ParsedCampaign(
        hashlib.sha256(content).hexdigest(),
        single(EventTable, "event"),
        single(SettingsTable, "settings"),
        single(ExtinctionTable, "extinction"),
        single(ReportTable, "report"),
        single(AuditTable, "audit"),
        listed(MapTable, "map"),
        listed(TelescopeTable, "telescope"),
        listed(SourceTable, "source"),
        listed(ClaimTable, "claim"),
        (),
    )
    problems.extend(_duplicates(raw, "map", "version"))
    problems.extend(_duplicates(raw, "telescope", "name"))
    problems.extend(_duplicates(raw, "source", "name"))
    problems.extend(_choice_faults(raw))
    problems.extend(_shape_faults(raw))
    return ParsedCampaign(**{**vars(parsed), "problems": tuple(problems)})


def _read(path: Path) -> bytes:
    try:
        return _read_file(path)
    except (OSError, ValueError) as problem:
        reason = (getattr(problem, "strerror", None) or str(problem)).lower()
        raise CampaignError(
            [f"cannot be read: {reason}. Check the path and the file's permissions."], file=path
        ) from None


def _read_file(path: Path) -> bytes:
    if path.is_dir():
        inside = path / "campaign.toml"
        remedy = f"Name {inside}." if inside.is_file() else "Name the file inside it."
        raise CampaignError([f"a directory, expected a campaign file. {remedy}"], file=path)
    if not path.exists():
        remedy = "Check the path, or start a campaign with: skytally new DIR"
        raise CampaignError([f"there is no such file. {remedy}"], file=path)
    if not path.is_file():  # A pipe would be waited for without end.
        raise CampaignError(
            ["a device or a pipe, not a plain file. Name the TOML file."], file=path
        )
    limit = size_limit(SIZE_LIMIT_BYTES)
    with path.open("rb") as stream:
        content = stream.read(limit + 1)
    if len(content) > limit:
        raise CampaignError(
            [
                f"is larger than {limit / 1e6:.0f} MB, the limit, so it is hardly a campaign file. "
                "Name the TOML file, not a log or a map; if it is one, set "
                f"{SIZE_VARIABLE} to a larger limit."
            ],
            file=path,
        )
    return content


def _toml(content: bytes, path: Path) -> dict[str, Any]:
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as problem:
        line = content.count(b"\n", 0, problem.start) + 1
        raise CampaignError(
            [f"line {line}: a byte that is not UTF-8 text. Save the file as UTF-8."], file=path
        ) from None
    if found := _LONG_KEY.search(text):
        line = text.count("\n", 0, found.start()) + 1
        raise CampaignError(
            [f"line {line}: a key of more than 50 parts. Write the tables as the example does."],
            file=path,
        )
    try:
        return tomllib.loads(text)
    except RecursionError:
        problem_text = "tables are nested too deeply. Write the tables as the example does."
    except tomllib.TOMLDecodeError as problem:
        problem_text = _syntax_fault(str(problem), text)
    except ValueError:
        problem_text = "a number has thousands of digits. Write a shorter one."
    raise CampaignError([problem_text], file=path)


def _syntax_fault(said: str, text: str) -> str:
    """Word a TOML syntax error with its line, column and the line itself."""
    lines = text.splitlines() or [""]
    found = re.search(r"\(at (?:line (\d+), column (\d+)|end of document)\)$", said)
    # What was said may quote the file at length; a key is quoted whole.
    what = (said[: found.start()] if found else said).rstrip()[:SYNTAX_CHARACTERS]
    line = int(found[1]) if found and found[1] else len(lines)
    column = int(found[2]) if found and found[2] else len(lines[-1]) + 1
    source = lines[line - 1].strip() if line <= len(lines) else ""
    quoted = f" in {shown(source)}" if source else ""
    what = re.sub(r"\('(.*?)',?\)", lambda m: m[1].replace("', '", "."), what)
    what = what[:1].lower() + what[1:]
    return (
        f"line {line}, column {column}: not valid TOML: {what}{quoted}. Correct that line: "
        "text stands in double quotes, a table in braces stands on one line, a key occurs once."
    )


def _top_faults(raw: dict[str, Any]) -> Iterator[str]:
    known = (*_SINGLE, *_LISTED)
    unknown = [key for key in raw if key not in known]
    for key in unknown[:FAULTS_LIMIT]:
        yield f"{_bare(key)}: unknown table. {_whereto(key, known, ())}"
    if len(unknown) > FAULTS_LIMIT:
        yield f"{len(unknown) - FAULTS_LIMIT} more tables are unknown."


def _rows(raw: dict[str, Any], key: str, problems: list[str]) -> list[Any]:
    """Return the tables of a list such as [[map]]; most must have one at least."""
    value = raw.get(key)
    hint = f"Write [[{key}]] with two brackets, and below it {_LISTED[key]}."
    if value is None and key in _OPTIONAL:
        return []
    if value is None or value == []:
        problems.append(f"{key}: missing, expected at least one {key}. {hint}")
    elif not isinstance(value, list):
        problems.append(f"{key}: got {shown(value)}, expected a list of tables. {hint}")
    elif len(value) > TABLES_LIMIT:
        problems.append(
            f"{key}: {len(value)} tables, expected at most {TABLES_LIMIT}. Split the campaign."
        )
    else:
        return value
    return []


def _checked(
    table: type[AnyTable],
    value: object,
    place: Place,
    context: dict[str, Any],
    problems: list[str],
) -> AnyTable | None:
    try:
        return table.model_validate(value, context=context)
    except ValidationError as faults:
        found = faults.errors(include_url=False)
        problems.extend(_sentence(e, place, value) for e in found[:FAULTS_LIMIT])
        if (more := len(found) - FAULTS_LIMIT) > 0:
            problems.append(f"{key_path(place, (), value)}: {more} more faults.")
    return None


def _sound_part(table: type[AnyTable], row: object, context: dict[str, Any]) -> AnyTable | None:
    """Return a table without its keys at fault; None where what is left is none."""
    if not isinstance(row, dict):
        return None
    try:
        table.model_validate(row, context=context)
    except ValidationError as faults:
        wrong = {fault["loc"][0] for fault in faults.errors() if fault["loc"]}
        row = {key: value for key, value in row.items() if key not in wrong}
    try:
        return table.model_validate(row, context=context)
    except ValidationError:
        return None


def _sentence(fault: ErrorDetails, prefix: Place, value: object) -> str:
    """Word one fault: key path, what was found, what was expected, what to do."""
    inner = fault["loc"]
    place = key_path(prefix, inner, value)
    section, key = _section(prefix, inner)
    known = TABLES[section].model_fields
    if fault["type"] == "extra_forbidden":
        return f"{place}: unknown key. {_whereto(key, known, section)}"
    field = known.get(key)
    context = fault.get("ctx", {})
    if fault["type"] == "own":
        expected, remedy = context["expected"], context["remedy"]
    else:
        # Kinds that the table does not name still get what the key is for.
        template = _EXPECTED.get(fault["type"], "a value that fits this key")
        most = context.get("max_length")
        limit = "1 character" if most == 1 else f"{most} characters"
        expected = template.format(kind=_kind(field), limit=limit)
        remedy = _REMEDY.get(fault["type"], "")
    received = "missing" if fault["type"] == "missing" else f"got {shown(fault['input'])}"
    parts = [f"{place}: {received}, expected {expected}.", remedy]
    if fault["type"] == "literal_error":
        parts.append(_alike(fault["input"], field))
    elif field is not None and field.description and not remedy:
        parts.append(f"Give {field.description}.")
    return " ".join(p for p in parts if p)


def key_path(prefix: Place, inner: Sequence[str | int] = (), value: object = None) -> str:
    """Return a place such as ``telescope[2].camera.width (Plover)``; numbers count from 1.

    Parameters
    ----------
    prefix : tuple
        The table: ("event",) or ("telescope", 1).
    inner : sequence
        The keys below it, as the check reports them.
    value : object
        The table as read; it gives the name, and where a text stands for a table.
    """
    text = str(prefix[0]) + "".join(f"[{i + 1}]" for i in prefix[1:] if isinstance(i, int))
    current = value
    for step, part in enumerate(inner):
        if step == 1 and inner[0] == "camera" and ("telescope", "camera", part) in TABLES:
            continue
        if isinstance(part, int) and isinstance(current, list):
            text += f"[{part + 1}]"
            current = current[part]
        elif isinstance(part, str) and isinstance(current, dict):
            if part == "[key]":
                break
            text += f".{_bare(part)}"
            current = current.get(part)
        else:
            break
    names = value if isinstance(value, dict) else {}
    name = names.get("version" if prefix[0] == "map" else "name")
    return f"{text} ({shown(name, quoted=False)})" if len(prefix) > 1 and name else text


def _section(prefix: Place, inner: Place) -> tuple[tuple[str, ...], str]:
    """Return the table of `TABLES` that a fault belongs to, and the key in it."""
    names = [str(p) for p in (*prefix, *inner) if isinstance(p, str)]
    for length in range(len(names) - 1, 0, -1):
        section = tuple(names[:length])
        if section in TABLES:
            return section, names[length]
    return (names[0],), ""


def _kind(field: FieldInfo | None) -> str:
    """Say in words what a key takes: a number with its limits, its choices, or its kind."""
    if field is None:
        return "a value that fits this key"
    if choices := _choices(field):
        return ", ".join(choices)
    kinds = {field.annotation, *get_args(field.annotation)}
    if not kinds & {int, float}:
        named = (words for kind, words in _KINDS.items() if kind in kinds)
        return next(named, "a table in braces")
    words = "a whole number" if int in kinds else "a number"
    return f"{words} {_limits(field)}".rstrip()


def _limits(field: FieldInfo) -> str:
    least = most = ""
    low = high = None
    for rule in field.metadata:
        match rule:
            case annotated_types.Gt(bound):
                least = f"above {bound:g}"
            case annotated_types.Ge(bound):
                low, least = bound, f"of {bound:g} or more"
            case annotated_types.Lt(bound):
                most = f"below {bound:g}"
            case annotated_types.Le(bound):
                high, most = bound, f"at most {bound:g}"
    if low is not None and high is not None:
        return f"from {low:g} to {high:g}"
    return " and ".join(part for part in (least, most) if part)


def _choices(field: FieldInfo | None) -> list[str]:
    if field is None:
        return []
    options = (field.annotation, *get_args(field.annotation))
    return [json.dumps(v) for o in options if get_origin(o) is Literal for v in get_args(o)]


def _alike(value: object, field: FieldInfo | None) -> str:
    choices = {c.lower(): c for c in _choices(field)}
    word = json.dumps(value.lower()) if isinstance(value, str) else ""
    near = difflib.get_close_matches(word, choices, 1)
    if near:
        return f"Did you mean {choices[near[0]]}?"
    return f"Give {field.description}." if field is not None and field.description else ""


def _whereto(
    key: str, known: Sequence[str] | dict[str, FieldInfo], section: tuple[str, ...]
) -> str:
    """Say what an unknown key may have been meant for: another table, or a key much like it."""
    places = [p for p, t in TABLES.items() if key in t.model_fields and p != section]
    own = [place for place in places if place[:1] == section[:1]]
    homes = [
        ".".join(place[:2]) + f" with shape = {shown(place[2])}"
        if place[1:2] == ("camera",)
        else ".".join(place)
        for place in own or places
    ]
    names = {name.lower(): name for name in known}
    near = difflib.get_close_matches(key.lower(), names, 1)
    hint = ""
    if homes:
        hint = f"The key {_bare(key)} belongs in {' or '.join(homes)}. "
    elif near:
        hint = f"Did you mean {names[near[0]]}? "
    return f"{hint}Known here: {', '.join(known)}."


def _listed_rows(raw: dict[str, Any], key: str) -> list[Any]:
    """Return the tables of a list; none where it is no list, or longer than may be."""
    rows = raw.get(key)
    return rows if isinstance(rows, list) and len(rows) <= TABLES_LIMIT else []


def _duplicates(raw: dict[str, Any], key: str, label: str) -> Iterator[str]:
    first: dict[str, int] = {}
    for number, row in enumerate(_listed_rows(raw, key)):
        value = row.get(label) if isinstance(row, dict) else None
        if not isinstance(value, str) or not value.strip():
            continue
        # Names become file names, and some file systems do not tell case apart.
        before = first.setdefault(value.strip().casefold(), number)
        if before != number:
            yield (
                f"{key}[{number + 1}].{label}: {shown(value)} is already the {label} of "
                f"{key}[{before + 1}]. Give each {key} a {label} of its own."
            )


def _choice_faults(raw: dict[str, Any]) -> Iterator[str]:
    """Yield faults of tables in which exactly one of two keys must stand."""
    for key, pair, hint in (
        ("map", ("file", "circle"), "a map file, or a circle for an error circle"),
        ("telescope", ("log", "images"), "a log of exposures, or images for FITS frames"),
        ("source", ("magnitude", "light_curve"), "an absolute magnitude, or a light-curve file"),
    ):
        for number, row in enumerate(_listed_rows(raw, key)):
            given = [p for p in pair if isinstance(row, dict) and p in row]
            if len(given) != 1 and isinstance(row, dict):
                found = f"both {pair[0]} and {pair[1]}" if given else f"no {pair[0]}"
                place = key_path((key, number), (), row)
                yield f"{place}: {found}, expected either {pair[0]} or {pair[1]}. Give {hint}."


def _shape_faults(raw: dict[str, Any]) -> Iterator[str]:
    """Yield faults of sources that fade or rise from no magnitude."""
    for number, row in enumerate(_listed_rows(raw, "source")):
        for key in ("fade", "rise"):
            if isinstance(row, dict) and key in row and "magnitude" not in row:
                place = key_path(("source", number), (key,), row)
                yield (
                    f"{place}: a {key}, but no magnitude at peak. Give magnitude, or leave {key} "
                    "out: a light curve says by itself how the source fades and rises."
                )


def _bare(key: str) -> str:
    return key if re.fullmatch(r"[A-Za-z0-9_-]{1,40}", key) else shown(key)


def shown(value: object, *, quoted: bool = True) -> str:
    """Return a value as the file would have it, cut to a readable length."""
    match value:
        case str():
            text = json.dumps(value, ensure_ascii=False) if quoted else value
        case bool():
            text = str(value).lower()
        case dict():
            text = f"a table with {', '.join(map(_bare, value))}" if value else "an empty table"
        case list():
            text = f"a list of {len(value)}" if value else "an empty list"
        case datetime() | date() | time():
            text = value.isoformat()
        case int() if value.bit_length() > 4 * SHOWN_CHARACTERS:
            text = hex(value)  # Decimal digits of a number of any size are refused.
        case _:
            text = str(value)
    # What a terminal would obey instead of showing must not reach it.
    text = "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)
    return text if len(text) <= SHOWN_CHARACTERS else text[: SHOWN_CHARACTERS - 1] + "…"
