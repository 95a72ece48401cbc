"""Broken logs, cameras, regions, images, commands and output folders, as in `bad_input_cases`."""

from __future__ import annotations

import gzip
import io
from pathlib import Path

import numpy as np
from astropy.io import fits
from bad_input_changes import (
    REGIONS,
    REPORT,
    TALLY,
    Case,
    Change,
    as_dangling_link,
    as_folder,
    as_pipe,
    both,
    edit,
    fits_bytes,
    gone,
    heron,
    nothing,
    put,
    recoded,
    toml,
)
from bad_log_inputs import GOOD_DATA, good_fits_table, votable

LOG = "logs/heron.csv"
HEADER = "Image,RA_DEG,DEC_DEG,PA,UTC,EXPTIME,FILTER,LIM,STATUS"
FIRST = "0211,144.5342,-10.7486,325,2031-03-14T19:42:10Z,120,r,20.61,done"
ENTITY = '<!DOCTYPE x [<!ENTITY a SYSTEM "file:///etc/hostname">]>\n'
BROKEN_ECSV = "# %ECSV 1.0\n# ---\n# datatype: [\nra dec start\n1 2 62939\n"
HREF = '<FITS><STREAM href="https://skytally.invalid/log.fits"/></FITS>'
LOG_FILE = ("heron.csv",)


def every_row(column: int, value: str) -> Change:
    """Return a change of one column of Heron's log in all rows."""

    def change(folder: Path) -> None:
        lines = (folder / LOG).read_text(encoding="utf-8").splitlines()
        rows = [line.split(",") for line in lines]
        for row in rows[2:]:
            row[column] = value
        (folder / LOG).write_text("".join(f"{','.join(row)}\n" for row in rows), encoding="utf-8")

    return change


def packed_log(content: bytes) -> Change:
    return both(put("logs/heron.csv.gz", content), toml("heron.csv", "heron.csv.gz"))


