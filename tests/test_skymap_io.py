"""Map files of every layout against healpy, circles against their integral, and broken files."""

from __future__ import annotations

import gzip
import hashlib
import os
from collections.abc import Callable
from pathlib import Path

import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.io import fits
from scipy.integrate import quad
from skytally.errors import MapError, OutputError
from skytally.raster import rasterise_shape
from skytally.shapes import Circle
from skytally.skymap import DistanceLayer, SkyMap
from skytally.skymap_circle import circle_sigma_deg
from skytally.skymap_io import circle_skymap, read_skymap, write_skymap
from skytally.spans import FULL_SKY_SR, Spans, cell_to_span

ORDER = 5
NSIDE = 1 << ORDER
PIXELS = 12 * NSIDE**2
PIXEL_SR = FULL_SKY_SR / PIXELS
# Regions are compared cell by cell at this order, so both sides see the same region.
TEST_ORDER = 9
# The tolerance on a probability that the README states.
TOLERANCE = 0.0005


def probabilities(seed: int = 1) -> np.ndarray:
    """Probability per RING pixel: three blobs with pixel noise, and empty sky."""
    rng = np.random.default_rng(seed)
    vector = np.stack(healpy.pix2vec(NSIDE, np.arange(PIXELS)), axis=-1)
    values = np.zeros(PIXELS)
    for width_deg in (4.0, 9.0, 15.0):
        centre = rng.normal(size=3)
        separation = np.degrees(
            np.arccos(np.clip(vector @ (centre / np.linalg.norm(centre)), -1, 1))
        )
        values += np.exp(-0.5 * (separation / width_deg) ** 2)
    values *= rng.uniform(0.7, 1.3, PIXELS)
    values[values < 1e-4] = 0.0
    return values / values.sum()


def nested(ring: np.ndarray) -> np.ndarray:
    return healpy.reorder(ring, r2n=True)


def write_table(path: Path, columns: list[fits.Column], **header: object) -> Path:
    table = fits.BinTableHDU.from_columns(columns)
    table.header.update({key: value for key, value in header.items() if value is not None})
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path, overwrite=True)
    return path


def discs(ring: np.ndarray, count: int, galactic: bool = False) -> list[tuple[Spans, float]]:
    """Random discs as cells of order 9, each with its probability by healpy.

    The twin takes each small cell's centre, finds the map pixel there with
    healpy (in the map's own frame, by astropy) and adds up.
    """
    rng = np.random.default_rng(7)
    found = []
    for pixel in rng.choice(PIXELS, count, p=ring):
        lon, lat = healpy.pix2ang(NSIDE, pixel, lonlat=True)
        if galactic:
            icrs = SkyCoord(lon * u.deg, lat * u.deg, frame="galactic").icrs
            lon, lat = icrs.ra.deg, icrs.dec.deg
        cells = healpy.query_disc(
            1 << TEST_ORDER,
            healpy.ang2vec(lon, lat, lonlat=True),
            np.radians(rng.uniform(1, 15)),
            nest=True,
        )
        fine = cells if not galactic else (cells[:, np.newaxis] * 16 + np.arange(16)).reshape(-1)
        fine_order = TEST_ORDER + 2 * galactic
        lon, lat = healpy.pix2ang(1 << fine_order, fine, nest=True, lonlat=True)
        if galactic:
            place = SkyCoord(lon * u.deg, lat * u.deg).galactic
            lon, lat = place.l.deg, place.b.deg
        share = 4.0 ** (ORDER - fine_order)
        expected = ring[healpy.ang2pix(NSIDE, lon, lat, lonlat=True)].sum() * share
        found.append((Spans.from_cells(TEST_ORDER, cells), float(expected)))
    return found


def check(skymap: SkyMap, ring: np.ndarray, tolerance: float, galactic: bool = False) -> None:
    assert skymap.probability.total == pytest.approx(1.0, abs=1e-12)
    for spans, expected in discs(ring, 12, galactic):
        assert 0.001 < expected < 1
        assert skymap.probability.of_region(spans) == pytest.approx(expected, abs=tolerance)


