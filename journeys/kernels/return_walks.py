"""Walks through a chain that end at a target, the way back to a state among them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.absorption import Passage, passage
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at


@dataclass(frozen=True, eq=False)
class Walk:
    """The moves of a chain as a walk takes them that is over once it meets a target.

    Attributes
    ----------
    n_states, n_nodes : int
        Nodes 0 to n_states - 1 are states, the rest outcomes.
    state, target : int arrays, shape (n_moves,)
        Where each move of the chain comes from and leads to, in the nodes of the walk; a pair may come twice.
    is_target : bool array, shape (n_nodes,)
        Where the walk ends. A start there is there at once.
    starts : int array, shape (n_starts,)
        The states from which the walk is asked for.
    """

    n_states: int
    n_nodes: int
    state: IntArray
    target: IntArray
    is_target: BoolArray
    starts: IntArray

    @property
    def pairs(self) -> tuple[IntArray, IntArray]:
        """The pairs of nodes between which moves go, as numbers in order, and the pair of each move."""
        return np.unique(self.state * self.n_nodes + self.target, return_inverse=True)

    def passage(self, p: FloatArray, mean: FloatArray, second: FloatArray) -> Passage:
        """Probability and moments of the walk's time.

        Parameters
        ----------
        p, mean, second : float arrays, shape (n_moves,)
            Probability of each move; dwell and squared dwell, each times the probability.

        Returns
        -------
        Passage
            Its moves are the `pairs`.
        """
        pairs, where = self.pairs
        p, mean, second = (sum_at(where, x, len(pairs)) for x in (p, mean, second))
        state, target = np.divmod(pairs, self.n_nodes)
        return passage(self.n_states, self.n_nodes, state, target, p, mean, second, self.is_target)


def passage_walk(n_states: int, state: IntArray, target: IntArray, is_target: BoolArray) -> Walk:
    """Walk from every state to a target.

    Parameters
    ----------
    n_states : int
        Number of states.
    state, target : int arrays, shape (n_moves,)
        The moves of the chain.
    is_target : bool array, shape (n_nodes,)
        Where the walk ends.

    Returns
    -------
    Walk
        Its starts are all states.

    Examples
    --------
    >>> passage_walk(1, np.array([0, 0]), np.array([0, 1]), np.arange(2) == 1).starts.tolist()
    [0]
    """
    return Walk(n_states, len(is_target), state, target, is_target, np.arange(n_states))


def return_walk(
    n_states: int,
    n_nodes: int,
    state: IntArray,
    target: IntArray,
    back_to: int,
    *,
    restart: bool = False,
    never_left: bool = False,
    as_good: IntArray | None = None,
) -> Walk:
    """Walk from a state until it is met again.

    Parameters
    ----------
    n_states, n_nodes : int
        Nodes 0 to n_states - 1 are states, the rest outcomes.
    state, target : int arrays, shape (n_moves,)
        The moves of the chain.
    back_to : int
        The state.
    restart : bool, default False
        Every move into an outcome leads to state 0 instead.
    never_left : bool, default False
        The state's only move, to itself, means staying there for good, which is no coming back.
    as_good : int array, optional
        Further states that count as coming back.

    Returns
    -------
    Walk
        The state is split in two: its moves lead out of a new state `n_states`, the only start; the old one is
        the target. Outcomes stand one place further on.

    Examples
    --------
    >>> walk = return_walk(1, 2, np.array([0, 0]), np.array([0, 1]), 0)
    >>> walk.state.tolist(), walk.target.tolist(), walk.is_target.tolist(), walk.starts.tolist()
    ([1, 1], [0, 2], [True, False, False], [1])
    """
    comes = np.where(state == back_to, n_states, state)
    leads = np.where(target < n_states, target, 0 if restart else target + 1)
    if never_left:
        leads = np.where(state == back_to, n_states, leads)
    is_target = np.arange(n_nodes + 1) == back_to
    if as_good is not None:
        is_target[as_good] = True
    return Walk(n_states + 1, n_nodes + 1, comes, leads, is_target, np.array([n_states]))
