"""The tables of depth, distance and what is ruled out, from the results alone."""

from __future__ import annotations

from skytally.exclusion import AbsoluteLimit, ExclusionCurve, FadingPlane
from skytally.limits import SourceRow
from skytally.report_tables import Cell, Table, capped, columns_of
from skytally.results import MapInfo, Results
from skytally.tally import TallyRow
from skytally.wording import (
    MISSING,
    NBSP,
    bright_magnitude,
    distance_text,
    limit_rows,
    limit_terms,
    newest_curves,
    number_text,
    percent,
    reach_text,
    source_probability,
    version_text,
    volume_text,
)

__all__ = ["limit_tables"]

# Every so many rows and columns of the fading plane are set as a table.
_FADING_ROWS, _FADING_COLUMNS = 4, 2
_WITHOUT = "without a distance"


def limit_tables(results: Results) -> dict[str, Table]:
    """Return the tables of depth and distance by name; without rows where there is nothing."""
    made = (
        _depth(results),
        _distances(results),
        _sources(results),
        _volumes(results),
        _telescope_reach(results),
        _absolute_limits(results),
        _exclusion(results),
        _fading(results),
    )
    return {table.name: capped(table) for table in made}


def _magnitude(value: float | None) -> Cell:
    return Cell(MISSING if value is None else number_text(value, 2))


def _comoving(volume_mpc3: float | None) -> str:
    return "" if volume_mpc3 is None else f"{volume_text(volume_mpc3)} comoving"


def _volume(volume_mpc3: float | None, comoving_mpc3: float | None) -> Cell:
    return Cell(volume_text(volume_mpc3), _comoving(comoving_mpc3))


def _telescope(results: Results, name: str) -> Cell:
    index = [t.name for t in results.telescopes].index(name)
    return Cell(name, telescope=index)


def _depth(results: Results) -> Table:
    rows = [
        row
        for row in results.rows
        if row.map == results.newest.version and row.telescope is not None and row.band is not None
    ]
    corrected = any(row.extinction != "not corrected" for row in rows)
    converted = [
        f"{t.name} from {t.depth_system} at {t.depth_significance:g}{NBSP}σ"
        for t in results.telescopes
        if t.exposures
        and (t.depth_system, t.depth_significance)
        != (results.settings.magnitude_system, results.settings.significance)
    ]
    terms = limit_terms(results.settings, rows)
    note = f"All limits in magnitudes: {terms}."
    if converted:
        note += f" Converted: {'; '.join(converted)}."
    return Table(
        "depth",
        f"Limits ({terms})",
        columns_of(
            "telescope",
            "band",
            "exposures",
            "least",
            "median",
            "deepest",
            f"over 50{NBSP}%",
            f"over 90{NBSP}%",
            f"stacked, over 50{NBSP}%",
            f"stacked, over 90{NBSP}%",
            *(["extinction A"] if corrected else []),
            text=2,
        ),
        tuple(
            (
                _telescope(results, row.telescope or ""),
                Cell(row.band or ""),
                Cell(number_text(row.exposures)),
                _magnitude(row.depth_min),
                _magnitude(row.depth_median),
                _magnitude(row.depth_max),
                _magnitude(row.depth_over_50),
                _magnitude(row.depth_over_90),
                _magnitude(row.depth_stacked_over_50),
                _magnitude(row.depth_stacked_over_90),
                *([_extinction(row)] if corrected else []),
            )
            for row in rows
        ),
        note=(
            f"{note} Over 50{NBSP}% and 90{NBSP}%: the limit that at least so much of the "
            "probability covered reaches, by the deepest single exposure of each place, and by "
            "the stack of those of one telescope, band and night."
        ),
    )


def _extinction(row: TallyRow) -> Cell:
    if row.depth_median is None:
        return Cell(MISSING)
    if row.extinction_median is None:
        return Cell("not corrected")
    part = "for part of them" if row.extinction == "partly corrected" else ""
    return Cell(f"{number_text(row.extinction_median, 2)}{NBSP}mag", part)


def _distances(results: Results) -> Table:
    with_distance = any(m.distance_mean_mpc is not None for m in results.maps)
    return Table(
        "distances",
        "How far each map version places the source",
        columns_of(
            "version",
            "distance",
            f"50{NBSP}% volume (Mpc³)",
            f"90{NBSP}% volume (Mpc³)",
            f"90{NBSP}% volume covered (Mpc³)",
            f"probability {_WITHOUT}",
        ),
        tuple(_distance_cells(results, info) for info in results.maps) if with_distance else (),
        note=(
            "Distance: mean and standard deviation over the whole map. The 50"
            f"{NBSP}% and 90{NBSP}% volumes are the smallest that hold so much of all "
            f"probability. {_volume_note(results)}"
        ),
    )


