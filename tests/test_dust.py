"""Dust on the line and from files, against healpy, which is independent of our indexing."""

from __future__ import annotations

import gzip
import io
from pathlib import Path
from typing import Any

import healpy
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from numpy.typing import NDArray
from skytally.dust import Dust
from skytally.dust_io import read_dust
from skytally.errors import MapError
from skytally.spans import LINE_ORDER, Spans, SpanTable

Floats = NDArray[np.float64]
FULL = {"PIXTYPE": "HEALPIX", "ORDERING": "RING", "NSIDE": 16, "COORDSYS": "C"}


def ebv_at(lon_deg: Floats, lat_deg: Floats) -> Floats:
    """Return an uneven dust, smooth on the scale of the maps below."""
    lon, lat = np.radians(lon_deg), np.radians(lat_deg)
    return np.asarray(0.4 + 0.25 * np.sin(2 * lon) * np.cos(lat) ** 2 + 0.1 * np.sin(3 * lat))


def ring_map(nside: int) -> Floats:
    return ebv_at(*healpy.pix2ang(nside, np.arange(healpy.nside2npix(nside)), lonlat=True))


def write(
    path: Path, columns: dict[str, NDArray[Any]], header: dict[str, object], unit: str = "mag"
) -> Path:
    formats = {"f": "D", "i": "K"}
    listed = [
        fits.Column(n, formats[v.dtype.kind], array=v, unit=unit if v.dtype.kind == "f" else None)
        for n, v in columns.items()
    ]
    hdu = fits.BinTableHDU.from_columns(listed)
    hdu.header.update(header)
    buffer = io.BytesIO()
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(buffer)
    data = buffer.getvalue()
    path.write_bytes(gzip.compress(data) if path.suffix == ".gz" else data)
    return path


