"""Logs in every format, with the mess of real ones."""

from __future__ import annotations

import gzip
import hashlib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import MaskedColumn, Table
from astropy.time import Time
from bad_log_inputs import BAD_LOGS, GOOD_DATA, HEADER, ROW, BadInput, good_fits_table, votable
from skytally.errors import LogError
from skytally.log_columns import ALIASES
from skytally.log_io import LogOptions, read_log
from skytally.observations import LogTable

START = 62939 + 5.5 / 24  # 2031-03-14T05:30; MJD 51544 is 2000-01-01


def read(tmp_path: Path, content: str | bytes, **options: Any) -> LogTable:
    path = tmp_path / "log.csv"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    log = read_log(path, "Heron", LogOptions(**options))
    assert log.read == len(log) + len(log.set_aside)
    assert {len(getattr(log, x)) for x in ("row", "exposure", "depth", "region")} == {len(log)}
    return log


def one(tmp_path: Path, column: str, cell: str, **options: Any) -> LogTable:
    """Log of one row in which one cell is replaced; semicolons part the cells."""
    cells = {"exposure": "a", "ra": "10", "dec": "20", "start": "62939.5", "duration": "60"}
    cells |= {"band": "r", "depth": "20.5", "angle": "0", column: cell}
    # A second, good row keeps the log usable.
    good = cells | {column: "" if column not in {"ra", "dec", "start"} else "5"} | {"exposure": "b"}
    good |= {"start": "62940"}
    text = "\n".join(";".join(x) for x in (cells, cells.values(), good.values()))
    return read(tmp_path, text + "\n", delimiter=";", **options)


# --- formats ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "content",
    [
        HEADER + ROW,
        "\ufeff" + HEADER + ROW,
        (HEADER + ROW).replace("\n", "\r\n"),
        (HEADER + ROW).replace("\n", "\r").rstrip("\r"),
        (HEADER + ROW).replace(",", ";").replace(".", ","),
        (HEADER + ROW).replace(",", "\t"),
        (HEADER + ROW).replace(",", " , "),
        HEADER.upper() + ROW,
        HEADER.replace("\n", ",\n") + ROW.replace("\n", ",\n"),
        gzip.compress((HEADER + ROW).encode(), mtime=0),
        '"exposure","ra","dec","start","duration","band","depth"\n'
        '"0001","150.5","-20.25","2031-03-14 05:30","60","r","20.5"\n',
    ],
)
def test_forms_of_one_csv(tmp_path: Path, content: str | bytes) -> None:
    log = read(tmp_path, content)
    assert log.exposure.tolist() == ["0001"]
    assert (log.ra_deg[0], log.dec_deg[0]) == (150.5, -20.25)
    assert log.start_mjd[0] == pytest.approx(START, abs=1e-10)
    assert (log.duration_s[0], log.band[0], log.depth[0]) == (60.0, "r", 20.5)
    assert log.region.tolist() == [""]
    raw = content.encode() if isinstance(content, str) else content
    assert log.sha256 == hashlib.sha256(raw).hexdigest()
    assert log.telescope == "Heron"
    assert log.file.endswith("log.csv")


def test_line_numbers_count_comments_blank_lines_and_line_breaks_in_quotes(tmp_path: Path) -> None:
    text = (
        '# a comment with a "quote, never closed\n\nexposure,ra,dec,start,comment\n'
        'a,1,2,62939,"two\n# lines"\n  # another\n\nb,1,2,62940,\nc,x,2,62941,\nd,1,2,62942,ok\n'
    )
    log = read(tmp_path, text)
    assert log.row.tolist() == [4, 8, 10]
    assert [x.row for x in log.set_aside] == [9]


def test_rows_with_too_few_or_too_many_cells_are_set_aside(tmp_path: Path) -> None:
    text = 'ra,dec,start\n1,2,62939\n1,2\n1,2,62939,5\n"1"x,2,62939\n3,4,62940\n'
    log = read(tmp_path, text)
    assert log.row.tolist() == [2, 6]
    assert [(x.row, x.reason) for x in log.set_aside] == [
        (3, "unreadable"),
        (4, "unreadable"),
        (5, "unreadable"),
    ]
    assert "2 cells where the header has 3" in log.set_aside[0].detail