def _distance_cells(results: Results, info: MapInfo) -> tuple[Cell, ...]:
    if info.distance_mean_mpc is None:
        blank = (Cell(MISSING),) * 4
        return (Cell(info.version), *blank, Cell(percent(1.0)))
    row = results.row(map=info.version)
    covered = row.volume_90_covered_mpc3
    share = ""
    if covered is not None and info.volume_90_mpc3:
        share = f", {percent(covered / info.volume_90_mpc3)} of it"
    without = info.probability_without_distance
    return (
        Cell(info.version),
        Cell(distance_text(info.distance_mean_mpc, info.distance_sd_mpc)),
        _volume(info.volume_50_mpc3, info.volume_50_comoving_mpc3),
        _volume(info.volume_90_mpc3, info.volume_90_comoving_mpc3),
        Cell(
            f"{volume_text(covered)}{share}",
            _comoving(row.volume_90_covered_comoving_mpc3),
        ),
        Cell(MISSING if without is None else percent(without, 2)),
    )


def _volume_note(results: Results) -> str:
    return (
        "Volumes are Ω d³/3 in luminosity distance; the smaller figures are comoving volumes in "
        f"the cosmology {results.settings.cosmology}."
    )


def _newest(results: Results, *, by_telescope: bool = False) -> list[SourceRow]:
    """Return the newest map's rows of every source: of all exposures, or of each telescope."""
    return [
        row
        for row in results.source_rows
        if row.map == results.newest.version
        and row.band is None
        and row.night is None
        and (row.telescope is not None) == by_telescope
    ]


def _reach_cell(row: SourceRow) -> Cell:
    if row.reach_max_mpc is None:
        return Cell("nothing reached")
    if not row.reach_median_mpc:
        return Cell("unseen over half", f"up to {reach_text(row.reach_max_mpc)}")
    low, high = reach_text(row.reach_min_mpc), reach_text(row.reach_max_mpc)
    return Cell(reach_text(row.reach_median_mpc), low if low == high else f"{low} to {high}")


def _detected(row: SourceRow, scale: float) -> Cell:
    text, _, detail = source_probability(row).partition(" (")
    return Cell(text, detail.rstrip(")"), bar=min(row.probability / scale, 1.0) if scale else 0.0)


def _sources(results: Results) -> Table:
    covered = results.row().probability
    without = results.newest.probability_without_distance or 0.0
    rows = [
        (
            Cell(row.source),
            _reach_cell(row),
            _detected(row, 1.0),
            Cell(percent(row.probability_beyond)),
            Cell(percent(row.probability_without_distance, 2)),
            Cell(percent(max(1.0 - covered, 0.0))),
        )
        for row in _newest(results)
    ]
    version = version_text(results.newest.version)
    return Table(
        "sources",
        f"What would have been seen, of all the probability of {version}",
        columns_of(
            "source",
            "reach (Mpc)",
            "detectable",
            "covered, but beyond reach or missed",
            f"covered, {_WITHOUT}",
            "not covered",
        ),
        (*rows, _without_row(without, 6, 2)) if rows else (),
        note=(
            "Reach: the luminosity distance out to which it would have been seen, the median over "
            "the covered probability, and from least to greatest. Detectable, with the bracket "
            "that certainly holds it, and the three columns after it add up to all of the map’s "
            f"probability. What the map holds {_WITHOUT} is counted as not detectable wherever "
            "it lies."
        ),
    )


def _without_row(without: float, columns: int, place: int) -> tuple[Cell, ...]:
    """Return the line of the probability that no distance is known for."""
    blank = [Cell("")] * (columns - 1)
    blank[place - 1] = Cell(percent(without, 2), "of the map")
    return (Cell(f"probability {_WITHOUT}"), *blank)


def _volumes(results: Results) -> Table:
    total = results.newest.volume_90_mpc3
    without = results.newest.probability_without_distance or 0.0

    def part(volume_mpc3: float | None) -> Cell:
        if volume_mpc3 is None or not total:
            return Cell(MISSING)
        return Cell(percent(volume_mpc3 / total))

    rows = [
        (
            Cell(row.source),
            _volume(row.volume_mpc3, row.volume_comoving_mpc3),
            _volume(row.volume_90_covered_mpc3, row.volume_90_covered_comoving_mpc3),
            _volume(row.volume_90_within_reach_mpc3, row.volume_90_within_reach_comoving_mpc3),
            part(row.volume_90_within_reach_mpc3),
        )
        for row in _newest(results)
    ]
    return Table(
        "volumes",
        f"Volume searched for each source, and how much of the 90{NBSP}% volume",
        columns_of(
            "source",
            "within reach (Mpc³)",
            f"90{NBSP}% volume, covered directions (Mpc³)",
            f"90{NBSP}% volume, within reach (Mpc³)",
            f"of the 90{NBSP}% volume",
        ),
        (*rows, _without_row(without, 5, 4)) if rows else (),
        note=_volume_note(results),
    )


