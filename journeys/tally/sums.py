"""The tables of a tally while they grow."""

from __future__ import annotations

from typing import Any

import numpy as np

from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import bin_of
from journeys.kernels.records import Carried, Closed, Counted, Ends, Entries, Gaps, Moves
from journeys.tally.accumulate import Accumulator, Columns, Keyed, limbs
from journeys.tally.dense import MoveSums
from journeys.tally.keys import pack
from journeys.tally.tally import CUSTOMER_SUMS, N_BUCKETS, SUMS


class Sums:
    """Everything that blocks of rows add up to, for the buckets from one to another.

    Parameters
    ----------
    elapsed_edges : ndarray of int64 or None
        Bins of elapsed time, from `kernels.bins`.
    moves : MoveSums
        The moves table.
    """

    def __init__(self, elapsed_edges: IntArray | None, moves: MoveSums) -> None:
        self._elapsed_edges, self.moves = elapsed_edges, moves
        self._entries, self._journeys = Accumulator(SUMS["entries"]), Accumulator(SUMS["journeys"])
        self._gaps = Accumulator(SUMS["gaps"])
        self.customers = {name: np.zeros(N_BUCKETS, np.int64) for name in (*CUSTOMER_SUMS, "largest_events")}

    def add(self, counted: Counted, n_states: int) -> None:
        """Add what a block of rows gave; `n_states` states are known by now."""
        for moves in counted.moves:
            self._add_moves(moves, n_states)
        for ends in counted.ends:
            self._add_ends(ends)
        self._add_entries(counted.entries)
        self._add_gaps(counted.gaps)

    def close(self, closed: Closed, n_states: int) -> None:
        """Add what the end of the log gave."""
        self._add_moves(closed.moves, n_states)
        self._add_ends(closed.ends)
        self._add_gaps(closed.gaps)

    def _add_moves(self, moves: Moves, n_states: int) -> None:
        """Add moves under bucket, state, next, dwell bin and busy."""
        self.moves.add(moves, n_states)

    def _add_ends(self, ends: Ends) -> None:
        """Add journeys under bucket, entry state, outcome, elapsed bin and sure."""
        bins = bin_of(ends.elapsed, self._elapsed_edges)
        key = pack(ends.bucket, ends.state, ends.outcome, bins, ends.sure)
        self._journeys.add(key, {"steps": ends.steps.astype(np.int32), "elapsed": ends.elapsed}, _journeys)

    def add_customers(self, carried: Carried, bucket: np.ndarray[Any, Any]) -> None:
        """Add one record per customer, at the end of the log."""
        seen = carried.n_events > 0
        bucket, j, x = bucket[seen], carried.decided[seen].astype(np.int64), carried.converted[seen].astype(np.int64)
        for name, values in zip(CUSTOMER_SUMS, (np.ones_like(j), j, j * j, j * x, x, x * x), strict=True):
            np.add.at(self.customers[name], bucket, values)
        np.maximum.at(self.customers["largest_events"], bucket, carried.n_events[seen])

    def result(self, name: str) -> Keyed:
        """Return the distinct keys of a table in order and their sums, and let go of it."""
        if name == "moves":
            return self.moves.result()
        return {"entries": self._entries, "journeys": self._journeys, "gaps": self._gaps}[name].result()

    def _add_entries(self, entries: Entries) -> None:
        key, n = np.unique(pack(entries.bucket, entries.state, flag=entries.sure), return_counts=True)
        self._entries.add(key, {"n": n.astype(np.int64, copy=False)})

    def _add_gaps(self, gaps: Gaps) -> None:
        """Add absences under bucket, how the journey before ended, bin of the time away and whether over."""
        key = pack(gaps.bucket, gaps.outcome, bins=bin_of(gaps.away, self._elapsed_edges), flag=gaps.back)
        self._gaps.add(key, {"away": gaps.away}, _gaps)


def _gaps(columns: Columns) -> Columns:
    """Return what single absences add: themselves and their length."""
    return {"n": np.ones(len(columns["away"]), np.int64), **limbs(columns["away"], "away")}


def _journeys(columns: Columns) -> Columns:
    """Return what single journeys add: themselves, their steps and steps squared, their elapsed time."""
    steps = columns["steps"].astype(np.int64)
    counts = {"n": np.ones(len(steps), np.int64), "steps": steps, "steps_squared": steps**2}
    return {**counts, **limbs(columns["elapsed"], "elapsed")}