def test_names_stay_text(tmp_path: Path) -> None:
    names = ["0012", "1e5", "007.50", "True", "nan", "+3", "2031-03-14"]
    rows = "".join(f"{name},1,2,{62939 + i}\n" for i, name in enumerate(names))
    assert read(tmp_path, "exposure,ra,dec,start\n" + rows).exposure.tolist() == names


def test_nameless_rows_are_called_by_their_number(tmp_path: Path) -> None:
    log = read(tmp_path, "exposure,ra,dec,start\n,1,2,62939\nN/A,1,2,62940\n")
    assert log.exposure.tolist() == ["row 2", "row 3"]


def test_latin_1_is_read_and_noted(tmp_path: Path) -> None:
    log = read(tmp_path, (HEADER + ROW.replace("0001", "\u00fcber")).encode("latin-1"))
    assert log.exposure.tolist() == ["\u00fcber"]
    assert any("Latin-1" in x for x in log.notes)


def test_ecsv(tmp_path: Path) -> None:
    table = Table(
        {
            "obs_id": ["0012", "1e5", "x y"],
            "s_ra": MaskedColumn([10.0, 11.0, 12.0], unit="hourangle"),
            "s_dec": MaskedColumn([0.1, 0.2, 0.3], unit="rad"),
            "t_min": [62939.5, 62940.5, 62941.5],
            "t_exptime": MaskedColumn([1.0, 2.0, 3.0], unit="min", mask=[False, True, False]),
        }
    )
    table.meta["origin"] = "a # in the header"
    for delimiter in (" ", ","):
        path = tmp_path / "log.ecsv"
        table.write(path, format="ascii.ecsv", delimiter=delimiter, overwrite=True)
        log = read_log(path, "Heron")
        lines = path.read_text().splitlines()
        assert [lines[x - 1][:3] for x in log.row] == ["001", "1e5", '"x '] or delimiter == ","
        assert log.exposure.tolist() == ["0012", "1e5", "x y"]
        assert log.ra_deg == pytest.approx([150, 165, 180])
        assert log.dec_deg == pytest.approx(np.degrees([0.1, 0.2, 0.3]))
        assert log.duration_s.tolist() == [60, 0, 180]


def test_fits_table(tmp_path: Path) -> None:
    log = read(tmp_path, good_fits_table())
    assert len(log) == 400
    assert log.row[[0, -1]].tolist() == [1, 400]
    assert log.exposure[12] == "0012"
    assert log.ra_deg == pytest.approx(np.linspace(10, 300, 400), abs=0)
    assert log.start_mjd == pytest.approx(62939.5 + np.arange(400) / 1440, abs=0)


def test_fits_columns_of_other_types(tmp_path: Path) -> None:
    columns = [
        fits.Column("name", "J", array=[12, 13, 14]),
        fits.Column("ra", "E", unit="deg", array=[10.5, np.nan, 30.5]),
        fits.Column("dec", "11A", array=["-00:30:00", "+01:00:00", "+02:00:00"]),
        fits.Column("mjd", "D", array=[62939.5, 62940.5, 62941.5]),
        fits.Column("exptime", "J", unit="s", null=-1, array=[60, 60, -1]),
        fits.Column("limmag", "E", array=[20.4, 20.4, -99.0]),
    ]
    path = tmp_path / "log.fits"
    image = fits.PrimaryHDU(np.zeros((3, 3), np.int16))
    fits.HDUList([image, fits.BinTableHDU.from_columns(columns)]).writeto(path)
    log = read_log(path, "Heron")
    assert log.exposure.tolist() == ["12", "14"]
    assert log.dec_deg.tolist() == [-0.5, 2.0]
    assert log.duration_s.tolist() == [60, 0]
    assert log.depth[0] == 20.4  # a 32-bit number as it was written
    assert np.isnan(log.depth[1])
    assert [(x.row, x.column) for x in log.set_aside] == [(2, "ra")]


def test_fits_text_of_variable_length(tmp_path: Path) -> None:
    """FITS 4.0, section 7.3.5: a region column is often written so."""
    regions = ["circle 10 -20 0.5", "polygon 10 20 11 20 11 21"]
    columns = [
        fits.Column("t_min", "D", array=[62939.2, 62939.3]),
        fits.Column("s_region", "PA()", array=np.array(regions, dtype=object)),
    ]
    fits.BinTableHDU.from_columns(columns).writeto(tmp_path / "log.fits")
    assert read_log(tmp_path / "log.fits", "Heron").region.tolist() == regions


