"""What is written of a region says what was tallied, in far fewer cells."""

from dataclasses import replace

import healpy
import numpy as np
import pytest
from campaign_builder import campaign, log_table, telescope
from mocpy import MOC
from skytally.account import account
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.outputs import write_regions
from skytally.region_files import region_to_write, sampled
from skytally.results import Results
from skytally.skymap_io import circle_skymap
from skytally.spans import DEG2_PER_SR, FULL_SKY_SR, LINE_ORDER, Spans, cell_to_span
from small_results import small_row


@pytest.fixture(scope="module")
def results() -> Results:
    """Two telescopes on two map versions, the bracket refined; one of them with narrow gaps."""
    rng = np.random.default_rng(17)
    at = np.arange(4) * 0.33 - 0.495
    square = 0.15 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    rings = tuple(square + np.array([x, y]) for x in at for y in at)
    mosaic = MosaicCamera(rings, tuple(map(str, range(len(rings)))))
    logs = [
        log_table(name, rng.uniform(148, 153, 12), rng.uniform(18, 23, 12), angle=angle)
        for name, angle in (("Heron", 17.0), ("Plover", 0.0))
    ]
    telescopes = [
        telescope("Heron", mosaic, logs[0]),
        telescope("Plover", CircleCamera(0.4), logs[1]),
    ]
    maps = [circle_skymap(150.5, 20.5, 2.0, label="1"), circle_skymap(151, 20, 0.9, label="2")]
    return account(campaign(telescopes, maps))


@pytest.mark.parametrize("order", [0, 3, 7, 11])
def test_a_sample_holds_the_cells_whose_centres_lie_inside(order: int) -> None:
    """Where the centres lie says healpy, a hair north, off the corner of four smaller cells."""
    rng = np.random.default_rng(order)
    edges = np.unique(rng.integers(0, 12 << (2 * 18), 4000)) << (2 * (LINE_ORDER - 18))
    region = Spans(edges[: edges.size // 2 * 2])
    cells = np.unique(rng.integers(0, 12 << (2 * order), 50_000))
    lon, lat = healpy.pix2ang(1 << order, cells, nest=True, lonlat=True)
    centre = healpy.ang2pix(1 << LINE_ORDER, lon, lat + 1e-5, nest=True, lonlat=True)
    first, _ = cell_to_span(order, cells)
    assert np.array_equal(sampled(region, order).contains(first), region.contains(centre))


def test_written_regions_say_what_was_tallied(results: Results, tmp_path) -> None:
    """mocpy reads the files and compares them with the regions tallied."""
    write_regions(results, tmp_path)
    everything = Spans.empty().union(*results.sky.covered)
    for stem, name, region in (
        ("heron", "Heron", results.sky.covered[0]),
        ("plover", "Plover", results.sky.covered[1]),
        ("all", None, everything),
    ):
        written = MOC.from_fits(tmp_path / f"{stem}.fits")
        whole = MOC.from_depth29_ranges(29, region.edges.reshape(-1, 2).astype(np.uint64))
        row = results.row(telescope=name)
        area = written.sky_fraction * FULL_SKY_SR * DEG2_PER_SR
        assert area == pytest.approx(row.area_deg2, rel=5e-4)
        assert row.area_low_deg2 <= area <= row.area_high_deg2
        moved = written.symmetric_difference(whole).sky_fraction
        assert moved <= 0.01 * whole.sky_fraction
        spans = Spans.from_intervals(*written.to_depth29_ranges.astype(np.int64).T)
        for skymap in results.sky.maps:
            tallied = results.row(map=skymap.label, telescope=name).probability
            assert skymap.probability.of_region(spans) == pytest.approx(tallied, abs=5e-4)
        # Eight bytes a cell.
        if stem != "plover":
            assert (tmp_path / f"{stem}.fits").stat().st_size < 0.6 * 8 * len(whole.uniq_hpx)


def test_an_exact_region_is_written_as_it_is() -> None:
    """It has no bracket: order-15 cells may not become cells of order 10."""
    skymap = circle_skymap(0.0, 0.0, 5.0, label="1")
    fine = Spans.from_cells(15, np.arange(7, 90, 3))
    coarse = Spans.from_cells(4, np.array([5, 6]))
    for region in (fine, coarse, Spans.empty()):
        area = region.area_deg2
        row = small_row(
            area_deg2=area,
            area_low_deg2=area,
            area_high_deg2=area,
            probability=skymap.probability.of_region(region),
        )
        assert region_to_write(region, [row], [skymap]) == region


def test_each_bound_is_kept_by_itself(results: Results) -> None:
    """A narrower bracket of the area, or a sharper map, makes the cells smaller."""
    region, maps = results.sky.covered[0], results.sky.maps
    rows = [results.row(map=m.label, telescope="Heron") for m in maps]
    area = region.area_deg2
    usual = region_to_write(region, rows, maps)
    tight = [replace(row, area_low_deg2=area, area_high_deg2=area) for row in rows]
    assert len(region_to_write(region, tight, maps)) > len(usual)
    # All of a map inside a detector's corner: its probability is the strictest bound.
    corner = circle_skymap(*_corner(region), 0.01, label="spot")
    spot = [replace(rows[0], probability=corner.probability.of_region(region))]
    kept = region_to_write(region, spot, [corner])
    assert 0.2 < spot[0].probability < 0.8
    assert corner.probability.of_region(kept) == pytest.approx(spot[0].probability, abs=5e-4)


def _corner(region: Spans) -> tuple[float, float]:
    """A direction on the region's edge."""
    lon, lat = healpy.pix2ang(
        1 << LINE_ORDER, int(region.edges[len(region)]), nest=True, lonlat=True
    )
    return float(lon), float(lat)
