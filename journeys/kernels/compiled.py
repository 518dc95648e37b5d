"""The counting of rows in order as one compiled loop: the same answers as `counting`, sooner.

The loop is `_walk.c`, built where the package is installed with a C compiler at hand; without it `counting` is used.
"""

from __future__ import annotations

import ctypes
import sys
from dataclasses import dataclass, replace
from functools import cache
from importlib.util import find_spec
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import lowest_bins
from journeys.kernels.records import FIRST_OUTCOME, Cells, Counted, Ends, Entries, Gaps, Moves, Reading

if TYPE_CHECKING:
    from journeys.kernels.held import Held

_OUT_OF_ORDER = 1
_NO_SILENCE = -1

T = TypeVar("T", Moves, Entries, Ends)
Rows = tuple[NDArray[np.uint64], IntArray, NDArray[np.int32]]

# A customer's record as _walk.c lays it out.
RECORD = np.dtype(
    [
        ("time", np.int64), ("journey_start", np.int64), ("visit_start", np.int64), ("before", np.int64),
        ("code", np.int32), ("first_code", np.int32), ("steps", np.int32), ("n_events", np.int32),
        ("decided", np.int32), ("converted", np.int32), ("sure", np.bool_),
    ],
    align=True,
)  # fmt: skip
# In the order of the struct in _walk.c. What is named in the second list is a number, all else the address of an array.
_FIELDS = (
    "n_rows", "key", "time", "code", "n_buckets", "first_keys",
    "n_old", "n_young", "o_key", "y_key", "o_record", "y_record", "f_key", "f_record",
    "m_bucket", "m_state", "m_next", "m_dwell", "m_before", "m_since", "m_busy",
    "e_bucket", "e_state", "e_outcome", "e_sure", "e_steps", "e_elapsed",
    "b_bucket", "b_state", "b_sure", "g_bucket", "g_outcome", "g_away", "repeated", "bare", "again",
    "cells", "contexts", "lower", "upper", "guess", "n_bins", "first_bucket", "n_states", "whole_days",
    "mature_before", "n_slots",
    "first_state", "first_churned", "silence", "same_outcome", "merge", "log_start", "complete", "busy_after",
    "n_moves", "n_ends", "n_begun", "n_gaps", "n_fresh", "n_repeated", "n_bare", "n_again", "unsure_visits",
)  # fmt: skip


class _Walk(ctypes.Structure):
    """What the loop works on, as _walk.c lays it out."""

    _fields_ = [*((name, ctypes.c_int64) for name in _FIELDS), ("gained", ctypes.c_double)]


@cache
def _library() -> Any:
    """Return the compiled library, None where it is not built."""
    found = find_spec("journeys.kernels._walk")
    if found is None or found.origin is None:
        return None
    library = ctypes.CDLL(found.origin)
    sizes = [getattr(library, f"journeys_{name}_size", None) for name in ("walk", "record")]
    if [size and size() for size in sizes] != [ctypes.sizeof(_Walk), RECORD.itemsize]:
        # Built from other sources than these: it would write where it must not.
        return None
    library.journeys_walk.argtypes = [ctypes.POINTER(_Walk)]
    library.journeys_walk.restype = ctypes.c_int64
    number, address = ctypes.c_int64, ctypes.c_void_p
    library.journeys_gather.argtypes = [number, *[address] * 8]
    library.journeys_gather.restype = ctypes.c_int64
    library.journeys_pack.argtypes = [number, number, address, address]
    library.journeys_positions.argtypes = [number, number, address, address]
    library.journeys_positions.restype = number
    library.journeys_insert.argtypes = [number, address, address, number, address, address]
    library.journeys_group_sums.argtypes = [number, address, number, *[address] * 3]
    library.journeys_mix.argtypes = [number, address, address]
    library.journeys_text_keys.argtypes = [number, number, *[address] * 3]
    library.journeys_bucket_major.argtypes = [number, *[address] * 3]
    for name in ("insert", "pack", "group_sums", "mix", "text_keys", "bucket_major"):
        getattr(library, f"journeys_{name}").restype = None
    return library


def is_built() -> bool:
    """Tell whether the compiled loop is there, and the machine one whose words it reads as numpy does."""
    return sys.byteorder == "little" and _library() is not None


