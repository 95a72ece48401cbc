"""Findings on when exposures were taken: overlaps, durations, dates, and clocks that are wrong."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import date

import numpy as np
from numpy.typing import NDArray

from skytally.audit_rows import counted, fields_near, overlaps, row_words
from skytally.campaign_data import LoadedCampaign, Site, Telescope
from skytally.findings import Finding, Severity
from skytally.observations import LogTable
from skytally.pointings import pointings_of
from skytally.times import mjd_to_iso
from skytally.visibility import visibility

__all__ = ["time_findings"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_AS_LOGGED = "The numbers are as logged."

_LONG_EXPOSURE_S = 7200.0
# A pause longer than this ends a campaign.
_CAMPAIGN_PAUSE_DAYS = 30.0
# After the event a campaign lasts at least this long, though nobody else observed.
_CAMPAIGN_DAYS = 10.0
# The times of files move with the time zone of the machine that packed them.
_FILE_DATE_SURE_DAYS = 1.0
_FILE_DATE_SLACK_DAYS = 10.0 / 1440.0
_SAME_ROWS, _SAME_HOURS = 5, 3
# Pointings this far apart are not of one exposure of a camera.
_ONE_CAMERA_DEG = 10.0
# What an observer calls dark, and what nobody calls so (nautical and civil twilight).
_DARK_SUN_DEG, _BRIGHT_SUN_DEG = -12.0, -6.0
_SURELY_BELOW_DEG = -2.0
# Clocks on Earth are ahead of UTC by up to 14 h and behind by up to 12.
_SHIFTS_HOURS = tuple(h for h in range(-14, 13) if h)
_NEARLY_ALL = 0.95
_MANY = 0.2
_FEWEST = 3
# So many rows are enough to try all shifts on.
_TRIED_ROWS = 400
_MJD_ZERO = date(1858, 11, 17).toordinal()


def time_findings(campaign: LoadedCampaign) -> list[Finding]:
    """Report what cannot be, or is odd, about the times and durations of each log."""
    found: list[Finding] = []
    for telescope in campaign.telescopes:
        log, name, site = _placed(telescope), telescope.name, telescope.site
        swapped = _swapped_dates(campaign, name, log, site)
        identical = _identical_starts(name, log)
        found += swapped or _outside_campaign(campaign, name, log)
        found += [] if swapped or site is None else _shifted_clock(campaign, name, log, site)
        found += identical or [*_same_minute(name, log), *overlaps(name, log)]
        found += _durations(name, log)
        found += _after_file_date(campaign, name, log)
    return found


def _placed(telescope: Telescope) -> LogTable:
    """Return a telescope's log, with the centres of regions where it gives no pointing."""
    log = telescope.log
    pointed = np.isfinite(log.ra_deg)
    if pointed.all():
        return log
    centre = pointings_of(telescope)
    return replace(
        log,
        ra_deg=np.where(pointed, log.ra_deg, centre.ra_deg),
        dec_deg=np.where(pointed, log.dec_deg, centre.dec_deg),
    )


# --- durations, odd and identical times ------------------------------------------------------


def _durations(name: str, log: LogTable) -> list[Finding]:
    found = []
    none, long = log.duration_s == 0, log.duration_s > _LONG_EXPOSURE_S
    if none.any():
        rows = _rows(log, none)
        found.append(
            Finding(
                "duration-zero",
                "caution",
                name,
                rows,
                f"{len(rows):,} of {counted(len(log), 'exposure', 'exposures')} "
                f"{'has' if len(rows) == 1 else 'have'} no exposure time, or one of 0 s "
                f"({row_words(rows)}).",
                "They count, as 0 s long: the timeline ends them where they began.",
                "Fill the exposure times in, give the campaign a default duration, or take out "
                "what was never exposed.",
            )
        )
    if long.any():
        rows = _rows(log, long)
        found.append(
            Finding(
                "duration-long",
                "caution",
                name,
                rows,
                f"{counted(len(rows), 'exposure lasts', 'exposures last')} more than 2 h, up to "
                f"{log.duration_s.max():,.0f} s ({row_words(rows)}).",
                _AS_LOGGED,
                "See that the column of exposure times is in seconds, or state its unit.",
            )
        )
    return found


