"""The equations of a walk, solved by a full matrix, a sparse one, or checked iteration, whichever fits."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Protocol

import numpy as np

from journeys.errors import LogError
from journeys.kernels.arrays import FloatArray, IntArray, sum_at
from journeys.kernels.ordering import all_at_once, plan
from journeys.kernels.pieces import pieces
from journeys.kernels.reduction import Reduction, reduce

if TYPE_CHECKING:
    from scipy.sparse import csr_array

_DENSE = 500  # most states of which a full matrix is made where few moves occur
_WHOLE = 64  # up to so many states it is not worth while to look for parts
_THIN = 50  # few: not one pair of states in so many
_MOST_ENTRIES = 50_000_000  # most numbers that the factors may hold
_RESIDUAL = 1e-10  # most that iteration may leave, relative to the right side
_ROUNDS = 1_000


class Solver(Protocol):
    """Solves (I - P) x = b and the transposed system."""

    def solve(self, right: FloatArray, transposed: bool = False) -> FloatArray:
        """Solve for one right side, shape (n,), or several, shape (n, n_right)."""
        ...

    def error_of(self, x: FloatArray, right: FloatArray) -> FloatArray:
        """Bound how far off a solution may be, shape (n,); 0 where only the last digits can be."""
        ...


def solver(n: int, row: IntArray, column: IntArray, p: FloatArray, excess: FloatArray) -> Solver:
    """Choose and prepare a solver of (I - P) x = b.

    Parameters
    ----------
    n : int
        Number of states.
    row, column : int arrays, shape (n_moves,)
        Moves between them; no pair comes twice.
    p : float array, shape (n_moves,)
        Their probabilities, positive.
    excess : float array, shape (n,)
        Probability of a move out of all these states; from every state one can be reached. The diagonal of I - P
        is taken as this and the moves to other states together.

    Returns
    -------
    Solver
        `Pieces` where the states fall into many small parts; else a `Reduction`, full up to 500 states or where many
        pairs of states have moves and sparse above; an `Iteration` where its factors would hold more than 50 million
        numbers.

    Raises
    ------
    LogError
        By its `solve`, if the factors would be too many and iteration does not come to an end either.

    Examples
    --------
    >>> found = solver(2, np.array([0]), np.array([1]), np.array([0.5]), np.array([0.5, 0.25]))
    >>> found.solve(np.array([0.0, 0.25])).tolist()
    [0.5, 1.0]
    """
    apart = pieces(n, row, column, p, excess) if n > _WHOLE else None
    if apart is not None:
        return apart
    full = n <= _DENSE or len(p) * _THIN >= n * n
    order = all_at_once(n) if full else plan(n, row, column)
    if order.entries <= _MOST_ENTRIES:
        return Exact(reduce(order, row, column, p, excess))
    return Iteration(n, row, column, p, excess, order.entries)


@dataclass(frozen=True, eq=False)
class Exact:
    """A solver by factors, right to nearly all digits."""

    factors: Reduction

    def solve(self, right: FloatArray, transposed: bool = False) -> FloatArray:
        """Solve for one or several right sides."""
        return self.factors.solve(right, transposed)

    def error_of(self, x: FloatArray, right: FloatArray) -> FloatArray:
        """Return zeros, shape (n,)."""
        return np.zeros(len(x))


@dataclass(frozen=True, eq=False)
class Iteration:
    """A solver for chains of which the factors would be too many.

    Parameters
    ----------
    n, row, column, p, excess
        As in `solver`.
    entries : int
        How many numbers the factors would hold.

    Notes
    -----
    Rows are scaled by the probability of leaving the state. Each solution is checked: what it leaves of the right
    side is at most 1e-10 of it. With r left, and w the mean number of moves until these states are left, x is off
    by at most max|r| w, as no element of the inverse is negative.

    References
    ----------
    H. A. van der Vorst, SIAM Journal on Scientific and Statistical Computing 13 (1992) 631-644. Y. Saad and
    M. H. Schultz, the same journal 7 (1986) 856-869.
    """

    n: int
    row: IntArray
    column: IntArray
    p: FloatArray
    excess: FloatArray
    entries: int
    _leaves: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        """Sum what leaves each state."""
        off = self.row != self.column
        leaves = self.excess + sum_at(self.row[off], self.p[off], self.n)
        object.__setattr__(self, "_leaves", leaves)

    @cached_property
    def _scaled(self) -> csr_array:
        from scipy.sparse import csr_array, eye_array

        off = self.row != self.column
        shares = self.p[off] / self._leaves[self.row[off]]
        moves = csr_array((shares, (self.row[off], self.column[off])), shape=(self.n, self.n))
        return csr_array(eye_array(self.n) - moves)

    @cached_property
    def _scaled_back(self) -> csr_array:
        from scipy.sparse import csr_array

        return csr_array(self._scaled.T)

    @cached_property
    def _moves_to_go(self) -> FloatArray:
        return self._one(self._scaled, np.ones(self.n))

    def solve(self, right: FloatArray, transposed: bool = False) -> FloatArray:
        """Solve for one or several right sides, each checked."""
        columns = right.reshape(self.n, -1)
        x = np.empty_like(columns)
        for k in range(columns.shape[1]):
            if transposed:
                x[:, k] = self._one(self._scaled_back, columns[:, k]) / self._leaves
            else:
                x[:, k] = self._one(self._scaled, columns[:, k] / self._leaves)
        return x.reshape(right.shape)

    def error_of(self, x: FloatArray, right: FloatArray) -> FloatArray:
        """Bound how far off a solution for one right side may be, shape (n,)."""
        off = float(np.abs(right / self._leaves - self._scaled @ x).max(initial=0.0))
        off += float(np.finfo(np.float64).eps * np.abs(x).max(initial=0.0))
        return np.asarray(off * self._moves_to_go, dtype=np.float64)

    def _one(self, matrix: csr_array, right: FloatArray) -> FloatArray:
        """Solve for one right side, scaled."""
        from scipy.sparse.linalg import bicgstab, gmres

        size = float(np.linalg.norm(right))
        if size == 0:
            return np.zeros(self.n)
        # asked for more than is checked, since the methods carry the residual along and do not compute it
        wanted, x = _RESIDUAL / 20.0, np.zeros(self.n)
        for method, rounds in ((bicgstab, _ROUNDS), (gmres, _ROUNDS // 20)):
            found, _ = method(matrix, right, x0=x, rtol=wanted, atol=0.0, maxiter=rounds)
            if np.linalg.norm(right - matrix @ found) <= _RESIDUAL * size:
                return np.asarray(found, dtype=np.float64)
            x = found if np.isfinite(found).all() else x
        msg = (
            f"a chain of {self.n:,} states with {len(self.p):,} moves between them cannot be solved: its factors "
            f"would hold {self.entries / 1e6:,.0f} million numbers (at most {_MOST_ENTRIES / 1e6:,.0f} million are "
            f"kept), and iteration left more than {_RESIDUAL:g} of the right side; gather rare states under one name "
            "with `states` or `unmapped`"
        )
        raise LogError(msg)
