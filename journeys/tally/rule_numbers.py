"""Rules as the numbers that counting works with."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.group_checks import CAME_AFTER
from journeys.intake.groups import cohort_calendar
from journeys.intake.rules import JourneyRules
from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import DAY_US
from journeys.kernels.grouping import MOST_PERIODS, Grouping
from journeys.tally.codes import StateCodes
from journeys.tally.spans import Span


def cohorts_of(rules: JourneyRules, span: Span) -> tuple[IntArray | None, tuple[str, ...]]:
    """Return starts and names of the cohorts; dates are the same days everywhere."""
    if rules.cohort is None:
        return None, ()
    timezone = "UTC" if span.whole_days else rules.timezone
    return cohort_calendar(rules.cohort, timezone, span.log_start_us, span.as_of_us)


def grouping_of(
    rules: JourneyRules, span: Span, cohort_starts: IntArray | None, *, goes_on: bool
) -> Grouping | None:
    """Return how journeys are grouped; in a log that goes on, periods may lie ahead."""
    if not rules.by:
        return None
    splits = np.array(rules.splits_us, np.int64)
    if len(splits) >= MOST_PERIODS:
        msg = f"split_at: got {len(splits):,} cuts; wanted fewer than {MOST_PERIODS:,}"
        raise LogError(msg)
    if span.whole_days and (splits % DAY_US).any():
        msg = f"split_at: got {rules.split_at}, but the log holds dates; wanted cuts at whole days"
        raise LogError(msg)
    outside = (splits <= span.log_start_us) | ((splits > span.as_of_us) & (not goes_on))
    if outside.any():
        msg = f"split_at: {rules.split_at[int(np.argmax(outside))]} does not lie inside the log; wanted cuts within it"
        raise LogError(msg)
    return Grouping(
        CAME_AFTER in rules.by, cohort_starts, splits, rules.silence_us or 0, DAY_US if span.whole_days else 1
    )


def ungrouped(rules: JourneyRules, span: Span) -> Grouping:
    """Return a grouping that puts all journeys into one group, for counts that ask when things began."""
    return Grouping(False, None, np.zeros(0, np.int64), rules.silence_us or 0, DAY_US if span.whole_days else 1)


def codes_of(states: tuple[str, ...], codes: StateCodes) -> NDArray[np.int32] | None:
    """Return the codes of some states; None where there are none."""
    return np.array([codes.code(name) for name in states], np.int32) if states else None
