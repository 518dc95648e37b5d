"""What happens on the way to a target of those who get there in time: moves made, states touched.

All in transforms on a grid of times (see `kernels.renewal`): with N = (I - K)^-1, K the densities of the moves among
the open states, and f = N K_target, the answers from one start, and what one more journey through each pair of states,
taking no time, adds to them.
"""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import IntArray
from journeys.kernels.renewal import ComplexArray, Scale


class OnTheWay:
    """The ways from one open state to the target, on one grid of times.

    Parameters
    ----------
    scale : Scale
        The grid.
    start : int
        Place of the start among the open states.
    row, column : int arrays, shape (n_pairs,)
        Places from and to which moves lead; the target has the last place.

    Notes
    -----
    The moves made by those who are there by time t have the transform S = N_0. f: each visit on the way is left by one
    move. For those who touch any of the states C: R = N_0C N_CC^-1 f_C. As dN = N dK N and df = N dK_j f_j, with f = 1
    and N = 0 at the target, a pair i, j adds N_0i (N f)_j + (N_0. N)_i f_j to S, and N_0i r_j + p_i (f_j - r_j) to R,
    with p = N_0C N_CC^-1 N_C. and r = N_.C N_CC^-1 f_C.

    References
    ----------
    R. Pyke, Markov renewal processes with finitely many states, Ann. Math. Statist. 32 (1961) 1243-1259. J. G. Kemeny,
    J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III.
    """

    def __init__(self, scale: Scale, start: int, row: IntArray, column: IntArray) -> None:
        self._inverse, self._reach = scale.all_visits(), scale.reach
        self._start, self._row, self._column = start, row, column

    def moves(self) -> tuple[ComplexArray, ComplexArray]:
        """Return the transforms of the moves made, shape (n_freq,), and of what a pair adds, (n_freq, n_pairs)."""
        visits, own = self._inverse[:, self._start], self._reach[:, :-1]
        ahead = _with_target(np.matmul(self._inverse, own[..., None])[..., 0])
        before = np.matmul(visits[:, None, :], self._inverse)[:, 0]
        change = visits[:, self._row] * ahead[:, self._column]
        change += before[:, self._row] * self._reach[:, self._column]
        return (visits * own).sum(axis=1), change

    def touching(self, states: IntArray) -> tuple[ComplexArray, ComplexArray]:
        """Return the same for those who touch any of some open states, given by their places."""
        inverse, visits = self._inverse, self._inverse[:, self._start]
        among = inverse[:, states[:, None], states]
        first = np.linalg.solve(among.transpose(0, 2, 1), visits[:, states, None])[..., 0]
        onward = np.linalg.solve(among, self._reach[:, states, None])[..., 0]
        back = _with_target(np.matmul(inverse[:, :, states], onward[..., None])[..., 0])[:, self._column]
        comes = np.matmul(first[:, None, :], inverse[:, states])[:, 0][:, self._row]
        change = visits[:, self._row] * back
        change += comes * (self._reach[:, self._column] - back)
        return (visits[:, states] * onward).sum(axis=1), change


def _with_target(values: ComplexArray) -> ComplexArray:
    """Return values of the open states with a 0 for the target."""
    return np.concatenate([values, np.zeros((len(values), 1))], axis=1)
