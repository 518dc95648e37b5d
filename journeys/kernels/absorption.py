"""Probability, mean and spread of the first passage to a set of nodes, with derivatives."""

from __future__ import annotations

from dataclasses import dataclass
from typing import cast

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.passage_moves import Moves, moves_to

Gradient = tuple[FloatArray, FloatArray, FloatArray]

_TINY = 1e-290  # below this a float has no room for all its digits, or for what was left out of it
_FLOATS = 2**22  # numbers of one kind worked on at a time, about
_WIDE = 0.01  # variance to mean square above which the one can be had from the other without loss


@dataclass(frozen=True, eq=False)
class Changes:
    """How the answers from every state change in some directions, each of shape (n_directions, n_states).

    Attributes
    ----------
    probability, mean_given, sd_given : float arrays
        As in `Passage`; NaN for times given a target that is not reached, and for a standard deviation of 0.
    """

    probability: FloatArray
    mean_given: FloatArray
    sd_given: FloatArray


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
    doubtful : bool array, shape (n_states,)
        The target can be reached on the graph, but an answer is too small or too large for a float, or comes
        from iteration and may be off by more than a millionth: it must not be told as it is.
    """

    probability: FloatArray
    certain: BoolArray
    mean_given: FloatArray
    sd_given: FloatArray
    first_moment: FloatArray
    second_moment: FloatArray
    doubtful: BoolArray
    _moves: Moves

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

    def probability_changes(self, d_p: FloatArray) -> FloatArray:
        """Change of the probability of reaching the target, from every state, in some directions.

        Parameters
        ----------
        d_p : float array, shape (n_directions, n_moves)
            Change of the probability of each move.

        Returns
        -------
        float array, shape (n_directions, n_states)

        Examples
        --------
        >>> import numpy as np
        >>> p = np.array([0.5, 0.5])
        >>> walk = passage(1, 3, np.array([0, 0]), np.array([1, 2]), p, p, p, np.arange(3) == 1)
        >>> walk.probability_changes(np.array([[1.0, -1.0], [0.0, 1.0]])).tolist()
        [[1.0], [0.0]]
        """
        v = self._moves
        to_h = v.sums(v.over_nodes(self.probability, 1.0)[v.target])
        out = np.empty((len(d_p), v.n_states))
        for some in _batches(*d_p.shape):
            out[some] = v.solve(to_h @ _upright(d_p[some])).T
        return out

    def changes(self, d_p: FloatArray, d_mean: FloatArray, d_second: FloatArray) -> Changes:
        """Change of the answers from every state when the moves change in some directions.

        Parameters
        ----------
        d_p, d_mean, d_second : float arrays, shape (n_directions, n_moves)
            Change of the probability, the mean and the second moment of each move. For steps, where the three
            are one, give the same three times.

        Returns
        -------
        Changes
            What `gradients` of every state gives, multiplied with the directions and summed.

        Notes
        -----
        With N = (I - P)^-1: dh = N dP h, dg = N (dM h + M dh + dP g) and
        ds = N (dM2 h + M2 dh + 2 dM g + 2 M dg + dP s), for all directions with the same factors.

        Examples
        --------
        >>> import numpy as np
        >>> p = np.array([0.5, 0.5])
        >>> walk = passage(1, 3, np.array([0, 0]), np.array([0, 2]), p, p, p, np.arange(3) == 2)
        >>> one = np.array([[0.1, -0.1]])
        >>> walk.changes(one, one, one).mean_given.round(10).tolist()
        [[0.4]]
        """
        asked = (d_p, d_mean, d_second)
        last = self.__dict__.get("_last_changes")
        if last is None or not all(mine is given for mine, given in zip(last[0], asked, strict=True)):
            last = (asked, self._changed(*asked))
            self.__dict__["_last_changes"] = last  # most often the same directions are asked for again
        return cast("Changes", last[1])

    def _changed(self, d_p: FloatArray, d_mean: FloatArray, d_second: FloatArray) -> Changes:
        v = self._moves
        to_h, to_g, to_s = (v.sums(v.over_nodes(x, end)[v.target]) for x, end in self._moments())
        # moves that lead away for good are no part of the way there, known or not
        leads = v.over_nodes(self.probability, 1.0)[v.target] > 0
        mean, second = (v.matrix(np.where(leads, x, 0.0)) for x in (v.mean, v.second))
        parts = tuple(np.empty((len(d_p), v.n_states)) for _ in range(3))
        for some in _batches(*d_p.shape):
            by_p = _upright(d_p[some])
            by_mean = by_p if d_mean is d_p else _upright(d_mean[some])
            by_second = by_p if d_second is d_p else _upright(d_second[some])
            d_h = v.solve(to_h @ by_p)
            d_g = v.solve(to_h @ by_mean + mean @ d_h + to_g @ by_p)
            crossed = to_g @ by_mean + mean @ d_g
            d_s = v.solve(to_h @ by_second + second @ d_h + 2.0 * crossed + to_s @ by_p)
            for whole, part in zip(parts, self._of_answers(d_h, d_g, d_s), strict=True):
                whole[some] = part.T
        return Changes(*parts)

    def _of_answers(self, d_h: FloatArray, d_g: FloatArray, d_s: FloatArray) -> Gradient:
        """Turn changes of the moments into those of the answers, all of shape (n_states, n_directions)."""
        h, mu, sd, s = (
            x[:, None] for x in (self.probability, self.mean_given, self.sd_given, self.second_moment)
        )
        share = _or_nan(h)
        d_mu = (d_g - mu * d_h) / share
        d_sd = ((d_s - s / share * d_h) / share - 2.0 * mu * d_mu) / _or_nan(2.0 * sd)
        # a target is reached at once, whatever changes
        arrived = self._moves.is_target[: len(h)]
        d_mu[arrived] = d_sd[arrived] = 0.0
        return d_h, d_mu, d_sd

    def _moments(self) -> tuple[tuple[FloatArray, float], ...]:
        """Moments of order 0, 1, 2 from every state, each with its value at a target."""
        return (self.probability, 1.0), (self.first_moment, 0.0), (self.second_moment, 0.0)


def _batches(n: int, n_moves: int) -> list[slice]:
    """Cut directions into parts that keep memory modest."""
    few = max(1, _FLOATS // max(n_moves, 1))
    return [slice(first, first + few) for first in range(0, n, few)]


def _upright(directions: FloatArray) -> FloatArray:
    """Directions in columns, side by side in memory, as sparse products take them."""
    return np.ascontiguousarray(directions.T, dtype=np.float64)


def _or_nan(x: FloatArray) -> FloatArray:
    """Return what can be divided by: NaN for 0."""
    return np.where(x == 0, np.nan, x)


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
    Only states from which the graph leads to the target are solved for, so the matrix is never singular. The
    diagonal of I - P is the sum of what leaves a state, not 1 minus what stays, and states are taken out without
    a subtraction, so that also tiny probabilities and huge means are right to nearly all digits. A spread that is
    small beside the mean is solved for about the mean; a wide one comes from the second moment.

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
    v = moves_to(n_states, n_nodes, move_state, move_target, p, mean, second, is_target)
    at_target, open_states, certain = is_target[:n_states], v.open_states, v.certain
    direct = v.pull(p * is_target[move_target])
    h = v.solve(direct)
    doubtful = open_states & ~certain & (~(h > _TINY) | v.off(h, direct))
    h = np.where(certain | at_target, 1.0, np.clip(h, 0.0, 1.0))
    # numbers too large for a float are told as doubtful
    with np.errstate(over="ignore", invalid="ignore"):
        # what happens on moves that lead away for good, known or not, is no part of the way there
        leads = v.over_nodes(h, 1.0)[move_target]
        first = np.where(leads > 0, mean, 0.0)
        right = v.pull(first * leads)
        g = v.solve(right)
        mu = np.divide(g, h, out=np.full(n_states, np.nan), where=h > 0)
        variance, s = _spread(v, h, leads, mu, g)
        doubtful |= open_states & v.off(g, right)
    if not (np.isnan(mean).any() or np.isnan(second).any()):
        doubtful |= open_states & ~(np.isfinite(mu) & np.isfinite(variance))
    return Passage(
        probability=h, certain=certain, mean_given=mu, sd_given=np.sqrt(variance),
        first_moment=g, second_moment=s, doubtful=doubtful, _moves=v,
    )  # fmt: skip


def _spread(v: Moves, h: FloatArray, leads: FloatArray, mu: FloatArray, g: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Variance of the time given the target is reached, and the mean square counted 0 where it is not.

    About the mean each move adds the square of its dwell and of the change in mean. That keeps all digits of a
    small spread; of a wide one it loses those that the means do not differ by.
    """
    known = leads > 0
    first, square = (np.where(known, x, 0.0) for x in (v.mean, v.second))
    s = v.solve(v.pull(square * leads + 2.0 * first * v.over_nodes(g, 0.0)[v.target]))
    ratio = np.divide(s, h, out=np.full(v.n_states, np.nan), where=h > 0)
    wide = ratio - mu**2
    jump = v.over_nodes(np.nan_to_num(mu), 0.0)
    change = jump[v.target] - jump[v.state]
    dwell = np.divide(v.mean, v.p, out=np.zeros(len(v.p)), where=v.p > 0)
    own = np.maximum(v.second - v.mean * dwell, 0.0)
    about = np.maximum(v.solve(v.pull(np.where(known, own + v.p * (dwell + change) ** 2, 0.0) * leads)), 0.0)
    narrow = np.divide(about, h, out=np.full(v.n_states, np.nan), where=h > 0)
    variance = np.where(wide > _WIDE * ratio, wide, narrow)
    variance[v.is_target[: v.n_states]] = 0.0
    variance[np.isinf(variance)] = np.nan
    return variance, np.where(h > 0, s, 0.0)
