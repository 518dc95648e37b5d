"""From when to when the journeys of some groups begin, and for how long they were followed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from journeys.intake.group_checks import COHORT, PERIOD
from journeys.intake.groups import cohort_calendar
from journeys.tally.groups import Group, period_names

if TYPE_CHECKING:
    from journeys.intake.rules import JourneyRules


@dataclass(frozen=True)
class Span:
    """From when to when a log reaches, in microseconds, and whether it holds dates without a time."""

    log_start_us: int
    as_of_us: int
    whole_days: bool


def spans_of(rules: JourneyRules, groups: Sequence[Group], span: Span) -> list[tuple[int, int, int]]:
    """Return, for each group, when its journeys begin at the earliest, at the latest, and until when they are followed.

    Parameters
    ----------
    rules : JourneyRules
        With `by`.
    groups : sequence of tuple
        Values in the order of `rules.by`.
    span : Span
        The log's own.

    Returns
    -------
    list of tuple of three int
        Microseconds since 1970.
    """
    first, last = span.log_start_us, span.as_of_us
    # A ledger may have cuts that lie ahead.
    cuts = (first, *(min(cut, last) for cut in rules.splits_us), last)
    periods = {name: (cuts[i], cuts[i + 1]) for i, name in enumerate(period_names(rules.splits_us))}
    cohorts: dict[str, tuple[int, int]] = {}
    if rules.cohort is not None:
        starts, names = cohort_calendar(rules.cohort, "UTC" if span.whole_days else rules.timezone, first, last)
        ends = np.append(starts[1:], last)
        cohorts = {name: (int(a), int(b)) for name, a, b in zip(names, starts, ends, strict=True)}
    at = {name: i for i, name in enumerate(rules.by)}
    answers = []
    for group in groups:
        begin, end = cohorts[str(group[at[COHORT]])] if cohorts else (first, last)
        period = periods[str(group[at[PERIOD]])] if rules.splits_us else (first, last)
        answers.append((max(begin, first, period[0]), min(end, period[1]), period[1]))
    return answers


def longest_followed_us(rules: JourneyRules, groups: Sequence[Group], span: Span) -> int:
    """Return for how long the journeys of some groups were followed at most, in microseconds."""
    if not groups:
        return span.as_of_us - span.log_start_us
    return max(until - begin for begin, _, until in spans_of(rules, groups, span))


def surely_followed_us(rules: JourneyRules, groups: Sequence[Group], span: Span) -> int | None:
    """Return for how long every journey of some cohorts was followed; None where all cohorts are there, or none.

    Of all cohorts together the youngest count as undecided; picked out, a young one stands beside older ones.
    """
    if rules.cohort is None or not groups:
        return None
    at = rules.by.index(COHORT)
    _, names = cohort_calendar(
        rules.cohort, "UTC" if span.whole_days else rules.timezone, span.log_start_us, span.as_of_us
    )
    if {str(group[at]) for group in groups}.issuperset(names):
        return None
    return min(max(until - latest, 0) for _, latest, until in spans_of(rules, groups, span))
