"""The tables of the report as plain text cells, from the results alone."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from skytally.results import LogCount, Results
from skytally.tally import AsPointed, TallyRow, Timeline
from skytally.wording import (
    MISSING,
    NBSP,
    area_text,
    count,
    distance_text,
    hours_text,
    limit_rows,
    limit_terms,
    magnitude_text,
    number_text,
    percent,
    row_probability,
    utc_text,
)

__all__ = ["Cell", "Column", "Table", "capped", "columns_of", "key_figures", "tables"]

# Rows of one table; more would fill pages that nobody reads, and the PDF takes a minute.
MOST_ROWS = 48


@dataclass(frozen=True)
class Column:
    """Heading of a column, and whether it holds numbers."""

    title: str
    numeric: bool = True


@dataclass(frozen=True)
class Cell:
    """Text, with what is drawn beside it.

    Attributes
    ----------
    text : str
        What it says.
    detail : str
        A second, quieter line; empty for none.
    bar : float or None
        A bar of this length, 0 to 1.
    telescope : int or None
        Index of the telescope whose key is drawn.
    code : bool
        Whether it is a hash or path, to be set in equal widths.
    """

    text: str
    detail: str = ""
    bar: float | None = None
    telescope: int | None = None
    code: bool = False


@dataclass(frozen=True)
class Table:
    """One table, ready to be set.

    Attributes
    ----------
    name : str
        Short, unique on the page.
    title : str
        What the rows are.
    columns : tuple of Column
        Headings.
    rows : tuple of tuples of Cell
        As many cells each as there are columns.
    total : tuple of Cell or None
        A last row that sums up.
    note : str
        A sentence below; empty for none.
    """

    name: str
    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    total: tuple[Cell, ...] | None = None
    note: str = ""


def tables(results: Results) -> dict[str, Table]:
    """Return the tables of coverage by name, long ones cut with a pointer to the file."""
    made = (
        _maps(results),
        _telescopes(results),
        _bands(results),
        _nights(results),
        _milestones(results),
        _as_pointed(results),
        _logs(results),
        _set_aside(results),
        _instruments(results),
        _inputs(results),
    )
    return {table.name: capped(table) for table in made}


def capped(table: Table) -> Table:
    """Cut a long table; its note says how much is left out and where it stands."""
    more = len(table.rows) - MOST_ROWS
    if more <= 0:
        return table
    pointer = f"{count('more row', more)} {'stands' if more == 1 else 'stand'} in tally.json."
    return replace(table, rows=table.rows[:MOST_ROWS], note=f"{table.note} {pointer}".strip())


def columns_of(*titles: str, text: int = 1) -> tuple[Column, ...]:
    """Return columns of which the first few hold text and the others numbers."""
    return tuple(Column(title, numeric=place >= text) for place, title in enumerate(titles))


def _rows(results: Results, kind: str) -> list[TallyRow]:
    """Return the newest map's rows of one kind: ``telescope``, ``band`` or ``night``."""
    others = {"telescope", "band", "night"} - {kind}
    return [
        row
        for row in results.rows
        if row.map == results.newest.version
        and getattr(row, kind) is not None
        and all(getattr(row, other) is None for other in others)
    ]


def _probability(row: TallyRow, results: Results, scale: float) -> Cell:
    """Return probability with bracket and a bar against the largest of the table."""
    text, _, detail = row_probability(row, results.settings).partition(" (")
    bar = row.probability / scale if scale > 0 else 0.0
    return Cell(text, detail.rstrip(")"), bar=min(bar, 1.0))


def _area(row: TallyRow) -> Cell:
    return Cell(area_text(row.area_deg2, row.area_low_deg2, row.area_high_deg2))


def _maps(results: Results) -> Table:
    totals = [results.row(map=m.version) for m in results.maps]
    scale = max((row.probability for row in totals), default=0.0)
    begun = {p.map: p.exposures for p in _of_all(results.as_pointed)}
    with_distance = any(m.distance_mean_mpc is not None for m in results.maps)
    rows = []
    for info, row in zip(results.maps, totals):
        since = "" if info.hours is None else hours_text(info.hours, sign=True)
        cells = [
            Cell(info.version),
            Cell(utc_text(info.issued), since),
            Cell(area_text(info.area_50_deg2, info.area_50_deg2, info.area_50_deg2)),
            Cell(area_text(info.area_90_deg2, info.area_90_deg2, info.area_90_deg2)),
            Cell(distance_text(info.distance_mean_mpc, info.distance_sd_mpc)),
            Cell(number_text(begun.get(info.version, 0))),
            _probability(row, results, scale),
            Cell(percent(row.probability_in_50)),
            Cell(percent(row.probability_in_90)),
            Cell(percent(row.area_in_90_deg2 / info.area_90_deg2)),
        ]
        rows.append(tuple(c for place, c in enumerate(cells) if with_distance or place != 4))
    titles = [
        "version",
        "issued",
        f"50{NBSP}% region",
        f"90{NBSP}% region",
        "distance",
        "exposures begun under it",
        "covered",
        f"covered in 50{NBSP}% region",
        f"covered in 90{NBSP}% region",
        f"90{NBSP}% region’s area covered",
    ]
    if not with_distance:
        titles.remove("distance")
    return Table(
        "maps",
        "All exposures on every map version",
        columns_of(*titles, text=2),
        tuple(rows),
        note=f"Probabilities are fractions of all of a map’s probability. {_bracket_note(results)}",
    )


