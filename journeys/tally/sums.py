"""The tables of a tally while they grow."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.bins import bin_of
from journeys.kernels.grouping import Grouping
from journeys.kernels.records import (
    LAPSED,
    OPEN,
    Carried,
    Cells,
    Closed,
    Counted,
    Ends,
    Entries,
    Gaps,
    Moves,
    Passed,
    Reading,
)
from journeys.tally.accumulate import Accumulator, Columns, Keyed, More, carried_over, limbs
from journeys.tally.contexts import ContextSums
from journeys.tally.dense import MoveSums
from journeys.tally.keys import pack
from journeys.tally.tables import (
    CUSTOMER_SUMS,
    HISTORY,
    MOST_IN_SETS,
    N_BUCKETS,
    SUMS,
    customer_sums,
    more_of,
    sums_of,
)


class Sums:
    """Everything that blocks of rows add up to, for the buckets from one to another.

    Parameters
    ----------
    reading : Reading
        The rules.
    edges : tuple of two ndarray of int64 or None
        Bins of dwell and of elapsed time, from `kernels.bins`.
    longest_us : int or None
        The longest dwell that a move can have, None where there is no such.
    buckets : range
        Which buckets.
    grouped : Grouping or None
        How the tables are grouped.
    goes_on : bool
        The log will go on after `as_of`, so that what is not known yet is kept apart.
    """

    def __init__(
        self,
        reading: Reading,
        edges: tuple[IntArray | None, IntArray | None],
        longest_us: int | None,
        buckets: range,
        *,
        grouped: Grouping | None,
        goes_on: bool = False,
    ) -> None:
        self._reading, self._grouping, self._valued = reading, grouped, reading.values
        dwell_edges, self._elapsed_edges = edges
        order = reading.order
        self._moves = MoveSums(dwell_edges, longest_us, reading.first_state, buckets, self._more("moves"), order - 1)
        self._contexts = ContextSums(reading, buckets, self._more("contexts"), grouped, goes_on=goes_on)
        self._tables = {name: self._empty(name) for name in SUMS if name not in HISTORY}
        self._sets = True
        self.customers = {name: np.zeros(N_BUCKETS, np.int64) for name in customer_sums(valued=self._valued)}

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
        if carried.total_value is not None:
            value = carried.total_value[seen]
            for name, part in limbs(value, "value").items():
                np.add.at(self.customers[name], bucket, part)
            self.customers = carried_over(self.customers)
            np.maximum.at(self.customers["largest_value"], bucket, value)

    def cells(self, n_rows: int, n_states: int) -> Cells:
        """Return cells for a compiled loop to add the moves of `n_rows` rows to, empty for a chain too large."""
        contexts = self._contexts.cells(n_states)
        if len(contexts):
            self._contexts.make_room(2 * n_rows)
        until = int(self._reading.mature_before(np.array([self._reading.as_of_us]))[0])
        return self._moves.cells(n_rows, n_states, contexts, until)

    def gained(self, dwell: float) -> None:
        """Note by how much a compiled loop has raised the dwell in the cells."""
        self._moves.gained(dwell)

    @property
    def names(self) -> tuple[str, ...]:
        """Tables there are, beside the customers."""
        return (*HISTORY, *self._tables)

    def result(self, name: str) -> Keyed:
        """Return the distinct keys of a table in order and their sums, and let go of it."""
        if name == "moves":
            return self._moves.result()
        return self._contexts.result() if name == "contexts" else self._tables[name].result()

    def resume(self, tables: Mapping[str, Keyed]) -> None:
        """Begin with what `result` once gave, table by table."""
        for name, table in tables.items():
            if name in HISTORY:
                (self._moves if name == "moves" else self._contexts).resume(table)
            else:
                self._tables[name].resume(table)

    def _empty(self, name: str) -> Accumulator:
        return Accumulator(sums_of(name, valued=self._valued), self._more(name))

    def _more(self, name: str) -> tuple[str, ...]:
        return more_of(name, grouped=self._grouping is not None, order=self._reading.order)

    def _add_moves(self, moves: Moves, n_states: int) -> None:
        """Add moves under bucket, state, next, dwell bin and busy, and under what came before."""
        if moves.group is not None:
            more, dwell, cut = self._in_period(moves, moves.dwell)
            next_code = np.where(cut, np.int32(OPEN), moves.next_code)
            moves = replace(moves, dwell=dwell, next_code=next_code, group=more["group"])
        self._moves.add(moves, n_states)
        self._contexts.add(moves, n_states)

    def _add_ends(self, ends: Ends) -> None:
        """Add journeys under bucket, entry state, outcome, elapsed bin and sure.

        The steps and the value of a journey cut at the end of a period are not known there: they are left at 0.
        """
        more, elapsed, cut = self._in_period(ends, ends.elapsed)
        outcome, steps = _unless(cut, ends.outcome, OPEN), _unless(cut, ends.steps, 0)
        bins = bin_of(elapsed, self._elapsed_edges)
        key = pack(ends.bucket, ends.state, outcome, bins, ends.sure)
        value = {} if ends.value is None else {"value": _unless(cut, ends.value, 0)}
        self._tables["journeys"].add(
            key, {"steps": steps.astype(np.int32), "elapsed": elapsed, **value}, _journeys, more
        )
        if ends.touched is not None:
            self._add_touches(ends, ends.touched, bins, np.flatnonzero(~cut), more)

    def _add_touches(self, ends: Ends, touched: NDArray[np.uint64], bins: IntArray, kept: IntArray, more: More) -> None:
        """Add what the kept journeys have touched, one row per touchpoint or one for none, and the sets of them.

        What a journey cut at the end of a period has touched until then is not known: it is not kept.
        """
        touched, more = touched[kept], {name: part[kept] for name, part in more.items()}
        bucket, outcome, bins, sure = ends.bucket[kept], ends.outcome[kept], bins[kept], ends.sure[kept]
        value = {} if ends.value is None else {"value": ends.value[kept]}
        # One bit for each number that a touchpoint has, the lowest one for none at all.
        bits = (touched << np.uint64(1)) | (touched == 0)
        matrix = np.unpackbits(bits.astype("<u8").view(np.uint8).reshape(-1, 8), axis=1, bitorder="little")
        row, number = np.nonzero(matrix)
        columns: dict[str, NDArray[Any]] = {
            name: (of[kept][row] == number) & (number > 0)
            for name, of in (("first", ends.first_touch), ("last", ends.last_touch))
            if of is not None
        }
        self._tables["touches"].add(
            pack(bucket[row], number, outcome[row], bins[row], sure[row]),
            columns | {name: part[row] for name, part in value.items()},
            _touches,
            {name: part[row] for name, part in more.items()}
            | {"distinct": matrix[:, 1:].sum(axis=1, dtype=np.int64)[row]},
        )
        if touched.max(initial=0) >> np.uint64(MOST_IN_SETS):
            # Too many touchpoints for sets of them: there will be none.
            self._sets = False
            self._tables["touch_sets"] = self._empty("touch_sets")
        if self._sets:
            key = pack(bucket, np.zeros(len(kept), np.int64), outcome, bins, sure)
            sets = {**more, "set": touched.astype(np.int64)}
            self._tables["touch_sets"].add(key, {"n": np.ones(len(kept), np.int64), **value}, _touch_sets, sets)

    def _add_entries(self, entries: Entries) -> None:
        more, _, _ = self._in_period(entries, np.zeros(len(entries.bucket), np.int64))
        if not more:
            self._tables["entries"].add(*_counted(entries))
            return
        key = pack(entries.bucket, entries.state, flag=entries.sure)
        self._tables["entries"].add(key, {"n": np.ones(len(key), np.int64)}, None, more)

    def _add_gaps(self, gaps: Gaps) -> None:
        """Add absences under bucket, how the journey before ended, bin of the time away and whether over."""
        more, away, cut = self._in_period(gaps, gaps.away)
        back = np.full(len(away), gaps.back) & ~cut
        key = pack(gaps.bucket, gaps.outcome, bins=bin_of(away, self._elapsed_edges), flag=back)
        if self._grouping is not None and cut.any():
            # Silent for less than the silence when the period ended: nothing had lapsed in it.
            kept = ~(cut & (gaps.outcome == LAPSED) & (away < self._grouping.silence_us))
            key, away, more = key[kept], away[kept], {name: part[kept] for name, part in more.items()}
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


def _counted(entries: Entries) -> tuple[IntArray, Columns]:
    """Return the keys of entries and how many there are of each."""
    first, width = int(entries.bucket.min(initial=N_BUCKETS)), int(entries.state.max(initial=0)) + 1
    place = ((entries.bucket.astype(np.int64) - first) * width + entries.state) * 2 + entries.sure
    if place.max(initial=0) > len(place):
        at, n = np.unique(place, return_counts=True)
    else:
        # Fewer places than entries: counting needs no sort.
        count = np.bincount(place)
        at = np.flatnonzero(count)
        n = count[at]
    above = at // 2
    return pack(above // width + first, above % width, flag=at % 2), {"n": n.astype(np.int64, copy=False)}


def _unless(cut: BoolArray, values: NDArray[Any], other: int) -> NDArray[Any]:
    """Return the values, another where cut."""
    return np.where(cut, values.dtype.type(other), values) if cut.any() else values


def _gaps(columns: Columns) -> Columns:
    """Return what single absences add: themselves and their length."""
    return {"n": np.ones(len(columns["away"]), np.int64), **limbs(columns["away"], "away")}


def _journeys(columns: Columns) -> Columns:
    """Return what single journeys add: themselves, their steps and steps squared, their elapsed time, their value."""
    steps = columns["steps"].astype(np.int64)
    counts = {"n": np.ones(len(steps), np.int64), "steps": steps, "steps_squared": steps**2}
    return {**counts, **limbs(columns["elapsed"], "elapsed"), **_value(columns)}


def _touches(columns: Columns) -> Columns:
    """Return what single touches add: themselves, whether they are the first or the last, the journey's value."""
    counts = {"n": np.ones(len(columns["first"]), np.int64)}
    counts |= {name: columns[name].astype(np.int64) for name in ("first", "last")}
    return {**counts, **_value(columns)}


def _touch_sets(columns: Columns) -> Columns:
    """Return what single journeys add under the set of what they have touched."""
    return {"n": columns["n"], **_value(columns)}


def _value(columns: Columns) -> Columns:
    return limbs(columns["value"], "value") if "value" in columns else {}
