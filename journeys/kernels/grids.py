"""The grids on which the time to a target is solved for: how fine, how far, and each solved but once."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from journeys.kernels.renewal import Renewal, Scale

POINTS = 1024  # fewest of a transform
DECADES = 6
_PER_MOVE = 400.0  # points for one move, see `points_for`

Part = tuple[float, bool, Scale]


@dataclass(frozen=True, eq=False)
class Grids:
    """The time to a target on the grids that were asked for.

    Attributes
    ----------
    renewal : Renewal
        Moves that take time, and the target.
    """

    renewal: Renewal
    _solved: dict[tuple[float, int], Scale] = field(default_factory=dict, init=False, repr=False)

    def solve(self, dt: float, n: int) -> Scale:
        """Return the solution on one grid (see `Renewal.solve`); of the same grid the same."""
        if (dt, n) not in self._solved:
            self._solved[dt, n] = self.renewal.solve(dt, n)
        return self._solved[dt, n]

    def scales(self, top: float, points: int = POINTS) -> Iterator[Part]:
        """Yield grids for times up to `top`, a tenth of it, … six decades.

        Parameters
        ----------
        top : float
            Longest time.
        points : int
            Points of each transform; see `points_for`.

        Yields
        ------
        hi : float
            The grid is for times above hi / 10 and up to hi.
        is_last : bool
            Also for all times below.
        scale : Scale
        """
        for decade in range(DECADES):
            hi = top / 10.0**decade
            yield hi, decade == DECADES - 1, self.solve(hi / (points - 1), points)

    def room(self, points: int) -> int:
        """Return how many numbers all scales of so many points hold, at most."""
        size, pairs = len(self.renewal.open_states), len(self.renewal.leading)
        return DECADES * (points + 2) * (pairs + 4 * size)


def points_for(moves: float) -> int:
    """Return the points of a transform for walks of so many moves.

    To split a dwell between two points of a grid adds to its variance, a sixth of the squared distance on
    average; that adds up over the moves, and finer grids keep the error of the curve well below 1e-4.

    Examples
    --------
    >>> points_for(5.0), points_for(10.0), points_for(100.0)
    (1024, 2048, 4096)
    """
    finer = np.ceil(np.log2(_PER_MOVE * np.sqrt(max(moves, 1.0)) / POINTS))
    return POINTS << int(np.clip(finer, 0, 3))
