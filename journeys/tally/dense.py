"""Moves added up in a table with a cell for every key, for chains small enough to have one."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import DAY_US, bin_of
from journeys.kernels.histories import latest
from journeys.kernels.records import CELL, Cells, Moves
from journeys.tally.accumulate import Accumulator, Columns, Keyed, limbs, product_limbs
from journeys.tally.keys import pack, with_bins

# Cells of all workers together: 12 bytes each.
MOST_CELLS = 12_000_000
# A cell holds its count in 32 bits and its dwell, less the lower edge of its bin, in 64.
_MOST_COUNT = (1 << 32) - 1
_MOST_DWELL = 1 << 62
_BUCKETS_AT_ONCE = 8


class MoveSums:
    """The moves table while it grows, for the buckets from one to another.

    Parameters
    ----------
    edges : ndarray of int64 or None
        From `dwell_edges`.
    longest_us : int or None
        The longest dwell of a move that goes into the table of cells (the silence); None: no such table.
    first_state : int
        Code of the first state.
    buckets : range
        Which buckets, for the size of the table of cells.
    more : tuple of str
        Further parts of the key ("group", "before"); with any there is no table of cells.
    n_slots : int
        How many states before that of a move are part of its key.
    """

    def __init__(
        self,
        edges: IntArray | None,
        longest_us: int | None,
        first_state: int,
        buckets: range,
        more: tuple[str, ...] = (),
        n_slots: int = 0,
    ) -> None:
        self._edges, self._first_state, self._buckets = edges, first_state, buckets
        self._more, self._n_slots = more, n_slots
        self._n_bins = 0
        if longest_us is not None and not more:
            self._n_bins = int(bin_of(np.array([longest_us]), edges)[0]) + 1
        self._n_states = 0
        self._cells = np.zeros(0, CELL)
        self._count, self._dwell = 0, 0.0
        self._sparse = Accumulator(("n", "dwell_high", "dwell_low"), more)
        bins = np.arange(self._n_bins)
        self._lower = bins * DAY_US if edges is None else np.concatenate([[0], edges])[: self._n_bins]
        self._widest = 0.0 if edges is None or not self._n_bins else float((edges[: self._n_bins] - self._lower).max())

    def add(self, moves: Moves, n_states: int) -> None:
        """Add moves; `n_states` states are known by now."""
        if moves.busy is not None and moves.busy.any():
            # Few customers have so many events that their moves need cells of their own.
            self._add_sparse(_part(moves, moves.busy), 1)
            moves = _part(moves, ~moves.busy)
        if not len(moves.bucket):
            return
        if n_states > self._n_states:
            self._grow(n_states)
        bins = bin_of(moves.dwell, self._edges)
        rest = moves.dwell - self._lower[bins] if len(self._cells) else moves.dwell
        total = float(rest.sum(dtype=np.float64))
        if not len(self._cells) or total > _MOST_DWELL:
            self._add_sparse(moves, 0)
            return
        cell = moves.bucket.astype(np.int64)
        cell -= self._buckets.start
        cell *= self._n_states
        cell += moves.state
        cell -= self._first_state
        cell *= self._first_state + self._n_states
        cell += moves.next_code
        cell *= self._n_bins
        cell += bins
        self._make_room(len(cell), total)
        self._dwell += total
        np.add.at(self._cells["n"], cell, np.uint32(1))
        np.add.at(self._cells["rest"], cell, rest)

    def cells(self, n_rows: int, n_states: int, contexts: NDArray[np.uint32], mature_before: int) -> Cells:
        """Return the table of cells with room for the moves of `n_rows` rows, for a compiled loop to add to.

        `contexts` are the cells of contexts for as many states; without any, no cells are used.
        """
        if n_states > self._n_states:
            self._grow(n_states)
        # A row makes at most one move.
        most = float(n_rows) * self._widest
        fits = len(self._cells) > 0 and most <= _MOST_DWELL and len(contexts) > 0
        if fits:
            self._make_room(n_rows, most)
        upper = self._lower if self._edges is None else self._edges[: self._n_bins]
        place = self._buckets.start, self._n_states, self._edges is None
        cells, contexts = (self._cells, contexts) if fits else (self._cells[:0], contexts[:0])
        return Cells(cells, contexts, self._lower, upper, *place, mature_before)

    def gained(self, dwell: float) -> None:
        """Note by how much a compiled loop has raised the cells' dwell."""
        self._dwell += dwell

    def _make_room(self, count: int, dwell: float) -> None:
        """Empty the cells before they could overflow."""
        if self._count + count > _MOST_COUNT or self._dwell + dwell > _MOST_DWELL:
            self._empty_cells()
            self._cells[:] = np.zeros((), CELL)
        self._count += count

    def result(self) -> Keyed:
        """Return the distinct keys in order and their sums."""
        self._empty_cells()
        self._cells = np.zeros(0, CELL)
        return self._sparse.result()

    def resume(self, table: Keyed) -> None:
        """Begin with what `result` once gave."""
        self._sparse.resume(table)

    def _grow(self, n_states: int) -> None:
        """Make room for more states."""
        self._empty_cells()
        self._n_states = n_states
        per_bucket = n_states * (self._first_state + n_states) * self._n_bins
        size = per_bucket * len(self._buckets) if per_bucket * 200 <= MOST_CELLS else 0
        self._cells = np.zeros(size, CELL)

    def _empty_cells(self) -> None:
        """Move what the cells hold to the sorted table; the cells are then to be cleared or let go of."""
        pairs = self._n_states, self._first_state + self._n_states
        per_bucket = pairs[0] * pairs[1] * self._n_bins
        for first in range(0, len(self._buckets) if len(self._cells) else 0, _BUCKETS_AT_ONCE):
            # A few buckets at a time, to stay small.
            some = self._buckets[first : first + _BUCKETS_AT_ONCE]
            part = self._cells[first * per_bucket : (first + len(some)) * per_bucket]
            at = np.flatnonzero(part["n"] != 0)
            above = at // self._n_bins
            bins = at - above * self._n_bins
            # Everything but the bin is packed once for all the bins of a pair.
            bucket, state, next_code = np.indices((len(some), *pairs)).reshape(3, -1)
            key = pack(bucket + some.start, state + self._first_state, next_code)[above]
            n, rest = part["n"][at].astype(np.int64), part["rest"][at]
            sums = product_limbs(n, self._lower[bins], rest, "dwell")
            self._sparse.add(with_bins(key, bins), {"n": n, **sums})
        self._count, self._dwell = 0, 0.0

    def _add_sparse(self, moves: Moves, busy: int) -> None:
        key = pack(moves.bucket, moves.state, moves.next_code, bin_of(moves.dwell, self._edges), busy)
        more = {} if moves.group is None else {"group": moves.group}
        if "before" in self._more:
            more["before"] = latest(moves.before, self._n_slots)
        self._sparse.add(key, {"dwell": moves.dwell}, _single_moves, more)


def _part(moves: Moves, mask: np.ndarray) -> Moves:
    group = None if moves.group is None else moves.group[mask]
    return Moves(
        moves.bucket[mask], moves.state[mask], moves.next_code[mask], moves.dwell[mask], moves.before[mask],
        moves.since[mask], group=group,
    )  # fmt: skip


def _single_moves(columns: Columns) -> Columns:
    """Return what single moves add: themselves and their dwell."""
    return {"n": np.ones(len(columns["dwell"]), np.int64), **limbs(columns["dwell"], "dwell")}
