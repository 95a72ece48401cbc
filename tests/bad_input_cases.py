"""Broken maps and campaign files: the sample campaign with one thing spoilt in each.

A case changes a folder that holds the campaign of `skytally new`, and says what the one
message must hold: the words that name file and place, and those of the remedy.
"""

from __future__ import annotations

import gzip
import io
from collections.abc import Callable
from pathlib import Path

import numpy as np
from astropy.io import fits
from bad_input_changes import (
    Case,
    Change,
    as_dangling_link,
    as_folder,
    as_pipe,
    both,
    cut,
    fits_bytes,
    gone,
    heron,
    nothing,
    put,
    recoded,
    toml,
)

FULL_SKY_SR = 4 * np.pi

EVEN = np.full(12, 1 / 12)
RING = {"ORDERING": "RING", "COORDSYS": "C", "NSIDE": 1}
NUNIQ = {"ORDERING": "NUNIQ", "COORDSYS": "C"}
MAP = "maps/first.fits"


def flat(
    values: object = EVEN, name: str = "PROB", unit: str | None = None, **header: object
) -> Change:
    """Return a change to a flat map, good but for what is given; None leaves a keyword out."""
    stated = {key: value for key, value in {**RING, **header}.items() if value is not None}
    column = fits.Column(name, "D", unit=unit, array=np.asarray(values, dtype=float))
    return put(MAP, fits_bytes([column], **stated))


def pixels(numbers: list[int]) -> Change:
    """Return a change to a flat map that lists its pixels."""
    columns = [fits.Column("PIXEL", "J", array=numbers), fits.Column("PROB", "D", array=EVEN)]
    return put(MAP, fits_bytes(columns, **RING))


def multi_order(uniq: list[int], density: list[float], kind: str = "K") -> Change:
    """Return a change to a multi-order map; densities in units of an even sky."""
    columns = [
        fits.Column("UNIQ", kind, array=np.array(uniq)),
        fits.Column("PROBDENSITY", "D", unit="sr-1", array=np.array(density) / FULL_SKY_SR),
    ]
    return put(MAP, fits_bytes(columns, **NUNIQ))


def one_wrong(value: float) -> np.ndarray:
    """An even map with this value in pixel 5."""
    return np.where(np.arange(12) == 5, value, EVEN)


def _packed_map(spoil: Callable[[bytes], bytes]) -> Change:
    """Return a change that packs the map with gzip, spoilt."""

    def change(folder: Path) -> None:
        packed = gzip.compress((folder / MAP).read_bytes(), mtime=0)
        (folder / "maps/first.fits.gz").write_bytes(spoil(packed))

    return both(change, toml('"maps/first.fits"', '"maps/first.fits.gz"'))


def _text_map() -> bytes:
    column = fits.Column("PROB", "3A", array=np.array(["0.1"] * 12))
    return fits_bytes([column], **RING)


def _distance_in_seconds() -> bytes:
    names = ("DISTMU", "DISTSIGMA", "DISTNORM")
    columns = [fits.Column("PROB", "D", array=EVEN)]
    columns += [fits.Column(name, "D", unit="s", array=EVEN) for name in names]
    return fits_bytes(columns, **RING)


def header(keyword: str, value: object) -> Change:
    """Return a change of one keyword in the map's table header, whatever it does to the rest."""

    def change(folder: Path) -> None:
        data = (folder / MAP).read_bytes()
        at = data.index(f"{keyword:8}= ".encode())
        card = fits.Card(keyword, value).image.encode()
        (folder / MAP).write_bytes(data[:at] + card + data[at + 80 :])

    return change


def in_map(old: bytes, new: bytes) -> Change:
    """Return a change of a few bytes in the map, which must be there."""

    def change(folder: Path) -> None:
        before, found, after = (folder / MAP).read_bytes().partition(old)
        if not found or len(old) != len(new):
            raise ValueError(f"the map does not hold {old!r}")
        (folder / MAP).write_bytes(before + new + after)

    return change


