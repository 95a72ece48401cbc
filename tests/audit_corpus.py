"""Logs with one planted fault each, and their clean twins; what the audit makes of both.

Every case is a campaign of two telescopes as files: a campaign file, a map and two logs. The
first telescope's log is spoilt by one fault; its twin is the same campaign before that. Run
this file to see the table, the rates, and how often cautions are raised on clean campaigns.
"""

from __future__ import annotations

import os
import sys
import tempfile
import zlib
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import audit_faults as faults
import numpy as np
from astropy.io import fits
from audit_faults import Planted, Work
from audit_nights import INSTRUMENTS, STYLES, Scene, Unsuitable, night_log, stamp
from skytally.account import lay_coverage
from skytally.audit import audit
from skytally.campaign import load_campaign
from skytally.findings import Finding
from skytally.skymap_io import circle_skymap, write_skymap

# Codes that no log brings about, and why.
UNREACHABLE = {
    "rows-do-not-add-up": "a fault of the software, not of a log",
    "start-before-event": "a campaign file's reader sets such rows aside before they count",
    "map-distance-header": "of a map alone",
    "map-not-normalised": "of a map alone",
    "map-before-event": "of a map alone",
    "map-order": "of maps alone",
    "map-after-exposures": "of a map alone",
}


@dataclass(frozen=True)
class Case:
    """One fault.

    ``consequences`` are the other errors that it brings with it, each with its reason;
    ``suits``, ``when``, ``part``, ``nights`` and ``most`` say in what night it shows.
    """

    name: str
    code: str
    plant: Callable[[Work], Planted]
    observer: str
    other: str | None = None
    consequences: Mapping[str, str] = field(default_factory=dict)
    prepare: Callable[[Work], None] = lambda _: None
    suits: Callable[[Scene], bool] = lambda _: True
    when: str = "middle"
    part: tuple[str, float] | None = None
    nights: int = 1
    most: int = 40
    unmeasured: float = 0.03

    def build(self) -> tuple[Work, Work, Planted]:
        """Draw nights until one shows the fault; return clean twin, spoilt one and fault."""
        for attempt in range(60):
            rng = np.random.default_rng([zlib.crc32(self.name.encode()), attempt])
            scene = Scene.draw(rng, self.observer, self.other, when=self.when, suits=self.suits)
            try:
                clean = _observed(
                    rng,
                    scene,
                    nights=self.nights,
                    most=self.most,
                    part=self.part,
                    unmeasured=self.unmeasured,
                )
                self.prepare(clean)
                spoilt = clean.copy()
                return clean, spoilt, self.plant(spoilt)
            except Unsuitable:
                continue
        raise AssertionError(f"no night shows: {self.name}")


def _observed(rng: np.random.Generator, scene: Scene, **how: object) -> Work:
    """Both telescopes' clean logs; now and then the other's begins with reference images."""
    log = night_log(rng, scene, scene.observer, **how)
    other = night_log(rng, scene, scene.other, most=int(rng.integers(12, 26)))
    if rng.random() < 0.4:
        reference = other.take(range(4))
        reference.start -= 365 * int(rng.integers(1, 4))  # the same night of another year
        other = reference.then(other)
    dated = max(log.start.max(), other.start.max()) + rng.uniform(0.1, 3)
    return Work(rng, scene, log, other, dated=dated)


# --- files, and back through the reader ------------------------------------------------------

_CAMPAIGN = """[event]
name = "Lantern 7"
time = {time}Z

[settings]
bracket = 0.1                               # no number of the tally is looked at here

[[map]]
version = "1 first"
file = "../map.fits"
issued = {issued}Z
"""
_SITE = "{{ longitude = {one.longitude}, latitude = {one.latitude}, height = {one.height} }}"
_CAMERA = '{{ shape = "circle", radius = {one.radius} }}'
_TELESCOPE = """
[[telescope]]
name = "{one.name}"
depth = {{ system = "AB", significance = 5 }}
{more}
log = {{ {log} }}
"""


