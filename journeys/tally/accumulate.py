"""Tables of whole-number sums under a packed key, kept sorted and compact while a log streams by."""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Callable, Mapping
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.compiled import group_sums
from journeys.tally.keys import bucket_in

Columns = dict[str, NDArray[np.int64]]
More = dict[str, IntArray]
Expand = Callable[[Columns], Columns]

_LIMB = 32
_FEW = 1 << 15
_BUCKETS_PER_PART = 4
_LOW = (1 << _LIMB) - 1
# So many times as long as what comes in, a table is not sorted anew; nor where further parts of the key differ often.
_LONGER = 4
_MOST_RUNS = 256


def limbs(values: IntArray, name: str) -> Columns:
    """Split whole numbers into two columns whose sums cannot overflow: value = high * 2**32 + low, low not negative."""
    return {f"{name}_high": values >> _LIMB, f"{name}_low": values & _LOW}


def join_limbs(columns: Mapping[str, IntArray], name: str) -> FloatArray:
    """Return the sums of a split column as floats."""
    return columns[f"{name}_high"].astype(np.float64) * (1 << _LIMB) + columns[f"{name}_low"]


def exact_limbs(columns: Mapping[str, IntArray], name: str) -> list[int]:
    """Return the sums of a split column as exact Python integers."""
    high, low = columns[f"{name}_high"].tolist(), columns[f"{name}_low"].tolist()
    return [(h << _LIMB) + b for h, b in zip(high, low, strict=True)]


def product_limbs(n: IntArray, value: IntArray, rest: IntArray, name: str) -> Columns:
    """Return n * value + rest in two columns; n below 2**32, value and rest not negative."""
    low = n.astype(np.uint64) * (value & _LOW).astype(np.uint64)
    high = n * (value >> _LIMB) + (low >> np.uint64(_LIMB)).astype(np.int64) + (rest >> _LIMB)
    low_sum = (low & np.uint64(_LOW)).astype(np.int64) + (rest & _LOW)
    return {f"{name}_high": high + (low_sum >> _LIMB), f"{name}_low": low_sum & _LOW}


class Keyed(NamedTuple):
    """A table: distinct keys in order, the sums under each, and further parts of the key where there are any."""

    key: IntArray
    sums: Columns
    more: More


def in_order(key: IntArray, more: More) -> IntArray:
    """Return the order of rows by the further parts of the key, then by the packed key."""
    return np.lexsort((key, *reversed(more.values()))) if more else np.argsort(key)


def add_up(key: IntArray, sums: Columns, more: More) -> Keyed:
    """Return the distinct keys in order and the sums under each; low limbs carried into the high ones.

    `sums` is used up, so that columns can be let go of one by one.
    """
    if not len(key):
        return Keyed(key, sums, more)
    if more or (key[1:] <= key[:-1]).any():
        order = in_order(key, more)
        key, more = key[order], {name: part[order] for name, part in more.items()}
        first = np.ones(len(key), bool)
        first[1:] = key[1:] != key[:-1]
        for part in more.values():
            first[1:] |= part[1:] != part[:-1]
        start = np.flatnonzero(first)
        added = {name: group_sums(sums.pop(name), order, start) for name in list(sums)}
        key, more = key[start], {name: part[start] for name, part in more.items()}
    else:
        added = dict(sums)
    return Keyed(key, carried_over(added), more)


def merged(table: Keyed, new: Keyed) -> Keyed:
    """Return what two tables add up to, each with distinct keys in order; quick where the second is the shorter one."""
    old_runs, new_runs = _runs(table.more, len(table.key)), _runs(new.more, len(new.key))
    if len(table.key) < _LONGER * len(new.key) or len(new_runs) > _MOST_RUNS:
        return add_up(
            np.concatenate([table.key, new.key]),
            {name: np.concatenate([table.sums[name], new.sums[name]]) for name in table.sums},
            {name: np.concatenate([table.more[name], new.more[name]]) for name in table.more},
        )
    at, is_there = _places(table, new, old_runs, new_runs)
    sums = {}
    for name, column in table.sums.items():
        sums[name] = column.copy()
        sums[name][at[is_there]] += new.sums[name][is_there]
    if not is_there.all():
        extra = ~is_there
        place = at[extra] + np.arange(int(extra.sum()))
        is_old = np.ones(len(table.key) + len(place), bool)
        is_old[place] = False

        def woven(old: IntArray, more: IntArray) -> IntArray:
            both = np.empty(len(is_old), old.dtype)
            both[is_old], both[place] = old, more[extra]
            return both

        sums = {name: woven(column, new.sums[name]) for name, column in sums.items()}
        key, more = woven(table.key, new.key), {name: woven(part, new.more[name]) for name, part in table.more.items()}
        return Keyed(key, carried_over(sums), more)
    return Keyed(table.key, carried_over(sums), table.more)


def _runs(more: More, n: int) -> list[tuple[tuple[int, ...], int]]:
    """Return the runs of equal further parts of the key, each with its first row."""
    first = np.zeros(n, bool)
    first[:1] = True
    for part in more.values():
        first[1:] |= part[1:] != part[:-1]
    start = np.flatnonzero(first)
    values = [part[start].tolist() for part in more.values()]
    of = list(zip(*values, strict=True)) if values else [()] * len(start)
    return list(zip(of, start.tolist(), strict=True))