def flat_ring(path: Path, ring: np.ndarray) -> None:
    healpy.write_map(path, ring, coord="C", column_names=["PROB"], dtype=np.float64)


def flat_ring_one_per_row(path: Path, ring: np.ndarray) -> None:
    healpy.write_map(path, ring, coord="C", column_names=["prob"], dtype=np.float64, fits_IDL=False)


def flat_nested(path: Path, ring: np.ndarray) -> None:
    healpy.write_map(
        path, nested(ring), nest=True, coord="C", column_names=["Probability"], dtype=np.float64
    )


def flat_explicit(path: Path, ring: np.ndarray) -> None:
    partial = np.where(ring > 0, ring, healpy.UNSEEN)
    healpy.write_map(
        path, partial, coord="C", column_names=["PROB"], dtype=np.float64, partial=True
    )


def flat_pix_column_shuffled(path: Path, ring: np.ndarray) -> None:
    pixel = np.random.default_rng(3).permutation(np.flatnonzero(ring))
    write_table(
        path,
        [fits.Column("pix", "J", array=pixel), fits.Column("p", "D", array=ring[pixel])],
        ORDERING="RING",
        COORDSYS="ICRS",
        NSIDE=NSIDE,
        INDXSCHM="EXPLICIT",
    )


def flat_density_per_sr(path: Path, ring: np.ndarray) -> None:
    column = fits.Column("PROBDENSITY", "D", unit="1/sr", array=nested(ring) / PIXEL_SR)
    write_table(path, [column], ORDERING="NEST", COORDSYS="CEL")


def flat_density_per_deg2(path: Path, ring: np.ndarray) -> None:
    # 1 sr = (180/π)² deg².
    per_deg2 = ring / (PIXEL_SR * (180 / np.pi) ** 2)
    column = fits.Column("PROB", "D", unit="deg-2", array=per_deg2)
    write_table(path, [column], ORDERING="RING", COORDSYS="EQ", NSIDE=NSIDE)


def flat_missing_as_zero(path: Path, ring: np.ndarray) -> None:
    column = fits.Column("PROB", "D", array=np.where(ring > 0, ring, -1.6375e30))
    write_table(path, [column], ORDERING="RING", COORDSYS="C", NSIDE=NSIDE)