def findings_of(work: Work, folder: Path) -> tuple[Finding, ...]:
    """Write a campaign as files, read it as a user would, and audit it."""
    scene = work.scene
    folder.mkdir(parents=True)
    if not (folder.parent / "map.fits").exists():
        skymap = circle_skymap(scene.ra, scene.dec, scene.radius_90)
        write_skymap(folder.parent / "map.fits", skymap)
    text = _CAMPAIGN.format(time=stamp(scene.event), issued=stamp(scene.issued)) + work.extra
    logs = (
        (scene.observer, work.log, work.telescope, work.options, work.edit, work.dated),
        (scene.other, work.other, {}, [], lambda text: text, 0.0),
    )
    for one, log, keys, options, edit, dated in logs:
        keys = {"site": _SITE.format(one=one), "camera": _CAMERA.format(one=one), **keys}
        style = STYLES[one.style]
        listed = [f'file = "{one.name}.csv"', *([style.options] if style.options else []), *options]
        more = "\n".join(f"{key} = {value}" for key, value in keys.items() if value)
        text += _TELESCOPE.format(one=one, more=more, log=", ".join(listed))
        file = folder / f"{one.name}.csv"
        content = edit(log.text(style))
        file.write_bytes(content if isinstance(content, bytes) else content.encode())
        if dated:
            seconds = (dated - 40587) * 86400
            os.utime(file, (seconds, seconds))
    (folder / "campaign.toml").write_text(text, encoding="utf-8")
    campaign = load_campaign(folder / "campaign.toml")
    found, silenced = audit(campaign, lay_coverage(campaign), [(m, None) for m in campaign.maps])
    if silenced:
        raise AssertionError("nothing is silenced here")
    return found


@dataclass(frozen=True)
class Verdict:
    """What the audit made of a case.

    ``planted``, ``least``, ``named`` and ``strays`` count rows: at fault, of these to be named
    and named by the finding, and named though nothing is wrong with them.
    """

    case: Case
    telescope: str
    severity: str  # of the finding on the fault; empty if it was missed
    planted: int
    least: int
    named: int
    strays: int
    text: str
    surprises: tuple[str, ...]  # errors on the spoilt campaign that do not follow from the fault
    false_errors: tuple[str, ...]  # errors on the clean twin
    cautions: tuple[str, ...]  # cautions on the clean twin

    @property
    def found(self) -> bool:
        """The fault's code, on its telescope, with some of its rows, and telling the truth."""
        return bool(self.severity) and self.named >= self.least


def judge(case: Case, folder: Path) -> Verdict:
    """Audit a case and its clean twin."""
    clean, spoilt, planted = case.build()
    honest = findings_of(clean, folder / "clean")
    found = findings_of(spoilt, folder / "spoilt")
    name = clean.one.name
    subject = planted.subject or name
    new = [f for f in found if f not in honest]
    hits = [f for f in new if (f.code, f.subject) == (case.code, subject)]
    hit = hits[0] if hits and planted.says(hits[0].text) else None
    rows = {int(i) + 2 for i in planted.rows}
    touched = rows | {int(i) + 2 for i in planted.near}
    allowed = {(case.code, subject), *((code, name) for code in case.consequences)}
    return Verdict(
        case,
        name,
        hit.severity if hit else "",
        len(rows),
        planted.least if rows else 0,
        len(rows & set(hit.rows)) if hit else 0,
        len(set(hit.rows) - touched) if hit and rows else 0,
        hits[0].text if hits else "",
        tuple(
            f"{f.code} of {f.subject}"
            for f in found
            if f.severity == "error" and (f.code, f.subject) not in allowed
        ),
        tuple(f"{f.code} of {f.subject}" for f in honest if f.severity == "error"),
        tuple(f"{f.code} of {f.subject}" for f in honest if f.severity == "caution"),
    )


# --- the corpus ------------------------------------------------------------------------------

_SUN = "at the times as written the Sun was up"
_DOWN = "the place as written was below the horizon"
_NONE_LEFT = "all times as written lie before the event, so that no row counts"
_WRONG_PLACE = {"below-horizon": _DOWN}
_WRONG_TIME = {"sun-up": _SUN, "below-horizon": _DOWN, "log-without-exposures": _NONE_LEFT}
_LONG = {
    "exposures-overlap": "an exposure of hours runs into the next",
    "sun-up": "the middle of an exposure of hours falls into the day",
    "below-horizon": "the field sets before the middle of an exposure of hours",
}


