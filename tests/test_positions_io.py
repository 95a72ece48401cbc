"""Positions read: angles, distances and redshifts by astropy; every row used or set aside."""

from __future__ import annotations

import gzip

import numpy as np
import pytest
from astropy import cosmology, units
from astropy.coordinates import Angle, Distance
from astropy.table import Table
from skytally.cosmology import Cosmology
from skytally.errors import InputError, UsageError
from skytally.positions_io import POSITION_COLUMNS, ROWS_LIMIT, parse_position, read_positions

PLANCK = Cosmology.named("Planck18")


def read(tmp_path, text, name="galaxies.csv", model=PLANCK):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return read_positions(path, model)


# --- one position -----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ra", "dec"),
    [
        ("168.75", "-13.1"),
        ("0", "90"),
        ("360", "-90"),
        ("-10.5", "+4"),
        ("1.6875e2", "−13.1"),
        ("10:23:45.6", "-31:04:12"),
        ("10h23m45.6s", "-31d04m12s"),
        ("10 23 45.6", "-00 00 30"),
        ("00:00:00.01", "+89:59:59.9"),
        (" 23:59:59.999 ", "-0:30"),
        ("12:30", "5°30′15″"),
    ],
)
def test_a_position_is_read_as_astropy_reads_it(ra, dec):
    plain = ra.replace("-", "").replace(".", "").replace("e", "").isdigit()
    lon = Angle(ra.strip(), units.deg if plain else units.hourangle).wrap_at(360 * units.deg)
    lat = Angle(dec.strip().replace("−", "-"), units.deg)
    found = parse_position(ra, dec)
    assert found.ra_deg[0] == pytest.approx(lon.deg % 360, abs=1e-9)
    assert found.dec_deg[0] == pytest.approx(lat.deg, abs=1e-9)
    assert len(found) == found.read == 1
    assert found.file is None
    assert np.isnan(found.distance_mpc[0])


@pytest.mark.parametrize(
    ("ra", "dec", "words"),
    [
        ("400", "0", r"'400' for the right ascension, 400 degrees.*outside 0 to 360.*Give degrees"),
        ("25:00:00", "0", r"right ascension.*375 degrees"),
        ("10", "95", r"'95' for the declination.*outside -90 to 90.*Give degrees in -90 to 90"),
        ("10", "-91:00:00", r"declination.*outside -90 to 90"),
        ("10", "5h30m", r"a declination in hours"),
        ("ten", "5", r"'ten' for the right ascension, not a number"),
        ("nan", "5", r"right ascension, not a number"),
        ("inf", "5", r"right ascension, not a number"),
        ("", "5", r"nothing for the right ascension, no value.*Give degrees"),
        ("10", "n/a", r"'n/a' for the declination, no value"),
        ("10:61:00", "5", r"minutes or seconds above 59"),
        ("1" * 200, "5", r"200 characters long"),
        ("10,5", "5", r"not a number"),
    ],
)
def test_what_is_no_position_is_refused_with_a_remedy(ra, dec, words):
    with pytest.raises(UsageError, match=words):
        parse_position(ra, dec)


def test_plain_numbers_beside_sexagesimal_text_are_said_to_be_degrees():
    assert "read as degrees" in parse_position("10.5", "-31:04:12").notes[0]
    assert parse_position("10.5", "-31.07").notes == ()
    assert parse_position("168.75", "-31:04:12").notes == ()


# --- tables -----------------------------------------------------------------------------


def test_formats_agree(tmp_path):
    table = Table(
        {
            "name": ["0012", "1e5", "Tessel 3"],
            "ra": [10.25, 359.999, 0.0],
            "dec": [-89.5, 12.125, 0.1],
            "distance": [12.5, 80.0, 301.25],
            "mag": [12.5, 14.0, 17.75],
            "mass": [1e9, 2e10, 3.5e11],
        }
    )
    paths = [tmp_path / f"t.{end}" for end in ("csv", "ecsv", "fits", "vot")]
    kinds = ("ascii.csv", "ascii.ecsv", "fits", "votable")
    for path, kind in zip(paths, kinds, strict=True):
        table.write(path, format=kind)
    packed = tmp_path / "t.csv.gz"
    packed.write_bytes(gzip.compress(paths[0].read_bytes()))
    for path in (*paths, packed):
        found = read_positions(path, PLANCK)
        assert list(found.name) == list(table["name"])
        for ours, theirs in (
            (found.ra_deg, "ra"),
            (found.dec_deg, "dec"),
            (found.distance_mpc, "distance"),
            (found.magnitude, "mag"),
            (found.mass, "mass"),
        ):
            assert np.array_equal(ours, table[theirs])
        assert (found.read, found.set_aside, found.unread, found.notes) == (3, (), (), ())
    assert list(read_positions(paths[0], PLANCK).row) == [2, 3, 4]
    assert list(read_positions(paths[2], PLANCK).row) == [1, 2, 3]


