"""Stages passed one after another: how many reach each, how soon, and where the rest went."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from journeys import checks
from journeys.errors import RulesError
from journeys.models.fit import JourneyFit
from journeys.models.stage_stays import StageRows, stage_rows
from journeys.questions.by_group import by_group
from journeys.questions.stage_rows import BASES, CONVERTED, ENTRY, MEASURES, UNDECIDED, Row
from journeys.questions.stages_by_log import rows_by_log
from journeys.questions.stages_by_model import rows_by_model
from journeys.results import Estimates, Result


@dataclass(frozen=True, eq=False, repr=False)
class StagesResult(Result):
    """Shares that reach each stage, of all and of the stage before, the median time, and where the rest went."""

    title: ClassVar[str] = "Stages"


def stages(
    fit: JourneyFit,
    stages: Sequence[str] | None = None,
    within: checks.Duration | None = None,
    *,
    by: str | Sequence[str] | None = None,
    confidence_level: float = 0.95,
) -> StagesResult:
    """Return how far journeys get through an ordered list of states: what share, how soon, where the rest went.

    A stage is reached when its state is visited after the stage before it was reached. The first "stage" is
    entry; the last, called "converted", is the conversion of journeys that have reached all others, where the
    rules name a converted outcome (a known chain has one if it has a single outcome; else see `went`).

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    stages : sequence of str, optional
        States in order; default: those of the rules. Others than the rules name were not counted in the log:
        for them there are only rows by the model.
    within : duration, optional
        Such as "30d" since entry: bounds `reached` and `of_stage_before`. Default: in the end.
    by : str or sequence of str, optional
        Columns of the rules' `by`: an answer for every group of journeys.
    confidence_level : float
        Between 0 and 1.

    Returns
    -------
    StagesResult
        One row per (stage, measure, outcome, basis); `outcome` is empty but for the measure `went`.

        - `reached`: share of all journeys that reach the stage.
        - `of_stage_before`: share of those who reach the stage before.
        - `median_days`: from the stage before, given that this one is reached.
        - `went`: share of those who reach the stage that end in the outcome without reaching the next one,
          in the end; outcome "undecided", by the log: the plain share still under way, whatever it will be.

        Basis "log" is read off journeys with a sure entry, those still under way accounted for; "model" is what
        the chain makes of the moves. Columns n_reached, journeys with a sure entry seen to reach the stage, and
        n_open, those of them still under way without the next one; NaN where stages were not counted.

    Raises
    ------
    RulesError
        If `stages` is left out and the rules have none.
    ValueError
        If a stage is no state of the chain or comes twice, `within` is not a duration, or the level is not
        between 0 and 1.
    LogError
        If `by` is given for a known chain.

    Notes
    -----
    Log: Aalen-Johansen estimates, on the time since entry for `reached` (a journey that ended short of the stage
    competes, one still under way is censored) and on the time since the stage for `went` and the median. Where
    nobody is under way any more they are the plain shares, and `of_stage_before` of the next stage and `went` of
    a stage add up to 1; else they do so up to the error of two clocks, and to what was not followed to its end.
    Variances, that of the ratio too, are linearised over buckets of customers; the bounds of a median are where
    the curve reaches the ends of the interval of its own value.

    Model: the product of the first-passage probabilities from stage to stage; within a time, the times of these
    passages added up, their transforms multiplied. Where it differs from the log by more than their intervals,
    customers of several kinds are mixed, or what comes next depends on more than the last state.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes,
    Springer 1993, section IV.4. J. G. Kemeny, J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter III.
    R. S. Woodruff, J. Amer. Statist. Assoc. 47 (1952) 635-646.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.0, 0.5, 0.1, 0.4], [0.2, 0.0, 0.6, 0.2]], index=["price page", "basket"],
    ...                      columns=["price page", "basket", "joined", "declined"])
    >>> fit = JourneyFit.from_matrix(chain)
    >>> frame = stages(fit, ["basket"]).to_frame()
    >>> frame.loc[frame.stage == "basket", ["measure", "outcome", "estimate"]].round(3).values.tolist()[:2]
    [['reached', '', 0.5], ['of_stage_before', '', 0.5]]
    >>> frame.loc[frame.stage == "basket", ["measure", "outcome", "estimate"]].round(3).values.tolist()[3:]
    [['went', 'joined', 0.689], ['went', 'declined', 0.311]]
    """
    level = checks.confidence_level(confidence_level)
    within_us = None if within is None else checks.duration_us(within, "within")
    names = _named(fit, stages)

    def ask(one: JourneyFit) -> StagesResult:
        return _answer(one, names, within_us, level)

    return ask(fit) if by is None else by_group(fit, by, ask)


def _named(fit: JourneyFit, given: Sequence[str] | None) -> tuple[str, ...]:
    """Return the stages asked for, checked."""
    counted = () if fit.tally is None else fit.tally.rules.stages
    if given is None:
        if counted:
            return counted
        if fit.tally is None:
            msg = f"stages: left out, and a known chain has none of its own; wanted states in order, of {fit.states}"
        else:
            msg = (
                "stages: left out, and the rules have none; name them in the rules, JourneyRules(stages=[...]), and "
                "count the log again, or give them here for the answer of the model"
            )
        raise RulesError(msg)
    names = (given,) if isinstance(given, str) else tuple(given)
    if not names:
        msg = "stages: got none; wanted states in order"
        raise ValueError(msg)
    known = tuple(dict.fromkeys((*fit.nodes.last_states, *counted)))
    for name in names:
        if name not in known:
            raise ValueError(_unknown(name, known, fit))
    if twice := [name for name in names if names.count(name) > 1]:
        msg = f"stages: got {twice[0]!r} twice; wanted each state once"
        raise ValueError(msg)
    return names


def _unknown(name: object, known: tuple[str, ...], fit: JourneyFit) -> str:
    if name in fit.outcomes:
        return f"stages: got {name!r}, an outcome; wanted the states before it (the conversion follows by itself)"
    close = difflib.get_close_matches(str(name), known, n=3, cutoff=0.5)
    listed = ", ".join(map(repr, [*close, *(one for one in known if one not in close)][:12]))
    return f"stages: got {name!r}, which is no state of this chain; wanted states such as {listed}"


def _answer(fit: JourneyFit, names: tuple[str, ...], within_us: int | None, level: float) -> StagesResult:
    import pandas as pd

    asked = (*names, CONVERTED) if fit.converted else names
    by_model = fit.nodes.order == 1
    told, rows = rows_by_model(fit, asked, within_us) if by_model else [], None
    if fit.tally is not None and fit.tally.rules.stages == names:
        rows = stage_rows(fit.tally)
        told += rows_by_log(fit.tally, rows, asked, within_us)
    elif not by_model:
        msg = (
            "stages: a chain of a higher order has them by the log alone; wanted those that the rules name, or a fit "
            "of order 1"
        )
        raise ValueError(msg)
    told = _in_order(told, (ENTRY, *asked), (*fit.outcomes, UNDECIDED))
    keys = [(row.stage, row.measure, row.outcome, row.basis) for row in told]
    return StagesResult(
        keys=pd.DataFrame(keys, columns=["stage", "measure", "outcome", "basis"]),
        estimates=Estimates.joined([row.estimate for row in told]),
        flag=np.array([row.flag for row in told], dtype=object),
        counts=_counts(told, rows, (ENTRY, *asked)),
        confidence_level=level,
    )


def _in_order(told: list[Row], stages: tuple[str, ...], outcomes: tuple[str, ...]) -> list[Row]:
    """Return the rows stage by stage, measure by measure, outcome by outcome, the log before the model."""
    place = {name: i for i, name in enumerate(("", *outcomes))}
    return sorted(
        told,
        key=lambda row: (
            stages.index(row.stage), MEASURES.index(row.measure), place[row.outcome], BASES.index(row.basis)
        ),
    )  # fmt: skip


def _counts(told: list[Row], rows: StageRows | None, stages: tuple[str, ...]) -> dict[str, np.ndarray]:
    if rows is None:
        return {name: np.full(len(told), np.nan) for name in ("n_reached", "n_open")}
    at = [stages.index(row.stage) for row in told]
    columns = {"n_reached": rows.reached(), "n_open": rows.still_in()}
    return {name: np.rint(values[at]).astype(np.int64) for name, values in columns.items()}
