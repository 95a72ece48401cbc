"""Span algebra against Python sets, cell arithmetic against three HEALPix libraries."""

from __future__ import annotations

import astropy_healpix
import cdshealpix
import healpy
import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import Latitude, Longitude
from hypothesis import given, settings
from hypothesis import strategies as st
from skytally.spans import (
    DEG2_PER_SR,
    FULL_SKY_SR,
    LINE_END,
    LINE_ORDER,
    Spans,
    SpanTable,
    cell_to_span,
    merge,
    spans_to_cells,
    uniq_to_cell,
)

ORDER = 2
CELLS = 12 * 4**ORDER
UNIT = LINE_END // CELLS
PROPERTY = settings(derandomize=True, deadline=None, max_examples=200)

cell_sets = st.sets(st.integers(0, CELLS - 1))


def region(cells: set[int]) -> Spans:
    return Spans.from_cells(ORDER, np.array(sorted(cells), dtype=np.int64))


def cells_of(spans: Spans) -> set[int]:
    """The order-2 cells of spans whose ends all fall on cell edges."""
    assert not (spans.edges % UNIT).any()
    return {
        int(cell)
        for start, stop in zip(spans.starts // UNIT, spans.stops // UNIT)
        for cell in range(start, stop)
    }


def is_canonical(spans: Spans) -> bool:
    return bool((np.diff(spans.edges) > 0).all())


@PROPERTY
@given(cell_sets, cell_sets)
def test_algebra_is_that_of_sets(a: set[int], b: set[int]) -> None:
    # Brute-force twin: Python sets of order-2 cells.
    left, right = region(a), region(b)
    for got, expected in (
        (left | right, a | b),
        (left & right, a & b),
        (left - right, a - b),
        (~left, set(range(CELLS)) - a),
    ):
        assert cells_of(got) == expected
        assert is_canonical(got)
    assert bool(left) == bool(a)
    assert (left == right) == (a == b)


@PROPERTY
@given(st.lists(cell_sets, max_size=5))
def test_union_of_many_does_not_depend_on_order(parts: list[set[int]]) -> None:
    regions = [region(part) for part in parts]
    expected = set().union(*parts)
    assert cells_of(Spans.empty().union(*regions)) == expected
    assert cells_of(Spans.empty().union(*reversed(regions))) == expected
    table = SpanTable.from_regions(regions)
    assert cells_of(table.union()) == expected


@PROPERTY
@given(st.lists(cell_sets, max_size=6), cell_sets)
def test_table_clip_is_intersection_owner_by_owner(parts: list[set[int]], mask: set[int]) -> None:
    table = SpanTable.from_regions(region(part) for part in parts)
    clipped = table.clip(region(mask))
    assert clipped.owners == len(parts)
    assert [cells_of(clipped.region(i)) for i in range(len(parts))] == [p & mask for p in parts]
    np.testing.assert_allclose(
        clipped.area_sr(), [len(p & mask) * FULL_SKY_SR / CELLS for p in parts], atol=1e-14
    )


@PROPERTY
@given(st.lists(cell_sets, max_size=4), st.lists(cell_sets, max_size=4))
def test_stacked_tables_keep_their_owners(a: list[set[int]], b: list[set[int]]) -> None:
    stacked = SpanTable.stack([SpanTable.from_regions(map(region, part)) for part in (a, b)])
    assert [cells_of(stacked.region(i)) for i in range(stacked.owners)] == a + b
    assert stacked.owner.tolist() == [
        i for i, part in enumerate(a + b) for _ in range(len(region(part)))
    ]


@PROPERTY
@given(cell_sets, st.lists(st.integers(0, LINE_END - 1), max_size=20))
def test_contains_looks_up_the_cell(cells: set[int], positions: list[int]) -> None:
    got = region(cells).contains(np.array(positions, dtype=np.int64))
    assert got.tolist() == [position // UNIT in cells for position in positions]


def test_contains_includes_the_start_and_not_the_stop() -> None:
    spans = Spans.from_intervals(np.array([10]), np.array([20]))
    assert spans.contains(np.array([9, 10, 19, 20])).tolist() == [False, True, True, False]


@PROPERTY
@given(st.lists(st.tuples(st.integers(0, 40), st.integers(0, 40)), max_size=12))
def test_merge_is_the_union_of_the_integers_covered(pairs: list[tuple[int, int]]) -> None:
    table = np.array(pairs, dtype=np.int64).reshape(-1, 2)
    starts, stops = merge(table[:, 0], table[:, 1])
    got = {i for start, stop in zip(starts, stops) for i in range(start, stop)}
    assert got == {i for start, stop in pairs for i in range(start, stop)}
    assert (starts[1:] > stops[:-1]).all()


wide_spans = st.lists(
    st.tuples(st.integers(0, LINE_END), st.integers(0, 4 * UNIT)), max_size=8
).map(
    lambda pairs: Spans.from_intervals(
        np.array([a for a, _ in pairs], dtype=np.int64),
        np.array([min(a + b, LINE_END) for a, b in pairs], dtype=np.int64),
    )
)


@PROPERTY
@given(wide_spans)
def test_spans_to_cells_and_back(spans: Spans) -> None:
    order, cell = spans_to_cells(spans)
    assert Spans.from_cells(order, cell) == spans
    starts, stops = cell_to_span(order, cell)
    assert (starts[1:] >= stops[:-1]).all()  # sorted and disjoint
    # Fewest cells: four siblings together would have been their parent.
    deep = order > 0
    parents = list(zip(order[deep] - 1, cell[deep] >> 2))
    assert all(parents.count(parent) < 4 for parent in set(parents))


def test_whole_and_empty_sky() -> None:
    assert Spans.full().area_sr == pytest.approx(4 * np.pi, rel=1e-15)
    # Closed form: 4π steradians in square degrees, 129600/π.
    assert Spans.full().area_deg2 == pytest.approx(129600 / np.pi, rel=1e-14)
    assert pytest.approx((180 / np.pi) ** 2, rel=1e-15) == DEG2_PER_SR
    assert ~Spans.full() == Spans.empty()
    assert ~Spans.empty() == Spans.full()
    order, cell = spans_to_cells(Spans.full())
    assert order.tolist() == [0] * 12
    assert cell.tolist() == list(range(12))
    assert spans_to_cells(Spans.empty())[0].size == 0


def test_spans_off_the_line_are_refused() -> None:
    for start, stop in ((-1, 5), (0, LINE_END + 1)):
        with pytest.raises(ValueError, match="leaves the line"):
            Spans.from_intervals(np.array([start]), np.array([stop]))


@pytest.mark.parametrize("order", range(LINE_ORDER + 1))
def test_first_and_last_cells_of_every_order(order: int) -> None:
    # Independent: cdshealpix and astropy-healpix for NUNIQ, healpy for the position.
    count = 12 << (2 * order)
    cell = np.unique(np.array([0, 1, 2, 3, count // 2, count - 2, count - 1], dtype=np.int64))
    uniq = (np.int64(4) << (2 * order)) + cell
    got_order, got_cell = uniq_to_cell(uniq)
    assert got_order.tolist() == [order] * cell.size
    assert got_cell.tolist() == cell.tolist()
    assert astropy_healpix.level_ipix_to_uniq(order, cell).tolist() == uniq.tolist()
    theirs = cdshealpix.from_ring(cdshealpix.to_ring(cell.astype(np.uint64), order), order)
    assert theirs.tolist() == cell.tolist()

    start, stop = cell_to_span(order, cell)
    assert start[0] == 0
    assert stop[-1] == LINE_END
    assert (stop - start == LINE_END // count).all()
    # The centre of the cell lies, at order 29, inside the cell's span.
    x, y, z = healpy.pix2vec(1 << order, cell, nest=True)
    inside = healpy.vec2pix(1 << LINE_ORDER, x, y, z, nest=True)
    assert ((start <= inside) & (inside < stop)).all()


def test_cell_numbers_agree_with_cdshealpix_at_random_positions() -> None:
    rng = np.random.default_rng(20310314)
    lon, lat = rng.uniform(0, 360, 500), np.degrees(np.arcsin(rng.uniform(-1, 1, 500)))
    deep = healpy.ang2pix(1 << LINE_ORDER, lon, lat, nest=True, lonlat=True)
    for order in (0, 3, 11, 20, 28):
        cell = cdshealpix.lonlat_to_healpix(Longitude(lon * u.deg), Latitude(lat * u.deg), order)
        start, stop = cell_to_span(order, cell.astype(np.int64))
        assert ((start <= deep) & (deep < stop)).all()


@pytest.mark.parametrize("uniq", [-1, 0, 3, 16 << 58])
def test_numbers_that_are_no_nuniq_are_refused(uniq: int) -> None:
    with pytest.raises(ValueError, match="NUNIQ"):
        uniq_to_cell(np.array([4, uniq]))