LOGS = (
    Case("log empty", put(LOG, ""), ("heron.csv", "empty"), "Give a table with a header line",
         code=1),
    Case("log of blank lines", put(LOG, "\ufeff\n \n"), ("heron.csv", "empty"), "header line",
         code=1),
    Case("log of a header", put(LOG, HEADER + "\n"), ("heron.csv", "no data rows"), "Give the",
         code=1),
    Case("log of comments", put(LOG, "# one\n"), ("heron.csv", "row 1"), "name the columns",
         code=1),
    Case("mapped column absent", heron("RA_DEG", "RA"), ("'RA_DEG'", "ra"), "the log has", code=1),
    Case("needed column absent", edit("logs/plover.csv", "start", "begun"),
         ("plover.csv", "start"), "columns = { start", code=1),
    Case("column twice", heron("DEC_DEG", "RA_DEG"), ("heron.csv", "'DEC_DEG'"), "the log has",
         code=1),
    Case("name of a column twice", both(heron("LIM", "UTC"), toml('depth = "LIM"', "")),
         ("heron.csv", "'UTC'"), "its own name", code=1),
    Case("accept without quality", edit("logs/plover.csv", "quality", "remark"),
         ("plover.csv", "accept"), "columns = { quality", code=1),
    Case("log binary", put(LOG, b"\x89PNG\r\n\x1a\n\0\0\0\rIHDR"), ("binary",), "Give a CSV",
         code=1),
    Case("log noise", put(LOG, bytes(range(1, 255)) * 40), LOG_FILE, "columns", code=1),
    Case("log UTF-16", put(LOG, (HEADER + "\n").encode("utf-16")), ("UTF-16",), "as UTF-8", code=1),
    Case("quote without end", heron("0212,", '"0212,'), ("heron.csv", "row 4"), "Close the",
         code=1),
    Case("log a folder", as_folder(LOG), ("telescope[1].log.file", "directory"), "Name the file"),
    Case("log a pipe", as_pipe(LOG), ("telescope[1].log.file", "pipe"), "Give the log's file"),
    Case("log a dangling link", as_dangling_link(LOG), ("log.file", "heron.csv"), "relative"),
    Case("log absent", gone(LOG), ("telescope[1].log.file", "heron.csv"), "relative"),
    Case("log a URL", toml("logs/heron.csv", "ftp://skytally.invalid/heron.csv"),
         ("telescope[1].log.file", "URL"), "Download it first"),
    Case("log of a name with NUL", toml("logs/heron.csv", "logs/\\u0000.csv"),
         ("telescope[1].log.file", "u0000"), "Give the log's file"),
    Case("log gzip cut short", packed_log(gzip.compress(FIRST.encode() * 999)[:-20]),
         ("heron.csv.gz", "too early"), "copy or download it again", code=1),
    Case("log a bomb", packed_log(gzip.compress(bytes(257 << 20), 1)),
         ("heron.csv.gz", "256 MiB"), "right file", code=1),
    Case("log FITS cut short", put(LOG, good_fits_table()[:9000]), ("rows",), "download it again",
         code=1),
    Case("log FITS of a header", put(LOG, good_fits_table()[:2000]), LOG_FILE, "again", code=1),
    Case("log ECSV of a broken header", put(LOG, BROKEN_ECSV), ("ECSV header", "row 1"), "plain",
         code=1),
    Case("log ECSV of no columns", put(LOG, "# %ECSV 1.0\n# ---\n# datatype:\nra dec\n"),
         ("ECSV header", "row 1"), "as plain CSV", code=1),
    Case("log HTML", put(LOG, "<html><p>Sign in</p></html>"), ("VOTable",), "Fetch or write",
         code=1),
    Case("log XML cut short", put(LOG, votable(GOOD_DATA)[:-40]), ("row", "XML"), "again", code=1),
    Case("VOTable of another type", put(LOG, votable(GOOD_DATA).replace("double", "quaternion", 1)),
         ("heron.csv", "VOTable"), "Fetch or write", code=1),
    Case("VOTable with a reference", put(LOG, votable(HREF)), ("skytally.invalid",), "inside",
         code=1),
    Case("VOTable with an entity", put(LOG, votable("&a;", ENTITY)), ("DOCTYPE",), "inside",
         code=1),
    Case("declination 95 everywhere", every_row(2, "95"), ("row 3", "'DEC_DEG'"), "-90 to 90",
         code=1),
    Case("times as seconds", every_row(4, "1931491268"), ("row 3", "'UTC'"), "an MJD or a JD",
         code=1),
    Case("dates alone", every_row(4, "2031-03-14"), ("row 3", "time of day"), "an MJD or a JD",
         code=1),
    Case("a delimiter of no use", toml('# delimiter = ","', 'delimiter = ";"'), LOG_FILE, "has",
         code=1),
    Case("a delimiter of letters", toml('# delimiter = ","', 'delimiter = "ab"'),
         ("telescope[1]", "log.delimiter"), "between the columns"),
)  # fmt: skip


def _with_region(text: str) -> Change:
    """Return a change by which the first row of Heron's log gives this region."""

    def change(folder: Path) -> None:
        lines = (folder / LOG).read_text(encoding="utf-8").splitlines()
        lines[1] += ",s_region"
        lines[2:] = [line + "," for line in lines[2:]]
        lines[2] += text
        (folder / LOG).write_text("\n".join(lines) + "\n", encoding="utf-8")

    return change


def row(name: str, change: Change, column: str, remedy: str, *more: str) -> Case:
    """A case in which row 3 of Heron's log is at fault and the others count."""
    return Case(name, change, ("heron.csv, row 3:", column, *more), remedy, TALLY, 0)


