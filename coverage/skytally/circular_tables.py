"""The circular's tables: every exposure where they are few, else the sums of each night."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterator

from skytally.circular_text import columns, latin, paragraph
from skytally.results import ExposureInfo, Results, Settings
from skytally.tally import TallyRow
from skytally.times import hours_since, iso_to_mjd
from skytally.wording import (
    MISSING,
    NBSP,
    area_text,
    decimals_for,
    hours_text,
    limit_rows,
    number_text,
    percent,
    row_probability,
    utc_text,
    version_text,
)

__all__ = ["LISTED_EXPOSURES", "exposure_tables", "part_of"]

LISTED_EXPOSURES = 30

_BAND_WIDTH = 10
# Times are written to the millisecond.
_MOMENT_HOURS = 1e-6
_PLURAL = ("Exposure", "Exposures")


def exposure_tables(results: Results) -> Iterator[list[str]]:
    """Every exposure where they are few, the sums of each night where they are many."""
    if len(results.exposures) > LISTED_EXPOSURES:
        yield from _night_table(results)
        return
    corrected = any(row.extinction != "not corrected" for row in limit_rows(results))
    logged = " (limits not corrected for Galactic extinction)" if corrected else ""
    for telescope in results.telescopes:
        mine = [e for e in results.exposures if e.telescope == telescope.name]
        if mine:
            yield [
                *paragraph(f"{_PLURAL[len(mine) > 1]} by {telescope.name}{logged}:"),
                *columns(
                    ("UTC start", "t-t0/h", "Band", "RA/deg", "Dec/deg", "Limit/mag"),
                    [_exposure(e) for e in mine],
                    "<><>>>",
                ),
            ]


def _exposure(e: ExposureInfo) -> tuple[str, ...]:
    band = latin(e.band or MISSING)
    return (
        utc_text(e.start, seconds=True).removesuffix(f"{NBSP}UTC"),
        _hours(e.hours),
        band if len(band) <= _BAND_WIDTH else f"{band[: _BAND_WIDTH - 2]}..",
        MISSING if e.ra_deg is None else number_text(e.ra_deg, 4),
        MISSING if e.dec_deg is None else number_text(e.dec_deg, 4),
        MISSING if e.depth is None else number_text(e.depth, 2),
    )


def _hours(hours: float) -> str:
    return hours_text(hours).removesuffix(f"{NBSP}h")


def _night_table(results: Results) -> Iterator[list[str]]:
    rows = [r for r in results.rows if r.map == results.newest.version and r.night is not None]
    if not rows:
        yield _running_table(results)
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
        *paragraph(f"By night, on {version_text(results.newest.version)}:"),
        *columns(("Night", "Exposures", "Area", "Probability"), cells, "<>>>"),
    ]


def _running_table(results: Results) -> list[str]:
    """What had been covered by the end of each night, for one telescope."""
    total = results.row()
    nights: dict[str, list[ExposureInfo]] = {}
    for exposure in results.exposures:
        nights.setdefault(exposure.night or MISSING, []).append(exposure)
    cells = []
    for night, mine in sorted(nights.items()):
        end = max(hours_since(iso_to_mjd(e.end), results.event.time_mjd) for e in mine)
        area, probability = _reached(results, end)
        cells.append(
            (
                night,
                number_text(len(mine)),
                _hours(min(e.hours for e in mine)),
                _hours(end),
                area_text(area, area, area),
                part_of(probability, total, results.settings),
            )
        )
    head = ("Night", "Exposures", "From/h", "To/h", "Area so far", "Prob. so far")
    return [
        *paragraph(
            f"By night, in hours since the event, on {version_text(results.newest.version)}:"
        ),
        *columns(head, cells, "<>>>>>"),
    ]


def _reached(results: Results, hours: float) -> tuple[float, float]:
    """Return area and probability covered up to a time after the event."""
    for line in results.timelines:
        if line.map == results.newest.version and (line.band, line.night) == (None, None):
            step = bisect_right(line.hours, hours + _MOMENT_HOURS)
            return (line.area_deg2[step - 1], line.probability[step - 1]) if step else (0.0, 0.0)
    return 0.0, 0.0


def part_of(fraction: float, row: TallyRow, settings: Settings) -> str:
    """Return part of a row's probability, to the digits at which the row's own is known."""
    width = row.probability_high - row.probability_low
    estimated = width > settings.bracket_target and row.probability_error > 0
    uncertainty = row.probability_error if estimated else width / 2
    return percent(fraction, decimals_for(100 * uncertainty, most=1))
