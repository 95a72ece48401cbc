"""The campaign file: what it loads to, and one plain sentence for each of its faults."""

from __future__ import annotations

import copy
import hashlib
import json
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from pydantic import ValidationError
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.campaign import AuditOptions, CampaignSettings, ReportText, Site, load_campaign
from skytally.campaign_faults import _EXPECTED, parse_campaign
from skytally.campaign_model import TABLES, is_region_text
from skytally.errors import CampaignError, LogError, MapError, SkytallyError
from skytally.moc import write_moc
from skytally.shapes import Circle, Polygon
from skytally.spans import Spans

LOG = """exposure,ra,dec,start,duration,band,depth,quality
a1,150.0,-8.0,2031-03-14T20:00:00,120,r,20.5,done
a2,151.0,-8.0,2031-03-14T20:05:00,120,r,20.6,done
a3,152.0,-8.0,2031-03-14T20:10:00,30,r,,aborted
a0,150.0,-8.0,2031-03-13T20:00:00,120,r,20.4,done
"""
MOSAIC = "detector,xi,eta\n" + "".join(
    f"{name},{x + a},{b}\n"
    for name, x in (("A", -1.1), ("B", 0.1))
    for a, b in ((0, -0.5), (1, -0.5), (1, 0.5), (0, 0.5))
)
GOOD = """
[event]
name = "Lantern 7"
time = 2031-03-14T05:21:08Z

[[map]]
version = "1 first"
circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }
issued = 2031-03-14T05:27:00Z

[[telescope]]
name = "Heron"
site = { longitude = 21.41, latitude = -31.07, height = 1790 }
camera = { shape = "rectangle", width = 1.6, height = 1.2 }
log = { file = "logs/heron.csv", accept = ["done"] }
depth = { system = "AB", significance = 5 }

[[telescope]]
name = "Plover"
camera = { shape = "circle", radius = 0.5 }
log = "logs/heron.csv"
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return a folder that holds what the texts below name."""
    (tmp_path / "logs").mkdir()
    (tmp_path / "logs/heron.csv").write_text(LOG)
    (tmp_path / "mosaic.csv").write_text(MOSAIC)
    write_moc(Spans.from_cells(3, np.array([5, 6])), tmp_path / "moc.fits")
    return tmp_path


def write(folder: Path, text: str) -> Path:
    path = folder / "campaign.toml"
    path.write_text(text, encoding="utf-8")
    return path


def changed(old: str, new: str) -> str:
    assert GOOD.count(old) >= 1
    return GOOD.replace(old, new, 1)


def mjd(*moment: int) -> float:
    """MJD of a UTC time: days since 1858-11-17, the definition of the MJD (from memory)."""
    start = datetime(1858, 11, 17, tzinfo=UTC)
    return (datetime(*moment, tzinfo=UTC) - start) / timedelta(days=1)  # type: ignore[misc]


def test_a_good_campaign_loads(folder: Path) -> None:
    path = write(folder, GOOD)
    campaign = load_campaign(path)
    assert campaign.path == path
    assert campaign.event_name == "Lantern 7"
    assert campaign.event_mjd == mjd(2031, 3, 14, 5, 21, 8)
    assert campaign.settings == CampaignSettings()
    assert campaign.report == ReportText()
    heron, plover = campaign.telescopes
    assert (heron.name, plover.name) == ("Heron", "Plover")
    assert heron.site == Site(21.41, -31.07, 1790.0)
    assert plover.site is None
    assert heron.camera_text == "rectangle 1.6 x 1.2 deg"
    assert plover.camera_text == "circle of radius 0.5 deg"
    assert isinstance(heron.camera, MosaicCamera)
    np.testing.assert_allclose(np.abs(heron.camera.corners[0]), [[0.8, 0.6]] * 4)
    assert plover.camera == CircleCamera(0.5)
    # The aborted row and the one of the night before do not count; Plover accepts any quality.
    assert list(heron.log.exposure) == ["a1", "a2"]
    assert {a.exposure: a.reason for a in heron.log.set_aside} == {
        "a3": "not accepted",
        "a0": "before the event",
    }
    assert list(plover.log.exposure) == ["a1", "a2", "a3"]
    assert heron.log.file == "logs/heron.csv"
    assert {a.file for a in heron.log.set_aside} == {"logs/heron.csv"}