def _clock_cases() -> Iterator[Case]:
    """Clocks wrong by 1 to 12 h either way; short logs at the night's edge for small shifts."""
    names = list(INSTRUMENTS)
    for place, hours in enumerate([h for h in range(-12, 13) if h]):
        side = "dusk" if hours < 0 else "dawn"
        part = (side, 0.6 + 0.4 * abs(hours)) if abs(hours) <= 3 else None
        yield Case(
            f"clock {abs(hours)} h {'slow' if hours < 0 else 'fast'}",
            "clock-shifted",
            faults.clock(hours),
            names[place % len(names)],
            consequences=_WRONG_TIME,
            when=side if part else "middle",
            part=part,
        )


_POSITIONS = (
    Case(
        "right ascension in hours",
        "ra-in-hours",
        faults.ra_in_hours,
        "Heron",
        consequences=_WRONG_PLACE,
        suits=faults.far_from_map(lambda ra, dec: (ra / 15, dec)),
    ),
    Case(
        "right ascension in hours, as if the clock were wrong",
        "ra-in-hours",
        faults.ra_in_hours,
        "Heron",
        consequences=_WRONG_PLACE,
        suits=lambda scene: faults.sets_as(scene, scene.ra / 15, scene.dec),
        part=("dusk", 2.0),
        when="dusk",
    ),
    Case(
        "sexagesimal hours taken for degrees",
        "ra-in-hours",
        faults.sexagesimal_as_degrees,
        "Avocet",
        consequences=_WRONG_PLACE,
        suits=faults.far_from_map(lambda ra, dec: (ra / 15, dec)),
    ),
    Case(
        "positions in radians",
        "positions-in-radians",
        faults.in_radians,
        "Plover",
        consequences=_WRONG_PLACE,
        suits=faults.far_from_map(lambda ra, dec: (np.radians(ra), np.radians(dec))),
    ),
    Case(
        "right ascension and declination swapped",
        "ra-dec-swapped",
        faults.ra_and_dec_swapped,
        "Egret",
        consequences=_WRONG_PLACE,
        suits=faults.can_be_swapped,
    ),
    Case(
        "swapped, beyond 90 deg",
        "log-unreadable",
        faults.ra_and_dec_swapped_out_of_range,
        "Dunlin",
        suits=lambda scene: 110 < scene.ra < 340,
    ),
    Case(
        "Galactic coordinates",
        "positions-galactic",
        faults.galactic,
        "Godwit",
        consequences=_WRONG_PLACE,
        suits=faults.far_from_map(faults.galactic_place),
    ),
    Case(
        "Galactic coordinates, southern site",
        "positions-galactic",
        faults.galactic,
        "Knot",
        consequences=_WRONG_PLACE,
        suits=faults.far_from_map(faults.galactic_place),
    ),
    Case(
        "minus sign of declinations lost",
        "dec-sign-lost",
        faults.sign_lost,
        "Siskin",
        consequences=_WRONG_PLACE,
        suits=lambda scene: scene.dec < -16,
    ),
    Case("log of another event", "outside-map", faults.another_event, "Curlew"),
    Case("fields below the horizon", "below-horizon", faults.placed(-50, -4), "Heron"),
    Case("fields low in the sky", "high-airmass", faults.placed(8, 18), "Avocet"),
    Case("fields beside the Moon", "near-moon", faults.near_moon, "Plover"),
)
_TIMES = (
    *_clock_cases(),
    Case(
        "local time of a half-hour zone",
        "clock-shifted",
        faults.clock(5.5),
        "Egret",
        consequences=_WRONG_TIME,
    ),
    Case(
        "a whole night an hour late",
        "sun-up",
        faults.an_hour_off,
        "Siskin",
        consequences=_WRONG_PLACE,
        when="dawn",
        most=60,
    ),
    Case(
        "day and month swapped, later",
        "day-month-swapped",
        faults.day_and_month,
        "Heron",
        consequences={**_WRONG_TIME, "start-after-file": "the file is months older than that"},
        suits=faults.date_turns(later=True),
        nights=2,
    ),
    Case(
        "day and month swapped, earlier",
        "day-month-swapped",
        faults.day_and_month,
        "Siskin",
        consequences=_WRONG_TIME,
        suits=faults.date_turns(later=False),
        nights=2,
    ),
    Case(
        "am for pm in some rows",
        "sun-up",
        faults.half_a_day_off,
        "Dunlin",
        consequences=_WRONG_PLACE,
    ),
    Case(
        "twelve-hour clock",
        "sun-up",
        faults.twelve_hour_clock,
        "Egret",
        consequences={**_WRONG_TIME, "clock-shifted": "half the day fits into a long night"},
        prepare=faults.event_long_before,
    ),
    Case(
        "longitude of the site counted to the west",
        "sun-up",
        faults.west_for_east,
        "Heron",
        consequences={
            **_WRONG_PLACE,
            "clock-shifted": "it names the sign of the longitude as the other way out",
        },
    ),
    Case("exposures in twilight", "twilight", faults.twilight, "Heron"),
    Case("rows of the year before", "start-long-before", faults.moved_days(-365), "Heron"),
    Case("rows of the year after", "start-long-after", faults.moved_days(365), "Plover"),
    Case(
        "rows two months late",
        "start-long-after",
        faults.moved_days(61),
        "Godwit",
        consequences=_WRONG_TIME,
    ),
    Case("a log of the year before", "log-without-exposures", faults.a_year_early, "Avocet"),
    Case("later than the file's date", "start-after-file", faults.written_too_soon, "Heron"),
    Case("nights only planned", "start-after-file", faults.planned_nights, "Lapwing", nights=3),
    Case(
        "minutes lost",
        "start-same-minute",
        faults.minutes_lost,
        "Avocet",
        consequences={**_WRONG_TIME, "exposures-overlap": "all of one hour begin at once"},
    ),
    Case("one start for all rows", "start-identical", faults.one_start, "Curlew"),
    Case("days to two decimals", "exposures-overlap", faults.hundredths_of_days, "Dunlin"),
)
_ROWS = (
    Case("rows repeated", "rows-repeated", faults.repeated, "Plover"),
    Case(
        "rows repeated under new names", "rows-repeated-renamed", faults.repeated_renamed, "Godwit"
    ),
    Case("log sent twice, rounded", "rows-resent", faults.resent(3, 1.0, renamed=False), "Heron"),
    Case(
        "log sent twice, coarse, new names", "rows-resent", faults.resent(2, 0.864, True), "Dunlin"
    ),
    Case("exposure times too long", "exposures-overlap", faults.too_long, "Avocet"),
    Case("start of the row before", "exposures-overlap", faults.start_of_neighbour, "Heron"),
    Case(
        "rows of another telescope",
        "sun-up",
        faults.rows_of_another_telescope,
        "Heron",
        "Plover",
        consequences={
            **_WRONG_PLACE,
            "exposures-overlap": "both telescopes observed at once",
        },
    ),
    Case("two channels at once", "exposures-simultaneous", faults.two_channels, "Heron"),
    Case("exposure times of nothing", "duration-zero", faults.lasting(0.0), "Siskin"),
    Case("exposure times missing", "duration-zero", faults.lasting(np.nan), "Lapwing"),
    Case("negative exposure times", "rows-unreadable", faults.lasting(-60.0), "Curlew"),
    Case(
        "an exposure of hours",
        "duration-long",
        faults.lasting(9000.0, 1),
        "Plover",
        consequences=_LONG,
    ),
    Case(
        "exposure times in milliseconds",
        "duration-long",
        faults.in_milliseconds,
        "Heron",
        consequences=_LONG,
    ),
)
_LIMITS = (
    Case("hardly any limit", "depth-missing", faults.hardly_any_limit, "Heron"),
    Case(
        "some limits missing",
        "depth-missing",
        faults.limits(lambda x: x * np.nan),
        "Egret",
        unmeasured=0.0,
    ),
    Case("limits of zero", "depth-out-of-range", faults.limits(np.zeros_like), "Plover"),
    Case(
        "a limit of 35", "depth-out-of-range", faults.limits(lambda x: x * 0 + 35.0, 1), "Lapwing"
    ),
    Case("limits as fluxes", "depth-out-of-range", faults.limits_as_fluxes, "Egret"),
    Case(
        "digits of a limit exchanged", "depth-outlier", faults.limits(lambda x: x - 9, 1), "Avocet"
    ),
    Case(
        "limits of another exposure time",
        "depth-outlier",
        faults.limits(lambda x: x + 3, 2),
        "Dunlin",
    ),
    Case("nominal limits", "depth-identical", faults.nominal_limits, "Godwit"),
    Case(
        "limits by default",
        "depth-default",
        faults.limits(lambda x: x * np.nan, 5),
        "Heron",
        prepare=faults.with_default_depth,
        unmeasured=0.0,
    ),
    Case("r and r' in one log", "band-spelt-differently", faults.renamed_band("r", "r'"), "Avocet"),
    Case(
        "r and cam2-r between logs",
        "band-spelt-differently",
        faults.renamed_band("r", "cam2-r", 1.0),
        "Heron",
        "Avocet",
    ),
    Case(
        "r and r.02 between logs",
        "band-spelt-differently",
        faults.renamed_band("r", "r.02", 1.0),
        "Lapwing",
        "Heron",
    ),
    Case(
        "r and r_band between logs",
        "band-spelt-differently",
        faults.renamed_band("r", "r_band", 1.0),
        "Plover",
        "Lapwing",
    ),
    Case(
        "a band of no system",
        "band-without-extinction",
        faults.band_of_no_system,
        "Heron",
        "Plover",
        prepare=faults.with_dust,
    ),
)
_REGIONS = (
    Case(
        "bow-tie",
        "crossed-polygon",
        faults.corners((0, 2, 1, 3)),
        "Heron",
        prepare=faults.with_squares,
    ),
    Case(
        "ring reversed",
        "ring-reversed",
        faults.corners((3, 2, 1, 0)),
        "Plover",
        prepare=faults.with_squares,
    ),
    Case(
        "decimal point lost",
        "footprint-vast",
        faults.point_lost,
        "Dunlin",
        prepare=faults.with_circles,
    ),
    Case(
        "decimal point lost, small field",
        "visibility-not-checked",
        faults.point_lost,
        "Curlew",
        prepare=faults.with_circles,
    ),
    Case(
        "regions left out",
        "field-as-circle",
        faults.regions_lost,
        "Dunlin",
        prepare=faults.with_squares,
    ),
    Case("field of view in arcminutes", "camera-of-another-size", faults.other_fov(60.0), "Dunlin"),
    Case(
        "field of view in arcminutes, no camera",
        "footprint-vast",
        faults.other_fov(60.0),
        "Knot",
        prepare=faults.without_camera,
    ),
    Case(
        "the same of a smaller field",
        "visibility-not-checked",
        faults.other_fov(60.0),
        "Dunlin",
        prepare=faults.without_camera,
    ),
    Case("field of view as radius", "camera-of-another-size", faults.other_fov(0.5), "Knot"),
    Case("camera by its diameter", "camera-of-another-size", faults.radius_for_diameter, "Knot"),
)
_UNREADABLE = (
    Case(
        "line of names lost",
        "log-unreadable",
        faults.edited(lambda text: text.split("\n", 1)[1]),
        "Heron",
    ),
    Case(
        "a web page",
        "log-unreadable",
        faults.edited(lambda _: "<!DOCTYPE html><p>Log in"),
        "Plover",
    ),
    Case(
        "binary content", "log-unreadable", faults.edited(lambda _: bytes(range(256)) * 9), "Avocet"
    ),
    Case(
        "names without rows",
        "log-unreadable",
        faults.edited(lambda text: text.split("\n", 1)[0] + "\n"),
        "Siskin",
    ),
    Case("right ascension illegible", "rows-unreadable", faults.blotted("ra", "12h??"), "Siskin"),
    Case(
        "times of no day",
        "rows-unreadable",
        faults.blotted("start", "2031-02-30T04:00:00"),
        "Heron",
    ),
    Case("declination missing", "rows-unreadable", faults.blotted("dec", ""), "Godwit"),
    Case("log cut short", "rows-unreadable", faults.cut_short, "Heron"),
    Case(
        "rows under cloud", "rows-set-aside", faults.cloudy, "Avocet", prepare=faults.with_quality
    ),
    Case(
        "another word for good",
        "log-without-exposures",
        faults.other_word_for_good,
        "Heron",
        prepare=faults.with_quality,
    ),
)
CASES = (*_POSITIONS, *_TIMES, *_ROWS, *_LIMITS, *_REGIONS, *_UNREADABLE)


