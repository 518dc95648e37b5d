"""Rows before the first state that may open a journey."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray
from journeys.kernels.records import Reading
from journeys.kernels.stories import Block, marks_of


def before_opener(block: Block, opens: NDArray[np.int32], reading: Reading) -> BoolArray:
    """Tell which rows come before the first state of their journey that may open one.

    Parameters
    ----------
    block : Block
        Rows in order, outcomes among them.
    opens : ndarray of int32
        Codes of the states that may open a journey.
    reading : Reading
        The rules.

    Returns
    -------
    ndarray of bool, shape (n_rows,)

    Notes
    -----
    Where a journey would begin, its rows up to the first opening state or outcome are left out, unless it is a
    customer's first and may have begun before the log: then they are moves in the midst of it.
    """
    marks = marks_of(block, reading)
    breaks = np.flatnonzero(marks.begins)
    may_open = np.isin(block.code, opens) | (block.code < reading.first_state)
    may_open[marks.repeated] = True
    unsure = (marks.prev_code[breaks] == 0) & (not reading.complete_history)
    if reading.silence_us is not None:
        unsure &= block.time[breaks] < reading.log_start_us + reading.silence_us
    # How many openers were seen up to each row since the last break: none means that nothing is open yet.
    so_far = np.cumsum(may_open)
    nth = np.cumsum(marks.begins) - 1
    left = ~may_open & (nth >= 0)
    begin = breaks[np.maximum(nth, 0)] if len(breaks) else np.zeros(len(nth), np.int64)
    left &= begin >= block.start[marks.owner]
    if len(breaks):
        left &= so_far == (so_far[breaks] - may_open[breaks])[np.maximum(nth, 0)]
        left &= ~unsure[np.maximum(nth, 0)]
    return left