def test_inputs_carry_the_hash_of_each_file(folder: Path) -> None:
    text = changed('log = "logs/heron.csv"', 'log = "logs/heron.csv"\nsearchable = "moc.fits"')
    text = text.replace(
        'camera = { shape = "circle", radius = 0.5 }',
        'camera = { shape = "mosaic", file = "mosaic.csv" }\nmask = ["moc.fits"]',
    )
    campaign = load_campaign(write(folder, text))
    expected = {
        ("campaign", "campaign.toml"),
        ("log", "logs/heron.csv"),
        ("camera", "mosaic.csv"),
        ("mask", "moc.fits"),
        ("searchable", "moc.fits"),
    }
    assert {(role, name) for role, name, _ in campaign.inputs} == expected
    for _, name, digest in campaign.inputs:
        assert digest == hashlib.sha256((folder / name).read_bytes()).hexdigest()
    plover = campaign.telescopes[1]
    assert plover.camera_text == "mosaic of 2 detectors"
    region = Spans.from_cells(3, np.array([5, 6]))
    assert plover.searchable == region
    assert plover.mask == (region,)


def test_masks_take_region_texts_beside_files(folder: Path) -> None:
    text = changed('log = "', 'mask = ["circle 150 -8 0.2", "moc.fits"]\nlog = "')
    mask = load_campaign(write(folder, text)).telescopes[1].mask
    assert mask[0] == Circle(150.0, -8.0, 0.2)
    assert isinstance(mask[1], Spans)


@pytest.mark.parametrize(
    ("text", "region"),
    [
        ("circle 150 -8 0.2", True),
        ("POLYGON ICRS 1 2 3 4 5 6", True),
        ("CIRCLE('ICRS', 1, 2, 3)", True),
        ("Union ICRS (Circle 1 2 3 Circle 4 5 6)", True),
        ("circle.fits", False),
        ("masks/polygon 3.fits", False),
        ("box.json", False),
    ],
)
def test_region_texts_are_told_from_file_names(text: str, region: bool) -> None:
    assert is_region_text(text) is region


def test_settings_depth_defaults_and_report_arrive(folder: Path) -> None:
    text = changed(
        "[[map]]",
        '[settings]\nmagnitude_system = "Vega"\nsignificance = 3\nbracket = 0.01\n'
        "revisit = { visits = 3, gap_minutes = 45.5 }\n"
        '[report]\nauthors = ["A. Observer"]\naffiliations = ["Somewhere"]\nthanks = "All."\n'
        'paper = "Letter"\n'
        "[[map]]",
    )
    text += (
        'depth = { system = "Vega", significance = 3, vega_offset = { r = 0.16 } }\n'
        "defaults = { angle = 12 }\n"
    )
    campaign = load_campaign(write(folder, text))
    assert campaign.settings == CampaignSettings("Vega", 3.0, 3, 45.5, 0.01)
    assert campaign.report == ReportText(("A. Observer",), ("Somewhere",), "All.", "Letter")
    plover = campaign.telescopes[1]
    assert (plover.depth_system, plover.depth_significance) == ("Vega", 3.0)
    assert plover.vega_offsets == {"r": 0.16}
    assert set(plover.log.angle_deg) == {12.0}
    assert not campaign.notes


def test_an_unstated_depth_system_is_noted(folder: Path) -> None:
    (note,) = load_campaign(write(folder, GOOD)).notes
    assert note.startswith("Plover: the campaign states no depth system")
    assert "AB magnitudes at 5 sigma" in note


def test_images_bring_their_own_footprints(folder: Path) -> None:
    header = fits.Header()
    header.update(
        {"CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CRVAL1": 150.0, "CRVAL2": -8.0}
        | {"CRPIX1": 5.5, "CRPIX2": 5.5, "CDELT1": -0.1, "CDELT2": 0.1}
        | {"DATE-BEG": "2031-03-14T20:00:00", "EXPTIME": 60.0}
    )
    fits.PrimaryHDU(np.zeros((10, 10), dtype=np.int16), header).writeto(folder / "f1.fits")
    text = changed('log = "logs/heron.csv"', 'images = { files = "f*.fits", start = "DATE-BEG" }')
    text = text.replace('camera = { shape = "circle", radius = 0.5 }\n', "")
    text += 'defaults = { band = "i", depth = 19.5, angle = 3 }\n'
    campaign = load_campaign(write(folder, text))
    plover = campaign.telescopes[1]
    assert plover.camera is None
    assert plover.camera_text == "footprints from the images"
    assert (list(plover.log.band), list(plover.log.depth)) == (["i"], [19.5])
    (region,) = plover.regions.values()
    assert isinstance(region, Polygon)
    # Ten pixels of 0.1 deg each way, so the pole-facing sides lie 0.5 deg off the centre.
    np.testing.assert_allclose(np.ptp(region.vertices_deg[:, 1]), 1.0, atol=0.01)
    assert ("log", "f*.fits") in {(role, name) for role, name, _ in campaign.inputs}
    assert any("the default angle is not used" in note for note in campaign.notes)


