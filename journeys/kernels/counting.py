"""From rows in order to moves, entries and journeys: array operations, no loop over rows or customers."""

from __future__ import annotations

from dataclasses import replace
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
from journeys.kernels.stage_counts import stages_at_close, stages_passed
from journeys.kernels.stories import Block, Buckets, Codes, Stories, marks_of
from journeys.kernels.touch_counts import touches_and_values


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

    Raises
    ------
    OverflowError
        If the values of a journey's or a customer's events add up to more than an int64 can hold.
    """
    marks = marks_of(block, reading)
    story = Stories(block, marks, reading)
    owner, silence = marks.owner, reading.silence_us or 0
    busy = _busy(block, owner, reading)
    ended = np.flatnonzero(block.code < reading.first_state)
    if len(marks.repeated):
        ended = np.setdiff1d(ended, marks.repeated, assume_unique=True)
    silent = np.flatnonzero(marks.silent)
    before = story.before(silent)
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
        Moves(
            block.bucket[owner[moved]], marks.prev_code[moved], block.code[moved], dwell, story.left_by(moved),
            block.time[moved] - dwell, _of(busy, moved), story.group(lambda: story.at(moved, owner[moved])),
        ),
        Moves(
            block.bucket[owner[lapsed]], marks.prev_code[lapsed], np.full(len(lapsed), LAPSED, np.int32),
            dwell_lapsed, story.left_by(lapsed), marks.prev_time[lapsed] + silence - dwell_lapsed, _of(busy, lapsed),
            story.group(lambda: story.before(lapsed)),
        ),
    )  # fmt: skip
    ends = (
        Ends(
            block.bucket[owner[ended]], now.first_code, block.code[ended], now.sure, now.steps,
            block.time[ended] - now.start, *story.grouped(now.start, lambda: now),
        ),
        Ends(
            block.bucket[owner[silent]], before.first_code, np.full(len(silent), LAPSED, np.int32), before.sure,
            before.steps + 1, marks.prev_time[silent] + silence - before.start,
            *story.grouped(before.start, lambda: before),
        ),
    )  # fmt: skip
    begun = story.begun
    back = begun[marks.prev_code[begun] >= FIRST_OUTCOME]
    after = np.where(marks.silent[back], np.int32(LAPSED), marks.prev_code[back])
    counted = Counted(
        moves=moves,
        entries=Entries(
            block.bucket[owner[begun]], block.code[begun], story.sure_begun,
            *(() if story.group_begun is None else (block.time[begun], story.group_begun)),
        ),
        ends=ends,
        gaps=Gaps(
            block.bucket[owner[back]], after, block.time[back] - marks.prev_time[back], True,
            *story.grouped(marks.prev_time[back], lambda: story.before(back)),
        ),
        repeated=marks.repeated,
        bare=begun[block.code[begun] < reading.first_state],
        again=back[after != LAPSED],
        unsure_visits=unsure_visits,
    )  # fmt: skip
    also: dict[str, NDArray[Any]] = {}
    if reading.stages is not None:
        passed, number, start = stages_passed(block, marks, story, reading)
        counted, also = replace(counted, passed=passed), {"stage": number, "stage_start": start}
    if reading.touches or reading.values:
        by_outcome, by_silence, latest = touches_and_values(block, marks, story, ended, silent)
        counted = replace(counted, ends=(replace(ends[0], **by_outcome), replace(ends[1], **by_silence)))
        also |= latest
    n = len(block.start)
    decided = np.bincount(owner[ended], minlength=n) + np.bincount(owner[silent], minlength=n)
    won = owner[ended[block.code[ended] < FIRST_OUTCOME + reading.n_converted]]
    return counted, _latest(block, story, decided, np.bincount(won, minlength=n), also)


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
        bucket[keep], held.code[keep], next_code[keep], (until - held.visit_began)[keep], held.before[keep],
        held.visit_began[keep], (held.n_events >= reading.busy_after)[keep],
        None if held.group is None else held.group[keep],
    )  # fmt: skip
    ends = Ends(
        bucket, held.first_code, next_code, held.sure, held.steps.astype(np.int64) + lapsed,
        until - held.journey_start, None if held.group is None else held.journey_start, held.group,
        held.touched, held.first_touch, held.last_touch, held.value,
    )  # fmt: skip
    carried.decided[running] += lapsed
    passed = None if reading.stages is None else stages_at_close(held, bucket, until, next_code, reading)
    return Closed(moves, ends, gaps, int((~keep).sum()), passed)


def _absent(carried: Carried, bucket: Buckets, reading: Reading) -> Gaps:
    """Return the absences of customers whose last journey has ended and who have not come back."""
    away = reading.as_of_us - carried.time
    ended = carried.code < reading.first_state
    if reading.silence_us is not None:
        ended |= away >= reading.silence_us
    gone = np.flatnonzero(ended & ~carried.story_over & (carried.code != 0))
    code = carried.code[gone]
    after = np.where(code < reading.first_state, code, np.int32(LAPSED))
    grouped = () if carried.group is None else (carried.time[gone], carried.group[gone])
    return Gaps(bucket[gone], after, away[gone], False, *grouped)


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


def _latest(
    block: Block, story: Stories, decided: NDArray[Any], won: NDArray[Any], also: dict[str, NDArray[Any]]
) -> Carried:
    """Return one record per customer of the block, as of its last row; of journeys ended, what the block adds.

    `also` holds optional columns.
    """
    n, prior = len(block.start), block.prior
    last = block.end - 1
    owner = np.arange(n, dtype=np.int32)
    now = story.at(last, owner)
    size = (last - block.start + 1).astype(np.int32)
    none = np.int32(0)
    return Carried(
        key=block.key, time=block.time[last], journey_start=now.start,
        code=block.code[last], first_code=now.first_code, steps=now.steps.astype(np.int32),
        n_events=np.where(block.held, prior.n_events, none) + size,
        decided=decided.astype(np.int32), converted=won.astype(np.int32), before=story.came_by(last, owner),
        sure=now.sure, story_over=np.zeros(n, bool),
        visit_start=story.visit_start(last, owner) if story.merging else None,
        group=now.group, seen=None if prior.seen is None else block.time[last], **also,
    )  # fmt: skip
