"""How likely, and how soon, a state or outcome is reached, from entry and from every state."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.kernels.absorption import Passage, passage
from journeys.kernels.arrays import FloatArray
from journeys.models.fit import JourneyFit
from journeys.questions.linear import (
    ENOUGH_DF,
    ENOUGH_EVENTS,
    TOO_FEW,
    leaning,
    probabilities,
    spread,
    starts_counted,
)
from journeys.questions.outcomes import UNREACHABLE
from journeys.results import KNOWN, LOG, LOGIT, Estimates, Result, joined_flags

UNIT_DAYS = {"weeks": 7.0, "days": 1.0, "hours": 1 / 24, "minutes": 1 / 1440}
MEASURES = ("probability", "mean", "sd", "mean_unconditional")
SOME_NEVER = "infinite: some never do"
NO_DWELL = "no dwell given"
NO_SPREAD = "no spread given"
_MOMENT = {"mean": "mean_given", "sd": "sd_given", "mean_unconditional": "mean_given"}


@dataclass(frozen=True, eq=False, repr=False)
class FirstPassageResult(Result):
    """Probability of reaching a target, and mean and spread of the steps or time it takes."""

    title: ClassVar[str] = "First passage"
    unit: str = "steps"


def first_passage(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    clock: str = "steps",
    *,
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
    unit : {"days", "weeks", "hours", "minutes"}
        Unit of time; without meaning for steps.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    FirstPassageResult
        One row per (start_state, measure): `probability` of ever reaching `to` before the journey ends
        otherwise; `mean` and `sd` of the steps or time given that it is reached; `mean_unconditional`,
        infinite where the probability is below 1. From `to` itself: 1, 0, 0 and 0.

    Raises
    ------
    ValueError
        If `to`, `clock`, `unit` or the level is not one of those.

    Notes
    -----
    The target is made absorbing; which states can reach it is decided on the graph of moves. With
    N = (I - P)^-1, h = N p and g = N (M h), the mean given passage is g/h. Intervals from the linearised
    cluster variance: logit scale for probabilities, log scale for steps and times.

    References
    ----------
    J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III. R. Pyke, Markov renewal
    processes with finitely many states, Ann. Math. Statist. 32 (1961) 1243-1259.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> frame = first_passage(JourneyFit.from_matrix(chain), "joined").to_frame()
    >>> frame.loc[frame.start_state == "basket", ["measure", "estimate"]].round(3).values.tolist()
    [['probability', 1.0], ['mean', 2.0], ['sd', 1.414], ['mean_unconditional', 2.0]]
    """
    import pandas as pd

    checks.one_of(clock, ("steps", "time"), "clock")
    checks.one_of(unit, tuple(UNIT_DAYS), "unit")
    level = checks.confidence_level(confidence_level)
    nodes, p = fit.nodes, fit.probability
    mean, second = (p, p) if clock == "steps" else (fit.mean, fit.second)
    found = passage(nodes.n_rows, nodes.n_nodes, fit.move_state, fit.move_target, p, mean, second, fit.target_mask(to))
    scale = 1.0 if clock == "steps" else UNIT_DAYS[unit]
    spreads = _spreads(fit, found, steps=clock == "steps")
    share = probabilities(fit, found.probability, *spreads["probability"], starts_counted(fit), LOGIT)
    at_target = fit.target_mask(to)[: nodes.n_rows]
    share = _without_doubt(share, at_target)
    parts, flags = (
        [share],
        [
            joined_flags(
                [(np.isnan(found.mean_given) & (found.probability == 0), UNREACHABLE), (share.few, TOO_FEW)],
                nodes.n_rows,
            )
        ],
    )
    for measure in MEASURES[1:]:
        part, flag = _moment(fit, found, share, measure, spreads[_MOMENT[measure]], scale, at_target)
        parts.append(part)
        flags.append(flag)
    joined, flag = Estimates.joined(parts), np.concatenate(flags)
    lean = [(np.tile(mask & ~at_target, len(MEASURES)), text) for text, mask in leaning(fit).items()]
    for mask, text in lean:
        flag = np.where(mask, np.where(flag == "", text, flag + "; " + text), flag)
    order = np.arange(len(flag)).reshape(len(MEASURES), nodes.n_rows).T.ravel()
    keys = pd.DataFrame(
        {
            "start_state": np.repeat(np.array(nodes.labels[: nodes.n_rows], dtype=object), len(MEASURES)),
            "measure": np.tile(np.array(MEASURES, dtype=object), nodes.n_rows),
        }
    )
    return FirstPassageResult(
        keys=keys,
        estimates=joined.take(order),
        flag=flag[order],
        counts={"n_effective": np.tile(share.n_effective, (len(MEASURES), 1)).T.ravel()},
        confidence_level=level,
        unit=clock if clock == "steps" else unit,
    )


def _spreads(fit: JourneyFit, found: Passage, *, steps: bool) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Return standard errors and degrees of freedom by measure, from every start."""
    n, moves = fit.nodes.n_rows, len(fit.probability)
    if fit.influence is None:
        nothing = (np.zeros(n), np.full(n, np.inf))
        return dict.fromkeys(("probability", "mean_given", "sd_given"), nothing)
    by_start = [found.gradients(start) for start in range(n)]
    answers = {}
    zeros = np.zeros((n, moves))
    for measure in ("probability", "mean_given", "sd_given"):
        by_p, by_mean, by_second = (np.stack([one[measure][i] for one in by_start]) for i in range(3))
        if steps:
            by_p, by_mean, by_second = by_p + by_mean + by_second, zeros, zeros
        answers[measure] = spread(fit, by_p, by_mean, by_second)
    return answers


def _moment(
    fit: JourneyFit,
    found: Passage,
    share: Estimates,
    measure: str,
    spreads: tuple[FloatArray, FloatArray],
    scale: float,
    at_target: np.ndarray,
) -> tuple[Estimates, np.ndarray]:
    """Return one kind of mean or spread from every start, with its flags."""
    n = len(at_target)
    value = np.where(at_target, 0.0, found.sd_given if measure == "sd" else found.mean_given) / scale
    std_error, df = spreads[0] / scale, spreads[1]
    reached = found.probability > 0
    unknown = reached & ~at_target & np.isnan(value)
    never = np.zeros(n, bool)
    if measure == "mean_unconditional":
        never = ~(found.certain | at_target)
        value = np.where(never, np.inf, value)
    std_error = np.where(np.isfinite(value), std_error, np.nan)
    known = fit.influence is None
    events = np.nan_to_num(share.n_effective) * share.value
    few = (
        np.zeros(n, bool)
        if known
        else ((df < ENOUGH_DF) | (events < ENOUGH_EVENTS) | ~(std_error > 0)) & np.isfinite(value) & ~at_target
    )
    estimates = _without_doubt(
        Estimates(value, std_error, df, np.full(n, KNOWN if known else LOG, dtype=object), share.n_effective, few),
        at_target,
    )
    absent = NO_DWELL if measure != "sd" or np.isnan(found.mean_given[reached & ~at_target]).any() else NO_SPREAD
    flag = joined_flags(
        [
            (~reached & ~never, UNREACHABLE),
            (never & ~reached, UNREACHABLE),
            (never & reached, SOME_NEVER),
            (unknown, absent),
            (few, TOO_FEW),
        ],
        n,
    )
    return estimates, flag


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