def _image() -> bytes:
    stream = io.BytesIO()
    fits.PrimaryHDU(np.zeros((4, 4), np.int16)).writeto(stream)
    return stream.getvalue()


MAPS = (
    Case("map cut short", cut(MAP, 9000), ("first.fits", "rows"), "copy or download it again"),
    Case("map cut in its header", cut(MAP, 1000), ("first.fits",), "copy or download it again"),
    Case("map cut after its first header", cut(MAP, 2880), ("first.fits", "no table"), "cut short"),
    Case("map empty", put(MAP, ""), ("first.fits", "empty"), "Check that it is the right file"),
    Case("map is text", put(MAP, "ra,dec\n1,2\n"), ("first.fits", "'ra,dec'"), "right file"),
    Case("map is an image", put(MAP, _image()), ("first.fits", "no table"), "PROBDENSITY"),
    Case("gzip cut short", _packed_map(lambda x: x[:-500]), ("first.fits.gz",), "again"),
    Case("gzip without its end", _packed_map(lambda x: x[:-4]), ("first.fits.gz",), "again"),
    Case(
        "gzip damaged",
        _packed_map(lambda x: x[:200] + b"\xff" * 200 + x[400:]),
        ("first.fits.gz", "damaged"),
        "Copy or download it again",
    ),
    Case(
        "gzip of something else",
        _packed_map(lambda _: gzip.compress(bytes(1 << 24))),
        ("first.fits.gz", "expected FITS"),
        "right file",
    ),
    Case("map absent", gone(MAP), ("map[1].file", "first.fits"), "Paths are relative"),
    Case("map a folder", as_folder(MAP), ("map[1].file", "directory"), "Name the file inside"),
    Case("map a pipe", as_pipe(MAP), ("map[1].file", "pipe"), "Give the map's FITS file"),
    Case("map a dangling link", as_dangling_link(MAP), ("map[1].file",), "Paths are relative"),
    Case(
        "map a URL",
        toml('"maps/first.fits"', '"https://skytally.invalid/first.fits"'),
        ("map[1].file", "https://skytally.invalid/first.fits", "URL"),
        "Download it first",
    ),
    Case("map without ordering", flat(ORDERING=None), ("first.fits", "ORDERING"), "add the"),
    Case("map of another ordering", flat(ORDERING="SPIRAL"), ("'SPIRAL'", "RING"), "Ask who"),
    Case("map without frame", flat(COORDSYS=None), ("first.fits", "COORDSYS"), "add the keyword"),
    Case("map of another frame", flat(COORDSYS="E"), ("first.fits", "'E'"), "Ask who made"),
    Case("map sums to a half", flat(EVEN / 2), ("first.fits", "0.5", "within 1 %"), "unit"),
    Case("map sums to nothing", flat(EVEN * 0), ("first.fits", "sums to 0"), "Check the unit"),
    Case("map negative", flat(one_wrong(-0.1)), ("'PROB'", "cell 5", "-0.1"), "Ask who"),
    Case("map NaN", flat(one_wrong(np.nan)), ("'PROB'", "cell 5", "nan"), "Ask who"),
    Case("map infinite", flat(one_wrong(np.inf)), ("'PROB'", "cell 5", "inf"), "Ask who"),
    Case("map of NSIDE 3", flat(NSIDE=3), ("first.fits", "NSIDE is 3"), "Correct the header"),
    Case("map of too few pixels", flat(NSIDE=2), ("'PROB'", "12 pixels", "48"), "incomplete"),
    Case("map without probability", flat(name="FLUX"), ("first.fits", "FLUX"), "PROB"),
    Case("map of an unknown unit", flat(unit="smoots"), ("'PROB'", "'smoots'"), "TUNIT"),
    Case("map in another unit", flat(unit="Jy"), ("'PROB'", "Jy"), "Correct TUNIT"),
    Case("map of text", put(MAP, _text_map()), ("'PROB'", "text"), "numeric column"),
    Case("pixel twice", pixels([*range(11), 9]), ("first.fits", "pixel 9"), "count twice"),
    Case("pixel off the sky", pixels([*range(11), 12]), ("row 12", "pixel 12"), "Correct NSIDE"),
    Case("cells overlap", multi_order([4, 5, 17], [1, 1, 1]), ("row 1", "row 3"), "count twice"),
    Case("UNIQ of 3", multi_order([4, 3], [1, 1]), ("'UNIQ'", "row 2", "at least 4"), "damaged"),
    Case("UNIQ with a point", multi_order([4], [12], "D"), ("'UNIQ'", "integers"), "Write the"),
    Case("multi-order NaN", multi_order([4, 5], [1, np.nan]), ("UNIQ 5", "row 2"), "Ask who"),
    Case("map of no cells", multi_order([], []), ("first.fits", "sums to 0"), "complete"),
    Case("rows beyond the file", header("NAXIS2", 10**12), ("first.fits", "not whole"), "again"),
    Case("rows less than none", header("NAXIS2", -5), ("first.fits",), "again"),
    Case(
        "a damaged keyword",
        in_map(b"COORDSYS= 'C       '", b"COORDSYS= 'C        "),
        ("first.fits", "COORDSYS"),
        "Correct the",
    ),
    Case("rows not announced", in_map(b"NAXIS2 ", b"NAXIS9 "), ("first.fits", "headers"), "again"),
    Case("column of a kind unknown", header("TFORM2", "Q9Z"), ("first.fits",), "again"),
    Case("distance in seconds", put(MAP, _distance_in_seconds()), ("'DISTMU'", "Mpc"), "TUNIT"),
)