def _telescope_reach(results: Results) -> Table:
    found = _newest(results, by_telescope=True)
    scale = max((row.probability for row in found), default=0.0)
    used = [t.name for t in results.telescopes if t.exposures]
    rows = [
        (
            _telescope(results, name),
            Cell(row.source),
            _reach_cell(row),
            _detected(row, scale),
            Cell(percent(row.probability_beyond)),
            Cell(percent(row.probability_without_distance, 2)),
            _volume(row.volume_90_within_reach_mpc3, row.volume_90_within_reach_comoving_mpc3),
        )
        for name in used
        for row in found
        if row.telescope == name
    ]
    return Table(
        "telescope-reach",
        "The same, telescope by telescope",
        columns_of(
            "telescope",
            "source",
            "reach (Mpc)",
            "detectable",
            "covered, but beyond reach or missed",
            f"covered, {_WITHOUT}",
            f"90{NBSP}% volume, within reach (Mpc³)",
            text=2,
        ),
        tuple(rows),
    )


def _absolute_limits(results: Results) -> Table:
    found = [one for one in results.absolute_limits if one.map == results.newest.version]
    without = results.newest.probability_without_distance or 0.0
    far = [f"{reach_text(d)}{NBSP}Mpc" for d in _distances_of(found[0])] if found else [""] * 3
    rows = [
        (
            _telescope(results, one.telescope),
            Cell(one.band),
            _magnitude(one.depth),
            Cell("not corrected" if one.extinction is None else number_text(one.extinction, 2)),
            _magnitude(one.limit_near),
            _magnitude(one.limit_mean),
            _magnitude(one.limit_far),
        )
        for one in found
    ]
    return Table(
        "absolute-limits",
        f"Absolute magnitudes at the map’s distance, from the limits ({_terms(results)})",
        columns_of(
            "telescope",
            "band",
            "median m − A (mag)",
            "extinction A (mag)",
            f"M at {far[0]} (mean − 1 sd)",
            f"M at {far[1]} (mean)",
            f"M at {far[2]} (mean + 1 sd)",
            text=2,
        ),
        (*rows, _without_row(without, 7, 6)) if rows else (),
        note=(
            "M = m − A − 5 log10(d / 10 pc), with the median limit m − A of the exposures and no "
            f"K-correction. What the map holds {_WITHOUT} has no part in the "
            "mean distance."
        ),
    )


def _distances_of(limit: AbsoluteLimit) -> tuple[float, float, float]:
    return limit.near_mpc, limit.mean_mpc, limit.far_mpc


def _terms(results: Results) -> str:
    return limit_terms(results.settings, limit_rows(results))


def _exclusion(results: Results) -> Table:
    curves = newest_curves(results)
    without = results.newest.probability_without_distance or 0.0

    def crossing(curve: ExclusionCurve, magnitude: float | None) -> Cell:
        if magnitude is None:
            return Cell("not reached", f"highest {percent(curve.highest)}")
        return Cell(bright_magnitude(magnitude, 2))

    rows = [
        (
            Cell("all bands" if curve.band is None else curve.band),
            crossing(curve, curve.magnitude_50),
            crossing(curve, curve.magnitude_90),
            Cell(percent(curve.highest), bar=min(curve.highest, 1.0)),
        )
        for curve in curves
    ]
    return Table(
        "exclusion",
        f"Constant sources ruled out over 50{NBSP}% and 90{NBSP}% of all probability",
        columns_of(
            "band",
            f"over 50{NBSP}% (M, mag)",
            f"over 90{NBSP}% (M, mag)",
            "however bright",
        ),
        (*rows, _without_row(without, 4, 3)) if rows else (),
        note=(
            "For a source as bright in every band that counts, without K-correction, seen in one "
            f"exposure that is certain down to its limit ({_terms(results)}). Magnitudes are "
            "rounded to the bright side. However bright: what is covered with a limit and a "
            "distance; nothing beyond it can be ruled out."
        ),
    )


def _fading(results: Results) -> Table:
    planes = [p for p in results.fading_planes if p.map == results.newest.version]
    rows, peaks = _fading_rows(planes[0]) if planes else ((), ())
    return Table(
        "fading",
        "Detectable probability of a fading source (%)",
        columns_of("fade (mag/day)", *(f"M = {number_text(peak, 1)}" for peak in peaks)),
        rows,
        note=(
            "M is the absolute magnitude at the event, in every band. Every row and column of "
            "the plane stands in tally.json."
        ),
    )


def _fading_rows(
    plane: FadingPlane,
) -> tuple[tuple[tuple[Cell, ...], ...], tuple[float, ...]]:
    """Thin the plane out to what fits a page: from the faintest peak to the brightest."""
    columns = range(len(plane.peak) - 1, -1, -_FADING_COLUMNS)
    rows = tuple(
        (
            Cell(f"{plane.fade_per_day[row]:.2g}"),
            *(Cell(percent(plane.probability[row][c], unit=False)) for c in columns),
        )
        for row in range(0, len(plane.fade_per_day), _FADING_ROWS)
    )
    return rows, tuple(plane.peak[c] for c in columns)
