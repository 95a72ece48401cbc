"""Clean nights of invented telescopes: what the audit must find no error in.

The Sun, the Moon and every field are placed by PyPI "ephem", which shares no code with the
package. An exposure is taken only while the Sun is below -12.2 deg, the field above 22 deg
(airmass below 2.7) and the Moon down or farther than 16 deg. The rest is the scatter of a
real night: readout times, dithers, bands in turn, breaks for other work, clouds that end an
hour or cost depth, limits that were never measured, and each log written in a way of its own.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, fields, replace
from datetime import datetime, timedelta

import ephem
import numpy as np

EPHEM_ZERO = 15019.5  # MJD of ephem's day 0
MJD_ZERO = datetime(1858, 11, 17)
SECOND, MINUTE, HOUR = 1 / 86400, 1 / 1440, 1 / 24
SUN_DEG, LOWEST_DEG, MOON_DEG = -12.2, 22.0, 16.0
FIRST_DAY, LAST_DAY = 61_771, 65_788  # the years 2028 to 2038


def stamp(mjd: float, form: str = "%Y-%m-%dT%H:%M:%S.%f") -> str:
    """Write a time; fractions of a second to a tenth."""
    text = (MJD_ZERO + timedelta(days=mjd)).strftime(form)
    return text[:-5] if form.endswith("%f") else text


class Unsuitable(Exception):
    """The night drawn is none in which what is wanted shows."""


@dataclass(frozen=True)
class Style:
    """How a log is written: the names of its columns, its separator, and its numbers."""

    names: dict[str, str]
    separator: str
    time: Callable[[float], str]
    angles: Callable[[float, float], tuple[str, str]]
    options: str = ""  # what the campaign must say of the log
    comma: bool = False


def _degrees(digits: int) -> Callable[[float, float], tuple[str, str]]:
    return lambda ra, dec: (f"{ra:.{digits}f}", f"{dec:.{digits}f}")


def _sexagesimal(ra: float, dec: float) -> tuple[str, str]:
    def parts(value: float, digits: int) -> str:
        units = round(value * 3600 * 10**digits)
        minutes, seconds = divmod(units, 60 * 10**digits)
        width = digits + 3
        return f"{minutes // 60:02d}:{minutes % 60:02d}:{seconds / 10**digits:0{width}.{digits}f}"

    return parts(ra / 15, 2), ("-" if dec < 0 else "+") + parts(abs(dec), 1)


_SAME = {x: x for x in ("exposure", "ra", "dec", "start", "duration", "band", "depth", "quality")}
_SAME |= {"region": "region", "fov": "s_fov"}

STYLES = {
    "plain": Style(_SAME, ",", lambda t: stamp(t) + "Z", _degrees(5)),
    "decimal commas": Style(
        _SAME | {"exposure": "id", "start": "mjd", "duration": "seconds", "depth": "maglim"},
        ";",
        lambda t: f"{t:.6f}",
        _degrees(4),
        'columns = { duration = "seconds" }, decimal = ","',
        comma=True,
    ),
    "sexagesimal": Style(
        _SAME | {"exposure": "FRAME", "ra": "RA_J2000", "dec": "DEC_J2000", "start": "UTC"},
        "\t",
        lambda t: stamp(t + 0.5 * SECOND, "%Y-%m-%d %H:%M:%S"),
        _sexagesimal,
    ),
    "standard": Style(
        _SAME
        | {"exposure": "obs_id", "ra": "s_ra", "dec": "s_dec", "start": "t_min"}
        | {"duration": "t_exptime", "region": "s_region", "quality": "execution_status"},
        ",",
        lambda t: f"{t:.7f}",
        _degrees(6),
    ),
    "julian": Style(
        _SAME | {"exposure": "visit", "start": "JD", "band": "filter", "depth": "lim mag"},
        ",",
        lambda t: f"{t + 2_400_000.5:.6f}",
        _degrees(4),
    ),
    "minutes": Style(
        _SAME | {"start": "date_obs", "band": "FILT"},
        ",",
        lambda t: stamp(t, "%Y-%m-%d %H:%M"),
        _degrees(3),
    ),
}


@dataclass(frozen=True)
class Instrument:
    """A telescope that does not exist, its round field, and how it observes."""

    name: str
    longitude: float  # degrees east
    latitude: float
    height: float  # metres
    radius: float  # degrees
    bands: tuple[str, ...]
    exposure: float  # seconds
    readout: float
    depth: float  # magnitudes in 60 s at the zenith
    style: str
    repeats: int = 1  # exposures before it moves on
    dither: float = 0.0  # between them, as a share of the radius

    @property
    def zone(self) -> int:
        """Hours by which local time is ahead of UTC."""
        return round(self.longitude / 15)


INSTRUMENTS = {
    one.name: one
    for one in (
        Instrument("Heron", -95.3, -25.4, 2210, 0.9, ("g", "r"), 60, 12, 21.3, "plain"),
        Instrument(
            "Plover", 2.6, -19.3, 1480, 0.7, ("r", "i"), 90, 20, 20.8, "decimal commas", 2, 0.1
        ),
        Instrument("Avocet", 104.9, 23.9, 640, 0.6, ("r",), 120, 25, 20.1, "sexagesimal"),
        Instrument("Dunlin", -128.2, 20.1, 1905, 1.2, ("g", "r", "i"), 45, 8, 20.6, "standard"),
        Instrument("Egret", 61.7, -33.2, 1120, 0.5, ("B", "V"), 60, 30, 19.2, "plain", 3, 0.2),
        Instrument("Godwit", 151.4, 41.0, 310, 1.6, ("C",), 180, 40, 19.5, "julian"),
        Instrument("Lapwing", -18.1, 48.3, 90, 0.8, ("r", "z"), 300, 30, 20.4, "minutes"),
        Instrument("Curlew", 33.0, 8.9, 2650, 0.4, ("J", "H"), 20, 6, 17.2, "julian", 3, 0.15),
        Instrument("Knot", 178.6, -43.2, 720, 2.0, ("w",), 30, 5, 19.9, "standard", 2),
        Instrument("Siskin", -64.9, -2.3, 3100, 1.0, ("u", "g"), 150, 35, 21.9, "sexagesimal"),
    )
}


class Sky:
    """What stands over a site, in degrees; times are MJD (UTC)."""

    def __init__(self, site: Instrument) -> None:
        self._there = ephem.Observer()
        self._there.lon, self._there.lat = np.radians(site.longitude), np.radians(site.latitude)
        self._there.elevation, self._there.pressure = site.height, 0

    def _at(self, mjd: float) -> ephem.Observer:
        self._there.date = mjd - EPHEM_ZERO
        return self._there

    def _star(self, ra: float, dec: float, mjd: float) -> ephem.FixedBody:
        star = ephem.FixedBody()
        star._ra, star._dec, star._epoch = np.radians(ra), np.radians(dec), ephem.J2000
        star.compute(self._at(mjd))
        return star

    def sun(self, mjd: float) -> float:
        """Altitude of the Sun."""
        return float(np.degrees(ephem.Sun(self._at(mjd)).alt))

    def moon(self, ra: float, dec: float, mjd: float) -> tuple[float, float, float]:
        """Altitude of the Moon, its distance from a place, and its lit share."""
        star, moon = self._star(ra, dec, mjd), ephem.Moon(self._at(mjd))
        apart = ephem.separation((star.az, star.alt), (moon.az, moon.alt))
        return float(np.degrees(moon.alt)), float(np.degrees(apart)), moon.phase / 100

    def moon_place(self, mjd: float) -> tuple[float, float]:
        """Altitude and azimuth of the Moon."""
        moon = ephem.Moon(self._at(mjd))
        return float(np.degrees(moon.alt)), float(np.degrees(moon.az))

    def altitude(self, ra: float, dec: float, mjd: float) -> float:
        """Altitude of a place, without refraction."""
        return float(np.degrees(self._star(ra, dec, mjd).alt))

    def place(self, altitude: float, azimuth: float, mjd: float) -> tuple[float, float]:
        """J2000 position, to 0.01 deg, of what stands there."""
        ra, dec = self._at(mjd).radec_of(np.radians(azimuth), np.radians(altitude))
        return float(np.degrees(ra)), float(np.degrees(dec))

    def meridian(self, mjd: float) -> float:
        """Right ascension (of date) on the meridian."""
        return float(np.degrees(self._at(mjd).sidereal_time()))

    def dark(self, day: int, sun: float = SUN_DEG) -> tuple[float, float] | None:
        """Dusk and dawn of the night that begins on a date, to a minute; None without night."""
        noon = day + 0.5 - np.degrees(self._there.lon) / 360
        every = noon + np.arange(1441) * MINUTE
        down = [i for i in range(0, 1441, 20) if self.sun(every[i]) < sun]
        if len(down) < 2:
            return None
        first = next(i for i in range(down[0] - 20, down[0] + 1) if self.sun(every[i]) < sun)
        last = next(i for i in range(down[-1] + 20, 0, -1) if self.sun(every[i]) < sun)
        return every[first], every[last]

    def fit(self, ra: float, dec: float, mjd: float) -> bool:
        """Tell whether a clean night would hold this pointing at this time."""
        if self.altitude(ra, dec, mjd) < LOWEST_DEG or self.sun(mjd) > SUN_DEG:
            return False
        up, apart, _ = self.moon(ra, dec, mjd)
        return up < -1 or apart > MOON_DEG


@dataclass
class Log:
    """The rows of a log before they are written; every column has one entry per row."""

    exposure: np.ndarray
    ra: np.ndarray
    dec: np.ndarray
    start: np.ndarray
    duration: np.ndarray
    band: np.ndarray
    depth: np.ndarray
    quality: np.ndarray
    region: np.ndarray
    fov: np.ndarray

    def __len__(self) -> int:
        return len(self.ra)

    def take(self, rows: Sequence[int] | np.ndarray) -> Log:
        """Copy these rows."""
        return Log(*(getattr(self, x.name)[np.asarray(rows, int)].copy() for x in fields(self)))

    def then(self, other: Log) -> Log:
        """Put another log's rows behind these."""
        both = ((getattr(self, x.name), getattr(other, x.name)) for x in fields(self))
        return Log(*(np.concatenate(pair) for pair in both))

    def text(self, style: Style) -> str:
        """Write the log as a table with one line of names."""
        angles = [style.angles(*one) for one in zip(self.ra, self.dec)]
        columns = {
            "exposure": self.exposure,
            "ra": [x[0] for x in angles],
            "dec": [x[1] for x in angles],
            "start": [style.time(t) for t in self.start],
            "duration": ["" if np.isnan(x) else f"{x:g}" for x in self.duration],
            "band": self.band,
            "depth": ["" if np.isnan(x) else f"{x:.2f}" for x in self.depth],
            "fov": [f"{x:g}" for x in self.fov],
            "quality": self.quality,
            "region": [f'"{x}"' if x else "" for x in self.region],
        }
        if style.comma:
            for name in columns.keys() - {"region"}:
                columns[name] = [cell.replace(".", ",") for cell in columns[name]]
        optional = {"fov": np.isfinite(self.fov), "quality": self.quality, "region": self.region}
        kept = [x for x in columns if x not in optional or any(optional[x])]
        rows = [[style.names[x] for x in kept], *zip(*(columns[x] for x in kept))]
        return "".join(style.separator.join(row) + "\n" for row in rows)


