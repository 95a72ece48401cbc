"""The chart of depths: against every footprint asked one by one, and sample by sample."""

from __future__ import annotations

import re
from xml.etree import ElementTree

import matplotlib
import numpy as np
import pytest
from campaign_builder import EVENT_MJD, campaign, log_table, telescope
from matplotlib.backends.backend_agg import FigureCanvasAgg
from skytally.account import account, lay_coverage
from skytally.cameras import CircleCamera, MosaicCamera
from skytally.deepest import DeepestLimits
from skytally.depth_chart import limit_steps, paint_depth, ramp
from skytally.depth_tables import depth_tables
from skytally.figures import sketch_figures
from skytally.results import Results
from skytally.skymap_io import circle_skymap
from skytally.spans import cell_to_span

NBSP = "\u00a0"


def night(bands: tuple[str, ...], *, depths: bool = True, spread: float = 4.0):
    """Two telescopes over the same few degrees; every fifth exposure has no limit."""
    rng = np.random.default_rng(17)
    telescopes = []
    for name, camera in (
        ("Heron", MosaicCamera.rectangle(2.0, 1.5)),
        ("Plover", CircleCamera(0.9)),
    ):
        ra, dec = rng.uniform(358, 358 + spread, 24) % 360, rng.uniform(-2, 2, 24)
        depth = rng.uniform(19.5, 21.5, 24)
        depth[::5] = np.nan
        log = log_table(
            *(name, ra, dec),
            start=EVENT_MJD + np.sort(rng.uniform(0.05, 1.1, 24)),
            band=np.array([bands[n % len(bands)] for n in range(24)], dtype=object),
            depth=depth if depths else np.nan,
        )
        telescopes.append(telescope(name, camera, log))
    return campaign(telescopes, [circle_skymap(0.0, 0.0, 3.0, label="1")])


@pytest.fixture(scope="module")
def three_bands() -> Results:
    return account(night(("g", "r", "i")))


def test_each_place_has_the_deepest_limit_of_all_that_looked_there() -> None:
    """Every exposure's own region asked for every place (brute force)."""
    coverage = lay_coverage(night(("g", "r")))
    deepest = DeepestLimits.of(coverage)
    assert deepest.bands == ("g", "r")
    o, table = coverage.observations, coverage.footprints.raster.centre
    rng = np.random.default_rng(3)
    rows = rng.integers(0, table.starts.size, 400)
    inside = table.starts[rows] + (rng.random(400) * (table.stops - table.starts)[rows]).astype(int)
    position = np.append(inside, rng.integers(0, 12 << 58, 100))
    place = deepest.set_at(position)
    seen = set()
    for where, at in zip(position, place):
        holds = (table.starts <= where) & (where < table.stops)
        looked = np.isin(o.footprint, table.owner[holds])
        assert (at >= 0) == looked.any()
        for number, band in enumerate(o.bands):
            mine = o.depth[looked & (o.band == number)]
            if at < 0 or mine.size == 0:
                assert at < 0 or np.isnan(deepest.limit_of(band)[at])
                seen.add("none")
                continue
            known = mine[np.isfinite(mine)]
            seen.add("limit" if known.size else "no limit")
            wanted = known.max() if known.size else -np.inf
            assert deepest.limit_of(band)[at] == wanted
    assert seen == {"none", "limit", "no limit"}


def test_the_table_adds_up_to_the_area_of_the_band(three_bands: Results) -> None:
    deepest = three_bands.sky.deepest
    for band in deepest.bands:
        depth, row = deepest.band_depth(band), three_bands.row(band=band)
        assert depth.area_deg2 + depth.without_limit_deg2 == pytest.approx(row.area_deg2, rel=1e-9)
        assert row.depth_min <= depth.shallowest <= depth.over_90 <= depth.over_50 <= depth.deepest
        assert depth.deepest == row.depth_max
        limit, area = deepest.limit_of(band), deepest.area_deg2
        for share, value in ((0.5, depth.over_50), (0.9, depth.over_90)):
            # As deep over so much of the area, and no deeper limit is.
            assert area[limit >= value].sum() >= share * depth.area_deg2 * (1 - 1e-12)
            assert area[limit > value].sum() < share * depth.area_deg2
    table = depth_tables(three_bands)["depth-places"]
    assert sorted(row[0].text for row in table.rows) == sorted(deepest.bands)


def test_each_sample_has_the_shade_of_its_limit() -> None:
    limit = np.array([20.05, 20.1, 20.95, -np.inf, np.nan, 19.0])
    steps = np.array([20.0, 20.25, 20.5, 20.75, 21.0])
    place = np.tile(np.array([0, 1, 2, 3, 4, 5, -1]), (40, 6))
    picture = paint_depth(limit, steps, place)
    shades = ramp(4)
    for column, wanted in ((0, 0), (1, 0), (2, 3), (5, 0)):
        assert (picture[:, place[0] == column, :3] == shades[wanted]).all()
    for blank in (4, -1):
        assert (picture[:, place[0] == blank, :3] == 255).all()
    hatched = (picture[:, place[0] == 3, :3] < 255).all(axis=2)
    assert 0.05 < hatched.mean() < 0.5


