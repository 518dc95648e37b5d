"""The answers of one side of a comparison, each with the influence of every bucket of customers on it."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np

from journeys import checks
from journeys.errors import LogError
from journeys.kernels.arrays import BoolArray, FloatArray
from journeys.kernels.bins import LONGEST_US, elapsed_edges
from journeys.models.fit import JourneyFit
from journeys.models.stage_stays import NEXT, stage_rows
from journeys.models.stays import journey_stays, live_buckets, outcome_column
from journeys.questions.first_passage import from_entry
from journeys.questions.linear import TOO_FEW
from journeys.questions.moves import moves as single_moves
from journeys.questions.stage_rows import CONVERTED
from journeys.questions.walks import stepped, timed, walk_to
from journeys.questions.within import ended_within, followed_short
from journeys.tally.tables import N_BUCKETS
from journeys.tally.tally import Tally

Key = tuple[str, str, str]
Side = JourneyFit | Tally
REACHED = "reached"
STAGE = "stage reached"
# Measures that are no shares.
TIMES = ("steps", "days")
THE_END_US = np.array([LONGEST_US], np.int64)


@dataclass(frozen=True, eq=False)
class Answer:
    """One number of one side.

    Attributes
    ----------
    key : tuple of str
        Measure, state, next state.
    value : float
        NaN where there is none.
    influence : ndarray, shape (N_BUCKETS,)
        Zero for buckets without a customer.
    flag : str
        What to know of it; `TOO_FEW` takes its interval away.
    """

    key: Key
    value: float
    influence: FloatArray
    flag: str

    @property
    def few(self) -> bool:
        """Whether the number rests on too few events for an interval."""
        return TOO_FEW in self.flag or not np.isfinite(self.value)


def answers_of(
    side: Side,
    to: str | Collection[str] | None,
    horizons_us: Sequence[int],
    *,
    in_the_end: bool,
    moves: bool,
    stages: bool,
) -> dict[Key, Answer]:
    """Return what one side says of a target, and of its moves, by measure.

    Parameters
    ----------
    side : JourneyFit or Tally
        Of a tally only what happened within horizons can be told.
    to : str, collection of str or None
        The target.
    horizons_us : sequence of int
        Within which to count by the log, microseconds.
    in_the_end : bool
        What the chain says.
    moves : bool
        Also every single move.
    stages : bool
        Also how many reach each stage of the rules, by the log.

    Returns
    -------
    dict of tuple to Answer
        In the order in which they are told.

    Raises
    ------
    ValueError
        If `to` is not in the chain, or is no outcome where there are horizons.
    LogError
        If there are horizons and no log.
    """
    found: list[Answer] = []
    if in_the_end and isinstance(side, JourneyFit):
        found += _in_the_end(side, to)
    found += _within(side, to, horizons_us)
    if stages:
        found += _stages(side)
    if moves and in_the_end and isinstance(side, JourneyFit):
        found += _moves(side)
    return {answer.key: answer for answer in found}


def live_mask(side: Side) -> BoolArray:
    """Return which buckets hold a customer of one side; none of a known chain's."""
    tally = side if isinstance(side, Tally) else side.tally
    return np.zeros(N_BUCKETS, bool) if tally is None else live_buckets(tally) >= 0


def in_all_buckets(fit: Side, influence: FloatArray) -> FloatArray:
    """Return the influence of live buckets, shape (n_live, n), spread over all of them."""
    spread = np.zeros((N_BUCKETS, influence.shape[1]))
    if len(influence):
        spread[live_mask(fit)] = influence
    return spread


