"""Many small systems of equations at once: those of a chain that falls into parts without a move between them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray

_LARGEST = 64  # states of a piece up to which all are solved at once
_MOST_ENTRIES = 8_000_000  # numbers that the inverses may hold together


@dataclass(frozen=True, eq=False)
class Pieces:
    """Inverses of I - P, piece by piece.

    Attributes
    ----------
    piece, slot : int arrays, shape (n,)
        Which piece each state is in, and its place there.
    inverse : float array, shape (n_pieces, largest, largest)
        Mean number of visits to one state from another; pieces smaller than the largest are filled up.
    """

    piece: IntArray
    slot: IntArray
    inverse: FloatArray

    def solve(self, right: FloatArray, transposed: bool = False) -> FloatArray:
        """Solve (I - P) x = b for one or several right sides, or the transposed system."""
        columns = right.reshape(len(self.piece), -1)
        x = np.zeros((*self.inverse.shape[:2], columns.shape[1]))
        x[self.piece, self.slot] = columns
        inverse = self.inverse.transpose(0, 2, 1) if transposed else self.inverse
        with np.errstate(over="ignore", invalid="ignore"):
            return np.asarray((inverse @ x)[self.piece, self.slot].reshape(right.shape), dtype=np.float64)

    def error_of(self, x: FloatArray, right: FloatArray) -> FloatArray:
        """Return zeros, shape (n,): only the last digits can be off."""
        return np.zeros(len(x))


def pieces(n: int, row: IntArray, column: IntArray, p: FloatArray, excess: FloatArray) -> Pieces | None:
    """Return the solver of a chain that falls into small pieces, None for any other.

    Parameters
    ----------
    n, row, column, p, excess
        As in `journeys.kernels.solvers.solver`.

    Notes
    -----
    States are taken out of all pieces side by side, as in `journeys.kernels.reduction.eliminate`: only sums,
    products and quotients of numbers that are not negative occur, so all results have nearly all digits.

    References
    ----------
    W. K. Grassmann, M. I. Taksar and D. P. Heyman, Operations Research 33 (1985) 1107-1116.

    Examples
    --------
    Two states that each stay in half of the moves, in one of them by way of a third.

    >>> found = pieces(3, np.array([0, 1, 2]), np.array([0, 2, 1]), np.array([0.5, 1.0, 0.5]), np.array([0.5, 0, 0.5]))
    >>> found.solve(np.ones(3)).tolist()
    [2.0, 4.0, 3.0]
    """
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    graph = csr_array((np.ones(len(row)), (row, column)), shape=(n, n))
    n_pieces, piece = connected_components(graph, directed=False)
    size = np.bincount(piece, minlength=n_pieces)
    largest = int(size.max(initial=0))
    if n_pieces < 2 or largest > _LARGEST or n_pieces * largest**2 > _MOST_ENTRIES:
        return None
    order = np.argsort(piece, kind="stable")
    slot = np.empty(n, dtype=np.int64)
    slot[order] = np.arange(n) - np.repeat(np.cumsum(size) - size, size)
    front, left = np.zeros((n_pieces, largest, largest)), np.ones((n_pieces, largest))
    front[piece[row], slot[row], slot[column]] = p
    left[piece, slot] = excess
    return Pieces(piece.astype(np.int64), slot, _inverted(front, left))


def _inverted(front: FloatArray, excess: FloatArray) -> FloatArray:
    """Invert I - P of all pieces; both arguments are worked on in place."""
    m = front.shape[1]
    inverse = np.zeros_like(front)
    inverse[:, np.arange(m), np.arange(m)] = 1.0
    # a probability below the smallest number may leave 0 to divide by: what comes of it is not finite
    with np.errstate(all="ignore"):
        for k in range(m):
            row, column = front[:, k, None, k + 1 :], front[:, k + 1 :, k, None]
            front[:, k, k] = excess[:, k] + row[:, 0].sum(axis=1)
            column /= front[:, k, k, None, None]
            front[:, k + 1 :, k + 1 :] += column * row
            excess[:, k + 1 :] += column[:, :, 0] * excess[:, k, None]
            inverse[:, k + 1 :, : k + 1] += column * inverse[:, k, None, : k + 1]
        for k in range(m - 1, -1, -1):
            inverse[:, k] += (front[:, k, None, k + 1 :] @ inverse[:, k + 1 :])[:, 0]
            inverse[:, k] /= front[:, k, k, None]
    return inverse