ROWS = (
    row("declination 95", heron("-10.7486", "95"), "'DEC_DEG'", "give degrees in -90 to 90", "95"),
    row("declination NaN", heron("-10.7486", "nan"), "'DEC_DEG'", "give degrees", "nan"),
    row("right ascension 400", heron("144.5342", "400"), "'RA_DEG'", "give degrees in 0 to 360"),
    row("right ascension missing", heron("144.5342", ""), "'RA_DEG'", "fill it in"),
    row("right ascension of 75 minutes", heron("144.5342", "9:75:00"), "'RA_DEG'", "correct"),
    row("a comma for a point", heron("144.5342", "144,5342"), "10 cells", "in quotes", "9"),
    row("a comma in quotes", heron("144.5342", '"144,5342"'), "'RA_DEG'", 'decimal = ","'),
    row("a short row", heron(",20.61,done", ""), "7 cells", "complete it"),
    row("no time", heron("2031-03-14T19:42:10Z", "tonight"), "'UTC'", "an MJD or a JD", "tonight"),
    row("a day that is none", heron("03-14T19:42", "02-30T19:42"), "'UTC'", "give 2031", "02-30"),
    row("hour 25", heron("T19:42:10", "T25:42:10"), "'UTC'", "give 2031", "time of day"),
    row("offset of 40 hours", heron("19:42:10Z", "19:42:10+40:00"), "'UTC'", "give 2031"),
    row("duration negative", heron("Z,120,", "Z,-120,"), "'EXPTIME'", "in seconds", "negative"),
    row("duration of text", heron("Z,120,", "Z,long,"), "'EXPTIME'", "in seconds", "long"),
    row("angle of text", heron(",325,", ",N-S,"), "'PA'", "east of north", "N-S"),
    row("a huge cell", heron("144.5342", "1" * 200_000), "'RA_DEG'", "one value", "200000"),
    row("a cell beyond all bounds", heron("0211,", "1" * 2_000_000 + ","), "1100000", "mend it"),
    row("a region that is a bow-tie", _with_region("POLYGON 0 0 1 1 1 0 0 1"), "'s_region'",
        "correct the text", "bow-tie"),
    row("a region with NaN", _with_region("POLYGON 0 0 nan nan 0 1"), "'s_region'", "correct",
        "'nan'"),
    row("a region at latitude 95", _with_region("CIRCLE 10 95 1"), "'s_region'", "correct", "95"),
    row("a region at a URL", _with_region("https://skytally.invalid/a.fits"), "'s_region'",
        "fetch the file first", "URL"),
    row("a region file absent", _with_region("none.fits"), "none.fits", "Check the path"),
    row("a region file broken",
        both(_with_region("part.fits"), put("logs/part.fits", "6/1-2 frog")),
        "part.fits", "Write a MOC", "'frog'"),
    Case("right ascension in hours", every_row(1, "9.64"), ("Heron", "'RA_DEG'", "0 to 24"),
         'set ra_unit = "hour"', TALLY, 0),
    Case("one right ascension in hours", edit("logs/plover.csv", "10:05:48.39", "10.096775"),
         ("Plover", "'ra'", "1 of 9"), "set ra_unit", TALLY, 0),
    Case("an event after all logs", toml("2031-03-14T05:21:08Z", "2131-03-14T05:21:08Z"),
         ("Heron", "heron.csv", "all set aside"), "check the event's time", TALLY, 0),
    Case("depth of text", heron("20.61", "clear"), ("'LIM'", "row 3", "clear"), "missing",
         TALLY, 0),
    Case("log in Latin-1", recoded(heron("0211", "Möwe"), LOG), ("Heron", "Latin-1"),
         "check names", TALLY, 0),
)  # fmt: skip

# ---------------------------------------------------------------- cameras

CORNERS = "cameras/plover.csv"
PLOVER = ("plover.csv",)

CAMERAS = (
    Case("camera of two corners", put(CORNERS, "detector,xi,eta\nA,0,0\nA,1,1\n"),
         (*PLOVER, "row 2", "'A'"), "in order around it"),
    Case("camera a bow-tie", put(CORNERS, "detector,xi,eta\nA,0,0\nA,1,1\nA,1,0\nA,0,1\n"),
         (*PLOVER, "row 2", "'A'"), "in order around it"),
    Case("camera on a line", put(CORNERS, "detector,xi,eta\nA,0,0\nA,1,1\nA,2,2\n"),
         (*PLOVER, "row 2", "one line"), "in order around it"),
    Case("camera with NaN", edit(CORNERS, "-0.95", "nan"), (*PLOVER, "row 4", "'xi'"), "degrees"),
    Case("camera of 60 degrees", edit(CORNERS, "-0.95", "60"), (*PLOVER, "row 4", "'xi'"), "Give"),
    Case("camera scattered", edit(CORNERS, "D,+0.05,-0.05", "A,+0.05,-0.05"),
         (*PLOVER, "row 19", "'A'"), "one after the other"),
    Case("camera without eta", edit(CORNERS, "xi,eta", "xi,y"), (*PLOVER, "'eta'"), "name its"),
    Case("camera short of a cell", edit(CORNERS, "A,-0.95,+0.05", "A,-0.95"),
         (*PLOVER, "row 4"), "complete it"),
    Case("camera empty", put(CORNERS, ""), (*PLOVER, "empty"), "Give a table"),
    Case("camera of a header", put(CORNERS, "detector,xi,eta\n"), (*PLOVER, "no rows"), "Give one"),
    Case("camera absent", gone(CORNERS), ("telescope[2].camera.file", "(Plover)"), "relative"),
    Case("camera a folder", as_folder(CORNERS), ("telescope[2].camera.file",), "Name the file"),
    Case("camera a URL", toml("cameras/plover.csv", "https://skytally.invalid/c.csv"),
         ("telescope[2].camera.file", "URL"), "Download it first"),
    Case("camera binary", put(CORNERS, b"\0\1\2" * 99), (*PLOVER, "binary"), "Give a CSV"),
)  # fmt: skip