def test_votable(tmp_path: Path) -> None:
    log = read(tmp_path, votable(GOOD_DATA))
    assert (log.ra_deg[0], log.dec_deg[0], log.start_mjd[0]) == (150.5, -20.25, 62939.5)
    assert [(x.row, x.reason, x.column) for x in log.set_aside] == [(2, "missing", "s_dec")]


def test_binary_votable_and_polygon_columns(tmp_path: Path) -> None:
    text = votable(
        "<TABLEDATA><TR><TD>1</TD><TD>2</TD><TD>62939.5</TD><TD>0 0 1 0 1 1</TD></TR></TABLEDATA>"
    ).replace(
        "<DATA>",
        '<FIELD name="s_region" datatype="double" arraysize="*" xtype="polygon"/><DATA>',
    )
    log = read(tmp_path, text)
    assert log.region.tolist() == ["polygon 0.0 0.0 1.0 0.0 1.0 1.0"]
    path = tmp_path / "binary.xml"
    Table({"ra": [1.5], "dec": [2.5], "start": ["2031-03-14T05:30:00"]}).write(
        path, format="votable", tabledata_format="binary2"
    )
    log = read_log(path, "Heron")
    assert (log.ra_deg[0], log.dec_deg[0]) == (1.5, 2.5)
    assert log.start_mjd[0] == pytest.approx(START, abs=1e-10)


# --- columns ---------------------------------------------------------------------------------


def test_every_name_of_the_alias_table_is_found(tmp_path: Path) -> None:
    for canonical, aliases in ALIASES.items():
        assert aliases == tuple(dict.fromkeys(aliases))
        for alias in aliases:
            if canonical in {"ra", "dec", "start"}:
                header = {"ra": "ra", "dec": "dec", "start": "start"} | {canonical: alias}
                log = read(tmp_path, ",".join(header.values()) + "\n1,2,62939\n")
                assert len(log) == 1


def test_no_name_belongs_to_two_columns() -> None:
    names = [x for aliases in ALIASES.values() for x in aliases]
    assert len(names) == len(set(names))


def test_the_standard_names_need_no_mapping(tmp_path: Path) -> None:
    """Names and meanings of ObsCore 1.1, table 1, and ObsLocTAP 1.0 (from memory)."""
    text = (
        "obs_id,s_ra,s_dec,s_fov,s_region,t_min,t_max,execution_status\n"
        "a,10,20,1.5,,62939.5,62939.51,Performed\n"
        'b,11,20,1.5,"POLYGON ICRS 10 20 11 20 11 21",62939.6,62939.61,performed\n'
        "c,12,20,1.5,,62939.7,,Scheduled\n"
    )
    log = read(tmp_path, text)
    assert log.exposure.tolist() == ["a", "b"]
    assert log.duration_s == pytest.approx([864, 864], abs=1e-4)
    assert log.region.tolist() == ["", "POLYGON ICRS 10 20 11 20 11 21"]
    assert [(x.exposure, x.reason) for x in log.set_aside] == [("c", "not accepted")]
    # s_fov is a diameter.
    log = read(tmp_path, text, use_fov=True)
    assert log.region[0] == "circle 10.0 20.0 0.75"
    assert log.region[1].startswith("POLYGON")


def test_exposure_time_wins_over_the_end(tmp_path: Path) -> None:
    text = "ra,dec,t_min,t_max,t_exptime\n1,2,62939.5,62939.6,30\n1,2,62940,62939,40\n"
    text += "1,2,62941,62940,\n1,2,62942,62942.5,\n"
    log = read(tmp_path, text)
    assert log.duration_s == pytest.approx([30, 40, 43200])
    assert [(x.row, x.column) for x in log.set_aside] == [(4, "t_max")]
    assert "before the start" in log.set_aside[0].detail


def test_a_mapping_wins(tmp_path: Path) -> None:
    text = "ra,dec,start,RA_SOLVED,Lim (5 sigma)\n1,2,62939,3,20\n"
    log = read(tmp_path, text, columns={"ra": "ra_solved", "depth": "Lim (5 sigma)"})
    assert (log.ra_deg[0], log.depth[0]) == (3.0, 20.0)


def test_units_in_brackets(tmp_path: Path) -> None:
    text = "RA (hours),Dec [deg],Start (UTC),Exposure time (min)\n10,20,62939,2\n"
    log = read(tmp_path, text)
    assert (log.ra_deg[0], log.dec_deg[0], log.duration_s[0]) == (150.0, 20.0, 120.0)
    log = read(tmp_path, "ra (J2000),dec (J2000),start\n10,20,62939\n")
    assert log.ra_deg[0] == 10.0
    assert any("'j2000'" in x for x in log.notes)


