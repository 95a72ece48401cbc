"""Broken logs, cameras, images and region texts as data, for more than one test to use.

Each case writes its files into a folder and returns what a user would name; the words
are those that the one message must hold.
"""

from __future__ import annotations

import gzip
import io
import os
import warnings
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.table import Table

HEADER = "exposure,ra,dec,start,duration,band,depth\n"
ROW = "0001,150.5,-20.25,2031-03-14T05:30:00,60,r,20.5\n"


@dataclass(frozen=True)
class BadInput:
    """One broken input.

    ``write`` receives an empty folder and returns the path (or pattern) to read;
    ``words`` must all be in the message; ``options`` are options of the reader.
    """

    name: str
    write: Callable[[Path], str]
    words: tuple[str, ...]
    options: dict[str, Any] = field(default_factory=dict)

    def __str__(self) -> str:
        return self.name


def text_file(content: str | bytes, name: str = "log.csv") -> Callable[[Path], str]:
    """Return a writer of one file of this content."""

    def write(folder: Path) -> str:
        raw = content.encode() if isinstance(content, str) else content
        (folder / name).write_bytes(raw)
        return str(folder / name)

    return write


def good_fits_table() -> bytes:
    stream = io.BytesIO()
    table = Table(
        {
            "obs_id": [f"{i:04d}" for i in range(400)],
            "s_ra": np.linspace(10.0, 300.0, 400),
            "s_dec": np.linspace(-80.0, 80.0, 400),
            "t_min": 62939.5 + np.arange(400) / 1440.0,
        }
    )
    table.write(stream, format="fits")
    return stream.getvalue()


def votable(data: str, before: str = "") -> str:
    return f"""<?xml version="1.0" encoding="UTF-8"?>
{before}<VOTABLE version="1.4" xmlns="http://www.ivoa.net/xml/VOTable/v1.3"><RESOURCE><TABLE>
<FIELD name="s_ra" datatype="double" unit="deg"/><FIELD name="s_dec" datatype="double" unit="deg"/>
<FIELD name="t_min" datatype="double" unit="d"/>
<DATA>{data}</DATA></TABLE></RESOURCE></VOTABLE>
"""


GOOD_DATA = (
    "<TABLEDATA><TR><TD>150.5</TD><TD>-20.25</TD><TD>62939.5</TD></TR>"
    "<TR><TD>151.5</TD><TD></TD><TD>62939.6</TD></TR></TABLEDATA>"
)


def _directory(folder: Path) -> str:
    (folder / "logs").mkdir()
    return str(folder / "logs")


def _pipe(folder: Path) -> str:
    os.mkfifo(folder / "pipe")
    return str(folder / "pipe")


def _url(text: str) -> Callable[[Path], str]:
    return lambda _folder: text


def _image_only() -> bytes:
    stream = io.BytesIO()
    fits.PrimaryHDU(np.zeros((4, 4), np.int16)).writeto(stream)
    return stream.getvalue()


