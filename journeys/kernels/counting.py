"""From rows in order to moves, entries and journeys: array operations, no loop over rows or customers."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray as Bools
from journeys.kernels.arrays import IntArray as Ints
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN, Carried, Counted, Ends, Entries, Moves, Reading


@dataclass(frozen=True)
class _Story:
    """The journey a row belongs to, as of that row (or of the row before it)."""

    visit_start: Ints
    journey_start: Ints
    first_code: NDArray[np.int32]
    steps: Ints
    sure: Bools

    def before(self, first: Bools, carried: Carried, at: Ints) -> _Story:
        """Shift by one row; the first row of a customer takes what was carried."""
        return _Story(
            **{f.name: shifted(getattr(self, f.name), first, getattr(carried, f.name), at) for f in fields(self)}
        )


def shifted(column: NDArray[Any], first: Bools, carried: NDArray[Any], at: Ints) -> NDArray[Any]:
    """Return each row's value in the row before; the first row of customer c takes carried[at[c]]."""
    out = np.empty_like(column)
    out[1:] = column[:-1]
    out[first] = carried[at] if len(carried) else 0
    return out


def count_rows(
    key: NDArray[np.uint64],
    time: Ints,
    code: NDArray[np.int32],
    carried: Carried,
    reading: Reading,
) -> tuple[Counted, Carried, Ints]:
    """Return what rows in order add to the tally, and the customers' new records.

    Parameters
    ----------
    key, time, code : ndarray, shape (n_rows,)
        Customer, time in microseconds and code, sorted by customer and in order within each; none empty.
    carried : Carried
        Records of the customers seen before.
    reading : Reading
        The rules.

    Returns
    -------
    counted : Counted
        Moves, entries and ended journeys.
    latest : Carried
        One record per customer of these rows.
    at : ndarray of int64
        Where each of them stands in `carried`, -1 for a new one.
    """
    n = len(key)
    first = np.ones(n, bool)
    first[1:] = key[1:] != key[:-1]
    start_of = np.flatnonzero(first)
    block = np.cumsum(first) - 1
    at = carried.find(key[start_of])
    seen = at >= 0
    known = ~first | seen[block]

    prev_time = shifted(time, first, carried.time, at)
    prev_code = shifted(code, first, carried.code, at)
    gap = time - prev_time
    after_state = known & (prev_code >= reading.first_state)
    after_outcome = known & ~after_state
    silent = after_state & (gap > reading.silence_us) if reading.silence_us is not None else np.zeros(n, bool)
    outcome = code < reading.first_state
    repeated = after_outcome & (prev_code == code) & (gap <= reading.same_outcome_us)
    begins = (~known | after_outcome | silent) & ~repeated
    goes_on = ~begins & ~repeated
    same_visit = goes_on & (code == prev_code) if reading.merge_repeats else np.zeros(n, bool)
    visit = begins | (goes_on & ~same_visit)

    story = _story(time, code, begins, visit, known, start_of, block, carried, at, reading)
    before = story.before(first, carried, at)
    ordinal = (
        np.arange(n) - start_of[block] + 1 + np.where(seen, carried.n_events[at] if len(carried.key) else 0, 0)[block]
    )
    busy = ordinal > reading.busy_after

    # The first visit of an unsure journey may have begun before the log: its dwell is unknown once repeats merge.
    unseen_start = before.steps == 1
    unseen_start &= ~before.sure
    if not reading.merge_repeats:
        unseen_start[:] = False
    moved = goes_on & ~same_visit
    moves = []
    for mask, next_code, dwell in (
        (moved, code, time - before.visit_start),
        (silent, np.full(n, LAPSED, np.int32), prev_time + (reading.silence_us or 0) - before.visit_start),
    ):
        keep = mask & ~unseen_start
        moves.append(Moves(key[keep], prev_code[keep], next_code[keep], dwell[keep], busy[keep]))

    ended = outcome & ~repeated
    ends = (
        Ends(
            key[ended],
            story.first_code[ended],
            code[ended],
            story.sure[ended],
            story.steps[ended],
            (time - story.journey_start)[ended],
        ),
        Ends(
            key[silent],
            before.first_code[silent],
            np.full(silent.sum(), LAPSED, np.int32),
            before.sure[silent],
            before.steps[silent] + 1,
            (prev_time + (reading.silence_us or 0) - before.journey_start)[silent],
        ),
    )
    counted = Counted(
        moves=tuple(moves),
        entries=Entries(key[begins], code[begins], story.sure[begins]),
        ends=ends,
        repeated=repeated,
        bare=begins & outcome,
        again=begins & after_outcome,
        unsure_visits=int(((moved | silent) & unseen_start).sum()),
    )
    won = ended & (code < FIRST_OUTCOME + reading.n_converted)
    latest = _latest(key, time, code, story, ordinal, start_of, ended.astype(np.int64) + silent, won, carried, at)
    return counted, latest, at


