"""Blocks of rows in, sums out: sorts a block by customer, takes out what the rules leave out, counts the rest."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.findings import Findings
from journeys.intake.identity import bucket_of_major
from journeys.intake.rows import Rows
from journeys.kernels.bins import bin_of
from journeys.kernels.counting import close_log, count_rows
from journeys.kernels.records import FIRST_OUTCOME, Carried, Counted, Ends, Entries, Moves, Reading
from journeys.tally.accumulate import Accumulator, limbs
from journeys.tally.keys import MOST_CODES, pack
from journeys.tally.tally import CUSTOMER_SUMS, N_BUCKETS, SUMS

Ints = NDArray[np.int64]


class OutOfOrderError(Exception):
    """A customer's rows came out of order across blocks: the log has to be sorted first."""


class StateCodes:
    """Codes of states in order of appearance, after the codes that the rules fix."""

    def __init__(self, outcomes: tuple[str, ...]) -> None:
        self.names: list[str] = ["lapsed", "open", *outcomes]
        self._code = {name: code for code, name in enumerate(self.names)}
        self._of_event = np.empty(0, np.int32)

    def of_events(self, targets: list[str | None]) -> NDArray[np.int32]:
        """Return the code of each raw event, given the name it is mapped to (None: dropped, code -1)."""
        if len(targets) > len(self._of_event):
            new = [self._add(name) for name in targets[len(self._of_event) :]]
            self._of_event = np.concatenate([self._of_event, np.array(new, np.int32)])
        return self._of_event

    def _add(self, name: str | None) -> int:
        if name is None:
            return -1
        if name not in self._code:
            if len(self.names) >= MOST_CODES:
                msg = (
                    f"more than {MOST_CODES:,} states in column of events; wanted names of what people do: "
                    "map ids or addresses to a few names with `states`"
                )
                raise LogError(msg)
            self._code[name] = len(self.names)
            self.names.append(name)
        return self._code[name]


class Sums:
    """The tables while they grow."""

    def __init__(self, dwell_edges: Ints | None, elapsed_edges: Ints | None) -> None:
        self._dwell_edges, self._elapsed_edges = dwell_edges, elapsed_edges
        self.tables = {name: Accumulator(names) for name, names in SUMS.items()}
        self.customers = {name: np.zeros(N_BUCKETS, np.int64) for name in (*CUSTOMER_SUMS, "largest_events")}

    def add(self, counted: Counted) -> None:
        """Add what a block of rows gave."""
        for moves in counted.moves:
            self.add_moves(moves)
        for ends in counted.ends:
            self.add_ends(ends)
        if counted.entries is not None:
            self._add_entries(counted.entries)

    def add_moves(self, moves: Moves) -> None:
        """Add moves under bucket, state, next, dwell bin and busy."""
        key = pack(
            bucket_of_major(moves.key),
            moves.state,
            moves.next_code,
            bin_of(moves.dwell, self._dwell_edges),
            moves.busy,
        )
        self.tables["moves"].add(key, {"n": np.ones(len(key), np.int64), **limbs(moves.dwell, "dwell")})

    def add_ends(self, ends: Ends) -> None:
        """Add journeys under bucket, entry state, outcome, elapsed bin and sure."""
        key = pack(
            bucket_of_major(ends.key),
            ends.state,
            ends.outcome,
            bin_of(ends.elapsed, self._elapsed_edges),
            ends.sure,
        )
        self.tables["journeys"].add(
            key,
            {
                "n": np.ones(len(key), np.int64),
                "steps": ends.steps,
                "steps_squared": ends.steps**2,
                **limbs(ends.elapsed, "elapsed"),
            },
        )

    def _add_entries(self, entries: Entries) -> None:
        key = pack(bucket_of_major(entries.key), entries.state, flag=entries.sure)
        self.tables["entries"].add(key, {"n": np.ones(len(key), np.int64)})

    def add_customers(self, carried: Carried) -> None:
        """Add one record per customer, at the end of the log."""
        held = carried.take(carried.n_events > 0)
        bucket = bucket_of_major(held.key)
        j, x = held.decided, held.converted
        for name, values in zip(CUSTOMER_SUMS, (np.ones_like(j), j, j * j, j * x, x, x * x), strict=True):
            np.add.at(self.customers[name], bucket, values)
        np.maximum.at(self.customers["largest_events"], bucket, held.n_events)