# ---------------------------------------------------------------- the campaign file

CAMPAIGN = "campaign.toml"
CIRCLE = "circle = { ra = 149.2, dec = -8.4, radius_90 = 2.0 }"
CAMERA = 'camera = { shape = "rectangle", width = 2.0, height = 1.6 }'
DEPTH = 'depth = { system = "AB", significance = 5 }'
HERON = ("telescope[1]", "(Heron)")

CAMPAIGNS = (
    Case("no campaign", gone(CAMPAIGN), (CAMPAIGN, "no such file"), "skytally new DIR"),
    Case("campaign a folder", nothing, ("directory",), "campaign.toml", ("tally", "{folder}")),
    Case(
        "campaign a URL",
        nothing,
        ("https://skytally.invalid/night.toml", "URL"),
        "Download the campaign",
        ("report", "https://skytally.invalid/night.toml", "--out", "{folder}/out"),
    ),
    Case("campaign a pipe", as_pipe(CAMPAIGN), (CAMPAIGN, "pipe"), "Name the TOML file"),
    Case("campaign a dangling link", as_dangling_link(CAMPAIGN), (CAMPAIGN, "no such"), "Check"),
    Case(
        "campaign of a name too long",
        nothing,
        ("xxxxxxxx", "too long"),
        "Check the path",
        ("tally", "{folder}/" + "x" * 300),
    ),
    Case("campaign empty", put(CAMPAIGN, ""), ("event.name", "event.time", "map"), "Write [[map]]"),
    Case("campaign not TOML", put(CAMPAIGN, "Dear all,\n"), ("line 1, column 6",), "Correct that"),
    Case("campaign binary", put(CAMPAIGN, b"\x1f\x8b\x08\0\0\0"), ("line 1",), "as UTF-8"),
    Case(
        "campaign in Latin-1",
        recoded(toml("An institute", "Möwe"), CAMPAIGN),
        ("campaign.toml", "line 73", "not UTF-8"),
        "Save the file as UTF-8",
    ),
    Case("campaign enormous", put(CAMPAIGN, "#" * 4_000_001), ("larger than 4 MB",), "Name the"),
    Case("key twice", toml("name =", 'name = "x"\nname ='), ("line 11, column",), "a key occurs"),
    Case("unknown key", toml("accept =", "acept ="), (*HERON, "acept"), "Did you mean accept?"),
    Case("unknown table", toml("[event]", "[settigns]\n[event]"), ("settigns",), "mean settings?"),
    Case("naive event time", toml(":08Z", ":08"), ("event.time", "zone"), "Add Z for UTC"),
    Case("event time in quotes", toml("2031-03-14T05:21:08Z", '"14 March"'), ("event.time",), "T0"),
    Case("maps for map", toml("[[map]]\nversion", "[[maps]]\nversion"), ("maps",), "mean map?"),
    Case(
        "year 1", toml("2031-03-14T05:21:08Z", "0001-01-01T00:00:00+14:00"), ("event.time",), "date"
    ),
    Case("year 0", toml("time = 2031", "time = 0000"), ("line 11",), "Correct that line"),
    Case("map of neither kind", toml(CIRCLE, ""), ("map[2]", "no file"), "Give a map file"),
    Case(
        "map of both kinds",
        toml(CIRCLE, CIRCLE + '\nfile = "maps/first.fits"'),
        ("map[2]", "both"),
        "Give a map file",
    ),
    Case("circle in hours", toml("ra = 149.2", 'ra = "09:56:48"'), ("map[2].circle.ra",), "deg"),
    Case("circle at 95", toml("dec = -8.4", "dec = 95"), ("map[2].circle.dec", "95"), "declin"),
    Case("circle of no radius", toml("_90 = 2.0", "_90 = 0"), ("circle.radius_90",), "holds 90 %"),
    Case("version twice", toml('"2 update"', '"1 first"'), ("map[2].version",), "of its own"),
    Case("name twice", toml('"Plover"', '"HERON"'), ("telescope[2].name",), "name of its own"),
    Case(
        "site at latitude 95",
        toml("latitude = -31.07", "latitude = 95"),
        (*HERON, "site.latitude", "95"),
        "latitude in degrees",
    ),
    Case("camera of another shape", toml('"rectangle"', '"hexagon"'), (*HERON, "camera"), "mosaic"),
    Case("camera of no width", toml("width = 2.0", "width = 0"), (*HERON, "camera.width"), "width"),
    Case("no camera", toml(CAMERA, ""), (*HERON, "no camera", "row 3"), "Give a camera"),
    Case("camera NaN", toml("width = 2.0", "width = nan"), (*HERON, "camera.width"), "nan and inf"),
    Case("log and images", toml(DEPTH, DEPTH + '\nimages = "*.fits"'), (*HERON, "both"), "Give a"),
    Case(
        "unknown canonical column",
        toml('exposure = "I', 'exposre = "I'),
        (*HERON, "log.columns.exposre"),
        "Did you mean exposure?",
    ),
    Case(
        "unknown time scale",
        toml('# time_scale = "utc"', 'time_scale = "gps"'),
        (*HERON, "log.time_scale", "gps"),
        '"utc"',
    ),
    Case("accepts nothing", toml('["done"]', "[]"), (*HERON, "log.accept"), "accepted values"),
    Case(
        "Vega with an unknown band",
        both(toml(DEPTH, DEPTH.replace("AB", "Vega")), heron("120,r,20.61", "120,qx,20.61")),
        (*HERON, "depth", "'qx'"),
        "vega_offset",
    ),
    Case(
        "significance of nothing",
        toml("# [settings]", "[settings]\nsignificance = 0"),
        ("settings.significance", "got 0"),
        "sigma",
    ),
    Case(
        "bracket of text",
        toml("# [settings]", '[settings]\nbracket = "tight"'),
        ("settings.bracket", '"tight"'),
        "brackets",
    ),
)
