"""Which journey and which visit each row stands in: rows in order, compared with the one before."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray as Bools
from journeys.kernels.arrays import IntArray as Ints
from journeys.kernels.grouping import NEW, Grouping
from journeys.kernels.histories import along_visits, nothing_known
from journeys.kernels.records import LAPSED, Carried, Reading

Codes = NDArray[np.int32]
Buckets = NDArray[np.uint8]


@dataclass(frozen=True)
class Block:
    """Rows in order, by customer.

    Attributes
    ----------
    time, code : ndarray, shape (n_rows,)
        Microseconds and code, sorted by customer and in order within each.
    start : ndarray of int64, shape (n_customers,)
        Position of each customer's first row.
    key, bucket : ndarray, shape (n_customers,)
        The customers, increasing, and their buckets.
    prior : Carried
        What was carried of each customer; anything where `held` is False.
    held : ndarray of bool, shape (n_customers,)
        Whether the customer was seen before.
    by : ndarray of int32, shape (n_rows,), or None
        Codes of the values in the group columns.
    touch : ndarray of int8, shape (n_rows,), or None
        Numbers of the touchpoints, from 1 to 63, 0 for rows that are none.
    value : ndarray of int64, shape (n_rows,), or None
        What the events are worth.
    """

    time: Ints
    code: Codes
    start: Ints
    key: NDArray[np.uint64]
    bucket: Buckets
    prior: Carried
    held: Bools
    by: Codes | None = None
    touch: NDArray[np.int8] | None = None
    value: Ints | None = None

    @property
    def end(self) -> Ints:
        """Position after each customer's last row."""
        return np.append(self.start[1:], len(self.time))


@dataclass(frozen=True)
class Marks:
    """What each row is; arrays over rows."""

    owner: Codes
    prev_time: Ints
    prev_code: Codes
    silent: Bools
    begins: Bools
    goes_on: Bools
    moved: Bools
    visit: Bools
    repeated: Ints


def marks_of(block: Block, reading: Reading) -> Marks:
    """Compare each row with the one before it, or with what was carried."""
    time, code, start = block.time, block.code, block.start
    n = len(time)
    first = np.zeros(n, np.int32)
    first[start] = 1
    owner = np.cumsum(first, dtype=np.int32)
    owner -= 1
    prev_time, prev_code = np.empty_like(time), np.empty_like(code)
    prev_time[1:], prev_code[1:] = time[:-1], code[:-1]
    prev_time[start] = block.prior.time
    # Code 0 stands for nobody: smaller than any outcome's.
    prev_code[start] = np.where(block.held, block.prior.code, 0)
    goes_on = prev_code >= reading.first_state
    if reading.silence_us is None:
        silent = np.zeros(n, bool)
    else:
        silent = time - prev_time > reading.silence_us
        silent &= goes_on
        goes_on &= ~silent
    same = prev_code == code
    begins = ~goes_on
    again = np.flatnonzero(same & begins & (code < reading.first_state))
    repeated = again[time[again] - prev_time[again] <= reading.same_outcome_us]
    begins[repeated] = False
    moved = goes_on & ~same if reading.merge_repeats else goes_on
    return Marks(owner, prev_time, prev_code, silent, begins, goes_on, moved, moved | begins, repeated)


@dataclass(frozen=True)
class Story:
    """The journeys that some rows stand in."""

    start: Ints
    first_code: Codes
    sure: Bools
    steps: Ints
    group: Ints | None