@dataclass(frozen=True)
class Scene:
    """An event, where it may have been, and two telescopes that could look."""

    event: float  # MJD
    issued: float
    ra: float
    dec: float
    radius_90: float
    day: int  # the date, as an MJD, on which the observer's first night begins
    observer: Instrument
    other: Instrument
    sky: Sky = field(repr=False)

    @classmethod
    def draw(
        cls,
        rng: np.random.Generator,
        observer: str,
        other: str | None = None,
        *,
        when: str = "middle",
        suits: Callable[[Scene], bool] = lambda _: True,
    ) -> Scene:
        """Draw scenes until the map is well up for both in the dark, and ``suits`` holds.

        ``when`` says at what part of the observer's night the map stands highest:
        "dusk", "middle" or "dawn".
        """
        for _ in range(4000):
            names = [x for x in INSTRUMENTS if x != observer]
            partner = INSTRUMENTS[other or str(rng.choice(names))]
            scene = cls._one(rng, INSTRUMENTS[observer], partner, when)
            if scene is not None and suits(scene) and scene.seen_by_other():
                return scene
        raise AssertionError("no scene is like that")

    @classmethod
    def _one(
        cls, rng: np.random.Generator, observer: Instrument, other: Instrument, when: str
    ) -> Scene | None:
        sky, day = Sky(observer), int(rng.integers(FIRST_DAY, LAST_DAY))
        night = sky.dark(day)
        if night is None or night[1] - night[0] < 5 * HOUR:
            return None
        moment = {"dusk": night[0] + 0.5 * HOUR, "dawn": night[1] - 0.5 * HOUR}.get(
            when, sum(night) / 2
        )
        ra = (sky.meridian(moment) + rng.uniform(-25, 25)) % 360
        dec = float(np.clip(observer.latitude + rng.uniform(-35, 35), -65, 65))
        size = float(np.clip(observer.radius * rng.uniform(3, 5), 2.5, 7))
        apart = sky.moon(ra, dec, moment)[1]
        if sky.altitude(ra, dec, moment) < 45 or apart < MOON_DEG + 1.5 * size + 8:
            return None
        first = Sky(other).dark(day)
        if first is None:
            return None
        event = min(night[0], first[0]) - rng.uniform(0.3, 6) * HOUR
        issued = event + rng.uniform(4, 15) * MINUTE
        return cls(event, issued, ra, dec, size, day, observer, other, sky)

    def seen_by_other(self) -> bool:
        """Whether the other telescope has the map up for an hour and a half."""
        sky = Sky(self.other)
        night = sky.dark(self.day)
        if night is None:
            return False
        every = np.arange(night[0], night[1], 10 * MINUTE)
        return sum(sky.fit(self.ra, self.dec, t) for t in every) >= 9


