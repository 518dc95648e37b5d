"""The moves of a fit as a question walks them, and their first passage to its target."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from journeys.kernels.absorption import Passage, passage
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.phase_type import DENSE
from journeys.models.fit import JourneyFit


@dataclass(frozen=True, eq=False)
class Walk:
    """The moves of a fit as a question walks them: as they are, or rearranged.

    Attributes
    ----------
    n_states, n_nodes : int
        Nodes 0 to n_states - 1 are states, the rest outcomes.
    state, target : int arrays, shape (n_moves,)
        Where each move comes from and goes to.
    origin : int array, shape (n_moves,)
        Place among the moves of the fit; none comes twice.
    is_target : bool array, shape (n_nodes,)
        What is to be reached, at least once.
    """

    n_states: int
    n_nodes: int
    state: IntArray
    target: IntArray
    origin: IntArray
    is_target: BoolArray

    @cached_property
    def key(self) -> tuple[int | bytes, ...]:
        """All that tells this walk from others of the same fit."""
        arrays = (self.state, self.target, self.origin, self.is_target)
        return (self.n_states, self.n_nodes, *(one.tobytes() for one in arrays))


def walk_to(fit: JourneyFit, to: str | Collection[str] | None) -> Walk:
    """Return the moves of a fit as they are, with the target that `to` names."""
    return walk_until(fit, fit.target_mask(to))


def walk_until(fit: JourneyFit, is_target: BoolArray) -> Walk:
    """Return the moves of a fit as they are, with a target of some nodes."""
    every = np.arange(len(fit.probability))
    return Walk(fit.nodes.n_rows, fit.nodes.n_nodes, fit.move_state, fit.move_target, every, is_target)


def timed(fit: JourneyFit, walk: Walk) -> Passage:
    """Return probability and moments of the elapsed time in days to the target of a walk."""
    return _passage(fit, walk, "time")


def stepped(fit: JourneyFit, walk: Walk) -> Passage:
    """Return probability and moments of the number of moves to the target of a walk."""
    return _passage(fit, walk, "steps")


def _passage(fit: JourneyFit, walk: Walk, clock: str) -> Passage:
    def solve() -> Passage:
        at = walk.origin
        p = fit.probability[at]
        mean, second = (p, p) if clock == "steps" else (fit.mean[at], fit.second[at])
        return passage(walk.n_states, walk.n_nodes, walk.state, walk.target, p, mean, second, walk.is_target)

    if walk.n_states > DENSE:
        return solve()
    return fit.kept.get((clock, walk.key), solve, lambda _: walk.n_states**2 + 10 * len(walk.origin))


def reach_gradient(walk: Walk, p: FloatArray, share: FloatArray, starts: IntArray) -> FloatArray:
    """Differentiate the probability of ever reaching the target by the moves.

    Parameters
    ----------
    walk : Walk
        The moves.
    p : float array, shape (n_moves,)
        Their probabilities.
    share : float array, shape (n_states,)
        Probability of ever reaching the target.
    starts : int array, shape (n_starts,)
        From where.

    Returns
    -------
    float array, shape (n_starts, n_moves)
    """
    from scipy.sparse import csc_array, eye_array
    from scipy.sparse.linalg import splu

    is_open = (share > 0) & ~walk.is_target[: walk.n_states]
    place = np.where(is_open, np.cumsum(is_open) - 1, -1)
    size = int(is_open.sum())
    inside = (p > 0) & is_open[walk.state] & (walk.target < walk.n_states)
    inside[inside] &= is_open[walk.target[inside]]
    # turned over: visits are solved for from the left
    inner = csc_array((p[inside], (place[walk.target[inside]], place[walk.state[inside]])), shape=(size, size))
    found = np.zeros((len(starts), len(p)))
    who, where = np.unique(starts, return_inverse=True)
    mine = np.flatnonzero(is_open[who])
    if not len(mine):
        return found
    one = np.zeros((size, len(mine)))
    one[place[who[mine]], np.arange(len(mine))] = 1.0
    visits = np.zeros((len(who), walk.n_states))
    visits[np.ix_(mine, is_open)] = splu(csc_array(eye_array(size) - inner)).solve(one).T
    gain = np.where(walk.is_target, 1.0, np.concatenate([share, np.zeros(walk.n_nodes - walk.n_states)]))
    np.multiply(visits[where][:, walk.state], gain[walk.target], out=found)
    return found
