"""What the answers of a walk become when one move is made likelier, exactly, with derivatives by all moves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.passage_moves import Moves
from journeys.kernels.removal import road


@dataclass(frozen=True, eq=False)
class Shift:
    """Moves made likelier, one at a time.

    Attributes
    ----------
    move : int array, shape (n_shifts,)
        Which.
    by : float array, shape (n_shifts,)
        How much, taken from moves of the same state to outcomes that are not the target.
    d_by : float array, shape (n_directions, n_shifts)
        Change of that in each direction.
    """

    move: IntArray
    by: FloatArray
    d_by: FloatArray


@dataclass(frozen=True, eq=False)
class Shifted:
    """What each shift does, arrays of shape (n_shifts,), and in some directions (n_directions, n_shifts).

    Attributes
    ----------
    reached, given : float arrays
        Change of the probability of the target from the start, and of the mean to it given that it is reached.
    slope_reached, slope_given : float arrays
        Their derivatives by the probability of the move, at no shift.
    d_reached, d_given : float arrays
        Change of the first two when all moves change in a direction.
    """

    reached: FloatArray
    given: FloatArray
    slope_reached: FloatArray
    slope_given: FloatArray
    d_reached: FloatArray
    d_given: FloatArray


@dataclass(frozen=True, eq=False)
class _Point:
    """All that the formulas are made of, at the moves of the shifts: numbers, or their changes in a direction.

    With N the visits, h the probability of the target, M the means and Z = N M N: `h0`, `g0` of the start;
    `visits` N_0i, `back` N_ji, `ahead` h_j, `after` g_j = (N M h)_j, `early` Z_0i, `round` Z_ji, `dwell` M_ij / P_ij.
    """

    h0: FloatArray
    g0: FloatArray
    visits: FloatArray
    back: FloatArray
    ahead: FloatArray
    after: FloatArray
    early: FloatArray
    round: FloatArray
    dwell: FloatArray


def shifted(
    n_states: int,
    n_nodes: int,
    move_state: IntArray,
    move_target: IntArray,
    p: FloatArray,
    mean: FloatArray,
    is_target: BoolArray,
    shift: Shift,
    d_p: FloatArray,
    d_mean: FloatArray,
    start: int = 0,
) -> Shifted:
    """Return what each shift does to the probability of a target and the mean to it.

    Parameters
    ----------
    n_states, n_nodes, move_state, move_target, p, mean, is_target
        As in `journeys.kernels.absorption.passage`; for steps give `p` twice. A mean may be NaN on moves that
        lead away for good.
    shift : Shift
        The moves to be made likelier; their mean dwell stays.
    d_p, d_mean : float arrays, shape (n_directions, n_moves)
        Directions, none or many; for steps the same twice.
    start : int
        Where the walk begins.

    Returns
    -------
    Shifted

    Notes
    -----
    Adding d to P_ij adds a N_0i h_j to the probability h_0, a = d / (1 - d N_ji), and to g_0 = (N M h)_0
    a (h_j Z_0i + N_0i g_j) + a^2 N_0i h_j Z_ji + d m N_0i h_j / (1 - d N_ji)^2, with Z = N M N and m the mean dwell
    of the move: the rank-one update of an inverse, exact for every d. The mean given the target is g_0 / h_0.

    References
    ----------
    J. Sherman, W. J. Morrison, Annals of Mathematical Statistics 21 (1950) 124-127.

    Examples
    --------
    >>> p = np.array([0.5, 0.5])
    >>> none = np.zeros((0, 2))
    >>> found = shifted(1, 3, np.array([0, 0]), np.array([1, 2]), p, p, np.arange(3) == 1,
    ...     Shift(np.array([0]), np.array([0.01]), np.zeros((0, 1))), none, none)
    >>> found.reached.round(4).tolist(), found.slope_reached.tolist()
    ([0.01], [1.0])
    """
    chain = _Chain(n_states, n_nodes, move_state, move_target, p, mean, is_target, shift.move, start)
    here = chain.point()
    reached, given, _ = _finite(here, shift.by)
    slope_reached = here.visits * here.ahead
    slope_g = here.ahead * here.early + here.visits * here.after + here.dwell * slope_reached
    slope_given = np.full(len(shift.by), np.nan)
    if here.h0 > 0:
        slope_given = (slope_g - here.g0 / here.h0 * slope_reached) / here.h0
    d_reached, d_given = np.zeros((len(d_p), len(shift.by))), np.zeros((len(d_p), len(shift.by)))
    for b in range(len(d_p)):
        tangent = chain.tangent(d_p[b], d_mean[b])
        d_reached[b], d_given[b] = _finite_tangent(here, tangent, shift.by, shift.d_by[b])
    return Shifted(reached, given, slope_reached, slope_given, d_reached, d_given)


def _finite(x: _Point, by: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the changes of h_0, of g_0 / h_0 and of g_0."""
    scale = 1.0 / (1.0 - by * x.back)
    a, both = by * scale, x.visits * x.ahead
    up = a * both
    more = a * (x.ahead * x.early + x.visits * x.after) + a**2 * both * x.round + by * x.dwell * both * scale**2
    given = np.full(len(by), np.nan)
    if x.h0 > 0:
        # not as the difference of two means, which share most of their digits
        given = (more - up * x.g0 / x.h0) / (x.h0 + up)
    return up, given, more


