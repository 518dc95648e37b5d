"""From rows in order to moves, entries and journeys: array operations only, no loop over rows or customers."""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Codes of what a row or a move can lead to: these two, then the outcomes, then the states.
LAPSED = 0
OPEN = 1
FIRST_OUTCOME = 2


@dataclass(frozen=True)
class Reading:
    """The rules of reading as plain numbers.

    `n_outcomes` outcomes have the codes 2 to 1 + n_outcomes, the first `n_converted` of them are
    conversions, and states come after. Times are microseconds.
    """

    n_outcomes: int
    n_converted: int
    silence_us: int | None
    same_outcome_us: int
    merge_repeats: bool
    log_start_us: int
    as_of_us: int
    complete_history: bool
    busy_after: int = 1_000

    @property
    def first_state(self) -> int:
        """Code of the first state."""
        return FIRST_OUTCOME + self.n_outcomes


@dataclass(frozen=True)
class Carried:
    """One record per customer seen: what the next row of that customer needs. Sorted by `key`."""

    key: NDArray[np.uint64]
    time: Ints
    code: NDArray[np.int32]
    visit_start: Ints
    journey_start: Ints
    first_code: NDArray[np.int32]
    steps: Ints
    sure: Bools
    n_events: Ints
    decided: Ints
    converted: Ints
    story_over: Bools

    @classmethod
    def none(cls) -> Carried:
        """Return a table without customers."""
        kinds = {"key": np.uint64, "code": np.int32, "first_code": np.int32, "sure": bool, "story_over": bool}
        return cls(**{f.name: np.empty(0, kinds.get(f.name, np.int64)) for f in fields(cls)})

    def take(self, index: Ints | Bools) -> Carried:
        """Return the records at `index`."""
        return Carried(**{f.name: getattr(self, f.name)[index] for f in fields(self)})

    def find(self, key: NDArray[np.uint64]) -> Ints:
        """Return the position of each key, -1 where it is not carried."""
        if not len(self.key):
            return np.full(len(key), -1)
        at = np.minimum(np.searchsorted(self.key, key), len(self.key) - 1)
        return np.where(self.key[at] == key, at, -1)

    def updated(self, new: Carried, at: Ints) -> Carried:
        """Return the table with `new` in place of the records at `at`, and added where `at` is -1."""
        old, fresh = at >= 0, at < 0
        where = np.searchsorted(self.key, new.key[fresh])
        columns = {}
        for f in fields(self):
            column, values = getattr(self, f.name), getattr(new, f.name)
            if old.any():
                column = column.copy()
                column[at[old]] = values[old]
            columns[f.name] = np.insert(column, where, values[fresh]) if fresh.any() else column
        return Carried(**columns)


@dataclass(frozen=True)
class Moves:
    """One element per move: whose, from which state, to what, after how long (microseconds)."""

    key: NDArray[np.uint64]
    state: NDArray[np.int32]
    next_code: NDArray[np.int32]
    dwell: Ints
    busy: Bools


@dataclass(frozen=True)
class Entries:
    """One element per journey begun."""

    key: NDArray[np.uint64]
    state: NDArray[np.int32]
    sure: Bools


@dataclass(frozen=True)
class Ends:
    """One element per journey ended (or, at the end of the log, still open)."""

    key: NDArray[np.uint64]
    state: NDArray[np.int32]
    outcome: NDArray[np.int32]
    sure: Bools
    steps: Ints
    elapsed: Ints


@dataclass(frozen=True)
class Counted:
    """What one block of rows adds; `repeated`, `bare` are masks of rows, `unsure_visits` a count."""

    moves: tuple[Moves, ...]
    entries: Entries | None
    ends: tuple[Ends, ...]
    repeated: Bools
    bare: Bools
    unsure_visits: int


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
        return _Story(**{f.name: shifted(getattr(self, f.name), first, getattr(carried, f.name), at)
                         for f in fields(self)})


def shifted(column: NDArray, first: Bools, carried: NDArray, at: Ints) -> NDArray:  # type: ignore[type-arg]
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
    ordinal = np.arange(n) - start_of[block] + 1 + np.where(seen, carried.n_events[at] if len(carried.key) else 0, 0)[block]
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
        Ends(key[ended], story.first_code[ended], code[ended], story.sure[ended], story.steps[ended],
             (time - story.journey_start)[ended]),
        Ends(key[silent], before.first_code[silent], np.full(silent.sum(), LAPSED, np.int32), before.sure[silent],
             before.steps[silent] + 1, (prev_time + (reading.silence_us or 0) - before.journey_start)[silent]),
    )
    counted = Counted(
        moves=tuple(moves),
        entries=Entries(key[begins], code[begins], story.sure[begins]),
        ends=ends,
        repeated=repeated,
        bare=begins & outcome,
        unsure_visits=int(((moved | silent) & unseen_start).sum()),
    )
    won = ended & (code < FIRST_OUTCOME + reading.n_converted)
    latest = _latest(key, time, code, story, ordinal, start_of, ended.astype(np.int64) + silent, won, carried, at)
    return counted, latest, at


def _story(
    time: Ints, code: NDArray[np.int32], begins: Bools, visit: Bools, known: Bools, start_of: Ints, block: Ints,
    carried: Carried, at: Ints, reading: Reading,
) -> _Story:
    """Find, for each row, the visit and the journey it stands in."""
    index = np.arange(len(time))
    visit_row = np.maximum.accumulate(np.where(visit, index, -1))
    journey_row = np.maximum.accumulate(np.where(begins, index, -1))
    here = visit_row >= start_of[block]
    begun_here = journey_row >= start_of[block]
    visits = np.cumsum(visit)
    visits_before_block = (visits - visit)[start_of]
    sure_now = known | reading.complete_history
    if reading.silence_us is not None:
        sure_now |= time >= reading.log_start_us + reading.silence_us

    def value(now: NDArray, held: NDArray, in_block: Bools) -> NDArray:  # type: ignore[type-arg]
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
    key: NDArray[np.uint64], time: Ints, code: NDArray[np.int32], story: _Story, ordinal: Ints, start_of: Ints,
    decided: Ints, won: Bools, carried: Carried, at: Ints,
) -> Carried:
    """Return one record per customer of these rows, as of its last row."""
    last = np.append(start_of[1:], len(key)) - 1
    held = at >= 0

    def total(column: NDArray, before: Ints) -> Ints:  # type: ignore[type-arg]
        return np.add.reduceat(column.astype(np.int64), start_of) + np.where(held, before[at] if len(before) else 0, 0)

    return Carried(
        key=key[last], time=time[last], code=code[last], visit_start=story.visit_start[last],
        journey_start=story.journey_start[last], first_code=story.first_code[last], steps=story.steps[last],
        sure=story.sure[last], n_events=ordinal[last], decided=total(decided, carried.decided),
        converted=total(won, carried.converted), story_over=np.zeros(len(last), bool),
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
    moves = Moves(held.key[keep], held.code[keep], next_code[keep], (until - held.visit_start)[keep],
                  (held.n_events >= reading.busy_after)[keep])
    ends = Ends(held.key, held.first_code, next_code, held.sure, held.steps + lapsed, until - held.journey_start)
    decided = carried.decided.copy()
    decided[running] += lapsed
    return moves, ends, int((~keep).sum()), replace(carried, decided=decided)
