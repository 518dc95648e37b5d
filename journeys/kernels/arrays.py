"""The array types that the kernels speak of, and the sum they all use."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]


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
