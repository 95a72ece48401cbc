"""A finding: what was noticed about the inputs, what was done, and what to do."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

__all__ = ["CODES", "SEVERITIES", "Finding", "Severity", "gravest_first"]

Severity = Literal["error", "caution", "note"]

# From worst to mildest: the numbers cannot be right; look; good to know.
SEVERITIES: tuple[Severity, ...] = ("error", "caution", "note")

_ROWS_SHOWN = 12

# Every code there is, with what it stands for; a campaign may demote or silence them.
CODES: dict[str, str] = {
    "log-unreadable": "a log that could not be read at all",
    "log-without-exposures": "a log of which no row counts",
    "rows-do-not-add-up": "rows read are not rows used and set aside",
    "rows-set-aside": "rows that do not count",
    "rows-unreadable": "rows that could not be read",
    "rows-repeated": "the same row more than once",
    "rows-repeated-renamed": "the same exposure under several names",
    "rows-resent": "rows that differ from others in rounding alone",
    "exposures-overlap": "one telescope's exposures that overlap in time",
    "exposures-simultaneous": "exposures that start together",
    "duration-zero": "exposures of no duration",
    "duration-long": "exposures of over two hours",
    "start-before-event": "exposures before the event",
    "start-long-before": "exposures long before the event",
    "start-long-after": "exposures long after all others",
    "start-after-file": "exposures later than the log's own date",
    "start-identical": "one start time for everything",
    "start-same-minute": "one clock minute for everything",
    "clock-shifted": "a clock that is wrong by whole hours",
    "day-month-swapped": "day and month exchanged",
    "below-horizon": "pointings below the horizon",
    "high-airmass": "pointings at high airmass",
    "sun-up": "exposures in daylight",
    "twilight": "exposures in nautical twilight",
    "near-moon": "pointings near the Moon",
    "visibility-not-checked": "no site, so no horizon",
    "ra-in-hours": "right ascension in hours where degrees are expected",
    "positions-in-radians": "positions in radians",
    "ra-dec-swapped": "right ascension and declination exchanged",
    "positions-galactic": "Galactic coordinates in equatorial columns",
    "dec-sign-lost": "declinations that have lost their sign",
    "outside-map": "a log wholly outside the map",
    "footprint-vast": "a footprint larger than half the sky",
    "crossed-polygon": "a polygon whose sides cross",
    "ring-reversed": "a polygon that runs the other way round",
    "field-as-circle": "a field known by its diameter alone",
    "camera-of-another-size": "a camera unlike the field of view that the log states",
    "depth-missing": "exposures without a limit",
    "depth-out-of-range": "limits that no telescope reaches",
    "depth-outlier": "limits unlike their neighbours",
    "depth-identical": "the same limit in every row",
    "depth-default": "limits that the campaign gives, not the log",
    "band-spelt-differently": "one band written in several ways",
    "band-without-extinction": "a band without extinction coefficient",
    "map-distance-header": "a map's stated distance unlike its cells'",
    "map-not-normalised": "a map that does not sum to one",
    "map-before-event": "a map issued before the event",
    "map-order": "map versions out of order",
    "map-after-exposures": "a map version that nobody followed",
}


@dataclass(frozen=True)
class Finding:
    """Something that a reader of the numbers must know.

    Attributes
    ----------
    code : str
        Stable name of the kind of finding.
    severity : {"error", "caution", "note"}
        As in `SEVERITIES`.
    subject : str
        The telescope, map version or band concerned.
    rows : tuple of int
        Rows of the log, if any.
    text, done, remedy : str
        What was seen, what the tally did about it, and what to do.
    """

    code: str
    severity: Severity
    subject: str
    rows: tuple[int, ...]
    text: str
    done: str
    remedy: str

    @property
    def where(self) -> str:
        """The first rows in words; empty where no row is concerned."""
        if not self.rows:
            return ""
        shown = ", ".join(map(str, self.rows[:_ROWS_SHOWN]))
        more = len(self.rows) - _ROWS_SHOWN
        tail = f" and {more} more" if more > 0 else ""
        return f"row{'' if len(self.rows) == 1 else 's'} {shown}{tail}"


def gravest_first(findings: Iterable[Finding]) -> list[Finding]:
    """Sort by severity; within one, as given."""
    return sorted(findings, key=lambda finding: SEVERITIES.index(finding.severity))