def write_dust(folder: Path) -> None:
    """Write an even sheet of dust, in twelve cells."""
    column = fits.Column("EBV", "D", array=np.full(12, 0.05), unit="mag")
    table = fits.BinTableHDU.from_columns([column])
    table.header.update({"ORDERING": "NESTED", "COORDSYS": "C", "NSIDE": 1})
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(folder / "dust.fits")


def judge_all(folder: Path, cases: Sequence[Case] = CASES) -> Iterator[Verdict]:
    """Judge every case, each in a folder of its own."""
    for place, case in enumerate(cases):
        mine = folder / f"{place:03d}"
        mine.mkdir()
        write_dust(mine)
        yield judge(case, mine)


def _random_night(rng: np.random.Generator) -> Work:
    """Any two telescopes, one to three nights, any length of log."""
    while True:
        observer, when = (
            str(rng.choice(list(INSTRUMENTS))),
            str(rng.choice(["dusk", "middle", "dawn"])),
        )
        nights, most = int(rng.integers(1, 4)), int(rng.integers(15, 70))
        try:
            return _observed(rng, Scene.draw(rng, observer, when=when), nights=nights, most=most)
        except Unsuitable:
            continue


def clean_cautions(folder: Path, seed: int, count: int) -> tuple[Counter[str], Counter[str], int]:
    """Audit random clean campaigns.

    Returns
    -------
    errors, cautions : counters
        In how many campaigns each code was raised.
    logs : int
        How many logs these were.
    """
    errors: Counter[str] = Counter()
    cautions: Counter[str] = Counter()
    for number in range(count):
        work = _random_night(np.random.default_rng([seed, number]))
        found = findings_of(work, folder / f"{seed}-{number}" / "clean")
        errors.update({f.code for f in found if f.severity == "error"})
        cautions.update({f.code for f in found if f.severity == "caution"})
    return errors, cautions, 2 * count


