"""FITS images as a log."""

from __future__ import annotations

import gzip
import hashlib
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from bad_log_inputs import BAD_IMAGES, BadInput, image_file, image_header
from skytally.errors import LogError
from skytally.image_io import ImageOptions, read_images
from skytally.region_text import parse_region
from skytally.shapes import AnyOf, Polygon, lonlat_to_vector

START = 62939 + 5.5 / 24  # 2031-03-14: 62502 is 2030-01-01 (from the day count, below)


def test_the_expected_start_is_right() -> None:
    # MJD 51544 is 2000-01-01 (Explanatory Supplement to the Astronomical Almanac; from memory).
    days = np.datetime64("2031-03-14") - np.datetime64("2000-01-01")
    assert 51544 + days.astype(int) == 62939


def outline(region: str) -> np.ndarray:
    shape = parse_region(region)
    assert isinstance(shape, Polygon)
    return lonlat_to_vector(shape.vertices_deg[:, 0], shape.vertices_deg[:, 1])


def gnomonic(xi_deg: float, eta_deg: float, lon: float, lat: float) -> np.ndarray:
    """Unit vector of a point of the tangent plane, from the definition of the projection."""
    a, d = np.radians([lon, lat])
    centre = np.array([np.cos(d) * np.cos(a), np.cos(d) * np.sin(a), np.sin(d)])
    east = np.array([-np.sin(a), np.cos(a), 0.0])
    north = np.array([-np.sin(d) * np.cos(a), -np.sin(d) * np.sin(a), np.cos(d)])
    vector = centre + np.radians(xi_deg) * east + np.radians(eta_deg) * north
    return vector / np.linalg.norm(vector)


def same_points(one: np.ndarray, other: np.ndarray) -> bool:
    """Whether each point of one is a point of the other, to 4e-5 arcsec."""
    apart = np.linalg.norm(one[:, None, :] - other[None, :, :], axis=2)
    return len(one) == len(other) and bool((apart.min(axis=1) < 2e-10).all())


CORNERS = [(-1.0, -0.5), (1.0, -0.5), (1.0, 0.5), (-1.0, 0.5)]  # 200 x 100 pixels of 0.01 deg


def test_one_image(tmp_path: Path) -> None:
    image_file("frame-0012.fits")(tmp_path)
    log = read_images("*.fits", "Dunlin", base=tmp_path)
    assert (log.telescope, log.file, log.read, len(log)) == ("Dunlin", "*.fits", 1, 1)
    assert log.exposure.tolist() == ["frame-0012.fits"]
    assert log.row.tolist() == [1]
    assert log.start_mjd[0] == pytest.approx(START, abs=1e-9)
    assert log.duration_s[0] == 60
    assert log.band[0] == "r"
    assert np.isnan(log.depth[0])
    expected = np.array([gnomonic(x, y, 150, -20) for x, y in CORNERS])
    assert same_points(outline(log.region[0]), expected)
    assert (log.ra_deg[0], log.dec_deg[0]) == pytest.approx((150, -20), abs=1e-4)
    header = fits.getheader(tmp_path / "frame-0012.fits").tostring().encode()
    assert log.sha256 == hashlib.sha256(b"frame-0012.fits\0" + header).hexdigest()


@pytest.mark.parametrize(("lon", "lat"), [(0.2, 5.0), (40.0, 89.9), (123.0, -90.0)])
def test_footprints_over_the_wrap_and_the_poles(tmp_path: Path, lon: float, lat: float) -> None:
    image_file(CRVAL1=lon, CRVAL2=lat)(tmp_path)
    log = read_images("*.fits", "Dunlin", base=tmp_path)
    expected = np.array([gnomonic(x, y, lon, lat) for x, y in CORNERS])
    assert same_points(outline(log.region[0]), expected)


def test_compressed_images_and_gzip(tmp_path: Path) -> None:
    hdus = fits.HDUList([fits.PrimaryHDU()])
    hdus.append(fits.CompImageHDU(np.zeros((100, 200), np.int16), image_header()))
    hdus.writeto(tmp_path / "a.fits.fz")
    image_file("b.fits", CRVAL1=160.0)(tmp_path)
    (tmp_path / "c.fits.gz").write_bytes(gzip.compress((tmp_path / "b.fits").read_bytes()))
    (tmp_path / "b.fits").unlink()
    log = read_images("*.fits.*", "Dunlin", base=tmp_path)
    assert log.exposure.tolist() == ["a.fits.fz", "c.fits.gz"]
    for region, lon in zip(log.region, (150, 160), strict=True):
        expected = np.array([gnomonic(x, y, lon, -20) for x, y in CORNERS])
        assert same_points(outline(region), expected)


def test_several_images_in_a_file_are_their_union(tmp_path: Path) -> None:
    hdus = fits.HDUList([fits.PrimaryHDU(header=fits.Header([("MAGLIM", 21.5), ("OBJ", "0012")]))])
    for lon in (150.0, 153.0):
        hdus.append(fits.ImageHDU(np.zeros((100, 200), np.uint8), image_header(CRVAL1=lon)))
    hdus.append(fits.ImageHDU(np.zeros((3, 3), np.uint8)))  # no coordinates: a weight or so
    hdus.append(fits.BinTableHDU.from_columns([fits.Column("x", "D", array=[1.0])]))
    hdus.writeto(tmp_path / "a.fits")
    options = ImageOptions(depth="MAGLIM", exposure="OBJ")
    log = read_images("a.fits", "Dunlin", options, tmp_path)
    shape = parse_region(log.region[0])
    assert isinstance(shape, AnyOf)
    assert len(shape.parts) == 2
    assert log.depth.tolist() == [21.5]
    assert log.exposure.tolist() == ["0012"]


