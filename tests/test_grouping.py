"""Sums and lists of numbers, against dictionaries and loops."""

from __future__ import annotations

from collections import defaultdict

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from skytally.grouping import Lists, expand_ranges, sum_by, sum_pairs, tell_apart

ITEMS = 12

# Lists of the kind: rising numbers, none of them empty.
many = st.lists(st.sets(st.integers(0, ITEMS - 1), min_size=1, max_size=6), max_size=12)
pairs = st.lists(
    st.tuples(st.integers(0, 4), st.integers(0, 6), st.floats(-9, 9, allow_subnormal=False))
)


def lists_of(sets):
    offsets = np.cumsum([0, *map(len, sets)], dtype=np.int64)
    items = [item for one in sets for item in sorted(one)]
    return Lists(offsets, np.array(items, dtype=np.int32))


def spelt(lists):
    return [
        lists.items[a:b].tolist() for a, b in zip(lists.offsets[:-1].tolist(), lists.offsets[1:])
    ]


@given(pairs)
def test_sums_of_pairs_and_of_groups(given_pairs):
    rows, columns, amounts = (np.array(a) for a in zip(*given_pairs)) if given_pairs else [[]] * 3
    rows, columns = np.array(rows, dtype=int), np.array(columns, dtype=int)
    amounts = np.array(amounts, dtype=float)
    expected = defaultdict(float)
    for row, column, amount in given_pairs:
        expected[row, column] += amount
    row, column, amount = sum_pairs(rows, columns, amounts, 5, 7)
    assert list(zip(row.tolist(), column.tolist())) == sorted(expected)
    assert amount == pytest.approx([expected[key] for key in sorted(expected)], abs=1e-12)
    by_row = [sum(a for r, _, a in given_pairs if r == row) for row in range(5)]
    assert sum_by(rows, amounts, 5) == pytest.approx(by_row, abs=1e-12)


@given(st.lists(st.integers(0, 9)))
def test_keys_are_numbered_as_they_come(keys):
    first, number = tell_apart(np.array(keys, dtype=np.uint64))
    distinct = list(dict.fromkeys(keys))
    assert first.tolist() == [keys.index(key) for key in distinct]
    assert number.tolist() == [distinct.index(key) for key in keys]


@given(st.lists(st.tuples(st.integers(0, 9), st.integers(0, 4))))
def test_ranges_are_enumerated(ranges):
    first, count = np.array(ranges, dtype=np.int64).reshape(-1, 2).T
    row, value = expand_ranges(first, count)
    expected = [(i, a + k) for i, (a, n) in enumerate(ranges) for k in range(n)]
    assert list(zip(row.tolist(), value.tolist())) == expected


@given(many, st.integers(1, 9))
def test_lists_part_by_part(sets, most):
    lists = lists_of(sets)
    blocks = list(lists.blocks(most))
    assert [i for b in blocks for i in range(b.start, b.stop)] == list(range(len(sets)))
    for block in blocks:
        part = lists.part(block)
        assert spelt(part) == [sorted(one) for one in sets[block]]
        assert part.items.size <= most or len(part) == 1
    assert lists.owner.tolist() == [i for i, one in enumerate(sets) for _ in one]


@given(many)
def test_every_list_is_reduced_and_summed(sets):
    lists = lists_of(sets)
    value = np.random.default_rng(3).normal(size=(ITEMS, 2))
    assert lists.reduce(np.maximum, value[:, 0]).tolist() == [
        max(value[i, 0] for i in one) for one in sets
    ]
    assert lists.reduce(np.logical_or, value[:, 0] > 1).tolist() == [
        any(value[i, 0] > 1 for i in one) for one in sets
    ]
    expected = np.array([value[sorted(one)].sum(axis=0) for one in sets]).reshape(-1, 2)
    np.testing.assert_allclose(lists.sums(value), expected, rtol=1e-12, atol=1e-14)


@given(many, st.sets(st.integers(0, ITEMS - 1)))
def test_lists_alike_to_a_choice_are_one(sets, choice):
    chosen = np.isin(np.arange(ITEMS), list(choice))
    distinct, number = lists_of(sets).alike(chosen)
    left = [sorted(one & choice) for one in sets]
    expected = list(map(list, dict.fromkeys(tuple(one) for one in left if one)))
    assert spelt(distinct) == expected
    assert number.tolist() == [expected.index(one) if one else -1 for one in left]


@given(many)
def test_lists_from_pairs_in_any_order(sets):
    lists = lists_of(sets)
    order = np.random.default_rng(5).permutation(lists.items.size)
    order = np.append(order, order[:3])  # a pair may come twice
    again = Lists.of_pairs(lists.owner[order], lists.items[order], len(sets), ITEMS)
    assert spelt(again) == spelt(lists)
    assert spelt(Lists.of_table(lists.table(ITEMS))) == spelt(lists)
