"""The circular: plain 7-bit text of at most 72 columns that can be sent as it stands."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Literal

from skytally.circular_tables import exposure_tables, part_of
from skytally.circular_text import WIDTH, bullets, paragraph, worded
from skytally.exclusion import AbsoluteLimit
from skytally.findings import CODES, Finding
from skytally.limits import SourceRow
from skytally.one_telescope import only_telescope
from skytally.results import MapInfo, Results, SourceInfo, TelescopeInfo
from skytally.tally import TallyRow
from skytally.times import hours_since, iso_to_mjd
from skytally.wording import (
    MISSING,
    NBSP,
    NO_DISTANCE,
    area_text,
    count,
    decimals_for,
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
    utc_text,
    version_text,
)

__all__ = ["WIDTH", "Form", "render_circular"]

# Telescopes or errors that a sentence names one by one; of more, the number is given.
_NAMED = 8

_CAUTION = (
    "Covered means that an exposure included the position, not that a source there would have "
    "been found. A non-detection constrains a source only as far as the model of it, the "
    "efficiency of the search and the map are right."
)


Form = Literal["long", "short"]


def render_circular(results: Results, form: Form = "long", telescope: str | None = None) -> str:
    """Return the circular for a campaign; every line ends with a newline.

    Parameters
    ----------
    results : Results
        What to tell.
    form : {"long", "short"}
        Everything, or the answer with what it must be read with.
    telescope : str, optional
        One telescope's part alone, and what it is of the whole; all if left out.

    Raises
    ------
    UsageError
        If there is no telescope of that name.
    """
    told = results if telescope is None else only_telescope(results, telescope)
    parts = _long(told, results) if form == "long" else _short(told, results)
    blocks = [
        paragraph(_title(told, telescope)),
        *_signed(results),
        paragraph(_answer(told, telescope)),
        *_errors(told),
        *parts,
        paragraph(_CAUTION),
        *_thanks(results),
        paragraph(
            f"Numbers by {results.software}{_fingerprint(results)}; areas and probabilities are "
            "those of the union of all footprints, so that nothing counts twice."
        ),
    ]
    return "\n\n".join("\n".join(block) for block in blocks) + "\n"


def _fingerprint(results: Results) -> str:
    """Name the account that the numbers are from, where they are from one."""
    short = results.identity.fingerprint
    return f" (fingerprint {short})" if short else ""


def _long(told: Results, results: Results) -> Iterator[list[str]]:
    yield from _observations(told)
    yield from _probability(told)
    yield from _together(told, results)
    yield from _depth(told)
    yield from _distance(told)
    yield paragraph(_rows_read(told))
    yield from exposure_tables(told)


def _short(told: Results, results: Results) -> Iterator[list[str]]:
    used = [t for t in told.telescopes if t.exposures]
    if used:
        named = [_in_short(t) for t in used[:_NAMED]]
        if len(used) > _NAMED:
            named.append(count("other telescope", len(used) - _NAMED))
        they = "The exposures are" if told.row().exposures > 1 else "It was taken"
        yield paragraph(f"{_when(told)} {they} by {join_words(named)}.")
    yield from _together(told, results)
    yield paragraph(_rows_read(told))


def _in_short(telescope: TelescopeInfo) -> str:
    bands = f" in {join_words(telescope.bands)}" if telescope.bands else ""
    return f"{telescope.name} ({count('exposure', telescope.exposures)}{bands})"


def _title(results: Results, telescope: str | None) -> str:
    used = [t for t in results.telescopes if t.exposures]
    if not used:
        who = f" by {telescope}" if telescope else ""
        return f"{results.event.name}: no coverage{who}"
    who = telescope or count("telescope", len(used), words=True)
    return f"{results.event.name}: coverage by {who}"


def _signed(results: Results) -> Iterator[list[str]]:
    """Who signs, and where they work; nothing if the campaign does not say."""
    report = results.report
    lines = []
    if report.authors:
        lines += paragraph(join_words([_one_line(name) for name in report.authors]))
    for affiliation in report.affiliations:
        lines += paragraph(_one_line(affiliation), rest="  ")
    if lines:
        yield lines


def _thanks(results: Results) -> Iterator[list[str]]:
    thanks = _one_line(results.report.thanks)
    if thanks:
        yield paragraph(thanks)


def _one_line(text: str) -> str:
    return " ".join(text.split())


def _answer(results: Results, telescope: str | None) -> str:
    if telescope is not None and any(log.fault for log in results.logs):
        return f"The log of {telescope} could not be read, so its exposures are in no number."
    return headline(results, telescope)


def _errors(results: Results) -> Iterator[list[str]]:
    """Say what cannot be right; that a log could not be read is said in the answer."""
    faults = [
        _error(finding, results)
        for finding in results.findings
        if finding.severity == "error" and finding.code != "log-unreadable"
    ]
    if len(faults) == 1:
        yield paragraph(f"The audit found an error {faults[0]}")
    elif faults:
        shown = faults[:_NAMED]
        if len(faults) > _NAMED:
            shown.append(f"and {count('more error', len(faults) - _NAMED)}, listed in the report.")
        yield bullets(f"The audit found {count('error', len(faults), words=True)}:", shown)


def _error(finding: Finding, results: Results) -> str:
    """Say where an error is, what it is and what the tally did, after “an error”."""
    if any(t.name == finding.subject for t in results.telescopes):
        where = f"in the log of {finding.subject}"
    elif any(m.version == finding.subject for m in results.maps):
        where = f"in {version_text(finding.subject)}"
    else:
        where = f"concerning {finding.subject}"
    rows = f" ({count('row', len(finding.rows))})" if finding.rows else ""
    return f"{where}: {CODES.get(finding.code, finding.code)}{rows}. {finding.done}"


def _when(results: Results) -> str:
    """When the first exposure began and the last one ended."""
    first = min(results.exposures, key=lambda e: e.hours)
    began = f"began at {utc_text(first.start)}, {since_event(first.hours)}"
    end = results.row().last_end
    if len(results.exposures) == 1:
        return f"The only exposure {began}, and ended at {utc_text(end)}."
    ended = hours_since(iso_to_mjd(end), results.event.time_mjd) if end else None
    later = "" if ended is None else f", {hours_text(ended)} after it"
    if ended is not None and ended < 0:
        later = f", {since_event(ended)}"
    return f"The first exposure {began}; the last ended at {utc_text(end)}{later}."


def _observations(results: Results) -> Iterator[list[str]]:
    """When the event was, and what each telescope did."""
    event = results.event
    text = f"The time of {event.name} is {utc_text(event.time, seconds=True)}."
    yield paragraph(f"{text} {_when(results)}" if results.exposures else text)
    lines = [_telescope(results, t) for t in results.telescopes if t.exposures]
    if lines:
        what = "Instruments, and what each covers" if len(lines) > 1 else "Instrument, and coverage"
        yield bullets(f"{what} of {version_text(results.newest.version)}:", lines)


def _telescope(results: Results, telescope: TelescopeInfo) -> str:
    bands = f" in {join_words(telescope.bands)}" if telescope.bands else ""
    site = f"; site at {telescope.site}" if telescope.site and len(results.telescopes) == 1 else ""
    covered = _of_probability(results, results.row(telescope=telescope.name))
    return (
        f"{telescope.name} ({telescope.camera}{site}): "
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
    yield paragraph(
        f"The {age} map version is {_described(newest)}. "
        f"All footprints together cover {area}, {_in_region(newest, total)}."
    )
    if others:
        versions = "version" if len(others) == 1 else "versions"
        lines = [
            f"{_described(m)}: {_of_probability(results, results.row(m.version))}" for m in others
        ]
        yield bullets(f"On the earlier map {versions} the same exposures cover:", lines)


def _together(told: Results, results: Results) -> Iterator[list[str]]:
    """What one telescope's coverage is of the whole; nothing where all are told of."""
    own, whole = told.row(), results.row()
    others = [t for t in results.telescopes if t.exposures and t not in told.telescopes]
    if not others or not own.exposures or whole.probability <= 0:
        return
    alone = _of_alone(own, told)
    names = (
        join_words([t.name for t in others])
        if len(others) <= _NAMED
        else count("other telescope", len(others))
    )
    everyone = count("telescope", len(others) + 1, words=True)
    yield paragraph(
        f"{alone} With the {'log' if len(others) == 1 else 'logs'} of {names} included, the "
        f"{everyone} cover {_of_probability(results, whole)}."
    )


