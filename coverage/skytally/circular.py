"""The circular: plain 7-bit text of at most 72 columns that can be sent as it stands."""

from __future__ import annotations

import textwrap
import unicodedata
from collections.abc import Iterable, Iterator, Sequence

from skytally.exclusion import AbsoluteLimit
from skytally.limits import SourceRow
from skytally.results import ExposureInfo, MapInfo, Results, SourceInfo, TelescopeInfo
from skytally.tally import TallyRow
from skytally.wording import (
    MISSING,
    NBSP,
    NO_DISTANCE,
    area_text,
    count,
    depth_range,
    distance_text,
    extinction_text,
    headline,
    hours_text,
    join_words,
    limit_rows,
    limit_terms,
    magnitude_text,
    number_text,
    percent,
    reach_text,
    row_probability,
    since_event,
    source_probability,
    source_words,
    to_ascii,
    utc_text,
    version_text,
)

__all__ = ["WIDTH", "render_circular"]

WIDTH = 72
LISTED_EXPOSURES = 30

# Stands for a no-break space until the lines are broken; no text holds it.
_GLUE = "\x00"
_BAND_WIDTH = 10
# Letters that no decomposition takes apart.
_LETTERS = {
    "ß": "ss",
    "Æ": "Ae",
    "æ": "ae",
    "Œ": "Oe",
    "œ": "oe",
    "Ø": "O",
    "ø": "o",
    "Ł": "L",
    "ł": "l",
    "Đ": "D",
    "đ": "d",
    "ı": "i",
    "Þ": "Th",
    "þ": "th",
}

_CAUTION = (
    "Covered means that an exposure included the position, not that a source there would have "
    "been found. A non-detection constrains a source only as far as the model of it, the "
    "efficiency of the search and the map are right."
)


def render_circular(results: Results) -> str:
    """Return the circular for a campaign; every line ends with a newline."""
    blocks = [
        _paragraph(_title(results)),
        _paragraph(headline(results)),
        *_observations(results),
        *_probability(results),
        *_depth(results),
        *_distance(results),
        _paragraph(_rows_read(results)),
        *_table(results),
        _paragraph(_CAUTION),
        _paragraph(
            f"Numbers by {results.software}; areas and probabilities are those of the union of "
            "all footprints, so that nothing counts twice."
        ),
    ]
    return "\n\n".join("\n".join(block) for block in blocks) + "\n"


def _title(results: Results) -> str:
    used = [t for t in results.telescopes if t.exposures]
    return f"{results.event.name}: coverage by {count('telescope', len(used), words=True)}"


def _observations(results: Results) -> Iterator[list[str]]:
    """When the event was, and what each telescope did."""
    event = results.event
    text = f"The time of {event.name} is {utc_text(event.time, seconds=True)}."
    if results.exposures:
        first = min(results.exposures, key=lambda e: e.hours)
        text += (
            f" The first exposure began at {utc_text(first.start)}, {since_event(first.hours)};"
            f" the last ended at {utc_text(results.row().last_end)}."
        )
    yield _paragraph(text)
    lines = [_telescope(results, t) for t in results.telescopes if t.exposures]
    if lines:
        head = f"Instruments, and what each covers of {version_text(results.newest.version)}:"
        yield _list(head, lines)


def _telescope(results: Results, telescope: TelescopeInfo) -> str:
    bands = f" in {join_words(telescope.bands)}" if telescope.bands else ""
    covered = _of_probability(results, results.row(telescope=telescope.name))
    return (
        f"{telescope.name} ({telescope.camera}): "
        f"{count('exposure', telescope.exposures)}{bands}, {covered}"
    )


def _probability(results: Results) -> Iterator[list[str]]:
    """What the headline's map version is, and what the same exposures cover on the others."""
    total = results.row()
    if total.exposures == 0:
        return
    newest, *others = reversed(results.maps)
    area = area_text(total.area_deg2, total.area_low_deg2, total.area_high_deg2, bracket=True)
    age = "newest" if others else "only"
    yield _paragraph(
        f"The {age} map version is {_described(newest)}. "
        f"All footprints together cover {area}, {_in_region(newest, total)}."
    )
    if others:
        versions = "version" if len(others) == 1 else "versions"
        lines = [
            f"{_described(m)}: {_of_probability(results, results.row(m.version))}" for m in others
        ]
        yield _list(f"On the earlier map {versions} the same exposures cover:", lines)


def _described(info: MapInfo) -> str:
    """Name a map version, with its issue time and the size of its 90 % region."""
    when = ""
    if info.issued is not None and info.hours is not None:
        when = f"issued {utc_text(info.issued)}, {since_event(info.hours)}; "
    area = area_text(info.area_90_deg2, info.area_90_deg2, info.area_90_deg2)
    return f'"{info.version}" ({when}90{NBSP}% region of {area})'


