"""The ways from stage to stage as first passages of the chain: how many pass them all, in the end and by when."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from journeys.kernels.absorption import Passage
from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.grids import points_for
from journeys.kernels.phase_type import DENSE
from journeys.kernels.renewal import ComplexArray, Scale
from journeys.models.fit import JourneyFit
from journeys.questions.elapsed import NO_DISTRIBUTION, Elapsed, elapsed
from journeys.questions.linear import starts_counted
from journeys.questions.stage_rows import CONVERTED, Share
from journeys.questions.time_to_convert import NO_CURVE
from journeys.questions.walks import Walk, stepped, timed

_BEYOND = 1.1  # a grid of times ends a little after the time asked for


@dataclass(frozen=True, eq=False)
class Leg:
    """The way from one stage to the next.

    Attributes
    ----------
    fit : JourneyFit
        The chain.
    start : int
        Place of the stage it begins in; 0 for entry.
    is_target : ndarray of bool, shape (n_nodes,)
        The next stage, or the converted outcomes; none for a last stage with no conversion after it.
    """

    fit: JourneyFit
    start: int
    is_target: BoolArray

    @cached_property
    def walk(self) -> Walk:
        """The moves as they are, and the next stage as their target."""
        return self._walk(self.is_target, np.ones(len(self.fit.probability), np.bool_))

    @cached_property
    def found(self) -> Passage:
        """The first passage to the next stage."""
        return timed(self.fit, self.walk)

    @cached_property
    def reaches(self) -> Share:
        """Share of those in this stage who reach the next one."""
        return self._share(self.walk, self.found)

    @property
    def mean_moves(self) -> float:
        """Mean number of moves to the next stage given that it is reached."""
        return float(np.nan_to_num(stepped(self.fit, self.walk).mean_given[self.start]))

    def ends_in(self, outcome: str) -> tuple[Share, Passage]:
        """Return the share of those in this stage who end in an outcome without reaching the next one."""
        onwards = self.is_target[self.fit.move_state]
        walk = self._walk(self.fit.target_mask(outcome), ~onwards)
        found = timed(self.fit, walk)
        return self._share(walk, found), found

    def _walk(self, is_target: BoolArray, kept: BoolArray) -> Walk:
        fit, at = self.fit, np.flatnonzero(kept)
        return Walk(fit.nodes.n_rows, fit.nodes.n_nodes, fit.move_state[at], fit.move_target[at], at, is_target)

    def _share(self, walk: Walk, found: Passage) -> Share:
        value, pulls = float(found.probability[self.start]), self.fit.influence
        trials = float(starts_counted(self.fit)[self.start])
        if pulls is None:
            return Share(value, None, trials)
        if found.certain[self.start]:
            # The rows of the moves sum to 1, whatever the buckets; what is left is rounding.
            return Share(value, np.zeros(len(pulls.probability)), trials)
        gradient = found.gradients(self.start)["probability"][0]
        return Share(value, pulls.probability[:, walk.origin] @ gradient, trials)


def legs_of(fit: JourneyFit, names: tuple[str, ...]) -> list[Leg]:
    """Return the legs up to the first stage that the chain does not have.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    names : tuple of str
        The stages, and `CONVERTED` last if there is a conversion.
    """
    legs: list[Leg] = []
    start = 0
    for name in names:
        if name == CONVERTED:
            return [*legs, Leg(fit, start, fit.target_mask(None))]
        if name not in fit.states:
            return legs
        legs.append(Leg(fit, start, fit.target_mask(name)))
        start = fit.nodes.labels.index(name)
    return legs


def passed(legs: list[Leg]) -> list[Share]:
    """Return the share of all journeys that passes each leg in the end: the product up to it."""
    shares: list[Share] = []
    for leg in legs:
        shares.append(shares[-1].times(leg.reaches) if shares else leg.reaches)
    return shares


def passed_within(legs: list[Leg], days: float) -> tuple[list[Share], str]:
    """Return the share of all journeys that has passed each leg within a time, or why it cannot be told.

    Parameters
    ----------
    legs : list of Leg
        At least one.
    days : float
        Since entry.

    Returns
    -------
    list of Share
        Empty where it cannot be told.
    str
        Why not.

    Notes
    -----
    The times of the legs add up, so their transforms multiply. One more stay on a leg adds what
    `Elapsed.values` says, followed by the times of the other legs.
    """
    its = [elapsed(leg.fit, leg.walk) for leg in legs]
    ready = [it for it in its if it is not None]
    if len(ready) < len(its):
        return [], NO_DISTRIBUTION
    if max(len(it.renewal.open_states) for it in ready) > DENSE:
        return [], NO_CURVE
    timings = _timings(legs, ready, days)
    trials = legs[0].reaches.trials
    limits = np.cumprod([leg.found.probability[leg.start] for leg in legs])
    shares = []
    for k, limit in enumerate(limits, start=1):
        value, influence = _passed(timings[:k], days)
        shares.append(Share(float(np.clip(value, 0.0, limit)), influence, trials))
    return shares, ""


@dataclass(frozen=True, eq=False)
class _Timing:
    """The time of one leg, on a grid of times that all legs share; `place` is that of its start."""

    it: Elapsed
    scale: Scale
    place: int

    @cached_property
    def visits(self) -> ComplexArray:
        """Transform of the densities of visits from the start."""
        return self.scale.visits(self.place)

    @cached_property
    def transform(self) -> ComplexArray:
        """Transform of the density of the time; 0 where the next stage is out of reach."""
        if self.place < 0:
            return np.zeros(self.scale.n // 2 + 1, np.complex128)
        return self.scale.reach[:, self.place]


def _timings(legs: list[Leg], its: list[Elapsed], days: float) -> list[_Timing]:
    if its[0].lattice:
        scales = [it.on_days(days) for it in its]
    else:
        points = points_for(sum(leg.mean_moves for leg in legs))
        scales = [it.grids.solve(_BEYOND * days / (points - 1), points) for it in its]
    places = [int(it.renewal.place[leg.start]) for leg, it in zip(legs, its, strict=True)]
    return [_Timing(*one) for one in zip(its, scales, places, strict=True)]


def _passed(timings: list[_Timing], days: float) -> tuple[float, FloatArray | None]:
    """Return the share that has passed all legs within a time, and the influence of each bucket on it."""
    pulls, scale, lattice = timings[0].it.fit.influence, timings[0].scale, timings[0].it.lattice
    n_buckets = 0 if pulls is None else len(pulls.probability)
    if any(one.place < 0 for one in timings):
        return 0.0, None if pulls is None else np.zeros(n_buckets)
    transforms = np.stack([one.transform for one in timings])
    reached = scale.summed(np.prod(transforms, axis=0)[:, None])[:, 0]
    at = min(np.floor(days) if lattice else days, (scale.n - 1) * scale.dt)
    point = at / scale.dt - (0.0 if lattice else 0.5)
    value = float(np.interp(point, np.arange(scale.n), reached))
    if pulls is None:
        return value, None
    pulled = np.zeros(n_buckets)
    for i, one in enumerate(timings):
        others = np.prod(np.delete(transforms, i, axis=0), axis=0)
        tables = one.it.values(one.scale, one.visits * others[:, None], np.array([at]))
        pulled += one.it.by_bucket(tables)[:, 0]
    return value, pulled