def _finite_tangent(x: _Point, d: _Point, by: FloatArray, d_by: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Differentiate `_finite` in a direction: the chain rule, term by term."""
    scale = 1.0 / (1.0 - by * x.back)
    d_scale = scale**2 * (d_by * x.back + by * d.back)
    a, d_a = by * scale, d_by * scale + by * d_scale
    both, d_both = x.visits * x.ahead, d.visits * x.ahead + x.visits * d.ahead
    d_up = d_a * both + a * d_both
    cross = x.ahead * x.early + x.visits * x.after
    d_cross = d.ahead * x.early + x.ahead * d.early + d.visits * x.after + x.visits * d.after
    turn, d_turn = both * x.round, d_both * x.round + both * d.round
    stay, d_stay = x.dwell * both, d.dwell * both + x.dwell * d_both
    d_g = d.g0 + d_a * cross + a * d_cross + 2.0 * a * d_a * turn + a**2 * d_turn
    d_g = d_g + (d_by * stay + by * d_stay) * scale**2 + by * stay * 2.0 * scale * d_scale
    if x.h0 <= 0:
        return d_up, np.full(len(by), np.nan)
    up, _, more = _finite(x, by)
    h, g = x.h0 + up, x.g0 + more
    d_after = (d_g - g / h * (d.h0 + d_up)) / h
    return d_up, d_after - (d.g0 - x.g0 / x.h0 * d.h0) / x.h0


class _Chain:
    """The moves among the states from which the target can be reached, as full matrices."""

    def __init__(
        self,
        n_states: int,
        n_nodes: int,
        state: IntArray,
        target: IntArray,
        p: FloatArray,
        mean: FloatArray,
        is_target: BoolArray,
        shifts: IntArray,
        start: int,
    ) -> None:
        """Invert I - P, and note the places of the shifts."""
        way = road(n_states, n_nodes, state, target, p, mean, is_target, start)
        self._v: Moves = way.moves
        at = np.flatnonzero(self._v.open_states)
        n = len(at)
        # one more row and column of zeros for what lies off the way
        index = np.full(n_nodes, n)
        index[at] = np.arange(n)
        self._row, self._column = index[state], index[target]
        self._inside = (self._row < n) & (self._column < n)
        self._visits = np.zeros((n + 1, n + 1))
        self._visits[:n, :n] = self._v.solver.solve(np.eye(n))
        self._start, self._shifts, self._n = int(index[start]), shifts, n
        self._ahead = way.share[target]
        self._h = np.append(way.share[at], 0.0)
        leads = (self._ahead > 0) & (self._row < n)
        self._mean = np.where(leads, mean, 0.0)
        self._leads = leads
        self._spent = self._pull(self._mean * self._ahead)
        self._g = self._visits @ self._spent
        self._matrix_mean = self._matrix(self._mean)
        self._z = self._visits @ self._matrix_mean @ self._visits
        self._p = p

    def _matrix(self, values: FloatArray) -> FloatArray:
        found = np.zeros((self._n + 1, self._n + 1))
        found[self._row[self._inside], self._column[self._inside]] = values[self._inside]
        return found

    def _pull(self, values: FloatArray) -> FloatArray:
        """Sum over the moves out of each open state."""
        found = np.bincount(self._row, weights=np.where(self._leads, values, 0.0), minlength=self._n + 1)
        found[self._n] = 0.0
        return np.asarray(found, dtype=np.float64)

    def _at(
        self, h: FloatArray, g: FloatArray, visits: FloatArray, z: FloatArray, ahead: FloatArray, dwell: FloatArray
    ) -> _Point:
        s = self._shifts
        i, j, start = self._row[s], self._column[s], self._start
        return _Point(
            h[start], g[start], visits[start, i], visits[j, i], ahead[s], g[j], z[start, i], z[j, i], dwell
        )  # fmt: skip

    def point(self) -> _Point:
        """Return the numbers."""
        s = self._shifts
        dwell = np.divide(self._mean[s], self._p[s], out=np.zeros(len(s)), where=self._p[s] > 0)
        return self._at(self._h, self._g, self._visits, self._z, self._ahead, dwell)

    def tangent(self, d_p: FloatArray, d_mean: FloatArray) -> _Point:
        """Return how they change in a direction."""
        visits, s = self._visits, self._shifts
        by_p, by_mean = self._matrix(d_p), self._matrix(np.where(self._leads, d_mean, 0.0))
        d_h = visits @ self._pull_all(d_p * self._ahead)
        d_g = visits @ (
            self._pull(d_mean * self._ahead) + self._matrix_mean @ d_h + self._pull_all(d_p * self._g[self._column])
        )
        before = visits @ by_p
        d_visits = before @ visits
        d_z = before @ self._z + (visits @ by_mean + self._z @ by_p) @ visits
        d_ahead = d_h[self._column]
        p = np.where(self._p[s] > 0, self._p[s], np.inf)
        d_dwell = (np.where(self._leads[s], d_mean[s], 0.0) - self._mean[s] / p * d_p[s]) / p
        return self._at(d_h, d_g, d_visits, d_z, d_ahead, d_dwell)

    def _pull_all(self, values: FloatArray) -> FloatArray:
        found = np.bincount(self._row, weights=values, minlength=self._n + 1)
        found[self._n] = 0.0
        return np.asarray(found, dtype=np.float64)
