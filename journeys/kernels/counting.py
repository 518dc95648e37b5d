"""From rows in order to moves, entries and journeys: array operations, no loop over rows or customers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray as Bools
from journeys.kernels.arrays import IntArray as Ints
from journeys.kernels.records import (
    FIRST_OUTCOME,
    LAPSED,
    OPEN,
    Carried,
    Closed,
    Counted,
    Ends,
    Entries,
    Gaps,
    Moves,
    Reading,
)

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
    """

    time: Ints
    code: Codes
    start: Ints
    key: NDArray[np.uint64]
    bucket: Buckets
    prior: Carried
    held: Bools


@dataclass(frozen=True)
class _Marks:
    """What each row is; arrays over rows."""

    owner: Codes
    prev_time: Ints
    prev_code: Codes
    silent: Bools
    begins: Bools
    moved: Bools
    visit: Bools
    repeated: Ints


def count_rows(block: Block, reading: Reading) -> tuple[Counted, Carried]:
    """Return what rows in order add to the tally, and the customers' new records.

    Parameters
    ----------
    block : Block
        At least one row.
    reading : Reading
        The rules.

    Returns
    -------
    counted : Counted
        Moves, entries and ended journeys.
    latest : Carried
        One record per customer of the block.
    """
    marks = _marks(block, reading)
    story = _Stories(block, marks, reading)
    owner, silence = marks.owner, reading.silence_us or 0
    busy = _busy(block, owner, reading)
    ended = np.flatnonzero(block.code < reading.first_state)
    if len(marks.repeated):
        ended = np.setdiff1d(ended, marks.repeated, assume_unique=True)
    silent = np.flatnonzero(marks.silent)
    before = story.at(silent - 1, owner[silent], first=silent == block.start[owner[silent]])
    now = story.at(ended, owner[ended])
    moved = np.flatnonzero(marks.moved)
    unsure_visits = 0
    lapsed = silent
    if reading.merge_repeats:
        # The first visit of an unsure journey may have begun before the log: its dwell is unknown.
        dwell, unseen = story.dwell(moved)
        moved, dwell, unsure_visits = moved[~unseen], dwell[~unseen], int(unseen.sum())
        dwell_lapsed, unseen = story.dwell(silent)
        lapsed, unsure_visits = silent[~unseen], unsure_visits + int(unseen.sum())
        dwell_lapsed = (dwell_lapsed + marks.prev_time[silent] - block.time[silent] + silence)[~unseen]
    else:
        dwell = block.time[moved] - marks.prev_time[moved]
        dwell_lapsed = np.full(len(silent), silence)
    moves = (
        Moves(block.bucket[owner[moved]], marks.prev_code[moved], block.code[moved], dwell, _of(busy, moved)),
        Moves(
            block.bucket[owner[lapsed]], marks.prev_code[lapsed], np.full(len(lapsed), LAPSED, np.int32),
            dwell_lapsed, _of(busy, lapsed),
        ),
    )  # fmt: skip
    ends = (
        Ends(
            block.bucket[owner[ended]], now.first_code, block.code[ended], now.sure, now.steps,
            block.time[ended] - now.start,
        ),
        Ends(
            block.bucket[owner[silent]], before.first_code, np.full(len(silent), LAPSED, np.int32), before.sure,
            before.steps + 1, marks.prev_time[silent] + silence - before.start,
        ),
    )  # fmt: skip
    begun = story.begun
    back = begun[marks.prev_code[begun] >= FIRST_OUTCOME]
    after = np.where(marks.silent[back], np.int32(LAPSED), marks.prev_code[back])
    counted = Counted(
        moves=moves,
        entries=Entries(block.bucket[owner[begun]], block.code[begun], story.sure_begun),
        ends=ends,
        gaps=Gaps(block.bucket[owner[back]], after, block.time[back] - marks.prev_time[back], back=True),
        repeated=marks.repeated,
        bare=begun[block.code[begun] < reading.first_state],
        again=back[after != LAPSED],
        unsure_visits=unsure_visits,
    )
    n = len(block.start)
    decided = np.bincount(owner[ended], minlength=n) + np.bincount(owner[silent], minlength=n)
    won = owner[ended[block.code[ended] < FIRST_OUTCOME + reading.n_converted]]
    return counted, _latest(block, story, decided, np.bincount(won, minlength=n))


def close_log(carried: Carried, bucket: Buckets, reading: Reading) -> Closed:
    """Return the moves, journeys and absences that the end of the log decides or leaves open.

    Parameters
    ----------
    carried : Carried
        Records after the last row.
    bucket : ndarray of uint8
        The customers' buckets.
    reading : Reading
        The rules; `as_of_us` is the moment of closing.

    Returns
    -------
    Closed
        One lapsed or open stay per running journey (first visits of unsure journeys left out under merging), one
        lapsed or open journey each, and the absence of everyone whose last journey has ended.

    Notes
    -----
    Lapses are counted in `carried.decided`.
    """
    gaps = _absent(carried, bucket, reading)
    running = np.flatnonzero((carried.code >= reading.first_state) & ~carried.story_over)
    held, bucket = carried.take(running), bucket[running]
    if reading.silence_us is None:
        lapsed, until = np.zeros(len(running), bool), np.full(len(running), reading.as_of_us)
    else:
        # A row at as_of itself would have been seen, so an age equal to the silence is decided.
        lapsed = reading.as_of_us - held.time >= reading.silence_us
        until = np.where(lapsed, held.time + reading.silence_us, reading.as_of_us)
    next_code = np.where(lapsed, LAPSED, OPEN).astype(np.int32)
    keep = np.ones(len(running), bool)
    if reading.merge_repeats:
        keep = (held.steps != 1) | held.sure
    moves = Moves(
        bucket[keep], held.code[keep], next_code[keep], (until - held.visit_began)[keep],
        (held.n_events >= reading.busy_after)[keep],
    )  # fmt: skip
    ends = Ends(
        bucket, held.first_code, next_code, held.sure, held.steps.astype(np.int64) + lapsed,
        until - held.journey_start,
    )  # fmt: skip
    carried.decided[running] += lapsed
    return Closed(moves, ends, gaps, int((~keep).sum()))