def _story(
    time: Ints,
    code: NDArray[np.int32],
    begins: Bools,
    visit: Bools,
    known: Bools,
    start_of: Ints,
    block: Ints,
    carried: Carried,
    at: Ints,
    reading: Reading,
) -> _Story:
    """Find, for each row, the visit and the journey it stands in."""
    index = np.arange(len(time))
    visit_row = np.maximum.accumulate(np.where(visit, index, -1))
    journey_row = np.maximum.accumulate(np.where(begins, index, -1))
    here = visit_row >= start_of[block]
    begun_here = journey_row >= start_of[block]
    visits: Ints = np.cumsum(visit)
    visits_before_block: Ints = (visits - visit)[start_of]
    sure_now = known | reading.complete_history
    if reading.silence_us is not None:
        sure_now |= time >= reading.log_start_us + reading.silence_us

    def value(now: NDArray[Any], held: NDArray[Any], in_block: Bools) -> NDArray[Any]:
        if in_block.all():
            return now
        return np.where(in_block, now, held[at][block])

    return _Story(
        visit_start=value(time[visit_row], carried.visit_start, here),
        journey_start=value(time[journey_row], carried.journey_start, begun_here),
        first_code=value(code[journey_row], carried.first_code, begun_here),
        sure=value(sure_now[journey_row], carried.sure, begun_here),
        steps=value(visits - visits[journey_row] + 1, carried.steps, begun_here)
        + np.where(begun_here, 0, visits - visits_before_block[block]),
    )


def _latest(
    key: NDArray[np.uint64],
    time: Ints,
    code: NDArray[np.int32],
    story: _Story,
    ordinal: Ints,
    start_of: Ints,
    decided: Ints,
    won: Bools,
    carried: Carried,
    at: Ints,
) -> Carried:
    """Return one record per customer of these rows, as of its last row."""
    last = np.append(start_of[1:], len(key)) - 1
    held = at >= 0

    def total(column: NDArray[Any], before: Ints) -> Ints:
        return np.add.reduceat(column.astype(np.int64), start_of) + np.where(held, before[at] if len(before) else 0, 0)

    return Carried(
        key=key[last],
        time=time[last],
        code=code[last],
        visit_start=story.visit_start[last],
        journey_start=story.journey_start[last],
        first_code=story.first_code[last],
        steps=story.steps[last],
        sure=story.sure[last],
        n_events=ordinal[last],
        decided=total(decided, carried.decided),
        converted=total(won, carried.converted),
        story_over=np.zeros(len(last), bool),
    )


def close_log(carried: Carried, reading: Reading) -> tuple[Moves, Ends, int, Carried]:
    """Return the moves and journeys that the end of the log decides or leaves open.

    Parameters
    ----------
    carried : Carried
        Records after the last row.
    reading : Reading
        The rules; `as_of_us` is the moment of closing.

    Returns
    -------
    moves : Moves
        One lapsed or open stay per running journey (first visits of unsure journeys left out under merging).
    ends : Ends
        One lapsed or open journey each.
    unsure_visits : int
        Stays left out.
    carried : Carried
        The records with lapses counted in `decided`.
    """
    running = (carried.code >= reading.first_state) & ~carried.story_over
    held = carried.take(running)
    if reading.silence_us is None:
        lapsed, until = np.zeros(len(held.key), bool), np.full(len(held.key), reading.as_of_us)
    else:
        # A row at as_of itself would have been seen, so an age equal to the silence is decided.
        lapsed = reading.as_of_us - held.time >= reading.silence_us
        until = np.where(lapsed, held.time + reading.silence_us, reading.as_of_us)
    next_code = np.where(lapsed, LAPSED, OPEN).astype(np.int32)
    keep = np.ones(len(held.key), bool)
    if reading.merge_repeats:
        keep = ~((held.steps == 1) & ~held.sure)
    moves = Moves(
        held.key[keep],
        held.code[keep],
        next_code[keep],
        (until - held.visit_start)[keep],
        (held.n_events >= reading.busy_after)[keep],
    )
    ends = Ends(held.key, held.first_code, next_code, held.sure, held.steps + lapsed, until - held.journey_start)
    decided = carried.decided.copy()
    decided[running] += lapsed
    return moves, ends, int((~keep).sum()), replace(carried, decided=decided)
