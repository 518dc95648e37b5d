"""Moves added up by what came before the state they leave, to tell whether one step of memory is enough."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.grouping import Grouping
from journeys.kernels.histories import earlier, slot
from journeys.kernels.records import OPEN, Moves, Reading
from journeys.tally.accumulate import Accumulator, Keyed, More
from journeys.tally.keys import pack

# Cells of all workers together: 4 bytes each.
MOST_CELLS = 12_000_000
_MOST_COUNT = (1 << 32) - 1


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
    """

    def __init__(self, reading: Reading, buckets: range, more: tuple[str, ...] = ()) -> None:
        self._first_state, self._buckets, self._more = reading.first_state, buckets, more
        self._last = _LastMoments(reading)
        self._n_states = self._count = 0
        self._n = np.zeros(0, np.uint32)
        self._sparse = Accumulator(("n",), more)

    def add(self, moves: Moves, n_states: int) -> None:
        """Add moves, but for stays that are still open; `n_states` states are known by now."""
        over = moves.next_code != OPEN
        if not over.any():
            return
        if n_states > self._n_states:
            self._grow(n_states)
        state, next_code, before = moves.state[over], moves.next_code[over], moves.before[over]
        bucket, mature = moves.bucket[over], moves.since[over] < self._last.mature_before(moves.since[over])
        if len(self._n):
            self.make_room(len(state))
            np.add.at(self._n, self._cell(bucket, state, next_code, slot(before, 0), mature), np.uint32(1))
            return
        found: More = {} if moves.group is None else {"group": moves.group[over]}
        found |= {"earlier": earlier(before)} if "earlier" in self._more else {}
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
    """Until when a state had to be entered to be seen for the silence: before the end of the log, or of its period."""

    def __init__(self, reading: Reading) -> None:
        grouping: Grouping | None = reading.grouping
        self._splits = np.zeros(0, np.int64) if grouping is None else grouping.splits
        ends = np.append(self._splits, reading.as_of_us)
        self._moments = reading.mature_before(ends)

    def mature_before(self, since: IntArray) -> IntArray:
        """Return the moment for states entered at `since`."""
        if not len(self._splits):
            return self._moments
        return self._moments[np.searchsorted(self._splits, since, side="right")]
