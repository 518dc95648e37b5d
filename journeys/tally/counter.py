"""Blocks of rows in, sums out: takes out of a block what the rules leave out, counts the rest."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.findings import Findings
from journeys.intake.identity import FIRST_KEYS, bucket_of_major
from journeys.intake.rows import Rows
from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.compiled import Room, count_in_order, gathered
from journeys.kernels.counting import close_log, count_rows
from journeys.kernels.held import Held, apart
from journeys.kernels.openers import before_opener
from journeys.kernels.records import FIRST_OUTCOME, Carried, Counted, Reading
from journeys.kernels.stories import Block
from journeys.tally.order import CHUNK_ROWS, Ordered, chunks
from journeys.tally.sums import Sums

Codes = NDArray[np.int32]


class OutOfOrderError(Exception):
    """A customer's rows came out of order across blocks: the log has to be sorted first."""


@dataclass(frozen=True)
class LeaveOut:
    """Which rows a counter leaves out, and the columns its findings name.

    Attributes
    ----------
    time, event : str
        Names of the columns.
    duplicates, after_outcome : bool
        `duplicates="drop"`, `after_outcome="stop"`.
    opens : ndarray of int32 or None
        Codes of the states that may open a journey; None: any.
    value : str or None
        Name of the column of values.
    """

    time: str
    event: str
    duplicates: bool
    after_outcome: bool
    opens: NDArray[np.int32] | None = None
    value: str | None = None