def test_every_name_of_a_column_is_understood(tmp_path):
    values = {"name": "Tessel", "ra": "10", "dec": "-5", "distance": "50"}
    values |= {"distance_modulus": "33.5", "redshift": "0.01", "magnitude": "15"}
    values |= {"absolute_magnitude": "-20", "mass": "1e10"}
    assert values.keys() == POSITION_COLUMNS.keys()
    plain = read(tmp_path, ",".join(values) + "\n" + ",".join(values.values()))
    for canonical, aliases in POSITION_COLUMNS.items():
        for alias in (*aliases, aliases[0].upper()):
            head = [alias if key == canonical else key for key in values]
            found = read(tmp_path, ",".join(head) + "\n" + ",".join(values.values()))
            for field in ("name", "ra_deg", "dec_deg", "distance_mpc", "magnitude", "mass"):
                assert getattr(found, field) == getattr(plain, field), alias
            assert found.absolute_magnitude == plain.absolute_magnitude


def test_units_of_angles_and_distances(tmp_path):
    found = read(tmp_path, "ra [h],dec (arcmin),dist (kpc)\n2.5,-90,1250\n")
    assert (found.ra_deg[0], found.dec_deg[0], found.distance_mpc[0]) == (37.5, -1.5, 1.25)
    table = Table({"ra": [0.5] * units.rad, "dec": [0.25] * units.rad, "dist": [2.0] * units.Gpc})
    table.write(tmp_path / "t.ecsv", format="ascii.ecsv")
    found = read_positions(tmp_path / "t.ecsv", PLANCK)
    assert found.ra_deg[0] == pytest.approx((0.5 * units.rad).to_value(units.deg))
    assert found.dec_deg[0] == pytest.approx((0.25 * units.rad).to_value(units.deg))
    assert found.distance_mpc[0] == 2000


@pytest.mark.parametrize("name", ["Planck18", "WMAP9"])
def test_redshifts_become_luminosity_distances_by_astropy(tmp_path, name):
    z = np.concatenate((np.geomspace(1e-8, 1000, 60), [0.01, 0.1, 1.0]))
    text = "ra,dec,z\n" + "".join(f"100,5,{value!r}\n" for value in z.tolist())
    found = read(tmp_path, text, model=Cosmology.named(name))
    expected = getattr(cosmology, name).luminosity_distance(z).to_value(units.Mpc)
    assert found.distance_mpc == pytest.approx(expected, rel=1e-6)
    assert "own motion" in found.notes[0]


def test_distance_moduli_by_astropy(tmp_path):
    found = read(tmp_path, "ra,dec,distmod\n1,2,29.5\n1,2,37.25\n")
    expected = Distance(distmod=[29.5, 37.25]).to_value(units.Mpc)
    assert found.distance_mpc == pytest.approx(expected, rel=1e-12)


def test_each_row_takes_the_first_distance_that_it_has(tmp_path):
    text = "ra,dec,redshift,distance,distance_modulus\n1,2,0.1,50,\n1,2,0.1,,33\n1,2,0.1,null,nan\n"
    found = read(tmp_path, text + "1,2,,,\n")
    by_z = cosmology.Planck18.luminosity_distance(0.1).to_value(units.Mpc)
    expected = [50, Distance(distmod=33).to_value(units.Mpc), by_z, np.nan]
    assert found.distance_mpc == pytest.approx(expected, rel=1e-6, nan_ok=True)
    assert "the first of these" in found.notes[0]
    assert found.unread == ()


def test_decimal_commas_where_semicolons_part_cells(tmp_path):
    found = read(tmp_path, "name;ra;dec;dist\nTessel;10,5;-3,25;40,5\n")
    assert (found.ra_deg[0], found.dec_deg[0], found.distance_mpc[0]) == (10.5, -3.25, 40.5)


# --- faults -----------------------------------------------------------------------------


def test_faulty_rows_are_set_aside_and_named(tmp_path):
    rows = [
        "good,10,5",
        "off,10,95",
        "wide,400,5",
        "bare,,5",
        "word,ten,5",
        "short,10",
        "last,11,6",
    ]
    found = read(tmp_path, "name,ra,dec\n" + "\n".join(rows) + "\n")
    assert list(found.name) == ["good", "last"]
    assert list(found.row) == [2, 8]
    assert found.read == 7 == len(found) + len(found.set_aside)
    said = {(fault.row, fault.name, fault.column): fault.detail for fault in found.set_aside}
    expected = {
        (3, "off", "dec"): "'95', a declination outside -90 to 90; give",
        (4, "wide", "ra"): "'400', 400 degrees of right ascension",
        (5, "bare", "ra"): "holds nothing, no value; fill it in",
        (6, "word", "ra"): "'ten', not a number; give",
        (7, "", ""): "2 cells where the header has 3",
    }
    assert said.keys() == expected.keys()
    for key, words in expected.items():
        assert words in said[key]