def _places(
    table: Keyed, new: Keyed, old_runs: list[tuple[tuple[int, ...], int]], new_runs: list[tuple[tuple[int, ...], int]]
) -> tuple[IntArray, NDArray[np.bool_]]:
    """Return where the keys of a table belong in another, and whether they are there."""
    at, is_there = np.zeros(len(new.key), np.int64), np.zeros(len(new.key), bool)
    ends = [row for _, row in old_runs[1:]] + [len(table.key)]
    for (of, first), last in zip(new_runs, [*(row for _, row in new_runs[1:]), len(new.key)], strict=True):
        run = bisect_left(old_runs, of, key=lambda one: one[0])
        begin = old_runs[run][1] if run < len(old_runs) else len(table.key)
        end = ends[run] if run < len(old_runs) and old_runs[run][0] == of else begin
        held, key = table.key[begin:end], new.key[first:last]
        place = np.searchsorted(held, key)
        at[first:last] = begin + place
        within = place < len(held)
        is_there[first:last][within] = held[place[within]] == key[within]
    return at, is_there


def is_in_order(table: Keyed) -> bool:
    """Tell whether the keys of a table are distinct and in order."""
    rises = table.key[1:] > table.key[:-1]
    for part in reversed(table.more.values()):
        rises = (part[1:] > part[:-1]) | ((part[1:] == part[:-1]) & rises)
    return bool(rises.all())


def carried_over(sums: Columns) -> Columns:
    """Return sums with what the low limbs hold too much carried into the high ones."""
    carried = dict(sums)
    for name in sums:
        if name.endswith("_low"):
            high = name.removesuffix("_low") + "_high"
            carried[high] = sums[high] + (sums[name] >> _LIMB)
            carried[name] = sums[name] & _LOW
    return carried


class Accumulator:
    """A growing table of sums, in parts by bucket so that adding one up needs little room.

    Parameters
    ----------
    names : tuple of str
        What is summed.
    more : tuple of str
        Further parts of the key, beside the packed one.
    """

    def __init__(self, names: tuple[str, ...], more: tuple[str, ...] = ()) -> None:
        self._names, self._more = names, more
        self._parts: dict[int, _Part] = {}

    def add(self, key: IntArray, columns: Columns, expand: Expand | None = None, more: More | None = None) -> None:
        """Add one block; quickest where the keys of a bucket stand together.

        Parameters
        ----------
        key : ndarray of int64
            Packed keys, any number of rows each.
        columns : dict of str to ndarray
            The sums, or what `expand` makes them of when the time has come: what waits should be small.
        expand : callable, optional
            From the columns of a block to its sums.
        more : dict of str to ndarray, optional
            The further parts of the key.
        """
        if not len(key):
            return
        part = bucket_in(key) // _BUCKETS_PER_PART
        begin = np.flatnonzero(np.diff(part, prepend=-1))
        for number, first, last in zip(part[begin].tolist(), begin, [*begin[1:], len(key)], strict=True):
            piece = slice(first, last)
            # Copies, so that what waits does not keep the whole block in memory.
            kept = {name: column[piece].copy() for name, column in columns.items()}
            also = {name: column[piece].copy() for name, column in (more or {}).items()}
            self._parts.setdefault(number, _Part(self._names)).add(key[piece].copy(), kept, expand, also)

    def resume(self, table: Keyed) -> None:
        """Begin with what `result` once gave."""
        if not len(table.key):
            return
        part = bucket_in(table.key) // _BUCKETS_PER_PART
        # Within a part the further parts of the key go before the buckets, so that a part's rows stand together.
        begin = np.flatnonzero(np.diff(part, prepend=-1))
        for number, first, last in zip(part[begin].tolist(), begin, [*begin[1:], len(part)], strict=True):
            piece = slice(first, last)
            sums, more = ({name: column[piece] for name, column in of.items()} for of in (table.sums, table.more))
            held = Keyed(table.key[piece], sums, more)
            self._parts[number] = _Part(self._names, held if is_in_order(held) else add_up(*held))

    def result(self) -> Keyed:
        """Return the distinct keys in order and their sums, and let go of them."""
        parts = [self._parts.pop(number).settled() for number in sorted(self._parts)]
        empty = np.empty(0, np.int64)
        return Keyed(
            np.concatenate([empty, *(part.key for part in parts)]),
            {name: np.concatenate([empty, *(part.sums.pop(name) for part in parts)]) for name in self._names},
            {name: np.concatenate([empty, *(part.more.pop(name) for part in parts)]) for name in self._more},
        )


class _Part:
    """The sums of a few buckets: blocks wait in any order and are added up when they pile up."""

    def __init__(self, names: tuple[str, ...], settled: Keyed | None = None) -> None:
        self._names = names
        self._settled = settled
        self._blocks: list[tuple[IntArray, Columns, Expand | None, More]] = []
        self._waiting, self._n_settled = 0, 0 if settled is None else len(settled.key)

    def add(self, key: IntArray, columns: Columns, expand: Expand | None, more: More) -> None:
        """Add one block."""
        self._blocks.append((key, columns, expand, more))
        self._waiting += len(key)
        if self._waiting > max(2 * self._n_settled, _FEW):
            self.settled()

    def settled(self) -> Keyed:
        """Return the distinct keys in order and their sums."""
        if self._waiting:
            blocks = [
                Keyed(key, columns if expand is None else expand(columns), more)
                for key, columns, expand, more in self._blocks
            ]
            self._blocks = []
            if self._settled is not None and self._waiting * _LONGER > self._n_settled:
                blocks.append(self._settled)
                self._settled = None
            key = np.concatenate([block.key for block in blocks])
            more = {name: np.concatenate([block.more.pop(name) for block in blocks]) for name in list(blocks[0].more)}
            sums = {name: np.concatenate([block.sums.pop(name) for block in blocks]) for name in self._names}
            new = add_up(key, sums, more)
            self._settled = new if self._settled is None else merged(self._settled, new)
            self._n_settled, self._waiting = len(self._settled.key), 0
        if self._settled is None:
            msg = "nothing was added to this part"
            raise ValueError(msg)
        return self._settled
