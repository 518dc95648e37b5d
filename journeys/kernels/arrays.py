"""The array types that the kernels speak of, and the sum they all use."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

_ROOM = 16  # up to so many possible numbers for one given, ticking them off is the quicker way


def sum_at(index: IntArray, weights: FloatArray, size: int) -> FloatArray:
    """Sum the weights at each index, as floats even where there is nothing to sum.

    Parameters
    ----------
    index : int array, shape (n,)
        Where each weight belongs, below `size`.
    weights : float array, shape (n,)
        What to sum.
    size : int
        Length of the answer.

    Returns
    -------
    float array, shape (size,)

    Examples
    --------
    >>> sum_at(np.array([0, 2, 0]), np.array([1.0, 2.0, 0.5]), 4).tolist()
    [1.5, 0.0, 2.0, 0.0]
    """
    return np.bincount(index, weights=weights, minlength=size).astype(np.float64, copy=False)


def distinct(key: IntArray, size: int) -> tuple[IntArray, IntArray]:
    """Return the distinct numbers in order, and the place of each number among them.

    Parameters
    ----------
    key : int array, shape (n,)
        From 0 to below `size`.
    size : int
        Where there are not many more numbers possible than given, they are ticked off instead of sorted.

    Returns
    -------
    distinct : int array, shape (n_distinct,)
    place : int array, shape (n,)

    Examples
    --------
    >>> [found.tolist() for found in distinct(np.array([5, 2, 5]), 6)]
    [[2, 5], [1, 0, 1]]
    """
    if size > _ROOM * len(key):
        found, place = np.unique(key, return_inverse=True)
        return found, place
    there = np.zeros(size, dtype=np.bool_)
    there[key] = True
    return np.flatnonzero(there), (np.cumsum(there) - 1)[key]