class Counter:
    """Counts blocks of rows of the same customers one after another.

    Parameters
    ----------
    reading : Reading
        The rules as numbers.
    codes : StateCodes
        Shared by all counters of a pass.
    sums : Sums
        Where everything is added.
    findings : Findings
        Where rows left out are counted.
    columns : tuple of two str
        Names of the time and event columns, for the findings.
    drop_duplicates, stop_at_outcome : bool
        `duplicates="drop"`, `after_outcome="stop"`.
    """

    def __init__(
        self,
        reading: Reading,
        codes: StateCodes,
        sums: Sums,
        findings: Findings,
        *,
        columns: tuple[str, str],
        drop_duplicates: bool,
        stop_at_outcome: bool,
    ) -> None:
        self._reading, self._codes, self._sums, self._findings = reading, codes, sums, findings
        self._columns = columns
        self._drop_duplicates, self._stop_at_outcome = drop_duplicates, stop_at_outcome
        self._carried = Carried.none()

    def add(self, rows: Rows, targets: list[str | None]) -> None:
        """Count a block of rows.

        Parameters
        ----------
        rows : Rows
            In input order.
        targets : list of str or None
            Name that each raw event stands for.

        Raises
        ------
        OutOfOrderError
            If a row is older than, or as old as, a row of that customer in an earlier block.
        """
        if not len(rows.key):
            return
        rows = rows.take(_order(rows))
        first = _block_starts(rows.key)
        start = np.flatnonzero(first)
        at = self._carried.find(rows.key[start])
        seen = at >= 0
        if seen.any() and (rows.time[start[seen]] <= self._carried.time[at[seen]]).any():
            raise OutOfOrderError
        rows = self._without_duplicates(rows, first)
        code = self._codes.of_events(targets)[rows.event]
        whole = rows
        rows, code = self._without_ended(rows, code)
        if not len(rows.key):
            return
        counted, latest, at = count_rows(rows.key, rows.time, code, self._carried, self._reading)
        if self._stop_at_outcome:
            latest = self._stopped(latest, whole)
        self._sums.add(counted)
        self._findings.add("repeated_outcome", self._columns[1], rows.row[counted.repeated])
        self._findings.add("outcome_without_states", self._columns[1], rows.row[counted.bare])
        self._findings.add("began_after_outcome", self._columns[1], rows.row[counted.again])
        self._findings.add("first_visit_of_unsure_journey", self._columns[0], counted.unsure_visits)
        self._carried = self._carried.updated(latest, at)

    def close(self) -> None:
        """Close the log: running journeys lapse or stay open, customers are added up."""
        moves, ends, unsure_visits, carried = close_log(self._carried, self._reading)
        self._sums.add_moves(moves)
        self._sums.add_ends(ends)
        self._findings.add("first_visit_of_unsure_journey", self._columns[0], unsure_visits)
        self._sums.add_customers(carried)
        self._carried = Carried.none()

    def _without_duplicates(self, rows: Rows, first: NDArray[np.bool_]) -> Rows:
        """Count exact duplicates and ties; drop the duplicates if the rules say so."""
        tied = np.zeros(len(first), bool)
        tied[1:] = ~first[1:] & (rows.time[1:] == rows.time[:-1])
        if not tied.any():
            return rows
        group = tied.copy()
        group[:-1] |= tied[1:]
        index = np.flatnonzero(group)
        some = rows.take(index)
        columns: list[NDArray[Any]] = [some.key, some.time, some.event]
        if some.sequence is not None:
            columns.append(some.sequence)
        order = np.lexsort((some.row, *columns[::-1]))
        same = np.ones(len(order), bool)
        same[0] = False
        for column in columns:
            same[1:] &= column[order][1:] == column[order][:-1]
        again = index[order[same]]
        self._findings.add("duplicate", self._columns[1], rows.row[again])
        self._findings.add("tied_times", self._columns[0], int(tied.sum()) - len(again))
        if not self._drop_duplicates or not len(again):
            return rows
        keep = np.ones(len(first), bool)
        keep[again] = False
        return rows.take(keep)

    def _without_ended(self, rows: Rows, code: NDArray[np.int32]) -> tuple[Rows, NDArray[np.int32]]:
        """Leave out the rows of customers whose story was over before the log, or ended earlier in it."""
        if not self._stop_at_outcome and rows.ended is None:
            return rows, code
        start = np.flatnonzero(_block_starts(rows.key))
        size = np.diff(np.append(start, len(rows.key)))
        at = self._carried.find(rows.key[start])
        seen = at >= 0
        over = np.zeros(len(start), bool)
        before_log = np.zeros(len(start), bool) if rows.ended is None else ~seen & rows.ended[start]
        over[seen] = self._carried.story_over[at[seen]]
        before_log[seen] = over[seen] & (self._carried.n_events[at[seen]] == 0)
        outcomes_before = np.zeros(len(code), np.int64)
        if self._stop_at_outcome:
            outcome = (code < self._reading.first_state).astype(np.int64)
            outcomes_before = np.cumsum(outcome) - outcome
            outcomes_before -= np.repeat(outcomes_before[start], size)
        left_before = np.repeat(before_log, size)
        left_after = ~left_before & (np.repeat(over, size) | (outcomes_before > 0))
        self._findings.add("ended_before", self._columns[1], rows.row[left_before])
        self._findings.add("after_outcome", self._columns[1], rows.row[left_after])
        self._remember_left_out(rows, start + size - 1, at, over, before_log & ~seen)
        keep = ~(left_before | left_after)
        return rows.take(keep), code[keep]

    def _stopped(self, latest: Carried, rows: Rows) -> Carried:
        """Mark stories that an outcome has ended, as of the customer's last row even if it was left out."""
        over = latest.code < self._reading.first_state
        last = np.searchsorted(rows.key, latest.key, side="right") - 1
        return replace(latest, story_over=over, time=np.where(over, rows.time[last], latest.time))

    def _remember_left_out(
        self, rows: Rows, last: Ints, at: Ints, over: NDArray[np.bool_], ended_before: NDArray[np.bool_]
    ) -> None:
        """Keep the time of the latest row of customers whose rows are all left out, to notice disorder."""
        if over.any():
            time = self._carried.time.copy()
            time[at[over]] = rows.time[last[over]]
            self._carried = replace(self._carried, time=time)
        if ended_before.any():
            key, time = rows.key[last[ended_before]], rows.time[last[ended_before]]
            blank = np.zeros(len(key), np.int64)
            code = np.full(len(key), FIRST_OUTCOME, np.int32)
            unsure, yes = np.zeros(len(key), bool), np.ones(len(key), bool)
            new = Carried(key, time, code, blank, blank, code, blank, unsure, blank, blank, blank, yes)
            self._carried = self._carried.updated(new, np.full(len(key), -1))