@pytest.mark.parametrize("seed", range(40))
def test_steps_are_round_few_and_hold_every_limit(seed: int) -> None:
    rng = np.random.default_rng(seed)
    size = int(rng.integers(1, 60))
    limit = rng.normal(rng.uniform(15, 25), rng.choice([0.0, 0.01, 0.3, 2.0]), size)
    area = rng.exponential(size=size)
    steps, is_open = limit_steps(np.append(limit, [-np.inf, np.nan]), np.append(area, [9.0, 9.0]))
    width = np.diff(steps)
    assert 2 <= steps.size <= 8
    np.testing.assert_allclose(width, width[0])
    np.testing.assert_allclose(steps / 0.05, np.rint(steps / 0.05), atol=1e-6)
    assert limit.max() <= steps[-1] + 1e-5
    below = limit < steps[0] - 1e-5
    assert is_open == below.any()
    assert area[below].sum() <= 0.05 * area.sum() * (1 + 1e-9)


def luminance(rgb: np.ndarray) -> np.ndarray:
    """Relative luminance (WCAG 2.1) of colours from 0 to 255, shape (..., 3)."""
    part = rgb / 255
    linear = np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)
    return np.asarray(linear @ [0.2126, 0.7152, 0.0722])


@pytest.mark.parametrize("number", range(2, 8))
def test_in_grey_the_deeper_is_the_darker(number: int) -> None:
    grey = luminance(ramp(number))
    assert (np.diff(grey) < -0.02).all()
    assert grey[0] < luminance(np.full(3, 255)) - 0.1


def drawn_in_grey(sketch) -> np.ndarray:
    with matplotlib.rc_context({"text.parse_math": False}):
        figure = sketch.make()
        canvas = FigureCanvasAgg(figure)
        canvas.draw()
        return luminance(np.asarray(canvas.buffer_rgba())[..., :3])


def test_a_chart_turned_grey_keeps_its_shades(three_bands: Results) -> None:
    sketch = sketch_figures(three_bands)["depth-chart"]
    grey = drawn_in_grey(sketch)
    for band in ("g", "r", "i"):
        limits = three_bands.sky.deepest.limit_of(band)
        steps, _ = limit_steps(limits, three_bands.sky.deepest.area_deg2)
        # Every shade of a bar is somewhere in the rendering, apart from its neighbours.
        for shade in luminance(ramp(len(steps) - 1)):
            assert np.isclose(grey, shade, atol=2e-3).any()


@pytest.mark.parametrize(
    ("bands", "spread"), [(("r",), 4.0), (tuple("ugrizy"), 4.0), (("g", "r"), 200.0)]
)
def test_a_panel_for_every_band(bands: tuple[str, ...], spread: float) -> None:
    results = account(night(bands, spread=spread))
    sketch = sketch_figures(results)["depth-chart"]
    svg = ElementTree.fromstring(sketch.draw().svg)
    texts = ["".join(e.itertext()).strip() for e in svg.iter("{http://www.w3.org/2000/svg}text")]
    assert [t for t in texts if t.startswith("band ")] == [
        f"band {row.band}"
        for row in sorted(
            (results.row(band=band) for band in bands), key=lambda row: (-row.exposures, row.band)
        )
    ]
    terms = f"AB, 5{NBSP}σ, not corrected for Galactic extinction"
    assert f"deepest limit (mag): {terms}" in texts
    assert "covered without a limit" in texts
    pictures = re.findall("data:image/png", sketch.draw().svg)
    assert len(pictures) == 2 * len(bands) + 1
    widest = max(
        (results.sky.deepest.band_depth(b) for b in bands), key=lambda depth: depth.area_deg2
    )
    assert f"{widest.over_50:.2f}{NBSP}mag" in sketch.caption
    assert f"In {widest.band}" in sketch.caption


def test_without_limits_there_is_no_chart() -> None:
    results = account(night(("r",), depths=False))
    assert "depth-chart" not in sketch_figures(results)
    assert depth_tables(results)["depth-places"].rows == ()


def test_nothing_covered_has_no_depth() -> None:
    """No exposure at all: an empty line answers every question."""
    empty = lay_coverage(
        campaign(
            [telescope("Heron", CircleCamera(1.0), log_table("Heron", [], []))],
            [circle_skymap(0.0, 0.0, 3.0, label="1")],
        )
    )
    deepest = DeepestLimits.of(empty)
    assert deepest.bands == ()
    assert (deepest.set_at(cell_to_span(0, np.arange(12))[0]) == -1).all()