def test_columns_left_unread_are_noted(tmp_path: Path) -> None:
    log = read(tmp_path, "ra,s_ra,dec,mjd,utc\n1,5,2,62939,2031-03-14T00:00:00\n")
    assert log.ra_deg[0] == 1.0
    assert any("'s_ra' left unread" in x for x in log.notes)


# --- cells -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("cell", "mjd"),
    [
        ("2031-03-14T05:30:00", START),
        ("2031-03-14 05:30:00", START),
        ("2031/03/14 05:30", START),
        ("2031-03-14T05:30:00.000Z", START),
        ("2031-03-14T06:30:00+01:00", START),
        ("2031-03-14T00:00:00-0530", START),
        ("2031-03-13T23:30:00 -06", START),
        ("2031-03-14T05:30:00 UTC", START),
        ("2031-03-14t05:30:00,5", START + 0.5 / 86400),
        ("2028-02-29T00:00:00", 61830.0),
        ("2016-12-31T23:59:60", 57754.0),
        ("62939.25", 62939.25),
        ("62939,25", 62939.25),
        ("2462939.75", 62939.25),
    ],
)
def test_times(tmp_path: Path, cell: str, mjd: float) -> None:
    assert one(tmp_path, "start", cell).start_mjd[0] == pytest.approx(mjd, abs=1e-9)


