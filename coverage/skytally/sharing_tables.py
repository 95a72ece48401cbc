"""The tables of what lies between telescopes, from the results alone."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from skytally.report_tables import Cell, Table, capped, columns_of
from skytally.results import Results
from skytally.sharing import Sharing, TelescopeSet
from skytally.tally import TallyRow
from skytally.wording import (
    AREA_ACCURACY,
    MISSING,
    NBSP,
    count,
    decimals_for,
    hours_text,
    join_words,
    number_text,
    number_word,
    percent,
)

__all__ = ["sharing_tables"]

# Telescopes that a matrix has room for across a page, sets that are worth a line,
# and telescopes of a set that are named one by one.
MOST_PAIRED = 8
MOST_SETS = 12
_MOST_NAMED = 6


def sharing_tables(results: Results) -> dict[str, Table]:
    """Return the tables between telescopes by name, on the newest map version.

    They have no rows unless at least two telescopes covered some probability.
    """
    sharing = next((s for s in results.sharing if s.map == results.newest.version), None)
    if sharing is None or sum(row[i] > 0 for i, row in enumerate(sharing.pairs)) < 2:
        return {name: Table(name, "", (), ()) for name in ("shares", "pairs", "sets")}
    digits = _Digits.of(results, sharing)
    made = (
        _shares(results, sharing, digits),
        _pairs(results, sharing, digits),
        _sets(sharing, digits),
    )
    return {table.name: capped(table) for table in made}


@dataclass(frozen=True)
class _Digits:
    """How exactly numbers of these telescopes are printed.

    Attributes
    ----------
    uncertainty : dict of str to float
        Of each telescope's own probability, as a fraction.
    union, area_deg2 : float
        Probability and area of all together.
    """

    uncertainty: dict[str, float]
    union: float
    area_deg2: float

    @classmethod
    def of(cls, results: Results, sharing: Sharing) -> _Digits:
        rows = {name: results.row(telescope=name) for name in sharing.telescopes}
        total = results.row()
        return cls(
            {name: _uncertainty(row) for name, row in rows.items()},
            total.probability,
            total.area_deg2,
        )

    def probability(self, value: float, telescopes: Iterable[str]) -> str:
        """Return a percentage, no finer than the least certain telescope concerned."""
        most = 1 if self.union >= 0.01 else 4
        worst = max(self.uncertainty[name] for name in telescopes)
        return percent(value, decimals_for(100 * worst, most))

    def area(self, area_deg2: float) -> str:
        """Return an area, no finer than that of all together is known."""
        uncertainty = AREA_ACCURACY * self.area_deg2
        decimals = max(0, min(6, -math.floor(math.log10(uncertainty))))
        step = 10.0**-decimals
        if 0 < area_deg2 < step / 2:
            return f"<{NBSP}{step:.{decimals}f}{NBSP}deg²"
        return f"{number_text(area_deg2, decimals)}{NBSP}deg²"


def _uncertainty(row: TallyRow) -> float:
    """Return what is better known of a row: half its bracket, or the error estimated."""
    half_width = (row.probability_high - row.probability_low) / 2
    return min(half_width, row.probability_error) if row.probability_error > 0 else half_width


def _telescope(results: Results, name: str) -> Cell:
    index = [t.name for t in results.telescopes].index(name)
    return Cell(name, telescope=index if results.telescopes[index].exposures else None)


def _shares(results: Results, sharing: Sharing, digits: _Digits) -> Table:
    """Tabulate three ways to say what a telescope brought, in the order of its first exposure."""
    scale = max(sharing.added)
    first = [math.inf if hours is None else hours for hours in sharing.first_hours]
    rows = []
    for index in sorted(range(len(first)), key=first.__getitem__):
        name = sharing.telescopes[index]
        parts = (values[index] for values in (sharing.added, sharing.unique, sharing.credit))
        added, alone, share = (digits.probability(part, [name]) for part in parts)
        rows.append(
            (
                _telescope(results, name),
                Cell(hours_text(sharing.first_hours[index], sign=True)),
                Cell(added, bar=sharing.added[index] / scale),
                Cell(alone),
                Cell(share),
            )
        )
    sums = (sum(values) for values in (sharing.added, sharing.unique, sharing.credit))
    return Table(
        "shares",
        "What each telescope brought, in the order of their first exposures",
        columns_of("telescope", "first sky", "added", "alone", "share"),
        tuple(rows),
        total=(
            Cell("all together"),
            Cell(MISSING),
            *(Cell(digits.probability(total, sharing.telescopes)) for total in sums),
        ),
        note=(
            "First sky: end of the first exposure, from the event. Added: what the telescope was "
            "the first to cover, by the end of each exposure; split equally where several ended "
            "together. Alone: covered by no other telescope, and so what all together would lose "
            "without it; the sum is what one telescope only covered. Share: what several covered, "
            "split equally among them."
        ),
    )


def _pairs(results: Results, sharing: Sharing, digits: _Digits) -> Table:
    """Tabulate what both of each pair covered, for as many telescopes as a page holds."""
    names, pairs = sharing.telescopes, sharing.pairs
    most = sorted(range(len(names)), key=lambda index: -pairs[index][index])[:MOST_PAIRED]
    shown = sorted(most)
    scale = pairs[most[0]][most[0]]
    rows = []
    for one in shown:
        own = pairs[one][one]
        cells = [
            Cell(MISSING)
            if one == other
            else Cell(digits.probability(pairs[one][other], [names[one], names[other]]))
            for other in shown
        ]
        covered = Cell(digits.probability(own, [names[one]]), bar=own / scale)
        rows.append((_telescope(results, names[one]), covered, *cells))
    note = ""
    if len(shown) < len(names):
        note = (
            f"The {number_word(len(shown))} telescopes that covered most; "
            f"the pairs of all {number_word(len(names))} stand in tally.json."
        )
    return Table(
        "pairs",
        "What both telescopes of a pair covered",
        columns_of("telescope", "covered", *(f"and {names[index]}" for index in shown)),
        tuple(rows),
        note=note,
    )


def _sets(sharing: Sharing, digits: _Digits) -> Table:
    """Tabulate what exactly these telescopes covered, the most probable sets one by one."""
    shown, others = sharing.sets[:MOST_SETS], sharing.sets[MOST_SETS:]

    def cells(name: str, sets: Sequence[TelescopeSet], size: int | None = None) -> tuple[Cell, ...]:
        concerned = {name for one in sets for name in one.telescopes}
        return (
            Cell(name),
            Cell("" if size is None else number_text(size)),
            Cell(digits.probability(sum(one.probability for one in sets), concerned)),
            Cell(digits.area(sum(one.area_deg2 for one in sets))),
        )

    rows = [cells(_names(one, sharing), [one], len(one.telescopes)) for one in shown]
    note = "Every place counts once, under all the telescopes that covered it."
    if others:
        rows.append(cells(count("other set", len(others)), others))
        note += " All sets stand in tally.json."
    return Table(
        "sets",
        "Covered by exactly these telescopes",
        columns_of("telescopes", "number", "probability", "area"),
        tuple(rows),
        total=cells("all together", sharing.sets),
        note=note,
    )


def _names(one: TelescopeSet, sharing: Sharing) -> str:
    """Name a set; of a large one only the first few."""
    names = one.telescopes
    if len(names) == len(sharing.telescopes) and len(names) > 2:
        return f"all {number_word(len(names))} telescopes"
    if len(names) == 1:
        return f"{names[0]} alone"
    if len(names) > _MOST_NAMED:
        names = (*names[: _MOST_NAMED - 1], f"{number_text(len(names) - _MOST_NAMED + 1)} more")
    return join_words(names)
