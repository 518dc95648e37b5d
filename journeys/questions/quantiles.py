"""Quantiles of the steps or the time to a target, given that it is reached, from every start."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np

from journeys.kernels.absorption import Passage
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.phase_type import DENSE, Steps
from journeys.kernels.renewal import Curve, curve, lattice_curve
from journeys.models.fit import JourneyFit
from journeys.questions.counted import SIDES, inverted, shares_about, up
from journeys.questions.elapsed import NO_DISTRIBUTION, Elapsed, elapsed
from journeys.questions.linear import TOO_FEW, probabilities
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.walks import Walk, reach_gradient, timed, walk_to
from journeys.results import LOGIT, Estimates, joined_flags

BY_CURVE = "interval only by passage_curve"
TOO_LARGE = f"no quantiles of time above {DENSE} states"
NOT_IN_REACH = "more steps than are walked"
# Work above which the band from every start is left to passage_curve (measured: about five seconds).
STEP_WORK = 1e9
TIME_WORK = 5e5
_BAND_POINTS = 256


def quantile_estimates(
    fit: JourneyFit,
    found: Passage,
    to: str | Collection[str] | None,
    *,
    clock: str,
    levels: Sequence[float] = (0.5, 0.9),
) -> list[tuple[Estimates, np.ndarray]]:
    """Return quantiles of the steps or days to a target given that it is reached, from entry and every state.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    found : Passage
        The passage to that target.
    to : str, collection of str or None
        As in `JourneyFit.target_mask`.
    clock : {"steps", "time"}
        Count moves, or days.
    levels : sequence of float
        Between 0 and 1.

    Returns
    -------
    list of (Estimates, ndarray of str)
        One pair per level: numbers and flags of entry and every state. Steps, and days of a log of dates, are
        the smallest whole number within which the level is reached.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> fit = JourneyFit.from_matrix(chain)
    >>> walk = walk_to(fit, "joined")
    >>> pairs = quantile_estimates(fit, timed(fit, walk), "joined", clock="steps")
    >>> [pair[0].value.tolist() for pair in pairs]
    [[2.0, 1.0], [5.0, 4.0]]
    """
    walk = walk_to(fit, to)
    every = np.arange(walk.n_states)
    return quantiles_of_moves(fit, walk, every, clock=clock, levels=levels, probability=found.probability)


def quantiles_of_moves(
    fit: JourneyFit,
    walk: Walk,
    starts: IntArray,
    *,
    clock: str,
    levels: Sequence[float] = (0.5, 0.9),
    probability: FloatArray | None = None,
) -> list[tuple[Estimates, np.ndarray]]:
    """Return the same for moves that have been rearranged, such as a chain with one state split in two.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    walk : Walk
        The moves, with the place of each among those of the fit, and the target.
    starts : int array, shape (n_starts,)
        Where to begin.
    clock, levels
        As in `quantile_estimates`.
    probability : float array, shape (n_states,), optional
        Of ever reaching the target, if it is known already.

    Returns
    -------
    list of (Estimates, ndarray of str)
        One pair per level, each over the starts.

    Examples
    --------
    Steps back to a state: its moves leave from node 1, and what comes back comes to node 2.

    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> fit = JourneyFit.from_matrix(chain)
    >>> walk = Walk(3, 4, np.array([0, 1, 1]), np.array([1, 2, 3]), np.arange(3), np.arange(4) == 2)
    >>> quantiles_of_moves(fit, walk, np.array([1]), clock="steps")[0][0].value.tolist()
    [1.0]
    """
    share = timed(fit, walk).probability if probability is None else probability
    ask = _Ask(fit, walk, starts, share, tuple(levels))
    found = _of_steps(ask) if clock == "steps" else _of_time(ask)
    return [ask.answer(found, i) for i in range(len(levels))]


@dataclass(frozen=True, eq=False)
class _Found:
    """Quantiles and their bands, arrays of shape (n_starts, n_levels).

    `value` is what is told, `at` where the curve meets the level, `about`, shape (n_starts, n_levels, n_sides), where
    it meets the level some standard errors down and up (NaN: no band), `std_error` and `df` those of the share reached.
    """

    value: FloatArray
    at: FloatArray
    about: FloatArray
    std_error: FloatArray
    df: FloatArray
    why: str = ""
    no_band: str = ""
    first: int | None = None


@dataclass(frozen=True, eq=False)
class _Ask:
    """What is asked: from where, of which walk, at which levels."""

    fit: JourneyFit
    walk: Walk
    starts: IntArray
    share: FloatArray
    levels: tuple[float, ...]

    @property
    def wanted(self) -> FloatArray:
        """Levels as shares of all walks from each state, NaN where the target is out of reach."""
        share = np.where(self.share > 0, self.share, np.nan)
        return np.asarray(share[:, None] * np.array(self.levels), dtype=np.float64)

    @property
    def shape(self) -> tuple[int, int]:
        return len(self.starts), len(self.levels)

    def nothing(self, why: str) -> _Found:
        """Return no answer, and why."""
        none = np.full(self.shape, np.nan)
        return _Found(none, none, np.full((*self.shape, len(SIDES)), np.nan), none, none, why)

    def conditional(self, by_reached: FloatArray, which: IntArray, level: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return standard error and degrees of freedom of shares of those who ever reach the target.

        `by_reached` is the influence of each bucket on the share of all walks, shape (n_buckets, n_answers);
        `which` says from which start, `level` what share of those who reach it that is.
        """
        influence, walk = self.fit.influence, self.walk
        if influence is None:
            raise TypeError
        gradient = reach_gradient(walk, self.fit.probability[walk.origin], self.share, self.starts[which])
        by_share = influence.probability[:, walk.origin] @ gradient.T
        variance, df = variance_from_buckets((by_reached - level * by_share) / self.share[self.starts[which]])
        return np.sqrt(variance), df

    def answer(self, found: _Found, i: int) -> tuple[Estimates, np.ndarray]:
        """Return the numbers and flags of one level."""
        at_target = self.walk.is_target[self.starts]
        value = np.where(at_target, 0.0, found.value[:, i])
        std_error, df = found.std_error[:, i], found.df[:, i]
        reached, known, n = self.share[self.starts] > 0, self.fit.influence is None, len(self.starts)
        told = np.full(n, self.levels[i])
        finite: BoolArray = np.isfinite(value) & ~at_target
        few = probabilities(self.fit, told, std_error, df, np.zeros(n), LOGIT).few & finite
        at = np.where(at_target, 0.0, found.at[:, i])
        estimates = inverted(at, found.about[:, i], df, few, at_target | known, found.first)
        no_band: BoolArray = finite & np.isnan(found.std_error[:, i]) & (not known)
        flag = joined_flags(
            [
                (~reached, UNREACHABLE),
                (np.isnan(value) & reached, found.why),
                (np.isinf(value), NOT_IN_REACH),
                (no_band, found.no_band),
                (few & ~no_band, TOO_FEW),
            ],
            n,
        )
        return estimates, flag