# ---------------------------------------------------------------- masks and searchable regions


def mask(text: str) -> Change:
    """Return a change that gives Heron a mask of one entry."""
    return toml('# mask = ["circle 148.1 -9.3 0.1"]', f'mask = ["{text}"]')


def mask_file(content: str | bytes) -> Change:
    return both(mask("mask.fits"), put("mask.fits", content))


def searchable(name: str, content: str | bytes | None = None) -> Change:
    change = toml('# searchable = "reference.fits"', f'searchable = "{name}"')
    return change if content is None else both(change, put(name, content))


def moc(numbers: object, kind: str = "K", **header: object) -> bytes:
    stated = {"ORDERING": "NUNIQ", "COORDSYS": "C", **header}
    return fits_bytes([fits.Column("UNIQ", kind, array=np.asarray(numbers))], **stated)


MASK = ("telescope[1].mask", "(Heron)")
SEARCHABLE = ("telescope[1].searchable", "(Heron)")

REGION_CASES = (
    Case("mask a bow-tie", mask("polygon 0 0 1 1 1 0 0 1"), (*MASK, "bow-tie"), "order"),
    Case("mask at latitude 95", mask("circle 10 95 1"), (*MASK, "95", "character 11"), "-90"),
    Case("mask with NaN", mask("polygon 0 0 1 nan 1 1"), (*MASK, "'nan'"), "number"),
    Case("mask of too few numbers", mask("circle 10 5"), (*MASK, "2 numbers"), "radius"),
    Case("mask in another frame", mask("circle FK4 10 5 1"), (*MASK, "'FK4'"), "ICRS"),
    Case("mask absent", mask("none.fits"), (*MASK, "none.fits"), "relative"),
    Case("mask of no entry", toml('# mask = ["circle 148.1 -9.3 0.1"]', "mask = []"), MASK, "MOC"),
    Case("mask a broken MOC", mask_file(moc([4, 5])[:3000]), ("mask.fits", "no table"), "cut"),
    Case("mask a MOC of UNIQ 3", mask_file(moc([4, 3])), ("mask.fits", "3"), "Write the MOC again"),
    Case("mask a MOC of reals", mask_file(moc([4.0], "D")), ("mask.fits", "integers"), "Write the"),
    Case("mask a MOC of a damaged keyword",
         mask_file(moc([4]).replace(b"ORDERING= 'NUNIQ   '", b"ORDERING= 'NUNIQ    ")),
         ("mask.fits", "ORDERING"), "Correct the header"),
    Case("mask a MOC of time", mask_file(moc([4], MOCDIM="TIME")), ("TIME",), "of the sky alone"),
    Case("mask a MOC in Galactic", mask_file(moc([4], COORDSYS="G")), ("'G'",), "Convert it"),
    Case("mask a MOC of words", mask_file("6/1-2 frog"), ("mask.fits", "'frog'"), "Write a MOC"),
    Case("mask a MOC beyond its order", mask_file("6/99999"), ("mask.fits", "99999"), "Check the"),
    Case("mask a MOC of order 30", mask_file("30/1"), ("mask.fits", "30"), "Write a MOC"),
    Case("mask a MOC of endless digits", mask_file("6/" + "1" * 9999), ("9999 digits",), "Write a"),
    Case("mask a broken JSON MOC", mask_file('{"6": [1, 2'), ("mask.fits", "JSON"), "Write a MOC"),
    Case("mask a JSON MOC of text", mask_file('{"6": ["a"]}'), ("mask.fits", "'a'"), "Write a MOC"),
    Case("mask binary", mask_file(b"\x80\x81\xff"), ("mask.fits", "neither"), "right file"),
    Case("mask empty", mask_file(""), ("mask.fits", "empty"), "Write a MOC"),
    Case("searchable absent", searchable("none.fits"), (*SEARCHABLE, "none.fits"), "relative"),
    Case("searchable a folder", searchable("maps"), (*SEARCHABLE, "directory"), "Name the file"),
    Case("searchable a URL", searchable("https://skytally.invalid/a.fits"), SEARCHABLE, "Download"),
    Case("searchable a map", searchable("maps/first.fits"), ("first.fits", "PROBDENSITY"), "MOC"),
    Case("mask a map", mask("maps/first.fits"), ("first.fits", "PROBDENSITY"), "write its region"),
    Case("searchable a log", searchable("logs/heron.csv"), ("heron.csv", "'#'"), "Write a MOC"),
)  # fmt: skip

