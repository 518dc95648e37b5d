"""Passages through many chains with the same moves at once, such as those of resamples.

Arrays over moves, states or nodes carry the chains in their last axis; answers carry them in the first.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.return_walks import Walk

_SMALL = 32  # up to so many states numpy's solver of many small systems is the quicker one
_LOST = 1e-9  # a row that sums to less than 1 by more than this loses walks on the way

Solver = Callable[[FloatArray], FloatArray]


@dataclass(frozen=True, eq=False)
class Draws:
    """Answers from some resamples, arrays of shape (n_resamples, n_starts).

    Attributes
    ----------
    probability : float array
        NaN where the resample holds no stay in the start.
    certain : bool array
        Nothing but the target can be met, decided on the graph of the resample.
    mean_given, sd_given : float arrays
        NaN where the target cannot be reached too.
    """

    probability: FloatArray
    certain: BoolArray
    mean_given: FloatArray
    sd_given: FloatArray


def looped_passages(walk: Walk, p: FloatArray, mean: FloatArray, second: FloatArray) -> Draws:
    """Passages one resample after the other, each by `Walk.passage`; arguments as for `dense_passages`."""
    found = [walk.passage(p[:, b], mean[:, b], second[:, b]) for b in range(p.shape[1])]
    names = ("probability", "certain", "mean_given", "sd_given")
    return _answers(walk, p, *(np.stack([getattr(one, name) for one in found], axis=1) for name in names))


def dense_passages(walk: Walk, p: FloatArray, mean: FloatArray, second: FloatArray) -> Draws:
    """Passages through many chains with the same moves at once.

    Parameters
    ----------
    walk : Walk
        The moves.
    p, mean, second : float arrays, shape (n_moves, n_resamples)
        Probability of each move; dwell and squared dwell, each times the probability.

    Returns
    -------
    Draws

    Notes
    -----
    As in `passage`: reachability is decided on the graph of each resample, so no system is singular, and the
    spread is solved for about the mean.
    """
    m, state, target = walk.n_states, walk.state, walk.target
    at_target = walk.is_target[:m, None]
    used = (p > 0) & ~walk.is_target[state][:, None]
    pull = _pull(state, m)
    open_states = _reach(walk, used, np.repeat(walk.is_target[:, None], p.shape[1], axis=1))[:m] & ~at_target
    elsewhere = np.repeat(~walk.is_target[:, None], p.shape[1], axis=1)
    elsewhere[:m] &= ~open_states | (1.0 - pull(p) > _LOST)
    certain = ~_reach(walk, used, elsewhere)[:m]
    solve = _solver(walk, np.where(used & open_states[state], p, 0.0), open_states)

    h = solve(pull(p * walk.is_target[target][:, None]))
    h = np.where(certain | at_target, 1.0, np.clip(h, 0.0, 1.0))
    leads = _over_nodes(walk, h, 1.0)[target]
    g = solve(pull(mean * leads))
    mu = np.divide(g, h, out=np.full(h.shape, np.nan), where=h > 0)
    jump = _over_nodes(walk, np.nan_to_num(mu), 0.0)
    dwell = np.divide(mean, p, out=np.zeros(p.shape), where=used)
    own = np.maximum(second - mean * dwell, 0.0)
    spread = np.maximum(solve(pull((own + p * (dwell + jump[target] - jump[state]) ** 2) * leads)), 0.0)
    variance = np.divide(spread, h, out=np.full(h.shape, np.nan), where=h > 0)
    variance = np.where(at_target, 0.0, variance)
    return _answers(walk, p, h, certain, mu, np.sqrt(variance))


def _answers(
    walk: Walk, p: FloatArray, probability: FloatArray, certain: BoolArray, mean: FloatArray, sd: FloatArray
) -> Draws:
    """Pick the starts, resamples first; nothing is known of a start in which a resample holds no stay."""
    s = walk.starts
    empty = ((_pull(walk.state, walk.n_states)(p) <= 0) & ~walk.is_target[: walk.n_states, None])[s]
    probability, mean, sd = (np.where(empty, np.nan, x[s]).T for x in (probability, mean, sd))
    return Draws(probability, (certain[s] & ~empty).T, mean, sd)


def _pull(state: IntArray, n_states: int) -> Solver:
    """Sum over the moves out of each state, from (n_moves, n) to (n_states, n)."""
    from scipy.sparse import csr_array

    sums = csr_array((np.ones(len(state)), (state, np.arange(len(state)))), shape=(n_states, len(state)))
    return lambda weights: np.asarray(sums @ weights, dtype=np.float64)


def _over_nodes(walk: Walk, x: FloatArray, at_target: float) -> FloatArray:
    """Values at states, spread over all nodes, (n_nodes, n)."""
    full = np.repeat(np.where(walk.is_target, at_target, 0.0)[:, None], x.shape[1], axis=1)
    full[: walk.n_states] = np.where(walk.is_target[: walk.n_states, None], at_target, x)
    return full


def _reach(walk: Walk, used: BoolArray, here: BoolArray) -> BoolArray:
    """Nodes from which one of `here` (n_nodes, n) can be reached by the moves used (n_moves, n) of each resample."""
    order = np.argsort(walk.state, kind="stable")
    target, used = walk.target[order], used[order]
    leaving, first = np.unique(walk.state[order], return_index=True)
    here = here.copy()
    while True:
        found = here[leaving] | np.logical_or.reduceat(here[target] & used, first, axis=0)
        if np.array_equal(found, here[leaving]):
            return here
        here[leaving] = found


def _solver(walk: Walk, inner: FloatArray, open_states: BoolArray) -> Solver:
    """Solver of x = b + P x on the open states of each resample, 0 elsewhere; from (m, n) to (m, n)."""
    from scipy.linalg.lapack import dgetrf, dgetrs

    m, n = walk.n_states, inner.shape[1]
    # a move to a state that is not open is no part of the way: its value there is known or 0
    inside = np.flatnonzero(walk.target < m)
    key, where = np.unique(walk.state[inside] * m + walk.target[inside], return_inverse=True)
    values = np.where(open_states[walk.target[inside]], inner[inside], 0.0)
    matrix = np.zeros((n, m * m))
    matrix[:, key] = -_pull(where, len(key))(values).T
    matrix[:, np.arange(m) * (m + 1)] += 1.0
    systems = matrix.reshape(n, m, m)
    small = m <= _SMALL
    # LAPACK reads columns first: it is given, and asked about, the transpose
    factors = [] if small else [dgetrf(one.T, overwrite_a=1)[:2] for one in systems]

    def solve(b: FloatArray) -> FloatArray:
        right = np.where(open_states, b, 0.0).T
        if small:
            return np.asarray(np.linalg.solve(systems, right[..., None])[..., 0].T, dtype=np.float64)
        return np.stack([dgetrs(*lu, x, trans=1)[0] for lu, x in zip(factors, right, strict=True)], axis=1)

    return solve