def merged_cells(ring: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """UNIQ and density; empty cells merged into the coarsest that fit, by a plain loop."""
    values = nested(ring) / PIXEL_SR
    uniq, density = [], []
    todo = [(0, cell) for cell in range(12)]
    while todo:
        order, cell = todo.pop()
        width = 4 ** (ORDER - order)
        part = values[cell * width : (cell + 1) * width]
        if order == ORDER or not part.any():
            uniq.append(4 * 4**order + cell)
            density.append(part[0])
        else:
            todo += [(order + 1, 4 * cell + child) for child in range(4)]
    return np.array(uniq), np.array(density)


def multi_order(path: Path, ring: np.ndarray) -> None:
    uniq, density = merged_cells(ring)
    write_table(
        path,
        [
            fits.Column("UNIQ", "K", array=uniq),
            fits.Column("PROBDENSITY", "D", unit="sr-1", array=density),
        ],
        ORDERING="NUNIQ",
        COORDSYS="C",
    )


def multi_order_per_deg2(path: Path, ring: np.ndarray) -> None:
    uniq, density = merged_cells(ring)
    write_table(
        path,
        [
            fits.Column("uniq", "J", array=uniq),
            fits.Column("probDensity", "D", unit="1/deg2", array=density * (np.pi / 180) ** 2),
        ],
        ORDERING="NUNIQ",
        COORDSYS="C",
    )


LAYOUTS = [
    flat_ring,
    flat_ring_one_per_row,
    flat_nested,
    flat_explicit,
    flat_pix_column_shuffled,
    flat_density_per_sr,
    flat_density_per_deg2,
    flat_missing_as_zero,
    multi_order,
    multi_order_per_deg2,
]


@pytest.mark.parametrize("write", LAYOUTS)
@pytest.mark.parametrize("suffix", [".fits", ".fits.gz"])
def test_every_layout_gives_the_same_map(
    write: Callable[[Path, np.ndarray], None], suffix: str, tmp_path: Path
) -> None:
    ring = probabilities()
    plain = tmp_path / "map.fits"
    write(plain, ring)
    path = tmp_path / f"read{suffix}"
    data = plain.read_bytes()
    path.write_bytes(gzip.compress(data) if suffix == ".fits.gz" else data)

    skymap = read_skymap(path, label="2 update", issued_mjd=63000.5)

    check(skymap, ring, 1e-12)
    values = nested(ring)
    cells = np.flatnonzero(values)
    starts, stops = cell_to_span(ORDER, cells)
    np.testing.assert_array_equal(skymap.starts, starts)
    np.testing.assert_array_equal(skymap.stops, stops)
    np.testing.assert_allclose(skymap.density_per_sr, values[cells] / PIXEL_SR, rtol=1e-12)
    assert skymap.order_max == ORDER
    assert (skymap.label, skymap.issued_mjd) == ("2 update", 63000.5)
    assert skymap.path == str(path)
    assert skymap.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert skymap.distance is None


def test_1024_pixels_per_row_is_what_healpy_writes(tmp_path: Path) -> None:
    flat_ring(tmp_path / "map.fits", probabilities())
    assert fits.getheader(tmp_path / "map.fits", 1)["TFORM1"] == "1024D"


@pytest.mark.parametrize("layout", ["flat", "multi-order"])
def test_galactic_maps_are_resampled(layout: str, tmp_path: Path) -> None:
    ring = probabilities(4)
    path = tmp_path / "map.fits"
    if layout == "flat":
        healpy.write_map(path, ring, coord="G", column_names=["PROB"], dtype=np.float64)
    else:
        multi_order(path, ring)
        fits.setval(path, "COORDSYS", value="GAL", ext=1)
    skymap = read_skymap(path)
    check(skymap, ring, TOLERANCE, galactic=True)
    assert ORDER < skymap.order_max <= ORDER + 5
    (note,) = (note for note in skymap.notes if "Galactic" in note)
    assert f"order {ORDER}" in note
    assert f"order {skymap.order_max}" in note


def test_a_galactic_map_of_coarse_and_fine_cells(tmp_path: Path) -> None:
    # All of the probability in one order-10 cell and one of order 1, half and half.
    path = tmp_path / "map.fits"
    uniq = np.array([4 * 4**10 + 5_000_000, 4 * 4 + 3])
    areas = FULL_SKY_SR / 12 / 4.0 ** np.array([10, 1])
    write_table(
        path,
        [
            fits.Column("UNIQ", "K", array=uniq),
            fits.Column("PROBDENSITY", "D", unit="sr-1", array=0.5 / areas),
        ],
        COORDSYS="G",
    )
    skymap = read_skymap(path)
    lon, lat = healpy.pix2ang(1 << 10, 5_000_000, nest=True, lonlat=True)
    icrs = SkyCoord(lon * u.deg, lat * u.deg, frame="galactic").icrs
    near = healpy.query_disc(
        1 << 12, healpy.ang2vec(icrs.ra.deg, icrs.dec.deg, lonlat=True), np.radians(0.2), nest=True
    )
    held = skymap.probability.of_region(Spans.from_cells(12, near))
    assert held == pytest.approx(0.5, abs=0.001)


def distance_columns(count: int, scale: float, unit: str | None) -> list[fits.Column]:
    rng = np.random.default_rng(5)
    norm_unit = None if unit is None else f"{unit}-2"
    return [
        fits.Column("DISTMU", "D", unit=unit, array=rng.uniform(50, 90, count) / scale),
        fits.Column("DISTSIGMA", "D", unit=unit, array=rng.uniform(5, 9, count) / scale),
        fits.Column("DISTNORM", "D", unit=norm_unit, array=rng.uniform(1, 2, count) * scale**2),
    ]


@pytest.mark.parametrize(
    ("unit", "scale"), [("Mpc", 1.0), (None, 1.0), ("kpc", 1e-3), ("Gpc", 1e3)]
)
def test_distances_follow_their_cells_in_mpc(
    unit: str | None, scale: float, tmp_path: Path
) -> None:
    # 1 Gpc = 10³ Mpc = 10⁶ kpc; DISTNORM scales with the inverse square.
    ring = probabilities()
    path = write_table(
        tmp_path / "map.fits",
        [fits.Column("PROB", "D", array=ring), *distance_columns(PIXELS, scale, unit)],
        ORDERING="RING",
        COORDSYS="C",
        NSIDE=NSIDE,
        DISTMEAN=71.5,
        DISTSTD=12.25,
    )
    skymap = read_skymap(path)
    layer = skymap.distance
    assert layer is not None
    pixels = healpy.nest2ring(NSIDE, np.flatnonzero(nested(ring)))
    wanted = [column.array[pixels] for column in distance_columns(PIXELS, 1.0, None)]
    np.testing.assert_allclose(layer.mu_mpc, wanted[0], rtol=1e-12)
    np.testing.assert_allclose(layer.sigma_mpc, wanted[1], rtol=1e-12)
    np.testing.assert_allclose(layer.norm_per_mpc2, wanted[2], rtol=1e-12)
    assert (layer.header_mean_mpc, layer.header_sd_mpc) == (71.5, 12.25)


def test_distances_of_a_galactic_map_come_from_sampled_cells(tmp_path: Path) -> None:
    ring = probabilities()
    path = write_table(
        tmp_path / "map.fits",
        [fits.Column("PROB", "D", array=ring), *distance_columns(PIXELS, 1.0, "Mpc")],
        ORDERING="RING",
        COORDSYS="G",
        NSIDE=NSIDE,
    )
    skymap = read_skymap(path)
    assert skymap.distance is not None
    # Where a whole cell lies inside one Galactic pixel the parameters are that pixel's.
    size = skymap.stops - skymap.starts
    fine = size == size.min()
    order = skymap.order_max
    cells = skymap.starts[fine] >> (2 * (29 - order))
    corner = healpy.boundaries(1 << order, cells, step=1, nest=True).transpose(1, 0, 2)
    place = SkyCoord(*corner, representation_type="cartesian").galactic
    pixel = healpy.ang2pix(NSIDE, place.l.deg, place.b.deg, lonlat=True)
    inside = (pixel == pixel[:, :1]).all(axis=1)
    assert inside.sum() > 100
    mu = distance_columns(PIXELS, 1.0, None)[0].array
    np.testing.assert_allclose(skymap.distance.mu_mpc[fine][inside], mu[pixel[inside, 0]])


def test_cells_without_distance_are_kept_as_they_are(tmp_path: Path) -> None:
    path = write_table(
        tmp_path / "map.fits",
        [
            fits.Column("PROB", "D", array=np.full(12, 1 / 12)),
            fits.Column("DISTMU", "D", array=np.array([np.inf, np.nan, -1.6375e30] + [40.0] * 9)),
            fits.Column("DISTSIGMA", "D", array=np.ones(12)),
            fits.Column("DISTNORM", "D", array=np.zeros(12)),
        ],
        ORDERING="NESTED",
        COORDSYS="C",
    )
    layer = read_skymap(path).distance
    assert layer is not None
    assert np.isfinite(layer.mu_mpc).tolist() == [False] * 3 + [True] * 9
    assert layer.header_mean_mpc is None


def test_a_sum_within_one_percent_is_normalised_and_said(tmp_path: Path) -> None:
    column = fits.Column("PROB", "D", array=probabilities() * 1.004)
    path = write_table(tmp_path / "m.fits", [column], ORDERING="RING", COORDSYS="C", NSIDE=NSIDE)
    skymap = read_skymap(path)
    assert skymap.probability.total == pytest.approx(1.0, abs=1e-12)
    assert any("1.004" in note for note in skymap.notes)


def test_a_map_of_part_of_the_sky_says_so(tmp_path: Path) -> None:
    uniq = np.array([4, 5, 6])
    path = write_table(
        tmp_path / "m.fits",
        [
            fits.Column("UNIQ", "K", array=uniq),
            fits.Column("PROBDENSITY", "D", array=np.full(3, 1 / np.pi)),
        ],
        COORDSYS="C",
        OBJECT="FULLSKY",
    )
    skymap = read_skymap(path)
    assert any("25 % of the sky" in note and "claims" in note for note in skymap.notes)
    assert any("no unit" in note for note in skymap.notes)
    assert skymap.probability.of_region(Spans.from_cells(0, uniq - 4)) == pytest.approx(1.0)


# ---------------------------------------------------------------- circles


def circle_probability(radius_deg: float, sigma_deg: float) -> float:
    """Integral of exp(−θ²/2σ²) sin θ over the disc, relative to the sphere, by quadrature."""
    sigma = np.radians(sigma_deg)

    def upto(radius: float) -> float:
        return float(
            quad(lambda t: np.exp(-t * t / 2) * np.sin(t * sigma), 0, min(radius / sigma, 38.0))[0]
        )

    return upto(np.radians(radius_deg)) / upto(np.pi)


@pytest.mark.parametrize("radius_90", [0.0001, 0.01, 0.2, 1.0, 3.3, 20.0, 90.0])
@pytest.mark.parametrize(("ra", "dec"), [(30.0, -40.0), (0.0, 90.0), (359.999, 0.1)])
def test_circle_holds_its_gaussian(ra: float, dec: float, radius_90: float) -> None:
    skymap = circle_skymap(ra, dec, radius_90, label="circle")
    assert skymap.probability.total == pytest.approx(1.0, abs=1e-12)
    assert skymap.starts.size < 50_000
    assert (skymap.starts[1:] >= skymap.stops[:-1]).all()
    sigma = circle_sigma_deg(radius_90)
    for part in (0.4, 0.7, 1.0, 1.5):
        radius = part * radius_90
        order = min(skymap.order_max + 6, 29)
        disc = rasterise_shape(Circle(ra, dec, radius), order).centre.union()
        expected = circle_probability(radius, sigma)
        assert skymap.probability.of_region(disc) == pytest.approx(expected, abs=TOLERANCE)
        if part == 1.0:
            assert expected == pytest.approx(0.9, abs=1e-9)


def test_circle_sigma_in_the_small_angle_limit() -> None:
    # Rayleigh distribution: 1 − exp(−r²/2σ²) = 0.9, so r = σ √(2 ln 10).
    assert circle_sigma_deg(0.01) * np.sqrt(2 * np.log(10)) == pytest.approx(0.01, rel=1e-7)


@pytest.mark.parametrize(
    ("ra", "dec", "radius", "word"),
    [
        (10.0, 95.0, 1.0, "dec"),
        (400.0, 0.0, 1.0, "ra"),
        (10.0, 0.0, 0.0, "radius_90"),
        (10.0, 0.0, -1.0, "radius_90"),
        (10.0, 0.0, 90.5, "radius_90"),
        (float("nan"), 0.0, 1.0, "finite"),
    ],
)
def test_circle_numbers_out_of_range(ra: float, dec: float, radius: float, word: str) -> None:
    with pytest.raises(MapError, match=word) as caught:
        circle_skymap(ra, dec, radius)
    assert caught.value.remedy


# ---------------------------------------------------------------- writing


@pytest.mark.parametrize("name", ["map.fits", "map.fits.gz"])
def test_written_maps_read_back(name: str, tmp_path: Path) -> None:
    circle = circle_skymap(120.0, 35.0, 4.0)
    count = circle.starts.size
    rng = np.random.default_rng(2)
    layer = DistanceLayer(
        np.where(rng.uniform(size=count) < 0.1, np.inf, rng.uniform(100, 200, count)),
        rng.uniform(10, 20, count),
        rng.uniform(0, 1e-4, count),
        150.0,
        40.0,
    )
    skymap = SkyMap(
        circle.starts, circle.stops, circle.density_per_sr, circle.order_max, distance=layer
    )
    path = tmp_path / name
    write_skymap(path, skymap)
    again = read_skymap(path)
    np.testing.assert_array_equal(again.starts, skymap.starts)
    np.testing.assert_array_equal(again.stops, skymap.stops)
    np.testing.assert_allclose(again.density_per_sr, skymap.density_per_sr, rtol=1e-12)
    assert again.distance is not None
    np.testing.assert_array_equal(again.distance.mu_mpc, layer.mu_mpc)
    np.testing.assert_array_equal(again.distance.norm_per_mpc2, layer.norm_per_mpc2)
    assert again.distance.header_mean_mpc == 150.0
    assert again.notes == ()
    first = path.read_bytes()
    write_skymap(path, skymap)
    assert path.read_bytes() == first
    assert [p.name for p in tmp_path.iterdir()] == [name]


def test_a_written_map_covers_the_sky_and_states_what_readers_need(tmp_path: Path) -> None:
    path = tmp_path / "map.fits"
    write_skymap(path, circle_skymap(120.0, 35.0, 4.0))
    header, data = fits.getheader(path, 1), fits.getdata(path, 1)
    assert header["PIXTYPE"] == "HEALPIX"
    assert (header["ORDERING"], header["COORDSYS"]) == ("NUNIQ", "C")
    assert (header["TTYPE1"], header["TTYPE2"], header["TUNIT2"]) == ("UNIQ", "PROBDENSITY", "sr-1")
    order = np.floor(np.log2(data["UNIQ"] / 4) / 2)
    assert order.max() == header["MOCORDER"]
    area = FULL_SKY_SR / (12 * 4.0**order)
    assert area.sum() == pytest.approx(4 * np.pi, rel=1e-12)
    assert (area * data["PROBDENSITY"]).sum() == pytest.approx(1.0, rel=1e-12)


def test_spans_that_are_no_cells_are_split(tmp_path: Path) -> None:
    starts, stops = np.array([5, 1000]), np.array([900, 4000])
    density = np.array([1.0, 2.0])
    unit = FULL_SKY_SR / (12 << 58)
    density /= ((stops - starts) * unit * density).sum()
    write_skymap(tmp_path / "m.fits", SkyMap(starts, stops, density, 29))
    again = read_skymap(tmp_path / "m.fits")
    spans = Spans.from_intervals(starts[:1], stops[:1])
    expected = 895 / (895 + 2 * 3000)
    assert again.probability.of_region(spans) == pytest.approx(expected, rel=1e-12)


def test_a_map_that_cannot_be_written(tmp_path: Path) -> None:
    with pytest.raises(OutputError, match=r"m\.fits.*cannot be written"):
        write_skymap(tmp_path / "absent" / "m.fits", circle_skymap(1.0, 2.0, 3.0))
    (tmp_path / "taken").mkdir()
    with pytest.raises(OutputError):
        write_skymap(tmp_path / "taken", circle_skymap(1.0, 2.0, 3.0))
    assert [p.name for p in tmp_path.iterdir()] == ["taken"]


# ---------------------------------------------------------------- broken files


def prob(values: np.ndarray | list[float], unit: str | None = None) -> fits.Column:
    return fits.Column("PROB", "D", unit=unit, array=np.array(values, dtype=float))


def uniq_map(uniq: list[int], density: list[float]) -> list[fits.Column]:
    return [
        fits.Column("UNIQ", "K", array=np.array(uniq)),
        fits.Column("PROBDENSITY", "D", unit="sr-1", array=np.array(density)),
    ]


EVEN = np.full(12, 1 / 12)
RING = {"ORDERING": "RING", "COORDSYS": "C", "NSIDE": 1}
NUNIQ = {"ORDERING": "NUNIQ", "COORDSYS": "C"}
SKY = 1 / FULL_SKY_SR

BROKEN_TABLES = {
    "no ordering": ([prob(EVEN)], {**RING, "ORDERING": None}, "no ORDERING"),
    "wrong ordering": ([prob(EVEN)], {**RING, "ORDERING": "SPIRAL"}, "'SPIRAL'"),
    "no frame": ([prob(EVEN)], {**RING, "COORDSYS": None}, "no COORDSYS"),
    "ecliptic": ([prob(EVEN)], {**RING, "COORDSYS": "E"}, "'E'"),
    "multi-order without frame": (uniq_map([4], [3.0]), {"ORDERING": "NUNIQ"}, "no COORDSYS"),
    "ordering against UNIQ": (uniq_map([4], [3.0]), RING, "'RING'"),
    "sum 0.5": ([prob(EVEN / 2)], RING, "sums to 0.5"),
    "sum 0": ([prob(EVEN * 0)], RING, "sums to 0"),
    "sum 1.02": ([prob(EVEN * 1.02)], RING, "1.02"),
    "per pixel called per sr": ([prob(EVEN, "sr-1")], RING, "sums to"),
    "negative": ([prob([*EVEN[:5], -0.1, *EVEN[6:]])], RING, "cell 5 (RING) holds -0.1"),
    "NaN": ([prob([*EVEN[:7], np.nan, *EVEN[8:]])], RING, "cell 7 (RING) holds nan"),
    "infinite": ([prob([*EVEN[:7], np.inf, *EVEN[8:]])], RING, "holds inf"),
    "multi-order NaN": (uniq_map([4, 5], [SKY, np.nan]), NUNIQ, "0/1 (UNIQ 5, row 2)"),
    "overlap": (uniq_map([4, 5, 17], [SKY, SKY, SKY]), NUNIQ, "0/0 (UNIQ 4, row 1) and 1/1"),
    "twice": (uniq_map([4, 5, 4], [SKY, SKY, SKY]), NUNIQ, "0/0 (UNIQ 4, row 1) and 0/0"),
    "UNIQ 3": (uniq_map([4, 3], [SKY, SKY]), NUNIQ, "row 2 holds 3"),
    "UNIQ too large": (uniq_map([16 << 58], [SKY]), NUNIQ, "order 0 to 29"),
    "UNIQ not integer": (
        [fits.Column("UNIQ", "D", array=EVEN), prob(EVEN)],
        NUNIQ,
        "float64, expected integers",
    ),
    "NSIDE 3": ([prob(np.full(108, 1 / 108))], {**RING, "NSIDE": 3}, "NSIDE is 3"),
    "NSIDE text": ([prob(EVEN)], {**RING, "NSIDE": "one"}, "NSIDE is 'one'"),
    "NSIDE against count": ([prob(EVEN)], {**RING, "NSIDE": 2}, "12 pixels, expected 48"),
    "count": ([prob(np.full(13, 1 / 13))], {**RING, "NSIDE": None}, "13 pixels"),
    "explicit without NSIDE": (
        [fits.Column("PIXEL", "J", array=np.arange(12)), prob(EVEN)],
        {**RING, "NSIDE": None},
        "no NSIDE",
    ),
    "explicit without PIXEL": ([prob(EVEN)], {**RING, "INDXSCHM": "EXPLICIT"}, "no PIXEL"),
    "pixel off the sky": (
        [fits.Column("PIXEL", "J", array=np.arange(1, 13)), prob(EVEN)],
        RING,
        "row 12 names pixel 12",
    ),
    "pixel twice": (
        [fits.Column("PIXEL", "J", array=[0, 1, 2, 3, 4, 5, 6, 7, 8, 9, 9, 11]), prob(EVEN)],
        RING,
        "pixel 9 is listed more than once",
    ),
    "unknown unit": ([prob(EVEN, "smoots")], RING, "'smoots' is not known"),
    "wrong unit": ([prob(EVEN, "Jy")], RING, "Jy is neither"),
    "text values": ([fits.Column("PROB", "3A", array=["0.1"] * 12)], RING, "expected numbers"),
    "no probability": ([fits.Column("FLUX", "D", array=EVEN)], RING, "FLUX"),
    "distance in seconds": (
        [prob(EVEN)]
        + [fits.Column(n, "D", unit="s", array=EVEN) for n in ("DISTMU", "DISTSIGMA", "DISTNORM")],
        RING,
        "the unit is s",
    ),
}


@pytest.mark.parametrize("name", BROKEN_TABLES)
def test_broken_tables(name: str, tmp_path: Path) -> None:
    columns, header, named = BROKEN_TABLES[name]
    path = write_table(tmp_path / "broken.fits", columns, **header)
    with pytest.raises(MapError) as caught:
        read_skymap(path)
    assert named in str(caught.value)
    assert str(path) in str(caught.value)
    assert caught.value.remedy


def test_broken_files(tmp_path: Path) -> None:
    good = tmp_path / "good.fits"
    flat_ring(good, probabilities())
    data = good.read_bytes()
    packed = gzip.compress(data)
    bad = tmp_path / "bad.fits"
    for content, word in (
        (b"", "empty file"),
        (b"ra,dec\n1,2\n", "ra,dec"),
        (b"\x89PNG\r\n", "PNG"),
        (data[:1000], "headers cannot be read"),
        (data[:2880], "no table"),
        (data[:4000], "no table"),
        (data[:5760], "after 0 of 12 rows"),
        (data[:20_000], "not whole"),
        (packed[:-2000], "ends too early"),
        (packed[:-4], "ends too early"),
        (packed[:-8] + b"\x00" * 8, "damaged"),
        (packed[:100] + b"\xff" * 200 + packed[300:], "damaged"),
        (gzip.compress(b"hello", mtime=0), "hello"),
        (gzip.compress(bytes(1 << 24), mtime=0), "expected FITS"),
    ):
        bad.write_bytes(content)
        with pytest.raises(MapError, match=word) as caught:
            read_skymap(bad)
        assert str(bad) in str(caught.value)
        assert caught.value.remedy


def test_sizes_are_bounded(tmp_path: Path) -> None:
    path = tmp_path / "map.fits"
    flat_ring(path, probabilities())
    packed = tmp_path / "map.fits.gz"
    packed.write_bytes(gzip.compress(path.read_bytes()))
    size = path.stat().st_size
    assert read_skymap(packed, size_limit_bytes=size).order_max == ORDER
    with pytest.raises(MapError, match="more than the limit"):
        read_skymap(path, size_limit_bytes=size - 1)
    with pytest.raises(MapError, match="expands to more than the limit"):
        read_skymap(packed, size_limit_bytes=size - 1)


@pytest.mark.parametrize("url", ["http://127.0.0.1:9/m.fits", "file:///etc/hosts", "s3://a/b"])
def test_urls_are_refused(url: str) -> None:
    with pytest.raises(MapError, match="URL"):
        read_skymap(url)


def test_what_is_no_readable_file_is_refused(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    for place, word in (
        (tmp_path, "a directory"),
        (tmp_path / "absent.fits", "no such file"),
        (tmp_path / "pipe", "not a regular file"),
        ("nul\0byte", "cannot be read"),
        ("x" * 5000, "cannot be read"),
    ):
        with pytest.raises(MapError, match=word):
            read_skymap(place)


def test_a_file_without_permission_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "map.fits"
    flat_ring(path, probabilities())

    # The super-user may read everything, so the refusal is made here.
    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(MapError, match="permission denied"):
        read_skymap(path)