@dataclass(frozen=True)
class Room:
    """Where the loop writes, kept from one call to the next: new memory would have to be cleared first.

    Attributes
    ----------
    n_rows : int
        For how many rows there is room.
    rows : tuple of ndarray
        Customer, time and code of the rows in order.
    moves, ends, begun, gaps, marked
        Moves outside the cells, ended journeys, entries, absences, positions of marked rows.
    """

    n_rows: int
    rows: Rows
    moves: Moves
    ends: Ends
    begun: Entries
    gaps: Gaps
    marked: dict[str, IntArray]

    @classmethod
    def of(cls, n: int) -> Room:
        """Return room for `n` rows."""
        rows = np.empty(n, np.uint64), _times(n), _codes(n)
        # A row makes at most one move, and ends at most two journeys: one by its absence, one by itself.
        moves = Moves(_bytes(n), _codes(n), _codes(n), _times(n), _times(n), _times(n), _flags(n))
        ends = Ends(_bytes(2 * n), _codes(2 * n), _codes(2 * n), _flags(2 * n), _times(2 * n), _times(2 * n))
        marked = {"repeated": _times(n), "bare": _times(n), "again": _times(n)}
        begun, gaps = Entries(_bytes(n), _codes(n), _flags(n)), Gaps(_bytes(n), _codes(n), _times(n), True)
        return cls(n, rows, moves, ends, begun, gaps, marked)


def count_in_order(
    key: NDArray[np.uint64],
    time: IntArray,
    code: NDArray[np.int32],
    held: Held,
    first_keys: NDArray[np.uint64],
    reading: Reading,
    cells: Cells,
    room: Room,
) -> tuple[Counted, float] | None:
    """Return what rows in order add to the tally, and bring the customers' records up to date.

    Parameters
    ----------
    key, time, code : ndarray, shape (n_rows,)
        Customer, microseconds and code, sorted by customer and in order within each; at least one row.
    held : Held
        Records of the customers seen before, which are changed, and those of new customers, which are added; of each
        customer all rows since these were put in place are here.
    first_keys : ndarray of uint64, shape (n_buckets,)
        The smallest key of each bucket.
    reading : Reading
        The rules.
    cells : Cells
        Where moves are added, but for busy ones.
    room : Room
        For as many rows at least.

    Returns
    -------
    counted : Counted
        Moves that are not in the cells, entries and ended journeys; held in `room`, so until the next call.
    gained : float
        By how much the dwell in the cells grew.

    Or None if a row is not later than one of its customer that was counted before; `held` is then spoilt.
    """
    library = _library()
    if library is None:
        msg = "the compiled loop is not built; wanted a C compiler when the package was installed"
        raise ImportError(msg)
    n = len(key)
    moves, ends, begun, gaps, marked = room.moves, room.ends, room.begun, room.gaps, room.marked
    old, young, new = held.old, held.young, held.new
    new.make_room(n)
    guess = lowest_bins(cells.upper.tobytes())
    arrays = {
        "key": key, "time": time, "code": code, "first_keys": first_keys, **marked,
        "o_key": old.key, "o_record": old.record, "y_key": young.key, "y_record": young.record,
        "f_key": new.key, "f_record": new.record,
        "m_bucket": moves.bucket, "m_state": moves.state, "m_next": moves.next_code, "m_dwell": moves.dwell,
        "m_before": moves.before, "m_since": moves.since, "m_busy": moves.busy,
        "e_bucket": ends.bucket, "e_state": ends.state, "e_outcome": ends.outcome,
        "e_sure": ends.sure, "e_steps": ends.steps, "e_elapsed": ends.elapsed, "b_bucket": begun.bucket,
        "b_state": begun.state, "b_sure": begun.sure, "g_bucket": gaps.bucket, "g_outcome": gaps.outcome,
        "g_away": gaps.away, "cells": cells.cells, "contexts": cells.contexts,
        "lower": cells.lower, "upper": cells.upper, "guess": guess,
    }  # fmt: skip
    # Kept until the loop is done: an array that had to be copied is in no other hands.
    kept = {name: np.ascontiguousarray(array) for name, array in arrays.items()}
    walk = _Walk(
        **{name: array.ctypes.data for name, array in kept.items()},
        n_rows=n, n_buckets=len(first_keys), n_old=old.n, n_young=young.n, n_fresh=new.n,
        n_bins=len(cells.upper) if len(cells.cells) else 0,
        first_bucket=cells.first_bucket, n_states=cells.n_states, whole_days=cells.whole_days,
        mature_before=cells.mature_before, n_slots=reading.order,
        first_state=reading.first_state, first_churned=FIRST_OUTCOME + reading.n_converted,
        silence=_NO_SILENCE if reading.silence_us is None else reading.silence_us,
        same_outcome=reading.same_outcome_us, merge=reading.merge_repeats, log_start=reading.log_start_us,
        complete=reading.complete_history, busy_after=reading.busy_after,
    )  # fmt: skip
    if library.journeys_walk(ctypes.byref(walk)) == _OUT_OF_ORDER:
        return None
    new.n = walk.n_fresh
    counted = Counted(
        moves=(_first(moves, walk.n_moves),),
        entries=_first(begun, walk.n_begun),
        ends=(_first(ends, walk.n_ends),),
        gaps=replace(
            gaps, bucket=gaps.bucket[: walk.n_gaps], outcome=gaps.outcome[: walk.n_gaps], away=gaps.away[: walk.n_gaps]
        ),
        repeated=marked["repeated"][: walk.n_repeated],
        bare=marked["bare"][: walk.n_bare],
        again=marked["again"][: walk.n_again],
        unsure_visits=walk.unsure_visits,
    )
    return counted, walk.gained