def test_a_log_with_regions_needs_no_camera(folder: Path) -> None:
    write_moc(Spans.from_cells(4, np.array([9])), folder / "logs/field.fits")
    (folder / "logs/regions.csv").write_text(
        "exposure,start,duration,band,depth,region\n"
        "a1,2031-03-14T20:00:00,120,r,20.5,circle 150 -8 0.5\n"
        "a2,2031-03-14T20:10:00,120,r,20.5,field.fits\n"
        "a3,2031-03-14T20:20:00,120,r,20.5,circle 150 -98 0.5\n"
    )
    text = changed('log = "logs/heron.csv"', 'log = "logs/regions.csv"')
    text = text.replace('camera = { shape = "circle", radius = 0.5 }\n', "")
    campaign = load_campaign(write(folder, text))
    plover = campaign.telescopes[1]
    assert plover.camera_text == "regions from the log"
    assert plover.regions == {
        "circle 150 -8 0.5": Circle(150.0, -8.0, 0.5),
        "field.fits": Spans.from_cells(4, np.array([9])),
    }
    assert plover.log.read == len(plover.log) + len(plover.log.set_aside) == 3
    named = {(role, name): digest for role, name, digest in campaign.inputs}
    digest = hashlib.sha256((folder / "logs/field.fits").read_bytes()).hexdigest()
    assert named["region", "logs/field.fits"] == digest


SECOND = '[[map]]\nversion = "0 early"\ncircle = { ra = 1, dec = 2, radius_90 = 3 }\n'


def test_maps_are_sorted_by_issue_time(folder: Path) -> None:
    # 05:25 UTC written in another zone comes before 05:27 UTC.
    text = changed("[[telescope]]", SECOND + "issued = 2031-03-14T07:25:00+02:00\n[[telescope]]")
    campaign = load_campaign(write(folder, text))
    assert [m.label for m in campaign.maps] == ["0 early", "1 first"]
    assert campaign.maps[0].issued_mjd == mjd(2031, 3, 14, 5, 25, 0)


def test_maps_keep_their_order_where_an_issue_time_is_missing(folder: Path) -> None:
    campaign = load_campaign(write(folder, changed("[[telescope]]", SECOND + "[[telescope]]")))
    assert [m.label for m in campaign.maps] == ["1 first", "0 early"]
    assert any("'0 early' has no issue time" in note for note in campaign.notes)


def test_a_map_issued_before_the_event_is_noted_not_refused(folder: Path) -> None:
    campaign = load_campaign(write(folder, changed("T05:27:00Z", "T05:20:00Z")))
    assert any("'1 first' was issued before the event" in note for note in campaign.notes)