def _of_probability(results: Results, row: TallyRow) -> str:
    if row.probability <= 0:
        return "none of the probability"
    return f"{_worded(row_probability(row, results.settings))} of the probability"


def _in_region(info: MapInfo, row: TallyRow) -> str:
    if row.area_in_90_deg2 <= 0:
        return f"none of it in the 90{NBSP}% region"
    inside = area_text(row.area_in_90_deg2, row.area_in_90_deg2, row.area_in_90_deg2)
    part = _worded(percent(row.area_in_90_deg2 / info.area_90_deg2))
    return f"with {inside} in the 90{NBSP}% region, which is {part} of its area"


def _depth(results: Results) -> Iterator[list[str]]:
    newest = results.newest.version
    rows = [
        row
        for row in results.rows
        if row.map == newest and row.telescope is not None and row.band is not None
    ]
    known = [row for row in rows if row.depth_median is not None]
    if not rows:
        return
    if not known:
        yield _paragraph("The logs give no limiting magnitudes.")
        return
    mixed = len({row.extinction for row in known}) > 1
    yield _list(
        f"Limiting magnitudes ({limit_terms(results.settings, rows)}):",
        [_limits(row) + (f", {extinction_text([row])}" if mixed else "") for row in rows],
    )


def _limits(row: TallyRow) -> str:
    who = f"{row.telescope}, {row.band}"
    if row.depth_median is None:
        return f"{who}: no limits in the log ({count('exposure', row.exposures)})"
    text = f"{who}: {depth_range(row)}"
    if row.depth_min != row.depth_max:
        text += f", median {magnitude_text(row.depth_median)}"
    return f"{text} ({count('exposure', row.exposures)})"


def _distance(results: Results) -> Iterator[list[str]]:
    """What would have been seen of each source, and the absolute limits at the map's distance."""
    newest = results.newest
    if newest.distance_mean_mpc is None:
        yield _paragraph(NO_DISTANCE)
        return
    seen = {
        row.source: row
        for row in results.source_rows
        if row.map == newest.version and (row.telescope, row.band, row.night) == (None, None, None)
    }
    for source in results.sources:
        if source.name in seen:
            yield _paragraph(_source(source, seen[source.name], results))
    yield from _absolute(results)


def _source(source: SourceInfo, row: SourceRow, results: Results) -> str:
    """One source in a sentence: what it assumes, over what it was detectable, and what was not."""
    brightness, search = source_words(source)
    who = f'A source "{source.name}" with {brightness}' + (f" ({search})," if search else ",")
    on = version_text(results.newest.version)
    if row.probability <= 0:
        return f"{who} would have been detected over none of the probability of {on}."
    text = (
        f"{who} would have been detected over {_worded(source_probability(row))} of the "
        f"probability of {on}"
    )
    lost = []
    if row.probability_beyond > 0:
        part = _worded(percent(row.probability_beyond))
        lost.append(f"{part} was covered but lies beyond reach or was missed")
    if row.probability_without_distance > 0:
        part = _worded(percent(row.probability_without_distance))
        lost.append(f"{part} was covered where the map gives no distance")
    text += f"; of the rest, {join_words(lost)}." if lost else "."
    if row.reach_median_mpc:
        text += f" Its median reach is {reach_text(row.reach_median_mpc)}{NBSP}Mpc."
    return text


def _absolute(results: Results) -> Iterator[list[str]]:
    """The limits as absolute magnitudes at the map's mean distance."""
    limits = [one for one in results.absolute_limits if one.map == results.newest.version]
    if not limits:
        return
    info = results.newest
    distance = distance_text(info.distance_mean_mpc, info.distance_sd_mpc)
    mixed = len({one.extinction is None for one in limits}) > 1
    terms = limit_terms(results.settings, limit_rows(results))
    yield _list(
        f"Median limits as absolute magnitudes at the map's distance of {distance}, with the "
        f"values one standard deviation nearer and farther ({terms}, no K-correction):",
        [_absolute_limit(one, mixed=mixed) for one in limits],
    )


def _absolute_limit(one: AbsoluteLimit, *, mixed: bool) -> str:
    near = MISSING if one.limit_near is None else number_text(one.limit_near, 2)
    text = (
        f"{one.telescope}, {one.band}: {magnitude_text(one.limit_mean)} "
        f"({near} and {number_text(one.limit_far, 2)}{NBSP}mag)"
    )
    if mixed and one.extinction is None:
        text += ", not corrected for Galactic extinction"
    return text