def gathered(
    order: IntArray,
    key: NDArray[np.uint64],
    time: IntArray,
    event: NDArray[np.int32],
    code_of_event: NDArray[np.int32],
    room: Room,
) -> Rows | None:
    """Return customer, time and code of rows in the given order; held in `room`.

    Parameters
    ----------
    order : ndarray of int64, shape (n,)
        Positions, by customer.
    key, time, event : ndarray, shape (n_rows,)
        Customer, microseconds and raw event in input order.
    code_of_event : ndarray of int32
        Code of each raw event.
    room : Room
        For as many rows at least.

    Returns
    -------
    tuple of three ndarray, shape (n,), or None
        None if a row is not later than the one before it of the same customer.
    """
    n = len(order)
    out = room.rows[0][:n], room.rows[1][:n], room.rows[2][:n]
    given = [np.ascontiguousarray(array) for array in (order, key, time, event, code_of_event)]
    not_later = _library().journeys_gather(n, *(array.ctypes.data for array in (*given, *out)))
    return None if not_later else out


def mixed(words: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Return each word mixed, as `identity.mix` says."""
    words = np.ascontiguousarray(words)
    out = np.empty_like(words)
    _library().journeys_mix(len(words), words.ctypes.data, out.ctypes.data)
    return out


def text_keys(offsets: NDArray[Any], data: NDArray[np.uint8]) -> NDArray[np.uint64]:
    """Return the key of each text, given at which byte each begins and the last one ends (`identity` says how)."""
    out = np.empty(len(offsets) - 1, np.uint64)
    given = [np.ascontiguousarray(array) for array in (offsets, data)]
    wide = offsets.dtype == np.int64
    _library().journeys_text_keys(len(out), wide, *(array.ctypes.data for array in (*given, out)))
    return out


def by_bucket(keys: NDArray[np.uint64], first_keys: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Return keys renumbered bucket by bucket, as `identity.bucket_major` says."""
    keys = np.ascontiguousarray(keys)
    out = np.empty_like(keys)
    _library().journeys_bucket_major(len(keys), *(array.ctypes.data for array in (keys, first_keys, out)))
    return out


def sorted_positions(key: NDArray[np.uint64], bits: int) -> IntArray | None:
    """Return the order of keys, found by sorting their leading bits together with their positions.

    Parameters
    ----------
    key : ndarray of uint64, shape (n,)
    bits : int
        How many a position needs.

    Returns
    -------
    ndarray of int64, shape (n,), or None
        None if keys that share the leading bits came to stand in the wrong order.
    """
    key = np.ascontiguousarray(key)
    packed = np.empty_like(key)
    given = len(key), bits, key.ctypes.data, packed.ctypes.data
    _library().journeys_pack(*given)
    packed.sort()
    return None if _library().journeys_positions(*given) else packed.view(np.int64)


def group_sums(values: IntArray, order: IntArray, start: IntArray) -> IntArray:
    """Return the sum of each group of values; group g is what `order` names from `start[g]` on to the next start."""
    if not is_built():
        return np.add.reduceat(values[order], start)
    out = _times(len(start))
    values, order, start = (np.ascontiguousarray(array, np.int64) for array in (values, order, start))
    address, first, given, sums = (array.ctypes.data for array in (order, start, values, out))
    _library().journeys_group_sums(len(order), address, len(start), first, given, sums)
    return out


def insert(
    n: int,
    key: NDArray[np.uint64],
    record: NDArray[np.void],
    n_new: int,
    new_key: NDArray[np.uint64],
    new_record: NDArray[np.void],
) -> None:
    """Put records of `n_new` customers among those of `n` others, behind which there is room for them."""
    given = n, key.ctypes.data, record.ctypes.data, n_new, new_key.ctypes.data, new_record.ctypes.data
    _library().journeys_insert(*given)


def _first(records: T, n: int) -> T:
    """Return the first `n` records."""
    held: dict[str, Any] = {name: None if column is None else column[:n] for name, column in vars(records).items()}
    return type(records)(**held)


def _bytes(n: int) -> NDArray[np.uint8]:
    return np.empty(n, np.uint8)


def _flags(n: int) -> NDArray[np.bool_]:
    return np.empty(n, np.bool_)


def _codes(n: int) -> NDArray[np.int32]:
    return np.empty(n, np.int32)


def _times(n: int) -> IntArray:
    return np.empty(n, np.int64)
