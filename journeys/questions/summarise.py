"""The summary of a fit: every part of the main job asked, and what describes too few people taken out."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace

from journeys import checks
from journeys.errors import LogError
from journeys.models.fit import JourneyFit
from journeys.models.what_if import WhatIf
from journeys.questions.check import check
from journeys.questions.comeback import comeback
from journeys.questions.compare import compare
from journeys.questions.credit import credit
from journeys.questions.few_people import FewPeople, few_people
from journeys.questions.first_passage import first_passage
from journeys.questions.hidden import Hider, hide, shown_counts
from journeys.questions.moves import moves
from journeys.questions.outcomes import outcomes
from journeys.questions.overview import CREDITED, Overview
from journeys.questions.plain_count import plain_count
from journeys.questions.removal import removal
from journeys.questions.sensitivity import sensitivity
from journeys.questions.stages import stages
from journeys.questions.time_to_convert import time_to_convert
from journeys.tally.tables import N_BUCKETS

# Numbers that describe fewer people are not shown, unless told otherwise.
MIN_CUSTOMERS = 10
# Of larger chains nobody reads every move, and looking at all pairs takes long.
MOST_SHIFTED = 100
# With more groups than these each is not fitted against all others.
MOST_COMPARED = 30


def summarise(
    fit: JourneyFit,
    horizons: Collection[checks.Duration] | None = None,
    *,
    confidence_level: float = 0.95,
    min_customers: int = MIN_CUSTOMERS,
) -> Overview:
    """Return the summary of a fit: counts, conversion, times, endings, moves, and the plain count beside.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally.
    horizons : collection of durations, optional
        As in `time_to_convert`.
    confidence_level : float
        Between 0 and 1.
    min_customers : int
        Numbers that describe fewer people are left out, and others beside them where a subtraction would tell what
        they are; 0 leaves none out. People are counted by non-empty buckets of customers, a lower bound, so at most
        200.

    Returns
    -------
    Overview
        Its `to_frame` is what the command writes.

    Raises
    ------
    LogError
        If the fit is a known chain without a log, or a what-if.
    ValueError
        If a horizon is not a duration, the level is not between 0 and 1, or `min_customers` not from 0 to 200.
    TypeError
        If `min_customers` is not a whole number.

    Notes
    -----
    What is hidden is taken out before anything is written or printed, so that the page and the files agree. It keeps
    readers of one summary from learning of a single person; two summaries of nearly the same log can be subtracted.
    Answers asked for by themselves, such as `outcomes(fit)`, hide nothing.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> from journeys.models.model import JourneyModel
    >>> from journeys.tally.count import count_log
    >>> days = ["2025-01-01", "2025-01-03", "2025-01-02", "2025-01-02", "2025-01-05"]
    >>> log = pd.DataFrame({"member": [1, 1, 2, 3, 3], "event": ["visit", "joined", "visit", "visit", "left"],
    ...                     "happened": pd.to_datetime(days, utc=True)})
    >>> rules = JourneyRules("member", "happened", "event", converted="joined", churned="left", silence="30d",
    ...                      complete_history=True, as_of="2025-03-01")
    >>> overview = summarise(JourneyModel().fit(count_log(log, rules)), min_customers=0)
    >>> overview.plain.n_converted, overview.plain.n_by_outcome["lapsed"]
    (1, 1)
    """
    if fit.tally is None:
        msg = "this chain was given, not fitted to a log; ask outcomes or first_passage instead"
        raise LogError(msg)
    if isinstance(fit, WhatIf):
        msg = "this chain was changed by hand, so the log's counts do not go with it; wanted its fit, or ask compare"
        raise LogError(msg)
    level, least = checks.confidence_level(confidence_level), few_limit(min_customers)
    tally, rules = fit.tally, fit.tally.rules
    found = Overview(
        fit=fit,
        plain=plain_count(fit.tally),
        conversion=time_to_convert(fit, horizons, confidence_level=level),
        endings=outcomes(fit, confidence_level=level),
        steps=first_passage(fit, clock="steps", method="linearised", confidence_level=level),
        days=first_passage(fit, clock="time", method="linearised", confidence_level=level),
        matrix=moves(fit, confidence_level=level),
        checks=check(fit, confidence_level=level),
        back=None if rules.silence_us is None else comeback(tally, confidence_level=level),
        funnel=stages(fit, confidence_level=level) if rules.stages else None,
        touched=removal(fit, confidence_level=level) if rules.touchpoints else None,
        credited=credit(fit, rule=CREDITED, confidence_level=level) if rules.touchpoints else None,
        shifts=sensitivity(fit, confidence_level=level) if len(fit.states) <= MOST_SHIFTED else None,
        groups={name: time_to_convert(fit, horizons, by=name, confidence_level=level) for name in rules.by},
        against={
            name: compare(fit, by=name, confidence_level=level)
            for name in rules.by
            if 1 < len(tally.split(name)) <= MOST_COMPARED
        },
    )
    return found if least < 2 else without_few(found, few_people(fit, tally, least))


def few_limit(value: int, name: str = "min_customers") -> int:
    """Return how many people a number has to describe to be shown, once that can be told."""
    least = checks.whole(value, name, 0)
    if least > N_BUCKETS:
        msg = f"{name}={least}; wanted at most {N_BUCKETS}, the number of buckets that people are counted by"
        raise ValueError(msg)
    return least


def without_few(overview: Overview, few: FewPeople) -> Overview:
    """Return a summary without what describes too few people."""
    hider = Hider(few)
    return replace(
        overview,
        few=few,
        plain=shown_counts(overview.plain, few),
        conversion=hider.conversion(overview.conversion),
        endings=hider.endings(overview.endings),
        steps=hider.conversion(overview.steps),
        days=hider.conversion(overview.days),
        matrix=hider.moves(overview.matrix),
        checks=hider.checks(overview.checks),
        back=hide(overview.back, hider.back),
        funnel=hide(overview.funnel, hider.stages),
        touched=hide(overview.touched, hider.passed),
        credited=hide(overview.credited, hider.credited),
        shifts=hide(overview.shifts, hider.shifts),
        groups={name: hider.group(name, result) for name, result in overview.groups.items()},
        against={name: hider.group(name, result) for name, result in overview.against.items()},
    )
