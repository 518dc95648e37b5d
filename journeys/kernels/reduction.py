"""States of a chain taken out one after the other without a subtraction, so that small numbers keep their digits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.ordering import Block, Plan, parents

_PANEL = 32  # states between two products of matrices
_AT_ONCE = 16  # right sides
_INVERTED = 128  # states of a block up to which its triangles are kept inverted


@dataclass(frozen=True, eq=False)
class _Factor:
    """One block: its two triangles, inverted where it is small, and its parts below and to the right of it."""

    block: Block
    lower: FloatArray
    upper: FloatArray
    below: FloatArray
    right: FloatArray

    def solve_lower(self, x: FloatArray, transposed: bool) -> None:
        """Solve with the lower triangle, in place."""
        if len(self.lower) == 1:
            return
        if len(self.lower) <= _INVERTED:
            x[:] = (self.lower.T if transposed else self.lower) @ x
        else:
            _triangle(self.lower, x, lower=True, transposed=transposed)

    def solve_upper(self, x: FloatArray, transposed: bool) -> None:
        """Solve with the upper triangle, in place."""
        if len(self.upper) == 1:
            x *= self.upper[0, 0]
        elif len(self.upper) <= _INVERTED:
            x[:] = (self.upper.T if transposed else self.upper) @ x
        else:
            _triangle(self.upper, x, lower=False, transposed=transposed)


@dataclass(frozen=True, eq=False)
class Reduction:
    """A factored I - P, from `reduce`."""

    order: IntArray
    factors: list[_Factor]

    def solve(self, right: FloatArray, transposed: bool = False) -> FloatArray:
        """Solve (I - P) x = b, or the transposed system.

        Parameters
        ----------
        right : float array, shape (n,) or (n, n_right)
            One right side, or several.
        transposed : bool, default False
            Solve x (I - P) = b.

        Returns
        -------
        float array, shaped like `right`
            Every number is right to nearly all its digits, however small, where `right` has no negative ones.
        """
        if not len(self.order):
            return np.zeros(right.shape)
        columns = right.reshape(len(self.order), -1)
        # a few at a time where there are many blocks: threads that wait for one another cost more than they help
        few = _AT_ONCE if len(self.factors) > 1 else max(columns.shape[1], 1)
        out = np.empty(columns.shape)
        with np.errstate(all="ignore"):
            # what is too large or too small for a float is seen in the answer
            for first in range(0, columns.shape[1], few):
                x = np.ascontiguousarray(columns[self.order, first : first + few], dtype=np.float64)
                self._sweep(x, transposed)
                out[self.order, first : first + few] = x
        return out.reshape(right.shape)

    def _sweep(self, x: FloatArray, transposed: bool) -> None:
        """Solve in place, in the order of the factors."""
        for one in self.factors:
            here = x[one.block.start : one.block.stop]
            (one.solve_upper if transposed else one.solve_lower)(here, transposed)
            if len(one.block.rest):
                x[one.block.rest] += (one.right.T if transposed else one.below) @ here
        for one in reversed(self.factors):
            here = x[one.block.start : one.block.stop]
            if len(one.block.rest):
                here += (one.below.T if transposed else one.right) @ x[one.block.rest]
            (one.solve_lower if transposed else one.solve_upper)(here, transposed)


def _triangle(own: FloatArray, x: FloatArray, *, lower: bool, transposed: bool) -> None:
    """Solve with one triangle of a matrix, in place; the lower one has ones in its diagonal.

    Both arrays are handed over as their transposes, as the library counts by columns.
    """
    from scipy.linalg.blas import dtrsm

    done = dtrsm(1.0, own.T, x.T, side=1, lower=int(not lower), trans_a=int(transposed), diag=int(lower),
                 overwrite_b=1)  # fmt: skip
    if not np.shares_memory(done, x):
        x[:] = done.T


def eliminate(front: FloatArray, excess: FloatArray, n_out: int) -> None:
    """Take the first states out of a set of states, in place.

    Parameters
    ----------
    front : float array, shape (m, m)
        Probabilities of the moves between m states; what stands in the diagonal is not read. On return its first
        `n_out` rows hold the probabilities of moves at the time each state was taken out, with the probability of
        leaving it in the diagonal, the first columns the visits to it per visit to the others, and the rest the
        moves between those that are left, by way of those that are out among them.
    excess : float array, shape (m,)
        Probability of leaving all the m states at once.
    n_out : int
        How many states to take out.

    Notes
    -----
    The probability of leaving a state is summed over what leaves it and never taken as 1 minus that of staying.
    Only sums, products and quotients of numbers that are not negative occur, so each result is right to nearly
    all digits, also where a state is hardly ever left. The work is done in panels, so that most of it is products
    of matrices.

    References
    ----------
    W. K. Grassmann, M. I. Taksar and D. P. Heyman, Operations Research 33 (1985) 1107-1116.
    C. A. O'Cinneide, Numerische Mathematik 65 (1993) 109-120.

    Examples
    --------
    State 1 after state 0 is out: it goes to 0 and on to the end in half of its moves.

    >>> front, excess = np.array([[0.0, 0.5], [1.0, 0.0]]), np.array([0.5, 0.0])
    >>> eliminate(front, excess, 1)
    >>> front.tolist(), excess.tolist()
    ([[1.0, 0.5], [1.0, 0.5]], [0.5, 0.5])
    """
    for a in range(0, n_out, _PANEL):
        b = min(a + _PANEL, n_out)
        for k in range(a, b):
            row, column = front[k, k + 1 :], front[k + 1 :, k]
            if k > a:
                row += front[k, a:k] @ front[a:k, k + 1 :]
                column += front[k + 1 :, a:k] @ front[a:k, k]
                excess[k] += front[k, a:k] @ excess[a:k]
            leaves = excess[k] + row.sum()
            front[k, k] = leaves
            column /= leaves
        front[b:, b:] += front[b:, a:b] @ front[a:b, b:]
        excess[b:] += front[b:, a:b] @ excess[a:b]


def reduce(plan: Plan, row: IntArray, column: IntArray, p: FloatArray, excess: FloatArray) -> Reduction:
    """Factor I - P without a subtraction.

    Parameters
    ----------
    plan : Plan
        Order and blocks, made for these moves.
    row, column : int arrays, shape (n_moves,)
        Moves between the states; those of a state to itself are not read.
    p : float array, shape (n_moves,)
        Their probabilities.
    excess : float array, shape (n,)
        Probability of a move out of all these states. With the moves to other states it makes up the diagonal of
        I - P.

    Returns
    -------
    Reduction

    Notes
    -----
    Blocks are taken out in fronts: a block with the states that it meets, as a small full matrix. What is left of
    it is handed to the next block that holds one of those states.

    References
    ----------
    I. S. Duff and J. K. Reid, ACM Transactions on Mathematical Software 9 (1983) 302-325.

    Examples
    --------
    A walk on 0 and 1 that ends with probability 1e-30 in each move out of 1.

    >>> from journeys.kernels.ordering import all_at_once
    >>> found = reduce(all_at_once(2), np.array([0, 1]), np.array([1, 0]), np.ones(2), np.array([0.0, 1e-30]))
    >>> found.solve(np.ones(2)).round(-17).tolist()
    [2e+30, 2e+30]
    """
    place = np.empty(len(plan.order), dtype=np.int64)
    place[plan.order] = np.arange(len(plan.order))
    i, j = place[row], place[column]
    starts = np.array([b.start for b in plan.blocks])
    of_block = np.searchsorted(starts, np.minimum(i, j), side="right") - 1
    by_block = np.argsort(of_block, kind="stable")
    bounds = np.searchsorted(of_block[by_block], np.arange(len(starts) + 1))
    left = excess[plan.order].astype(np.float64)
    parent = parents(plan.blocks)
    handed: list[list[tuple[IntArray, FloatArray]]] = [[] for _ in plan.blocks]
    factors = []
    for at, block in enumerate(plan.blocks):
        mine = by_block[bounds[at] : bounds[at + 1]]
        here = np.concatenate([np.arange(block.start, block.stop), block.rest])
        n_out = block.stop - block.start
        front = np.zeros((len(here), len(here)))
        front[np.searchsorted(here, i[mine]), np.searchsorted(here, j[mine])] = p[mine]
        for rest, update in handed[at]:
            to = np.searchsorted(here, rest)
            front[to[:, None], to] += update
        handed[at] = []
        e = left[here]
        # a probability below the smallest number may leave 0 to divide by: what comes of it is not finite
        with np.errstate(divide="ignore", invalid="ignore", over="ignore", under="ignore"):
            eliminate(front, e, n_out)
            factors.append(_split(block, front, n_out))
        left[here] = e
        if parent[at] >= 0:
            handed[parent[at]].append((block.rest, front[n_out:, n_out:].copy()))
    return Reduction(plan.order, factors)


def _split(block: Block, front: FloatArray, n_out: int) -> _Factor:
    own = front if n_out == len(front) else front[:n_out, :n_out].copy()
    below, right = front[n_out:, :n_out].copy(), front[:n_out, n_out:].copy()
    if n_out == 1:
        return _Factor(block, np.ones((1, 1)), 1.0 / own, below, right)
    np.negative(own, out=own)
    own[np.diag_indices(n_out)] *= -1.0
    if n_out > _INVERTED:
        return _Factor(block, own, own, below, right)
    return _Factor(block, _inverted(own, lower=True), _inverted(own, lower=False), below, right)


def _inverted(own: FloatArray, *, lower: bool) -> FloatArray:
    """Invert one triangle of a matrix; no element of the inverse is negative, so that no digits are lost."""
    from scipy.linalg.lapack import dtrtri

    part = np.tril(own, -1) + np.eye(len(own)) if lower else np.triu(own)
    inverse, failed = dtrtri(part.T, lower=int(not lower), unitdiag=int(lower), overwrite_c=1)
    return np.asarray(inverse.T if failed == 0 else np.full_like(own, np.nan), dtype=np.float64)
