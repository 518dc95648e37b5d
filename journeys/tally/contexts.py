"""Moves added up by what came before the state they leave, to tell whether one step of memory is enough."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.bins import DAY_US
from journeys.kernels.grouping import Grouping, unpacked
from journeys.kernels.histories import earlier, slot
from journeys.kernels.records import OPEN, Moves, Reading
from journeys.tally.accumulate import Accumulator, Keyed, More, add_up, is_in_order, merged
from journeys.tally.keys import pack

# Cells of all workers together: 4 bytes each.
MOST_CELLS = 12_000_000
_MOST_COUNT = (1 << 32) - 1
# A further part of the key where the log goes on: the day a state was entered on, counted from one that no log reaches
# back to, so that 0 is no day.
_DAY, _DAY_0 = "day", 1_000_000


class ContextSums:
    """The contexts table while it grows, for the buckets from one to another.

    Parameters
    ----------
    reading : Reading
        The rules.
    buckets : range
        Which buckets, for the size of the table of cells.
    more : tuple of str
        Further parts of the key; with any there is no table of cells.
    grouped : Grouping or None
        How the table is grouped.
    goes_on : bool
        The log will go on after `as_of`: what is not mature yet, but may be later, is kept by the day on which the
        state was entered.
    """

    def __init__(
        self,
        reading: Reading,
        buckets: range,
        more: tuple[str, ...] = (),
        grouped: Grouping | None = None,
        *,
        goes_on: bool = False,
    ) -> None:
        self._first_state, self._buckets = reading.first_state, buckets
        self._more = (*more, _DAY) if goes_on else more
        self._moments = _LastMoments(reading, grouped)
        self._n_states = self._count = 0
        self._n = np.zeros(0, np.uint32)
        self._sparse = Accumulator(("n",), self._more)

    def add(self, moves: Moves, n_states: int) -> None:
        """Add moves, but for stays that are still open; `n_states` states are known by now."""
        over = moves.next_code != OPEN
        if not over.any():
            return
        if n_states > self._n_states:
            self._grow(n_states)
        state, next_code, before = moves.state[over], moves.next_code[over], moves.before[over]
        bucket, since = moves.bucket[over], moves.since[over]
        period = self._moments.period(since)
        mature = since < self._moments.mature_before[period]
        if len(self._n):
            self.make_room(len(state))
            np.add.at(self._n, self._cell(bucket, state, next_code, slot(before, 0), mature), np.uint32(1))
            return
        found: More = {} if moves.group is None else {"group": moves.group[over]}
        found |= {"earlier": earlier(before)} if "earlier" in self._more else {}
        if _DAY in self._more:
            found[_DAY] = np.where(mature | self._moments.over[period], 0, since // DAY_US + _DAY_0)
        key = pack(bucket, state, next_code, slot(before, 0), mature)
        self._sparse.add(key, {"n": np.ones(len(key), np.int64)}, None, found)

    def cells(self, n_states: int) -> NDArray[np.uint32]:
        """Return the cells, for a compiled loop to add to after `make_room`; empty for a chain too large."""
        if n_states > self._n_states:
            self._grow(n_states)
        return self._n

    def make_room(self, count: int) -> None:
        """Empty the cells before they could overflow."""
        if self._count + count > _MOST_COUNT:
            self._empty_cells()
        self._count += count

    def resume(self, table: Keyed) -> None:
        """Begin with what `result` once gave; what has become mature since is counted so."""
        day = table.more[_DAY]
        period = unpacked(table.more["group"])[3] if "group" in table.more else np.zeros(len(day), np.int64)
        waits = day > 0
        mature = waits & ((day - _DAY_0) * DAY_US < self._moments.mature_before[period])
        known = mature | (waits & self._moments.over[period])
        # The flag is the lowest bit of a packed key.
        aged = _rows(Keyed(table.key | mature, table.sums, {**table.more, _DAY: np.where(known, 0, day)}), known)
        self._sparse.resume(_with(_rows(table, ~known), aged))

    def result(self) -> Keyed:
        """Return the distinct keys in order and their sums."""
        self._empty_cells()
        self._n = np.zeros(0, np.uint32)
        return self._sparse.result()

    def _cell(
        self,
        bucket: NDArray[np.uint8],
        state: NDArray[np.int32],
        next_code: NDArray[np.int32],
        previous: IntArray,
        mature: BoolArray,
    ) -> IntArray:
        """Return the cells of moves; the compiled loop has the same formula."""
        width = self._first_state + self._n_states
        cell = bucket.astype(np.int64) - self._buckets.start
        for size, part in ((self._n_states, state - self._first_state), (width, next_code), (width, previous)):
            cell *= size
            cell += part
        return cell * 2 + mature

    def _grow(self, n_states: int) -> None:
        """Make room for more states."""
        self._empty_cells()
        self._n_states = n_states
        per_bucket = n_states * (self._first_state + n_states) ** 2 * 2
        fits = not self._more and per_bucket * 200 <= MOST_CELLS
        self._n = np.zeros(per_bucket * len(self._buckets) if fits else 0, np.uint32)

    def _empty_cells(self) -> None:
        """Move what the cells hold to the sorted table."""
        at = np.flatnonzero(self._n)
        width = self._first_state + self._n_states
        above, mature = at // 2, at % 2
        parts = []
        for size in (width, width, self._n_states):
            parts.append(above % size)
            above = above // size
        previous, next_code, state = parts
        key = pack(above + self._buckets.start, state + self._first_state, next_code, previous, mature)
        self._sparse.add(key, {"n": self._n[at].astype(np.int64)})
        self._n[:] = 0
        self._count = 0


class _LastMoments:
    """Until when a state had to be entered to be seen for the silence: before the end of the log, or of its period.

    Attributes
    ----------
    mature_before : ndarray of int64, shape (n_periods,)
        That moment.
    over : ndarray of bool, shape (n_periods,)
        The period is over, so that no more of it will be seen.
    """

    def __init__(self, reading: Reading, grouped: Grouping | None) -> None:
        self._splits = np.zeros(0, np.int64) if grouped is None else grouped.splits
        ends = np.append(np.minimum(self._splits, reading.as_of_us), reading.as_of_us)
        self.mature_before = reading.mature_before(ends)
        self.over = np.append(self._splits <= reading.as_of_us, False)

    def period(self, since: IntArray) -> IntArray:
        """Return the periods that times lie in."""
        return np.searchsorted(self._splits, since, side="right")


def without_days(table: Keyed) -> Keyed:
    """Return a table without the days that states were entered on, what differs in these alone added up."""
    if _DAY not in table.more:
        return table
    day = table.more[_DAY]
    without = Keyed(table.key, table.sums, {name: part for name, part in table.more.items() if name != _DAY})
    return _with(_rows(without, day == 0), _rows(without, day != 0))


def _rows(table: Keyed, keep: BoolArray) -> Keyed:
    """Return some rows of a table."""
    sums, more = ({name: column[keep] for name, column in of.items()} for of in (table.sums, table.more))
    return Keyed(table.key[keep], sums, more)


def _with(table: Keyed, new: Keyed) -> Keyed:
    """Return a table with rows in any order added, most of it being in order as it is."""
    held = table if is_in_order(table) else add_up(*table)
    return merged(held, add_up(*new)) if len(new.key) else held