def _absent(carried: Carried, bucket: Buckets, reading: Reading) -> Gaps:
    """Return the absences of customers whose last journey has ended and who have not come back."""
    away = reading.as_of_us - carried.time
    ended = carried.code < reading.first_state
    if reading.silence_us is not None:
        ended |= away >= reading.silence_us
    gone = np.flatnonzero(ended & ~carried.story_over)
    code = carried.code[gone]
    after = np.where(code < reading.first_state, code, np.int32(LAPSED))
    return Gaps(bucket[gone], after, away[gone], back=False)


def _marks(block: Block, reading: Reading) -> _Marks:
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
    return _Marks(owner, prev_time, prev_code, silent, begins, moved, moved | begins, repeated)


@dataclass(frozen=True)
class _Story:
    """The journeys that some rows stand in."""

    start: Ints
    first_code: Codes
    sure: Bools
    steps: Ints


class _Stories:
    """Finds the journey, and the visit, that a row stands in: begun in this block, or carried."""

    def __init__(self, block: Block, marks: _Marks, reading: Reading) -> None:
        self._block, self._marks = block, marks
        self._nth = np.cumsum(marks.begins, dtype=np.int32)
        self.begun = np.flatnonzero(marks.begins)
        self.sure_begun = np.ones(len(self.begun), bool)
        if not reading.complete_history:
            new = marks.prev_code[self.begun] == 0
            if reading.silence_us is not None:
                new &= block.time[self.begun] < reading.log_start_us + reading.silence_us
            self.sure_begun = ~new
        # Without merging, each row is a visit of its own.
        self.merging = reading.merge_repeats
        self._visits: Codes | None = None
        if reading.merge_repeats:
            self._visits = np.cumsum(marks.visit, dtype=np.int32)
            self._visit_row = np.maximum.accumulate(np.where(marks.visit, np.arange(len(block.time)), -1))

    def at(self, row: Ints, owner: Codes, first: Bools | None = None) -> _Story:
        """Return the journeys of rows (their positions and owners); where `first`, the one carried."""
        block, prior = self._block, self._block.prior
        if not len(row):
            none = np.zeros(0, np.int64)
            return _Story(none, np.zeros(0, np.int32), np.zeros(0, bool), none)
        nth = self._nth[row] - 1
        begin = self.begun[nth] if len(self.begun) else np.full(len(row), -1)
        here = (nth >= 0) & (begin >= block.start[owner])
        if first is not None:
            here &= ~first
        steps = self._steps(row, begin, owner, here)
        return _Story(
            start=np.where(here, block.time[begin], prior.journey_start[owner]),
            first_code=np.where(here, block.code[begin], prior.first_code[owner]),
            sure=np.where(here, self.sure_begun[nth] if len(self.begun) else False, prior.sure[owner]),
            steps=np.where(first, prior.steps[owner], steps) if first is not None else steps,
        )

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


def _busy(block: Block, owner: Codes, reading: Reading) -> Bools | None:
    """Tell which rows come after the customer's first `busy_after` rows; None if none does."""
    size = np.diff(block.start, append=len(block.time))
    before = np.where(block.held, block.prior.n_events, 0)
    if (before + size).max() <= reading.busy_after:
        return None
    ordinal = np.arange(len(owner)) - (block.start - before)[owner] + 1
    return ordinal > reading.busy_after


def _of(busy: Bools | None, rows: Ints) -> Bools | None:
    return None if busy is None else busy[rows]


def _latest(block: Block, story: _Stories, decided: NDArray[Any], won: NDArray[Any]) -> Carried:
    """Return one record per customer of the block, as of its last row; of journeys ended, what the block adds."""
    n, prior = len(block.start), block.prior
    last = np.append(block.start[1:], len(block.time)) - 1
    owner = np.arange(n, dtype=np.int32)
    now = story.at(last, owner)
    size = (last - block.start + 1).astype(np.int32)
    none = np.int32(0)
    return Carried(
        key=block.key, time=block.time[last], journey_start=now.start,
        code=block.code[last], first_code=now.first_code, steps=now.steps.astype(np.int32),
        n_events=np.where(block.held, prior.n_events, none) + size,
        decided=decided.astype(np.int32), converted=won.astype(np.int32),
        sure=now.sure, story_over=np.zeros(n, bool),
        visit_start=story.visit_start(last, owner) if story.merging else None,
    )  # fmt: skip