def test_iso_times_agree_with_astropy(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    times = Time(np.sort(rng.uniform(55000, 60500, 60)), format="mjd")
    rows = "".join(f"1,2,{x}\n" for x in times.isot)
    log = read(tmp_path, "ra,dec,start\n" + rows)
    assert log.start_mjd == pytest.approx(times.mjd, abs=1.2e-8)  # isot ends at milliseconds


@pytest.mark.parametrize(
    ("scale", "seconds"),
    # TAI - UTC = 37 s since 2017 (IERS Bulletin C 52), TT - TAI = 32.184 s (IAU 1991);
    # TDB differs from TT by less than 2 ms (IAU 2006 resolution B3). From memory.
    [("utc", 0.0), ("tai", 37.0), ("tt", 69.184), ("tdb", 69.184)],
)
def test_time_scales(tmp_path: Path, scale: str, seconds: float) -> None:
    text = f"ra,dec,start,end\n1,2,{START!r},{START + 0.5!r}\n3,4,2031-03-14T05:30:00Z,\n"
    log = read(tmp_path, text, time_scale=scale)
    assert (START - log.start_mjd[0]) * 86400 == pytest.approx(seconds, abs=0.003)
    assert log.duration_s[0] == pytest.approx(43200, abs=0.001)
    assert log.start_mjd[1] == pytest.approx(START, abs=1e-9)  # says UTC itself
    assert any("say themselves" in x for x in log.notes) == (scale != "utc")


@pytest.mark.parametrize(
    ("cell", "why"),
    [
        ("2031-03-14", "without a time of day"),
        ("2031-02-30T05:30:00", "does not exist"),
        ("2031-03-14T25:30:00", "does not exist"),
        ("2031-03-14T05:30:61", "does not exist"),
        ("0031-03-14T05:30:00", "out of range"),
        ("2031-03-14T05:30:00+19:00", "18 hours"),
        ("14.03.2031 05:30", "not a time"),
        ("05:30:00", "not a time"),
        ("1931491268", "neither an MJD nor a JD"),
        ("0", "neither an MJD nor a JD"),
        ("nan", "not a time"),
    ],
)
def test_unreadable_times(tmp_path: Path, cell: str, why: str) -> None:
    log = one(tmp_path, "start", cell)
    (aside,) = log.set_aside
    assert (aside.row, aside.exposure, aside.reason, aside.column) == (
        2,
        "a",
        "unreadable",
        "start",
    )
    assert repr(cell) in aside.detail
    assert why in aside.detail
    assert aside.detail.endswith(".")


@pytest.mark.parametrize(
    ("cell", "unit", "degrees"),
    [
        ("150.5", None, 150.5),
        ("150,5", None, 150.5),
        ("1.505e2", None, 150.5),
        ("-10", None, 350.0),
        ("\u221210", None, 350.0),
        ("360", None, 0.0),
        ("-1e-20", None, 0.0),
        ("10:23:45.6", None, 15 * (10 + 23 / 60 + 45.6 / 3600)),
        ("10 23 45.6", None, 15 * (10 + 23 / 60 + 45.6 / 3600)),
        ("10h23m45.6s", None, 15 * (10 + 23 / 60 + 45.6 / 3600)),
        ("10h 23m 45,6s", None, 15 * (10 + 23 / 60 + 45.6 / 3600)),
        ("10:23.5", None, 15 * (10 + 23.5 / 60)),
        ("0:00:60.0", None, 15 / 60),
        ("155d23m45s", None, 155 + 23 / 60 + 45 / 3600),
        ("155\u00b023'45\"", None, 155 + 23 / 60 + 45 / 3600),
        ("10.5", "hour", 157.5),
        ("10:30", "hour", 157.5),
        ("155:30:00", "deg", 155.5),
        ("10.5", "deg", 10.5),
    ],
)
def test_right_ascensions(tmp_path: Path, cell: str, unit: str | None, degrees: float) -> None:
    log = one(tmp_path, "ra", cell, ra_unit=unit)
    assert log.ra_deg[0] == pytest.approx(degrees, abs=1e-9)
    assert 0 <= log.ra_deg[0] < 360


@pytest.mark.parametrize(
    ("cell", "degrees"),
    [
        ("-20.25", -20.25),
        ("-00:10:00", -10 / 60),
        ("-0 10 0", -10 / 60),
        ("+00:10:00", 10 / 60),
        ("\u221200:10:00", -10 / 60),
        ("-31d04m12.0s", -(31 + 4 / 60 + 12 / 3600)),
        ("-31\u00b004'12''", -(31 + 4 / 60 + 12 / 3600)),
        ("-90", -90.0),
        ("90:00:00", 90.0),
    ],
)
def test_declinations(tmp_path: Path, cell: str, degrees: float) -> None:
    assert one(tmp_path, "dec", cell).dec_deg[0] == pytest.approx(degrees, abs=1e-12)


@pytest.mark.parametrize(
    ("column", "cell", "reason"),
    [
        ("ra", "400", "unreadable"),
        ("ra", "-200", "unreadable"),
        ("ra", "25:00:00", "unreadable"),
        ("ra", "10:60:00", "unreadable"),
        ("ra", "10:10:61", "unreadable"),
        ("ra", "nan", "unreadable"),
        ("ra", "inf", "unreadable"),
        ("ra", "1e999", "unreadable"),
        ("ra", "1_0", "unreadable"),
        ("ra", "east", "unreadable"),
        ("ra", "", "missing"),
        ("ra", "N/A", "missing"),
        ("dec", "95", "unreadable"),
        ("dec", "-90:00:01", "unreadable"),
        ("dec", "10h00m00s", "unreadable"),
        ("dec", "--", "missing"),
        ("start", "null", "missing"),
        ("duration", "-5", "unreadable"),
        ("duration", "long", "unreadable"),
        ("angle", "north", "unreadable"),
        ("angle", "1000", "unreadable"),
        ("ra", "1" * 100, "unreadable"),
    ],
)
def test_cells_that_set_a_row_aside(tmp_path: Path, column: str, cell: str, reason: str) -> None:
    log = one(tmp_path, column, cell)
    (aside,) = log.set_aside
    assert (aside.row, aside.reason, aside.column) == (2, reason, column)
    assert f"Column {column!r} holds " in aside.detail
    assert aside.is_fault


@pytest.mark.parametrize(
    ("cell", "depth"),
    [
        ("20.5", 20.5),
        ("20,5", 20.5),
        (">20.5", 20.5),
        ("> 20.5", 20.5),
        (">=20.5", 20.5),
        ("\u226520.5", 20.5),
        ("<20.5", 20.5),
        ("~20.5", 20.5),
        ("20.5*", 20.5),
        ("20.5 *", 20.5),
        *((x, None) for x in ("", "N/A", "NA", "n/a", "nan", "NaN", "null", "None", "-", "--")),
        *((x, None) for x in ("-99", "-99.0", "99", "99.9", "99.99", "99,9", "-999", "999.0", ">")),
    ],
)
def test_depths(tmp_path: Path, cell: str, depth: float | None) -> None:
    log = one(tmp_path, "depth", cell)
    assert len(log) == 2
    assert log.notes == ()
    assert log.depth[0] == depth if depth is not None else np.isnan(log.depth[0])


@pytest.mark.parametrize("cell", ["deep", "20.5 mag?", "20.5.1", "inf"])
def test_an_unreadable_depth_keeps_the_row_and_is_noted(tmp_path: Path, cell: str) -> None:
    log = one(tmp_path, "depth", cell)
    assert len(log) == 2
    assert np.isnan(log.depth[0])
    (note,) = log.notes
    assert "row 2" in note
    assert repr(cell) in note


def test_decimal_commas_in_a_comma_file_must_be_asked_for(tmp_path: Path) -> None:
    text = 'ra,dec,start\n"10,5","20,5",62939\n1,2,62940\n'
    log = read(tmp_path, text)
    assert 'decimal = ","' in log.set_aside[0].detail
    assert read(tmp_path, text, decimal=",").ra_deg.tolist() == [10.5, 1.0]
    text = text.replace(",", ";").replace("10;5", "10,5").replace("20;5", "20,5")
    assert read(tmp_path, text).ra_deg.tolist() == [10.5, 1.0]
    assert len(read(tmp_path, text, decimal=".")) == 1


# --- rows ------------------------------------------------------------------------------------


def test_defaults(tmp_path: Path) -> None:
    text = HEADER.replace("\n", ",angle\n") + "a,1,2,62939,,,,\nb,1,2,62940,30,g,21,45\n"
    log = read(tmp_path, text, band="r", duration=90.0, angle=10.0, depth=20.0)
    assert log.band.tolist() == ["r", "g"]
    assert log.duration_s.tolist() == [90, 30]
    assert log.angle_deg.tolist() == [10, 45]
    assert log.depth.tolist() == [20, 21]
    assert log.notes == ()
    log = read(tmp_path, text)
    assert log.band.tolist() == ["", "g"]
    assert log.duration_s.tolist() == [0, 30]
    assert log.angle_deg.tolist() == [0, 45]
    assert log.depth[1] == 21
    assert np.isnan(log.depth[0])
    assert np.isnan(log.extinction).all()
    assert any("1 of 2 exposures have no exposure time" in x for x in log.notes)


def test_quality(tmp_path: Path) -> None:
    text = "ra,dec,start,status\n1,2,62939,Good\n1,2,62940,cloud\nx,2,62941,\n1,2,62942, FAIR \n"
    log = read(tmp_path, text, accept=("good", "fair"))
    assert log.row.tolist() == [2, 5]
    # What is not accepted need not be readable.
    assert [(x.row, x.reason) for x in log.set_aside] == [(3, "not accepted"), (4, "not accepted")]
    assert "'cloud'" in log.set_aside[0].detail
    assert "good, fair" in log.set_aside[0].detail
    assert not log.set_aside[0].is_fault
    log = read(tmp_path, text)
    assert log.row.tolist() == [2, 3, 5]
    assert any("Good, cloud, nothing, FAIR" in x for x in log.notes)


def test_both_quality_and_execution_status(tmp_path: Path) -> None:
    text = "ra,dec,start,quality,execution_status\n1,2,62939,ok,Performed\n"
    text += "1,2,62940,bad,Performed\n1,2,62941,ok,Aborted\n"
    log = read(tmp_path, text, accept=("ok",))
    assert log.row.tolist() == [2]
    assert [x.column for x in log.set_aside] == ["quality", "execution_status"]
    text = text.replace("quality", "seeing")
    assert read(tmp_path, text, accept=("Performed", "Aborted")).row.tolist() == [2, 3, 4]
    mapped = read(tmp_path, text, columns={"quality": "execution_status"})
    assert mapped.row.tolist() == [2, 3]


def test_exposures_before_the_event_are_set_aside(tmp_path: Path) -> None:
    text = "ra,dec,start\n1,2,62938.5\n1,2,62939\n1,2,62940\n"
    log = read(tmp_path, text, not_before_mjd=62939.0)
    assert log.row.tolist() == [3, 4]
    (aside,) = log.set_aside
    assert (aside.row, aside.reason) == (2, "before the event")
    assert "12.00 h" in aside.detail
    # A log of reference images alone is no fault.
    assert len(read(tmp_path, text, not_before_mjd=70000.0)) == 0


def test_duplicates(tmp_path: Path) -> None:
    text = "exposure,ra,dec,start,band\na,1,2,62939,r\nb,1.0,2,62939.0,r\nc,1,2,62939,g\n"
    text += "d,1,2,62940,r\na,1,2,62939,r\n"
    log = read(tmp_path, text)
    assert log.exposure.tolist() == ["a", "c", "d"]
    assert [(x.row, x.exposure, x.reason) for x in log.set_aside] == [
        (3, "b", "duplicate"),
        (6, "a", "duplicate"),
    ]
    assert all("row 2" in x.detail for x in log.set_aside)


def test_regions(tmp_path: Path) -> None:
    text = (
        "start,region,ra,dec\n"
        '62939,"polygon 1 2, 3",,\n'
        '62940,"Circle ICRS 10 20 1",,\n'
        "62941,fields/f01.fits,10,20\n"
        "62942,fields/f02.MOC,,5\n"
        "62943,,10,20\n"
        "62944,,,\n"
        "62945,https://example.org/f.fits,,\n"
        "62946,circle 1 2 3,x,5\n"
        "62947,\"POLYGON('ICRS', 1, 2, 3, 2, 3, 4)\",nan,nan\n"
    )
    log = read(tmp_path, text)
    assert log.row.tolist() == [3, 4, 5, 6, 10]
    assert log.region.tolist() == [
        "Circle ICRS 10 20 1",
        "fields/f01.fits",
        "fields/f02.MOC",
        "",
        "POLYGON('ICRS', 1, 2, 3, 2, 3, 4)",
    ]
    np.testing.assert_array_equal(log.ra_deg, [np.nan, 10, np.nan, 10, np.nan])
    np.testing.assert_array_equal(log.dec_deg, [np.nan, 20, np.nan, 20, np.nan])
    asides = {x.row: x for x in log.set_aside}
    assert {row: x.reason for row, x in asides.items()} == {
        2: "unreadable",
        7: "missing",
        8: "unreadable",
        9: "unreadable",
    }
    assert "character 12" in asides[2].detail
    assert "URL" in asides[8].detail


def test_hours_in_a_degree_column_are_noted(tmp_path: Path) -> None:
    rows = "".join(f"{ra},2,{62939 + ra}\n" for ra in range(5))
    text = "ra,dec,start\n" + rows
    assert any("may be hours" in x and "ra_unit" in x for x in read(tmp_path, text).notes)
    assert not any("hours" in x for x in read(tmp_path, text, ra_unit="deg").notes)
    assert not any("hours" in x for x in read(tmp_path, text + "25,2,62950\n").notes)
    few = "ra,dec,start\n" + "".join(rows.splitlines(True)[:4])
    assert not any("hours" in x for x in read(tmp_path, few).notes)


def test_a_mixed_right_ascension_column_is_noted(tmp_path: Path) -> None:
    log = read(tmp_path, "ra,dec,start\n10:00:00,2,62939\n150,2,62940\n")
    assert log.ra_deg.tolist() == [150, 150]
    assert any("mixes plain numbers (1 of " in x for x in log.notes)


def test_one_fault_among_reference_exposures_does_not_refuse_the_log(tmp_path: Path) -> None:
    text = "ra,dec,start\n1,2,62930\n1,2,62931\n1,95,62932\n"
    log = read(tmp_path, text, not_before_mjd=62939.0)
    assert (len(log), len(log.set_aside)) == (0, 3)


def test_control_characters_do_not_reach_a_message(tmp_path: Path) -> None:
    log = read(tmp_path, "ra,dec,start\n\x1b[31mred,2,62939\n1,2,62940\n")
    assert "\x1b" not in log.set_aside[0].detail


def test_large_logs_are_refused_before_they_are_read(tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    with path.open("wb") as stream:
        stream.truncate(256 * 1024**2 + 1)  # sparse
    with pytest.raises(LogError, match="limit of 256 MiB"):
        read_log(path, "Heron")


def test_a_file_without_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The permission is simulated: the superuser may read everything."""
    path = tmp_path / "log.csv"
    path.write_text(HEADER + ROW)

    def refuse(*_args: object, **_options: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(LogError, match="permission denied"):
        read_log(path, "Heron")


@pytest.mark.parametrize("case", BAD_LOGS, ids=str)
def test_broken_logs(case: BadInput, tmp_path: Path) -> None:
    with pytest.raises(LogError) as caught:
        read_log(case.write(tmp_path), "Heron", LogOptions(**case.options))
    message = str(caught.value)
    assert all(word in message for word in case.words), message
    assert len(message) < 700
