"""Rows by customer and in order within each: one plain sort where rows come in time order."""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from journeys.intake.rows import Rows
from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.compiled import is_built, sorted_positions

# Rows whose arrays stay in the processor's cache while they are counted.
CHUNK_ROWS = 1 << 17


@dataclass(frozen=True)
class Ordered:
    """A view of rows in order.

    Attributes
    ----------
    rows : Rows
        In input order.
    order : ndarray of int64, shape (n,)
        Positions in `rows`, sorted by customer, time, sequence, input row.
    key, time, event : ndarray, shape (n,)
        Those columns in that order.
    """

    rows: Rows
    order: IntArray
    key: NDArray[np.uint64]
    time: IntArray
    event: NDArray[np.int32]

    @classmethod
    def of(cls, rows: Rows, order: IntArray) -> Ordered:
        """Put rows in order, given their order by customer and input row."""
        key, time = rows.key[order], rows.time[order]
        same = key[1:] == key[:-1]
        wrong = same & (time[1:] < time[:-1])
        if rows.sequence is not None:
            sequence = rows.sequence[order]
            wrong |= same & (time[1:] == time[:-1]) & (sequence[1:] < sequence[:-1])
        if wrong.any():
            some = rows.take(order)
            tie = some.row if some.sequence is None else some.sequence
            order = order[np.lexsort((some.row, tie, some.time, some.key))]
            key, time = rows.key[order], rows.time[order]
        return cls(rows, order, key, time, rows.event[order])

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(self.order)

    def take(self, keep: BoolArray) -> Ordered:
        """Return those rows of the view for which `keep` is True."""
        return Ordered(self.rows, self.order[keep], self.key[keep], self.time[keep], self.event[keep])

    def starts(self) -> IntArray:
        """Return the position of each customer's first row."""
        first = np.ones(len(self.key), bool)
        np.not_equal(self.key[1:], self.key[:-1], out=first[1:])
        return np.flatnonzero(first)

    def numbers(self, at: IntArray | BoolArray) -> IntArray:
        """Return the input row numbers of rows of the view."""
        return self.rows.row[self.order[at]]


def chunks(key: NDArray[np.uint64], order: IntArray) -> Iterator[IntArray]:
    """Cut an order by customer into pieces, no customer in two, each small enough for the processor's cache.

    Parameters
    ----------
    key : ndarray of uint64
        Customers in input order.
    order : ndarray of int64
        Positions in `key`, by customer.

    Yields
    ------
    ndarray of int64
    """

    def key_at(place: int) -> int:
        return int(key[order[place]])

    places, begin = range(len(order)), 0
    while begin < len(order):
        end = len(order)
        if end - begin > CHUNK_ROWS:
            # Up to the customer that the chunk would end in, or past it where that is its only one.
            last = key_at(begin + CHUNK_ROWS)
            end = bisect_left(places, last, begin, key=key_at)
            if end == begin:
                end = bisect_right(places, last, begin, key=key_at)
        yield order[begin:end]
        begin = end


def by_customer(key: NDArray[np.uint64]) -> IntArray:
    """Return the order of rows by customer, and by position within each.

    Parameters
    ----------
    key : ndarray of uint64, shape (n_rows,)

    Returns
    -------
    ndarray of int64, shape (n_rows,)
    """
    # Sorting (leading bits of the key, position) as one word is far faster than an indirect sort.
    bits = max(len(key) - 1, 1).bit_length()
    order = sorted_positions(key, bits) if is_built() else _sorted_positions(key, np.uint64(bits))
    # Where two customers share the leading bits: sort by the whole key.
    return np.argsort(key, kind="stable") if order is None else order


def _sorted_positions(key: NDArray[np.uint64], bits: np.uint64) -> IntArray | None:
    """Do what `compiled.sorted_positions` does."""
    packed = key >> bits
    packed <<= bits
    packed |= np.arange(len(key), dtype=np.uint64)
    packed.sort()
    packed &= (np.uint64(1) << bits) - np.uint64(1)
    order = packed.view(np.int64)
    sorted_key = key[order]
    return None if (sorted_key[1:] < sorted_key[:-1]).any() else order
