"""The walks to a target shared evenly among the states they touch, with derivatives by the moves."""

from __future__ import annotations

from collections.abc import Sequence
from math import factorial

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.passage_moves import Moves, moves_to
from journeys.kernels.removal import Road

_FLOATS = 2**22  # numbers of one kind worked on at a time, about


def equal_split(way: Road, players: Sequence[IntArray], *, derive: bool = True) -> tuple[FloatArray, FloatArray]:
    """Share of the walks to the target that falls to each of some players, split evenly among those touched.

    Parameters
    ----------
    way : Road
        From `journeys.kernels.removal.road`, with a positive probability of the target.
    players : sequence of int arrays
        The states of each player, which is touched with any of them; the start and the target not among them. 15
        players at most, since all subsets are solved for.
    derive : bool
        Also return derivatives.

    Returns
    -------
    share : float array, shape (n_players + 1,)
        Of each player, then of the walks that touch none of them; sums to 1. Exactly 0 for one that no walk to the
        target touches.
    by_p : float array, shape (n_players + 1, n_moves)
        Derivatives by the probability of each move, each taken as free. Of no rows where not asked for.

    Notes
    -----
    The Shapley value of the game whose worth v(S) is the probability of the target when arrivals at states outside
    S are lost. A walk that touches the set T adds 1 to v(S) where S holds T, and the value splits that evenly over
    T. The chain is first reduced to the start and the players: Q(x, y) is the probability that y is the first of
    players and target met after x. Each v(S) is then a small system, solved in batches.

    References
    ----------
    L. S. Shapley, A value for n-person games, in Contributions to the Theory of Games II, Princeton 1953.

    Examples
    --------
    >>> from journeys.kernels.removal import road
    >>> p = np.array([0.5, 0.5, 0.5, 0.5, 0.5, 0.5])
    >>> way = road(3, 5, np.array([0, 0, 1, 1, 2, 2]), np.array([1, 2, 2, 3, 3, 4]), p, p, np.arange(5) == 3)
    >>> equal_split(way, [np.array([1]), np.array([2])])[0].round(4).tolist()
    [0.5, 0.5, 0.0]
    """
    v, total = way.moves, way.conversion
    met = [way.on_the_way(states) for states in players]
    at, whose = np.concatenate(met), np.repeat(np.arange(len(players)), [len(states) for states in met])
    active, owner = np.unique(whose, return_inverse=True)
    ends = v.is_target.copy()
    ends[at] = True
    to_next = moves_to(v.n_states, len(ends), v.state, v.target, v.p, v.p, v.p, ends)
    between, ahead = _first_met(way, to_next, at)
    value, weight = _values(between, owner, len(active))
    share = np.zeros(len(players) + 1)
    places = np.array([*active, len(players)])
    share[places] = value / total
    if not derive:
        return share, np.zeros((0, len(v.p)))
    by_p = np.zeros((len(players) + 1, len(v.p)))
    behind = _visits_between(way, to_next, at)
    plain = way.slope(way.visits, way.share)
    for place, each, part in zip(places, weight, share[places], strict=True):
        slope = np.einsum("mx,mx->m", (behind @ each)[v.state], ahead[v.target])
        by_p[place] = (slope - part * plain) / total
    return share, by_p


def _first_met(way: Road, to_next: Moves, at: IntArray) -> tuple[FloatArray, FloatArray]:
    """Reduce the chain to the start and the states of the players.

    Returns
    -------
    between : float array, shape (n + 1, n + 1)
        From the start (first row) and the players' states, the probability that each of these, or the target (last
        column), is the first of them met.
    ahead : float array, shape (n_nodes, n + 1)
        The same from every node, itself where it is one of them.
    """
    v, k = way.moves, len(at)
    ahead = np.zeros((len(v.is_target), k + 1))
    ahead[at, np.arange(k)] = 1.0
    ahead[v.is_target, k] = 1.0
    direct = np.stack([v.pull(v.p * ahead[v.target, y]) for y in range(k + 1)], axis=1)
    inside = np.flatnonzero(to_next.open_states)
    ahead[inside] = to_next.solver.solve(direct[inside])
    from_player = np.stack([v.pull(v.p * ahead[v.target, y])[at] for y in range(k + 1)], axis=1)
    return np.concatenate([ahead[[way.start]], from_player]), ahead


def _visits_between(way: Road, to_next: Moves, at: IntArray) -> FloatArray:
    """Mean visits from the start and from each player until the next of players and target, (n_states, n + 1)."""
    v, k = way.moves, len(at)
    begin = np.zeros((v.n_states, k + 1))
    begin[way.start, 0] = 1.0
    place = np.full(v.n_states, -1)
    place[at] = np.arange(1, k + 1)
    out = (place[v.state] > 0) & (v.target < v.n_states)
    np.add.at(begin, (v.target[out], place[v.state[out]]), v.p[out])
    visits, inside = np.zeros(begin.shape), to_next.open_states
    visits[inside] = to_next.solver.solve(begin[inside], transposed=True)
    visits[at, np.arange(1, k + 1)] = 1.0
    return visits


def _values(between: FloatArray, owner: IntArray, k: int) -> tuple[FloatArray, FloatArray]:
    """Shapley values of the players and the worth of no player, with their derivatives by the reduced chain.

    Parameters
    ----------
    between : float array, shape (n + 1, n + 1)
        From `_first_met`.
    owner : int array, shape (n,)
        Whose the states are, of `k` players.

    Returns
    -------
    value : float array, shape (k + 1,)
    weight : float array, shape (k + 1, n + 1, n + 1)
        By each cell of `between`.
    """
    n = len(between) - 1
    inner, end = between[1:, :n], between[1:, n]
    value, weight = np.zeros(k + 1), np.zeros((k + 1, n + 1, n + 1))
    step = max(1, _FLOATS // (n + 1) ** 2)
    for first in range(0, 2**k, step):
        sets = np.arange(first, min(first + step, 2**k))
        present = (sets[:, None] >> np.arange(k)) & 1
        mask = present[:, owner].astype(np.float64)
        system = np.eye(n) - mask[:, :, None] * inner * mask[:, None, :]
        gain = np.linalg.solve(system, (mask * end)[:, :, None])[:, :, 0]
        visits = np.linalg.solve(system.transpose(0, 2, 1), (mask * between[0, :n])[:, :, None])[:, :, 0]
        worth = between[0, n] + gain @ between[0, :n]
        counts = _shares(present, k)
        value += counts.T @ worth
        one = np.ones((len(sets), 1))
        left, right = np.concatenate([one, visits], axis=1), np.concatenate([gain, one], axis=1)
        for c in range(k + 1):
            weight[c] += (left * counts[:, [c]]).T @ right
    # all terms of a player cancel only to rounding
    return np.maximum(value, 0.0), weight


def _shares(present: IntArray, k: int) -> FloatArray:
    """How the worth of each set counts in the value of each player, and (last) in the worth of no player."""
    size = present.sum(axis=1)
    joins = np.array([0.0, *(factorial(s - 1) * factorial(k - s) / factorial(k) for s in range(1, k + 1))])
    lacks = np.array([*(factorial(s) * factorial(k - s - 1) / factorial(k) for s in range(k)), 0.0])
    counts = np.where(present == 1, joins[size][:, None], -lacks[size][:, None])
    return np.concatenate([counts, (size == 0)[:, None].astype(np.float64)], axis=1)