def summary(verdicts: Sequence[Verdict]) -> str:
    """Give both rates in words."""
    found = sum(v.found for v in verdicts)
    quiet = sum(not v.false_errors for v in verdicts)
    return (
        f"planted faults found: {found} of {len(verdicts)} ({found / len(verdicts):.1%}); "
        f"clean twins without an error: {quiet} of {len(verdicts)} ({quiet / len(verdicts):.1%})"
    )


def main() -> None:
    """Print every case, the two rates, and the cautions on clean campaigns."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        verdicts = []
        print(f"{'fault':<53}{'log':<9}{'sought':<25}{'found as':<10}rows     also, or on the twin")
        for one in judge_all(folder):
            verdicts.append(one)
            wrong = [*one.surprises, *(f"TWIN {x}" for x in (*one.false_errors, *one.cautions))]
            rows = f"{one.named}/{one.planted}" + (f"+{one.strays}" if one.strays else "")
            status = one.severity if one.found else "MISSED"
            print(
                f"{one.case.name:<53}{one.telescope:<9}{one.case.code:<25}{status:<10}{rows:<9}"
                f"{'; '.join(wrong)}"
            )
        print(summary(verdicts))
        errors, cautions, logs = clean_cautions(folder, 7, 20)
        print(
            f"20 further clean campaigns ({logs} logs): errors {dict(errors)}, cautions in "
            f"{dict(cautions)} campaigns"
        )


if __name__ == "__main__":
    sys.exit(main())