def _of_alone(own: TallyRow, told: Results) -> str:
    name = told.telescopes[0].name
    if own.probability_unique <= 0:
        return f"None of the probability is covered by {name} alone."
    part = worded(part_of(own.probability_unique, own, told.settings))
    return f"Of the probability, {part} is covered by {name} alone."


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
    return f"{worded(row_probability(row, results.settings))} of the probability"


def _in_region(info: MapInfo, row: TallyRow) -> str:
    if row.area_in_90_deg2 <= 0:
        return f"none of it in the 90{NBSP}% region"
    inside = area_text(row.area_in_90_deg2, row.area_in_90_deg2, row.area_in_90_deg2)
    part = worded(percent(row.area_in_90_deg2 / info.area_90_deg2))
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
        yield paragraph("The logs give no limiting magnitudes.")
        return
    mixed = len({row.extinction for row in known}) > 1
    yield bullets(
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
    if not results.row().exposures:
        return
    if newest.distance_mean_mpc is None:
        yield paragraph(NO_DISTANCE)
        return
    seen = {
        row.source: row
        for row in results.source_rows
        if row.map == newest.version and (row.telescope, row.band, row.night) == (None, None, None)
    }
    for source in results.sources:
        if source.name in seen:
            yield paragraph(_source(source, seen[source.name], results))
    yield from _absolute(results)


def _source(source: SourceInfo, row: SourceRow, results: Results) -> str:
    """One source in a sentence: what it assumes, over what it was detectable, and what was not."""
    brightness, search = source_words(source)
    who = f'A source "{source.name}" with {brightness}' + (f" ({search})," if search else ",")
    on = version_text(results.newest.version)
    if row.probability <= 0:
        return f"{who} would have been detected over none of the probability of {on}."
    text = (
        f"{who} would have been detected over {worded(source_probability(row))} of the "
        f"probability of {on}"
    )
    decimals = decimals_for(50 * (row.probability_high - row.probability_low), most=1)
    lost = []
    if row.probability_beyond > 0:
        part = worded(percent(row.probability_beyond, decimals))
        lost.append(f"{part} was covered but lies beyond reach or was missed")
    if row.probability_without_distance > 0:
        part = worded(percent(row.probability_without_distance, decimals))
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
    yield bullets(
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
    """Say whose logs are included, and the sum of what was read, used and set aside."""
    kept = [log.telescope for log in results.logs if not log.fault]
    if not kept:
        return "No log is included."
    whose = join_words(kept) if len(kept) <= _NAMED else count("telescope", len(kept))
    included = (
        f"{'The log' if len(kept) == 1 else 'The logs'} of {whose} "
        f"{'is' if len(kept) == 1 else 'are'} included."
    )
    return f"{included} {_sum_of_rows(results, 'It' if len(kept) == 1 else 'They')}"


def _sum_of_rows(results: Results, they: str) -> str:
    hold = "holds" if they == "It" else "hold"
    read = sum(log.read for log in results.logs)
    aside = sum(log.set_aside for log in results.logs)
    if read == 0:
        return f"{they} {hold} no rows."
    if aside == 0:
        return f"{they} {hold} {count('row', read)}; none was set aside."
    reasons: dict[str, int] = {}
    for log in results.logs:
        for reason, number in log.reasons:
            reasons[reason] = reasons.get(reason, 0) + number
    why = join_words([f"{number_text(number)} {reason}" for reason, number in reasons.items()])
    return (
        f"{they} {hold} {count('row', read)}: {number_text(read - aside)} used, "
        f"{number_text(aside)} set aside ({why})."
    )
