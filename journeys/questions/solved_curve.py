"""The distribution from one start, solved for: in steps or in elapsed time, with the influence of each bucket."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np
import numpy.typing as npt

from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.grids import Part
from journeys.kernels.phase_type import DENSE, Steps
from journeys.kernels.renewal import Curve, Scale, curve, lattice_curve
from journeys.models.fit import JourneyFit
from journeys.questions.elapsed import Elapsed
from journeys.questions.walks import Walk, reach_gradient

N_TIMES = 60
_STEP_WORK = 1e9
_FIRST, _LAST = 0.001, 0.999
_NOISE = 1e-8  # shares below are rounding in the transforms
_NOBODY = 1e-6  # shorter times than those by which so few have come need no scale of their own


class Solved(Protocol):
    """What a curve asks of the chain; times in days, or numbers of steps."""

    @property
    def whole(self) -> bool:
        """Only whole numbers have anything happen at them."""

    @property
    def limit(self) -> float:
        """Probability of ever reaching the target."""

    @property
    def longest(self) -> float:
        """The time up to which the curve can be told."""

    def at(self, times: FloatArray) -> FloatArray:
        """Return the probability of having reached it by each time, shape (n_times,); NaN beyond `longest`."""

    def inverse(self, levels: FloatArray) -> FloatArray:
        """Return where each level is met; between whole numbers on the line through the values there."""

    def influence(self, times: FloatArray) -> FloatArray | None:
        """Return the influence of each bucket, shape (n_buckets, n_times); None where there is none to be had."""


@dataclass(frozen=True, eq=False)
class SolvedSteps:
    """The number of steps from one start.

    Attributes
    ----------
    fit, walk
        The chain and its moves.
    start : int
        Where to begin.
    limit : float
        Probability of ever reaching the target.
    """

    fit: JourneyFit
    walk: Walk
    start: int
    limit: float
    whole: bool = True

    @cached_property
    def steps(self) -> Steps:
        """The moves, to be counted."""
        walk = self.walk
        return Steps(
            walk.n_states, walk.n_nodes, walk.state, walk.target, self.fit.probability[walk.origin], walk.is_target
        )

    @property
    def longest(self) -> float:
        """Most steps of which the curve can be told."""
        return self.steps.longest if self.walk.n_states > DENSE else 2.0**50

    def at(self, times: FloatArray) -> FloatArray:
        """Return the probability within each number of steps."""
        far = times >= 2.0**50
        found = self.steps.reached_from(self.start, np.where(far, 0.0, np.floor(times)).astype(np.int64))
        return np.where(far, self.limit, found)

    def inverse(self, levels: FloatArray) -> FloatArray:
        """Return where each level is met."""
        asked = np.full((self.walk.n_states, len(levels)), np.nan)
        asked[self.start] = np.where(levels < self.limit, levels, np.nan)
        found = self.steps.quantiles(asked)[1][self.start]
        return np.where(levels < self.limit, found, np.inf)

    def influence(self, times: FloatArray) -> FloatArray | None:
        """Return the influence of each bucket; None where it would take too long."""
        n = np.floor(times).astype(np.int64)
        if self.fit.influence is None or self.steps.gradient_work(n.astype(np.float64)) > _STEP_WORK:
            return None
        gradient = self.steps.gradients(np.full(len(n), self.start), n)
        return np.asarray(self.fit.influence.probability[:, self.walk.origin] @ gradient.T)


@dataclass(frozen=True, eq=False)
class SolvedTime:
    """The elapsed time from one start, in days.

    Attributes
    ----------
    it : Elapsed
        The elapsed time to the target.
    start : int
        Where to begin.
    """

    it: Elapsed
    start: int

    @property
    def whole(self) -> bool:
        """Time is in whole days."""
        return self.it.lattice

    @property
    def limit(self) -> float:
        """Probability of ever reaching the target."""
        return float(self.it.found.probability[self.start])

    @property
    def longest(self) -> float:
        """There is no end."""
        return np.inf

    @cached_property
    def _place(self) -> int:
        return int(self.it.renewal.place[self.start])

    def parts(self, least: float = 0.0) -> list[Part]:
        """Return the grids on which times from `least` on are read, the longest first, and the next finer one.

        The curve may not fall where one grid meets the next, so that the finer one has a say in where the other begins.
        """
        if self.it.lattice:
            return [(np.inf, True, self.it.on_days(self.it.top))]
        parts: list[Part] = []
        for hi, is_last, scale in self.it.scales():
            parts.append((hi, is_last, scale))
            # before the next one is asked for, which would be solved
            if hi < least or scale.cdf[int(hi / 10.0 / scale.dt), self._place] < _NOBODY:
                break
        return [*parts[:-1], (parts[-1][0], True, parts[-1][2])]

    def scale_for(self, time: float) -> Scale:
        """Return the grid on which the curve is read at a time."""
        for hi, is_last, scale in self.parts(time):
            if is_last or time > hi / 10.0:
                return scale
        raise ValueError(f"time: got {time!r}; wanted a number of days")

    @cached_property
    def curve(self) -> Curve:
        """The distribution function by points."""
        return self._curve_from(0.0)

    def _curve_from(self, least: float) -> Curve:
        """Return the distribution function by points that are close enough for times from `least` on."""
        if self.limit <= 0:
            return Curve(np.zeros(1), np.zeros(1), 0.0, self.it.lattice)
        parts = self.parts(least)
        if self.it.lattice:
            return lattice_curve(parts[0][2], self._place, self.limit)
        return curve(parts, self._place, float(self.it.at_once[self._place]), self.limit)

    def at(self, times: FloatArray) -> FloatArray:
        """Return the probability by each time; 0 where it is less than the error of the solution."""
        found = self._curve_for(times).at(times)
        return np.where(found < _NOISE, 0.0, found)

    def _curve_for(self, times: FloatArray) -> Curve:
        """Return the curve in which times can be read: all of it only where it is there, or short times are asked."""
        if "curve" in self.__dict__:
            return self.curve
        return self._curve_from(_least(times))

    def inverse(self, levels: FloatArray) -> FloatArray:
        """Return where each level is met."""
        return np.where(levels < self.limit, self.curve.inverse(levels), np.inf)

    def influence(self, times: FloatArray) -> FloatArray | None:
        """Return the influence of each bucket."""
        fit = self.it.fit
        if fit.influence is None:
            return None
        if self.limit <= 0:
            return np.zeros((len(fit.influence.probability), len(times)))
        tables, places = [], []
        times = np.floor(times) if self.whole else times
        for i, (hi, is_last, scale) in enumerate(self.parts(_least(times))):
            reached = times > hi / 10.0 if not is_last else np.full(times.shape, True)
            mine = np.flatnonzero(reached & ((times <= hi) | (i == 0)))
            if len(mine):
                within = np.minimum(times[mine], (scale.n - 1) * scale.dt)
                tables.append(self.it.values(scale, scale.visits(self._place), within))
                places.append(mine)
        order = np.argsort(np.concatenate(places))
        return self.it.by_bucket(np.concatenate(tables))[:, order]


def _least(times: FloatArray) -> float:
    return float(np.min(times, initial=np.inf))


def limit_influence(fit: JourneyFit, walk: Walk, share: FloatArray, start: int) -> FloatArray | None:
    """Return the influence of each bucket on the probability of ever reaching the target, shape (n_buckets,)."""
    if fit.influence is None:
        return None
    gradient = reach_gradient(walk, fit.probability[walk.origin], share, np.array([start], dtype=np.int64))[0]
    return np.asarray(fit.influence.probability[:, walk.origin] @ gradient)


def telling_times(solved: Solved) -> FloatArray:
    """Return some 60 times that show the whole curve: whole numbers, or even steps of the logarithm.

    From the point where one in a thousand of those who come has come to where one in a thousand is to come.
    """
    if solved.limit <= 0:
        return np.zeros(1)
    first, last = solved.inverse(np.array([_FIRST, _LAST]) * solved.limit).tolist()
    if not solved.whole:
        if last <= 0:
            return np.zeros(1)
        return np.geomspace(max(first, last * 1e-6), last, N_TIMES)
    low, high = (int(np.ceil(min(one, solved.longest))) for one in (max(first, 0.0), max(last, 1.0)))
    if high - low < N_TIMES:
        return np.arange(low, high + 1, dtype=np.float64)
    spread: IntArray = np.unique(np.rint(np.geomspace(max(low, 1), high, N_TIMES)).astype(np.int64))
    return spread.astype(np.float64)


def asked_times(times: npt.ArrayLike) -> FloatArray:
    """Return times asked for as an array, once they can be times."""
    msg = "times: not all are numbers from 0; wanted times since the start, in the unit of the curve"
    try:
        asked = np.asarray(times, dtype=np.float64)
    except (TypeError, ValueError):
        raise ValueError(msg) from None
    if not (asked >= 0).all():
        raise ValueError(msg)
    return asked
