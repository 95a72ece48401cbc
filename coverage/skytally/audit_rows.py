"""Findings on the rows of the logs: every row accounted for, no exposure counted twice."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from skytally.campaign_data import LoadedCampaign
from skytally.findings import Finding
from skytally.observations import SECONDS_PER_DAY, LogTable, SetAside
from skytally.shapes import lonlat_to_vector

__all__ = [
    "counted",
    "duplicate_findings",
    "fields_near",
    "overlaps",
    "reconciliation_findings",
    "resent_rows",
    "row_words",
    "time_resolution_s",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Two rows may be one exposure if they differ by no more than this ...
_RESENT_SECONDS = 1.5
_RESENT_ARCSEC = 2.0
_RESENT_SHARE = 0.5  # of the exposure time, between the starts
# ... or by the last digit of the coarser copy, which may be as coarse as one of these:
# a minute of arc, a hundredth of a degree, a second of right ascension, a thousandth.
_LAST_DIGITS_ARCSEC = (60.0, 36.0, 15.0, 3.6)
# So many pairs show how a copy was rounded.
_ENOUGH_PAIRS = 3
# A minute, 1e-4 day, a second, 1e-5 and 1e-6 day: how finely logs write their times.
_TIME_STEPS_S = (60.0, 8.64, 1.0, 0.864, 0.0864)
# An hour, 0.01 day and 0.001 day: too coarse to tell which exposures began together.
_COARSE_STEPS_S = (3600.0, 864.0, 86.4)
_ENOUGH_STARTS = 3  # that all fall on such a step by no chance
_REGION_ROUNDING_DEG = 0.001
_NUMBER = re.compile(r"[-+]?[0-9]+(?:\.[0-9]*)?")
# Copies of one exposure are few.
_NEIGHBOURS = 8
# Starts are good to the log's own rounding and to this; exposure times to one part in 100.
_START_JITTER_S = 2.0
_DURATION_SHARE = 0.99
# Pointings of one camera with several channels agree to this.
_SAME_FIELD_DEG = 1.0
_OFTEN_PAIRS, _OFTEN_SHARE = 3, 0.1


def row_words(rows: Sequence[int]) -> str:
    """Name rows in a sentence: "row 12", "rows 12 and 13", "rows 12, 13 and 40 more"."""
    named = [str(row) for row in rows]
    if len(named) == 1:
        return f"row {named[0]}"
    if len(named) > 3:
        named = [*named[:2], f"{len(named) - 2} more"]
    return f"rows {', '.join(named[:-1])} and {named[-1]}"


def counted(n: int, one: str, many: str) -> str:
    """Return a count with the words that agree with it: "1 row is", "3 rows are"."""
    return f"{n:,} {one if n == 1 else many}"


def time_resolution_s(start_mjd: Floats) -> float:
    """Return how finely a log writes its times.

    Parameters
    ----------
    start_mjd : float64 array, shape (n,)
        Times (UTC).

    Returns
    -------
    float
        The coarsest usual step (seconds) that every time is a multiple of; 0 for
        times finer than 1e-6 day.
    """
    return _step_s(start_mjd, _TIME_STEPS_S)


def _step_s(start_mjd: Floats, steps_s: Sequence[float]) -> float:
    """First of some steps that every time of day is a multiple of; 0 if of none."""
    seconds = (start_mjd - np.floor(start_mjd)) * SECONDS_PER_DAY
    for step in steps_s:
        # An MJD as a double is good to a microsecond.
        if bool((np.abs(seconds - step * np.round(seconds / step)) < 2e-5).all()):
            return step
    return 0.0


def duplicate_findings(campaign: LoadedCampaign) -> list[Finding]:
    """Report rows that repeat another, exactly or but for rounding."""
    found = []
    for telescope in campaign.telescopes:
        log = telescope.log
        aside = [x for x in log.set_aside if x.reason == "duplicate"]
        known = set(log.exposure)
        # A row without a name is called by its number.
        named = [x for x in aside if x.exposure and x.exposure != f"row {x.row}"]
        other = [x for x in named if x.exposure not in known]
        same = [x for x in aside if x not in other]
        if same:
            found.append(_same_exposure(telescope.name, same))
        if other:
            found.append(_same_but_for_the_name(telescope.name, other))
        again = np.flatnonzero(resent_rows(log))
        if again.size:
            found.append(_resent(telescope.name, log, again))
    return found


def _same_exposure(name: str, aside: Sequence[SetAside]) -> Finding:
    rows = _rows(aside)
    return Finding(
        "rows-repeated",
        "note",
        name,
        rows,
        f"{counted(len(rows), 'row repeats another', 'rows repeat others')} in start, pointing, "
        f"band and region: {row_words(rows)}.",
        f"Each exposure counts once: {_are_set_aside(rows)}.",
        "Nothing needs doing for the numbers; take the repeated rows out to be rid of this note.",
    )


def _same_but_for_the_name(name: str, aside: Sequence[SetAside]) -> Finding:
    rows = _rows(aside)
    return Finding(
        "rows-repeated-renamed",
        "caution",
        name,
        rows,
        f"{counted(len(rows), 'row has', 'rows have')} the start, pointing, band and region of "
        f"another row but a name found nowhere else: {row_words(rows)}. Row {aside[0].row} "
        f"is named {aside[0].exposure}.",
        f"Each counts once: {_are_set_aside(rows)}.",
        "See whether these are exposures of their own: short ones whose starts are logged too "
        "coarsely, or rows with the start or the pointing of their neighbour.",
    )


def resent_rows(log: LogTable) -> NDArray[np.bool_]:
    """Mark the rows that repeat an earlier one of the log but for rounding.

    Same band, same place to 2 arcsec or the last digit of the coarser copy, and starts
    within 1.5 s; and either the same exposure name, or starts closer than half an exposure
    by more than the log's own rounding: a short exposure after another is no copy.

    Returns
    -------
    bool array, shape (n,)
        Over the accepted rows; the first of several copies is not marked.
    """
    again = np.zeros(len(log), dtype=bool)
    first, second = _close_pairs(log)
    gap = np.abs(log.start_mjd[first] - log.start_mjd[second]) * SECONDS_PER_DAY
    shorter = np.minimum(log.duration_s[first], log.duration_s[second])
    at_once = gap + time_resolution_s(log.start_mjd) < _RESENT_SHARE * shorter
    once = (log.exposure[first] == log.exposure[second]).astype(bool) | at_once
    again[second[once & _same_place(log, first, second)]] = True
    return again


def _close_pairs(log: LogTable) -> tuple[Ints, Ints]:
    """Pairs of rows of one band that are near in time and place; the earlier row first."""
    n = len(log)
    if n < 2:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    pointed = np.isfinite(log.ra_deg) & np.isfinite(log.dec_deg)
    _, number = np.unique(log.band.astype(str), return_inverse=True)
    place = lonlat_to_vector(
        np.where(pointed, log.ra_deg, 0.0), np.where(pointed, log.dec_deg, 0.0)
    )
    # In these units everything that may belong together lies within 1 on every axis.
    points = np.column_stack(
        (
            place / np.radians(_LAST_DIGITS_ARCSEC[0] / 3600.0),
            (log.start_mjd - log.start_mjd[0]) * (SECONDS_PER_DAY / _RESENT_SECONDS),
            number * 3.0,
            _region_means(log) / _REGION_ROUNDING_DEG,
        )
    )
    _, near = cKDTree(points).query(
        points, k=min(_NEIGHBOURS, n), p=np.inf, distance_upper_bound=1.0 + 1e-6
    )
    second = np.repeat(np.arange(n), near.shape[1])
    first = near.ravel().astype(np.int64)
    earlier = first < second  # what is missing has the number n
    return first[earlier], second[earlier]


def _region_means(log: LogTable) -> Floats:
    """Mean of the numbers in each region cell, 0 without any: nearly the same in a copy."""
    numbers = {text: list(map(float, _NUMBER.findall(text))) for text in set(log.region)}
    mean = {text: sum(x) / len(x) if x else 0.0 for text, x in numbers.items()}
    return np.array([mean[text] for text in log.region], dtype=float)


def _same_place(log: LogTable, first: Ints, second: Ints) -> NDArray[np.bool_]:
    """Whether the pointings of pairs agree to 2 arcsec or to the coarser copy's last digit."""
    same = np.ones(first.size, dtype=bool)
    scale = np.cos(np.radians(log.dec_deg[first]))
    for value, width in ((log.ra_deg, scale), (log.dec_deg, 1.0)):
        # Regions alone have no pointing.
        apart = np.abs((value[first] - value[second] + 180.0) % 360.0 - 180.0)
        apart = np.where(np.isfinite(apart), apart, 0.0) * 3600.0
        digit = 0.0
        if first.size >= _ENOUGH_PAIRS:
            digit = max(_last_digit_arcsec(value[side]) for side in (first, second))
        same &= (apart * width <= _RESENT_ARCSEC) | (apart <= digit * (1 + 1e-6))
    for pair in np.flatnonzero(same):
        same[pair] = _same_region(log.region[first[pair]], log.region[second[pair]])
    return same


