"""The counting of rows in order as one compiled loop: the same answers as `counting`, for large logs.

Imported only where numba is installed (extra `fast`) and the log is large enough to be worth the start.
"""

from __future__ import annotations

import math
from typing import Any, TypeVar

import numpy as np
from numba import njit
from numpy.typing import NDArray

from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import DAY_US
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, Carried, Cells, Counted, Ends, Entries, Moves, Reading

_IN_ORDER, _OUT_OF_ORDER = 0, 1
_NO_SILENCE = -1

T = TypeVar("T", Moves, Entries, Ends)


def count_in_order(
    key: NDArray[np.uint64],
    time: IntArray,
    code: NDArray[np.int32],
    carried: Carried,
    first_keys: NDArray[np.uint64],
    reading: Reading,
    cells: Cells,
) -> tuple[Counted, Carried | None, float] | None:
    """Return what rows in order add to the tally, and the records of new customers; change the others in place.

    Parameters
    ----------
    key, time, code : ndarray, shape (n_rows,)
        Customer, microseconds and code, sorted by customer and in order within each; at least one row.
    carried : Carried
        Records of the customers seen before, changed in place.
    first_keys : ndarray of uint64, shape (n_buckets,)
        The smallest key of each bucket.
    reading : Reading
        The rules.
    cells : Cells
        Where moves are added, but for busy ones.

    Returns
    -------
    counted : Counted
        Moves that are not in the cells, entries and ended journeys.
    fresh : Carried or None
        Records of new customers.
    gained : float
        By how much the dwell in the cells grew.

    Or None if a row is not later than one of its customer that was counted before; `carried` is then spoilt.
    """
    n = len(key)
    # A row makes at most a lapse and a move, and ends at most two journeys.
    moves = Moves(np.empty(2 * n, np.uint8), _codes(2 * n), _codes(2 * n), _times(2 * n), np.empty(2 * n, np.bool_))
    ends = Ends(
        np.empty(2 * n, np.uint8), _codes(2 * n), _codes(2 * n), np.empty(2 * n, np.bool_), _times(2 * n), _times(2 * n)
    )
    begun = Entries(np.empty(n, np.uint8), _codes(n), np.empty(n, np.bool_))
    repeated, bare, again = _times(n), _times(n), _times(n)
    fresh = Carried.zeros(n, visits=reading.merge_repeats)
    status, n_moves, n_ends, n_begun, n_fresh, n_repeated, n_bare, n_again, unsure_visits, gained = _walk(
        key, time, code, first_keys, _columns(carried), _columns(fresh),
        (moves.bucket, moves.state, moves.next_code, moves.dwell, moves.busy),
        (ends.bucket, ends.state, ends.outcome, ends.sure, ends.steps, ends.elapsed),
        (begun.bucket, begun.state, begun.sure), (repeated, bare, again),
        cells.n, cells.rest, cells.lower, cells.upper, cells.first_bucket, cells.n_states, *_bin_guess(cells),
        reading.first_state, FIRST_OUTCOME + reading.n_converted,
        _NO_SILENCE if reading.silence_us is None else reading.silence_us, reading.same_outcome_us,
        reading.merge_repeats, reading.log_start_us, reading.complete_history, reading.busy_after,
    )  # fmt: skip
    if status == _OUT_OF_ORDER:
        return None
    counted = Counted(
        moves=(_first(moves, n_moves),),
        entries=_first(begun, n_begun),
        ends=(_first(ends, n_ends),),
        repeated=repeated[:n_repeated],
        bare=bare[:n_bare],
        again=again[:n_again],
        unsure_visits=unsure_visits,
    )
    return counted, fresh.take(np.arange(n_fresh)) if n_fresh else None, gained


def _first(records: T, n: int) -> T:
    """Return the first `n` records."""
    return type(records)(**{name: column[:n] for name, column in vars(records).items()})


def _bin_guess(cells: Cells) -> tuple[float, float]:
    """Return what tells the bin of a dwell to within a few: bins are whole days, or even in the logarithm."""
    upper = cells.upper
    if len(upper) < 2 or upper[0] == 0:
        return 0.0, 0.0
    return float(np.log(upper[0])), float((len(upper) - 1) / np.log(upper[-1] / upper[0]))


def _codes(n: int) -> NDArray[np.int32]:
    return np.empty(n, np.int32)


def _times(n: int) -> IntArray:
    return np.empty(n, np.int64)


def _columns(records: Carried) -> tuple[NDArray[Any], ...]:
    """Return the columns in the order in which the loop takes them."""
    visits = np.empty(0, np.int64) if records.visit_start is None else records.visit_start
    return (
        records.key, records.time, records.journey_start, visits, records.code, records.first_code, records.steps,
        records.n_events, records.decided, records.converted, records.sure,
    )  # fmt: skip


@njit(nogil=True, cache=True)
def _bin_of(dwell, lower, upper, log_of_first, bins_per_log):  # type: ignore[no-untyped-def]
    """Return the bin of a dwell: the logarithm tells it to within a few, the edges settle it."""
    if bins_per_log == 0.0:
        place = dwell // DAY_US
    else:
        place = int((math.log(dwell) - log_of_first) * bins_per_log) if dwell > 0 else 0
    place = min(max(place, 0), len(upper) - 1)
    while place > 0 and dwell <= upper[place - 1]:
        place -= 1
    while place < len(upper) - 1 and dwell > upper[place]:
        place += 1
    return place