def _fields(rng: np.random.Generator, scene: Scene, radius: float, most: int = 20) -> np.ndarray:
    """Centres of fields side by side on the map, the middle first: (k, 2) in degrees."""
    step, count = 1.7 * radius, 9
    a, b = np.meshgrid(np.arange(-count, count + 1), np.arange(-count, count + 1))
    east = step * (a + 0.5 * (b % 2)).ravel() + rng.uniform(-0.4, 0.4) * radius
    north = step * np.sqrt(0.75) * b.ravel() + rng.uniform(-0.4, 0.4) * radius
    away = np.hypot(east, north)
    order = np.argsort(away + rng.uniform(0, 0.5 * radius, away.size))
    chosen = [i for i in order if away[i] < max(0.9 * scene.radius_90, step)][:most]
    dec = scene.dec + north[chosen]
    ra = scene.ra + east[chosen] / np.cos(np.radians(dec))
    return np.stack((ra % 360, dec), axis=1)


def night_log(
    rng: np.random.Generator,
    scene: Scene,
    one: Instrument,
    *,
    nights: int = 1,
    most: int = 40,
    part: tuple[str, float] | None = None,
    unmeasured: float = 0.03,
) -> Log:
    """Observe: the log of a telescope, in order, with nothing wrong.

    ``part`` is a part of the night to keep to without a break: ("dusk", hours) or
    ("dawn", hours). ``unmeasured`` is the share of rows without a limit.
    """
    sky, centres = Sky(one), _fields(rng, scene, one.radius)
    rows: list[tuple] = []
    for night in range(nights):
        dark = sky.dark(scene.day + night)
        if dark is None:
            continue
        begin, end = _stretch(rng, dark, part)
        most_now = -(-most * (night + 1) // nights)
        rows += _observe(rng, sky, one, centres, begin, end, most_now - len(rows), part is None)
    if len(rows) < 8:
        raise Unsuitable(f"{one.name} saw too little")
    return _as_log(rng, one, rows, unmeasured)


def _stretch(
    rng: np.random.Generator, dark: tuple[float, float], part: tuple[str, float] | None
) -> tuple[float, float]:
    begin, end = dark
    if part is None:
        return begin + rng.uniform(0, 20) * MINUTE, end
    side, hours = part
    edge = rng.uniform(0, 2) * MINUTE
    if side == "dusk":
        return begin + edge, begin + hours * HOUR
    return end - hours * HOUR, end - edge


def _observe(
    rng: np.random.Generator,
    sky: Sky,
    one: Instrument,
    centres: np.ndarray,
    begin: float,
    end: float,
    most: int,
    breaks: bool,
) -> list[tuple]:
    """Take exposures field by field, band by band, as long as the sky allows."""
    rows: list[tuple] = []
    now, turn, cloud = begin, 0, 0.0
    pause = (end - begin) / max(most / 7, 1) * 0.6
    while now + 2 * one.exposure * SECOND < end and len(rows) < most:
        ra, dec = centres[turn % len(centres)]
        place = turn // len(centres) % len(one.bands)
        # The last of several bands, where the sky is brightest, gets half as long again.
        band, seconds = one.bands[place], one.exposure * (1.5 if place > 1 else 1.0)
        turn += 1
        last = now + one.repeats * (seconds + 2 * one.readout) * SECOND
        if not (sky.fit(ra, dec, now) and sky.fit(ra, dec, last)):
            now += 40 * SECOND
            continue
        for _ in range(one.repeats):
            east, north = rng.normal(0, one.dither * one.radius, 2)
            there = (ra + east / np.cos(np.radians(dec))) % 360, dec + north
            up, _, lit = sky.moon(*there, now)
            air = 1 / np.sin(np.radians(sky.altitude(*there, now)))
            loss = 0.25 * (air - 1) + 0.9 * lit * (up > 0) + cloud + rng.normal(0, 0.07)
            depth = one.depth + 1.25 * np.log10(seconds / 60) - loss
            rows.append((*there, now, seconds, band, depth))
            now += (seconds + one.readout * rng.uniform(0.9, 1.6)) * SECOND
        if breaks and rng.random() < one.repeats / 7:
            now += rng.exponential(pause)
            cloud = rng.choice([0.0, 0.0, 0.3, rng.uniform(0.4, 1.5)])
    return rows[:most]


def _as_log(rng: np.random.Generator, one: Instrument, rows: list[tuple], unmeasured: float) -> Log:
    ra, dec, start, seconds, band, depth = zip(*rows)
    n = len(rows)
    first = int(rng.integers(1, 9000))
    depth = np.where(rng.random(n) < unmeasured, np.nan, depth)
    standard = one.style == "standard"
    return Log(
        exposure=np.array([f"{first + i:04d}" for i in range(n)], object),
        ra=np.array(ra),
        dec=np.array(dec),
        start=np.array(start),
        duration=np.array(seconds, float),
        band=np.array(band, object),
        depth=depth,
        quality=np.array(["Performed" if standard else ""] * n, object),
        region=np.array([""] * n, object),
        fov=np.full(n, 2 * one.radius if standard else np.nan),
    )


def elsewhere(scene: Scene, rng: np.random.Generator) -> Scene:
    """The same night with a map at least 40 deg away that is as well placed."""
    begin, end = scene.sky.dark(scene.day) or (0.0, 0.0)
    moment = (begin + end) / 2
    for _ in range(1000):
        ra, dec = scene.sky.place(rng.uniform(45, 70), rng.uniform(0, 360), moment)
        apart = ephem.separation(np.radians((ra, dec)), np.radians((scene.ra, scene.dec)))
        moon = scene.sky.moon(ra, dec, moment)[1]
        if np.degrees(apart) > 40 and moon > 35:
            return replace(scene, ra=ra, dec=dec)
    raise Unsuitable("there is no other field")
