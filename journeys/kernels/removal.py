"""What a target loses, or its journeys save, when states are taken out of a chain, with derivatives by the moves."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.graph import reachable_from
from journeys.kernels.passage_moves import Moves, moves_to


@dataclass(frozen=True, eq=False)
class Road:
    """The ways from one start to a target.

    Attributes
    ----------
    moves : Moves
        The moves, with the solver of their equations.
    start : int
        Where the walk begins; not part of the target.
    share : float array, shape (n_nodes,)
        Probability of ever reaching the target: 1 at the target, 0 at other outcomes.
    visits : float array, shape (n_states,)
        Mean visits from the start, of the states from which the target can be reached.
    reached : bool array, shape (n_nodes,)
        What can be reached from the start.
    """

    moves: Moves
    start: int
    share: FloatArray
    visits: FloatArray
    reached: BoolArray

    @property
    def conversion(self) -> float:
        """Probability of reaching the target from the start."""
        return float(self.share[self.start])

    def on_the_way(self, group: IntArray) -> IntArray:
        """Return those of some states that a walk from the start to the target may visit."""
        return group[self.moves.open_states[group] & self.reached[group]]

    def back(self, rows: FloatArray) -> FloatArray:
        """Solve x = row + x P for several rows, each in a column, shape (n_states, n_rows); 0 off the open states."""
        x, at = np.zeros(rows.shape), self.moves.open_states
        x[at] = self.moves.solver.solve(rows[at], transposed=True)
        return x

    def slope(self, visits: FloatArray, share: FloatArray) -> FloatArray:
        """Return visits of the state a move leaves, times the value of where it leads, shape (n_moves,)."""
        return np.asarray(visits[self.moves.state] * share[self.moves.target])


@dataclass(frozen=True, eq=False)
class Removed:
    """What taking out each of some groups of states does.

    Attributes
    ----------
    effect : float array, shape (n_groups,)
        NaN where it is undefined.
    by_p, by_mean : float arrays, shape (n_groups, n_moves)
        Derivatives by the probability and by the mean of each move, each taken as free. Of no rows where they
        were not asked for.
    """

    effect: FloatArray
    by_p: FloatArray
    by_mean: FloatArray


def road(
    n_states: int,
    n_nodes: int,
    move_state: IntArray,
    move_target: IntArray,
    p: FloatArray,
    mean: FloatArray,
    is_target: BoolArray,
    start: int = 0,
) -> Road:
    """Prepare the ways from a start to a target.

    Parameters
    ----------
    n_states, n_nodes, move_state, move_target, p, mean, is_target
        As in `journeys.kernels.absorption.passage`.
    start : int
        Where the walk begins.

    Returns
    -------
    Road

    Examples
    --------
    >>> p = np.array([0.5, 0.5, 0.25, 0.75])
    >>> found = road(2, 4, np.array([0, 0, 1, 1]), np.array([1, 3, 2, 3]), p, p, np.arange(4) == 2)
    >>> found.share.tolist(), found.visits.tolist()
    ([0.125, 0.25, 1.0, 0.0], [1.0, 0.5])
    """
    v = moves_to(n_states, n_nodes, move_state, move_target, p, mean, mean, is_target)
    share = v.solve(v.pull(p * is_target[move_target]))
    share = np.where(v.certain | is_target[:n_states], 1.0, np.clip(share, 0.0, 1.0))
    unit = np.zeros(n_states)
    unit[start] = 1.0
    used = (p > 0) & ~is_target[move_state]
    reached = reachable_from(n_nodes, move_state[used], move_target[used], np.arange(n_nodes) == start)
    return Road(v, start, v.over_nodes(share, 1.0), v.solve_back(unit), reached)


def stopped(way: Road, groups: Sequence[IntArray], *, derive: bool = True) -> Removed:
    """Share of the walks to the target that is lost if arrivals at each group of states are.

    Parameters
    ----------
    way : Road
        From `road`.
    groups : sequence of int arrays
        States, the start and the target not among them.
    derive : bool
        Also return derivatives.

    Returns
    -------
    Removed
        Exactly 0 where no such walk visits the group and exactly 1 where none avoids it, both decided on the
        graph of moves.

    Notes
    -----
    One inverse N does for all groups: with h the probability of the target, a group C takes
    N_0C N_CC^-1 h_C / h_0, which is also the share of the walks to the target that visit it. Without C the visits
    are nu' = N_0 - N_0C N_CC^-1 N_C and the probabilities h' = h - N_C N_CC^-1 h_C, so the derivative by the move
    from i to j is ((1 - effect) N_0i h_j - nu'_i h'_j) / h_0.

    References
    ----------
    J. G. Kemeny and J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III.

    Examples
    --------
    >>> p = np.array([0.5, 0.5, 0.25, 0.75, 0.5, 0.5])
    >>> way = road(3, 5, np.array([0, 0, 1, 1, 2, 2]), np.array([1, 2, 3, 4, 3, 4]), p, p, np.arange(5) == 3)
    >>> stopped(way, [np.array([1]), np.array([1, 2])]).effect.round(4).tolist()
    [0.3333, 1.0]
    """
    h, total, v = way.share[: way.moves.n_states], way.conversion, way.moves
    inside = [way.on_the_way(group) for group in groups]
    union = np.unique(np.concatenate([*inside, np.zeros(0, np.int64)]))
    unit = np.zeros((v.n_states, len(union)))
    unit[union, np.arange(len(union))] = 1.0
    columns, rows = v.solve(unit), way.back(unit)
    found = _nothing(groups, len(v.p), derive, 0.0 if total > 0 else np.nan)
    plain = way.slope(way.visits, way.share)
    for k, c in enumerate(inside):
        if not len(c) or total <= 0:
            continue
        if not _reached_without(way, c):
            found.effect[k] = 1.0
            continue
        at = np.searchsorted(union, c)
        among = columns[np.ix_(c, at)]
        arrive, leave = np.linalg.solve(among.T, way.visits[c]), np.linalg.solve(among, h[c])
        found.effect[k] = min(float(arrive @ h[c]) / total, 1.0)
        if derive:
            share, visits = h - columns[:, at] @ leave, way.visits - rows[:, at] @ arrive
            share[c] = visits[c] = 0.0
            found.by_p[k] = (1.0 - found.effect[k]) * plain - way.slope(visits, v.over_nodes(share, 1.0))
            found.by_p[k] /= total
    return found


def diverted(way: Road, groups: Sequence[IntArray], *, derive: bool = True) -> Removed:
    """Share of the walks to the target that is lost if each group of states is passed over for others.

    Parameters
    ----------
    way, groups, derive
        As in `stopped`.

    Returns
    -------
    Removed
        Negative where more walks reach the target without the group.

    Notes
    -----
    Each row i is divided by 1 - P(i, C); a row with nothing else ends without the target. That is the chain in
    which a walk that was to enter C stays where it is and draws again, in which no number is subtracted.

    Examples
    --------
    >>> p = np.array([0.5, 0.5, 0.25, 0.75, 0.5, 0.5])
    >>> way = road(3, 5, np.array([0, 0, 1, 1, 2, 2]), np.array([1, 2, 3, 4, 3, 4]), p, p, np.arange(5) == 3)
    >>> diverted(way, [np.array([1]), np.array([2])]).effect.round(4).tolist()
    [-0.3333, 0.3333]
    """
    v, total = way.moves, way.conversion
    found = _nothing(groups, len(v.p), derive, 0.0 if total > 0 else np.nan)
    plain = way.slope(way.visits, way.share)
    unit = np.zeros(v.n_states)
    unit[way.start] = 1.0
    for k, group in enumerate(groups):
        if not way.reached[group].any() or total <= 0:
            continue
        gone = np.zeros(len(v.is_target), dtype=np.bool_)
        gone[group] = True
        target, stays = np.where(gone[v.target], v.state, v.target), ~gone[v.state]
        pairs, where = np.unique(v.state[stays] * len(gone) + target[stays], return_inverse=True)
        state, to = np.divmod(pairs, len(gone))
        p = sum_at(where, v.p[stays], len(pairs))
        w = moves_to(v.n_states, len(gone), state, to, p, p, p, v.is_target)
        share = w.over_nodes(np.where(w.certain, 1.0, w.solve(w.pull(p * v.is_target[to]))), 1.0)
        after = float(share[way.start])
        found.effect[k] = 1.0 - after / total
        if derive:
            visits = w.solve_back(unit)
            slope = np.where(stays, visits[v.state] * share[target], 0.0)
            found.by_p[k] = (after / total * plain - slope) / total
    return found


def passed(way: Road, groups: Sequence[IntArray], *, steps: bool, derive: bool = True) -> Removed:
    """Return how many steps or days the mean to the target, given that it is reached, falls if walks skip each group.

    Parameters
    ----------
    way, groups, derive
        As in `stopped`; for days the moves carry their mean dwell.
    steps : bool
        Count the visits to the group; else the time spent there.

    Returns
    -------
    Removed
        Not a number for days where the dwell in the group is not known.

    Notes
    -----
    Skipping a state takes the stochastic complement of its moves: a walk that comes to it goes at once where it
    would go from there, so that the same walks reach the target. With w_c = h_c for steps and sum_j M_cj h_j for
    days the amount is sum_c N_0c w_c / h_0.

    References
    ----------
    C. D. Meyer, Stochastic complementation, uncoupling Markov chains, and the theory of nearly reducible systems,
    SIAM Review 31 (1989) 240-272.

    Examples
    --------
    >>> p = np.array([0.5, 0.5, 0.25, 0.75, 0.5, 0.5])
    >>> way = road(3, 5, np.array([0, 0, 1, 1, 2, 2]), np.array([1, 2, 3, 4, 3, 4]), p, p, np.arange(5) == 3)
    >>> passed(way, [np.array([1]), np.array([2])], steps=True).effect.round(4).tolist()
    [0.3333, 0.6667]
    """
    v, total = way.moves, way.conversion
    found = _nothing(groups, len(v.p), derive, 0.0 if total > 0 else np.nan)
    if total <= 0:
        return found
    leads = way.share[v.target]
    spent = v.pull(np.where(leads > 0, v.p if steps else v.mean, 0.0) * leads)
    chosen = np.zeros((v.n_states, len(groups)))
    for k, group in enumerate(groups):
        chosen[way.on_the_way(group), k] = 1.0
    worth = np.where(chosen > 0, chosen * spent[:, None], 0.0)
    found.effect[:] = (way.visits[:, None] * worth).sum(axis=0) / total
    if derive:
        plain, there = way.slope(way.visits, way.share), way.visits[:, None] * chosen
        ahead, onward = v.over_nodes(v.solve(worth), 0.0), np.zeros(there.shape)
        inside = v.target < v.n_states
        weight = v.p if steps else v.mean
        for k in range(len(groups)):
            flow = (there[v.state, k] * weight)[inside]
            onward[:, k] = sum_at(v.target[inside], flow, v.n_states)
        beyond = way.back(onward)
        for k in range(len(groups)):
            found.by_p[k] = way.slope(way.visits, ahead[:, k]) + way.slope(beyond[:, k], way.share)
            found.by_p[k] -= found.effect[k] * plain
            found.by_mean[k] = way.slope(there[:, k], way.share)
        if steps:  # the mean of a move is its probability
            found.by_p[:] += found.by_mean
            found.by_mean[:] = 0.0
        found.by_p[:] /= total
        found.by_mean[:] /= total
    return found


def _nothing(groups: Sequence[IntArray], n_moves: int, derive: bool, value: float) -> Removed:
    rows = len(groups) if derive else 0
    return Removed(np.full(len(groups), value), np.zeros((rows, n_moves)), np.zeros((rows, n_moves)))


def _reached_without(way: Road, group: IntArray) -> bool:
    """Tell whether a walk from the start can reach the target without a visit to some states."""
    v = way.moves
    used = (v.p > 0) & ~v.is_target[v.state] & ~np.isin(v.target, group)
    at = np.arange(len(v.is_target)) == way.start
    return bool((reachable_from(len(at), v.state[used], v.target[used], at) & v.is_target).any())