# Text to replace, its replacement, words that the message must hold.
BROKEN: dict[str, tuple[str, str, tuple[str, ...]]] = {
    "naive time": (
        "T05:21:08Z",
        "T05:21:08",
        ("event.time: got 2031-03-14T05:21:08,", "Add Z for UTC"),
    ),
    "quoted time": (
        "2031-03-14T05:21:08Z",
        '"2031-03-14T05:21:08Z"',
        ("event.time", "without quotes"),
    ),
    "date only": (
        "2031-03-14T05:21:08Z",
        "2031-03-14",
        ("event.time: got 2031-03-14,", "a date and time without quotes"),
    ),
    "no event time": ("time = ", "tine = ", ("event.time: missing, expected a date and time",)),
    "unknown event key": ("time = ", "tine = ", ("event.tine: unknown key. Did you mean time?",)),
    "no event": ("[event]", "[settings]", ("event.name: missing", "Give the event's name")),
    "blank name": ('"Lantern 7"', '"  "', ("event.name", "printable text of 1 to 100")),
    "number as name": ('"Lantern 7"', "7", ("event.name: got 7, expected text in double quotes",)),
    "unknown table": ("[event]", "[evnet]", ("evnet: unknown table. Did you mean event?",)),
    "single telescope table": (
        GOOD[GOOD.index("[[telescope]]") :],
        '[telescope]\nname = "Heron"\n',
        ("telescope: got a table with name", "Write [[telescope]] with two brackets"),
    ),
    "no telescope": (
        GOOD[GOOD.index("[[telescope]]") :],
        "",
        ("telescope: missing, expected at least one telescope", "[[telescope]]"),
    ),
    "no map": (
        GOOD[GOOD.index("[[map]]") : GOOD.index("[[telescope]]")],
        "",
        ("map: missing, expected at least one map", "[[map]]"),
    ),
    "table as value": ("[event]", "settings = 3\n[event]", ("settings: got 3", "Write [settings]")),
    "map without file": (
        "circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }\n",
        "",
        ("map[1] (1 first): no file, expected either file or circle",),
    ),
    "map with both": (
        "issued =",
        'file = "moc.fits"\nissued =',
        ("map[1] (1 first): both file and circle",),
    ),
    "missing map file": (
        "circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }",
        'file = "maps/first.fits"',
        (
            'map[1].file (1 first): got "maps/first.fits", expected an existing file',
            "Paths are relative to the folder of the campaign file.",
        ),
    ),
    "map by URL": (
        "circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }",
        'file = "https://maps.example/first.fits"',
        ("map[1].file (1 first)", "not a URL", "Download it first"),
    ),
    "map in a home": (
        "circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }",
        'file = "~/first.fits"',
        ("map[1].file (1 first)", "A leading ~ is not expanded"),
    ),
    "map is a folder": (
        "circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }",
        'file = "logs"',
        ("map[1].file (1 first)", "this is a directory", "Name the file inside it."),
    ),
    "map is a device": (
        "circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }",
        'file = "/dev/zero"',
        ("map[1].file (1 first)", "expected a plain file"),
    ),
    "map circle ra": (
        "ra = 150.0",
        "ra = 400",
        ("map[1].circle.ra (1 first): got 400, expected a number from 0 to 360",),
    ),
    "map circle nan": ("dec = -8.0", "dec = nan", ("map[1].circle.dec (1 first): got nan",)),
    "map circle without radius": (
        ", radius_90 = 2.0",
        "",
        ("map[1].circle.radius_90 (1 first): missing, expected a number above 0",),
    ),
    "duplicate versions": (
        "[[telescope]]",
        SECOND.replace("0 early", "1 first") + "[[telescope]]",
        ('map[2].version: "1 first" is already the version of map[1]', "of its own"),
    ),
    "duplicate names": (
        '"Plover"',
        '"HERON"',
        ('telescope[2].name: "HERON" is already the name of telescope[1]',),
    ),
    "latitude": (
        "latitude = -31.07",
        "latitude = 95",
        ("telescope[1].site.latitude (Heron): got 95, expected a number from -90 to 90",),
    ),
    "longitude as text": (
        "longitude = 21.41",
        'longitude = "21 E"',
        ('telescope[1].site.longitude (Heron): got "21 E", expected a number from -180 to 360',),
    ),
    "site key": (
        "height = 1790",
        "heigth = 1790",
        ("telescope[1].site.heigth (Heron): unknown key. Did you mean height?",),
    ),
    "negative width": (
        "width = 1.6",
        "width = -1.6",
        ("telescope[1].camera.width (Heron): got -1.6, expected a number above 0 and below 120",),
    ),
    "width too large": ("width = 1.6", "width = 120", ("camera.width (Heron): got 120",)),
    "infinite width": ("width = 1.6", "width = inf", ("got inf", "nan and inf are not accepted")),
    "boolean width": ("width = 1.6", "width = true", ("got true, expected a number above 0",)),
    "radius for a rectangle": (
        "height = 1.2",
        "height = 1.2, radius = 3",
        (
            "telescope[1].camera.radius (Heron): unknown key.",
            'belongs in telescope.camera with shape = "circle"',
        ),
    ),
    "unknown shape": (
        '"circle"',
        '"hexagon"',
        ("telescope[2].camera (Plover)", 'shape = "rectangle", "circle" or "mosaic"'),
    ),
    "camera without shape": (
        'shape = "circle", ',
        "",
        ("telescope[2].camera (Plover): got a table with radius, expected shape =",),
    ),
    "camera as text": (
        'camera = { shape = "circle", radius = 0.5 }',
        'camera = "circle"',
        ('telescope[2].camera (Plover): got "circle", expected a table',),
    ),
    "mosaic without file": (
        'shape = "circle", radius = 0.5',
        'shape = "mosaic"',
        ("telescope[2].camera.file (Plover): missing", "Give the table of detector corners"),
    ),
    "key in the wrong table": (
        'name = "Plover"',
        'name = "Plover"\nwidth = 2',
        ("telescope[2].width (Plover): unknown key. The key width belongs in telescope.camera",),
    ),
    "no log": (
        'log = "logs/heron.csv"\n',
        "",
        ("telescope[2] (Plover): no log, expected either log or images",),
    ),
    "log and images": (
        'log = "logs/heron.csv"\n',
        'log = "logs/heron.csv"\nimages = "*.fits"\n',
        ("telescope[2] (Plover): both log and images",),
    ),
    "missing log": (
        'log = "logs/heron.csv"',
        'log = "heron.csv"',
        ('telescope[2].log (Plover): got "heron.csv", expected an existing file',),
    ),
    "unknown log key": (
        'accept = ["done"]',
        'acept = ["done"]',
        ("telescope[1].log.acept (Heron): unknown key. Did you mean accept?",),
    ),
    "unknown column": (
        'accept = ["done"]',
        'columns = { deptth = "LIM" }',
        ("telescope[1].log.columns.deptth (Heron): unknown key. Did you mean depth?",),
    ),
    "empty accept": (
        '["done"]',
        "[]",
        ("telescope[1].log.accept (Heron): got an empty list", "at least one entry"),
    ),
    "number in accept": (
        '["done"]',
        "[1]",
        ("telescope[1].log.accept[1] (Heron): got 1, expected text in double quotes",),
    ),
    "accept as text": (
        '["done"]',
        '"done"',
        ("telescope[1].log.accept (Heron)", "expected a list in square brackets"),
    ),
    "time scale": (
        'accept = ["done"]',
        'time_scale = "UTC"',
        ("telescope[1].log.time_scale (Heron)", 'Did you mean "utc"?'),
    ),
    "images by URL": (
        'log = "logs/heron.csv"',
        'images = "http://frames.example/*.fits"',
        ("telescope[2].images (Plover)", "not a URL"),
    ),
    "depth system": (
        'system = "AB"',
        'system = "ab"',
        ('telescope[1].depth.system (Heron): got "ab", expected one of "AB", "Vega"',),
    ),
    "zero significance": (
        "significance = 5",
        "significance = 0",
        ("telescope[1].depth.significance (Heron): got 0", "above 0 and at most 100"),
    ),
    "offset as text": (
        "significance = 5",
        'vega_offset = { r = "0.16" }',
        ('telescope[1].depth.vega_offset.r (Heron): got "0.16", expected a number',),
    ),
    "negative duration": (
        'name = "Plover"',
        'name = "Plover"\ndefaults = { duration = -1 }',
        ("telescope[2].defaults.duration (Plover): got -1, expected a number of 0 or more",),
    ),
    "mask file": (
        'name = "Plover"',
        'name = "Plover"\nmask = ["circle 1 2 3", "holes.fits"]',
        ('telescope[2].mask[2] (Plover): got "holes.fits", expected an existing file',),
    ),
    "mask region": (
        'name = "Plover"',
        'name = "Plover"\nmask = ["circle 150 -95 1"]',
        ("telescope[2].mask[1] (Plover)", "-95"),
    ),
    "one visit": (
        "[[map]]",
        "[settings]\nrevisit = { visits = 1 }\n[[map]]",
        ("settings.revisit.visits: got 1, expected a whole number from 2 to 1000",),
    ),
    "half a visit": (
        "[[map]]",
        "[settings]\nrevisit = { visits = 2.5 }\n[[map]]",
        ("settings.revisit.visits: got 2.5, expected a whole number",),
    ),
    "bracket": (
        "[[map]]",
        "[settings]\nbracket = 1\n[[map]]",
        ("settings.bracket: got 1, expected a number above 0 and below 1",),
    ),
    "authors as text": (
        "[[map]]",
        '[report]\nauthors = "A"\n[[map]]',
        ("report.authors", "expected a list in square brackets"),
    ),
    "no camera and no regions": (
        'camera = { shape = "circle", radius = 0.5 }\n',
        "",
        ("telescope[2] (Plover): no camera, and 3 of 3 rows of logs/heron.csv give no region",),
    ),
    "band without offset": (
        'system = "AB"',
        'system = "Vega", vega_offset = { g = -0.1 }',
        ("telescope[1].depth (Heron)", "band 'lum'", "vega_offset"),
    ),
    "long delimiter": (
        'accept = ["done"]',
        'delimiter = "::"',
        ('telescope[1].log.delimiter (Heron): got "::", expected a shorter text, of at most 1',),
    ),
    "control character": (
        '"Plover"',
        '"Plo\\u001b[2Jver"',
        ("telescope[2].name (Plo\\u001b[2Jver)", "printable text"),
    ),
}
JARGON = ("pydantic", "validat", "input should", "model", "dict", "str ", "NoneType", "extra_")