class Counter:
    """Counts blocks of rows of the same customers one after another.

    Parameters
    ----------
    reading : Reading
        The rules as numbers.
    leave_out : LeaveOut
        The rules on rows left out.
    sums : Sums
        Where everything is added.
    findings : Findings
        Where rows left out are counted.
    compiled : bool
        Count in a compiled loop, where the rules leave out no rows in the middle of stories.
    """

    def __init__(
        self, reading: Reading, leave_out: LeaveOut, sums: Sums, findings: Findings, *, compiled: bool = False
    ) -> None:
        self._reading, self._leave_out, self._sums, self._findings = reading, leave_out, sums, findings
        plain = reading.grouping is None and reading.stages is None and not (reading.touches or reading.values)
        self._compiled = compiled and plain and not leave_out.after_outcome and leave_out.opens is None
        self._also = [
            *(["visit_start"] if reading.merge_repeats else []),
            *(["group"] if reading.grouping is not None else []),
            *(["seen"] if leave_out.opens is not None else []),
            *(["stage", "stage_start"] if reading.stages is not None else []),
            *(["touched", "first_touch", "last_touch"] if reading.touches else []),
            *(["value", "total_value"] if reading.values else []),
        ]
        self._carried, self._held, self._room = self._blank(0), Held(), Room.of(0)
        self._n_states = 0
        self._touch_of_code: NDArray[np.int8] | None = None

    def add(
        self,
        rows: Rows,
        order: IntArray,
        code_of_event: Codes,
        n_states: int,
        touch_of_code: NDArray[np.int8] | None = None,
    ) -> None:
        """Count a block of rows.

        Parameters
        ----------
        rows : Rows
            In input order.
        order : ndarray of int64
            Positions of the rows to count, by customer and input row.
        code_of_event : ndarray of int32
            Code of each raw event.
        n_states : int
            States known by now.
        touch_of_code : ndarray of int8, optional
            For each code the number of the touchpoint, 0 where it is none.

        Raises
        ------
        OutOfOrderError
            If a row is older than, or as old as, a row of that customer in an earlier block.
        LogError
            If the values of a customer's events add up to more than can be held.
        """
        self._n_states, self._touch_of_code = n_states, touch_of_code
        if self._compiled:
            for part in chunks(rows.key, order):
                self._add_compiled(rows, part, code_of_event)
            self._held.settle()
            return
        added = [self._add(rows, part, code_of_event) for part in chunks(rows.key, order)]
        self._carried.insert([records for records in added if records is not None])

    def _add(self, block: Rows, order: IntArray, code_of_event: Codes) -> Carried | None:
        """Count one chunk; put its customers' new records in their place and return those of new customers."""
        rows = Ordered.of(block, order)
        start = rows.starts()
        at = self._carried.find(rows.key[start])
        held = at >= 0
        if (rows.time[start[held]] <= self._carried.latest[at[held]]).any():
            raise OutOfOrderError
        kept = self._without_duplicates(rows, start)
        code = code_of_event[kept.event]
        if self._leave_out.after_outcome or kept.rows.ended is not None:
            if kept is not rows:
                start = kept.starts()
            keep = self._before_end(kept, code, start, at)
            kept, code = kept.take(keep), code[keep]
        if self._leave_out.opens is not None and len(kept):
            keep = self._from_opener(kept, code)
            self._note_seen(rows, kept.take(keep))
            kept, code = kept.take(keep), code[keep]
        if not len(kept):
            return None
        if kept is not rows:
            start = kept.starts()
            at = self._carried.find(kept.key[start])
        latest = self._count(kept, code, start, at)
        if latest.seen is not None:
            latest.seen = rows.time[np.searchsorted(rows.key, latest.key, side="right") - 1]
        if self._leave_out.after_outcome:
            # The latest row of any kind, even one left out, is what later rows must not precede.
            last = np.searchsorted(rows.key, latest.key, side="right") - 1
            latest.story_over = latest.code < self._reading.first_state
            latest.time = np.where(latest.story_over, rows.time[last], latest.time)
        return self._carried.put(latest, at)

    def _add_compiled(self, block: Rows, order: IntArray, code_of_event: Codes) -> None:
        """Do the same in one compiled loop over the rows."""
        if len(order) > self._room.n_rows:
            self._room = Room.of(len(order))
        found = gathered(order, block.key, block.time, block.event, code_of_event, self._room)
        if found is None:
            rows = Ordered.of(block, order)
            rows = self._without_duplicates(rows, rows.starts())
            order, found = rows.order, (rows.key, rows.time, code_of_event[rows.event])
        cells = self._sums.cells(len(order), self._n_states)
        result = count_in_order(*found, self._held, FIRST_KEYS, self._reading, cells, self._room)
        if result is None:
            raise OutOfOrderError
        counted, gained = result
        self._sums.gained(gained)
        self._note(counted, block, order)

    def close(self) -> None:
        """Close the log: running journeys lapse or stay open, customers are added up."""
        whole = self.carried
        for begin in range(0, len(whole.key), CHUNK_ROWS):
            carried = apart(whole.take(slice(begin, begin + CHUNK_ROWS)))
            bucket = bucket_of_major(carried.key).astype(np.uint8)
            closed = close_log(carried, bucket, self._reading)
            self._sums.close(closed, self._n_states)
            self._findings.add("first_visit_of_unsure_journey", self._leave_out.time, closed.unsure_visits)
            self._sums.add_customers(carried, bucket)
        self._carried, self._held = self._blank(0), Held()

    @property
    def carried(self) -> Carried:
        """One record per customer seen."""
        return self._held.carried(self._also) if self._compiled else self._carried

    def resume(self, carried: Carried | None, n_states: int) -> None:
        """Begin with the records of an earlier count; `n_states` states are known by now.

        Parameters
        ----------
        carried : Carried or None
            Changed in place; None: nobody was seen.
        n_states : int

        Raises
        ------
        ValueError
            If the records have other columns than these rules ask for.
        """
        blank = self._blank(0)
        if carried is not None and carried.names != blank.names:
            msg = f"carried: got the columns {carried.names}; wanted {blank.names}"
            raise ValueError(msg)
        carried = blank if carried is None else carried
        self._carried, self._held = (blank, Held.of(carried)) if self._compiled else (carried, Held())
        self._n_states = n_states

    def _count(self, rows: Ordered, code: Codes, start: IntArray, at: IntArray) -> Carried:
        """Add up a block and return its customers' new records."""
        try:
            counted, latest = count_rows(self._block(rows, code, start, at), self._reading)
        except OverflowError:
            msg = (
                f"column {self._leave_out.value!r}: the values of one customer add up to more than 9,000,000,000,000; "
                "wanted amounts of money: write them in a larger unit, or repair them where the log is written"
            )
            raise LogError(msg) from None
        self._note(counted, rows.rows, rows.order)
        return latest

    def _block(self, rows: Ordered, code: Codes, start: IntArray, at: IntArray) -> Block:
        """Return rows with what is carried of their customers."""
        key, held = rows.key[start], at >= 0
        # The records of customers never seen are never looked at: any will do.
        prior = self._carried.take(np.maximum(at, 0)) if held.any() else self._blank(len(start))
        by = None if rows.rows.by is None else rows.rows.by[rows.order]
        value = None if rows.rows.value is None else rows.rows.value[rows.order]
        touch = None if self._touch_of_code is None else self._touch_of_code[code]
        return Block(rows.time, code, start, key, bucket_of_major(key).astype(np.uint8), prior, held, by, touch, value)

    def _from_opener(self, rows: Ordered, code: Codes) -> BoolArray:
        """Tell which rows do not come before the first state that may open their journey; count those that do."""
        start = rows.starts()
        block = self._block(rows, code, start, self._carried.find(rows.key[start]))
        opens = self._leave_out.opens
        left = before_opener(block, np.zeros(0, np.int32) if opens is None else opens, self._reading)
        self._findings.add("before_opener", self._leave_out.event, rows.numbers(left))
        return ~left

    def _note_seen(self, rows: Ordered, kept: Ordered) -> None:
        """Note the latest row of customers of whom none is counted, which later rows must not precede."""
        start = rows.starts()
        key, last = rows.key[start], rows.time[np.append(start[1:], len(rows)) - 1]
        none = ~np.isin(key, kept.key)
        at = self._carried.find(key)
        if self._carried.seen is not None:
            self._carried.seen[at[none & (at >= 0)]] = last[none & (at >= 0)]
        new = none & (at < 0)
        if new.any():
            records = self._blank(int(new.sum()))
            records.key, records.seen = key[new], last[new]
            # Nobody yet, as far as journeys go.
            records.code[:] = 0
            self._carried.insert([records])

    def _note(self, counted: Counted, rows: Rows, order: IntArray) -> None:
        """Add up what was counted, and what was found on the way."""
        self._sums.add(counted, self._n_states)
        names, event = self._findings, self._leave_out.event
        names.add("repeated_outcome", event, rows.row[order[counted.repeated]])
        names.add("outcome_without_states", event, rows.row[order[counted.bare]])
        names.add("began_after_outcome", event, rows.row[order[counted.again]])
        names.add("first_visit_of_unsure_journey", self._leave_out.time, counted.unsure_visits)

    def _without_duplicates(self, rows: Ordered, start: IntArray) -> Ordered:
        """Count exact duplicates and ties; drop the duplicates if the rules say so."""
        tied = np.zeros(len(rows), bool)
        np.equal(rows.time[1:], rows.time[:-1], out=tied[1:])
        tied[start] = False
        if not tied.any():
            return rows
        group = tied.copy()
        group[:-1] |= tied[1:]
        index = np.flatnonzero(group)
        some = rows.take(group)
        columns: list[NDArray[Any]] = [some.key, some.time, some.event]
        columns += [column[some.order] for column in (rows.rows.sequence, rows.rows.value) if column is not None]
        number = rows.numbers(group)
        order = np.lexsort((number, *columns[::-1]))
        same = np.ones(len(order), bool)
        same[0] = False
        for column in columns:
            same[1:] &= column[order][1:] == column[order][:-1]
        again = order[same]
        self._findings.add("duplicate", self._leave_out.event, number[again])
        self._findings.add("tied_times", self._leave_out.time, int(tied.sum()) - len(again))
        if not self._leave_out.duplicates or not len(again):
            return rows
        keep = np.ones(len(rows), bool)
        keep[index[again]] = False
        return rows.take(keep)

    def _before_end(self, rows: Ordered, code: Codes, start: IntArray, at: IntArray) -> BoolArray:
        """Tell which rows come before the end of their customer's story, here or before the log."""
        size = np.diff(start, append=len(rows))
        seen = at >= 0
        over = np.zeros(len(start), bool)
        ended = rows.rows.ended
        before_log = np.zeros(len(start), bool) if ended is None else ~seen & ended[rows.order[start]]
        over[seen] = self._carried.story_over[at[seen]]
        before_log[seen] = over[seen] & (self._carried.n_events[at[seen]] == 0)
        outcomes_before = np.zeros(len(code), np.int64)
        if self._leave_out.after_outcome:
            outcome = (code < self._reading.first_state).astype(np.int64)
            outcomes_before = np.cumsum(outcome) - outcome
            outcomes_before -= np.repeat(outcomes_before[start], size)
        left_before = np.repeat(before_log, size)
        left_after = ~left_before & (np.repeat(over, size) | (outcomes_before > 0))
        self._findings.add("ended_before", self._leave_out.event, rows.numbers(left_before))
        self._findings.add("after_outcome", self._leave_out.event, rows.numbers(left_after))
        last = start + size - 1
        self._carried.latest[at[over]] = rows.time[last[over]]
        new = before_log & ~seen
        if new.any():
            records = self._blank(int(new.sum()))
            records.key = rows.key[last[new]]
            records.latest[:] = rows.time[last[new]]
            records.story_over[:] = True
            self._carried.insert([records])
        return ~(left_before | left_after)

    def _blank(self, n: int) -> Carried:
        """Return `n` records of customers who have no journey."""
        records = Carried.zeros(n, self._also)
        records.code[:] = records.first_code[:] = FIRST_OUTCOME
        return records