def _of_steps(ask: _Ask) -> _Found:
    """Return quantiles of steps."""
    fit, walk = ask.fit, ask.walk
    steps = Steps(
        walk.n_states, walk.n_nodes, walk.state, walk.target, fit.probability[walk.origin], walk.is_target
    )
    value, at = (one[ask.starts] for one in steps.quantiles(ask.wanted))
    std_error, df = (np.full(ask.shape, np.nan) for _ in range(2))
    about = np.full((*ask.shape, len(SIDES)), np.nan)
    has = np.isfinite(value) & ~walk.is_target[ask.starts][:, None]
    too_much = steps.gradient_work(2.0 * value[has]) > STEP_WORK or value[has].max(initial=0.0) > 100_000
    if fit.influence is not None and has.any() and not too_much:
        who, level = np.nonzero(has)
        std_error[has], df[has] = _spread_of_steps(ask, steps, who, value[has].astype(np.int64))
        shares = shares_about(np.array(ask.levels)[level], std_error[has]) * ask.share[ask.starts[who], None]
        for side in range(len(SIDES)):
            shifted = np.full(ask.wanted.shape, np.nan)
            shifted[ask.starts[who], level] = shares[:, side]
            about[..., side] = steps.quantiles(shifted)[1][ask.starts]
    return _Found(value, at, about, std_error, df, no_band=BY_CURVE if too_much else TOO_FEW, first=0)


def _spread_of_steps(ask: _Ask, steps: Steps, who: IntArray, n: IntArray) -> tuple[FloatArray, FloatArray]:
    """Return standard error and degrees of freedom of the share reached: the larger at n and one step before.

    The level lies between the two, and the band must hold on both sides of the jump.
    """
    influence = ask.fit.influence
    if influence is None:
        raise TypeError
    starts = ask.starts[who]
    within = steps.reached_within(int(n.max()))
    found = []
    for at in (n, n - 1):
        gradient = steps.gradients(starts, at)
        by_reached = influence.probability[:, ask.walk.origin] @ gradient.T
        found.append(ask.conditional(by_reached, who, within[at, starts] / ask.share[starts]))
    larger = found[0][0] >= found[1][0]
    return np.where(larger, found[0][0], found[1][0]), np.where(larger, found[0][1], found[1][1])


