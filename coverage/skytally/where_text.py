"""What was seen of positions, as text of 80 columns."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from typing import TextIO

import numpy as np

from skytally.galaxies import Ranking, Weight
from skytally.where import WhereAnswer
from skytally.wording import (
    MISSING,
    NBSP,
    bright_magnitude,
    count,
    distance_text,
    hours_text,
    join_words,
    number_text,
    percent,
    reach_text,
    to_ascii,
    version_text,
)

__all__ = ["FULL_ACCOUNTS", "render_where", "where_notes"]

WIDTH = 80
FULL_ACCOUNTS = 20
"""Up to so many positions get an account of their own, more get a line each."""

_NAME_WIDTH = 16
_VISITS_SHOWN = 40
_BANDS_SHOWN = 3
_FAULTS_SHOWN = 5
_CAUTION = (
    "A non-detection constrains a source only as far as the model, the detection efficiency and "
    "the map are right; where no exposure held a position, nothing is constrained."
)
_WEIGHTS = {
    Weight.NONE: "",
    Weight.LUMINOSITY: (
        " times luminosity (magnitudes as given, corrected neither for extinction nor for redshift)"
    ),
    Weight.MASS: " times mass",
}


def render_where(answer: WhereAnswer, stream: TextIO) -> str:
    """Return the answer as text for a stream.

    Up to 20 positions are told in full, more in a line each; 7-bit characters
    where the stream cannot show others.
    """
    lines: list[str] = []
    total = len(answer.positions)
    if total <= FULL_ACCOUNTS:
        for index in range(total):
            lines += [*_account(answer, index), ""]
    elif not answer.rankings:
        lines += [*_short_table(answer), ""]
    for ranking in answer.rankings[-1:]:
        lines += [*_ranking(answer, ranking), ""]
    for note in where_notes(answer):
        lines += _wrap(note)
    # Control characters from a table must not steer a terminal.
    clean = ["".join(c for c in line if c.isprintable() or c == NBSP) for line in lines]
    text = "".join(f"{line.rstrip()}\n" for line in clean)
    encoding = (getattr(stream, "encoding", None) or "utf-8").lower()
    return text if encoding.startswith("utf") else to_ascii(text)


def _wrap(text: str, indent: str = "") -> list[str]:
    """Break a paragraph between words; a number stays with its unit."""
    return textwrap.wrap(
        text, WIDTH, subsequent_indent=indent, break_on_hyphens=False, break_long_words=False
    )


def _begin(text: str) -> str:
    """Begin a sentence."""
    return text[:1].upper() + text[1:]


def _were(number: int) -> str:
    return "was" if number == 1 else "were"


def _table(head: Sequence[str], rows: Sequence[Sequence[str]], names: int = 1) -> list[str]:
    """Columns under their heads: names to the left and cut when long, others to the right."""
    shown = [
        [cell[:_NAME_WIDTH] if place < names else cell for place, cell in enumerate(row)]
        for row in (head, *rows)
    ]
    width = [max(map(len, column)) for column in zip(*shown)]
    return [
        "  ".join(
            cell.ljust(size) if place < names else cell.rjust(size)
            for place, (cell, size) in enumerate(zip(row, width))
        )
        for row in shown
    ]


def _account(answer: WhereAnswer, index: int) -> list[str]:
    """Tell all about one position."""
    p = answer.positions
    place = f"RA {p.ra_deg[index]:.5f}, Dec {number_text(p.dec_deg[index], 5)} (ICRS, degrees)"
    given = p.distance_mpc[index]
    if np.isfinite(given):
        place += f", {reach_text(given)}{NBSP}Mpc"
    head = place if p.file is None else f"{p.name[index]}: {place}"
    return [*_wrap(head), *_seen(answer, index), *_limits(answer, index), *_maps(answer, index)]


def _seen(answer: WhereAnswer, index: int) -> list[str]:
    """Tell which exposures held a position."""
    held = int(answer.exposures_of[index])
    if not held:
        return _wrap("No exposure held this position: nothing is constrained here.")
    e, v = answer.exposures, answer.visits
    first, last = e.hours[answer.first[index]], e.hours[answer.last[index]]
    begin, end = np.searchsorted(v.position, [index, index + 1])
    rows = v.exposure[begin:end]
    telescopes = len(set(e.telescope[rows].tolist()))
    when = (
        f"it began {_after(first)}"
        if held == 1
        else f"the first began {_after(first)}, the last {_after(last)}"
    )
    lines = _wrap(f"Held by {count('exposure', held)} of {count('telescope', telescopes)}; {when}.")
    cells = [
        (
            e.telescope[row],
            e.exposure[row],
            e.band[row],
            hours_text(e.hours[row], sign=True),
            _number(e.depth[row], 2),
            _edge(v.edge_arcsec[begin + place], e.edge_cell_arcsec[row]),
        )
        for place, row in enumerate(rows[:_VISITS_SHOWN])
    ]
    head = ("telescope", "exposure", "band", "start", "depth", "nearest edge")
    lines += _table(head, cells, names=3)
    if held > _VISITS_SHOWN:
        lines += _wrap(f"and {held - _VISITS_SHOWN} more; --json lists them all.")
    return lines


def _after(hours: float) -> str:
    return f"{hours_text(abs(hours))} {'before' if hours < 0 else 'after'} the event"


def _edge(edge_arcsec: float, cell_arcsec: float) -> str:
    """Distance to an edge in a handy unit, or the cell that it is known to."""
    if np.isfinite(edge_arcsec):
        return _angle(edge_arcsec)
    return f"known to {_angle(cell_arcsec)}" if np.isfinite(cell_arcsec) else MISSING


def _angle(arcsec: float) -> str:
    for size, unit in ((3600.0, "deg"), (60.0, "arcmin")):
        if arcsec >= size:
            return f"{arcsec / size:.2f}{NBSP}{unit}"
    return f"{arcsec:.1f}{NBSP}arcsec"


def _limits(answer: WhereAnswer, index: int) -> list[str]:
    """Tell the deepest limits, apparent and absolute."""
    d = answer.deepest
    rows = [int(r) for r in np.flatnonzero(d.position == index) if np.isfinite(d.depth[r])]
    if not rows:
        return _wrap("None of them states a limit.") if answer.exposures_of[index] else []
    deepest = join_words([f"{_number(d.depth[r], 2)} in {d.band[r]}" for r in rows])
    terms = f"{answer.magnitude_system}, {answer.significance:g}{NBSP}σ, as observed"
    lines = _wrap(f"Deepest: {deepest} ({terms}).")
    correction = _correction(answer, rows)
    newest = answer.maps[-1]
    if np.isfinite(d.absolute_mean[rows[0]]):
        where = distance_text(newest.distance_mean_mpc[index], newest.distance_sd_mpc[index])
        cells = [
            f"{bright_magnitude(d.absolute_mean[r])} ({_bright(d.absolute_near[r])} to "
            f"{_bright(d.absolute_far[r])}) in {d.band[r]}"
            for r in rows
        ]
        lines += _wrap(
            f"Absolute limits at the distance of {version_text(newest.version)} here, {where}: "
            f"{join_words(cells)}; {correction}."
        )
    elif newest.has_distances:
        lines += _wrap(
            f"{_begin(version_text(newest.version))} has no distance in this direction, so "
            "there are no absolute limits by it."
        )
    if np.isfinite(d.absolute_own[rows[0]]):
        cells = [f"{bright_magnitude(d.absolute_own[r])} in {d.band[r]}" for r in rows]
        lines += _wrap(f"Absolute limits at the distance given: {join_words(cells)}; {correction}.")
    return lines


def _correction(answer: WhereAnswer, rows: Sequence[int]) -> str:
    """Say what absolute limits are corrected for."""
    d = answer.deepest
    known = [f"{_number(d.extinction[r], 2)} in {d.band[r]}" for r in rows if d.extinction[r] >= 0]
    unknown = [str(d.band[r]) for r in rows if not d.extinction[r] >= 0]
    parts = [f"less the Galactic extinction, {join_words(known)}"] if known else []
    if unknown:
        where = f" in {join_words(unknown)}" if known else ""
        parts.append(f"not corrected for Galactic extinction{where}")
    return f"{', '.join(parts)}; no K-correction"


def _number(value: float, decimals: int) -> str:
    return number_text(value, decimals) if np.isfinite(value) else MISSING


def _bright(magnitude: float) -> str:
    return bright_magnitude(magnitude) if np.isfinite(magnitude) else MISSING


def _maps(answer: WhereAnswer, index: int) -> list[str]:
    """Tell what each map version says of a position, newest first."""
    given = np.isfinite(answer.positions.distance_mpc[index])
    head = ["map version", "inside the", "per deg²", "distance"]
    rows = []
    for one in reversed(answer.maps):
        level = one.credible_level[index]
        row = [
            one.version,
            f"{percent(level)} region" if one.listed[index] else "off the map",
            _small(one.density_per_deg2[index]),
            _distance(one.distance_mean_mpc[index], one.distance_sd_mpc[index]),
        ]
        rows.append([*row, _small(one.density_per_mpc3[index])] if given else row)
    return _table([*head, "per Mpc³"] if given else head, rows)


def _distance(mean_mpc: float, sd_mpc: float) -> str:
    return distance_text(mean_mpc, sd_mpc) if np.isfinite(mean_mpc) else MISSING


def _small(value: float) -> str:
    """Three digits of a density."""
    if not np.isfinite(value):
        return MISSING
    return "0" if value == 0 else f"{value:.3g}"


def _short_table(answer: WhereAnswer) -> list[str]:
    """One line for each position."""
    e, newest = answer.exposures, answer.maps[-1]
    deepest = _deepest_by_position(answer)
    rows = []
    for index, name in enumerate(answer.positions.name):
        held = int(answer.exposures_of[index])
        rows.append(
            (
                name,
                number_text(held),
                _hours(e.hours[answer.first[index]]) if held else MISSING,
                _hours(e.hours[answer.last[index]]) if held else MISSING,
                percent(newest.credible_level[index]) if newest.listed[index] else "off",
                deepest[index],
            )
        )
    head = ("name", "exp.", "first/h", "last/h", "inside", "deepest by band")
    return [
        *_table(head, rows),
        *_wrap(
            "Hours are from the event to the start of the first and the last exposure; inside is "
            f"the smallest credible region of {version_text(newest.version)} that holds the "
            "position."
        ),
    ]


def _hours(hours: float) -> str:
    return hours_text(hours).removesuffix(f"{NBSP}h")


def _deepest_by_position(answer: WhereAnswer) -> list[str]:
    """Deepest limits of each position, band by band as far as there is room."""
    d = answer.deepest
    cells: list[list[str]] = [[] for _ in range(len(answer.positions))]
    for row in np.flatnonzero(np.isfinite(d.depth)).tolist():
        cells[d.position[row]].append(f"{d.band[row]}{NBSP}{number_text(d.depth[row], 1)}")
    return [
        " ".join(some) if len(some) <= _BANDS_SHOWN else " ".join([*some[:_BANDS_SHOWN], "…"])
        for some in (cell or [MISSING] for cell in cells)
    ]


def _ranking(answer: WhereAnswer, ranking: Ranking) -> list[str]:
    """List galaxies by rank, those without one last, and sum up."""
    p = answer.positions
    deepest = _deepest_by_position(answer)
    unranked = np.flatnonzero(ranking.rank == 0)
    ranked = np.argsort(np.where(ranking.rank == 0, len(p) + 1, ranking.rank), kind="stable")
    running, rows = 0.0, []
    for index in [*ranked[: ranking.ranked].tolist(), *unranked.tolist()]:
        share = ranking.share[index]
        running += share if np.isfinite(share) else 0.0
        rows.append(
            (
                p.name[index],
                str(ranking.rank[index]) if ranking.rank[index] else MISSING,
                percent(share, 2) if np.isfinite(share) else MISSING,
                percent(min(running, 1.0)) if np.isfinite(share) else MISSING,
                reach_text(p.distance_mpc[index]) if p.distance_mpc[index] > 0 else MISSING,
                number_text(int(answer.exposures_of[index])),
                deepest[index],
            )
        )
    head = ("galaxy", "rank", "share", "running", "Mpc", "exp.", "deepest by band")
    return [*_table(head, rows), *_wrap(_ranking_text(answer, ranking))]


def _ranking_text(answer: WhereAnswer, ranking: Ranking) -> str:
    """Say how galaxies were ranked and what share of them was observed."""
    version = version_text(ranking.map)
    weight = ranking.choice.weight
    text = (
        f"Ranked by the probability per Mpc³ of luminosity distance on {version}"
        f"{_WEIGHTS[weight]}; the distances of the table are taken as exact."
    )
    if ranking.unranked:
        reasons = join_words([f"{number_text(n)} ({reason})" for reason, n in ranking.unranked])
        text += f" Not ranked: {reasons}."
    if ranking.covered is None:
        return f"{text} No galaxy of the table has any probability on this map version."
    what = "" if weight is Weight.NONE else f"{weight.value}-weighted "
    text += (
        f" {number_text(ranking.observed)} of"
        f" {count('ranked galaxy', ranking.ranked, 'ranked galaxies')}"
        f" {_were(ranking.observed)} observed, with {percent(ranking.covered)} of their"
        f" {what}probability."
    )
    if ranking.covered_corrected is not None:
        c = ranking.choice.completeness or 1.0
        text += (
            f" With {percent(c, 0)} of all galaxies in the table, as stated, and the others lying "
            f"as the map does, of which {percent(ranking.map_covered)} was covered, it is "
            f"{percent(ranking.covered_corrected)}."
        )
    return text


# --- notes -----------------------------------------------------------------------------


def where_notes(answer: WhereAnswer) -> list[str]:
    """Return what was assumed and what the answer leaves open, as sentences."""
    p, newest = answer.positions, answer.maps[-1]
    notes = [*_fault_notes(answer), *p.notes]
    total, bare = len(p), int(np.count_nonzero(answer.exposures_of == 0))
    if total > 1:
        notes.append(
            f"{number_text(total - bare)} of {count('position', total)} {_were(total - bare)} held "
            f"by an exposure, {number_text(bare)} by none."
        )
    off = int(np.count_nonzero(~newest.listed))
    if off:
        who = "The position lies" if total == 1 else f"{number_text(off)} positions lie"
        notes.append(
            f"{who} outside every cell that {version_text(newest.version)} lists: its probability "
            "there is zero."
        )
    if not newest.has_distances:
        notes.append(
            f"{_begin(version_text(newest.version))} carries no distance, so there are no "
            "absolute limits by it."
        )
    if total > bare:
        notes += _edge_notes(answer)
    if total > FULL_ACCOUNTS and answer.extinction:
        notes.append(
            f"Deepest limits are {answer.magnitude_system}, {answer.significance:g}{NBSP}σ, as "
            f"observed; absolute limits, in --json, are {answer.extinction} for Galactic "
            "extinction, without K-correction."
        )
    return [*notes, _CAUTION]


def _edge_notes(answer: WhereAnswer) -> list[str]:
    """Say what a distance to an edge is, and where it is not known."""
    notes = [
        "The nearest edge is that of the detector, region or mask, along the sky; where several "
        "detectors of an exposure held a position, of the one in which it lies deepest."
    ]
    e = answer.exposures
    coarse = sorted(set(e.telescope[np.isfinite(e.edge_cell_arcsec)].tolist()))
    if coarse:
        notes.append(
            f"Regions of {join_words(coarse)} are given in cells (MOC): their edges are known no "
            "better than to the cell's width."
        )
    if answer.searchable:
        notes.append(
            f"What {join_words(answer.searchable)} can search is cut to a region given in cells, "
            "whose edge is not among the edges here."
        )
    return notes


def _fault_notes(answer: WhereAnswer) -> list[str]:
    """Name the rows and cells of the table that could not be used, the first few in full."""
    p = answer.positions
    notes = []
    for faults, what in ((p.set_aside, "set aside"), (p.unread, "read without a value")):
        notes += [f"Row {f.row} was {what}: {f.detail}" for f in faults[:_FAULTS_SHOWN]]
        more = len(faults) - _FAULTS_SHOWN
        if more > 0:
            notes.append(f"{count('more row', more)} {_were(more)} {what}.")
    if p.set_aside:
        notes.append(
            f"{count('row', p.read)} read = {number_text(len(p))} used + "
            f"{number_text(len(p.set_aside))} set aside."
        )
    return notes
