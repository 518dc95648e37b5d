"""Probability, mean and spread of the first passage to a set of nodes, with derivatives."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.graph import can_reach

Solve = Callable[[FloatArray, bool], FloatArray]
Gradient = tuple[FloatArray, FloatArray, FloatArray]

_DENSE = 500  # most states of which a full matrix is made where few moves occur
_THIN = 50  # few: not one pair of states in so many
_LOST = 1e-9  # a row that sums to less than 1 by more than this loses walks on the way


@dataclass(frozen=True, eq=False)
class Passage:
    """First passage to a target from every state.

    Attributes
    ----------
    probability : float array, shape (n_states,)
        Of ever reaching the target; exactly 1 where nothing else can happen.
    certain : bool array, shape (n_states,)
        Nothing else can happen, decided on the graph.
    mean_given, sd_given : float arrays, shape (n_states,)
        Mean and standard deviation of the time to the target given that it is reached;
        NaN where it cannot be.
    first_moment, second_moment : float arrays, shape (n_states,)
        Mean of the time, and of its square, counted 0 where the target is not reached.
    """

    probability: FloatArray
    certain: BoolArray
    mean_given: FloatArray
    sd_given: FloatArray
    first_moment: FloatArray
    second_moment: FloatArray
    _moves: _Moves

    def gradients(self, start: int) -> dict[str, Gradient]:
        """Differentiate the answers from one state by the moves.

        Parameters
        ----------
        start : int
            The state from which the walk starts.

        Returns
        -------
        dict
            For `probability`, `mean_given` and `sd_given` three arrays of shape
            (n_moves,): derivatives by the probability, the mean and the second moment
            of each move, each taken as free. For steps, where the three are one, add
            them. NaN for times given a target that is not reached, and for a standard
            deviation of 0.

        Examples
        --------
        >>> import numpy as np
        >>> p = np.array([0.5, 0.5])
        >>> walk = passage(1, 3, np.array([0, 0]), np.array([1, 2]), p, p, p, np.arange(3) == 1)
        >>> [a.tolist() for a in walk.gradients(0)["probability"]]
        [[1.0, 0.0], [0.0, 0.0], [0.0, 0.0]]
        """
        v = self._moves
        zero = np.zeros(len(v.p))
        if v.is_target[start]:
            return dict.fromkeys(("probability", "mean_given", "sd_given"), (zero, zero, zero))
        h0 = self.probability[start]
        if h0 <= 0:
            none = np.full(len(v.p), np.nan)
            return {"probability": (zero, zero, zero)} | dict.fromkeys(
                ("mean_given", "sd_given"), (none, none, none)
            )
        unit = np.zeros(v.n_states)
        unit[start] = 1.0
        nu = v.solve_back(unit)
        nu_m = v.solve_back(v.push(nu, v.mean))
        nu_m2 = v.solve_back(v.push(nu, v.second) + 2.0 * v.push(nu_m, v.mean))
        h, g, s = (v.over_nodes(x, at)[v.target] for x, at in self._moments())
        nu, nu_m, nu_m2 = nu[v.state], nu_m[v.state], nu_m2[v.state]
        by_h = nu * h
        by_g = nu * g + nu_m * h
        by_s = (nu * s + 2.0 * nu_m * g + nu_m2 * h, 2.0 * by_g, by_h)
        mean, sd, ratio = self.mean_given[start], self.sd_given[start], self.second_moment[start] / h0
        d_mean = ((by_g - mean * by_h) / h0, by_h / h0, zero)
        d_square = ((by_s[0] - ratio * by_h) / h0, by_s[1] / h0, by_s[2] / h0)
        half = np.nan if sd == 0 else 0.5 / sd
        d_sd = [half * (d_square[x] - 2.0 * mean * d_mean[x]) for x in range(3)]
        return {
            "probability": (by_h, zero, zero),
            "mean_given": d_mean,
            "sd_given": (d_sd[0], d_sd[1], d_sd[2]),
        }

    def _moments(self) -> tuple[tuple[FloatArray, float], ...]:
        """Moments of order 0, 1, 2 from every state, each with its value at a target."""
        return (self.probability, 1.0), (self.first_moment, 0.0), (self.second_moment, 0.0)


@dataclass(frozen=True, eq=False)
class _Moves:
    """The moves, and the solver on the states from which the target can be reached."""

    n_states: int
    state: IntArray
    target: IntArray
    p: FloatArray
    mean: FloatArray
    second: FloatArray
    is_target: BoolArray
    solve_on: IntArray
    _solve: Solve

    def over_nodes(self, x: FloatArray, at_target: float) -> FloatArray:
        """Values at states, spread over all nodes, shape (n_nodes,)."""
        full = np.where(self.is_target, at_target, 0.0)
        full[: self.n_states] = x
        return full

    def pull(self, weights: FloatArray) -> FloatArray:
        """Sum over the moves out of each state, shape (n_states,)."""
        return sum_at(self.state, weights, self.n_states)

    def push(self, row: FloatArray, weights: FloatArray) -> FloatArray:
        """Row vector times a matrix over states, shape (n_states,)."""
        inside = self.target < self.n_states
        return sum_at(self.target[inside], (row[self.state] * weights)[inside], self.n_states)

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve x = right + P x on the states that are left open; 0 elsewhere.

        NaN in `right` stands for what is not known: NaN comes back from wherever it can be met.
        """
        x = np.zeros(self.n_states)
        unknown = np.isnan(right[self.solve_on])
        x[self.solve_on] = self._solve(np.where(unknown, 0.0, right[self.solve_on]), False)
        if unknown.any():
            here = np.zeros(len(self.is_target), dtype=np.bool_)
            here[self.solve_on[unknown]] = True
            used = (self.p > 0) & ~self.is_target[self.state]
            met = can_reach(len(here), self.state[used], self.target[used], here)
            x[self.solve_on[met[self.solve_on]]] = np.nan
        return x

    def solve_back(self, row: FloatArray) -> FloatArray:
        """Solve x = row + x P in the same way."""
        x = np.zeros(self.n_states)
        x[self.solve_on] = self._solve(row[self.solve_on], True)
        return x