@njit(nogil=True, cache=True)
def _walk(  # type: ignore[no-untyped-def]
    key, time, code, first_keys, carried, fresh, moves, ends, begun, marked,
    cell_n, cell_rest, lower, upper, first_bucket, n_states, log_of_first, bins_per_log,
    first_state, first_churned, silence, same, merge, log_start, complete, busy_after,
):  # fmt: skip
    """Walk over the rows; see `counting` for the same in array operations."""
    c_key, c_time, c_start, c_visit, c_code, c_first, c_steps, c_events, c_decided, c_converted, c_sure = carried
    f_key, f_time, f_start, f_visit, f_code, f_first, f_steps, f_events, f_decided, f_converted, f_sure = fresh
    m_bucket, m_state, m_next, m_dwell, m_busy = moves
    e_bucket, e_state, e_outcome, e_sure, e_steps, e_elapsed = ends
    b_bucket, b_state, b_sure = begun
    repeated, bare, again = marked
    n_moves = n_ends = n_begun = n_fresh = n_repeated = n_bare = n_again = unsure_visits = 0
    gained = 0.0
    place = np.searchsorted(c_key, key[0])
    bucket = np.searchsorted(first_keys, key[0], side="right") - 1
    i = 0
    while i < len(key):
        who = key[i]
        while bucket + 1 < len(first_keys) and who >= first_keys[bucket + 1]:
            bucket += 1
        while place < len(c_key) and c_key[place] < who:
            place += 1
        held = place < len(c_key) and c_key[place] == who
        last, prev, started, visit, first, steps, events, sure = 0, 0, 0, 0, 0, 0, 0, False
        if held:
            if time[i] <= c_time[place]:
                return _OUT_OF_ORDER, 0, 0, 0, 0, 0, 0, 0, 0, 0.0
            last, prev, started = c_time[place], c_code[place], c_start[place]
            first, steps, events, sure = c_first[place], c_steps[place], c_events[place], c_sure[place]
            visit = c_visit[place] if merge else last
        decided = won = 0
        while i < len(key) and key[i] == who:
            now, what = time[i], code[i]
            events += 1
            begins = False
            if prev >= first_state:
                lapses = silence >= 0 and now - last > silence
                if lapses or not (merge and what == prev):
                    if merge and steps == 1 and not sure:
                        # Merged, the first visit of an unsure journey may have begun before the log.
                        unsure_visits += 1
                    else:
                        to = LAPSED if lapses else what
                        dwell = last + silence - visit if lapses else now - visit
                        busy = events > busy_after
                        if len(cell_n) > 0 and not busy:
                            bin_ = _bin_of(dwell, lower, upper, log_of_first, bins_per_log)
                            cell = (bucket - first_bucket) * n_states + prev - first_state
                            cell = (cell * (first_state + n_states) + to) * len(upper) + bin_
                            cell_n[cell] += np.uint32(1)
                            cell_rest[cell] += dwell - lower[bin_]
                            gained += dwell - lower[bin_]
                        else:
                            m_bucket[n_moves], m_state[n_moves], m_next[n_moves] = bucket, prev, to
                            m_dwell[n_moves], m_busy[n_moves] = dwell, busy
                            n_moves += 1
                    if not lapses:
                        steps += 1
                        visit = now
                if lapses:
                    e_bucket[n_ends], e_state[n_ends], e_outcome[n_ends] = bucket, first, LAPSED
                    e_sure[n_ends], e_steps[n_ends], e_elapsed[n_ends] = sure, steps + 1, last + silence - started
                    n_ends += 1
                    decided += 1
                    begins = True
            elif prev != 0 and what == prev and now - last <= same:
                repeated[n_repeated] = i
                n_repeated += 1
                last = now
                i += 1
                continue
            else:
                begins = True
                if prev != 0:
                    again[n_again] = i
                    n_again += 1
            if begins:
                sure = prev != 0 or complete or (silence >= 0 and now >= log_start + silence)
                started, visit, first, steps = now, now, what, 1
                b_bucket[n_begun], b_state[n_begun], b_sure[n_begun] = bucket, what, sure
                n_begun += 1
                if what < first_state:
                    bare[n_bare] = i
                    n_bare += 1
            if what < first_state:
                e_bucket[n_ends], e_state[n_ends], e_outcome[n_ends] = bucket, first, what
                e_sure[n_ends], e_steps[n_ends], e_elapsed[n_ends] = sure, steps, now - started
                n_ends += 1
                decided += 1
                if what < first_churned:
                    won += 1
            prev, last = what, now
            i += 1
        if held:
            c_time[place], c_start[place], c_code[place], c_first[place] = last, started, prev, first
            c_steps[place], c_events[place], c_sure[place] = steps, events, sure
            c_decided[place] += decided
            c_converted[place] += won
            if merge:
                c_visit[place] = visit
        else:
            f_key[n_fresh], f_time[n_fresh], f_start[n_fresh] = who, last, started
            f_code[n_fresh], f_first[n_fresh], f_steps[n_fresh], f_events[n_fresh] = prev, first, steps, events
            f_decided[n_fresh], f_converted[n_fresh], f_sure[n_fresh] = decided, won, sure
            if merge:
                f_visit[n_fresh] = visit
            n_fresh += 1
    return _IN_ORDER, n_moves, n_ends, n_begun, n_fresh, n_repeated, n_bare, n_again, unsure_visits, gained
