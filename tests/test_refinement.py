"""Tightening the bracket: exact areas stay inside, few looks are taken, the budget is kept."""

from itertools import product

import numpy as np
import pytest
from campaign_builder import campaign, log_table, telescope
from skytally import raster, workers
from skytally.cameras import CircleCamera, MosaicCamera, lay_camera
from skytally.footprints import Footprints, lay_footprints
from skytally.raster import rasterise
from skytally.refinement import _Choice, refine_footprints
from skytally.selection import selections
from skytally.skymap import SkyMap
from skytally.skymap_io import circle_skymap
from skytally.spans import Spans


def widths(footprints: Footprints, maps: list[SkyMap]) -> dict[tuple, float]:
    """The bracket of each selection, from unions of its footprints' own regions."""
    found = {}
    for s in selections(footprints.observations):
        mine = np.flatnonzero(footprints.of(s.chosen))
        inner, outer = (
            table.take(mine).union() for table in (footprints.raster.inner, footprints.raster.outer)
        )
        found[s.telescope, s.band, s.night] = max(
            m.probability.of_region(outer) - m.probability.of_region(inner) for m in maps
        )
    return found


def night(seed: int = 3, fields: int = 12):
    """Large fields and small ones with gaps, on a wide map and on a narrow one."""
    rng = np.random.default_rng(seed)
    at = np.arange(3) * 0.33 - 0.33
    square = 0.15 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    mosaic = MosaicCamera(
        tuple(square + np.array([x, y]) for x in at for y in at), tuple("abcdefghi")
    )
    bands = np.array(["g", "r"])[rng.integers(0, 2, fields)]
    telescopes = [
        telescope(
            name,
            camera,
            log_table(
                name,
                rng.uniform(149, 153, fields),
                rng.uniform(19, 22, fields),
                angle=31.0,
                band=bands,
            ),
        )
        for name, camera in (("Heron", mosaic), ("Plover", CircleCamera(0.8)))
    ]
    maps = [circle_skymap(151, 20.5, 3.0, label="1"), circle_skymap(150.5, 20, 0.7, label="2")]
    return lay_footprints(campaign(telescopes, maps)), maps


def counted_looks(monkeypatch: pytest.MonkeyPatch, footprints: Footprints) -> list[int]:
    """Count pairs of piece and cell looked at below the shallowest working order."""
    looks = [0]
    classify = raster._classify
    shallowest = int(footprints.raster.order.min())

    def counting(pieces, piece, order, cell):
        if order > shallowest:
            looks[0] += piece.size
        return classify(pieces, piece, order, cell)

    monkeypatch.setattr(raster, "_classify", counting)
    monkeypatch.setattr(workers, "_WORKERS", 1)
    return looks


@pytest.mark.parametrize("target", [0.015, 0.005, 0.002])
def test_every_bracket_meets_the_target_and_still_holds_the_footprint(target: float) -> None:
    footprints, maps = night()
    before = widths(footprints, maps)
    assert max(before.values()) > 2 * target
    refined = refine_footprints(footprints, maps, target, budget=1e9)
    after = widths(refined, maps)
    assert max(after.values()) <= target
    assert all(after[key] <= before[key] + 1e-12 for key in before)
    for owner in range(len(footprints.telescope)):
        old = [t.region(owner) for t in (footprints.raster.inner, footprints.raster.outer)]
        low, value, high = (
            t.region(owner)
            for t in (refined.raster.inner, refined.raster.centre, refined.raster.outer)
        )
        # Each bound only moves inward, and the centre rule stays between them.
        assert not old[0] - low
        assert not low - value
        assert not value - high
        assert not high - old[1]


def test_exact_areas_stay_inside_however_uneven_the_depths() -> None:
    """Of single circles, 2π(1 − cos r)."""
    radius = 0.8
    exact = 2 * np.pi * (1 - np.cos(np.radians(radius)))
    rng = np.random.default_rng(8)
    lon, lat = rng.uniform(0, 360, 9), np.degrees(np.arcsin(rng.uniform(-1, 1, 9)))
    field = telescope("Plover", CircleCamera(radius), log_table("Plover", lon, lat))
    # Maps so small that parts of an edge matter and others do not.
    maps = [
        circle_skymap(lon[0], lat[0] + (radius if lat[0] < 0 else -radius), 0.2, label="1"),
        circle_skymap(lon[1], lat[1], 2.0, label="2"),
    ]
    footprints = lay_footprints(campaign([field], maps))
    refined = refine_footprints(footprints, maps, 1e-4)
    depths = set()
    for owner in range(9):
        low, value, high = (
            t.area_sr()[owner]
            for t in (refined.raster.inner, refined.raster.centre, refined.raster.outer)
        )
        assert low <= exact <= high
        assert value == pytest.approx(exact, rel=0.005)
        undecided = refined.raster.outer.region(owner) - refined.raster.inner.region(owner)
        length = undecided.stops - undecided.starts
        depths.add(int(29 - np.log2(length.min()) / 2))
    assert len(depths) > 1