BAD_LOGS = (
    BadInput("no such file", lambda x: str(x / "none.csv"), ("none.csv", "cannot")),
    BadInput("a directory", _directory, ("directory", "expected a file")),
    BadInput("a pipe", _pipe, ("expected",)),
    BadInput("an http URL", _url("http://example.org/log.csv"), ("URL", "example.org")),
    BadInput("a file URL", _url("file:///etc/hostname"), ("URL",)),
    BadInput("a name with NUL", _url("log\0.csv"), ("cannot",)),
    BadInput("an empty file", text_file(""), ("empty",)),
    BadInput("blank lines alone", text_file("\ufeff\n\n  \n"), ("empty",)),
    BadInput("comments alone", text_file("# one\n# two\n"), ("header line",)),
    BadInput("a header alone", text_file(HEADER), ("no data rows",)),
    BadInput("a commented header", text_file("#" + HEADER + ROW), ("start", "begin with #")),
    BadInput("no start column", text_file("ra,dec\n1,2\n"), ("start", "'ra', 'dec'", "columns =")),
    BadInput("no dec column", text_file("ra,start\n1,62939\n"), ("dec", "'ra', 'start'")),
    BadInput("one name twice", text_file("ra,dec,dec,start\n1,2,3,62939\n"), ("ambiguous",)),
    BadInput(
        "a mapped column that is not there",
        text_file("RA_DEG,DEC_DEG,UTC\n1,2,62939\n"),
        ("RA_DEGREES", "'RA_DEG'"),
        {"columns": {"ra": "RA_DEGREES"}},
    ),
    BadInput(
        "an unknown canonical name",
        text_file(HEADER + ROW),
        ("'depht'", "'depth'"),
        {"columns": {"depht": "depth"}},
    ),
    BadInput(
        "accept without a quality column",
        text_file(HEADER + ROW),
        ("accept", "quality"),
        {"accept": ("good",)},
    ),
    BadInput("an empty accept", text_file(HEADER + ROW), ("accept",), {"accept": ()}),
    BadInput(
        "an unknown time scale", text_file(HEADER + ROW), ("'gps'", "'tai'"), {"time_scale": "gps"}
    ),
    BadInput("an unknown ra_unit", text_file(HEADER + ROW), ("'h'", "'hour'"), {"ra_unit": "h"}),
    BadInput("an unknown decimal", text_file(HEADER + ROW), ("decimal",), {"decimal": "'"}),
    BadInput("a long delimiter", text_file(HEADER + ROW), ("delimiter",), {"delimiter": "ab"}),
    BadInput(
        "the wrong delimiter", text_file(HEADER + ROW), ("no column for start",), {"delimiter": ";"}
    ),
    BadInput(
        "latitude 95 in every row",
        text_file("ra,dec,start\n1,95,62939\n2,96,62939\n"),
        ("row 2", "'dec'", "'95'", "-90 to 90"),
    ),
    BadInput(
        "NaN in every row",
        text_file("ra,dec,start\nnan,5,62939\n"),
        ("row 2", "'ra'", "'nan'"),
    ),
    BadInput(
        "dates without times",
        text_file("ra,dec,date\n1,5,2031-03-14\n"),
        ("row 2", "without a time of day"),
    ),
    BadInput(
        "times in Unix seconds",
        text_file("ra,dec,time\n1,5,1931491268\n"),
        ("row 2", "neither an MJD nor a JD"),
    ),
    BadInput(
        "a bow-tie in every row",
        text_file('start,s_region\n62939,"POLYGON ICRS 0 0 1 1 1 0 0 1"\n'),
        ("row 2", "'s_region'", "bow-tie"),
    ),
    BadInput(
        "a quote that never ends", text_file(HEADER + '"0001,1,2\n' + ROW), ("row 2", "quote")
    ),
    BadInput("UTF-16", text_file((HEADER + ROW).encode("utf-16")), ("UTF-16", "UTF-8")),
    BadInput("binary", text_file(b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR"), ("binary",)),
    BadInput(
        "gzip cut short",
        text_file(gzip.compress((HEADER + ROW * 50).encode())[:-12], "log.csv.gz"),
        ("compressed file",),
    ),
    BadInput(
        "gzip damaged",
        text_file(gzip.compress(b"x" * 99)[:12] + b"\xff" * 40, "log.csv.gz"),
        ("compressed file",),
    ),
    BadInput("FITS cut short", text_file(good_fits_table()[:9000], "log.fits"), ("cut short",)),
    BadInput("FITS header alone", text_file(good_fits_table()[:2000], "log.fits"), ("FITS",)),
    BadInput("FITS image", text_file(_image_only(), "log.fits"), ("no table", "images =")),
    BadInput(
        "ECSV with a broken header",
        text_file("# %ECSV 1.0\n# ---\n# datatype: [\nra dec start\n1 2 62939\n", "log.ecsv"),
        ("ECSV header",),
    ),
    BadInput(
        "ECSV whose names differ",
        text_file(
            "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: ra, datatype: float64}\nra dec\n1 2\n",
            "log.ecsv",
        ),
        ("names others",),
    ),
    BadInput("XML, not VOTable", text_file("<html><p>Sign in</p></html>", "log.xml"), ("VOTable",)),
    BadInput("XML cut short", text_file(votable(GOOD_DATA)[:-40], "log.xml"), ("well formed",)),
    BadInput(
        "VOTable with a file elsewhere",
        text_file(votable('<FITS><STREAM href="file:///etc/hostname"/></FITS>'), "log.xml"),
        ("/etc/hostname", "another file"),
    ),
    BadInput(
        "VOTable with a URL in a namespace",
        text_file(
            votable('<BINARY><v:STREAM xmlns:v="urn:x" v:href="http://example.org/x"/></BINARY>'),
            "log.xml",
        ),
        ("example.org",),
    ),
    BadInput(
        "VOTable with an entity",
        text_file(
            votable(GOOD_DATA, '<!DOCTYPE x [<!ENTITY a SYSTEM "file:///etc/hostname">]>\n'),
            "log.xml",
        ),
        ("DOCTYPE",),
    ),
    BadInput(
        "VOTable in another encoding",
        text_file(votable(GOOD_DATA).replace("UTF-8", "cp037"), "log.xml"),
        ("VOTable",),
    ),
    BadInput(
        "VOTable with a compressed stream",
        text_file(votable('<BINARY><STREAM encoding="gzip">H4sI</STREAM></BINARY>'), "log.xml"),
        ("'gzip'", "TABLEDATA"),
    ),
)

DETECTOR = "detector,xi,eta\nA,-0.1,-0.1\nA,0.1,-0.1\nA,0.1,0.1\nA,-0.1,0.1\n"

BAD_CAMERAS = (
    BadInput("no such file", lambda x: str(x / "none.csv"), ("none.csv",)),
    BadInput("a directory", _directory, ("directory",)),
    BadInput("a URL", _url("https://example.org/camera.csv"), ("URL",)),
    BadInput("an empty file", text_file(""), ("empty",)),
    BadInput("a header alone", text_file("detector,xi,eta\n"), ("no rows",)),
    BadInput("no eta", text_file("detector,xi,y\nA,1,2\n"), ("'eta'", "detector, xi, y")),
    BadInput("xi twice", text_file("detector,xi,xi,eta\nA,1,2,3\n"), ("2 columns 'xi'",)),
    BadInput("two corners", text_file("detector,xi,eta\nA,0,0\nA,1,1\n"), ("'A'", "row 2")),
    BadInput(
        "a bow-tie",
        text_file("detector,xi,eta\nA,0,0\nA,1,1\nA,1,0\nA,0,1\n"),
        ("'A'", "row 2", "cross"),
    ),
    BadInput(
        "corners on a line",
        text_file("detector,xi,eta\nA,0,0\nA,1,1\nA,2,2\n"),
        ("'A'", "one line"),
    ),
    BadInput(
        "a corner twice",
        text_file("detector,xi,eta\nA,0,0\nA,1,0\nA,1,0\nA,1,1\n"),
        ("'A'", "the same"),
    ),
    BadInput("60 degrees", text_file(DETECTOR.replace(",0.1\n", ",60\n")), ("60", "row 4", "eta")),
    BadInput("NaN", text_file(DETECTOR.replace("-0.1\n", "nan\n", 1)), ("nan", "row 2", "eta")),
    BadInput("a word", text_file(DETECTOR.replace("A,0.1", "A,wide", 1)), ("wide", "row 3", "xi")),
    BadInput("a short row", text_file(DETECTOR + "B,1\n"), ("row 6", "2 cells")),
    BadInput("scattered rows", text_file(DETECTOR + "B,0,0\nB,1,0\nB,1,1\nA,0,0\n"), ("together",)),
    BadInput("a nameless corner", text_file(DETECTOR + ",0,0\n"), ("row 6", "no detector name")),
    BadInput("pixels as unit", text_file(DETECTOR.replace("xi", "xi (pix)")), ("'pix'", "arcmin")),
)

# Text and the words of the message.
BAD_REGIONS: tuple[tuple[str, tuple[str, ...]], ...] = (
    ("", ("character 1", "the text ends")),
    ("   ", ("the text ends",)),
    ("10 20 30", ("character 1", "'10'")),
    ("blob 1 2 3", ("character 1", "'blob'")),
    ("circle", ("character 7", "the text ends")),
    ("circle 1 2", ("2 numbers", "expected 3")),
    ("circle 1 2 3 4", ("4 numbers", "expected 3")),
    ("circle 1 95 1", ("character 10", "95", "-90 to 90")),
    ("circle 1 2 0", ("radius",)),
    ("circle 1 2 -1", ("radius",)),
    ("circle 1 2 181", ("radius",)),
    ("circle 1000 2 1", ("longitude", "1000")),
    ("circle nan 2 1", ("character 8", "'nan'")),
    ("circle 1 inf 1", ("character 10", "'inf'")),
    ("circle 1 2 1e999", ("not finite",)),
    ("circle 1.2.3 2 1", ("'1.2.3'",)),
    ("circle 1_0 2 1", ("'1_0'",)),
    ("circle 1, 2, 1", ("character 9", "','")),
    ("polygon 0 0 1 0", ("at least 3",)),
    ("polygon 0 0 0 0 1 1 0 0", ("at least 3",)),
    ("polygon 0 0 1 0 1", ("5 numbers", "pairs")),
    ("polygon 0 0 1 1 1 0 0 1", ("bow-tie",)),
    ("polygon 0 0 nan nan 1 1", ("character 13", "'nan'")),
    ("polygon 0 0 120 0 240 0", ("hemisphere",)),
    ("polygon " + "1 2 " * 2001, ("2001 vertices", "MOC")),
    ("Polygon FK4 0 0 1 0 1 1", ("'FK4'", "ICRS")),
    ("Polygon ECLIPTIC 0 0 1 0 1 1", ("'ECLIPTIC'",)),
    ("Polygon FOO 0 0 1 0 1 1", ("'FOO'",)),
    ("Circle ICRS CARTESIAN2 0 0 1", ("'CARTESIAN2'", "SPHERICAL2")),
    ("Circle ICRS 0 0 1 unit rad", ("'rad'", "deg")),
    ("Circle ICRS 0 0 1 Time MJD 62939", ("'Time'", "times")),
    ("TimeInterval TT 1 2 Circle ICRS 0 0 1", ("'TimeInterval'",)),
    ("Box ICRS 0 0 1", ("3 numbers", "full width")),
    ("Box ICRS 0 0 0 1", ("0 by 1",)),
    ("Box ICRS 0 0 180 1", ("180 by 1",)),
    ("Position ICRS 1 2", ("no area",)),
    ("POINT('ICRS', 1, 2)", ("no area",)),
    ("range 0 1 0 1", ("parallels",)),
    ("Ellipse ICRS 1 2 3 4 5", ("ellipses",)),
    ("AllSky ICRS", ("180",)),
    ("Union ICRS (Circle 0 0 1", ("character 25", "the text ends", "')'")),
    ("Union ICRS ()", ("character 13", "')'")),
    ("Union ICRS Circle 0 0 1", ("character 12", "'('")),
    ("Not (Circle 0 0 1 Circle 1 1 1)", ("2 regions", "expected 1")),
    ("Difference (Circle 0 0 1)", ("1 regions", "expected 2")),
    ("Not (" * 40 + "Circle 0 0 1" + ")" * 40, ("32",)),
    ("Circle ICRS 0 0 1)", ("character 18", "')'")),
    ("CIRCLE('ICRS', 1, 2, 3", ("the text ends", "','")),
    ("CIRCLE('ICRS' 1, 2, 3)", ("'1'", "','")),
    ("CIRCLE('FOO', 1, 2, 3)", ("FOO",)),
    ("CIRCLE('ICRS FOO', 1, 2, 3)", ("FOO",)),
    ("CIRCLE('ICRS, 1, 2, 3)", ("closing quote",)),
    ("POLYGON(POINT('ICRS', 1, 2), POINT('GALACTIC', 1, 2), POINT(2, 2))", ("one frame",)),
    ("POLYGON(POINT(POINT(1, 2)), 3, 4)", ("'POINT'",)),
    ("REGION('Circle ICRS 1 2 3')", ("REGION",)),
    ("circle 1 2 " + "3" * 1_000_000, ("1000011 characters",)),
)


def image_header(**changes: Any) -> fits.Header:
    """Header of a 200 by 100 image, 0.01 deg per pixel, north up, about (150, -20)."""
    values: dict[str, Any] = {
        "CTYPE1": "RA---TAN",
        "CTYPE2": "DEC--TAN",
        "CRVAL1": 150.0,
        "CRVAL2": -20.0,
        "CRPIX1": 100.5,
        "CRPIX2": 50.5,
        "CDELT1": -0.01,
        "CDELT2": 0.01,
        "RADESYS": "ICRS",
        "DATE-OBS": "2031-03-14T05:30:00",
        "EXPTIME": 60.0,
        "FILTER": "r",
    }
    values.update({key.replace("_", "-"): value for key, value in changes.items()})
    return fits.Header([(key, value) for key, value in values.items() if value is not None])


def image_file(name: str = "a.fits", **changes: Any) -> Callable[[Path], str]:
    """Return a writer of one image with this header."""

    def write(folder: Path) -> str:
        data = np.zeros((100, 200), np.uint8)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            fits.PrimaryHDU(data, image_header(**changes)).writeto(folder / name)
        return str(folder / "*.fits*")

    return write


def _image_folder(folder: Path) -> str:
    (folder / "a.fits").mkdir()
    return str(folder / "*.fits")


BAD_IMAGES = (
    BadInput("nothing matches", lambda x: str(x / "*.fits"), ("no file", "*.fits")),
    BadInput("a URL", _url("http://example.org/*.fits"), ("URL",)),
    BadInput("a folder", _image_folder, ("a.fits", "regular file")),
    BadInput("no FITS", text_file("hello", "a.fits"), ("a.fits", "neither as FITS")),
    BadInput("a zip", text_file(b"PK\x03\x04" + b"\0" * 60, "a.fits"), ("neither as FITS",)),
    BadInput("no start", image_file(DATE_OBS=None), ("'DATE-OBS'", "start =")),
    BadInput("a date alone", image_file(DATE_OBS="2031-03-14"), ("without a time of day",)),
    BadInput("an odd time scale", image_file(TIMESYS="GPS"), ("'TIMESYS'", "'gps'")),
    BadInput("no coordinates", image_file(CTYPE1=None, CTYPE2=None), ("CTYPE1", "footprint")),
    BadInput("linear axes", image_file(CTYPE1="X", CTYPE2="Y"), ("CTYPE1",)),
    BadInput("latitude 95", image_file(CRVAL2=95.0), ("astrometry",)),
    BadInput("no such projection", image_file(CTYPE1="RA---QQQ", CTYPE2="DEC--QQQ"), ("CTYPE1",)),
    BadInput("one axis", image_file(CTYPE2=None), ("CTYPE1",)),
    BadInput("a scale of 0", image_file(CDELT1=0.0), ("astrometry",)),
    BadInput("an exposure time below 0", image_file(EXPTIME=-5.0), ("'EXPTIME'", "negative")),
    BadInput("an unknown frame", image_file(RADESYS="QQQ"), ("CTYPE1",)),
)
