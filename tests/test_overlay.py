"""The patchwork over a map's cells and dust, against a flat grid that is walked pixel by pixel."""

from __future__ import annotations

from collections import defaultdict

import healpy
import numpy as np
import pytest
from deep_sky import coverage_of, distance_map, dust_map, fields, map_of, places_of
from hypothesis import given, settings
from hypothesis import strategies as st
from skytally.dust import Dust
from skytally.patchwork import Patchwork
from skytally.spans import LINE_END, LINE_ORDER, Spans, SpanTable, cell_to_span

ORDER = 3
PIXELS = 12 * 4**ORDER
WIDTH = LINE_END // PIXELS

# Everything is made of whole pixels of order 3, so a pixel decides for all of itself.
intervals = st.lists(
    st.tuples(st.integers(0, PIXELS - 1), st.integers(1, 90)), min_size=1, max_size=4
)


def region(parts):
    starts = np.array([a for a, _ in parts], dtype=np.int64)
    stops = np.minimum(starts + [n for _, n in parts], PIXELS)
    return Spans.from_intervals(starts * WIDTH, stops * WIDTH)


def some_cells(rng, share):
    """Disjoint cells of orders 0 to 3 that leave part of the sky out."""
    order, cell, found = 0, np.arange(12), []
    while order <= ORDER:
        split = rng.random(cell.size) < 0.6
        kept = cell if order == ORDER else cell[~split]
        found += [(order, c) for c in kept if rng.random() < share]
        cell = (4 * cell[split][:, None] + np.arange(4)).ravel()
        order += 1
    return np.array(found or [(0, 0)]).T


@st.composite
def skies(draw):
    rng = np.random.default_rng(draw(st.integers(0, 10_000)))
    order, cell = some_cells(rng, 0.8)
    skymap = map_of(order, cell, rng.random(cell.size), np.full(cell.size, 100.0), cell * 0 + 9.0)
    dust = None
    if draw(st.booleans()):
        order, cell = some_cells(rng, 0.7)
        starts, stops = cell_to_span(order, cell)
        rank = np.argsort(starts)
        dust = Dust(starts[rank], stops[rank], np.arange(1.0, rank.size + 1))
    return [draw(intervals) for _ in range(draw(st.integers(1, 5)))], skymap, dust


def at(starts, stops, position):
    """Row that holds a position, −1 for none, looked for one by one."""
    found = np.flatnonzero((starts <= position) & (position < stops))
    return int(found[0]) if found.size else -1


@settings(max_examples=80, derandomize=True, deadline=None)
@given(skies())
def test_rows_against_pixels(sky):
    """Fields, map and dust of each pixel decide its row; what a row holds is their sum."""
    parts, skymap, dust = sky
    regions = [region(p) for p in parts]
    patchwork = Patchwork.build(SpanTable.from_regions(regions))
    places = places_of(patchwork, skymap, dust)
    overlay = places.over(skymap)
    expected = defaultdict(lambda: [0.0, 0.0])
    for pixel in range(PIXELS):
        position = pixel * WIDTH
        who = frozenset(i for i, r in enumerate(regions) if r.contains(np.array([position]))[0])
        if not who:
            continue
        cell = at(skymap.starts, skymap.stops, position)
        cloud = -1 if dust is None else at(dust.starts, dust.stops, position)
        key = who, cell, None if cloud < 0 else float(dust.ebv[cloud])
        area = healpy.nside2pixarea(1 << ORDER)
        expected[key][0] += area * skymap.density_per_sr[cell] if cell >= 0 else 0.0
        expected[key][1] += area
    got = {}
    for place, cell, *held in zip(
        overlay.place, overlay.cell, overlay.probability, overlay.solid_angle_sr
    ):
        members = slice(*patchwork.offsets[places.place_set[place] + np.arange(2)])
        ebv = places.place_ebv[place]
        key = frozenset(patchwork.members[members].tolist()), int(cell)
        got[(*key, None if np.isnan(ebv) else float(ebv))] = held
    assert got.keys() == expected.keys()
    assert overlay.place.size == len(expected)
    for key, held in got.items():
        assert held == pytest.approx(expected[key], rel=1e-9, abs=1e-15)
    assert np.all(np.lexsort((overlay.place, overlay.cell)) == np.arange(overlay.cell.size))
    assert np.all(np.diff(places.place_set) >= 0)
    assert overlay.places == len(places) == overlay.place.max() + 1


