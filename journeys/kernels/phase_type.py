"""Distribution of the number of steps to a target: discrete phase-type laws, their quantiles and derivatives."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at

if TYPE_CHECKING:
    from scipy.sparse import csr_array

DENSE = 500  # most states of which full matrices are squared
LONGEST = 100_000  # most steps that are walked one by one
_WALK_WORK = 3e8  # most moves looked at on all those steps: about a second
_BLOCK = 2_000_000  # numbers kept of the steps just walked
_AHEAD_COST = 50.0  # what one number kept for `gradients` counts beside one of its products
_DOUBLINGS = 50  # squaring goes on to 2**50 steps
_TIE = 1e-12  # a distribution function this close below a level has met it


@dataclass(frozen=True, eq=False)
class Steps:
    """Moves of a chain, and the target whose first visit is counted in steps.

    Attributes
    ----------
    n_states, n_nodes : int
        Nodes 0 to n_states - 1 are states, the rest outcomes.
    state, target : int arrays, shape (n_moves,)
        Where each move comes from and goes to; a pair may come more than once.
    p : float array, shape (n_moves,)
        Probability of the move.
    is_target : bool array, shape (n_nodes,)
        The target, outcomes or states; a state in it is not left again.

    References
    ----------
    M. F. Neuts, Matrix-Geometric Solutions in Stochastic Models, Johns Hopkins 1981, chapter 2.

    Examples
    --------
    Half of the walks that are in state 0 stay there, the others reach outcome 1.

    >>> walk = Steps(1, 2, np.array([0, 0]), np.array([0, 1]), np.array([0.5, 0.5]), np.array([False, True]))
    >>> walk.reached_from(0, np.array([0, 1, 2])).tolist()
    [0.0, 0.5, 0.75]
    >>> walk.quantiles(np.array([[0.5, 0.9]]))[0].tolist()
    [[1.0, 4.0]]
    """

    n_states: int
    n_nodes: int
    state: IntArray
    target: IntArray
    p: FloatArray
    is_target: BoolArray

    @cached_property
    def _used(self) -> BoolArray:
        return (self.p > 0) & ~self.is_target[self.state]

    @cached_property
    def _direct(self) -> FloatArray:
        """Probability of the target in one step, shape (n_states,)."""
        hit = self._used & self.is_target[self.target]
        return sum_at(self.state[hit], self.p[hit], self.n_states)

    @cached_property
    def _inner(self) -> FloatArray | csr_array:
        """Moves among states that are no target, full or sparse, shape (n_states, n_states)."""
        inside = self._used & ~self.is_target[self.target] & (self.target < self.n_states)
        row, column, p = self.state[inside], self.target[inside], self.p[inside]
        if self.n_states > DENSE:
            from scipy.sparse import csr_array

            return csr_array((p, (row, column)), shape=(self.n_states, self.n_states))
        return sum_at(row * self.n_states + column, p, self.n_states**2).reshape(self.n_states, self.n_states)

    @cached_property
    def _powers(self) -> list[FloatArray]:
        """The matrix with the target as one more, absorbing state, to the powers 1, 2, 4 …, grown when asked."""
        m = self.n_states
        whole = np.zeros((m + 1, m + 1))
        whole[:m, :m] = self._inner  # type: ignore[assignment]  # a full matrix up to DENSE states
        whole[:m, m], whole[m, m] = self._direct, 1.0
        return [whole]

    def _power(self, k: int) -> FloatArray:
        while len(self._powers) <= k:
            self._powers.append(self._powers[-1] @ self._powers[-1])
        return self._powers[k]

    def reached_within(self, n: int) -> FloatArray:
        """Return the probability of the target within 0, 1 … n steps.

        Parameters
        ----------
        n : int
            Steps.

        Returns
        -------
        float array, shape (n + 1, n_states)
            1 throughout from a state of the target itself.
        """
        at = self.is_target[: self.n_states]
        found = np.empty((n + 1, self.n_states))
        reached = np.zeros(self.n_states)
        for k in range(n + 1):
            found[k] = np.where(at, 1.0, reached)
            if k < n:
                reached = self._direct + self._inner @ reached
        return found

    def reached_from(self, start: int, steps: IntArray) -> FloatArray:
        """Return the probability of the target within each number of steps, from one state.

        Parameters
        ----------
        start : int
            The state.
        steps : int array, shape (n,)
            Numbers of steps from 0; above `DENSE` states none beyond `longest` is walked, and NaN comes back.

        Returns
        -------
        float array, shape (n,)
        """
        if self.is_target[start]:
            return np.ones(len(steps))
        ask, where = np.unique(steps, return_inverse=True)
        found = self._walked_from(start, ask) if self.n_states > DENSE else self._squared_from(start, ask)
        return found[where]

    @property
    def longest(self) -> int:
        """Most steps that are walked one by one, few where there are many moves."""
        return min(LONGEST, int(_WALK_WORK / max(len(self.p), 1)))

    def _walked_from(self, start: int, ask: IntArray) -> FloatArray:
        """Return the probability within increasing numbers of steps, one step after another."""
        found = np.full(len(ask), np.nan)
        reached, at = np.zeros(self.n_states), 0
        for i, n in enumerate(ask[ask <= self.longest].tolist()):
            for _ in range(n - at):
                reached = self._direct + self._inner @ reached
            at, found[i] = n, reached[start]
        return found

    def _squared_from(self, start: int, ask: IntArray) -> FloatArray:
        """Return the same by powers of the matrix."""
        found = np.empty(len(ask))
        place = np.zeros(self.n_states + 1)
        place[start] = 1.0
        at = 0
        for i, n in enumerate(ask.tolist()):
            place = self._on(place, n - at)
            at, found[i] = n, place[-1]
        return found

    def _on(self, place: FloatArray, n: int) -> FloatArray:
        """Return where a walk is n steps later; the last entry is the target."""
        k = 0
        while n:
            if k == _DOUBLINGS and n > 1:
                n = 1  # as far as squaring goes: nothing moves any more
            if n & 1:
                place = place @ self._power(k)
            n, k = n >> 1, k + 1
        return place

    def quantiles(self, level: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the smallest number of steps within which each level is reached, from every state.

        Parameters
        ----------
        level : float array, shape (n_states, n_levels)
            Probabilities of all walks from the state; NaN where none is asked for.

        Returns
        -------
        steps : float array, shape (n_states, n_levels)
            Whole numbers; NaN where nothing was asked, infinite where the level is not reached within
            2**50 steps or, above `DENSE` states, within the `longest` that is walked.
        between : float array, shape (n_states, n_levels)
            Where the line through the distribution function at whole numbers meets the level.
        """
        wanted = np.where(self.is_target[: self.n_states, None] & ~np.isnan(level), -1.0, level - _TIE)
        if self.n_states > DENSE:
            return self._walked(wanted, level)
        pairs = [self._descend(wanted[:, i], level[:, i]) for i in range(level.shape[1])]
        return np.stack([pair[0] for pair in pairs], axis=1), np.stack([pair[1] for pair in pairs], axis=1)

    def _descend(self, wanted: FloatArray, level: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Go down the powers, holding each start just short of its level."""
        m, top = self.n_states, 0
        while top < _DOUBLINGS and (self._power(top)[:m, m] < wanted).any():
            top += 1
        place = np.eye(m, m + 1)
        n = np.zeros(m)
        for k in range(top, -1, -1):
            further = place @ self._power(k)
            short = further[:, m] < wanted
            place = np.where(short[:, None], further, place)
            n += short * 2.0**k
        after = place @ self._power(0)
        steps = np.where(wanted < 0, 0.0, np.where(after[:, m] < wanted, np.inf, n + 1.0))
        return _between(np.where(np.isnan(wanted), np.nan, steps), place[:, m], after[:, m], level)

    def _walked(self, wanted: FloatArray, level: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Walk one step after another until all levels are met."""
        steps = np.where(wanted < 0, 0.0, np.where(np.isnan(wanted), np.nan, np.inf))
        before, after = np.zeros(level.shape), np.zeros(level.shape)
        size = max(_BLOCK // max(self.n_states, 1), 1)
        reached, n = np.zeros(self.n_states), 0
        while np.isinf(steps).any() and n < self.longest:
            path = np.empty((min(size, self.longest - n) + 1, self.n_states))
            path[0] = reached
            for k in range(1, len(path)):
                path[k] = self._direct + self._inner @ path[k - 1]
            reached = path[-1]
            # what is reached never falls, so that a look at the end tells who has met a level on the way
            who, which = np.nonzero(np.isinf(steps) & (reached[:, None] >= wanted))
            for state, i in zip(who.tolist(), which.tolist(), strict=True):
                k = max(int(np.searchsorted(path[:, state], wanted[state, i])), 1)
                steps[state, i] = n + k
                before[state, i], after[state, i] = path[k - 1, state], path[k, state]
            n += len(path) - 1
        return _between(steps, before, after, level)

    def gradients(self, starts: IntArray, steps: IntArray) -> FloatArray:
        """Differentiate the probability of the target within some steps by the moves.

        Parameters
        ----------
        starts, steps : int arrays, shape (n_answers,)
            From which state, and within how many steps.

        Returns
        -------
        float array, shape (n_answers, n_moves)

        Notes
        -----
        With x_k the places after k moves and v_l the probability of the target within l steps, the
        derivative of F(n) by P_ij is the sum over k < n of x_k(i) v_(n-1-k)(j).
        """
        longest = int(steps.max(initial=0))
        ahead = np.concatenate(
            [
                self.reached_within(max(longest - 1, 0)),
                np.broadcast_to(self.is_target[self.n_states :], (max(longest, 1), self.n_nodes - self.n_states)),
            ],
            axis=1,
        )
        found = np.zeros((len(starts), len(self.p)))
        who, where = np.unique(starts, return_inverse=True)
        place = np.zeros((len(who), self.n_states))
        place[np.arange(len(who)), who] = 1.0
        place[self.is_target[who]] = 0.0
        for k in range(longest):
            live = np.flatnonzero(steps > k)
            gain = ahead[steps[live] - 1 - k]
            found[live] += place[where[live]][:, self.state] * gain[:, self.target]
            place = place @ self._inner
        return np.where(self.is_target[self.state], 0.0, found)

    def gradient_work(self, steps: FloatArray) -> float:
        """Return how many products `gradients` would take, or as many as would take what it would keep."""
        asked = np.nan_to_num(steps, posinf=1e18)
        kept = float(asked.max(initial=0.0)) * self.n_nodes
        return max(float(asked.sum()) * len(self.p), _AHEAD_COST * kept)


def _between(
    steps: FloatArray, before: FloatArray, after: FloatArray, level: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the steps, and the place on the line between a step short of the level and the next."""
    rise = after - before
    share = np.divide(level - before, rise, out=np.ones(rise.shape), where=rise > 0)
    return steps, np.where(steps > 0, steps - 1.0 + np.clip(share, 0.0, 1.0), steps)