def _of_time(ask: _Ask) -> _Found:
    """Return quantiles of time in days."""
    if ((ask.share > 0) & ~ask.walk.is_target[: ask.walk.n_states]).sum() > DENSE:
        return ask.nothing(TOO_LARGE)
    it = elapsed(ask.fit, ask.walk)
    if it is None:
        return ask.nothing(NO_DISTRIBUTION)
    size, n_levels = len(it.renewal.open_states), len(ask.levels)
    curves = _curves(ask, it) if size else []
    place = it.renewal.place[ask.starts]
    who = np.flatnonzero((place >= 0) & (place < size))
    at = np.full(ask.shape, np.nan)
    for row in who:
        at[row] = curves[place[row]].inverse(ask.wanted[ask.starts[row]])
    std_error, df = (np.full(ask.shape, np.nan) for _ in range(2))
    about = np.full((*ask.shape, len(SIDES)), np.nan)
    work = len(who) * n_levels * len(it.renewal.leading)
    if ask.fit.influence is not None and len(who) and work <= TIME_WORK:
        std_error[who], df[who] = _spread_of_time(ask, it, who, at[who])
        for row in who:
            shares = shares_about(np.array(ask.levels), std_error[row]) * ask.share[ask.starts[row]]
            # never met where there is no such share
            about[row] = curves[place[row]].inverse(np.nan_to_num(shares, nan=2.0))
    value = up(at) if it.lattice else at
    no_band = BY_CURVE if work > TIME_WORK else TOO_FEW
    return _Found(value, at, about, std_error, df, no_band=no_band, first=-1 if it.lattice else None)


def _curves(ask: _Ask, it: Elapsed) -> list[Curve]:
    """Return the curve from every open state, from those asked for down to well below the lowest level."""
    share = ask.share[it.renewal.open_states]
    if it.lattice:
        scale = it.on_days(it.top)
        return [lattice_curve(scale, i, share[i]) for i in range(len(share))]
    place, parts = it.renewal.place[ask.starts], []
    asked = place[(place >= 0) & (place < len(share))]
    for hi, _, scale in it.scales():
        parts.append((hi, False, scale))
        if (scale.cdf[int(hi / 10.0 / scale.dt)] < 0.3 * min(ask.levels) * share)[asked].all():
            break
    parts[-1] = (parts[-1][0], True, parts[-1][2])
    return [curve(parts, i, it.at_once[i], share[i]) for i in range(len(share))]


def _spread_of_time(ask: _Ask, it: Elapsed, who: IntArray, at: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return standard error and degrees of freedom of the share reached at each quantile.

    The band needs no fine grid: one of 256 points up to the quantile's octave does.
    """
    n_levels, place = at.shape[1], it.renewal.place[ask.starts[who]]
    octave = np.where(np.isfinite(at) & (at > 0), np.ceil(np.log2(np.maximum(at, 1e-300))), -40.0)
    if it.lattice:
        octave = np.full(at.shape, np.log2(max(at.max(), 1.0)))
    influence = np.zeros((ask.fit.influence.probability.shape[0], len(who), n_levels))  # type: ignore[union-attr]
    for each in np.unique(octave):
        scale = it.on_days(at.max()) if it.lattice else it.grids.solve(2.0**each / (_BAND_POINTS - 1), _BAND_POINTS)
        visits = scale.all_visits()
        rows = np.flatnonzero((octave == each).any(axis=1))
        asked = [at[row, octave[row] == each] for row in rows]
        if it.lattice:
            asked = [up(times) for times in asked]
        pulled = it.by_bucket(
            np.concatenate(
                [it.values(scale, visits[:, place[row]], times) for row, times in zip(rows, asked, strict=True)]
            )
        )
        mine = [(row, level) for row in rows for level in np.flatnonzero(octave[row] == each)]
        for j, (row, level) in enumerate(mine):
            influence[:, row, level] = pulled[:, j]
    flat = influence.reshape(len(influence), -1)
    told = np.tile(np.array(ask.levels), len(who))
    std_error, df = ask.conditional(flat, np.repeat(who, n_levels), told)
    return std_error.reshape(at.shape), df.reshape(at.shape)
