"""The patchwork against sets built place by place, on small random tables."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from skytally.patchwork import Patchwork
from skytally.skymap import Measure
from skytally.spans import FULL_SKY_SR, LINE_END, Spans, SpanTable

PLACES = 40  # the tables live on the first integers of the line

# One owner's region as the set of places that it holds.
regions = st.lists(st.sets(st.integers(0, PLACES - 1)), min_size=0, max_size=9)


def table_of(owners):
    places = [np.array(sorted(one), dtype=np.int64) for one in owners]
    return SpanTable.from_regions([Spans.from_intervals(p, p + 1) for p in places])


def sets_by_place(owners):
    """For every covered place the owners that hold it."""
    found = {
        place: frozenset(i for i, o in enumerate(owners) if place in o) for place in range(PLACES)
    }
    return {place: holders for place, holders in found.items() if holders}


def members_of(patchwork, group):
    own = patchwork.members[patchwork.offsets[group] : patchwork.offsets[group + 1]]
    assert list(own) == sorted(set(own.tolist()))
    return frozenset(own.tolist())


def found_by_place(patchwork):
    return {
        place: members_of(patchwork, group)
        for start, stop, group in zip(patchwork.starts, patchwork.stops, patchwork.group)
        for place in range(start, stop)
    }


@given(regions)
def test_every_place_has_its_set(owners):
    patchwork = Patchwork.build(table_of(owners))
    expected = sets_by_place(owners)
    assert found_by_place(patchwork) == expected
    assert patchwork.sets == len(set(expected.values()))
    assert (patchwork.starts < patchwork.stops).all()
    assert (patchwork.starts[1:] >= patchwork.stops[:-1]).all()
    # Patches are as long as they can be: where two touch, the set changes.
    touching = patchwork.starts[1:] == patchwork.stops[:-1]
    assert (patchwork.group[1:][touching] != patchwork.group[:-1][touching]).all()
    np.testing.assert_array_equal(
        patchwork.set_of_member,
        [g for g in range(patchwork.sets) for _ in members_of(patchwork, g)],
    )


@given(regions, st.lists(st.floats(0, 5), min_size=PLACES, max_size=PLACES))
def test_sums_over_sets(owners, density):
    patchwork = Patchwork.build(table_of(owners))
    place = np.arange(PLACES, dtype=np.int64)
    measure = Measure(place, place + 1, np.array(density))
    unit = FULL_SKY_SR / LINE_END
    area, amount = (
        dict.fromkeys(range(patchwork.sets), 0.0),
        dict.fromkeys(range(patchwork.sets), 0.0),
    )
    numbers = {members_of(patchwork, g): g for g in range(patchwork.sets)}
    for where, holders in sets_by_place(owners).items():
        area[numbers[holders]] += unit
        amount[numbers[holders]] += density[where] * unit
    assert patchwork.area_sr == pytest.approx(list(area.values()), rel=1e-12)
    assert patchwork.measure(measure) == pytest.approx(
        list(amount.values()), rel=1e-9, abs=1e-14 * unit * PLACES * 5
    )


@given(regions, st.sets(st.integers(0, PLACES), min_size=1))
def test_cut_patches_by_place_and_interval(owners, where):
    patchwork = Patchwork.build(table_of(owners))
    edges = np.array(sorted(where), dtype=np.int64)
    cut = patchwork.cut(edges)
    unit = FULL_SKY_SR / LINE_END
    expected = {}
    for start, stop, group in zip(patchwork.starts, patchwork.stops, patchwork.group):
        for place in range(start, stop):
            key = int(group), sum(edge <= place for edge in where)
            expected[key] = expected.get(key, 0.0) + unit
    rows = list(zip(cut.group.tolist(), cut.interval.tolist()))
    assert rows == sorted(expected)
    assert cut.solid_angle_sr == pytest.approx([expected[row] for row in rows], rel=1e-12)
    assert cut.knows(edges)
    assert cut.knows(edges[:0])
    assert not cut.knows(np.append(edges, PLACES + 1))
    # Every second stretch between two edges is a span of a layer.
    layer = Measure(edges[:-1:2], edges[1::2], np.arange(1.0, edges.size // 2 + 1))
    spans = cut.span_of(layer)
    for interval in range(edges.size + 1):
        inside = 0 < interval < edges.size and interval % 2 == 1
        assert spans[interval] == (interval // 2 if inside else -1)
    np.testing.assert_allclose(cut.measure(layer), patchwork.measure(layer), rtol=1e-12)


@given(regions)
def test_sets_are_numbered_as_they_come(owners):
    patchwork = Patchwork.build(table_of(owners))
    first = [patchwork.group.tolist().index(g) for g in range(patchwork.sets)]
    assert first == sorted(first)


@given(regions, st.data())
def test_covered_by(owners, data):
    patchwork = Patchwork.build(table_of(owners))
    chosen = np.array(
        data.draw(st.lists(st.booleans(), min_size=len(owners), max_size=len(owners))), dtype=bool
    )
    expected = [
        any(chosen[member] for member in members_of(patchwork, g)) for g in range(patchwork.sets)
    ]
    np.testing.assert_array_equal(patchwork.covered_by(chosen), expected)
    union = set().union(*(owners[i] for i in np.flatnonzero(chosen)))
    hit = patchwork.covered_by(chosen)[patchwork.group]
    spans = Spans.from_intervals(patchwork.starts[hit], patchwork.stops[hit])
    assert {p for p in range(PLACES) if spans.contains(p)} == union


@given(regions, st.randoms(use_true_random=False))
def test_the_order_of_owners_does_not_matter(owners, random):
    """Owners take their random numbers by place in the table; the sets must not show it."""
    order = list(range(len(owners)))
    random.shuffle(order)
    one = found_by_place(Patchwork.build(table_of(owners)))
    two = found_by_place(Patchwork.build(table_of([owners[i] for i in order])))
    assert {place: frozenset(order[i] for i in holders) for place, holders in two.items()} == one


def test_many_owners_at_one_place_and_nested_ones():
    """Ladders of spans give as many distinct sets as there are owners, each a prefix."""
    count = 500
    starts = np.arange(count, dtype=np.int64)
    table = SpanTable(starts, np.full(count, count), np.arange(count + 1))
    patchwork = Patchwork.build(table)
    assert patchwork.sets == count
    assert found_by_place(patchwork) == {p: frozenset(range(p + 1)) for p in range(count)}


def test_touching_spans_of_one_owner_are_one_patch():
    table = SpanTable(np.array([0, 5, 3]), np.array([5, 9, 9]), np.array([0, 2, 3]))
    patchwork = Patchwork.build(table)
    np.testing.assert_array_equal(patchwork.starts, [0, 3])
    np.testing.assert_array_equal(patchwork.stops, [3, 9])
    assert [members_of(patchwork, g) for g in patchwork.group] == [{0}, {0, 1}]


def test_the_ends_of_the_line():
    half = LINE_END // 2
    whole, first, last = (
        Spans.full(),
        Spans.from_intervals([0], [half]),
        Spans.from_intervals([LINE_END - 1], [LINE_END]),
    )
    patchwork = Patchwork.build(SpanTable.from_regions([whole, first, last]))
    np.testing.assert_array_equal(patchwork.starts, [0, half, LINE_END - 1])
    np.testing.assert_array_equal(patchwork.stops, [half, LINE_END - 1, LINE_END])
    assert [members_of(patchwork, g) for g in patchwork.group] == [{0, 1}, {0}, {0, 2}]
    assert patchwork.area_sr.sum() == pytest.approx(4 * np.pi, rel=1e-15)


@pytest.mark.parametrize("owners", [[], [set()], [set(), set()]])
def test_nothing_covered(owners):
    patchwork = Patchwork.build(table_of(owners))
    assert patchwork.sets == 0
    assert patchwork.starts.size == patchwork.members.size == patchwork.area_sr.size == 0
    assert patchwork.covered_by(np.ones(len(owners), dtype=bool)).size == 0
    assert patchwork.measure(Measure.area(Spans.full())).size == 0
