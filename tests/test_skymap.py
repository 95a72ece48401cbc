"""A map version's numbers against brute force on its cells laid out flat at one order."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from skytally.skymap import Measure, SkyMap
from skytally.spans import FULL_SKY_SR, LINE_END, Spans, SpanTable, cell_to_span, spans_to_cells

FLAT_ORDER = 4
FLAT_CELLS = 12 * 4**FLAT_ORDER
FLAT_UNIT = LINE_END // FLAT_CELLS
FLAT_SR = FULL_SKY_SR / FLAT_CELLS
PROPERTY = settings(derandomize=True, deadline=None, max_examples=60)


def random_map(seed: int) -> SkyMap:
    """Build a map of cells of orders 1 to 4, with holes, normalised."""
    rng = np.random.default_rng(seed)
    taken = Spans.empty()
    orders, cells = [], []
    for order in (4, 3, 2, 1):
        pick = np.sort(rng.choice(12 * 4**order, 8, replace=False)).astype(np.int64)
        fresh = Spans.from_cells(order, pick) - taken
        taken = taken | fresh
        order_of, cell_of = spans_to_cells(fresh)
        orders.append(order_of)
        cells.append(cell_of)
    starts, stops = cell_to_span(np.concatenate(orders), np.concatenate(cells))
    rank = np.argsort(starts)
    starts, stops = starts[rank], stops[rank]
    density = rng.choice([0.0, 1.0, 2.0, 5.0, 9.0], starts.size) * rng.uniform(1, 1.2, starts.size)
    density[0] = 3.0
    density /= Measure(starts, stops, density).total
    return SkyMap(starts, stops, density, 4, label=f"seed {seed}")


def flat(skymap: SkyMap) -> np.ndarray:
    """Density on every cell of order 4, by a plain loop over the map's cells."""
    values = np.zeros(FLAT_CELLS)
    for start, stop, density in zip(skymap.starts, skymap.stops, skymap.density_per_sr):
        values[start // FLAT_UNIT : stop // FLAT_UNIT] = density
    return values


seeds = st.integers(0, 10_000)
flat_sets = st.sets(st.integers(0, FLAT_CELLS - 1), max_size=60)


def region(cells: set[int]) -> Spans:
    return Spans.from_cells(FLAT_ORDER, np.array(sorted(cells), dtype=np.int64))


@PROPERTY
@given(seeds, flat_sets)
def test_probability_of_regions_is_the_sum_over_flat_cells(seed: int, cells: set[int]) -> None:
    skymap = random_map(seed)
    values = flat(skymap)
    expected = values[sorted(cells)].sum() * FLAT_SR
    assert skymap.probability.of_region(region(cells)) == pytest.approx(expected, abs=1e-13)
    assert skymap.probability.total == pytest.approx(1.0, abs=1e-13)
    assert skymap.probability.of_region(Spans.full()) == pytest.approx(1.0, abs=1e-13)


@PROPERTY
@given(seeds, st.lists(flat_sets, max_size=5))
def test_measure_of_a_table_is_owner_by_owner(seed: int, parts: list[set[int]]) -> None:
    skymap = random_map(seed)
    values = flat(skymap)
    table = SpanTable.from_regions(region(part) for part in parts)
    expected = [values[sorted(part)].sum() * FLAT_SR for part in parts]
    np.testing.assert_allclose(skymap.probability.of_table(table), expected, atol=1e-13)


@PROPERTY
@given(seeds, st.integers(0, FLAT_CELLS - 1), st.fractions(0, 1))
def test_partly_covered_cells_count_in_proportion(seed: int, cell: int, part: object) -> None:
    skymap = random_map(seed)
    length = int(part * FLAT_UNIT)  # type: ignore[operator]
    spans = Spans.from_intervals(
        np.array([cell * FLAT_UNIT]), np.array([cell * FLAT_UNIT + length])
    )
    expected = flat(skymap)[cell] * FLAT_SR * length / FLAT_UNIT
    assert skymap.probability.of_region(spans) == pytest.approx(expected, abs=1e-13)


@PROPERTY
@given(seeds, st.integers(0, LINE_END))
def test_cumulative_is_the_amount_before(seed: int, position: int) -> None:
    skymap = random_map(seed)
    values = flat(skymap)
    whole, rest = divmod(position, FLAT_UNIT)
    partial = values[whole] * FLAT_SR * rest / FLAT_UNIT if rest else 0.0
    expected = values[:whole].sum() * FLAT_SR + partial
    got = skymap.probability.cumulative(np.array([position]))[0]
    assert got == pytest.approx(expected, abs=1e-13)


@PROPERTY
@given(seeds, st.sampled_from([0.1, 0.5, 0.9, 0.99, 1.0]))
def test_credible_region_by_brute_force(seed: int, level: float) -> None:
    # The definition taken word by word: cells in order of falling density, up
    # to and including the one that reaches the level.
    skymap = random_map(seed)
    rows = sorted(range(skymap.starts.size), key=lambda i: -skymap.density_per_sr[i])
    held, inside = 0.0, set()
    for row in rows:
        if held >= level - 1e-12:
            break
        size = float(skymap.stops[row] - skymap.starts[row]) * FULL_SKY_SR / LINE_END
        held += skymap.density_per_sr[row] * size
        inside.add(row)
    got = skymap.credible_cells(level)
    assert set(np.flatnonzero(got).tolist()) == inside
    credible = skymap.credible_region(level)
    expected = Spans.from_intervals(skymap.starts[sorted(inside)], skymap.stops[sorted(inside)])
    assert credible == expected
    assert skymap.restricted(level).total == pytest.approx(held, abs=1e-12)
    assert skymap.probability.of_region(credible) == pytest.approx(held, abs=1e-12)


@PROPERTY
@given(seeds, st.lists(st.integers(0, LINE_END - 1), min_size=1, max_size=20))
def test_density_and_level_at_positions(seed: int, positions: list[int]) -> None:
    skymap = random_map(seed)
    line = np.array(positions, dtype=np.int64)
    values = flat(skymap)
    np.testing.assert_array_equal(skymap.density_at(line), values[line // FLAT_UNIT])
    for position, level in zip(line, skymap.credible_level_at(line)):
        row = int(np.searchsorted(skymap.starts, position, side="right")) - 1
        if row < 0 or position >= skymap.stops[row]:
            assert level == 1.0
            continue
        own = skymap.probability.amount[row]
        assert skymap.credible_region(level).contains(position)
        assert skymap.restricted(level).total == pytest.approx(level, abs=1e-12)
        if own > 0 and level - own > 1e-9:
            # A smaller region stops before the cell.
            assert not skymap.credible_region(level - own - 1e-9).contains(position)


def test_a_uniform_map_holds_what_its_area_holds() -> None:
    # Closed form: P = A / 4π.
    cells = np.arange(48, dtype=np.int64)
    starts, stops = cell_to_span(1, cells)
    skymap = SkyMap(starts, stops, np.full(48, 1 / FULL_SKY_SR), 1)
    assert skymap.credible_region(0.5).area_sr == pytest.approx(2 * np.pi, rel=1e-12)
    half = Spans.from_intervals(np.array([0]), np.array([LINE_END // 2]))
    assert skymap.probability.of_region(half) == pytest.approx(0.5, rel=1e-12)
    assert Measure.area(half).of_region(Spans.full()) == pytest.approx(2 * np.pi, rel=1e-12)


def test_an_empty_measure_holds_nothing() -> None:
    nothing = Measure.area(Spans.empty())
    assert nothing.total == 0.0
    assert nothing.of_region(Spans.full()) == 0.0
    assert nothing.cumulative(np.array([0, LINE_END])).tolist() == [0.0, 0.0]