def _same_region(one: str, other: str) -> bool:
    """Whether two region cells say the same but for the rounding of their numbers."""
    if one == other:
        return True
    if _NUMBER.sub("", one).casefold() != _NUMBER.sub("", other).casefold():
        return False
    apart = [float(a) - float(b) for a, b in zip(_NUMBER.findall(one), _NUMBER.findall(other))]
    return max(map(abs, apart)) <= _REGION_ROUNDING_DEG


def _last_digit_arcsec(value_deg: Floats) -> float:
    """Coarsest usual step that every coordinate is a multiple of; 0 if finer than 3.6 arcsec."""
    known = value_deg[np.isfinite(value_deg)] * 3600.0
    for step in _LAST_DIGITS_ARCSEC:
        if bool((np.abs(known - step * np.round(known / step)) < 1e-3).all()):
            return step
    return 0.0


def _resent(name: str, log: LogTable, again: Ints) -> Finding:
    rows = tuple(log.row[again].tolist())
    return Finding(
        "rows-resent",
        "caution",
        name,
        rows,
        f"{counted(len(rows), 'row repeats', 'rows repeat')} an earlier row but for rounding, with "
        f"the same band, place and start to the last digit: {row_words(rows)}. One telescope "
        "cannot begin the same exposure twice.",
        "They are tallied as logged: covered area and probability hardly change, but exposures, "
        "visits, revisits and stacked depth count them twice.",
        "See whether the log was sent twice, and take one of the two copies out.",
    )