# ---------------------------------------------------------------- images


def images(pattern: str) -> Change:
    """Return a change that gives Plover images in place of its log."""
    return toml('log = { file = "logs/plover.csv", accept = ["ok"] }', f'images = "{pattern}"')


def _plain_image(folder: Path) -> None:
    stream = io.BytesIO()
    fits.PrimaryHDU(np.zeros((4, 4), np.int16)).writeto(stream)
    (folder / "a.fits").write_bytes(stream.getvalue())


IMAGES = (
    Case("images absent", images("frames/*.fits"), ("frames/*.fits",), "Check the folder", code=1),
    Case("images at a URL", images("https://skytally.invalid/*.fits"),
         ("telescope[2].images", "URL"), "Download it first"),
    Case("images that are none", both(images("a.fits"), put("a.fits", "hello")),
         ("a.fits",), "fetch it again", code=1),
    Case("images without keywords", both(images("a.fits"), _plain_image),
         ("a.fits", "'DATE-OBS'"), "start =", code=1),
)  # fmt: skip

# ---------------------------------------------------------------- commands and outputs

COMMANDS = (
    Case("no command", nothing, ("Usage: ",), "--help", ("--frob",)),
    Case("unknown command", nothing, ("'audit-all'",), "--help", ("audit-all",)),
    Case("unknown option", nothing, ("--colour",), "--help", (*TALLY, "--colour")),
    Case("report without out", nothing, ("--out",), "--help", REPORT[:2]),
    Case("two campaigns", nothing, ("other.toml",), "--help", (*TALLY, "other.toml")),
    Case("unknown version", nothing, ("'9'", "1 first"), "2 update", (*TALLY, "--map", "9")),
    Case("new over a campaign", nothing, ("campaign.toml",), "Choose a new folder",
         ("new", "{folder}")),
    Case("new over a file", nothing, ("campaign.toml", "file"), "Choose a new folder",
         ("new", "{folder}/campaign.toml")),
)  # fmt: skip


def out(name: str, command: tuple[str, ...] = REPORT) -> tuple[str, ...]:
    return (*command[:3], "{folder}/" + name)


def _foreign(name: str) -> Change:
    """Return a change that puts a file of somebody else where an output goes."""

    def change(folder: Path) -> None:
        (folder / "out" / name).parent.mkdir(parents=True)
        (folder / "out" / name).write_text("mine", encoding="utf-8")

    return change


def _link_out(folder: Path) -> None:
    (folder / "out").symlink_to("moved-away")


CAMPAIGN = "campaign.toml"
OUTPUTS = (
    Case("out is a file", nothing, (CAMPAIGN, "not a folder"), "Choose another folder",
         out(CAMPAIGN), 3),
    Case("out below a file", nothing, ("campaign.toml/out",), "Choose another folder",
         out("campaign.toml/out"), 3),
    Case("out where nothing can be made", nothing, ("/proc/out",), "another folder",
         (*REPORT[:3], "/proc/out/deep"), 3),
    Case("out a dangling link", _link_out, ("out", "not a folder"), "Choose another", REPORT, 3),
    Case("out of a name too long", nothing, ("xxxx", "too long"), "another", out("x" * 300), 3),
    Case("a file of somebody else", _foreign("report.html"), ("out/report.html",), "Move it",
         REPORT, 3),
    Case("a region of somebody else", _foreign("all.fits"), ("out/all.fits",), "Move it",
         REGIONS, 3),
    Case("a file where a folder goes", _foreign("regions"), ("out/regions",), "Move it", REPORT, 3),
    Case("a manifest of somebody else", _foreign("manifest.json"), ("manifest.json",), "Move it",
         REGIONS, 3),
    Case("new below a file", nothing, ("campaign.toml/night",), "choose another folder",
         ("new", "{folder}/campaign.toml/night"), 3),
)  # fmt: skip