def _bracket_note(results: Results) -> str:
    return (
        "The smaller figures are the bracket that certainly holds the value; "
        f"where it is wider than {percent(results.settings.bracket_target)}, "
        "± gives the estimated error instead."
    )


def _of_all(as_pointed: Iterable[AsPointed]) -> list[AsPointed]:
    return [p for p in as_pointed if (p.telescope, p.band, p.night) == (None, None, None)]


def _telescopes(results: Results) -> Table:
    rows = [(index, results.row(telescope=t.name)) for index, t in enumerate(results.telescopes)]
    total = results.row()
    scale = total.probability

    def cells(row: TallyRow, name: Cell) -> tuple[Cell, ...]:
        return (
            name,
            Cell(number_text(row.exposures)),
            _area(row),
            _probability(row, results, scale),
            Cell(percent(row.probability_unique)),
            Cell(percent(row.probability_credit)),
            Cell(percent(row.probability_revisited)),
        )

    settings = results.settings
    whole = cells(total, Cell("all together"))
    # Alone and share are questions among telescopes; of the whole they say nothing new.
    credit = percent(sum(row.probability_credit for _, row in rows))
    return Table(
        "telescopes",
        "Each telescope on the newest map version",
        columns_of("telescope", "exposures", "area", "covered", "alone", "share", "revisited"),
        tuple(
            cells(row, Cell(row.telescope or "", telescope=index if row.exposures else None))
            for index, row in rows
        ),
        total=(*whole[:4], Cell(MISSING), Cell(credit), whole[6]),
        note=(
            "Alone: covered by no other telescope. Share: what several covered, split equally, so "
            f"that the shares add up. Revisited: covered at least {settings.revisit_visits} times, "
            f"first and last at least {settings.revisit_gap_minutes:g}{NBSP}min apart."
        ),
    )


def _bands(results: Results) -> Table:
    rows = _rows(results, "band")
    scale = max((row.probability for row in rows), default=0.0)
    return Table(
        "bands",
        "By band, all telescopes",
        columns_of("band", "exposures", "area", "covered", f"in 90{NBSP}% region", "revisited"),
        tuple(
            (
                Cell(row.band or ""),
                Cell(number_text(row.exposures)),
                _area(row),
                _probability(row, results, scale),
                Cell(percent(row.probability_in_90)),
                Cell(percent(row.probability_revisited)),
            )
            for row in rows
        ),
    )


def _nights(results: Results) -> Table:
    rows = _rows(results, "night")
    scale = max((row.probability for row in rows), default=0.0)
    return Table(
        "nights",
        "By night, all telescopes",
        columns_of("evening of", "first start", "last end", "exposures", "area", "covered", text=3),
        tuple(
            (
                Cell(row.night or ""),
                Cell(utc_text(row.first_start)),
                Cell(utc_text(row.last_end)),
                Cell(number_text(row.exposures)),
                _area(row),
                _probability(row, results, scale),
            )
            for row in rows
        ),
    )


def _milestones(results: Results) -> Table:
    index = {t.name: number for number, t in enumerate(results.telescopes)}
    lines = [
        line
        for line in results.timelines
        if line.map == results.newest.version
        and line.band is None
        and line.night is None
        and line.hours
        and line.probability[-1] > 0
    ]

    def cells(line: Timeline) -> tuple[Cell, ...]:
        final = line.probability[-1]
        reached = [
            next(h for h, p in zip(line.hours, line.probability) if p >= part * final)
            for part in (0.5, 0.9)
        ]
        name = (
            Cell("all together")
            if line.telescope is None
            else Cell(line.telescope, telescope=index[line.telescope])
        )
        hours = (line.hours[0], *reached, line.hours[-1])
        return (name, *(Cell(hours_text(h, sign=True)) for h in hours), Cell(percent(final)))

    whole = [cells(line) for line in lines if line.telescope is None]
    return Table(
        "milestones",
        "Hours from the event to what each finally covered",
        columns_of(
            "telescope", "first sky", "half of its own", "nine tenths", "last new sky", "in the end"
        ),
        tuple(cells(line) for line in lines if line.telescope is not None),
        total=whole[0] if whole else None,
    )