@pytest.mark.parametrize("budget", [3e4, 1e5, 3e5])
def test_a_budget_is_kept_and_goes_to_all_together_first(
    budget: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    footprints, maps = night(fields=30)
    before = widths(footprints, maps)
    looks = counted_looks(monkeypatch, footprints)
    refined = refine_footprints(footprints, maps, 1e-4, budget=budget)
    # Fields of several working orders: the deeper ones are met on the way down as well.
    assert 0.5 * budget < looks[0] < 1.5 * budget
    whole = (None, None, None)
    assert widths(refined, maps)[whole] < 0.8 * before[whole]


def test_a_larger_budget_never_leaves_a_wider_bracket() -> None:
    footprints, maps = night(fields=30)
    wide = [
        widths(refine_footprints(footprints, maps, 1e-4, budget=b), maps)[None, None, None]
        for b in (0.0, 1e4, 1e5, 1e6)
    ]
    assert wide == sorted(wide, reverse=True)
    assert wide[0] == widths(footprints, maps)[None, None, None]


def test_who_cannot_be_helped_is_passed_over_for_others() -> None:
    """All together needs nothing, Heron more than there is, Plover little."""
    rng = np.random.default_rng(1)
    lon, lat = rng.uniform(149.5, 151.5, 40), rng.uniform(19.5, 21.5, 40)
    small = telescope("Heron", CircleCamera(0.06), log_table("Heron", lon, lat))
    middle = telescope("Plover", CircleCamera(0.5), log_table("Plover", [150.3], [20.2]))
    large = telescope("Avocet", CircleCamera(4.0), log_table("Avocet", [150.5], [20.5]))
    maps = [circle_skymap(150.5, 20.5, 0.8, label="1")]
    footprints = lay_footprints(campaign([small, middle, large], maps))
    before = widths(footprints, maps)
    target = 0.6 * before["Plover", None, None]
    assert before[None, None, None] < target < before["Heron", None, None]
    after = widths(refine_footprints(footprints, maps, target, budget=2e4), maps)
    assert after["Plover", None, None] <= target
    assert after["Heron", None, None] > target


def test_the_depths_chosen_cost_hardly_more_than_the_best() -> None:
    """Against all 7⁵ choices; and no choice does with fewer looks than the bound says."""
    rng = np.random.default_rng(2)
    everything = np.array(list(product(range(7), repeat=5)))
    for _ in range(40):
        worth = 10 ** rng.uniform(-6, -2, (1, 5))
        cells = 10 ** rng.uniform(0, 3, 5)
        depth = rng.integers(0, 2, 5) * rng.integers(0, 2)
        choice = _Choice(worth, cells, depth)
        width = worth.sum() * rng.uniform(0.1, 0.6)
        looks = 4 * ((2.0**everything - 2.0**depth) @ cells)
        left = 0.5**everything @ worth[0]
        allowed = (everything >= depth).all(axis=1) & (left <= width)
        wanted = choice.depth_for(width, np.inf)
        assert (wanted >= depth).all()
        best = looks[allowed].min()
        assert choice.least_looks(width) <= best + 1e-6
        assert choice.looks(wanted) <= 1.6 * best + 4 * cells.max()
        assert worth[0] @ 0.5**wanted <= width
        # With less than it takes, all but a last step is spent.
        budget = 0.5 * best
        assert choice.looks(choice.depth_for(width, budget)) <= budget


def test_cells_go_as_deep_as_the_regions_they_meet() -> None:
    """In each region the result is that of its own working order, laid by itself."""
    pieces = lay_camera(CircleCamera(1.3), np.array([40.0, 41.0]), np.array([-10.0, -10.5]), [0, 0])
    rng = np.random.default_rng(6)
    first = Spans.from_cells(8, rng.permutation(12 << 16)[:400_000])
    second = first & Spans.from_cells(9, rng.permutation(12 << 18)[:1_600_000])
    third = second & Spans.from_cells(10, rng.permutation(12 << 20)[:6_300_000])
    uneven = rasterise(pieces, 2, 8, deeper=(first, second, third))
    regions = (~first, first - second, second - third, third)
    for order, region in zip((8, 9, 10, 11), regions):
        even = rasterise(pieces, 2, order)
        for name in ("inner", "centre", "outer"):
            ours, theirs = (getattr(r, name).clip(region) for r in (uneven, even))
            for owner in range(2):
                assert theirs.region(owner)
                assert ours.region(owner) == theirs.region(owner)