@pytest.mark.parametrize("case", BROKEN)
def test_a_fault_names_its_place_and_what_to_do(folder: Path, case: str) -> None:
    old, new, words = BROKEN[case]
    if case == "band without offset":
        (folder / "logs/heron.csv").write_text(LOG.replace(",r,", ",lum,"))
    path = write(folder, changed(old, new))
    with pytest.raises(CampaignError) as caught:
        load_campaign(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ")
    assert caught.value.exit_code == 2
    for word in words:
        assert word in text
    assert not [word for word in JARGON if word in text.replace(str(folder), "").lower()]
    assert "\x1b" not in text


SYNTAX = {
    "unclosed text": ('a = "x\n', "line 1, column 7", '"a = \\"x"'),
    "no value": ("[event]\nname =\n", "line 2, column 7", '"name ="'),
    "bare word": ("[event]\nname = Lantern\n", "line 2, column 8", '"name = Lantern"'),
    "key twice": ("a = 1\na = 2\n", "line 2, column 6", '"a = 2"'),
    "table twice": ("[event]\n[event]\n", "line 2, column 7", "cannot declare event twice"),
    "open bracket": ("[event\n", "line 1, column 7", "[event"),
    "ends early": ("a = [1,\n", "line 1, column 8", "a = [1,"),
    "huge number": ("a = " + "9" * 5000, "thousands of digits", "Write a shorter one"),
    "deep nest": ("a = " + "[" * 5000, "nested too deeply", "Write the tables as"),
}


@pytest.mark.parametrize("case", SYNTAX)
def test_a_syntax_fault_names_line_and_column(folder: Path, case: str) -> None:
    text, *words = SYNTAX[case]
    with pytest.raises(CampaignError) as caught:
        load_campaign(write(folder, text))
    assert not [word for word in words if word not in str(caught.value)]
    assert len(caught.value.problems) == 1


def test_bytes_that_are_not_text_are_refused_with_their_line(folder: Path) -> None:
    path = folder / "campaign.toml"
    path.write_bytes(b'[event]\nname = "Lant\xe9rn"\n')
    with pytest.raises(CampaignError, match="line 2: a byte that is not UTF-8"):
        load_campaign(path)


def test_a_byte_order_mark_does_no_harm(folder: Path) -> None:
    path = folder / "campaign.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.encode())
    assert load_campaign(path).event_name == "Lantern 7"


def test_a_folder_in_place_of_the_file_names_the_file_inside(folder: Path) -> None:
    with pytest.raises(CampaignError, match="a directory, expected a campaign file"):
        load_campaign(folder)
    path = write(folder, GOOD)
    with pytest.raises(CampaignError) as caught:
        load_campaign(folder)
    assert f"Name {path}" in str(caught.value)


def test_no_such_file_says_how_to_begin(tmp_path: Path) -> None:
    with pytest.raises(CampaignError, match="skytally new DIR"):
        load_campaign(tmp_path / "nothing.toml")


def test_a_file_that_is_far_too_large_is_not_read(tmp_path: Path) -> None:
    path = tmp_path / "campaign.toml"
    with path.open("wb") as stream:
        stream.truncate(5_000_000)
    with pytest.raises(CampaignError, match="larger than 4 MB"):
        load_campaign(path)


def test_all_faults_are_reported_together(folder: Path) -> None:
    (folder / "bad.fits").write_bytes(b"no map")
    (folder / "bad.csv").write_text("a,b\n1,2\n")
    text = changed("T05:21:08Z", "T05:21:08").replace("width = 1.6", "width = -1")
    text = text.replace('"logs/heron.csv", accept', '"gone.csv", acept')
    text = text.replace('log = "logs/heron.csv"', 'log = "bad.csv"\nmask = "circle 1 2 -3"')
    text = text.replace(
        "[[telescope]]", '[[map]]\nversion = "1 first"\nfile = "bad.fits"\n\n[[telescope]]', 1
    )
    with pytest.raises(CampaignError) as caught:
        load_campaign(write(folder, text))
    wanted = [
        "event.time:",
        "telescope[1].camera.width (Heron):",
        "telescope[1].log.file (Heron):",
        "telescope[1].log.acept (Heron):",
        "map[2].version:",
        "telescope[2].mask (Plover):",
        f"{folder / 'bad.fits'}",
        f"{folder / 'bad.csv'}",
    ]
    found = caught.value.problems
    assert not [start for start in wanted if not any(p.startswith(start) for p in found)]
    assert str(caught.value).startswith(f"{folder / 'campaign.toml'}: {len(found)} faults:")


def test_a_lone_fault_of_a_file_is_raised_as_it_is(folder: Path) -> None:
    (folder / "bad.fits").write_bytes(b"no map")
    text = changed("circle = { ra = 150.0, dec = -8.0, radius_90 = 2.0 }", 'file = "bad.fits"')
    with pytest.raises(MapError) as raised:
        load_campaign(write(folder, text))
    assert raised.value.file == str(folder / "bad.fits")


def test_a_log_that_cannot_be_read_stands_without_rows(folder: Path) -> None:
    (folder / "bad.csv").write_text("a,b\n1,2\n")
    campaign = load_campaign(write(folder, changed('log = "logs/heron.csv"', 'log = "bad.csv"')))
    by_name = {t.name: t.log for t in campaign.telescopes}
    assert len(by_name["Plover"]) == by_name["Plover"].read == 0
    assert by_name["Plover"].fault.startswith("bad.csv: ")
    assert str(folder) not in by_name["Plover"].fault
    assert len(by_name["Heron"]) > 0
    assert by_name["Heron"].fault == ""


def test_where_no_log_can_be_read_the_faults_are_raised(folder: Path) -> None:
    for log in (folder / "logs").iterdir():
        log.write_text("a,b\n1,2\n")
    with pytest.raises((LogError, CampaignError)) as caught:
        load_campaign(write(folder, GOOD))
    assert "heron.csv" in str(caught.value)


AUDIT = """
[audit]
airmass = 2.0
silence = ["near-moon"]

[[claim]]
telescope = "all"
quantity = "area"
value = "12.0 deg2"
stated_by = "A. Observer"

[[claim]]
file = "claims.csv"
"""


def test_the_audit_is_told_what_to_look_for(folder: Path) -> None:
    (folder / "claims.csv").write_text("telescope,quantity,value\nHeron,exposures,12\n")
    one = changed('name = "Heron"', 'name = "Heron"\naudit = { demote = { "sun-up" = "note" } }')
    campaign = load_campaign(write(folder, one + AUDIT))
    heron, plover = campaign.telescopes[0].audit, campaign.telescopes[1].audit
    assert campaign.audit == plover == AuditOptions(2.0, 15.0, {}, frozenset({"near-moon"}))
    assert heron == AuditOptions(2.0, 15.0, {"sun-up": "note"}, frozenset({"near-moon"}))
    assert [(c.telescope, c.value) for c in campaign.claims] == [
        ("all", "12.0 deg2"),
        ("Heron", "12"),
    ]
    assert "claims" in {role for role, _, _ in campaign.inputs}


@pytest.mark.parametrize(
    ("spoilt", "words"),
    [
        ('silence = ["near-mon"]', ("audit.silence", "near-mon", "Did you mean near-moon?")),
        ('demote = { "sun-up" = "error" }', ("audit.demote", "sun-up", "silence")),
        ('demote = ["sun-up"]', ("audit.demote", "table in braces")),
        ("airmass = 0.5", ("audit.airmass", "0.5")),
        ("aimass = 2.0", ("audit", "aimass", "airmass")),
    ],
)
def test_a_wish_that_cannot_be_met_names_its_key(
    folder: Path, spoilt: str, words: tuple[str, ...]
) -> None:
    with pytest.raises(CampaignError) as caught:
        load_campaign(write(folder, f"{GOOD}\n[audit]\n{spoilt}\n"))
    (problem,) = caught.value.problems
    assert not [word for word in words if word not in problem]


@pytest.mark.parametrize(
    ("spoilt", "words"),
    [
        ('telescope = "all"\nquantity = "aera"\nvalue = "1"', ("claim[1]", "aera", "area")),
        ('telescope = "all"\nquantity = "area"', ("claim[1]", "value")),
        ('file = "none.csv"', ("claim[1].file", "none.csv")),
        ('telescope = "all"\nfile = "logs/heron.csv"', ("claim[1]", "of its own")),
        ('telescope = "all"\nquantity = "area"\nvalue = 12.0', ("claim[1].value", "quotes")),
    ],
)
def test_a_claim_that_cannot_be_read_names_its_table(
    folder: Path, spoilt: str, words: tuple[str, ...]
) -> None:
    with pytest.raises(CampaignError) as caught:
        load_campaign(write(folder, f"{GOOD}\n[[claim]]\n{spoilt}\n"))
    problem = caught.value.problems[0]
    assert not [word for word in words if word not in problem]


def test_relative_paths_start_at_the_campaign_file(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    write(folder, GOOD)
    monkeypatch.chdir(folder.parent)
    campaign = load_campaign(Path(folder.name) / "campaign.toml")
    assert ("log", "logs/heron.csv") in {(role, name) for role, name, _ in campaign.inputs}


def test_every_kind_of_fault_has_words_of_its_own() -> None:
    """Every key is given every wrong kind of value; the word list must know each fault."""
    wrong: list[object] = [
        None, True, 3, 2.5, float("nan"), 10**400, "", "x" * 5000, [], [1], {}, {"q": 1},
        date(2031, 3, 14), datetime(2031, 3, 14), -1e9, 1e9, {"shape": 3}, {"shape": "circle"},
    ]  # fmt: skip
    kinds = set()
    for table in TABLES.values():
        for key in table.model_fields:
            for value in wrong:
                try:
                    table.model_validate({key: value}, context={"base": Path("nowhere")})
                except ValidationError as faults:
                    kinds |= {fault["type"] for fault in faults.errors()}
    assert {"float_type", "missing", "own", "union_tag_invalid"} <= kinds
    assert kinds - {"own", "extra_forbidden"} <= set(_EXPECTED)


def test_every_key_says_what_to_give() -> None:
    for table in TABLES.values():
        for key, field in table.model_fields.items():
            assert field.description or key == "shape", f"{table.__name__}.{key}"


_VALUES = st.one_of(
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=5),
    st.just([]),
    st.just({}),
    st.lists(st.integers(), max_size=2),
    st.dictionaries(st.text(max_size=3), st.integers(), max_size=2),
    st.datetimes(),
)


@given(data=st.data())
@settings(
    max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
def test_no_value_anywhere_ends_in_anything_but_sentences(
    folder: Path, monkeypatch: pytest.MonkeyPatch, data: st.DataObject
) -> None:
    """One value of a good campaign is replaced, at any depth, by anything TOML could hold."""
    import tomllib

    raw: dict[str, Any] = tomllib.loads(GOOD)
    spots: list[tuple[Any, Any]] = []

    def walk(node: Any) -> None:
        for key in node if isinstance(node, dict) else range(len(node)):
            spots.append((node, key))
            if isinstance(node[key], dict | list):
                walk(node[key])

    walk(raw)
    node, key = data.draw(st.sampled_from(range(len(spots))).map(lambda i: spots[i]))
    node[key] = data.draw(_VALUES)
    if isinstance(node, dict) and data.draw(st.booleans()):
        node[data.draw(st.text(max_size=6))] = data.draw(_VALUES)
    changed_raw = copy.deepcopy(raw)
    path = write(folder, "")
    monkeypatch.setattr(tomllib, "loads", lambda _: changed_raw)
    try:
        parsed = parse_campaign(path)
    except SkytallyError as fault:
        pytest.fail(f"a readable file was refused as a whole: {fault}")
    finally:
        monkeypatch.undo()
    for problem in parsed.problems:
        assert problem.isprintable()
        assert ": " in problem
        assert json.loads(json.dumps(problem)) == problem