def _as_pointed(results: Results) -> Table:
    index = {t.name: number for number, t in enumerate(results.telescopes)}

    def cells(part: AsPointed) -> tuple[Cell, ...]:
        name = (
            Cell("all together")
            if part.telescope is None
            else Cell(part.telescope, telescope=index[part.telescope])
        )
        return (
            name,
            Cell("before the first version" if part.map is None else part.map),
            Cell(number_text(part.exposures)),
            Cell(MISSING if part.probability is None else percent(part.probability)),
            Cell(percent(part.probability_newest)),
        )

    shown = [p for p in results.as_pointed if p.band is None and p.night is None]
    return Table(
        "as-pointed",
        "Exposures by the map version in force when they began",
        columns_of(
            "telescope", "version in force", "exposures", "covered of it", "of the newest", text=2
        ),
        tuple(cells(part) for part in shown),
        note="Each line is the union of its own exposures, so lines do not add up.",
    )


def _why_aside(log: LogCount) -> str:
    if log.fault:
        return "the log could not be read"
    return ", ".join(f"{number_text(n)} {why}" for why, n in log.reasons) or MISSING


def _logs(results: Results) -> Table:
    logs = results.logs
    return Table(
        "logs",
        "Rows of the logs: read = used + set aside",
        (
            *columns_of("telescope", "log", text=2),
            *(Column(title) for title in ("read", "used", "set aside")),
            Column("why", numeric=False),
        ),
        tuple(
            (
                Cell(log.telescope),
                Cell(log.file, code=True),
                Cell(number_text(log.read)),
                Cell(number_text(log.used)),
                Cell(number_text(log.set_aside)),
                Cell(_why_aside(log)),
            )
            for log in logs
        ),
        total=(
            Cell("all together"),
            Cell(""),
            Cell(number_text(sum(log.read for log in logs))),
            Cell(number_text(sum(log.used for log in logs))),
            Cell(number_text(sum(log.set_aside for log in logs))),
            Cell(""),
        ),
    )


def _set_aside(results: Results) -> Table:
    return Table(
        "set-aside",
        "Rows set aside, one by one",
        (
            Column("telescope", numeric=False),
            Column("row"),
            *columns_of("exposure", "reason", "detail", text=3),
        ),
        tuple(
            (
                Cell(row.telescope),
                Cell(number_text(row.row)),
                Cell(row.exposure or MISSING),
                Cell(row.reason),
                Cell(row.detail),
            )
            for row in results.set_aside
        ),
    )


def _instruments(results: Results) -> Table:
    def orders(low: int | None, high: int | None) -> str:
        if low is None or high is None:
            return MISSING
        return str(low) if low == high else f"{low}–{high}"

    return Table(
        "instruments",
        "Telescopes and how finely their footprints were laid out",
        columns_of("telescope", "camera", "site", "bands", "fields", "working order", text=4),
        tuple(
            (
                Cell(t.name),
                Cell(t.camera),
                Cell(t.site or MISSING),
                Cell(", ".join(t.bands) or MISSING),
                Cell(number_text(t.footprints)),
                Cell(orders(t.order_min, t.order_max)),
            )
            for t in results.telescopes
        ),
        note=(
            "Fields: distinct footprints. Working order: the HEALPix order at which a cell’s "
            "centre decides; the bracket is refined further where it matters."
        ),
    )


def _inputs(results: Results) -> Table:
    return Table(
        "inputs",
        "Files read",
        columns_of("role", "file", "SHA-256", text=3),
        tuple(
            (Cell(item.role), Cell(item.path, code=True), Cell(item.sha256, code=True))
            for item in results.inputs
        ),
    )


def key_figures(results: Results) -> Sequence[tuple[str, str, str]]:
    """Return the numbers that matter most, each with what it is and a line of detail."""
    total = results.row()
    newest = results.newest
    probability, _, bracket = row_probability(total, results.settings).partition(" (")
    found = [
        ("probability covered", probability, bracket.rstrip(")") or f"of “{newest.version}”"),
        ("area observed", _area(total).text, f"by {count('exposure', total.exposures)}"),
        (
            f"90{NBSP}% region covered",
            percent(total.area_in_90_deg2 / newest.area_90_deg2),
            f"{_deg2(total.area_in_90_deg2)} of {_deg2(newest.area_90_deg2)}",
        ),
        (
            "revisited",
            percent(total.probability_revisited),
            f"at least {count('visit', results.settings.revisit_visits)}, "
            f"{results.settings.revisit_gap_minutes:g}{NBSP}min apart",
        ),
    ]
    limits = limit_rows(results)
    if limits:
        most = max(limits, key=lambda row: (row.exposures, row.band))
        limit = magnitude_text(most.depth_median)
        terms = limit_terms(results.settings, [most])
        found.append((f"median limit in {most.band}", limit, terms))
    return found


def _deg2(area: float) -> str:
    return area_text(area, area, area)