# --- exposures at the same time ---------------------------------------------------------


def overlaps(name: str, log: LogTable) -> list[Finding]:
    """Report exposures of a telescope's log that begin before the one before has ended."""
    once = np.flatnonzero(~resent_rows(log))
    if once.size < 2:
        return []
    slack = time_resolution_s(log.start_mjd) + _START_JITTER_S
    once = once[np.argsort(log.start_mjd[once], kind="stable")]
    together, kept = _detectors(log, once, slack)
    first, second = kept[:-1], kept[1:]
    excess = _excess_s(log, kept)
    other_band = (log.band[first] != log.band[second]).astype(bool)
    channels = _channels(log, first, second, excess, slack) & other_band
    if channels.any():
        clash = list(zip(*(x[other_band & ~channels & (excess > slack)] for x in (first, second))))
        sequences = [kept[log.band[kept] == band] for band in set(log.band[kept])]
    else:
        clash, sequences = [], [kept]
    for mine in sequences:
        clash += [(mine[k], mine[k + 1]) for k in _crowded(_excess_s(log, mine), slack)]
    at_once = channels & (excess > slack)
    together |= set(first[at_once]) | set(second[at_once])
    found = [_simultaneous(name, log, sorted(together))] if together else []
    return found + ([_overlapping(name, log, clash, once.size)] if clash else [])


def _excess_s(log: LogTable, order: Ints) -> Floats:
    """By how many seconds each exposure outlasts the gap to the next, shape (n - 1,)."""
    gap = np.diff(log.start_mjd[order]) * SECONDS_PER_DAY
    return _DURATION_SHARE * log.duration_s[order[:-1]] - gap


