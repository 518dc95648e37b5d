"""How uncertain an answer about a walk is: linearised, or from resamples of the buckets of customers."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.kernels.absorption import Passage
from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.draw_intervals import acceleration, transformed_error
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.many_passages import Draws
from journeys.kernels.resampling import Refitter, bucket_weights
from journeys.kernels.return_walks import Walk
from journeys.models.fit import JourneyFit
from journeys.results import DrawnEstimates, Estimates

METHODS = ("bootstrap", "percentile", "bca", "linearised")
MOMENTS = ("probability", "mean_given", "sd_given")
UNDEFINED = "undefined in over 5 % of resamples"
# Where more resamples than this leave an answer undefined it gets no interval.
MOST_UNDEFINED = 0.05
ENOUGH_FOR_ERROR, ENOUGH_FOR_ENDS = 399, 1_999
# Fewer resamples than this say nothing of a spread (a judgement).
LEAST_RESAMPLES = 20
# So many states are resampled without being asked for by number.
MOST_STATES = 500

# From the moves a resample may hold to the walks asked about.
WalksOf = Callable[[IntArray, IntArray], Sequence[Walk]]
Spread = tuple[FloatArray, FloatArray]


@dataclass(frozen=True, eq=False)
class Plan:
    """How the uncertainty of a call is found.

    Attributes
    ----------
    method : str
        One of `METHODS`.
    n_resamples : int
        0 where nothing is resampled.
    n_buckets : int
        Buckets drawn from; 0 for a known chain.
    rng : numpy.random.Generator
        Source of chance.
    """

    method: str
    n_resamples: int
    n_buckets: int
    rng: np.random.Generator

    def draws(self, fit: JourneyFit, walks_of: WalksOf, *, steps: bool) -> list[Draws] | None:
        """Return the answers of the resamples, one item for each walk; None where nothing is resampled."""
        if fit.fitted_stays is None or not self.n_resamples:
            return None
        refitter = Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=steps)
        weights = bucket_weights(self.n_buckets, self.n_resamples, self.rng)
        return refitter.draws(weights, walks_of(refitter.state, refitter.target))


def plan(
    fit: JourneyFit, method: str, n_resamples: int | None, rng: int | np.random.Generator | None, n_states: int
) -> Plan:
    """Return how the uncertainty is found, all arguments checked.

    Parameters
    ----------
    fit : JourneyFit
        The chain; nothing is resampled of a known one.
    method : str
        One of `METHODS`.
    n_resamples : int or None
        None: 399 for standard errors, 1,999 for percentiles.
    rng : int, numpy.random.Generator or None
        None: started from the checksum of the tally.
    n_states : int
        States a resample must be solved for.

    Returns
    -------
    Plan
        Linearised for a what-if asked with the default: nothing of a chain changed by hand is drawn again.

    Raises
    ------
    ValueError
        If one of them is not what it should be, or many states were to be resampled unasked.
    LogError
        If resamples of a what-if are asked for by name or number.
    """
    checks.one_of(method, METHODS, "method")
    ends = method in ("percentile", "bca")
    least = ENOUGH_FOR_ENDS if ends else LEAST_RESAMPLES
    if n_resamples is not None and checks.whole(n_resamples, "n_resamples", 1) < least:
        why = f'the ends that method="{method}" reads off' if ends else "a standard error"
        msg = f"n_resamples: got {n_resamples}; wanted at least {least:,}, fewer do not carry {why}"
        raise ValueError(msg)
    chance = checks.rng(rng, 0)
    n_buckets = 0 if fit.influence is None else len(fit.influence.probability)
    if method != "linearised" and n_buckets and fit.fitted_stays is None:
        method = _of_what_if(method, n_resamples)
    if method == "linearised" or not n_buckets:
        return Plan(method, 0, n_buckets, chance)
    if n_resamples is None and n_states > MOST_STATES:
        msg = (
            f'method="{method}" on {n_states:,} states solves each resample state by state; wanted '
            'method="linearised", or n_resamples given if it shall take its time'
        )
        raise ValueError(msg)
    if rng is None and fit.tally is not None:
        # only now: the checksum of a large tally takes a while
        chance = checks.rng(None, int(fit.tally.checksum, 16))
    return Plan(method, n_resamples or (ENOUGH_FOR_ENDS if ends else ENOUGH_FOR_ERROR), n_buckets, chance)


def _of_what_if(method: str, n_resamples: int | None) -> str:
    """Return how the uncertainty of a chain that was changed by hand is found, or refuse to."""
    if method != "bootstrap" or n_resamples is not None:
        got = f'method="{method}"' if n_resamples is None else f"n_resamples={n_resamples}"
        msg = (
            f"{got}: this chain was changed after it was fitted, so its stays cannot be drawn again; wanted "
            'method="linearised"'
        )
        raise LogError(msg)
    return "linearised"


def walk_influence(fit: JourneyFit, walk: Walk, found: Passage, *, steps: bool) -> dict[str, FloatArray] | None:
    """Return the influence of each bucket on the answers from the starts of a walk.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    walk : Walk
        Of the moves of the chain.
    found : Passage
        Of the walk.
    steps : bool
        Moves are counted; else time.

    Returns
    -------
    dict of str to ndarray, shape (n_buckets, n_starts)
        By `MOMENTS`; None for a known chain.
    """
    pulls = fit.influence
    if pulls is None:
        return None
    parts = (pulls.probability,) * 3 if steps else (pulls.probability, pulls.mean, pulls.second)
    if len(walk.starts) == 1:
        slopes, where = found.gradients(int(walk.starts[0])), walk.pairs[1]
        return {
            name: np.sum([part @ slope[where, None] for part, slope in zip(parts, slopes[name], strict=True)], axis=0)
            for name in MOMENTS
        }
    changes = found.changes(*parts)
    return {name: getattr(changes, name)[:, walk.starts] for name in MOMENTS}


def linear_spreads(influence: dict[str, FloatArray] | None, n: int) -> dict[str, Spread]:
    """Return standard errors and degrees of freedom from the influence of buckets; zeros where there is none."""
    if influence is None:
        return dict.fromkeys(MOMENTS, (np.zeros(n), np.full(n, np.inf)))
    spreads = {}
    for name, part in influence.items():
        variance, df = variance_from_buckets(part)
        spreads[name] = np.sqrt(variance), df
    return spreads


def accelerations(influence: dict[str, FloatArray] | None) -> dict[str, FloatArray] | None:
    """Return the accelerations of BCa intervals from the influence of buckets; None where there is none."""
    return None if influence is None else {name: acceleration(part) for name, part in influence.items()}


def redrawn(
    estimates: Estimates, draws: FloatArray, plan: Plan, speed: FloatArray | None, asked: BoolArray, *, logit: bool
) -> tuple[Estimates, IntArray, BoolArray]:
    """Return estimates whose spread comes from resamples.

    Parameters
    ----------
    estimates : Estimates, n numbers
        With the linearised spread, which still says where events are too few.
    draws : ndarray, shape (n_resamples, n)
        Answers of the resamples.
    plan : Plan
        Says the method.
    speed : ndarray, shape (n,), or None
        Accelerations, for BCa.
    asked : ndarray of bool, shape (n,)
        Where there is anything to be uncertain about.
    logit : bool
        They are probabilities; else steps or times.

    Returns
    -------
    estimates : Estimates
    n_undefined : ndarray of int, shape (n,)
        Resamples left out.
    undefined : ndarray of bool, shape (n,)
        Where they are too many for an interval.
    """
    # a probability of exactly 0 or 1 has no place on the logit scale: its exact bound needs no resamples
    asked = asked & ~(logit & np.isin(estimates.value, (0.0, 1.0)))
    by_ends = plan.method != "bootstrap"
    std_error, n_undefined = transformed_error(draws, estimates.value, logit=logit)
    if by_ends:
        n_undefined = np.sum(~np.isfinite(draws), axis=0)
    n_undefined = np.where(asked, n_undefined, 0)
    undefined = n_undefined > MOST_UNDEFINED * len(draws)
    std_error = np.where(asked, np.where(undefined, np.nan, std_error), estimates.std_error)
    few = estimates.few | (asked & ~undefined & ~(std_error > 0))
    df = np.where(asked, np.float64(plan.n_buckets - 1), estimates.df)
    part = replace(estimates, std_error=std_error, df=df, few=few)
    if by_ends:
        kept = np.where(undefined | ~asked, np.nan, draws)
        part = DrawnEstimates(**vars(part), draws=kept, accelerations=speed)
    return part, n_undefined, undefined
