"""Distribution of the elapsed time to a target, by damped Fourier transforms on several scales of time."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import cast

import numpy as np
import numpy.typing as npt

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.graph import can_reach

ComplexArray = npt.NDArray[np.complex128]
MassOn = Callable[[float, int], FloatArray]

_DAMPING = 1e-8  # what comes round after all points of the grid counts this little; less would let rounding grow
_BLOCK = 1_000_000  # complex numbers in one batch of systems


@dataclass(frozen=True, eq=False)
class Renewal:
    """Moves that take time, and the target whose first visit is awaited.

    Attributes
    ----------
    n_states, n_nodes : int
        Nodes 0 to n_states - 1 are states, the rest outcomes.
    state, target : int arrays, shape (n_moves,)
        Where each move comes from and goes to; a pair may come more than once.
    possible : bool array, shape (n_moves,)
        Moves of a positive probability.
    is_target : bool array, shape (n_nodes,)
        The target, outcomes or states; a state in it is not left again.
    mass : callable
        From (dt, n) to the mass of each move at the times 0, dt … (n - 1) dt, shape (n, n_moves).

    Notes
    -----
    The density f of the time to the target solves f = K_target + K f with K the matrix of the moves'
    densities. On a grid its transform is taken with all terms damped by r^n, r^N = 1e-8, so that what the
    transform folds back vanishes.

    References
    ----------
    R. Pyke, Markov renewal processes with finitely many states, Ann. Math. Statist. 32 (1961) 1243-1259.
    J. Abate, W. Whitt, Numerical inversion of probability generating functions, Oper. Res. Letters 12
    (1992) 245-251.
    """

    n_states: int
    n_nodes: int
    state: IntArray
    target: IntArray
    possible: BoolArray
    is_target: BoolArray
    mass: MassOn

    @cached_property
    def open_states(self) -> IntArray:
        """States that are no target and from which it can be reached."""
        used = self.possible
        reaches = can_reach(self.n_nodes, self.state[used], self.target[used], self.is_target)
        return np.flatnonzero(reaches[: self.n_states] & ~self.is_target[: self.n_states])

    @cached_property
    def place(self) -> IntArray:
        """Place of each node among the open states, their number for the target, -1 for none."""
        found = np.full(self.n_nodes, -1, dtype=np.int64)
        found[self.open_states] = np.arange(len(self.open_states))
        found[self.is_target] = len(self.open_states)
        return found

    @cached_property
    def leading(self) -> IntArray:
        """Moves on a way to the target."""
        size = len(self.open_states)
        row, column = self.place[self.state], self.place[self.target]
        return np.flatnonzero(self.possible & (row >= 0) & (row < size) & (column >= 0))

    def kernel(self, dt: float, n: int) -> tuple[IntArray, IntArray, ComplexArray]:
        """Return the transform of the densities of the moves that lead to the target.

        Parameters
        ----------
        dt : float
            Distance of the points in time.
        n : int
            Points of the transform; as many masses are used.

        Returns
        -------
        row, column : int arrays, shape (n_pairs,)
            Places (see `place`); no pair comes twice.
        values : complex array, shape (n // 2 + 1, n_pairs)
        """
        size = len(self.open_states)
        key = self.place[self.state[self.leading]] * (size + 1) + self.place[self.target[self.leading]]
        order = np.argsort(key, kind="stable")
        pairs, first = np.unique(key[order], return_index=True)
        mass = self.mass(dt, n)[:, self.leading[order]]
        if len(pairs) < len(key):
            mass = np.add.reduceat(mass, first, axis=1)
        mass *= _damping(n)[:, None]
        return pairs // (size + 1), pairs % (size + 1), np.fft.rfft(mass, n=n, axis=0)

    def solve(self, dt: float, n: int) -> Scale:
        """Solve for the time to the target from every state, on one grid."""
        return Scale(self, dt, n, self.kernel(dt, n))


@dataclass(frozen=True, eq=False)
class Scale:
    """The time to the target on one grid of times.

    Attributes
    ----------
    walk : Renewal
        What was solved.
    dt : float
        Distance of the points in time.
    n : int
        Points of the transform; as many answers.
    """

    walk: Renewal
    dt: float
    n: int
    _kernel: tuple[IntArray, IntArray, ComplexArray]

    @cached_property
    def reach(self) -> ComplexArray:
        """Transform of the density from every open state, shape (n_freq, n_open + 1); the last, the target's, is 1."""
        reach = self._nothing_reached()
        for part, matrix, right in self._systems():
            reach[part, :-1] = np.linalg.solve(matrix, right[..., None])[..., 0]
        return reach

    @cached_property
    def cdf(self) -> FloatArray:
        """Probability of the target up to each point, shape (n, n_open).

        The k-th value belongs to the time (k + 1/2) dt, or to k dt on a lattice.
        """
        return self.summed(self.reach[:, :-1])

    def visits(self, start: int) -> ComplexArray:
        """Return the transform of the densities of visits from one open state, shape (n_freq, n_open)."""
        last = self.__dict__.get("_last_visits")
        if last is None or last[0] != start:
            last = (start, self._visits_from(start))
            self.__dict__["_last_visits"] = last  # most often asked for again from the same start
        return cast("ComplexArray", last[1])

    def all_visits(self) -> ComplexArray:
        """Return the same from every open state, shape (n_freq, n_open, n_open)."""
        size = len(self.walk.open_states)
        found = np.empty((self.n // 2 + 1, size, size), dtype=np.complex128)
        for part, matrix, _ in self._systems():
            found[part] = np.linalg.inv(matrix)
        return found

    def summed(self, transform: ComplexArray) -> FloatArray:
        """Return the running sum over the grid of what was transformed (first axis)."""
        values = np.fft.irfft(transform, n=self.n, axis=0)
        values /= _damping(self.n)[:, None]
        return np.cumsum(values, axis=0, out=values)

    def _visits_from(self, start: int) -> ComplexArray:
        """Solve for the visits from one open state, and for the way to the target while the systems are there."""
        n_freq, size = self.n // 2 + 1, len(self.walk.open_states)
        visits = np.zeros((n_freq, size), dtype=np.complex128)
        reach = None if "reach" in self.__dict__ else self._nothing_reached()
        one = np.zeros((size, 1))
        one[start] = 1.0
        for part, matrix, right in self._systems():
            visits[part] = np.linalg.solve(matrix.transpose(0, 2, 1), one)[..., 0]
            if reach is not None:
                reach[part, :size] = np.linalg.solve(matrix, right[..., None])[..., 0]
        if reach is not None:
            self.__dict__["reach"] = reach
        return visits

    def _nothing_reached(self) -> ComplexArray:
        return np.ones((self.n // 2 + 1, len(self.walk.open_states) + 1), dtype=np.complex128)

    def _systems(self) -> Iterator[tuple[slice, ComplexArray, ComplexArray]]:
        row, column, values = self._kernel
        size, n_freq = len(self.walk.open_states), self.n // 2 + 1
        inner = column < size
        place = row[inner] * size + column[inner]
        step = max(_BLOCK // max(size * size, 1), 1)
        for first in range(0, n_freq, step):
            part = slice(first, min(first + step, n_freq))
            matrix = np.zeros((part.stop - part.start, size * size), dtype=np.complex128)
            matrix[:, place] = values[part, inner]
            np.negative(matrix, out=matrix)
            matrix[:, :: size + 1] += 1.0
            right = np.zeros((part.stop - part.start, size), dtype=np.complex128)
            right[:, row[~inner]] = values[part, ~inner]
            yield part, matrix.reshape(len(matrix), size, size), right


@dataclass(frozen=True, eq=False)
class Curve:
    """A distribution function from one start, by points.

    Attributes
    ----------
    time, reached : float arrays, shape (n_points,)
        Times and the probability of the target up to them; the line between two points on the way, or the
        value of the point before on a lattice.
    limit : float
        The probability of ever reaching it: the value beyond the last point.
    lattice : bool
        True where time is in whole days.
    """

    time: FloatArray
    reached: FloatArray
    limit: float
    lattice: bool

    def at(self, times: FloatArray) -> FloatArray:
        """Return the probability up to each time; from the right where there is a jump."""
        if self.lattice:
            place = np.searchsorted(self.time, times, side="right") - 1
            found = np.where(place >= 0, self.reached[np.maximum(place, 0)], 0.0)
        else:
            found = np.interp(times, self.time, self.reached, left=0.0)
        return np.where(times > self.time[-1], self.limit, found)

    def inverse(self, level: FloatArray) -> FloatArray:
        """Return the first time at which each level is reached; infinite where it never is.

        On a lattice the place between two whole days where the line meets the level, from -1 where the level
        is met on day 0.
        """
        first = np.searchsorted(self.reached, level, side="left")
        inside = np.clip(first, 1, len(self.time) - 1)
        low, high = self.reached[inside - 1], self.reached[inside]
        share = np.divide(level - low, high - low, out=np.ones(np.shape(level)), where=high > low)
        found = self.time[inside - 1] + np.clip(share, 0.0, 1.0) * (self.time[inside] - self.time[inside - 1])
        begin = self.time[0]
        if self.lattice:
            begin = begin - 1.0 + np.clip(level / max(self.reached[0], 1e-300), 0.0, 1.0)
        found = np.where(first == 0, begin, found)
        return np.where(first >= len(self.time), np.where(level <= self.limit, self.time[-1], np.inf), found)


def curve(parts: list[tuple[float, bool, Scale]], start: int, at_once: float, limit: float) -> Curve:
    """Join the grids of several scales to one curve from one open state.

    Parameters
    ----------
    parts : list
        From `journeys.kernels.grids.Grids.scales`, the largest times first.
    start : int
        Place of the start among the open states.
    at_once : float
        Probability of reaching the target in no time.
    limit : float
        Probability of ever reaching it.

    Returns
    -------
    Curve
    """
    times: list[FloatArray] = [np.zeros(1)]
    values: list[FloatArray] = [np.array([at_once])]
    for hi, is_last, scale in reversed(parts):
        time: FloatArray = np.asarray((np.arange(scale.n) + 0.5) * scale.dt, dtype=np.float64)
        mine = (time <= hi) & (is_last | (time > hi / 10.0))
        times.append(time[mine])
        values.append(scale.cdf[mine, start])
    reached = np.clip(np.maximum.accumulate(np.concatenate(values)), 0.0, limit)
    return Curve(np.concatenate(times), reached, limit, lattice=False)


def lattice_curve(scale: Scale, start: int, limit: float) -> Curve:
    """Return the curve of a grid whose points are whole days, exact at each of them."""
    reached = np.clip(np.maximum.accumulate(scale.cdf[:, start]), 0.0, limit)
    return Curve(np.asarray(scale.dt * np.arange(len(reached)), dtype=np.float64), reached, limit, lattice=True)


def _damping(n: int) -> FloatArray:
    return np.asarray(_DAMPING ** (np.arange(n) / n), dtype=np.float64)
