"""Faults that get into logs, each planted into a clean one; and which rows are then wrong.

A fault changes what is written of the first telescope and says where. Whether it leaves a
trace (the Sun up, a field below the horizon) is decided by PyPI "ephem", not by the package;
where it leaves none, `Unsuitable` asks for another night.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from datetime import timedelta

import ephem
import numpy as np
from audit_nights import (
    HOUR,
    MINUTE,
    MJD_ZERO,
    SECOND,
    STYLES,
    Instrument,
    Log,
    Scene,
    Sky,
    Unsuitable,
    elsewhere,
    night_log,
)

Plant = Callable[["Work"], "Planted"]


@dataclass
class Work:
    """A campaign about to be written; faults change it."""

    rng: np.random.Generator
    scene: Scene
    log: Log
    other: Log
    telescope: dict[str, str] = field(default_factory=dict)
    options: list[str] = field(default_factory=list)
    extra: str = ""
    edit: Callable[[str], str | bytes] = lambda text: text
    dated: float = 0.0

    def copy(self) -> Work:
        return replace(
            self,
            log=self.log.take(range(len(self.log))),
            telescope=dict(self.telescope),
            options=list(self.options),
        )

    @property
    def sky(self) -> Sky:
        return self.scene.sky

    @property
    def one(self) -> Instrument:
        return self.scene.observer

    def some(self, count: int, among: Sequence[int] | np.ndarray | None = None) -> np.ndarray:
        """Choose rows, neither the first nor the last unless named."""
        rows = np.arange(1, len(self.log) - 1) if among is None else np.asarray(among, int)
        if rows.size < count:
            raise Unsuitable
        return np.sort(self.rng.choice(rows, count, replace=False))

    def impossible(self) -> np.ndarray:
        """Whether each row's Sun was above -5.5 deg or its field below -2.5 deg."""
        return np.array(
            [
                self.sky.sun(t) > -5.5 or self.sky.altitude(ra, dec, t) < -2.5
                for ra, dec, t in zip(self.log.ra, self.log.dec, self.log.start)
            ]
        )


@dataclass(frozen=True)
class Planted:
    """The rows, from 0, that a fault is in, how many of them must be named, and what else.

    ``near`` are rows that the fault also touches, ``says`` checks the finding's text.
    """

    rows: Sequence[int] | np.ndarray
    near: Sequence[int] | np.ndarray = ()
    least: int = 1
    subject: str = ""
    says: Callable[[str], bool] = lambda _: True


# --- positions -------------------------------------------------------------------------------