def test_faulty_values_leave_the_position_and_are_named(tmp_path):
    text = "name,ra,dec,distance,z,mag,mass\n"
    text += "a,1,2,-5,-0.001,bright,0\nb,1,2,1e9,2000,>19.5,-99\nc,1,2,x,0.05,-99,n/a\n"
    found = read(tmp_path, text)
    assert len(found) == 3
    by_z = cosmology.Planck18.luminosity_distance(0.05).to_value(units.Mpc)
    assert found.distance_mpc == pytest.approx([np.nan, np.nan, by_z], rel=1e-6, nan_ok=True)
    assert found.magnitude == pytest.approx([np.nan, 19.5, np.nan], nan_ok=True)
    assert np.isnan(found.mass).all()
    told = {(fault.row, fault.column) for fault in found.unread}
    assert told == {
        *((2, c) for c in ("distance", "z", "mag", "mass")),
        *((3, c) for c in ("distance", "z", "mass")),
        (4, "distance"),
    }
    assert all(fault.detail.rstrip(".").count(";") == 1 for fault in found.unread)


def test_missing_values_are_no_faults(tmp_path):
    found = read(tmp_path, "ra,dec,dist,mag,mass\n1,2,nan,null,\n1,2,N/A,--,NaN\n")
    assert found.unread == ()
    assert np.isnan([found.distance_mpc, found.magnitude, found.mass]).all()
    assert list(found.name) == ["row 2", "row 3"]


def test_masked_cells_of_binary_tables_are_missing(tmp_path):
    table = Table({"ra": [1.0, 2.0], "dec": [3.0, np.nan], "dist": [np.nan, 5.0]})
    table.write(tmp_path / "t.fits")
    found = read_positions(tmp_path / "t.fits", PLANCK)
    assert list(found.row) == [1]
    assert np.isnan(found.distance_mpc[0])
    assert found.set_aside[0].row == 2
    assert "no value" in found.set_aside[0].detail


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("name,ra\na,1\n", r"no column for dec.*'name', 'ra'.*name the columns ra and dec"),
        ("ra,dec\n", r"header but no rows"),
        ("ra,dec,RA\n1,2,3\n", r"column 'ra'.*2 columns have this name"),
        ("ra,dec\n1,95\n", r"row 2, column 'dec'.*no row of 1.*outside -90 to 90"),
        ("ra,dec,dist (m)\n1,2,3\n", r"column 'dist \(m\)'.*unit is 'm', expected mpc.*Convert"),
        ("ra (mas),dec\n1,2\n", r"column 'ra \(mas\)'.*unit is 'mas'"),
        ("ra,dec,mu (mas/yr)\n1,2,3\n", r"unit is 'mas/yr', expected mag"),
        ("", r"file is empty"),
    ],
)
def test_tables_that_cannot_be_used_are_refused(tmp_path, text, words):
    with pytest.raises(InputError, match=words) as caught:
        read(tmp_path, text)
    assert "galaxies.csv" in str(caught.value)


def test_a_directory_a_url_and_too_many_rows_are_refused(tmp_path):
    with pytest.raises(InputError, match="directory"):
        read_positions(tmp_path, PLANCK)
    with pytest.raises(InputError, match="URL"):
        read_positions("https://example.invalid/t.csv", PLANCK)
    with pytest.raises(InputError, match=r"100,001 rows, expected at most 100,000.*Split"):
        read(tmp_path, "ra,dec\n" + "1,2\n" * (ROWS_LIMIT + 1))


# --- what is noticed --------------------------------------------------------------------


def test_a_column_z_beside_other_bands_is_no_redshift(tmp_path):
    found = read(tmp_path, "ra,dec,g,r,i,z\n1,2,19.3,18.7,18.4,18.2\n")
    assert np.isnan(found.distance_mpc[0])
    assert "taken for a magnitude" in found.notes[0]
    found = read(tmp_path, "ra,dec,i,z,redshift\n1,2,18.4,18.2,0.1\n")
    assert found.distance_mpc[0] == pytest.approx(
        cosmology.Planck18.luminosity_distance(0.1).to_value(units.Mpc), rel=1e-6
    )


def test_what_may_be_hours_or_logarithms_is_noted(tmp_path):
    rows = "".join(f"{hour},5,10.5\n" for hour in range(6))
    notes = read(tmp_path, "ra,dec,mass\n" + rows).notes
    assert any("0 to 24 and are read as degrees" in note for note in notes)
    assert any("if they are logarithms" in note for note in notes)
    assert read(tmp_path, "ra,dec,mass\n" + rows + "200,5,1e10\n").notes == ()


def test_two_names_for_one_column_are_noted(tmp_path):
    found = read(tmp_path, "ra,raj2000,dec\n1,100,2\n")
    assert found.ra_deg[0] == 1
    assert "'raj2000' left unread" in found.notes[0]