@pytest.mark.parametrize("dust", [None, dust_map(2), dust_map(6)], ids=["none", "coarse", "fine"])
def test_rows_sum_to_the_union_and_to_each_set(dust):
    skymap = distance_map()
    coverage = coverage_of(fields(), skymap)
    for patchwork in (coverage.centre, coverage.inner, coverage.outer):
        places = places_of(patchwork, skymap, dust)
        overlay = places.over(skymap)
        union = Spans.from_intervals(patchwork.starts, patchwork.stops)
        assert overlay.probability.sum() == pytest.approx(
            skymap.probability.of_region(union), rel=1e-9
        )
        assert overlay.solid_angle_sr.sum() == pytest.approx(union.area_sr, rel=1e-12)
        for values, whole in (
            (overlay.probability, patchwork.measure(skymap.probability)),
            (overlay.solid_angle_sr, patchwork.area_sr),
        ):
            of_set = np.bincount(places.place_set[overlay.place], values, patchwork.sets)
            np.testing.assert_allclose(of_set, whole, rtol=1e-6, atol=1e-14)
        # Per cell: what of it lies in the union.
        inside = overlay.cell >= 0
        cells = SpanTable(skymap.starts, skymap.stops, np.arange(skymap.starts.size + 1))
        np.testing.assert_allclose(
            np.bincount(overlay.cell[inside], overlay.solid_angle_sr[inside], skymap.starts.size),
            cells.clip(union).area_sr(),
            atol=1e-14,
        )


def test_dust_cuts_places_and_nothing_else():
    """Each place lies behind one value; without dust the same rows are joined."""
    skymap = distance_map()
    coverage = coverage_of(fields(), skymap)
    dust = dust_map(4)
    plain_places = places_of(coverage.centre, skymap)
    dusty_places = places_of(coverage.centre, skymap, dust)
    plain, dusty = plain_places.over(skymap), dusty_places.over(skymap)
    assert np.isnan(plain_places.place_ebv).all()
    assert dusty.places > plain.places
    assert np.isin(dusty_places.place_ebv, dust.ebv).all()
    joined = defaultdict(float)
    for place, cell, value in zip(dusty.place, dusty.cell, dusty.probability):
        joined[int(dusty_places.place_set[place]), int(cell)] += value
    whole = {
        (int(plain_places.place_set[p]), int(c)): v
        for p, c, v in zip(plain.place, plain.cell, plain.probability)
    }
    assert joined.keys() == whole.keys()
    for key, value in whole.items():
        assert joined[key] == pytest.approx(value, rel=1e-9, abs=1e-15)


def test_nothing_covered_has_no_rows():
    nothing = Patchwork.build(SpanTable.from_regions([Spans.empty()]))
    for dust in (None, dust_map(1)):
        overlay = places_of(nothing, distance_map(), dust).over(distance_map())
        assert (overlay.places, overlay.cell.size, overlay.probability.sum()) == (0, 0, 0.0)


def test_single_cells_at_both_ends_of_the_line():
    """The first and the last order-29 cell of the sky, each a region and a map cell."""
    cell = np.array([0, 12 * 4**LINE_ORDER - 1])
    skymap = map_of(LINE_ORDER, cell, [1.0, 3.0], [10.0, 20.0], [1.0, 1.0])
    patchwork = Patchwork.build(SpanTable.from_regions([Spans.full()]))
    overlay = places_of(patchwork, skymap).over(skymap)
    assert overlay.cell.tolist() == [-1, 0, 1]
    np.testing.assert_allclose(overlay.probability, [0.0, 0.25, 0.75], rtol=1e-12)


def test_joined_places_hold_what_each_of_them_held():
    """Places sent to new ones at random, some to none, against a walk over the rows."""
    skymap = distance_map()
    overlay = places_of(coverage_of(fields(), skymap).centre, skymap, dust_map(3)).over(skymap)
    rng = np.random.default_rng(4)
    number = rng.integers(-1, 20, overlay.places)
    joined = overlay.joined(number, 20)
    expected = defaultdict(lambda: [0.0, 0.0])
    for place, cell, *held in zip(
        overlay.place, overlay.cell, overlay.probability, overlay.solid_angle_sr
    ):
        if number[place] >= 0:
            for part in (0, 1):
                expected[int(number[place]), int(cell)][part] += held[part]
    rows = list(zip(joined.place.tolist(), joined.cell.tolist()))
    assert rows == sorted(expected)
    for row, *held in zip(rows, joined.probability, joined.solid_angle_sr):
        assert held == pytest.approx(expected[row], rel=1e-12)
    cells = np.unique(joined.cell)
    table = joined.table(cells).toarray()
    assert table.shape == (20, cells.size)
    for (place, cell), held in expected.items():
        assert table[place, np.searchsorted(cells, cell)] == pytest.approx(held[0], rel=1e-12)
    assert np.count_nonzero(table) == np.count_nonzero(joined.probability)
    np.testing.assert_allclose(
        joined.by_place(joined.solid_angle_sr),
        [sum(v[1] for (p, _), v in expected.items() if p == place) for place in range(20)],
        rtol=1e-12,
    )