def _channels(
    log: LogTable, first: Ints, second: Ints, excess: Floats, slack: float
) -> NDArray[np.bool_]:
    """Pairs of one field that a camera of several channels may have exposed at once.

    With one start that is plain; otherwise it must happen often enough to be no slip.
    """
    gap = (log.start_mjd[second] - log.start_mjd[first]) * SECONDS_PER_DAY
    same_start = (gap < _RESENT_SECONDS) & (log.duration_s[first] > gap)
    both = fields_near(log, first, second, _SAME_FIELD_DEG) & ((excess > slack) | same_start)
    other_band = (log.band[first] != log.band[second]).astype(bool)
    often = int((both & other_band).sum()) >= max(_OFTEN_PAIRS, _OFTEN_SHARE * first.size)
    return np.asarray(both & (same_start | often))


def _detectors(log: LogTable, order: Ints, slack: float) -> tuple[set[int], Ints]:
    """Find rows that are the detectors of one exposure; keep the longest row of each.

    Where most rows share band and very start with another, that is how the log is written.
    """
    key = np.array([f"{log.start_mjd[i]!r} {log.band[i]}" for i in order])
    _, group, size = np.unique(key, return_inverse=True, return_counts=True)
    shared = (size[group] > 1) & (log.duration_s[order] > slack)
    coarse = size.size >= _ENOUGH_STARTS and _step_s(log.start_mjd, _COARSE_STEPS_S) > 0
    if coarse or 2 * int(shared.sum()) <= order.size:
        return set(), order
    longest = np.lexsort((-log.duration_s[order], group))
    kept = np.sort(longest[np.unique(group[longest], return_index=True)[1]])
    return set(order[shared]), order[kept]


def _crowded(excess_s: Floats, slack: float) -> list[int]:
    """Places in time order whose exposure cannot have ended before the next began.

    Rounding may move a start by ``slack`` but adds up to no more over many exposures,
    so a run of them that together outlasts its time by more is too crowded as well.
    """
    found: list[int] = []
    run = 0.0
    members: list[int] = []
    for place, excess in enumerate(excess_s.tolist()):
        run += excess
        if excess > slack:
            found.append(place)
            run, members = 0.0, []
        elif run <= 0:
            run, members = 0.0, []
        else:
            members += [place] if excess > 0 else []
            if run > slack:
                found += members
                run, members = 0.0, []
    return found


def fields_near(log: LogTable, first: Ints, second: Ints, degrees: float) -> NDArray[np.bool_]:
    """Whether the fields of pairs of rows are one as far as the rows tell.

    Parameters
    ----------
    log : LogTable
        The log.
    first, second : int64 arrays, shape (n,)
        Places of the accepted rows.
    degrees : float
        How far apart pointings may be; regions without a pointing must be the same.

    Returns
    -------
    bool array, shape (n,)
    """
    one = lonlat_to_vector(log.ra_deg[first], log.dec_deg[first])
    other = lonlat_to_vector(log.ra_deg[second], log.dec_deg[second])
    chord = np.linalg.norm(one - other, axis=1)
    same_region = (log.region[first] == log.region[second]).astype(bool)
    near = chord <= 2 * np.sin(np.radians(degrees / 2))
    return np.asarray(np.where(np.isfinite(chord), near, same_region))


def _simultaneous(name: str, log: LogTable, together: list[int]) -> Finding:
    rows = tuple(sorted(log.row[together].tolist()))
    return Finding(
        "exposures-simultaneous",
        "note",
        name,
        rows,
        f"{counted(len(rows), 'row is', 'rows are')} of exposures taken at once, in several bands "
        f"or with several detectors: {row_words(rows)}.",
        "Each row counts as an exposure of its own.",
        "Nothing needs doing if the camera has several channels or detectors.",
    )


