"""The moves of a chain on the way to a target, with the solver of their equations."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.graph import can_reach
from journeys.kernels.solvers import Solver, solver

if TYPE_CHECKING:
    from scipy.sparse import csr_array

_LOST = 1e-9  # a row that sums to less than 1 by more than this loses walks on the way
_CLOSE = 1e-6  # an error of iteration above this, relative to the answer, is told


@dataclass(frozen=True, eq=False)
class Moves:
    """The moves, and the solver on the states from which the target can be reached.

    Attributes
    ----------
    n_states : int
        Nodes from this number on are outcomes.
    state, target, p, mean, second, is_target
        As in `journeys.kernels.absorption.passage`.
    open_states : bool array, shape (n_states,)
        The target can be reached from here and has not been yet.
    certain : bool array, shape (n_states,)
        The target cannot be missed from here.
    solver : Solver
        Of the equations over the open states.
    """

    n_states: int
    state: IntArray
    target: IntArray
    p: FloatArray
    mean: FloatArray
    second: FloatArray
    is_target: BoolArray
    open_states: BoolArray
    certain: BoolArray
    solver: Solver

    def over_nodes(self, x: FloatArray, at_target: float) -> FloatArray:
        """Values at states, shape (n_states, ...), spread over all nodes, shape (n_nodes, ...)."""
        full = np.zeros((len(self.is_target), *x.shape[1:]))
        full[self.is_target] = at_target
        full[: self.n_states] = x
        return full

    def pull(self, weights: FloatArray) -> FloatArray:
        """Sum over the moves out of each state, shape (n_states,)."""
        return sum_at(self.state, weights, self.n_states)

    def sums(self, weights: FloatArray) -> csr_array:
        """Matrix that sums what stands at the moves out of each state, weighted, shape (n_states, n_moves)."""
        from scipy.sparse import csr_array

        n_moves = len(self.state)
        return csr_array((weights, (self.state, np.arange(n_moves))), shape=(self.n_states, n_moves))

    def matrix(self, values: FloatArray) -> csr_array:
        """Values at the moves between states as a matrix, shape (n_states, n_states)."""
        from scipy.sparse import csr_array

        inside = self.target < self.n_states
        at = (self.state[inside], self.target[inside])
        return csr_array((values[inside], at), shape=(self.n_states, self.n_states))

    def push(self, row: FloatArray, weights: FloatArray) -> FloatArray:
        """Row vector times a matrix over states, shape (n_states,)."""
        inside = self.target < self.n_states
        return sum_at(self.target[inside], (row[self.state] * weights)[inside], self.n_states)

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve x = right + P x on the states that are left open; 0 elsewhere.

        NaN in `right` stands for what is not known: NaN comes back from wherever it can be met.
        """
        x, at = np.zeros(right.shape), np.flatnonzero(self.open_states)
        unknown = np.isnan(right[at])
        x[at] = self.solver.solve(np.where(unknown, 0.0, right[at]))
        if unknown.any():
            here = np.zeros(len(self.is_target), dtype=np.bool_)
            here[at[unknown.reshape(len(unknown), -1).any(axis=1)]] = True
            used = (self.p > 0) & ~self.is_target[self.state]
            met = can_reach(len(here), self.state[used], self.target[used], here)
            x[at[met[at]]] = np.nan
        return x

    def solve_back(self, row: FloatArray) -> FloatArray:
        """Solve x = row + x P in the same way."""
        x = np.zeros(self.n_states)
        x[self.open_states] = self.solver.solve(row[self.open_states], transposed=True)
        return x

    def off(self, x: FloatArray, right: FloatArray) -> BoolArray:
        """Tell where a solution may be off by more than a millionth of itself, shape (n_states,)."""
        far, at = np.zeros(self.n_states, dtype=np.bool_), self.open_states
        far[at] = self.solver.error_of(x[at], np.nan_to_num(right[at])) > _CLOSE * np.abs(x[at])
        return far


def moves_to(
    n_states: int,
    n_nodes: int,
    state: IntArray,
    target: IntArray,
    p: FloatArray,
    mean: FloatArray,
    second: FloatArray,
    is_target: BoolArray,
) -> Moves:
    """Prepare the moves for questions about the way to a target.

    Parameters
    ----------
    n_states, n_nodes, state, target, p, mean, second, is_target
        As in `journeys.kernels.absorption.passage`.

    Returns
    -------
    Moves

    Examples
    --------
    >>> p = np.array([0.25, 0.75])
    >>> found = moves_to(1, 3, np.array([0, 0]), np.array([1, 2]), p, p, p, np.arange(3) == 2)
    >>> found.solve(np.array([1.0])).tolist(), found.certain.tolist()
    ([1.0], [False])
    """
    used = p > 0
    reaches = can_reach(n_nodes, state[used], target[used], is_target)[:n_states]
    open_states = reaches & ~is_target[:n_states]
    at = np.flatnonzero(open_states)
    index = np.full(n_nodes, -1, dtype=np.int64)
    index[at] = np.arange(len(at))
    from_open = used & (index[state] >= 0)
    inner = from_open & (index[target] >= 0)
    outer = from_open & ~inner
    # a row that sums to 1 but for rounding loses nothing
    lost = 1.0 - sum_at(state, p, n_states)
    excess = sum_at(state[outer], p[outer], n_states) + np.where(np.abs(lost) > _LOST, lost, 0.0)
    solve = solver(len(at), index[state[inner]], index[target[inner]], p[inner], excess[at])
    certain = _certain(n_states, state, target, p, is_target, open_states)
    return Moves(n_states, state, target, p, mean, second, is_target, open_states, certain, solve)


def _certain(
    n_states: int, state: IntArray, target: IntArray, p: FloatArray, is_target: BoolArray, open_states: BoolArray
) -> BoolArray:
    """States from which no walk can miss the target, shape (n_states,)."""
    used = (p > 0) & ~is_target[state]
    elsewhere = ~is_target
    elsewhere[:n_states] &= ~open_states
    elsewhere[:n_states] |= open_states & (1.0 - sum_at(state, p, n_states) > _LOST)
    return ~can_reach(len(is_target), state[used], target[used], elsewhere)[:n_states]
