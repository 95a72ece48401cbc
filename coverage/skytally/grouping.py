"""Array idioms that the accounting uses everywhere."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array, csr_array

__all__ = ["AnyInts", "Lists", "distinct", "expand_ranges", "sum_by", "sum_pairs", "tell_apart"]

Ints = NDArray[np.int64]
# Tables that grow with exposures times sky keep their numbers in 32 bits.
AnyInts = NDArray[np.integer[Any]]
Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_SEED = 29
# Bounds memory, and stays in the cache.
_ITEMS_AT_ONCE = 1_000_000


def sum_by(group: AnyInts, weight: Floats, count: int) -> Floats:
    """Sum weights, shape (n,), by group number in [0, count); shape (count,)."""
    return np.bincount(group, weight, count).astype(np.float64, copy=False)


def sum_pairs(
    row: AnyInts, column: AnyInts, amount: Floats, rows: int, columns: int
) -> tuple[Ints, NDArray[np.int32], Floats]:
    """Sum amounts that have both row and column in common.

    A counting sort by row, which is all there is to sort where columns rise.

    Returns
    -------
    row, column : int64 and int32 arrays
        The distinct pairs, by rising row, then column.
    amount : float64 array
        Their sums.
    """
    pairs = row.astype(np.int32, copy=False), column.astype(np.int32, copy=False)
    table = coo_array((amount, pairs), shape=(rows, columns)).tocsr()
    table.sum_duplicates()
    return np.repeat(np.arange(rows), np.diff(table.indptr)), table.indices, table.data


def expand_ranges(first: Ints, count: Ints) -> tuple[Ints, Ints]:
    """Enumerate the ranges first[i] … first[i] + count[i] − 1, one after the other.

    Returns
    -------
    row, value : int64 arrays
        The range that each value comes from, and the value.
    """
    row = np.repeat(np.arange(count.size, dtype=np.int64), count)
    before = np.cumsum(count) - count
    return row, np.arange(row.size, dtype=np.int64) + np.repeat(first - before, count)


def distinct(value: Ints) -> Ints:
    """Sort integers, shape (n,), and drop repetitions: many times faster than ``np.unique``."""
    ranked = np.sort(value)
    is_new = np.append(np.ones(min(value.size, 1), bool), ranked[1:] != ranked[:-1])
    return np.asarray(ranked[is_new])


def tell_apart(key: NDArray[np.uint64]) -> tuple[Ints, Ints]:
    """Number keys, shape (n,), in the order in which they first appear.

    Returns
    -------
    first : int64 array, shape (m,)
        Where each distinct key appears first, rising.
    number : int64 array, shape (n,)
        Number of each key in [0, m).
    """
    order = np.argsort(key)
    ranked = key[order]
    begin = np.flatnonzero(np.append(np.ones(min(key.size, 1), bool), ranked[1:] != ranked[:-1]))
    if begin.size == 0:
        return begin, begin
    first = np.minimum.reduceat(order, begin)
    by_first = np.argsort(first)
    rank = np.empty_like(by_first)
    rank[by_first] = np.arange(first.size)
    number = np.empty(key.size, dtype=np.int64)
    number[order] = np.repeat(rank, np.diff(begin, append=key.size))
    return first[by_first], number


@dataclass(frozen=True, eq=False)
class Lists:
    """Many short lists of numbers, laid end to end; none of them is empty.

    Attributes
    ----------
    offsets : int64 array, shape (n + 1,)
        Where each list begins; the last entry is the length of ``items``.
    items : int32 array
        The numbers, list after list, rising within each.
    """

    offsets: Ints
    items: NDArray[np.int32]

    @classmethod
    def of_pairs(cls, row: AnyInts, item: AnyInts, rows: int, items: int) -> Lists:
        """Gather distinct pairs of list and item by list, each list with at least one."""
        ones = np.ones(row.size, dtype=np.int8)
        return cls.of_table(coo_array((ones, (row, item)), shape=(rows, items)).tocsr())

    @classmethod
    def of_table(cls, table: csr_array) -> Lists:
        """Take the columns of each row of a sparse table as its list."""
        return cls(table.indptr.astype(np.int64), table.indices.astype(np.int32, copy=False))

    def table(self, items: int) -> csr_array:
        """Return the lists as a sparse table of ones, shape (n, items)."""
        ones = np.ones(self.items.size, dtype=np.int8)
        return csr_array((ones, self.items, self.offsets), shape=(len(self), items))

    def __len__(self) -> int:
        return self.offsets.size - 1

    @property
    def owner(self) -> NDArray[np.int32]:
        """The list that each item stands in, shape (items,)."""
        return np.repeat(np.arange(len(self), dtype=np.int32), np.diff(self.offsets))

    def blocks(self, most: int) -> Iterator[slice]:
        """Yield runs of lists that hold at most so many items together, or one list alone."""
        first = 0
        while first < len(self):
            last = int(np.searchsorted(self.offsets, self.offsets[first] + most, side="right")) - 1
            last = max(last, first + 1)
            yield slice(first, last)
            first = last

    def part(self, which: slice) -> Lists:
        """Return a run of the lists."""
        offsets = self.offsets[which.start : which.stop + 1]
        return Lists(offsets - offsets[0], self.items[offsets[0] : offsets[-1]])

    def reduce(self, function: np.ufunc, value: NDArray[np.generic]) -> NDArray[Any]:
        """Reduce each list to one number.

        Parameters
        ----------
        function : ufunc
            For example ``np.maximum``.
        value : array
            Value of every item that a list may name.
        """
        found = [
            function.reduceat(value[part.items], part.offsets[:-1])
            for part in map(self.part, self.blocks(_ITEMS_AT_ONCE))
        ]
        return np.concatenate(found) if found else value[:0]

    def any_of(self, choices: Sequence[Bools]) -> Iterator[Bools]:
        """Tell, choice after choice of items, which lists hold at least one of it; each (n,)."""
        for first in range(0, len(choices), 64):
            some = choices[first : first + 64]
            # A bit for each choice: one walk along the lists serves all of them.
            bits = np.zeros(some[0].size, dtype=np.uint64)
            for number, chosen in enumerate(some):
                bits |= chosen.astype(np.uint64) << np.uint64(number)
            found = self.reduce(np.bitwise_or, bits)
            for number in range(len(some)):
                yield (found >> np.uint64(number)) & np.uint64(1) != 0

    def sums(self, value: Floats) -> Floats:
        """Sum the values, shape (items, k), of each list's items; shape (n, k)."""
        return np.asarray(self.table(value.shape[0]).astype(np.float64) @ value)

    def alike(self, chosen: Bools) -> tuple[Lists, NDArray[np.int32]]:
        """Cut every list to the chosen items and tell apart what is left of them.

        Lists are known by the sum of their items' fixed random 64-bit numbers.

        Parameters
        ----------
        chosen : bool array
            Which of the items to look at.

        Returns
        -------
        lists : Lists
            The distinct lists that are left, without the empty one, in the
            order in which they first appear.
        number : int32 array, shape (n,)
            What is left of each list, as its number in ``lists``; −1 where
            nothing is.
        """
        rng = np.random.default_rng(_SEED)
        name = rng.integers(1, 2**64 - 1, size=chosen.size, dtype=np.uint64, endpoint=True)
        key = self.reduce(np.add, np.where(chosen, name, np.uint64(0)))
        some = np.flatnonzero(key)
        first, rank = tell_apart(key[some])
        number = np.full(len(self), -1, dtype=np.int32)
        number[some] = rank
        return self._filtered(some[first], chosen), number

    def _filtered(self, rows: Ints, chosen: Bools) -> Lists:
        """Take some of the lists, rows rising, and of them the chosen items; none is empty then."""
        wanted = np.zeros(len(self), dtype=bool)
        wanted[rows] = True
        items, counts = [self.items[:0]], [self.offsets[:0]]
        for block in self.blocks(_ITEMS_AT_ONCE):
            part = self.part(block)
            keep = chosen[part.items]
            keep &= np.repeat(wanted[block], np.diff(part.offsets))
            items.append(part.items[keep])
            counts.append(np.add.reduceat(keep, part.offsets[:-1], dtype=np.int64)[wanted[block]])
        offsets = np.concatenate(([0], np.cumsum(np.concatenate(counts))))
        return Lists(offsets, np.concatenate(items))