def _overlapping(name: str, log: LogTable, clash: list[tuple[int, int]], exposures: int) -> Finding:
    ends = sorted({int(first) for first, _ in clash})
    rows = tuple(sorted({int(log.row[i]) for pair in clash for i in pair}))
    first, second = max(
        clash,
        key=lambda p: (
            log.duration_s[p[0]] - (log.start_mjd[p[1]] - log.start_mjd[p[0]]) * SECONDS_PER_DAY
        ),
    )
    gap = (log.start_mjd[second] - log.start_mjd[first]) * SECONDS_PER_DAY
    often = 2 * len(ends) > exposures
    why = (
        "That is so for most of the log, as if it held several cameras, or exposure times "
        "of whole sequences."
        if often
        else "One telescope cannot do that."
    )
    return Finding(
        "exposures-overlap",
        "caution" if often else "error",
        name,
        rows,
        f"{counted(len(ends), 'exposure still runs', 'exposures still run')} when the next begins "
        f"({row_words(rows)}): row {log.row[first]} lasts {log.duration_s[first]:g} s, row "
        f"{log.row[second]} begins {gap:.0f} s after it. {why}",
        "The numbers are as logged.",
        "Check starts and exposure times of these rows, and whether rows of another telescope "
        "or a second copy came into the log.",
    )


# --- what became of the rows ------------------------------------------------------------


def reconciliation_findings(campaign: LoadedCampaign) -> list[Finding]:
    """Report what became of every row: read = used + set aside, and why aside."""
    found = []
    for telescope in campaign.telescopes:
        log = telescope.log
        if log.fault:
            found.append(_unreadable_log(telescope.name, log))
            continue
        if log.read != len(log) + len(log.set_aside):
            found.append(_lost_rows(telescope.name, log))
        if log.set_aside:
            found.append(_reasons(telescope.name, log))
        faults = [x for x in log.set_aside if x.is_fault]
        if faults:
            found.append(_faulty_rows(telescope.name, faults))
        if len(log) == 0:
            found.append(_nothing_used(telescope.name, log))
    return found


def _unreadable_log(name: str, log: LogTable) -> Finding:
    return Finding(
        "log-unreadable",
        "error",
        name,
        (),
        f"The log cannot be read: {log.fault}",
        f"{name} counts with no exposure at all.",
        "Mend the log or leave the telescope out; until then every number lacks its share.",
    )


def _lost_rows(name: str, log: LogTable) -> Finding:
    return Finding(
        "rows-do-not-add-up",
        "error",
        name,
        (),
        f"{counted(log.read, 'row was', 'rows were')} read from {log.file}, but {len(log):,} used "
        f"and {len(log.set_aside):,} set aside make {len(log) + len(log.set_aside):,}.",
        "The numbers are those of the rows used.",
        "Do not use the numbers; report this as a fault of the software, with the log.",
    )


def _by_reason(log: LogTable) -> str:
    """Reasons with their counts, the most frequent first."""
    reasons = Counter(x.reason for x in log.set_aside)
    return ", ".join(f"{n:,} {reason}" for reason, n in reasons.most_common())


def _reasons(name: str, log: LogTable) -> Finding:
    return Finding(
        "rows-set-aside",
        "note",
        name,
        _rows(log.set_aside),
        f"Of {counted(log.read, 'row', 'rows')} read, {len(log):,} are used and "
        f"{len(log.set_aside):,} set aside: {_by_reason(log)}.",
        "Rows set aside do not count.",
        "See the list of rows set aside; each has its reason.",
    )


def _faulty_rows(name: str, faults: Sequence[SetAside]) -> Finding:
    rows = _rows(faults)
    return Finding(
        "rows-unreadable",
        "caution",
        name,
        rows,
        f"{counted(len(rows), 'row has', 'rows have')} a value that is missing or cannot be read: "
        f"{row_words(rows)}. Row {faults[0].row}: {faults[0].detail}",
        "These rows are set aside; their exposures do not count.",
        "Correct the rows, or take them out of the log if these exposures did not happen.",
    )


def _nothing_used(name: str, log: LogTable) -> Finding:
    why = f"of {log.read:,} read, {_by_reason(log)}" if log.set_aside else "it holds none"
    return Finding(
        "log-without-exposures",
        "error",
        name,
        _rows(log.set_aside),
        f"No row of {log.file} counts: {why}.",
        f"{name} adds nothing to any number.",
        "Check the event's time, the accepted values and the reasons of the rows; leave the "
        "telescope out if it took nothing.",
    )


def _are_set_aside(rows: Sequence[int]) -> str:
    return f"{row_words(rows)} {'is' if len(rows) == 1 else 'are'} set aside"


def _rows(aside: Sequence[SetAside]) -> tuple[int, ...]:
    return tuple(sorted(x.row for x in aside))
