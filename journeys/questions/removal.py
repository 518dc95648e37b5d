"""What would be lost without each touchpoint."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from functools import partial
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.removal import Road, diverted, passed, road, stopped
from journeys.kernels.resampling import Refitter, bucket_weights
from journeys.models.fit import JourneyFit
from journeys.questions import cautions
from journeys.questions.bootstrap import LEAST_RESAMPLES, UNDEFINED, Plan, redrawn
from journeys.questions.by_group import by_group
from journeys.questions.linear import ENOUGH_DF, ENOUGH_EVENTS, TOO_FEW, leaning, probabilities
from journeys.questions.measures import NO_DWELL
from journeys.questions.outcomes import UNREACHABLE
from journeys.questions.touch_shares import DIFFER, TOO_SHORT, InLog, beside
from journeys.questions.touchpoints import Asked, Touchpoints, asked, influenced
from journeys.results import KNOWN, LOG, LOGIT, PLAIN, Estimates, Result, joined_flags

HOWS = ("stop", "pass", "divert")
METHODS = ("linearised", "bootstrap")
OFF_THE_WAY = "on no way to the target"
CAUTIONS = {
    "stop": (cautions.ASSOCIATION, cautions.UPPER_LIMIT, cautions.UNRECORDED, cautions.STAFF),
    "pass": (cautions.SKIPPED, cautions.ASSOCIATION, cautions.STAFF),
    "divert": (cautions.OTHER_END, cautions.ASSOCIATION, cautions.UNRECORDED, cautions.STAFF),
}


@dataclass(frozen=True, eq=False, repr=False)
class RemovalResult(Result):
    """Removal effects by touchpoint, the largest first.

    Attributes
    ----------
    how : str
        What becomes of arrivals at the touchpoint.
    method : str
        How the uncertainty was found.
    """

    title: ClassVar[str] = "Removal effects"
    how: str = "stop"
    method: str = "linearised"

    @property
    def cautions(self) -> tuple[str, ...]:
        """What to keep in mind with these numbers."""
        return CAUTIONS[self.how]

    def summary(self) -> str:
        """Return the answer as plain text, then what to keep in mind."""
        return f"{super().summary()}\n\n{cautions.told(self.cautions)}"


def removal(
    fit: JourneyFit,
    to: str | Collection[str] | None = None,
    touchpoints: Touchpoints = None,
    *,
    how: str = "stop",
    by: str | Sequence[str] | None = None,
    method: str = "linearised",
    n_redraws: int = 100,
    rng: int | np.random.Generator | None = None,
    confidence_level: float = 0.95,
) -> RemovalResult:
    """Return what would be lost without each touchpoint.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    to : str or collection of str, optional
        An outcome, a state, or several of either; default: all converted outcomes together.
    touchpoints : str or collection, optional
        States; several in a tuple are taken out together, as one touchpoint "a + b". Default: those that the
        rules name, else every state, which above 500 must be named; none that is in `to`.
    how : {"stop", "pass", "divert"}
        What becomes of arrivals at the touchpoint. "stop": they are lost. "pass": they go at once where they would
        go from there. "divert": they go elsewhere, as the others in the same state do.
    by : str or sequence of str, optional
        Columns that journeys are grouped by: one block of rows per group.
    method : {"linearised", "bootstrap"}
        How uncertainty is found: linearised, or from the redraws, each fitted anew (give at least 399 of them).
    n_redraws : int
        Redraws of the customers, in buckets.
    rng : int or numpy.random.Generator, optional
        Source of chance; default: started from the checksum of the tally.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    RemovalResult
        One row per touchpoint, the largest effect first. "stop", "divert": `estimate` is the share of all who reach
        `to` from entry that is lost (below 0: won). "pass": one row per (touchpoint, measure), `estimate` being the
        `steps` and the `days` by which the mean given that `to` is reached is less; conversion does not change.
        `order_held` counts the redraws, out of `n_redraws`, in which the touchpoint stayed ahead of the next; blank
        for the last, and in a known chain. "stop" also has `share_in_log` and its `std_error_in_log`: the share of
        the conversions in the log that touch the touchpoint, where the rules name it and `to` is outcomes alone;
        "log and model differ" is flagged where the effect is another beyond chance.

    Raises
    ------
    TypeError
        If a touchpoint is no name.
    ValueError
        If an argument is not one of those, or a touchpoint is no state or in `to`.
    LogError
        If `by` is asked of a known chain, or of groups of which none can carry a fit; if redraws of a chain that
        rests on no counted stays are to be fitted anew.

    Notes
    -----
    With N = (I - P)^-1 and h the probability of `to`: N_0c h_c / (N_cc h_0) for "stop", which is also the share of
    journeys that reach `to` by way of c; (1 - h'_0 / h_0) for "divert", rows divided by 1 - P(i, c) and one left
    empty lost; N_0c h_c / h_0 steps for "pass". Intervals from the linearised cluster variance with exact
    derivatives, even on the logit scale for "stop", on the log scale for "pass". The effects of "stop" add up to the
    mean number of distinct touchpoints of those who convert, so they are no shares; see `credit`. The share in the log
    needs no chain: journeys with a sure entry that have converted are weighted by the jumps of the Aalen-Johansen
    estimate, so that those still open do not pull it to touchpoints of short journeys.

    References
    ----------
    J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III. C. D. Meyer, Stochastic
    complementation, uncoupling Markov chains, and the theory of nearly reducible systems, SIAM Review 31 (1989)
    240-272.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame(
    ...     [[0.0, 0.5, 0.3, 0.2, 0.0], [0.0, 0.0, 0.0, 0.6, 0.4], [0.0, 0.0, 0.0, 0.5, 0.5]],
    ...     index=["visit", "basket", "mail"], columns=["visit", "basket", "mail", "joined", "left"])
    >>> frame = removal(JourneyFit.from_matrix(chain), "joined", ["basket", "mail"]).to_frame()
    >>> frame[["touchpoint", "estimate"]].round(3).values.tolist()
    [['basket', 0.462], ['mail', 0.231]]
    """
    checks.one_of(how, HOWS, "how")
    checks.one_of(method, METHODS, "method")
    level = checks.confidence_level(confidence_level)
    least = LEAST_RESAMPLES if method == "bootstrap" else 1
    checks.whole(n_redraws, "n_redraws", least)
    checks.rng(rng, 0)
    ask = partial(_removal, to=to, touchpoints=touchpoints, how=how, plan=(method, n_redraws, rng), level=level)
    return ask(fit) if by is None else by_group(fit, by, ask)


@dataclass(frozen=True, eq=False)
class _Part:
    """Effects of one measure on all touchpoints, with the influence of each bucket on them."""

    measure: str
    effect: FloatArray
    influence: FloatArray


def _removal(
    fit: JourneyFit,
    *,
    to: str | Collection[str] | None,
    touchpoints: Touchpoints,
    how: str,
    plan: tuple[str, int, int | np.random.Generator | None],
    level: float,
) -> RemovalResult:
    """Answer for one fit."""
    import pandas as pd

    it, (method, n_redraws, rng) = asked(fit, to, touchpoints), plan
    seed = 0 if fit.tally is None else int(fit.tally.checksum, 16)
    n_buckets = 0 if fit.influence is None else len(fit.influence.probability)
    planned = Plan(method, n_redraws, n_buckets, checks.rng(rng, seed))
    parts = _parts(fit, it, how)
    draws = _draws(fit, it, how, parts, planned)
    in_log = beside(fit, it, parts[0].effect, parts[0].influence) if how == "stop" else None
    found = [
        _measured(fit, it, part, how, planned, None if draws is None else draws[i], in_log)
        for i, part in enumerate(parts)
    ]
    order = [_ranked(part.effect) for part in parts]
    held = [_order_held(None if draws is None else draws[i], rank) for i, rank in enumerate(order)]
    names = np.array(it.names, dtype=object)
    keys = {"touchpoint": np.concatenate([names[rank] for rank in order])}
    if how == "pass":
        keys["measure"] = np.repeat(np.array([part.measure for part in parts], dtype=object), len(names))
    pick = np.concatenate([rank + i * len(names) for i, rank in enumerate(order)])
    estimates = Estimates.joined([one for one, _ in found]).take(pick)
    counts = {"n_effective": estimates.n_effective, "order_held": np.concatenate(held)}
    if in_log is not None:
        counts |= {"share_in_log": in_log.share[pick], "std_error_in_log": in_log.std_error[pick]}
    return RemovalResult(
        keys=pd.DataFrame(keys),
        estimates=estimates,
        flag=np.concatenate([flag for _, flag in found])[pick],
        counts=counts,
        confidence_level=level,
        how=how,
        method=method,
    )


def _parts(fit: JourneyFit, it: Asked, how: str) -> list[_Part]:
    """Return the effects, measure by measure, with the influence of each bucket."""
    derive = fit.influence is not None
    if how == "pass":
        found = {name: passed(it.way, it.groups, steps=name == "steps", derive=derive) for name in ("steps", "days")}
    else:
        found = {"": (stopped if how == "stop" else diverted)(it.way, it.groups, derive=derive)}
    return [_Part(name, one.effect, influenced(fit, one.by_p, one.by_mean)) for name, one in found.items()]


def _draws(fit: JourneyFit, it: Asked, how: str, parts: list[_Part], plan: Plan) -> list[FloatArray] | None:
    """Return the effects in each redraw of the customers, shape (n_redraws, n_touchpoints); None where none is made."""
    if fit.influence is None:
        return None
    weights = bucket_weights(plan.n_buckets, plan.n_resamples, plan.rng)
    if plan.method == "linearised":
        return [part.effect + (weights - 1.0) @ part.influence for part in parts]
    if fit.fitted_stays is None:
        msg = (
            'method="bootstrap": this chain was changed after it was fitted, so its stays cannot be drawn again; '
            'wanted method="linearised"'
        )
        raise LogError(msg)
    steps = how != "pass"
    refitter = Refitter(fit.fitted_stays, fit.move_state, fit.move_target, fit.nodes.n_nodes, steps=steps)
    refits = refitter.refit(weights)
    is_target, n = it.way.moves.is_target, fit.nodes.n_rows
    drawn: list[list[FloatArray]] = [[] for _ in parts]
    for b in range(len(weights)):
        p = refits.probability[:, b]
        way = road(n, fit.nodes.n_nodes, refitter.state, refitter.target, p, refits.mean[:, b], is_target)
        for i, part in enumerate(parts):
            drawn[i].append(_effect(way, it, how, part.measure))
    return [np.stack(rows) for rows in drawn]


def _effect(way: Road, it: Asked, how: str, measure: str) -> FloatArray:
    if how == "pass":
        return passed(way, it.groups, steps=measure == "steps", derive=False).effect
    return (stopped if how == "stop" else diverted)(way, it.groups, derive=False).effect


def _measured(
    fit: JourneyFit, it: Asked, part: _Part, how: str, plan: Plan, draws: FloatArray | None, in_log: InLog | None
) -> tuple[Estimates, np.ndarray]:
    """Return the effects of one measure as estimates, with flags."""
    n, value, known = len(part.effect), part.effect, fit.influence is None
    variance, df = (np.zeros(n), np.full(n, np.inf)) if known else variance_from_buckets(part.influence)
    std_error = np.where(np.isfinite(value), np.sqrt(variance), np.nan)
    there: BoolArray = np.isfinite(value)
    estimates = _estimates(fit, it, value, std_error, df, how)
    undefined = np.zeros(n, bool)
    if plan.method == "bootstrap" and draws is not None:
        estimates, undefined = _from_draws(estimates, draws, plan, how)
    # divert may change something where no way to the target leads through: those who go there are sent elsewhere
    off = np.array([not len(it.way.on_the_way(group)) for group in it.groups]) & (how != "divert") & (value == 0)
    unreached = np.full(n, it.way.conversion <= 0)
    flags = [
        (unreached, UNREACHABLE), (off, OFF_THE_WAY), (~there & ~unreached, NO_DWELL),
        (estimates.few & there, TOO_FEW), (undefined, UNDEFINED),
    ]  # fmt: skip
    flags += [(np.full(n, mask[0]), text) for text, mask in leaning(fit).items()]
    if in_log is not None:
        flags += [(in_log.differs, DIFFER), (np.full(n, in_log.too_short), TOO_SHORT)]
    return estimates, joined_flags(flags, n)


def _estimates(
    fit: JourneyFit, it: Asked, value: FloatArray, std_error: FloatArray, df: FloatArray, how: str
) -> Estimates:
    n = len(value)
    if how == "stop":
        return probabilities(fit, value, std_error, df, np.full(n, it.n_conversions), LOGIT)
    known = fit.influence is None
    few = np.zeros(n, bool)
    if not known:
        few = (df < ENOUGH_DF) | ~(std_error > 0) | (it.n_conversions < ENOUGH_EVENTS)
    scale = KNOWN if known else LOG if how == "pass" else PLAIN
    return Estimates(value, std_error, df, np.full(n, scale, dtype=object), np.full(n, np.nan), few)


def _from_draws(estimates: Estimates, draws: FloatArray, plan: Plan, how: str) -> tuple[Estimates, BoolArray]:
    """Return the same with standard errors from the redraws, and where too many of them are undefined."""
    n = len(estimates.value)
    if how != "divert":
        redone, _, undefined = redrawn(estimates, draws, plan, None, estimates.value > 0, logit=how == "stop")
        return redone, undefined
    lost = ~np.isfinite(draws)
    undefined = lost.mean(axis=0) > 0.05
    std_error = np.full(n, np.nan)
    for i in np.flatnonzero(~undefined):
        std_error[i] = np.std(draws[~lost[:, i], i], ddof=1)
    df = np.full(n, float(plan.n_buckets - 1))
    few = estimates.few | (~undefined & ~(std_error > 0))
    return Estimates(estimates.value, std_error, df, estimates.scale, estimates.n_effective, few), undefined


def _ranked(effect: FloatArray) -> np.ndarray:
    """Return the order of the effects, the largest first, those that are not there last."""
    return np.argsort(-np.where(np.isnan(effect), -np.inf, effect), kind="stable")


def _order_held(draws: FloatArray | None, rank: np.ndarray) -> FloatArray:
    """Return in how many redraws each effect stayed above the one that follows it."""
    held = np.full(len(rank), np.nan)
    if draws is not None and np.isfinite(draws).any():
        held[:-1] = (draws[:, rank[:-1]] > draws[:, rank[1:]]).sum(axis=0)
    return held