def _solver(size: int, row: IntArray, column: IntArray, p: FloatArray) -> Solve:
    """Solver of (I - P) x = b and of its transpose; P in coordinates, no row sums above 1."""
    if size == 0:
        return lambda b, transposed: b
    if size > _DENSE and len(p) * _THIN < size * size:
        from scipy.sparse import csc_array, eye_array
        from scipy.sparse.linalg import splu

        inner = csc_array((p, (row, column)), shape=(size, size))
        thin: Callable[..., FloatArray] = splu(csc_array(eye_array(size) - inner)).solve
        return lambda b, transposed: thin(b, "T" if transposed else "N")
    from scipy.linalg import lu_factor, lu_solve

    dense = np.eye(size)
    np.subtract.at(dense, (row, column), p)
    factors = lu_factor(dense, overwrite_a=True)
    return lambda b, transposed: lu_solve(factors, b, trans=1) if transposed else lu_solve(factors, b)


def _certain(moves: _Moves, open_states: BoolArray, n_nodes: int) -> BoolArray:
    """States from which no walk can miss the target, shape (n_states,)."""
    m = moves.n_states
    used = (moves.p > 0) & ~moves.is_target[moves.state]
    elsewhere = ~moves.is_target
    elsewhere[:m] &= ~open_states
    elsewhere[:m] |= open_states & (1.0 - moves.pull(moves.p) > _LOST)
    return ~can_reach(n_nodes, moves.state[used], moves.target[used], elsewhere)[:m]


def passage(
    n_states: int,
    n_nodes: int,
    move_state: IntArray,
    move_target: IntArray,
    p: FloatArray,
    mean: FloatArray,
    second: FloatArray,
    is_target: BoolArray,
) -> Passage:
    """Probability and moments of the time to the first visit of a target.

    Parameters
    ----------
    n_states, n_nodes : int
        Nodes 0 to n_states - 1 are states, the rest outcomes.
    move_state, move_target : int arrays, shape (n_moves,)
        Where each move comes from and goes to; no pair comes twice.
    p, mean, second : float arrays, shape (n_moves,)
        Probability of the move; dwell and squared dwell, each times the probability.
        For steps give `p` three times.
    is_target : bool array, shape (n_nodes,)
        The target, outcomes or states. A state in it is not left again: its
        probability is 1 and its moments are 0.

    Returns
    -------
    Passage

    Notes
    -----
    Only states from which the graph leads to the target are solved for, so the matrix
    is never singular. The spread is solved for about the mean, without cancellation.

    References
    ----------
    J. G. Kemeny and J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III.
    R. Pyke, Markov renewal processes with finitely many states, Annals of Mathematical
    Statistics 32 (1961) 1243-1259.

    Examples
    --------
    Steps to outcome 2 of a walk over states 0 and 1 that may also end in outcome 3.

    >>> import numpy as np
    >>> state, target = np.array([0, 0, 1, 1]), np.array([1, 3, 0, 2])
    >>> p = np.array([0.5, 0.5, 0.5, 0.5])
    >>> walk = passage(2, 4, state, target, p, p, p, np.arange(4) == 2)
    >>> walk.probability.round(4).tolist(), walk.mean_given.round(4).tolist()
    ([0.3333, 0.6667], [2.6667, 1.6667])
    """
    used = p > 0
    reaches = can_reach(n_nodes, move_state[used], move_target[used], is_target)[:n_states]
    open_states = reaches & ~is_target[:n_states]
    solve_on = np.flatnonzero(open_states)
    index = np.full(n_nodes, -1, dtype=np.int64)
    index[solve_on] = np.arange(len(solve_on))
    inner = used & (index[move_state] >= 0) & (index[move_target] >= 0)
    solver = _solver(len(solve_on), index[move_state[inner]], index[move_target[inner]], p[inner])
    v = _Moves(n_states, move_state, move_target, p, mean, second, is_target, solve_on, solver)

    at_target = is_target[:n_states]
    certain = _certain(v, open_states, n_nodes)
    h = v.solve(v.pull(p * is_target[move_target]))
    h = np.where(certain | at_target, 1.0, np.clip(h, 0.0, 1.0))
    # what happens on moves that lead away for good, known or not, is no part of the way there
    leads = v.over_nodes(h, 1.0)[move_target]
    g = v.solve(v.pull(np.where(leads > 0, mean, 0.0) * leads))
    mu = np.divide(g, h, out=np.full(n_states, np.nan), where=h > 0)

    # spread about the mean: each move adds the square of its dwell and of the change in mean
    jump = v.over_nodes(np.nan_to_num(mu), 0.0)
    change = jump[move_target] - jump[move_state]
    dwell = np.divide(mean, p, out=np.zeros(len(p)), where=used)
    own = np.maximum(second - mean * dwell, 0.0)
    square = np.where(leads > 0, own + p * (dwell + change) ** 2, 0.0) * leads
    spread = np.maximum(v.solve(v.pull(square)), 0.0)
    variance = np.divide(spread, h, out=np.full(n_states, np.nan), where=h > 0)
    variance[at_target] = 0.0
    return Passage(
        probability=h, certain=certain, mean_given=mu, sd_given=np.sqrt(variance),
        first_moment=g, second_moment=h * np.nan_to_num(variance + mu**2), _moves=v,
    )
