"""Which touchpoints each journey has touched, the first and the last of them, and what its events are worth."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.stories import Block, Codes, Marks, Stories, last_legs, legs_of

# The bit of each number of a touchpoint; 0 is none.
_BIT = np.concatenate([np.zeros(1, np.uint64), np.uint64(1) << np.arange(63, dtype=np.uint64)])
# Sums stay well inside int64.
MOST = 9.0e18
_LIMB = 32
_LOW = (1 << _LIMB) - 1

Columns = dict[str, NDArray[Any]]


def touches_and_values(
    block: Block, marks: Marks, story: Stories, ended: IntArray, silent: IntArray
) -> tuple[Columns, Columns, Columns]:
    """Return what the journeys that end in a block have touched and are worth, and those that run on.

    Parameters
    ----------
    block, marks, story
        The rows, what each of them is, and the journeys they stand in.
    ended, silent : ndarray of int64
        Positions of rows that end a journey, and of rows after a silence.

    Returns
    -------
    by_outcome, by_silence : dict of str to ndarray
        Columns `touched`, `first_touch`, `last_touch` and `value` of `Ends`, one element per position.
    latest : dict of str to ndarray
        The same of each customer's latest journey, and `total_value`, what the block adds to the customer's.

    Raises
    ------
    OverflowError
        If values add up to more than an int64 can hold.

    Notes
    -----
    An outcome merged with the one before it is worth nothing.
    """
    begin = legs_of(block, marks, story)
    goes_on, owner = ~marks.begins[begin], marks.owner[begin]
    legs: Columns = {}
    more: Columns = {}
    if block.touch is not None:
        legs |= _touches(block, block.touch, begin, goes_on, owner)
    if block.value is not None:
        value = block.value.copy()
        value[marks.repeated] = 0
        legs |= _values(block, value, begin, goes_on, owner)
        more = {"total_value": _totals(block, value)}
    by_outcome = {name: column[np.searchsorted(begin, ended, side="right") - 1] for name, column in legs.items()}
    owner = marks.owner[silent]
    leg = np.searchsorted(begin, silent - 1, side="right") - 1
    by_silence = _picked(block, legs, leg, owner, silent > block.start[owner])
    last, mine = last_legs(block, begin)
    latest = _picked(block, legs, last, np.arange(len(block.start), dtype=np.int32), mine)
    return by_outcome, by_silence, {**latest, **more}


def _touches(block: Block, touch: NDArray[np.int8], begin: IntArray, goes_on: BoolArray, owner: Codes) -> Columns:
    """Return, for each leg, which touchpoints its journey has touched by then, the first and the last."""
    places = np.flatnonzero(touch)
    low, high = np.searchsorted(places, begin), np.searchsorted(places, np.append(begin[1:], len(touch)))
    some = low < high
    first, last = np.zeros(len(begin), np.int32), np.zeros(len(begin), np.int32)
    first[some] = touch[places[low[some]]]
    last[some] = touch[places[high[some] - 1]]
    touched = np.bitwise_or.reduceat(_BIT[touch], begin)
    before, first_before, last_before = (
        np.where(goes_on, _prior(block, name)[owner], 0) for name in ("touched", "first_touch", "last_touch")
    )
    return {
        "touched": touched | before.astype(np.uint64),
        "first_touch": np.where(first_before > 0, first_before, first).astype(np.int32),
        "last_touch": np.where(some, last, last_before).astype(np.int32),
    }


def _values(block: Block, value: IntArray, begin: IntArray, goes_on: BoolArray, owner: Codes) -> Columns:
    """Return, for each leg, what its journey is worth by then."""
    before = np.where(goes_on, _prior(block, "value")[owner], 0)
    _check_room(value, begin, before)
    return {"value": np.add.reduceat(value, begin) + before}


def _totals(block: Block, value: IntArray) -> IntArray:
    """Return what the block adds to the value of each customer."""
    _check_room(value, block.start, np.where(block.held, _prior(block, "total_value"), 0))
    total: IntArray = np.add.reduceat(value, block.start)
    return total


def _check_room(value: IntArray, begin: IntArray, before: IntArray) -> None:
    """Raise if a running sum outgrows int64: wherever the stream is split, the same logs are refused."""
    most = float(np.abs(value.astype(np.float64)).sum()) + float(np.abs(before.astype(np.float64)).max(initial=0))
    if most <= MOST or not len(begin):
        return
    segment = np.searchsorted(begin, np.arange(len(value)), side="right") - 1
    inside = segment >= 0
    running = before[segment[inside]].astype(np.float64)
    for part, weight in ((value >> _LIMB, float(1 << _LIMB)), (value & _LOW, 1.0)):
        so_far = np.cumsum(part)
        running += (so_far - (so_far - part)[begin][segment])[inside] * weight
    if np.abs(running).max() > MOST:
        msg = "values add up to more than an int64 can hold"
        raise OverflowError(msg)


def _picked(block: Block, legs: Columns, leg: IntArray, owner: Codes, here: BoolArray) -> Columns:
    """Return the legs' columns where the journey is in the block, the carried ones elsewhere."""
    picked: Columns = {}
    for name, column in legs.items():
        inside = column[leg] if len(column) else np.zeros(len(leg), column.dtype)
        picked[name] = np.where(here, inside, _prior(block, name)[owner])
    return picked


def _prior(block: Block, name: str) -> NDArray[Any]:
    """Return a column of what is carried."""
    column: NDArray[Any] | None = getattr(block.prior, name)
    if column is None:
        msg = f"the records carry no {name}"
        raise ValueError(msg)
    return column