class Stories:
    """Finds the journey, and the visit, that a row stands in: begun in this block, or carried."""

    def __init__(self, block: Block, marks: Marks, reading: Reading) -> None:
        self._block, self._marks = block, marks
        self.owner = marks.owner
        self._nth = np.cumsum(marks.begins, dtype=np.int32)
        self.begun = np.flatnonzero(marks.begins)
        self.sure_begun = np.ones(len(self.begun), bool)
        if not reading.complete_history:
            new = marks.prev_code[self.begun] == 0
            if reading.silence_us is not None:
                new &= block.time[self.begun] < reading.log_start_us + reading.silence_us
            self.sure_begun = ~new
        self.group_begun = None if reading.grouping is None else self._groups(reading.grouping)
        # Without merging, each row is a visit of its own.
        self.merging = reading.merge_repeats
        self._visits: Codes | None = None
        if reading.merge_repeats:
            self._visits = np.cumsum(marks.visit, dtype=np.int32)
            self._visit_row = np.maximum.accumulate(np.where(marks.visit, np.arange(len(block.time)), -1))
        self._before = self._histories(reading.order)

    def at(self, row: Ints, owner: Codes, first: Bools | None = None) -> Story:
        """Return the journeys of rows (their positions and owners); where `first`, the one carried."""
        block, prior = self._block, self._block.prior
        if not len(row):
            none = np.zeros(0, np.int64)
            return Story(none, np.zeros(0, np.int32), np.zeros(0, bool), none, none)
        nth = self._nth[row] - 1
        begin = self.begun[nth] if len(self.begun) else np.full(len(row), -1)
        here = (nth >= 0) & (begin >= block.start[owner])
        if first is not None:
            here &= ~first
        steps = self._steps(row, begin, owner, here)
        group = None
        if self.group_begun is not None and prior.group is not None:
            group = np.where(here, self.group_begun[nth] if len(self.begun) else 0, prior.group[owner])
        return Story(
            start=np.where(here, block.time[begin], prior.journey_start[owner]),
            first_code=np.where(here, block.code[begin], prior.first_code[owner]),
            sure=np.where(here, self.sure_begun[nth] if len(self.begun) else False, prior.sure[owner]),
            steps=np.where(first, prior.steps[owner], steps) if first is not None else steps,
            group=group,
        )

    def before(self, row: Ints) -> Story:
        """Return the journeys of the rows just before rows, the carried ones before each customer's first."""
        owner = self._marks.owner[row]
        return self.at(row - 1, owner, first=row == self._block.start[owner])

    def came_by(self, row: Ints, owner: Codes) -> Ints:
        """Return the histories of the visits that rows belong to."""
        if self._visits is None:
            return self._before[row]
        here = self._visit_row[row] >= self._block.start[owner]
        return np.where(here, self._before[self._visit_row[row]], self._block.prior.before[owner])

    def left_by(self, row: Ints) -> Ints:
        """Return the histories of the visits just before rows, which they end."""
        owner = self._marks.owner[row]
        first = row == self._block.start[owner]
        # What came before a customer's first row is not looked at: any row will do.
        return np.where(first, self._block.prior.before[owner], self.came_by(np.where(first, row, row - 1), owner))

    def _histories(self, n_slots: int) -> Ints:
        """Return the history of each visit, at the row that it begins with."""
        marks = self._marks
        visit = np.flatnonzero(marks.visit)
        of_row = np.zeros(len(marks.owner), np.int64)
        of_row[self.begun] = np.where(self.sure_begun, 0, nothing_known(n_slots))
        begun = of_row[visit]
        # The visit before is the one carried for a customer's first visit here, unless a merged one goes on.
        owner = marks.owner[visit]
        first = np.ones(len(visit), bool)
        first[1:] = owner[1:] != owner[:-1]
        carried = np.where(first & self._block.held[owner], self._block.prior.before[owner], -1)
        of_row[visit] = along_visits(marks.prev_code[visit], marks.moved[visit], begun, carried, n_slots)
        return of_row

    def grouped(self, since: Ints, story: Callable[[], Story]) -> tuple[Ints, Ints] | tuple[()]:
        """Return when something began and its journey's group, nothing where journeys are not grouped."""
        group = self.group(story)
        return () if group is None else (since, group)

    def group(self, story: Callable[[], Story]) -> Ints | None:
        """Return the journey's group, None where journeys are not grouped."""
        return None if self.group_begun is None else story().group

    def _groups(self, grouping: Grouping) -> Ints:
        """Return the groups of the journeys begun."""
        rows, marks = self.begun, self._marks
        before = np.where(marks.silent[rows], LAPSED + 1, marks.prev_code[rows] + 1)
        before[marks.prev_code[rows] == 0] = NEW
        by = None if self._block.by is None else self._block.by[rows]
        return grouping.of_journeys(by, before.astype(np.int32), self._block.time[rows])

    def visit_start(self, row: Ints, owner: Codes, first: Bools | None = None) -> Ints:
        """Return when the visits of rows began; where `first`, the one carried."""
        block = self._block
        if self._visits is None:
            return block.time[row]
        begin = self._visit_row[row]
        here = begin >= block.start[owner]
        if first is not None:
            here &= ~first
        return np.where(here, block.time[begin], block.prior.visit_began[owner])

    def dwell(self, row: Ints) -> tuple[Ints, Bools]:
        """Return, for rows that end a visit, the time since it began, and whether its beginning is unknown."""
        owner = self._marks.owner[row]
        first = row == self._block.start[owner]
        before = self.at(row - 1, owner, first)
        started = self.visit_start(row - 1, owner, first)
        return self._block.time[row] - started, (before.steps == 1) & ~before.sure

    def _steps(self, row: Ints, begin: Ints, owner: Codes, here: Bools) -> Ints:
        start = self._block.start[owner]
        if self._visits is None:
            since_begin, since_start = row - begin + 1, row - start + 1
        else:
            visits = self._visits
            since_begin = visits[row] - visits[begin] + 1
            since_start = visits[row] - visits[start] + self._marks.visit[start]
        return np.where(here, since_begin, self._block.prior.steps[owner] + since_start)


def legs_of(block: Block, marks: Marks, story: Stories) -> Ints:
    """Return the first row of each part of a journey that lies in the block: begun there, or gone on with.

    Rows before a customer's first leg are outcomes merged with the one before them.
    """
    first = np.zeros(len(block.time), bool)
    first[block.start] = True
    return np.sort(np.concatenate([story.begun, np.flatnonzero(first & marks.goes_on)]))


def last_legs(block: Block, begin: Ints) -> tuple[Ints, Bools]:
    """Return which leg is each customer's last, and whether there is one."""
    last = np.searchsorted(begin, block.end, side="left") - 1
    mine = last >= 0
    mine[mine] &= begin[last[mine]] >= block.start[mine]
    return last, mine