def _block_starts(key: NDArray[np.uint64]) -> NDArray[np.bool_]:
    first = np.ones(len(key), bool)
    first[1:] = key[1:] != key[:-1]
    return first


def _order(rows: Rows) -> Ints:
    """Return the order by customer, time, sequence, input row; a plain sort where rows come in time order."""
    n = len(rows.key)
    bits = np.uint64(max(n - 1, 1).bit_length())
    # Sorting (leading bits of the customer's key, position) in one word is far faster than an indirect sort.
    packed = (rows.key >> bits << bits) | np.arange(n, dtype=np.uint64)
    packed.sort()
    order = (packed & ((np.uint64(1) << bits) - np.uint64(1))).astype(np.int64)
    key = rows.key[order]
    if (key[1:] < key[:-1]).any():
        # Two customers share the leading bits: sort by the whole key.
        order = np.argsort(rows.key, kind="stable")
        key = rows.key[order]
    time = rows.time[order]
    same = key[1:] == key[:-1]
    wrong = same & (time[1:] < time[:-1])
    if rows.sequence is not None:
        sequence = rows.sequence[order]
        wrong |= same & (time[1:] == time[:-1]) & (sequence[1:] < sequence[:-1])
    if not wrong.any():
        return order
    tie = rows.row if rows.sequence is None else rows.sequence
    return np.lexsort((rows.row, tie, rows.time, rows.key))