def _all(work: Work, **more: object) -> Planted:
    """The whole log: most rows must be named."""
    return Planted(np.arange(len(work.log)), least=len(work.log) // 2 + 1, **more)


def _apart(scene: Scene, ra: float, dec: float) -> float:
    """Degrees from the middle of the map."""
    here = np.radians((scene.ra, scene.dec))
    return float(np.degrees(ephem.separation(here, np.radians((ra, dec)))))


def ra_in_hours(work: Work) -> Planted:
    work.log.ra /= 15
    return _all(work)


def sexagesimal_as_degrees(work: Work) -> Planted:
    work.options.append('ra_unit = "deg"')
    return _all(work)


def in_radians(work: Work) -> Planted:
    work.log.ra, work.log.dec = np.radians(work.log.ra), np.radians(work.log.dec)
    return _all(work)


def ra_and_dec_swapped(work: Work) -> Planted:
    work.log.ra, work.log.dec = work.log.dec, work.log.ra
    return _all(work)


def ra_and_dec_swapped_out_of_range(work: Work) -> Planted:
    ra_and_dec_swapped(work)
    return Planted(())


def galactic(work: Work) -> Planted:
    places = zip(np.radians(work.log.ra), np.radians(work.log.dec))
    turned = [ephem.Galactic(ephem.Equatorial(*place)) for place in places]
    work.log.ra, work.log.dec = np.degrees([(x.lon, x.lat) for x in turned]).T
    return _all(work)


def sign_lost(work: Work) -> Planted:
    work.log.dec = np.abs(work.log.dec)
    return _all(work)


def another_event(work: Work) -> Planted:
    scene = elsewhere(work.scene, work.rng)
    work.log = night_log(work.rng, scene, work.one, most=30)
    return _all(work)


def far_from_map(turn: Callable[[float, float], tuple[float, float]]) -> Callable[[Scene], bool]:
    """Suits scenes in which the middle of the map, misread, lies well off the map."""
    return lambda scene: _apart(scene, *turn(scene.ra, scene.dec)) > 25


def sets_as(scene: Scene, ra: float, dec: float) -> bool:
    """Whether a misread place is down at dusk, and up and far from the map in the night after."""
    dusk, dawn = scene.sky.dark(scene.day) or (0.0, 0.0)
    up = [scene.sky.altitude(ra, dec, t) for t in (dusk, dusk + 2 * HOUR, dawn - 2 * HOUR, dawn)]
    return max(up[:2]) < -10 and min(up[2:]) > 10 and _apart(scene, ra, dec) > 25


def galactic_place(ra: float, dec: float) -> tuple[float, float]:
    there = ephem.Galactic(ephem.Equatorial(*np.radians((ra, dec))))
    return float(np.degrees(there.lon)), float(np.degrees(there.lat))


def can_be_swapped(scene: Scene) -> bool:
    """Right ascensions that pass for declinations, and well off the map then."""
    return 15 < scene.ra < 70 and abs(scene.dec) < 50 and _apart(scene, scene.dec, scene.ra) > 25


def placed(low: float, high: float) -> Plant:
    """Some rows point at altitudes between these (degrees)."""

    def plant(work: Work) -> Planted:
        rows = work.some(3)
        for i in rows:
            middle = work.log.start[i] + work.log.duration[i] / 2 * SECOND
            place = work.rng.uniform(low, high), work.rng.uniform(0, 360)
            work.log.ra[i], work.log.dec[i] = work.sky.place(*place, middle)
            if work.sky.moon(work.log.ra[i], work.log.dec[i], middle)[1] < 20:
                raise Unsuitable
        return Planted(rows)

    return plant


def near_moon(work: Work) -> Planted:
    moon = np.array([work.sky.moon_place(t) for t in work.log.start])
    rows = work.some(3, np.flatnonzero((moon[:, 0] > 25) & (moon[:, 0] < 75)))
    for i in rows:
        away = work.rng.uniform(3, 12)
        where = moon[i, 0] + away, moon[i, 1]
        work.log.ra[i], work.log.dec[i] = work.sky.place(*where, work.log.start[i])
    return Planted(rows)


# --- times -----------------------------------------------------------------------------------


def clock(hours: float) -> Plant:
    """Move all times; the finding must name the correction among those that fit."""
    back = -hours

    def says(text: str) -> bool:
        best = re.search(r"(\d+) h (later|earlier)", text)
        named = re.findall(r"([-+]\d+)(?=,| h)", text)
        signed = [int(best[1]) * (1 if best[2] == "later" else -1)] if best else []
        return back % 1 != 0 or back in [*signed, *map(int, named)]

    def plant(work: Work) -> Planted:
        work.log.start += hours * HOUR
        if work.impossible().mean() < 1 / 3:
            raise Unsuitable
        return _all(work, says=says)

    return plant


def an_hour_off(work: Work) -> Planted:
    """A whole night an hour late: only its end shows it."""
    work.log.start += HOUR
    middle = work.log.start + work.log.duration / 2 * SECOND
    sun = np.array([work.sky.sun(t) for t in middle])
    rows = np.flatnonzero(sun > -6)
    if rows.size < 2 or rows.size > 0.15 * len(work.log) or np.abs(sun + 6).min() < 0.1:
        raise Unsuitable
    return Planted(rows)


def _swapped_date(mjd: float) -> float:
    when = MJD_ZERO + timedelta(days=mjd)
    turned = when.replace(month=when.day, day=when.month)
    return mjd + (turned - when).days


def day_and_month(work: Work) -> Planted:
    work.log.start = np.array([_swapped_date(t) for t in work.log.start])
    return _all(work)


def date_turns(later: bool) -> Callable[[Scene], bool]:
    """Suits nights whose date still is one with day and month exchanged, far from the event."""

    def suits(scene: Scene) -> bool:
        days = [MJD_ZERO + timedelta(days=scene.day + i) for i in range(4)]
        if any(x.day > 12 for x in days):
            return False
        moves = [_swapped_date(scene.day + i) - scene.day for i in range(4)]
        return min(moves) > 40 if later else max(moves) < -40

    return suits


def half_a_day_off(work: Work) -> Planted:
    """Some rows with am for pm."""
    rows = work.some(3)
    work.log.start[rows] += 0.5
    if not all(work.sky.sun(t) > 0 for t in work.log.start[rows]):
        raise Unsuitable
    return Planted(rows)


def event_long_before(work: Work) -> None:
    event = work.log.start.min() - 0.8
    work.scene = replace(work.scene, event=event, issued=event + 10 * MINUTE)


def twelve_hour_clock(work: Work) -> Planted:
    """Hours from 13 on written as 1 and so on, without am and pm."""
    rows = np.flatnonzero(work.log.start % 1 >= 13 / 24)
    if not 5 <= rows.size <= 0.8 * len(work.log):
        raise Unsuitable
    work.log.start[rows] -= 0.5
    middle = work.log.start + work.log.duration / 2 * SECOND
    return Planted([i for i in rows if work.sky.sun(middle[i]) > -6])


def twilight(work: Work) -> Planted:
    """Further exposures after the end of the night."""
    _, dawn = work.sky.dark(work.scene.day)
    every = np.arange(dawn, dawn + 2 * HOUR, MINUTE)
    bright = [t for t in every if -11.5 < work.sky.sun(t) < -6.5]
    count = int((bright[-1] - bright[0]) / (work.one.exposure + 30) / SECOND)
    extra = work.log.take([len(work.log) - 1] * min(count, 5))
    for i in range(len(extra)):
        extra.start[i] = bright[0] + i * (work.one.exposure + 30) * SECOND
        extra.exposure[i] = f"flat{i}"
        extra.ra[i], extra.dec[i] = work.sky.place(60, 20 + 30 * i, extra.start[i])
        if work.sky.moon(extra.ra[i], extra.dec[i], extra.start[i])[1] < 20:
            raise Unsuitable
    n = len(work.log)
    work.log = work.log.then(extra)
    work.dated = max(work.dated, bright[-1] + HOUR)
    return Planted(range(n, n + len(extra)))


def moved_days(days: float) -> Plant:
    def plant(work: Work) -> Planted:
        rows = work.some(3)
        work.log.start[rows] += days
        work.dated = max(work.dated, work.log.start.max() + 1)
        return Planted(rows)

    return plant


def a_year_early(work: Work) -> Planted:
    work.log.start -= 365
    return _all(work)


def written_too_soon(work: Work) -> Planted:
    """The log's file is dated two thirds through the log."""
    work.dated = work.log.start[2 * len(work.log) // 3] + work.one.exposure * SECOND
    late = (work.log.start - work.dated) / MINUTE
    if late.max() < 20 or (np.abs(late - 10) < 2).any():
        raise Unsuitable
    return Planted(np.flatnonzero(late > 10))


def planned_nights(work: Work) -> Planted:
    """The file is from the first morning, yet lists the next two nights."""
    work.dated = work.scene.day + 1.5 - work.one.longitude / 360
    rows = np.flatnonzero(work.log.start > work.dated)
    if rows.size < 5 or work.log.start.max() < work.dated + 1.1:
        raise Unsuitable
    return Planted(rows)


def minutes_lost(work: Work) -> Planted:
    hours = np.floor(work.log.start * 24 + 1e-6)
    if np.unique(hours).size < 3 or hours.min() / 24 < work.scene.event:
        raise Unsuitable
    work.log.start = hours / 24
    return _all(work)


def one_start(work: Work) -> Planted:
    work.log.start[:] = work.log.start[len(work.log) // 2]
    return _all(work)


def hundredths_of_days(work: Work) -> Planted:
    work.log.start = np.floor(work.log.start * 100) / 100
    if work.log.start.min() < work.scene.event:
        raise Unsuitable
    return _all(work)


def west_for_east(work: Work) -> Planted:
    """The site's longitude counted the other way in the campaign file."""
    one = work.one
    work.telescope["site"] = (
        f"{{ longitude = {-one.longitude}, latitude = {one.latitude}, height = {one.height} }}"
    )
    there = Sky(replace(one, longitude=-one.longitude))
    middle = work.log.start + work.log.duration / 2 * SECOND
    rows = np.flatnonzero([there.sun(t) > -6 for t in middle])
    if rows.size < 0.5 * len(work.log):
        raise Unsuitable
    return Planted(rows)


# --- rows and exposure times -----------------------------------------------------------------


def repeated(work: Work) -> Planted:
    rows = work.some(5)
    n = len(work.log)
    work.log = work.log.then(work.log.take(rows))
    return Planted(range(n, n + 5))


def repeated_renamed(work: Work) -> Planted:
    planted = repeated(work)
    work.log.exposure[planted.rows] = [f"{9500 + i}" for i in range(5)]
    return planted


def resent(digits: int, seconds: float, renamed: bool) -> Plant:
    """Append the log once more, its positions and times rounded."""

    def plant(work: Work) -> Planted:
        n = len(work.log)
        again = work.log.take(range(n))
        again.ra, again.dec = np.round(again.ra, digits), np.round(again.dec, digits)
        again.start = np.round(again.start / (seconds * SECOND)) * (seconds * SECOND)
        if renamed:
            again.exposure = np.array([f"B{name}" for name in again.exposure], object)
        work.log = work.log.then(again)
        return Planted(range(n, 2 * n))

    return plant


def _followed(work: Work, gap: float) -> np.ndarray:
    """Rows whose next begins within so many exposure times."""
    return np.flatnonzero(np.diff(work.log.start) < gap * work.one.exposure * SECOND)


def too_long(work: Work) -> Planted:
    rows = work.some(2, _followed(work, 1.6))
    work.log.duration[rows] *= 4
    return Planted(rows, near=rows + 1)


def start_of_neighbour(work: Work) -> Planted:
    far = [
        i + 1
        for i in _followed(work, 1.6)
        if abs(work.log.dec[i + 1] - work.log.dec[i]) > 1.2 and work.log.depth[i] > 0
    ]
    rows = work.some(1, far)
    work.log.start[rows] = work.log.start[rows - 1]
    return Planted(rows, near=rows - 1)


def rows_of_another_telescope(work: Work) -> Planted:
    n, more = len(work.log), len(work.other)
    late = work.other.start > work.scene.event
    work.log = work.log.then(work.other.take(np.flatnonzero(late)))
    middle = work.log.start + work.log.duration / 2 * SECOND
    day = [i for i in range(n, len(work.log)) if work.sky.sun(middle[i]) > -6]
    if len(day) < 0.5 * more:
        raise Unsuitable
    work.dated = max(work.dated, work.log.start.max() + 0.1)
    return Planted(day)


def two_channels(work: Work) -> Planted:
    """Each exposure in two rows, one for each band of a camera with two channels."""
    work.log = work.log.take(np.repeat(np.arange(len(work.log)), 2))
    work.log.band[0::2], work.log.band[1::2] = "g", "r"
    work.log.depth[1::2] -= 0.3
    work.log.exposure = np.array([f"{i:05d}" for i in range(len(work.log))], object)
    return _all(work)


def lasting(seconds: float, count: int = 3) -> Plant:
    def plant(work: Work) -> Planted:
        rows = work.some(count)
        work.log.duration[rows] = seconds
        return Planted(rows)

    return plant


def in_milliseconds(work: Work) -> Planted:
    work.log.duration *= 1000
    return _all(work)


# --- limits and bands ------------------------------------------------------------------------


def limits(change: Callable[[np.ndarray], np.ndarray], count: int = 3) -> Plant:
    def plant(work: Work) -> Planted:
        rows = work.some(count, np.flatnonzero(np.isfinite(work.log.depth)))
        work.log.depth[rows] = change(work.log.depth[rows])
        return Planted(rows)

    return plant


def hardly_any_limit(work: Work) -> Planted:
    rows = work.some(int(0.7 * len(work.log)))
    work.log.depth[rows] = np.nan
    return Planted(rows, near=np.flatnonzero(np.isnan(work.log.depth)))


def limits_as_fluxes(work: Work) -> Planted:
    """Microjanskys where magnitudes belong: m_AB = 23.9 - 2.5 log10 (definition)."""
    work.log.depth = 10 ** (0.4 * (23.9 - work.log.depth))
    rows = np.flatnonzero(work.log.depth > 30)
    if rows.size < 0.5 * len(work.log):
        raise Unsuitable
    return Planted(rows)


def nominal_limits(work: Work) -> Planted:
    for band in set(work.log.band):
        work.log.depth[work.log.band == band] = work.one.depth
    return _all(work)


def with_default_depth(work: Work) -> None:
    work.telescope["defaults"] = "{ depth = 18.5 }"


def renamed_band(old: str, new: str, share: float = 0.5) -> Plant:
    def plant(work: Work) -> Planted:
        rows = np.flatnonzero(work.log.band == old)
        rows = work.some(int(np.ceil(share * rows.size)), rows) if rows.size else rows
        if not rows.size:
            raise Unsuitable
        work.log.band[rows] = new
        every = Counter([*work.log.band, *work.other.band[work.other.start > work.scene.event]])
        return Planted((), subject=max((old, new), key=lambda band: (every[band], band)))

    return plant


def with_dust(work: Work) -> None:
    work.extra = '\n[extinction]\nmap = "../dust.fits"\n'


def band_of_no_system(work: Work) -> Planted:
    work.log.band[work.some(4)] = "clear"
    return Planted((), subject="clear")


# --- regions and cameras ---------------------------------------------------------------------


def _square(ra: float, dec: float, half: float, order: Sequence[int] = (0, 1, 2, 3)) -> str:
    width = half / np.cos(np.radians(dec))
    corners = [(-1, -1), (1, -1), (1, 1), (-1, 1)]
    places = [((ra + corners[i][0] * width) % 360, dec + corners[i][1] * half) for i in order]
    return "POLYGON ICRS " + " ".join(f"{lon:.5f} {lat:.5f}" for lon, lat in places)


def with_squares(work: Work) -> None:
    """Each row brings its field as a polygon; no camera."""
    log, work.telescope["camera"] = work.log, ""
    log.region[:] = [_square(ra, dec, work.one.radius) for ra, dec in zip(log.ra, log.dec)]


def with_circles(work: Work) -> None:
    """Each row brings its field as a circle; no camera."""
    log, work.telescope["camera"] = work.log, ""
    log.region[:] = [
        f"CIRCLE ICRS {ra:.4f} {dec:.4f} {work.one.radius:.2f}" for ra, dec in zip(log.ra, log.dec)
    ]


def corners(order: Sequence[int]) -> Plant:
    def plant(work: Work) -> Planted:
        rows, log = work.some(4), work.log
        for i in rows:
            log.region[i] = _square(log.ra[i], log.dec[i], work.one.radius, order)
        return Planted(rows)

    return plant


def point_lost(work: Work) -> Planted:
    """A radius without its decimal point: 1.20 becomes 120."""
    rows = work.some(1)
    for i in rows:
        head, radius = work.log.region[i].rsplit(" ", 1)
        work.log.region[i] = f"{head} {radius.replace('.', '').lstrip('0')}"
    return Planted(rows)


def regions_lost(work: Work) -> Planted:
    work.log.region[:] = ""
    return _all(work)


def other_fov(factor: float) -> Plant:
    def plant(work: Work) -> Planted:
        work.log.fov *= factor
        return _all(work)

    return plant


def without_camera(work: Work) -> None:
    """The field of view that the log states is all that is known."""
    work.telescope["camera"] = ""


def radius_for_diameter(work: Work) -> Planted:
    work.telescope["camera"] = f'{{ shape = "circle", radius = {2 * work.one.radius} }}'
    return _all(work)


# --- what cannot be read ---------------------------------------------------------------------


def edited(edit: Callable[[str], str | bytes]) -> Plant:
    def plant(work: Work) -> Planted:
        work.edit = edit
        return Planted(())

    return plant


def blotted(column: str, cell: str) -> Plant:
    """Put something unreadable into a column of some rows."""

    def plant(work: Work) -> Planted:
        rows, style = work.some(3), STYLES[work.one.style]

        def edit(text: str) -> str:
            lines = [line.split(style.separator) for line in text.splitlines()]
            place = lines[0].index(style.names[column])
            for i in rows:
                lines[i + 1][place] = cell
            return "".join(style.separator.join(line) + "\n" for line in lines)

        work.edit = edit
        return Planted(rows)

    return plant


def cut_short(work: Work) -> Planted:
    work.edit = lambda text: text[:-30]
    return Planted([len(work.log) - 1])


def with_quality(work: Work) -> None:
    work.log.quality[:] = "GOOD"
    work.options.append('accept = ["GOOD"]')


def cloudy(work: Work) -> Planted:
    rows = work.some(6)
    work.log.quality[rows] = "CLOUD"
    return Planted(rows)


def other_word_for_good(work: Work) -> Planted:
    work.log.quality[:] = "OK"
    return _all(work)
