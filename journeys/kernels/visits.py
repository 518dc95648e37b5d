"""From where states are likely to be visited at all."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.graph import Classes
from journeys.kernels.solvers import Solver, solver

_AT_ONCE = 64  # states asked about together


def often_visited(
    n_states: int,
    state: IntArray,
    target: IntArray,
    p: FloatArray,
    classes: Classes,
    asked: BoolArray,
    least: float,
) -> BoolArray:
    """Tell from which states one of those asked about is visited with a probability above `least`.

    Parameters
    ----------
    n_states : int
        Nodes from this number on are outcomes.
    state, target : int arrays, shape (n_moves,)
        Where each move comes from and leads to.
    p : float array, shape (n_moves,)
        Its probability; each row sums to 1.
    classes : Classes
        Of the nodes on the graph of these moves.
    asked : bool array, shape (n_states,)
        Each is held against `least` by itself.
    least : float
        From 0 to below 1. A state is visited from itself for sure.

    Returns
    -------
    bool array, shape (n_states,)

    Notes
    -----
    With N = (I - P)^-1 on the transient states, state j is visited from i with probability N_ij / N_jj. A class that
    is never left is visited as a whole, with the probability of ever entering it.

    References
    ----------
    J. G. Kemeny and J. L. Snell, Finite Markov Chains, Van Nostrand 1960, theorem 3.5.4.

    Examples
    --------
    State 0 moves to 1 in 3 of 10 cases, else to the end.

    >>> from journeys.kernels.graph import classify
    >>> state, target, p = np.array([0, 0, 1]), np.array([1, 2, 2]), np.array([0.3, 0.7, 1.0])
    >>> classes = classify(3, state, target, np.arange(3) == 2)
    >>> asked = np.array([False, True])
    >>> [often_visited(2, state, target, p, classes, asked, x).tolist() for x in (0.2, 0.4)]
    [[True, True], [False, True]]
    """
    often = asked.copy()
    stays = classes.is_recurrent[:n_states]
    passing = np.flatnonzero(~stays)
    index = np.full(len(classes.class_of), -1)
    index[passing] = np.arange(len(passing))
    used = (p > 0) & (index[state] >= 0)
    inner = used & (index[target] >= 0)
    outer = used & ~inner
    excess = sum_at(index[state[outer]], p[outer], len(passing))
    system = solver(len(passing), index[state[inner]], index[target[inner]], p[inner], excess)
    often[passing] |= _above(system, len(passing), index[np.flatnonzero(asked & ~stays)], least)
    for one in np.unique(classes.class_of[:n_states][asked & stays]):
        often |= classes.class_of[:n_states] == one
        into = outer & (classes.class_of[target] == one)
        often[passing] |= system.solve(sum_at(index[state[into]], p[into], len(passing))) > least
    return often


def _above(system: Solver, n: int, asked: IntArray, least: float) -> BoolArray:
    """Tell where N_ij / N_jj is above `least` for one of the j asked about."""
    above = np.zeros(n, dtype=np.bool_)
    for first in range(0, len(asked), _AT_ONCE):
        some = asked[first : first + _AT_ONCE]
        unit = np.zeros((n, len(some)))
        unit[some, np.arange(len(some))] = 1.0
        visits = system.solve(unit)
        above |= (visits > least * visits[some, np.arange(len(some))]).any(axis=1)
    return above
