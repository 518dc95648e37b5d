"""How likely, and how soon, a state or outcome is reached, from entry and from every state."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.return_walks import passage_walk
from journeys.models.fit import JourneyFit
from journeys.questions.bootstrap import Plan, accelerations, plan, walk_influence
from journeys.questions.by_group import by_group
from journeys.questions.linear import leaning, passage_spread, starts_counted
from journeys.questions.measures import LEVELS, MEASURES, UNIT_DAYS, Walked, measured
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.quantiles import quantiles_of_moves
from journeys.questions.walks import stepped, timed, walk_to
from journeys.results import Estimates, Result

__all__ = ["UNIT_DAYS", "FirstPassageResult", "first_passage"]


@dataclass(frozen=True, eq=False, repr=False)
class FirstPassageResult(Result):
    """Probability of reaching a target, and how many steps or how much time it takes.

    Attributes
    ----------
    unit : str
        "steps", or the unit of time.
    method : str
        How the uncertainty was found.
    resamples : ndarray, shape (n_resamples, n_rows), or None
        The answers of the resamples, row by row of the frame: NaN where one is undefined, and for medians and
        quantiles, which are not resampled. None where nothing was.
    """

    title: ClassVar[str] = "First passage"
    unit: str = "steps"
    method: str = "linearised"
    resamples: FloatArray | None = None


def first_passage(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    clock: str = "steps",
    *,
    by: str | Sequence[str] | None = None,
    method: str = "bootstrap",
    n_resamples: int | None = None,
    rng: int | np.random.Generator | None = None,
    unit: str = "days",
    confidence_level: float = 0.95,
) -> FirstPassageResult:
    """Return whether and how soon `to` is reached, from entry and from every state.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    to : str or collection of str, optional
        An outcome, a state, or several of either; default: all converted outcomes together.
    clock : {"steps", "time"}
        Count moves, or elapsed time.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one fit per group, their columns first.
    method : {"bootstrap", "percentile", "bca", "linearised"}
        How uncertainty is found: from resamples of the buckets of customers, as a standard error, as
        percentiles or as bias-corrected and accelerated ones; or linearised, which needs no resamples. Above
        500 states say "linearised", or give `n_resamples` and wait. A known chain has none whatever the method; a
        what-if is linearised.
    n_resamples : int, optional
        Default 399, or 1,999 (also the least) for "percentile" and "bca".
    rng : int or numpy.random.Generator, optional
        Source of chance; default: started from the checksum of the tally, so that the same tally gives the
        same numbers.
    unit : {"days", "weeks", "hours", "minutes"}
        Unit of time; without meaning for steps.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    FirstPassageResult
        One row per (start_state, measure): `probability` of ever reaching `to` before the journey ends
        otherwise; `median`, `q90` (90 % quantile), `mean` and `sd` of the steps or time given that it is
        reached; `mean_unconditional`, infinite where the probability is below 1. From `to` itself: 1, and 0 for
        the others. The column n_undefined counts resamples in which a number has no value.

    Raises
    ------
    ValueError
        If an argument is not one of those, or more than 500 states were to be resampled unasked.

    Notes
    -----
    The target is made absorbing; which states can reach it is decided on the graph of moves. With
    N = (I - P)^-1, h = N p and g = N (M h), the mean given passage is g/h. Intervals lie even on the logit
    scale for probabilities, on the log scale for steps and times. "bootstrap" takes the standard error over
    the resamples on that scale and t quantiles with one degree of freedom less than there are buckets. Where
    over 5 % of the resamples leave a number undefined there is no interval. Median and `q90` keep their linear
    intervals in every method.

    References
    ----------
    J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III. R. Pyke, Markov renewal
    processes with finitely many states, Ann. Math. Statist. 32 (1961) 1243-1259. B. Efron, R. J. Tibshirani,
    An Introduction to the Bootstrap, Chapman and Hall 1993. B. Efron, Better bootstrap confidence intervals,
    JASA 82 (1987) 171-185.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> frame = first_passage(JourneyFit.from_matrix(chain), "joined").to_frame()
    >>> frame.loc[frame.start_state == "basket", ["measure", "estimate"]].round(3).values.tolist()
    [['probability', 1.0], ['median', 1.0], ['q90', 4.0], ['mean', 2.0], ['sd', 1.414], ['mean_unconditional', 2.0]]
    """
    checks.one_of(clock, ("steps", "time"), "clock")
    checks.one_of(unit, tuple(UNIT_DAYS), "unit")
    level = checks.confidence_level(confidence_level)
    fit.target_mask(to)
    if by is not None:
        ask = partial(
            first_passage, to=to, clock=clock, method=method, n_resamples=n_resamples, rng=rng, unit=unit,
            confidence_level=level,
        )  # fmt: skip
        return by_group(fit, by, ask)
    how = plan(fit, method, n_resamples, rng, fit.nodes.n_rows)
    every = np.arange(fit.nodes.n_rows)
    return _result(fit, _walked(fit, to, how, clock, every, LEVELS), how, every, MEASURES, clock, unit, level)


def from_entry(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    clock: str = "steps",
    *,
    quantiles: bool = True,
    confidence_level: float = 0.95,
) -> FirstPassageResult:
    """Return the rows of `first_passage` that start at entry, linearised, at less cost; quantiles only if asked for."""
    how = plan(fit, "linearised", None, None, 1)
    entry, levels = np.zeros(1, np.int64), LEVELS if quantiles else ()
    told = MEASURES if quantiles else tuple(name for name in MEASURES if name not in ("median", "q90"))
    walked = _walked(fit, to, how, clock, entry, levels)
    return _result(fit, walked, how, entry, told, clock, "days", checks.confidence_level(confidence_level))


def _result(
    fit: JourneyFit, walked: Walked, how: Plan, starts: IntArray, told: Sequence[str], clock: str, unit: str,
    level: float,
) -> FirstPassageResult:  # fmt: skip
    """Return answers as rows, start by start."""
    import pandas as pd

    steps = clock == "steps"
    answers = measured(fit, walked, how, 1.0 if steps else UNIT_DAYS[unit])
    labels = np.array(fit.nodes.labels, dtype=object)[starts]
    keys = {"start_state": np.repeat(labels, len(told)), "measure": np.tile(told, len(labels)).astype(object)}
    return FirstPassageResult(
        keys=pd.DataFrame(keys),
        estimates=answers.estimates,
        flag=answers.flag,
        counts={"n_effective": answers.n_effective, "n_undefined": answers.n_undefined},
        confidence_level=level,
        unit=clock if steps else unit,
        method=how.method,
        resamples=answers.resamples,
    )


def _walked(
    fit: JourneyFit, to: str | Collection[str] | None, how: Plan, clock: str, at: IntArray, levels: Sequence[float]
) -> Walked:
    """Return all that is known of the walks to the target from some starts (resamples: from every start)."""
    n, is_target, steps = fit.nodes.n_rows, fit.target_mask(to), clock == "steps"
    walk = passage_walk(n, fit.move_state, fit.move_target, is_target)
    found = (stepped if steps else timed)(fit, walk_to(fit, to))
    influence = walk_influence(fit, walk, found, steps=steps) if how.method == "bca" else None
    draws = how.draws(fit, lambda state, target: [passage_walk(n, state, target, is_target)], steps=steps)
    return Walked(
        probability=found.probability[at],
        certain=found.certain[at],
        mean=found.mean_given[at],
        sd=found.sd_given[at],
        at_target=is_target[at],
        sure=np.zeros(len(at), bool),
        doubtful=found.doubtful[at],
        trials=starts_counted(fit)[at],
        spreads={name: (se[at], df[at]) for name, (se, df) in passage_spread(fit, found, steps=steps).items()},
        speeds=accelerations(influence),
        draws=None if draws is None else draws[0],
        quantiles=_quantiles(fit, to, clock, at, levels, found.probability),
        lean={text: mask[at] for text, mask in leaning(fit).items()},
        unreachable=UNREACHABLE,
    )


def _quantiles(
    fit: JourneyFit, to: str | Collection[str] | None, clock: str, at: IntArray, levels: Sequence[float], p: FloatArray
) -> list[tuple[Estimates, np.ndarray]]:
    if not levels:
        return []
    return quantiles_of_moves(fit, walk_to(fit, to), at, clock=clock, levels=levels, probability=p)