def _in_the_end(fit: JourneyFit, to: str | Collection[str] | None) -> list[Answer]:
    """Return the probability of the target and the means given that it is reached, from entry."""
    answers = []
    walk = walk_to(fit, to)
    for clock, measures in (("steps", ("probability", "mean")), ("time", ("mean",))):
        found = (stepped if clock == "steps" else timed)(fit, walk)
        result = from_entry(fit, to, clock, quantiles=False)
        changes = None
        if fit.influence is not None:
            by_p = fit.influence.probability
            pulls = (by_p, by_p, by_p) if clock == "steps" else (by_p, fit.influence.mean, fit.influence.second)
            changes = found.changes(*pulls)
        for measure in measures:
            row = int(np.flatnonzero(result.keys.measure == measure)[0])
            name = REACHED if measure == "probability" else "steps" if clock == "steps" else "days"
            influence = np.zeros((0, 1))
            if changes is not None:
                part = changes.probability if measure == "probability" else changes.mean_given
                influence = np.nan_to_num(part[:, :1])
            value = float(result.estimates.value[row])
            whole = in_all_buckets(fit, influence)[:, 0]
            answers.append(Answer((name, "entry", ""), value, whole, str(result.flag[row])))
    return answers


def _within(side: Side, to: str | Collection[str] | None, horizons_us: Sequence[int]) -> list[Answer]:
    """Return the shares of journeys that reach the target within horizons, by the log."""
    if not horizons_us:
        return []
    tally = side if isinstance(side, Tally) else side.tally
    if tally is None:
        msg = "within: a chain that was given has no log to count in; leave `within` out"
        raise LogError(msg)
    names = tally.rules.converted if to is None else (to,) if isinstance(to, str) else tuple(to)
    strange = [name for name in names if name not in tally.rules.outcomes]
    if strange:
        msg = f"within: to={strange[0]!r} is no outcome, so the log does not count it by horizon; leave `within` out"
        raise ValueError(msg)
    columns = outcome_column(np.array([tally.labels.index(name) for name in names]))
    edges = elapsed_edges(tally.rules.silence_us, tally.whole_days, tally.rules.horizons_us)
    curve = ended_within(*journey_stays(tally), columns, edges)
    shares, flags = curve.shares(np.array(horizons_us, np.int64), "")
    answers = []
    for i, horizon in enumerate(horizons_us):
        value, influence = curve.at(horizon)
        flag = "; ".join(part for part in str(flags[i]).split("; ") if part)
        short = followed_short(tally, horizon)
        if short:
            value, flag = np.nan, short
        key = (f"{REACHED} within {checks.duration_text(horizon)}", "entry", "")
        answers.append(Answer(key, value, in_all_buckets(side, influence[:, None])[:, 0], flag))
    return answers


def _stages(side: Side) -> list[Answer]:
    """Return the share of journeys that reach each stage, by the log, undecided ones accounted for."""
    tally = side if isinstance(side, Tally) else side.tally
    if tally is None or not tally.rules.stages:
        msg = "stages: no stages were counted; wanted stages=[...] in the rules of both sides"
        raise LogError(msg)
    rows, answers = stage_rows(tally), []
    for k, name in enumerate((*tally.rules.stages, CONVERTED), start=1):
        curve = ended_within(*rows.way_to(k), np.array([NEXT]), rows.upper_edges)
        (shares, _), (value, influence) = curve.shares(THE_END_US, ""), curve.at(float(THE_END_US[0]))
        flag = TOO_FEW if bool(shares.few[0]) else ""
        answers.append(Answer((STAGE, name, ""), value, in_all_buckets(side, influence[:, None])[:, 0], flag))
    return answers


def _moves(fit: JourneyFit) -> list[Answer]:
    """Return every single move."""
    result = single_moves(fit)
    influence = np.zeros((0, len(fit.probability))) if fit.influence is None else fit.influence.probability
    spread = in_all_buckets(fit, influence)
    labels = fit.nodes.labels
    place = {(labels[a], labels[b]): i for i, (a, b) in enumerate(zip(fit.move_state, fit.move_target, strict=True))}
    answers = []
    for row, (state, following) in enumerate(zip(result.keys.state, result.keys.next_state, strict=True)):
        at = place.get((state, following))
        pull = np.zeros(N_BUCKETS) if at is None else spread[:, at]
        value, flag = float(result.estimates.value[row]), str(result.flag[row])
        answers.append(Answer(("move", str(state), str(following)), value, pull, flag))
    return answers
