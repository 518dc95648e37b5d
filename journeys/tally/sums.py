"""The tables of a tally while they grow."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.bins import bin_of
from journeys.kernels.grouping import Grouping
from journeys.kernels.records import OPEN, Carried, Closed, Counted, Ends, Entries, Gaps, Moves, Passed
from journeys.tally.accumulate import Accumulator, Columns, Keyed, More, limbs
from journeys.tally.dense import MoveSums
from journeys.tally.keys import pack
from journeys.tally.tables import CUSTOMER_SUMS, MORE, N_BUCKETS, SUMS


class Sums:
    """Everything that blocks of rows add up to, for the buckets from one to another.

    Parameters
    ----------
    elapsed_edges : ndarray of int64 or None
        Bins of elapsed time, from `kernels.bins`.
    moves : MoveSums
        The moves table.
    grouping : Grouping or None
        How journeys are grouped.
    """

    def __init__(self, elapsed_edges: IntArray | None, moves: MoveSums, grouping: Grouping | None = None) -> None:
        self._elapsed_edges, self.moves, self._grouping = elapsed_edges, moves, grouping
        group = () if grouping is None else ("group",)
        self._tables = {
            name: Accumulator(sums, (*group, *MORE.get(name, ()))) for name, sums in SUMS.items() if name != "moves"
        }
        self.customers = {name: np.zeros(N_BUCKETS, np.int64) for name in (*CUSTOMER_SUMS, "largest_events")}

    def add(self, counted: Counted, n_states: int) -> None:
        """Add what a block of rows gave; `n_states` states are known by now."""
        for moves in counted.moves:
            self._add_moves(moves, n_states)
        for ends in counted.ends:
            self._add_ends(ends)
        for passed in counted.passed:
            self._add_passed(passed)
        self._add_entries(counted.entries)
        self._add_gaps(counted.gaps)

    def close(self, closed: Closed, n_states: int) -> None:
        """Add what the end of the log gave."""
        self._add_moves(closed.moves, n_states)
        self._add_ends(closed.ends)
        self._add_gaps(closed.gaps)
        if closed.passed is not None:
            self._add_passed(closed.passed)

    def add_customers(self, carried: Carried, bucket: np.ndarray[Any, Any]) -> None:
        """Add one record per customer, at the end of the log."""
        seen = carried.n_events > 0
        bucket, j, x = bucket[seen], carried.decided[seen].astype(np.int64), carried.converted[seen].astype(np.int64)
        for name, values in zip(CUSTOMER_SUMS, (np.ones_like(j), j, j * j, j * x, x, x * x), strict=True):
            np.add.at(self.customers[name], bucket, values)
        np.maximum.at(self.customers["largest_events"], bucket, carried.n_events[seen])

    def result(self, name: str) -> Keyed:
        """Return the distinct keys of a table in order and their sums, and let go of it."""
        return self.moves.result() if name == "moves" else self._tables[name].result()

    def _add_moves(self, moves: Moves, n_states: int) -> None:
        """Add moves under bucket, state, next, dwell bin and busy."""
        if moves.group is not None:
            more, dwell, cut = self._in_period(moves, moves.dwell)
            next_code = np.where(cut, np.int32(OPEN), moves.next_code)
            moves = replace(moves, dwell=dwell, next_code=next_code, group=more["group"])
        self.moves.add(moves, n_states)

    def _add_ends(self, ends: Ends) -> None:
        """Add journeys under bucket, entry state, outcome, elapsed bin and sure.

        The steps of a journey cut at the end of a period are not known there: they are left at 0.
        """
        more, elapsed, cut = self._in_period(ends, ends.elapsed)
        outcome, steps = _unless(cut, ends.outcome, OPEN), _unless(cut, ends.steps, 0)
        key = pack(ends.bucket, ends.state, outcome, bin_of(elapsed, self._elapsed_edges), ends.sure)
        self._tables["journeys"].add(key, {"steps": steps.astype(np.int32), "elapsed": elapsed}, _journeys, more)

    def _add_entries(self, entries: Entries) -> None:
        more, _, _ = self._in_period(entries, np.zeros(len(entries.bucket), np.int64))
        key = pack(entries.bucket, entries.state, flag=entries.sure)
        if not more:
            key, n = np.unique(key, return_counts=True)
            self._tables["entries"].add(key, {"n": n.astype(np.int64, copy=False)})
            return
        self._tables["entries"].add(key, {"n": np.ones(len(key), np.int64)}, None, more)

    def _add_gaps(self, gaps: Gaps) -> None:
        """Add absences under bucket, how the journey before ended, bin of the time away and whether over."""
        more, away, cut = self._in_period(gaps, gaps.away)
        back = np.full(len(away), gaps.back) & ~cut
        key = pack(gaps.bucket, gaps.outcome, bins=bin_of(away, self._elapsed_edges), flag=back)
        self._tables["gaps"].add(key, {"away": away}, _gaps, more)

    def _add_passed(self, passed: Passed) -> None:
        """Add stages left under bucket, stage, what was next, bins of the time since entry and since the stage."""
        more, since_entry, cut = self._in_period(passed, passed.since_entry)
        since_stage = passed.since_stage - (passed.since_entry - since_entry)
        # A stage reached after its period had ended is not counted in it.
        kept = since_stage >= 0
        key = pack(
            passed.bucket, passed.stage, _unless(cut, passed.next_code, OPEN),
            bin_of(since_entry, self._elapsed_edges), passed.sure,
        )  # fmt: skip
        more = {**more, "bin_stage": bin_of(since_stage, self._elapsed_edges)}
        n = np.ones(int(kept.sum()), np.int64)
        self._tables["stages"].add(key[kept], {"n": n}, None, {name: part[kept] for name, part in more.items()})

    def _in_period(self, records: Any, length: IntArray) -> tuple[More, IntArray, BoolArray]:
        """Return the group, period included, how long something was seen in it, and whether its end cut it."""
        if self._grouping is None or records.group is None:
            return {}, length, np.zeros(len(length), bool)
        group, length, cut = self._grouping.in_periods(records.group, records.since, length)
        return {"group": group}, length, cut


def _unless(cut: BoolArray, values: NDArray[Any], other: int) -> NDArray[Any]:
    """Return the values, another where cut."""
    return np.where(cut, values.dtype.type(other), values) if cut.any() else values


def _gaps(columns: Columns) -> Columns:
    """Return what single absences add: themselves and their length."""
    return {"n": np.ones(len(columns["away"]), np.int64), **limbs(columns["away"], "away")}


def _journeys(columns: Columns) -> Columns:
    """Return what single journeys add: themselves, their steps and steps squared, their elapsed time."""
    steps = columns["steps"].astype(np.int64)
    counts = {"n": np.ones(len(steps), np.int64), "steps": steps, "steps_squared": steps**2}
    return {**counts, **limbs(columns["elapsed"], "elapsed")}