@pytest.mark.parametrize(
    ("changes", "lon", "lat"),
    [
        # Galactic pole in ICRS: ESA SP-1200, vol. 1, section 1.5.3 (from memory).
        (
            {"CTYPE1": "GLON-TAN", "CTYPE2": "GLAT-TAN", "CRVAL1": 0.0, "CRVAL2": 90.0},
            192.85948,
            27.12825,
        ),
        ({"RADESYS": "FK5", "EQUINOX": 2000.0}, 150.0, -20.0),
        ({"RADESYS": None}, 150.0, -20.0),
    ],
)
def test_frames_become_icrs(
    tmp_path: Path, changes: dict[str, Any], lon: float, lat: float
) -> None:
    image_file(**changes)(tmp_path)
    log = read_images("*.fits", "Dunlin", base=tmp_path)
    assert (log.ra_deg[0], log.dec_deg[0]) == pytest.approx((lon, lat), abs=1e-4)


def test_bent_edges_keep_points_between_the_corners(tmp_path: Path) -> None:
    """A plate carrée field of 40 by 20 degrees at latitude 60 has edges along parallels."""
    image_file(
        CTYPE1="RA---CAR", CTYPE2="DEC--CAR", CRVAL1=0.0, CRVAL2=0.0, CRPIX2=-249.5,
        CDELT1=-0.2, CDELT2=0.2,
    )(tmp_path)  # fmt: skip
    log = read_images("*.fits", "Dunlin", base=tmp_path)
    points = outline(log.region[0])
    assert len(points) == 32
    lat = np.degrees(np.arcsin(points[:, 2]))
    # Rows 0.5 and 100.5 lie 250 and 350 pixels above the reference: 50 and 70 degrees.
    assert np.sum(np.abs(lat - 50) < 1e-6) == 9
    assert np.sum(np.abs(lat - 70) < 1e-6) == 9


@pytest.mark.parametrize(
    ("changes", "start"),
    [
        # TAI - UTC = 37 s since 2017 (IERS Bulletin C 52), TT - TAI = 32.184 s (IAU 1991).
        ({"TIMESYS": "TAI"}, START - 37 / 86400),
        ({"TIMESYS": "TT"}, START - 69.184 / 86400),
        ({"TIMESYS": "UTC"}, START),
        ({"DATE_OBS": "2031-03-14", "TIME_OBS": "05:30:00"}, START),
        ({"DATE_OBS": 62939.25}, 62939.25),
    ],
)
def test_start(tmp_path: Path, changes: dict[str, Any], start: float) -> None:
    image_file(**changes)(tmp_path)
    log = read_images("*.fits", "Dunlin", base=tmp_path)
    assert log.start_mjd[0] == pytest.approx(start, abs=1e-9)


def test_files_are_used_or_set_aside(tmp_path: Path) -> None:
    image_file("a.fits")(tmp_path)
    image_file("b.fits", DATE_OBS=None)(tmp_path)
    image_file("c.fits", DATE_OBS="2031-03-10T00:00:00")(tmp_path)
    image_file("d.fits")(tmp_path)
    (tmp_path / "e.fits").write_text("not FITS")
    image_file("f.fits", EXPTIME=None, FILTER=None, CRVAL1=155.0)(tmp_path)
    options = ImageOptions(not_before_mjd=62939.0, default_band="i", default_depth=20.0)
    log = read_images("*.fits", "Dunlin", options, tmp_path)
    assert [(x.row, x.file, x.reason, x.column) for x in log.set_aside] == [
        (2, "b.fits", "missing", "DATE-OBS"),
        (3, "c.fits", "before the event", "DATE-OBS"),
        (4, "d.fits", "duplicate", "DATE-OBS"),
        (5, "e.fits", "unreadable", ""),
    ]
    assert log.read == 6 == len(log) + len(log.set_aside)
    assert log.band.tolist() == ["r", "i"]
    assert log.depth.tolist() == [20.0, 20.0]
    assert log.duration_s.tolist() == [60.0, 0.0]
    assert re.search("1 of 2 exposures have no exposure time", log.notes[0])


def test_pixels_are_not_read(tmp_path: Path) -> None:
    """A file cut within its pixels still has its header."""
    image_file("a.fits")(tmp_path)
    whole = (tmp_path / "a.fits").read_bytes()
    (tmp_path / "a.fits").write_bytes(whole[:3000])
    assert len(read_images("*.fits", "Dunlin", base=tmp_path)) == 1


@pytest.mark.parametrize("case", BAD_IMAGES, ids=str)
def test_broken_images(case: BadInput, tmp_path: Path) -> None:
    with pytest.raises(LogError) as caught:
        read_images(case.write(tmp_path), "Dunlin", ImageOptions(**case.options), tmp_path)
    message = str(caught.value)
    assert all(word in message for word in case.words), message
