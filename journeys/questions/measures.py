"""The six measures of a walk to a target, from every start: how likely, how soon, how spread."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.many_passages import Draws
from journeys.models.fit import JourneyFit
from journeys.questions.bootstrap import UNDEFINED, Plan, Spread, redrawn
from journeys.questions.linear import DOUBTFUL, ENOUGH_DF, ENOUGH_EVENTS, TOO_FEW, probabilities
from journeys.questions.outcomes import UNREACHABLE
from journeys.results import KNOWN, LOG, LOGIT, Estimates, joined_flags

MEASURES = ("probability", "median", "q90", "mean", "sd", "mean_unconditional")
LEVELS = (0.5, 0.9)
UNIT_DAYS = {"weeks": 7.0, "days": 1.0, "hours": 1 / 24, "minutes": 1 / 1440}
SOME_NEVER = "infinite: some never do"
NO_DWELL = "no dwell given"
NO_SPREAD = "no spread given"
_MOMENT = {"mean": "mean_given", "sd": "sd_given", "mean_unconditional": "mean_given"}


@dataclass(frozen=True, eq=False)
class Walked:
    """Answers about walks from n starts, in steps or days.

    Attributes
    ----------
    probability, certain, mean, sd : ndarray, shape (n,)
        Of reaching the target; whether nothing else can happen; of the steps or days if it is reached.
    at_target : ndarray of bool, shape (n,)
        Starts that are the target.
    sure : ndarray of bool, shape (n,)
        Starts whose probability is 1 whatever was seen.
    doubtful : ndarray of bool, shape (n,)
        Starts whose answers are too extreme to compute.
    trials : ndarray, shape (n,)
        Completed stays in the start.
    spreads : dict of str to (std_error, df)
        Linearised, by `bootstrap.MOMENTS`.
    speeds : dict of str to ndarray, or None
        Accelerations of BCa intervals.
    draws : Draws or None
        Answers of resamples.
    quantiles : sequence of (Estimates, ndarray of str)
        Median and 90 % quantile with their flags.
    lean : dict of str to ndarray of bool
        Flags of rows that the answers lean on.
    unreachable : str
        Words for a target that cannot be reached.
    """

    probability: FloatArray
    certain: BoolArray
    mean: FloatArray
    sd: FloatArray
    at_target: BoolArray
    sure: BoolArray
    doubtful: BoolArray
    trials: FloatArray
    spreads: dict[str, Spread]
    speeds: dict[str, FloatArray] | None
    draws: Draws | None
    quantiles: Sequence[tuple[Estimates, np.ndarray]]
    lean: dict[str, BoolArray]
    unreachable: str


@dataclass(frozen=True, eq=False)
class Measured:
    """Estimates in rows, all measures of a start together, and what goes with them.

    Attributes
    ----------
    estimates : Estimates
    flag : ndarray of str
    n_effective, n_undefined : ndarray
        Independent trials behind the probability; resamples left out of the spread.
    resamples : ndarray, shape (n_resamples, n_rows), or None
        Answers of the resamples, NaN where undefined or where the measure is not resampled.
    """

    estimates: Estimates
    flag: np.ndarray
    n_effective: FloatArray
    n_undefined: IntArray
    resamples: FloatArray | None


@dataclass(frozen=True, eq=False)
class _Measure:
    """One measure from all starts."""

    estimates: Estimates
    flag: np.ndarray
    n_undefined: IntArray
    draws: FloatArray | None


def measured(fit: JourneyFit, walked: Walked, plan: Plan, per_unit: float) -> Measured:
    """Return the rows of a result, start by start.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    walked : Walked
        The answers.
    plan : Plan
        How their uncertainty is found.
    per_unit : float
        Days in the unit asked for; 1 for steps.
    """
    n = len(walked.probability)
    share = _probability(fit, walked, plan)
    parts = [share, *(_quantile(one, flag, per_unit, walked) for one, flag in walked.quantiles)]
    parts += [_moment(fit, walked, plan, name, share.estimates, per_unit) for name in MEASURES[3:]]
    order = np.arange(n * len(parts)).reshape(len(parts), n).T.ravel()
    flags = [_with_lean(part.flag, walked) for part in parts]
    nothing = np.full((plan.n_resamples, n), np.nan)
    resamples = None
    if walked.draws is not None:
        drawn = [nothing if part.draws is None else part.draws for part in parts]
        resamples = np.concatenate(drawn, axis=1)[:, order]
    return Measured(
        estimates=Estimates.joined([part.estimates for part in parts]).take(order),
        flag=np.concatenate(flags)[order],
        n_effective=np.repeat(share.estimates.n_effective, len(parts)),
        n_undefined=np.concatenate([part.n_undefined for part in parts])[order],
        resamples=resamples,
    )


def _with_lean(flag: np.ndarray, walked: Walked) -> np.ndarray:
    """Return flags followed by those of the rows leant on, unless they say so already."""
    for text, mask in walked.lean.items():
        more = mask & ~walked.at_target & np.array([text not in said for said in flag])
        flag = np.where(more, np.where(flag == "", text, flag + "; " + text), flag)
    return flag


def _probability(fit: JourneyFit, walked: Walked, plan: Plan) -> _Measure:
    at = walked.at_target
    std_error, df = walked.spreads["probability"]
    # what the graph decides has no spread; sums of influences leave one of rounding
    std_error = np.where(np.isin(walked.probability, (0.0, 1.0)), 0.0, std_error)
    share = probabilities(fit, walked.probability, std_error, df, walked.trials, LOGIT)
    n_undefined, undefined, drawn = np.zeros(len(at), np.int64), np.zeros(len(at), bool), None
    share = _without_doubt(share, at | walked.sure)
    if walked.draws is not None:
        drawn = np.where(at, 1.0, walked.draws.probability)
        speed = None if walked.speeds is None else walked.speeds["probability"]
        share, n_undefined, undefined = redrawn(share, drawn, plan, speed, ~at, logit=True)
    unreached = (walked.probability == 0) & ~at & ~walked.doubtful
    flags = [
        (unreached, walked.unreachable), (walked.doubtful, DOUBTFUL), (share.few, TOO_FEW), (undefined, UNDEFINED),
    ]  # fmt: skip
    return _Measure(share, joined_flags(flags, len(at)), n_undefined, drawn)


def _moment(
    fit: JourneyFit, walked: Walked, plan: Plan, measure: str, share: Estimates, per_unit: float
) -> _Measure:
    """Return one kind of mean or spread from every start, with its flags."""
    at, n, known = walked.at_target, len(walked.at_target), fit.influence is None
    value = np.where(walked.doubtful, np.nan, walked.sd if measure == "sd" else walked.mean)
    value = np.where(at, 0.0, value) / per_unit
    std_error, df = walked.spreads[_MOMENT[measure]][0] / per_unit, walked.spreads[_MOMENT[measure]][1]
    reached = (walked.probability > 0) | walked.doubtful
    unknown = reached & ~at & np.isnan(value) & ~walked.doubtful
    never = np.zeros(n, bool)
    if measure == "mean_unconditional":
        never = ~(walked.certain | at)
        value = np.where(never, np.inf, value)
    finite = np.isfinite(value)
    std_error = np.where(finite, std_error, np.nan)
    events = np.nan_to_num(share.n_effective) * share.value
    few = np.zeros(n, bool)
    if not known:
        few = ((df < ENOUGH_DF) | (events < ENOUGH_EVENTS) | ~(std_error > 0)) & finite & ~at
    scale = np.full(n, KNOWN if known else LOG, dtype=object)
    estimates = _without_doubt(Estimates(value, std_error, df, scale, share.n_effective, few), at)
    n_undefined, undefined, drawn = np.zeros(n, np.int64), np.zeros(n, bool), None
    if walked.draws is not None:
        drawn = _moment_draws(walked.draws, measure, at) / per_unit
        speed = None if walked.speeds is None else walked.speeds[_MOMENT[measure]]
        estimates, n_undefined, undefined = redrawn(estimates, drawn, plan, speed, finite & ~at, logit=False)
    absent = NO_DWELL if measure != "sd" or np.isnan(walked.mean[reached & ~at]).any() else NO_SPREAD
    flags = [
        (~reached & ~at, walked.unreachable), (never & reached, SOME_NEVER), (unknown & ~never, absent),
        (walked.doubtful & ~never, DOUBTFUL), (estimates.few, TOO_FEW), (undefined, UNDEFINED),
    ]  # fmt: skip
    return _Measure(estimates, joined_flags(flags, n), n_undefined, drawn)


def _moment_draws(draws: Draws, measure: str, at: BoolArray) -> FloatArray:
    """Return what the resamples say of one kind of mean or spread."""
    drawn = draws.sd_given if measure == "sd" else draws.mean_given
    if measure == "mean_unconditional":
        drawn = np.where(draws.certain | np.isnan(draws.probability), drawn, np.inf)
    return np.where(at, 0.0, drawn)


def _quantile(estimates: Estimates, flag: np.ndarray, per_unit: float, walked: Walked) -> _Measure:
    words = np.array([text.replace(UNREACHABLE, walked.unreachable) for text in flag], dtype=object)
    return _Measure(estimates.times(1 / per_unit), words, np.zeros(len(flag), np.int64), None)


def _without_doubt(estimates: Estimates, mask: np.ndarray) -> Estimates:
    """Return the same with the numbers under `mask` known for certain."""
    return Estimates(
        estimates.value,
        np.where(mask, 0.0, estimates.std_error),
        estimates.df,
        np.where(mask, KNOWN, estimates.scale),
        estimates.n_effective,
        estimates.few & ~mask,
    )
