"""Dwell of moves as masses on an even grid of times: binned dwells, atoms, and distributions that are given."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray, sum_at

Cdf = Callable[[FloatArray], FloatArray]

_BLOCK = 2_000_000  # numbers worked on at once
# Three nodes are exact for a distribution function that is a quintic between two points of the grid.
_NODES = np.array([-np.sqrt(0.6), 0.0, np.sqrt(0.6)])
_WEIGHTS = np.array([5.0, 8.0, 5.0]) / 18.0
_HALVINGS = 40  # the first cell is cut in halves towards 0, where quick moves have all they have


@dataclass(frozen=True, eq=False)
class BinnedDwell:
    """Moves whose dwell lies in bins, with a mean of its own in each; and atoms.

    Attributes
    ----------
    n_moves : int
        Number of moves.
    move, bin : int arrays, shape (n_cells,)
        Of each cell.
    q, tau : float arrays, shape (n_cells,)
        Probability of the cell, and the mean dwell in it.
    lower, upper : float arrays, shape (n_bins,)
        Edges of the bins; one ends where the next begins, or both edges are one time on a lattice.
    atom_move, atom_at, atom_q : arrays, shape (n_atoms,)
        Dwells known to the point.

    Notes
    -----
    In a bin the density is a straight line with the mean of the cell; where such a line would fall below
    zero it is a triangle at one end of the bin. Mass between two points of the grid goes to both, so that
    the mean stays what it is.

    Examples
    --------
    >>> even = BinnedDwell(1, np.array([0]), np.array([0]), np.array([1.0]), np.array([1.0]),
    ...     np.array([0.0]), np.array([2.0]), np.zeros(0, np.int64), np.zeros(0), np.zeros(0))
    >>> even.mass(1.0, 4).ravel().tolist()
    [0.25, 0.5, 0.25, 0.0]
    """

    n_moves: int
    move: IntArray
    bin: IntArray
    q: FloatArray
    tau: FloatArray
    lower: FloatArray
    upper: FloatArray
    atom_move: IntArray
    atom_at: FloatArray
    atom_q: FloatArray

    @cached_property
    def _pieces(self) -> tuple[FloatArray, ...]:
        """Coefficients of the integrated distribution function, each of shape (n_bins + 1, n_moves).

        With x the time since the lower edge it is c0 + c1 x + c2 x^2 + c3 x^3 + up max(x - off, 0)^3
        + down max(leg - x, 0)^3.
        """
        shape = (len(self.lower) + 1, self.n_moves)
        low, high = self.lower[self.bin], self.upper[self.bin]
        width = high - low
        tilt = 6.0 * (self.tau - (low + high) / 2.0) / width
        rising, falling = tilt > 1.0, tilt < -1.0
        straight = ~(rising | falling)
        leg = np.clip(np.where(rising, 3.0 * (high - self.tau), 3.0 * (self.tau - low)), 1e-9 * width, width)
        cube = self.q / (3.0 * leg**2)

        def put(value: FloatArray) -> FloatArray:
            place = self.bin * shape[1] + self.move
            return sum_at(place, value, shape[0] * shape[1]).reshape(shape)

        q = put(self.q)
        before = np.cumsum(q, axis=0) - q
        widths = np.append(self.upper - self.lower, 0.0)[:, None]
        area = before * widths + put(self.q * (high - self.tau))
        start = np.cumsum(area, axis=0) - area
        return (
            start - put(np.where(falling, self.q * leg / 3.0, 0.0)),
            before + put(np.where(falling, self.q, 0.0)),
            put(np.where(straight, self.q * (1.0 - tilt) / (2.0 * width), 0.0)),
            put(np.where(straight, self.q * tilt / (3.0 * width**2), 0.0)),
            put(np.where(rising, cube, 0.0)),
            put(np.where(rising, width - leg, 0.0)),
            put(np.where(falling, cube, 0.0)),
            put(np.where(falling, leg, 0.0)),
        )

    def mass(self, dt: float, n: int) -> FloatArray:
        """Return the mass of each move at 0, dt, 2 dt … (n - 1) dt; what lies beyond is left out.

        Parameters
        ----------
        dt : float
            Distance of two points.
        n : int
            Number of points.

        Returns
        -------
        float array, shape (n, n_moves)
        """
        found = np.zeros((n, self.n_moves))
        if len(self.q) and (self.upper > self.lower).any():
            # two points past the last bin nothing is left to come
            last = int(min(n, self.upper[-1] // dt + 3))
            time = dt * np.arange(last + 1)
            at = np.searchsorted(self.upper, time, side="left")
            x = (time - np.append(self.lower, self.upper[-1])[at])[:, None]
            step = max(_BLOCK // (last + 1), 1)
            for i in range(0, self.n_moves, step):
                pieces = (np.take(piece[:, i : i + step], at, axis=0) for piece in self._pieces)
                found[:last, i : i + step] = _second_difference(_integrated(x, *pieces)) / dt
        elif len(self.q):
            place = np.rint(self.tau / dt).astype(np.int64)
            near = place < n
            np.add.at(found, (place[near], self.move[near]), self.q[near])
        whole, part = np.divmod(self.atom_at / dt, 1.0)
        for shift, share in ((0, 1.0 - part), (1, part)):
            near = (whole + shift < n) & (share > 0)
            at = (whole + shift)[near].astype(np.int64)
            np.add.at(found, (at, self.atom_move[near]), (self.atom_q * share)[near])
        return found


@dataclass(frozen=True, eq=False)
class GivenDwell:
    """Moves whose dwell has a distribution that is given.

    Attributes
    ----------
    p : float array, shape (n_moves,)
        Probability of the move.
    which : int array, shape (n_moves,)
        Place of its distribution in `cdfs`; -1: no time at all.
    cdfs : sequence of callables
        Distribution functions, float arrays in and out.
    lattice : bool
        True where all dwells are whole multiples of the grid's distance.

    Examples
    --------
    >>> sure = GivenDwell(np.array([0.5]), np.array([0]), [lambda t: (t >= 2.0) * 1.0], lattice=True)
    >>> sure.mass(1.0, 4).ravel().tolist()
    [0.0, 0.0, 0.5, 0.0]
    """

    p: FloatArray
    which: IntArray
    cdfs: Sequence[Cdf]
    lattice: bool = False

    def mass(self, dt: float, n: int) -> FloatArray:
        """Return the mass of each move at 0, dt, 2 dt … (n - 1) dt (see `BinnedDwell.mass`)."""
        columns = np.zeros((n, len(self.cdfs) + 1))
        columns[0, -1] = 1.0
        for i in np.unique(self.which[self.which >= 0]):
            if self.lattice:
                columns[:, i] = np.diff(self.cdfs[i](dt * np.arange(n)), prepend=0.0)
            else:
                columns[:, i] = _second_difference(_area_under(self.cdfs[i], dt, n)[:, None])[:, 0] / dt
        return self.p * columns[:, self.which]


def _integrated(
    x: FloatArray, c0: FloatArray, c1: FloatArray, c2: FloatArray, c3: FloatArray,
    up: FloatArray, off: FloatArray, down: FloatArray, leg: FloatArray,
) -> FloatArray:
    """Return the integrated distribution function at each point; the coefficients are used up."""
    c3 *= x
    c3 += c2
    c3 *= x
    c3 += c1
    c3 *= x
    c3 += c0
    for weight, reach in ((up, np.subtract(x, off, out=off)), (down, np.subtract(leg, x, out=leg))):
        np.maximum(reach, 0.0, out=reach)
        weight *= reach
        reach *= reach
        weight *= reach
        c3 += weight
    return c3


def _second_difference(area: FloatArray) -> FloatArray:
    """Return area(t + dt) - 2 area(t) + area(t - dt) along the first axis; before time 0 there is no area."""
    rise = np.diff(area, axis=0)
    rise[1:] -= rise[:-1].copy()
    return rise


def _area_under(cdf: Cdf, dt: float, n: int) -> FloatArray:
    """Return the integral of a distribution function from 0 to each of 0, dt … n dt."""
    near = np.concatenate([[0.0], dt * 0.5 ** np.arange(_HALVINGS, -1.0, -1.0)])
    edges = np.concatenate([near, dt * np.arange(2, n + 1)])
    width = np.diff(edges)
    middle = (edges[1:] + edges[:-1]) / 2.0
    nodes = middle[:, None] + width[:, None] / 2.0 * _NODES
    area = np.cumsum(width * (np.asarray(cdf(nodes.ravel())).reshape(nodes.shape) @ _WEIGHTS))
    return np.concatenate([[0.0], area[len(near) - 2 :]])
