"""What a journey passed before the state it is in: codes of the states before, packed into one whole number.

The state just before stands in the lowest 16 bits, the one before it in the next. Where the journey had not begun yet a
slot holds `ENTRY`; where a journey that may have begun before the log came from, nobody knows: `UNKNOWN`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray as Bools
from journeys.kernels.arrays import IntArray as Ints

ENTRY = 0
UNKNOWN = 1
# Three states and more behind would not fit beside the others into 63 bits.
MOST_SLOTS = 3
_BITS = 16
_ALL = (1 << _BITS) - 1


def nothing_known(n_slots: int) -> int:
    """Return the history of an unsure journey's first state."""
    return sum(UNKNOWN << (_BITS * slot) for slot in range(n_slots))


def extended(before: Ints, state: NDArray[np.int32] | Ints, n_slots: int) -> Ints:
    """Return the histories of states that come after `state`, which had the histories `before`."""
    return ((before << _BITS) | state) & ((1 << (_BITS * n_slots)) - 1)


def slot(before: Ints, which: int) -> Ints:
    """Return the code in a slot, 0 for the state just before.

    Examples
    --------
    >>> history = extended(extended(np.array([0]), np.array([7]), 2), np.array([5]), 2)
    >>> slot(history, 0).tolist(), slot(history, 1).tolist()
    ([5], [7])
    """
    return (before >> (_BITS * which)) & _ALL


def latest(before: Ints, n_slots: int) -> Ints:
    """Return the histories with fewer slots: the last states before."""
    return before & ((1 << (_BITS * n_slots)) - 1)


def earlier(before: Ints) -> Ints:
    """Return the histories without the state just before."""
    return before >> _BITS


def recoded(before: Ints, code: Ints, n_slots: int) -> Ints:
    """Return histories with `code[x]` in the place of each code x."""
    new = np.zeros_like(before)
    for which in range(n_slots):
        new |= code[slot(before, which)].astype(np.int64) << (_BITS * which)
    return new


def along_visits(came_from: NDArray[np.int32], moved: Bools, begun: Ints, carried: Ints, n_slots: int) -> Ints:
    """Return the history of each visit.

    Parameters
    ----------
    came_from : ndarray of int32, shape (n_visits,)
        Code of what the customer did before.
    moved : ndarray of bool, shape (n_visits,)
        Whether the visit belongs to the journey of the visit before; elsewhere a journey begins.
    begun : ndarray of int64, shape (n_visits,)
        The history of a visit that begins a journey; anything elsewhere.
    carried : ndarray of int64, shape (n_visits,)
        The history of the visit before where that is not the one before in the list; elsewhere -1.
    n_slots : int
        How many states before are kept.

    Returns
    -------
    ndarray of int64, shape (n_visits,)

    Notes
    -----
    Each round brings every history one state further; those of journeys that begin are right from the start.
    """
    history = np.where(moved, 0, begun)
    follows = carried < 0
    for _ in range(n_slots):
        last = np.empty_like(history)
        last[:1], last[1:] = 0, history[:-1]
        history = np.where(moved, extended(np.where(follows, last, carried), came_from, n_slots), begun)
    return history