def _identical_starts(name: str, log: LogTable) -> list[Finding]:
    if len(log) < _SAME_ROWS or np.unique(log.start_mjd).size > 1:
        return []
    places = np.flatnonzero(np.isfinite(log.ra_deg))
    far = ~fields_near(log, np.repeat(places[:1], places.size), places, _ONE_CAMERA_DEG)
    return [
        Finding(
            "start-identical",
            "error" if far.any() else "caution",
            name,
            tuple(log.row.tolist()),
            f"All {len(log):,} exposures begin at {_utc(log.start_mjd[0])}"
            + (", in fields too far apart for one camera." if far.any() else "."),
            _AS_LOGGED,
            "See that the column mapped to start holds the start of each exposure.",
        )
    ]


def _same_minute(name: str, log: LogTable) -> list[Finding]:
    """Report starts in many hours that all fall on the same minute."""
    minutes = np.floor(log.start_mjd * 1440.0 + 1e-4).astype(np.int64)
    hours = np.unique(minutes // 60).size
    if len(log) < _SAME_ROWS or hours < _SAME_HOURS or np.unique(minutes % 60).size > 1:
        return []
    return [
        Finding(
            "start-same-minute",
            "caution",
            name,
            tuple(log.row.tolist()),
            f"All {len(log):,} exposures, in {hours:,} different hours, begin "
            f"{counted(int(minutes[0] % 60), 'minute', 'minutes')} past the hour.",
            _AS_LOGGED,
            "See whether the minutes were lost on the way into the log.",
        )
    ]


# --- dates -----------------------------------------------------------------------------------


def _outside_campaign(campaign: LoadedCampaign, name: str, log: LogTable) -> list[Finding]:
    event = campaign.event_mjd
    found = []
    early = log.start_mjd < event
    if early.any():
        rows = _rows(log, early)
        found.append(
            Finding(
                "start-before-event",
                "error",
                name,
                rows,
                f"{counted(len(rows), 'exposure begins', 'exposures begin')} before the event, the "
                f"earliest at {_utc(log.start_mjd.min())} ({row_words(rows)}).",
                "They count like the others.",
                "Correct the times, or take these exposures out: they cannot show the event.",
            )
        )
    found += _long_before(event, name, log)
    late = log.start_mjd > _last_day(campaign, _starts(campaign))
    if late.any():
        rows = _rows(log, late)
        found.append(
            Finding(
                "start-long-after",
                "caution",
                name,
                rows,
                f"{counted(len(rows), 'exposure begins', 'exposures begin')} more than "
                f"{_CAMPAIGN_PAUSE_DAYS:.0f} days after all others of the campaign, the first at "
                f"{_utc(log.start_mjd[late].min())} ({row_words(rows)}).",
                _AS_LOGGED,
                "Check the dates of these rows.",
            )
        )
    return found


def _long_before(event: float, name: str, log: LogTable) -> list[Finding]:
    """Report rows long before the event among rows after it: reference stands apart."""
    past = log.before_event
    if past is None or len(log) == 0:
        return []
    among = (past.row > log.row.min()) & (past.row < log.row.max())
    odd = among & (past.start_mjd < event - _CAMPAIGN_PAUSE_DAYS)
    if not odd.any():
        return []
    rows = _rows(past, odd)
    return [
        Finding(
            "start-long-before",
            "caution",
            name,
            rows,
            f"{counted(len(rows), 'row stands', 'rows stand')} among exposures of the campaign, "
            f"but with a start more than {_CAMPAIGN_PAUSE_DAYS:.0f} days before the event: "
            f"{row_words(rows)}. Row {rows[0]} says {_utc(past.start_mjd[odd][0])}.",
            "They are set aside as taken before the event.",
            "Check year and month of these rows.",
        )
    ]


def _starts(campaign: LoadedCampaign, but: str = "") -> Floats:
    """Starts of all telescopes' exposures, except those of one."""
    return np.concatenate(
        [np.empty(0), *(t.log.start_mjd for t in campaign.telescopes if t.name != but)]
    )


def _last_day(campaign: LoadedCampaign, starts: Floats) -> float:
    """Return when the campaign ended: before the first pause of more than 30 days."""
    issued = [m.issued_mjd for m in campaign.maps if m.issued_mjd is not None]
    moments = np.sort(np.concatenate((starts, issued)))
    last = campaign.event_mjd
    for moment in moments[moments > last].tolist():
        if moment - last > _CAMPAIGN_PAUSE_DAYS:
            break
        last = moment
    return last


def _after_file_date(campaign: LoadedCampaign, name: str, log: LogTable) -> list[Finding]:
    """Report starts after the log was written; a file older than the event says nothing."""
    written = log.modified_mjd
    if written is None or written < campaign.event_mjd:
        return []
    future = log.start_mjd > written + _FILE_DATE_SLACK_DAYS
    if not future.any():
        return []
    rows = _rows(log, future)
    beyond = float(log.start_mjd.max()) - written
    return [
        Finding(
            "start-after-file",
            "error" if beyond > _FILE_DATE_SURE_DAYS else "caution",
            name,
            rows,
            f"{counted(len(rows), 'exposure begins', 'exposures begin')} after the log was last "
            f"written, {_utc(written)}: {row_words(rows)}, up to {24 * beyond:.1f} h after.",
            _AS_LOGGED,
            "See whether these exposures were only planned, or the times are not UTC; the date "
            "of the file may be wrong too.",
        )
    ]


# --- clocks that are wrong -------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Seen:
    """All rows of a log with a time, those set aside as before the event among them."""

    row: Ints
    ra_deg: Floats
    dec_deg: Floats
    start_mjd: Floats

    @classmethod
    def of(cls, log: LogTable) -> _Seen:
        tables = [log] if log.before_event is None else [log, log.before_event]
        row, ra, dec, start = (
            np.concatenate([getattr(table, column) for table in tables])
            for column in ("row", "ra_deg", "dec_deg", "start_mjd")
        )
        order = np.argsort(row, kind="stable")
        return cls(row[order], ra[order], dec[order], start[order])

    def sky(self, site: Site, start_mjd: Floats, rows: Ints | slice) -> tuple[Bools, Bools]:
        """Whether each row could be taken at a time, and whether it certainly could not.

        Where the pointing is not known only the Sun tells.
        """
        ra, dec = self.ra_deg[rows], self.dec_deg[rows]
        known = np.isfinite(ra) & np.isfinite(dec)
        seen = visibility(
            np.where(known, ra, 0.0),
            np.where(known, dec, 0.0),
            start_mjd,
            site.longitude_deg,
            site.latitude_deg,
            site.height_m,
        )
        possible = (seen.sun_altitude_deg < _DARK_SUN_DEG) & ~(known & (seen.altitude_deg < 0))
        below = known & (seen.altitude_deg < _SURELY_BELOW_DEG)
        return possible, (seen.sun_altitude_deg > _BRIGHT_SUN_DEG) | below

    def fit(self, site: Site, event_mjd: float, shifts_h: Sequence[int], rows: Ints) -> Bools:
        """Whether rows could be taken, and after the event, with the clock moved by hours.

        Shape (shifts, rows). Rows that no shift brings past the event are reference and
        need only the sky.
        """
        every = np.tile(rows, len(shifts_h))
        moved = self.start_mjd[every] + np.repeat(shifts_h, rows.size) / 24.0
        reference = self.start_mjd[every] <= event_mjd - _SHIFTS_HOURS[-1] / 24.0
        fit = self.sky(site, moved, every)[0] & ((moved >= event_mjd) | reference)
        return fit.reshape(len(shifts_h), rows.size)


def _shifted_clock(campaign: LoadedCampaign, name: str, log: LogTable, site: Site) -> list[Finding]:
    """Report a log that could only be taken if its clock is whole hours off UTC."""
    seen, event = _Seen.of(log), campaign.event_mjd
    every = np.arange(seen.row.size)
    if every.size < _FEWEST:
        return []
    impossible = int(seen.sky(site, seen.start_mjd, every)[1].sum())
    early = (seen.start_mjd < event) & (seen.start_mjd > event - _SHIFTS_HOURS[-1] / 24.0)
    if impossible > _MANY * every.size:
        logged = (
            f"the Sun was above {_BRIGHT_SUN_DEG:g} deg or the field below the horizon in "
            f"{impossible:,} of {counted(every.size, 'row', 'rows')}"
        )
    elif early.mean() >= _NEARLY_ALL:
        falls = counted(int(early.sum()), "row falls", "rows fall")
        logged = f"{falls} in the hours before the event"
    else:
        return []
    some = every[:: -(-every.size // _TRIED_ROWS)]
    shares = seen.fit(site, event, _SHIFTS_HOURS, some).mean(axis=1)
    fits = [hours for hours, share in zip(_SHIFTS_HOURS, shares) if share >= _NEARLY_ALL]
    zone = ((site.longitude_deg + 180.0) % 360.0 - 180.0) / 15.0
    # A clock ahead of UTC is set right by moving it back.
    best = sorted(fits, key=lambda hours: abs(hours + zone))[:1]
    good = int(seen.fit(site, event, best, every).sum()) if best else 0
    if good < _NEARLY_ALL * every.size:
        return []
    shift = best[0]
    fits.remove(shift)
    others = f"; so they are with {', '.join(f'{h:+d}' for h in fits)} h" if fits else ""
    return [
        Finding(
            "clock-shifted",
            "error" if 2 * impossible > every.size else "caution",
            name,
            tuple(seen.row.tolist()),
            f"As logged, {logged}. {abs(shift)} h {'later' if shift > 0 else 'earlier'}, {good:,} "
            f"of {every.size:,} are in the dark (Sun below {_DARK_SUN_DEG:g} deg), above the "
            f"horizon and after the event{others}. Local time at {site.longitude_deg:.1f} deg east "
            f"is about UTC{round(zone):+d}.",
            f"{_AS_LOGGED} No time was moved.",
            "If the log is in local time, give UTC, or the offset with every time "
            "(2031-03-14T21:12:40+01:00). If it is in UTC, check the sign of the site's longitude.",
        )
    ]


def _swapped_dates(
    campaign: LoadedCampaign, name: str, log: LogTable, site: Site | None
) -> list[Finding]:
    """Report dates outside the campaign that lie within it once day and month change places."""
    seen, event = _Seen.of(log), campaign.event_mjd
    end = max(_last_day(campaign, _starts(campaign, but=name)), event + _CAMPAIGN_DAYS)
    moved = _change_over(seen.start_mjd)
    outside = (seen.start_mjd < event) | (seen.start_mjd > end)
    still = (moved < event) | (moved > end)
    lots = int(outside.sum())
    if lots < _FEWEST or still[outside].mean() > 1 - _NEARLY_ALL or still.mean() > 1 - _NEARLY_ALL:
        return []
    severity: Severity = "caution"
    if site is not None:
        chosen = np.flatnonzero(outside)
        as_logged = seen.sky(site, seen.start_mjd[chosen], chosen)[1].mean()
        redated = seen.sky(site, moved[chosen], chosen)[0].mean()
        severity = "error" if as_logged > 0.5 and redated >= _NEARLY_ALL else "caution"
    rows = tuple(seen.row[outside].tolist())
    first = int(np.flatnonzero(outside)[0])
    return [
        Finding(
            "day-month-swapped",
            severity,
            name,
            rows,
            f"{counted(lots, 'row is', 'rows are')} dated outside the campaign ({row_words(rows)}; "
            f"row {rows[0]}: {_utc(seen.start_mjd[first])}), but within it once day and month "
            f"change places ({_utc(moved[first])}).",
            f"{_AS_LOGGED} No date was changed.",
            "If the log writes the day before the month, give dates as year-month-day.",
        )
    ]


def _change_over(mjd: Floats) -> Floats:
    """Times with day and month of their dates exchanged where that gives a date."""
    days, group = np.unique(np.floor(mjd).astype(np.int64), return_inverse=True)
    shift = np.zeros(days.size)
    for place, day in enumerate(days.tolist()):
        when = date.fromordinal(day + _MJD_ZERO)
        if when.day <= 12:
            other = when.replace(month=when.day, day=when.month)
            shift[place] = (other - when).days
    return mjd + shift[group]


def _rows(log: LogTable, chosen: Bools) -> tuple[int, ...]:
    return tuple(log.row[chosen].tolist())


def _utc(mjd: float) -> str:
    """Return a time for a sentence, 2031-03-14 05:21 UTC."""
    return f"{mjd_to_iso(mjd)[:16].replace('T', ' ')} UTC"