def _rows_read(results: Results) -> str:
    """Return the sum of what was read, used and set aside, with the reasons."""
    read = sum(log.read for log in results.logs)
    aside = sum(log.set_aside for log in results.logs)
    if read == 0:
        return "The logs hold no rows."
    if aside == 0:
        return f"The logs hold {count('row', read)}; none was set aside."
    reasons: dict[str, int] = {}
    for log in results.logs:
        for reason, number in log.reasons:
            reasons[reason] = reasons.get(reason, 0) + number
    why = join_words([f"{number_text(number)} {reason}" for reason, number in reasons.items()])
    return (
        f"The logs hold {count('row', read)}: {number_text(read - aside)} used, "
        f"{number_text(aside)} set aside ({why})."
    )


def _table(results: Results) -> Iterator[list[str]]:
    """Every exposure where they are few, the sums of each night where they are many."""
    if not results.exposures:
        return
    if len(results.exposures) > LISTED_EXPOSURES:
        yield from _night_table(results)
        return
    corrected = any(row.extinction != "not corrected" for row in limit_rows(results))
    logged = " (limits not corrected for Galactic extinction)" if corrected else ""
    for telescope in results.telescopes:
        mine = [e for e in results.exposures if e.telescope == telescope.name]
        if mine:
            yield [
                *_paragraph(f"Exposures by {telescope.name}{logged}:"),
                *_columns(
                    ("UTC start", "t-t0/h", "Band", "RA/deg", "Dec/deg", "Limit"),
                    [_exposure(e) for e in mine],
                    "<><>>>",
                ),
            ]


def _exposure(e: ExposureInfo) -> tuple[str, ...]:
    return (
        utc_text(e.start, seconds=True).removesuffix(f"{NBSP}UTC"),
        hours_text(e.hours).removesuffix(f"{NBSP}h"),
        _latin(e.band or MISSING)[:_BAND_WIDTH],
        MISSING if e.ra_deg is None else number_text(e.ra_deg, 4),
        MISSING if e.dec_deg is None else number_text(e.dec_deg, 4),
        MISSING if e.depth is None else number_text(e.depth, 2),
    )


def _night_table(results: Results) -> Iterator[list[str]]:
    rows = [r for r in results.rows if r.map == results.newest.version and r.night is not None]
    if not rows:
        return
    cells = [
        (
            str(row.night),
            number_text(row.exposures),
            area_text(row.area_deg2, row.area_low_deg2, row.area_high_deg2),
            row_probability(row, results.settings),
        )
        for row in rows
    ]
    yield [
        *_paragraph(f"By night, on {version_text(results.newest.version)}:"),
        *_columns(("Night", "Exposures", "Area", "Probability"), cells, "<>>>"),
    ]


def _columns(head: Sequence[str], rows: Iterable[Sequence[str]], align: str) -> list[str]:
    """Return a fixed-width table, as wide as its content."""
    table = [[_latin(cell).replace(_GLUE, " ") for cell in row] for row in (head, *rows)]
    widths = [max(len(row[i]) for row in table) for i in range(len(head))]
    return [
        "  ".join(f"{cell:{side}{width}}" for cell, side, width in zip(row, align, widths)).rstrip()
        for row in table
    ]


def _list(head: str, items: Iterable[str]) -> list[str]:
    lines = _paragraph(head)
    for item in items:
        lines += _paragraph(item, first="- ", rest="  ")
    return lines


def _paragraph(text: str, first: str = "", rest: str = "") -> list[str]:
    """Break text into lines of 7-bit characters; numbers stay with their units."""
    lines = textwrap.wrap(
        _latin(text),
        WIDTH,
        initial_indent=first,
        subsequent_indent=rest,
        break_on_hyphens=False,
    )
    return [line.replace(_GLUE, " ") for line in lines]


def _latin(text: str) -> str:
    """Return 7-bit text: the same words where there is a way to write them, marks dropped."""
    glued = "".join(c for c in text if c.isprintable() or c == NBSP).replace(NBSP, _GLUE)
    return "".join(c if c.isascii() else _letter(c) for c in glued)


def _letter(character: str) -> str:
    plain = to_ascii(character)
    if plain != "?":
        return plain
    if character in _LETTERS:
        return _LETTERS[character]
    parts = unicodedata.normalize("NFKD", character)
    return "".join(c for c in parts if c.isascii()) or "?"


def _worded(text: str) -> str:
    """Write a bound in words, as a sentence wants it."""
    return text.replace(f"<{NBSP}", "less than ").replace(f">{NBSP}", "more than ")