def layouts(folder: Path) -> dict[str, Path]:
    """One dust in every layout; values by healpy."""
    ring = ring_map(16)
    nested = healpy.reorder(ring, r2n=True)
    pixels = np.arange(ring.size)[::-1].copy()
    # Multi-order: the first base cell whole at order 4, its neighbours likewise, the last coarse.
    coarse = nested.reshape(-1, 4).mean(axis=1)
    half = nested.size // 2
    uniq = np.concatenate(
        (4 * 4**4 + np.arange(half), 4 * 4**3 + np.arange(half // 4, coarse.size))
    )
    mixed = np.concatenate((nested[:half], coarse[half // 4 :]))
    return {
        "ring": write(folder / "ring.fits", {"EBV": ring}, FULL),
        "nested": write(folder / "nested.fits.gz", {"ebv": nested}, {**FULL, "ORDERING": "NESTED"}),
        "explicit": write(
            folder / "explicit.fits",
            {"PIXEL": pixels, "E(B-V)": ring[pixels]},
            {**FULL, "INDXSCHM": "EXPLICIT"},
        ),
        "multi-order": write(folder / "uniq.fits", {"UNIQ": uniq, "EBV": mixed}, {"COORDSYS": "C"}),
    }


def disc(lon: float, lat: float, radius: float, nest: bool) -> NDArray[np.int64]:
    """Order-11 pixels with their centre in a circle."""
    centre = healpy.ang2vec(lon, lat, lonlat=True)
    return np.asarray(healpy.query_disc(2048, centre, np.radians(radius), nest=nest))


def circle_table(*circles: tuple[float, float, float]) -> SpanTable:
    return SpanTable.from_regions(Spans.from_cells(11, disc(*c, nest=True)) for c in circles)


def brute_mean(lon: float, lat: float, radius: float, nside: int = 16) -> float:
    """Mean of the RING map over a circle by healpy: value of the coarse pixel at fine centres."""
    vector = healpy.pix2vec(2048, disc(lon, lat, radius, nest=False))
    return float(ring_map(nside)[healpy.vec2pix(nside, *vector)].mean())


CIRCLES = ((10.0, 5.0, 1.0), (200.0, -72.0, 6.0), (0.0, 90.0, 3.0), (359.5, 30.0, 2.0))


@pytest.mark.parametrize("name", ["ring", "nested", "explicit"])
def test_the_mean_over_circles_is_that_of_healpy(tmp_path: Path, name: str) -> None:
    dust = read_dust(layouts(tmp_path)[name])
    mean = dust.mean_of_table(circle_table(*CIRCLES))
    # The same centres at the same order, so nothing but rounding differs.
    np.testing.assert_allclose(mean, [brute_mean(*c) for c in CIRCLES], rtol=1e-12)
    assert dust.notes == ()


def test_values_at_positions_are_those_of_healpy(tmp_path: Path) -> None:
    rng = np.random.default_rng(5)
    vector = rng.normal(size=(3, 500))
    position = healpy.vec2pix(1 << LINE_ORDER, *vector, nest=True)
    expected = ring_map(16)[healpy.vec2pix(16, *vector)]
    for name in ("ring", "nested", "explicit"):
        np.testing.assert_array_equal(read_dust(layouts(tmp_path)[name]).at(position), expected)
    mixed = read_dust(layouts(tmp_path)["multi-order"]).at(position)
    coarse = healpy.ud_grade(ring_map(16), 8)[healpy.vec2pix(8, *vector)]
    first = position < 6 << (2 * LINE_ORDER)
    np.testing.assert_allclose(mixed, np.where(first, expected, coarse), rtol=1e-14)


def test_a_mean_over_the_whole_sky_is_the_mean_of_the_pixels(tmp_path: Path) -> None:
    whole = SpanTable.from_regions([Spans.full()])
    for path in layouts(tmp_path).values():
        mean = read_dust(path).mean_of_table(whole)
        np.testing.assert_allclose(mean, ring_map(16).mean(), rtol=1e-13)


@pytest.mark.parametrize("nside", [16, 128])
def test_a_galactic_map_keeps_its_values_in_place(tmp_path: Path, nside: int) -> None:
    """Circles about ICRS places: healpy's Galactic pixels, the frame turned by astropy."""
    path = write(
        tmp_path / "g.fits", {"EBV": ring_map(nside)}, {**FULL, "NSIDE": nside, "COORDSYS": "G"}
    )
    dust = read_dust(path)
    mean = dust.mean_of_table(circle_table(*CIRCLES))
    expected = []
    for lon, lat, radius in CIRCLES:
        at = SkyCoord(lon, lat, unit="deg").galactic
        expected.append(brute_mean(at.l.deg, at.b.deg, radius, nside))
    # Cells of the line lie askew to the map's: off by a part of one cell's gradient at the rim,
    # 0.5 mag/rad times a cell of 3.7° or 0.46°, averaged down over the circle.
    np.testing.assert_allclose(mean, expected, atol=0.012 if nside == 16 else 0.0012)
    # Rotation neither makes nor loses dust, up to the sum over 16 points a cell.
    whole = dust.mean_of_table(SpanTable.from_regions([Spans.full()]))
    np.testing.assert_allclose(whole, ring_map(nside).mean(), atol=1e-4)
    assert any("Galactic" in note for note in dust.notes)


def test_small_regions_are_averaged_as_well_as_large_ones() -> None:
    """Two neighbouring order-29 cells of 0.2 and 0.6: 0.4, by hand; the sky before is full."""
    edge = 7 << 40
    dust = Dust(np.array([0, edge]), np.array([edge, edge + 9]), np.array([0.2, 0.6]))
    table = SpanTable(
        np.array([edge - 1, edge - 3, 5]), np.array([edge + 1, edge - 1, 6]), np.array([0, 1, 2, 3])
    )
    np.testing.assert_allclose(dust.mean_of_table(table), [0.4, 0.2, 0.2], rtol=1e-14)
    np.testing.assert_array_equal(dust.edges, [0, edge, edge + 9])


def test_holes_have_no_value_and_are_left_out_of_a_mean() -> None:
    dust = Dust(np.array([10, 30]), np.array([20, 40]), np.array([1.0, 3.0]))
    at = dust.at(np.array([9, 10, 19, 20, 29, 30, 39, 40]))
    np.testing.assert_array_equal(at, [np.nan, 1, 1, np.nan, np.nan, 3, 3, np.nan])
    table = SpanTable(
        np.array([0, 22, 15, 15, 50]),
        np.array([8, 28, 25, 35, 60]),
        np.array([0, 1, 2, 3, 4, 5, 5]),
    )
    # Owner 3 holds 5 of the first and 5 of the second; owner 5 is an empty region.
    np.testing.assert_array_equal(
        dust.mean_of_table(table), [np.nan, np.nan, 1.0, 2.0, np.nan, np.nan]
    )
    empty = Dust(np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0))
    assert np.isnan(empty.at(np.array([3]))).all()
    assert np.isnan(empty.mean_of_table(table)).all()


def test_a_very_fine_map_is_averaged(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("skytally.dust_io._DEEPEST", 3)
    dust = read_dust(layouts(tmp_path)["ring"])
    expected = healpy.reorder(healpy.ud_grade(ring_map(16), 8), r2n=True)
    np.testing.assert_allclose(dust.ebv, expected, rtol=1e-14)
    assert "averaged to cells of order 3" in dust.notes[0]


def test_a_lone_column_of_decimals_is_taken_and_said(tmp_path: Path) -> None:
    path = write(tmp_path / "m.fits", {"TEMPERATURE": ring_map(16)}, FULL, unit="")
    dust = read_dust(path)
    assert dust.notes == ("Column 'TEMPERATURE' of the dust map is taken as E(B-V) in magnitudes.",)
    two = write(tmp_path / "n.fits", {"A": ring_map(16), "B": ring_map(16)}, FULL)
    with pytest.raises(MapError, match=r"holds a dust map; its columns are A, B.*column EBV"):
        read_dust(two)


def spoiled(**at: float) -> Floats:
    values = ring_map(16)
    for pixel, value in at.items():
        values[int(pixel[1:])] = value
    return values


@pytest.mark.parametrize(
    ("columns", "header", "words"),
    [
        ({"EBV": spoiled(p7=-1.6375e30, p9=np.nan)}, {}, ("2 cells hold no value", "7 (RING)")),
        (
            {"PIXEL": np.arange(3071), "EBV": ring_map(16)[:-1]},
            {"INDXSCHM": "EXPLICIT"},
            ("lists 99.97 % of the sky", "of order 4 (NESTED)", "allow_holes = true"),
        ),
        ({"EBV": spoiled(p30=-0.01)}, {}, ("1 cells are no E(B-V)", "30 (RING), holds -0.01")),
        ({"EBV": spoiled(p4=51.0)}, {}, ("0 to 50 magnitudes", "4 (RING), holds 51", "A_V")),
        ({"EBV": spoiled(p5=np.inf)}, {}, ("holds inf",)),
        ({"EBV": ring_map(16)}, {"ORDERING": ""}, ("states no ORDERING", "RING or NESTED")),
        ({"EBV": ring_map(16)}, {"COORDSYS": "E"}, ("COORDSYS is 'E'", "'G' (Galactic)")),
        ({"EBV": ring_map(16)}, {"NSIDE": 32}, ("3072 pixels, expected 12288",)),
        ({"N": np.arange(4)}, {}, ("no table of this file holds a dust map", "column EBV")),
    ],
)
def test_broken_maps_are_refused_with_place_and_remedy(
    tmp_path: Path, columns: dict[str, NDArray[Any]], header: dict[str, object], words: tuple[str]
) -> None:
    path = write(tmp_path / "dust.fits", columns, {**FULL, **header})
    with pytest.raises(MapError) as caught:
        read_dust(path)
    text = str(caught.value)
    assert text.startswith(f"{path}")
    assert caught.value.remedy
    for word in words:
        assert word in text


def test_a_multi_order_map_with_a_hole_names_the_cell(tmp_path: Path) -> None:
    uniq = np.array([4, 5, 6, 8, 9, 10, 11, 12, 13, 14, 15])  # base cell 3 (NUNIQ 7) is missing
    path = write(tmp_path / "u.fits", {"UNIQ": uniq, "EBV": np.full(11, 0.1)}, {"COORDSYS": "G"})
    with pytest.raises(MapError, match=r"91\.67 % of the sky; the first .* is 3 of order 0"):
        read_dust(path)


def test_a_wrong_unit_is_refused(tmp_path: Path) -> None:
    path = write(tmp_path / "k.fits", {"EBV": ring_map(16)}, FULL, unit="K")
    with pytest.raises(MapError, match=r"column 'EBV': the unit is 'K', expected magnitudes"):
        read_dust(path)


@pytest.mark.parametrize("frame", ["C", "G"])
def test_allowed_holes_are_holes_and_said(tmp_path: Path, frame: str) -> None:
    """A quarter of the sky, RING pixels north of sin b = 1/2, has no value."""
    values = ring_map(16)
    values[: values.size // 4] = np.nan
    path = write(tmp_path / "h.fits", {"EBV": values}, {**FULL, "COORDSYS": frame})
    dust = read_dust(path, allow_holes=True)
    pole = SkyCoord(0, 90, unit="deg", frame="icrs" if frame == "C" else "galactic").icrs
    south = SkyCoord(0, -90, unit="deg", frame="icrs" if frame == "C" else "galactic").icrs
    lon, lat = [pole.ra.deg, south.ra.deg], [pole.dec.deg, south.dec.deg]
    where = healpy.ang2pix(1 << LINE_ORDER, lon, lat, nest=True, lonlat=True)
    north_value, south_value = dust.at(where)
    assert np.isnan(north_value)
    assert south_value == pytest.approx(values[-4:].mean(), abs=0.02)
    assert "not corrected" in dust.notes[-1]
    stated = float(dust.notes[-1].split(" over ")[1].split(" %")[0])
    # A cell of the line is a hole only where all its samples are.
    assert 22 < stated <= 25


def test_files_that_are_none_are_refused(tmp_path: Path) -> None:
    with pytest.raises(MapError, match="URL"):
        read_dust("https://skytally.invalid/dust.fits")
    (tmp_path / "text.fits").write_text("l,b,ebv\n")
    with pytest.raises(MapError, match="expected FITS"):
        read_dust(tmp_path / "text.fits")
    with pytest.raises(MapError, match="more than the limit"):
        read_dust(layouts(tmp_path)["ring"], size_limit_bytes=1000)
