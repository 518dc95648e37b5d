"""Change alarms: whole weeks that were followed for long enough, each against the span before it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.checks import duration_text
from journeys.intake.group_checks import COHORT, PERIOD
from journeys.intake.rules import JourneyRules
from journeys.kernels.arrays import IntArray
from journeys.nightly.few_alarms import Behind, not_told
from journeys.nightly.job import Alarms
from journeys.nightly.manifest import Watched
from journeys.questions.corrected import corrected
from journeys.questions.week_changes import CONVERTED, event_changes, week_changes
from journeys.tally.groups import Group
from journeys.tally.resumed import ResumedPass
from journeys.tally.spans import Span
from journeys.tally.weeks import Watch

# Chance of any false alarm among all shares compared for one week, where nothing has changed: one in two years.
LEVEL = 0.01
_FEWEST_WEEKS = 2
# Stands for all weeks let go of: an event that was ever seen is not new.
_BEFORE = "-1"


def begun(
    before: Watched | None,
    alarms: Alarms,
    rules: JourneyRules,
    span: Span,
    counted_before_us: int | None,
    events: Sequence[str],
) -> Watched:
    """Return what is known of the weeks; anew where they were not followed before, or for another time.

    Parameters
    ----------
    before : Watched or None
        What was known the night before.
    alarms, rules, span
        Of the night.
    counted_before_us : int or None
        Up to when there was a ledger before; None: from its start.
    events : sequence of str
        Events counted before: they are not new.
    """
    if before is not None and before.within_us == alarms.within_us:
        return before
    start = span.log_start_us if counted_before_us is None else max(counted_before_us, span.log_start_us)
    starts = Watch.of(rules, span, alarms.within_us, 0).starts
    over, followed = _ends(starts, span, alarms)
    # Of the weeks of a log that has long begun, the newest is looked at and no other.
    return Watched(alarms.within_us, start, followed - 1, over - 1, {event: {_BEFORE: 1} for event in events})


def watch_of(watched: Watched, alarms: Alarms, rules: JourneyRules, span: Span) -> Watch:
    """Return what a night counts by week."""
    watch = Watch.of(rules, span, alarms.within_us, 0)
    first = int(np.searchsorted(watch.starts, watched.from_us))
    oldest = min(watched.shares, watched.events) + 1 - alarms.weeks
    return replace(watch, first_kept=max(first, oldest, 0))


def _ends(starts: IntArray, span: Span, alarms: Alarms) -> tuple[int, int]:
    """Return the last week that is over, and the last followed for long enough; below 0 where there is none."""
    until = np.array([span.as_of_us + 1, span.as_of_us + 1 - alarms.within_us])
    over, followed = (np.searchsorted(starts, until, side="right") - 2).tolist()
    return over, followed


def look(
    pass_: ResumedPass, watch: Watch, watched: Watched, alarms: Alarms, rules: JourneyRules, span: Span, least: int
) -> tuple[Watched, list[dict[str, Any]]]:
    """Return what is known of the weeks after a night, and the alarms that tripped.

    Each week is looked at once: for events when it is over, for shares when it was followed for long enough. What
    would tell of fewer than `least` people trips without its numbers.
    """
    by_week = _added(watched.by_week, pass_.events_by_week, watch.first_kept)
    buckets = _seen(watched.buckets, pass_.buckets_by_week, watch.first_kept)
    first = int(np.searchsorted(watch.starts, max(watched.from_us, span.log_start_us)))
    over, followed = _ends(watch.starts, span, alarms)
    found: list[dict[str, Any]] = []
    for week in range(max(watched.events + 1, first + _FEWEST_WEEKS), over + 1):
        before = range(max(first, week - alarms.weeks), week)
        found += _events(by_week, buckets, before, week, watch.names, least)
    for week in range(max(watched.shares + 1, first + _FEWEST_WEEKS), followed + 1):
        before = range(max(first, week - alarms.weeks), week)
        found += _shares(pass_, rules, before, week, alarms, watch.names, least)
    after = Watched(
        watched.within_us, watched.from_us, max(watched.shares, followed), max(watched.events, over), by_week, buckets
    )
    return after, found


def _added(
    held: Mapping[str, Mapping[str, int]], new: Mapping[str, Mapping[int, int]], first_kept: int
) -> dict[str, dict[str, int]]:
    """Return how often events came in each week; of weeks let go of, only that they came."""
    by_week = {event: dict(weeks) for event, weeks in held.items()}
    for event, weeks in new.items():
        mine = by_week.setdefault(event, {})
        for week, n in weeks.items():
            mine[str(week)] = mine.get(str(week), 0) + n
    return {
        event: {
            **({_BEFORE: 1} if any(int(week) < first_kept for week in weeks) else {}),
            **{week: n for week, n in weeks.items() if int(week) >= first_kept},
        }
        for event, weeks in by_week.items()
    }


def _seen(
    held: Mapping[str, Mapping[str, str]], new: Mapping[str, Mapping[int, int]], first_kept: int
) -> dict[str, dict[str, str]]:
    """Return in which buckets of customers events came in each week, as bits of a hexadecimal number."""
    seen = {event: {week: bits for week, bits in weeks.items() if int(week) >= first_kept}
            for event, weeks in held.items()}  # fmt: skip
    for event, weeks in new.items():
        mine = seen.setdefault(event, {})
        for week, bits in weeks.items():
            if week >= first_kept:
                mine[str(week)] = f"{int(mine.get(str(week), '0'), 16) | bits:x}"
    return seen


def _events(
    by_week: Mapping[str, Mapping[str, int]],
    buckets: Mapping[str, Mapping[str, str]],
    before: range,
    week: int,
    names: tuple[str, ...],
    least: int,
) -> list[dict[str, Any]]:
    counts = {event: {int(at): n for at, n in weeks.items()} for event, weeks in by_week.items()}
    alarms = []
    for event, what, mean, n in event_changes(counts, before, week):
        said = f"week of {names[week]}: event {event!r} is {what}"
        alarm = {
            "week": names[week], "by": "", "group": "", "measure": f"event {what}", "state": event, "next_state": "",
            "before": mean, "now": float(n), "difference": n - mean,
            "said": f"{said}: {n:,} times, {mean:,.1f} a week before",
        }  # fmt: skip
        people = (_people(buckets.get(event, {}), weeks) for weeks in (before, [week]))
        few = any(0 < one < least for one in people)
        alarms.append(not_told(alarm, said, least) if few else alarm)
    return alarms


def _people(buckets: Mapping[str, str], weeks: Iterable[int]) -> int:
    """Return in how many buckets of customers an event came in some weeks."""
    seen = 0
    for week in weeks:
        seen |= int(buckets.get(str(week), "0"), 16)
    return seen.bit_count()


def _shares(
    pass_: ResumedPass,
    rules: JourneyRules,
    before: range,
    week: int,
    alarms: Alarms,
    names: tuple[str, ...],
    least: int,
) -> list[dict[str, Any]]:
    """Return the shares of a week that changed: of all customers, and of each group of each column."""
    import pandas as pd

    table, states, groups = pass_.named_weeks()
    frames, slices = [], _slices(table["group"], rules, groups)
    for by, value, keep in slices:
        frames.append(week_changes(table, states, before, week, keep=keep).assign(by=by, group=value))
    found = pd.concat(frames, ignore_index=True)
    found["p_value_corrected"] = corrected(found.p_value.to_numpy(dtype=float))
    tripped = found[(found.p_value_corrected < LEVEL) & (found.difference.abs() >= alarms.at_least)]
    rows = tripped.to_dict("records")
    sides = np.isin(table["week"], list(before)), table["week"] == week
    few = Behind(table, states, sides, {(by, value): keep for by, value, keep in slices}, least).few(rows)
    return [_alarm(one, names[week], alarms, least if is_few else 0) for one, is_few in zip(rows, few, strict=True)]


def _slices(
    group: NDArray[Any], rules: JourneyRules, groups: tuple[Group, ...]
) -> list[tuple[str, str, NDArray[np.bool_]]]:
    """Return all rows, then those of each value of each group column; weeks are not compared by when they were."""
    slices = [("", "", np.ones(len(group), bool))]
    for place, column in enumerate(rules.by):
        if column in (COHORT, PERIOD):
            continue
        values = np.array([str(one[place]) for one in groups], dtype=object)
        slices += [(column, value, np.isin(group, np.flatnonzero(values == value))) for value in sorted(set(values))]
    return slices


def _alarm(one: Mapping[Any, Any], week: str, alarms: Alarms, least: int) -> dict[str, Any]:
    """Return an alarm as it is told: without its numbers where fewer than `least` people, unless 0, are behind it."""
    within = duration_text(alarms.within_us)
    what = (
        f"converted within {within}" if one["measure"] == CONVERTED
        else f"from {one['state']!r} to {one['next_state']!r} within {within}"
    )  # fmt: skip
    where = f" ({one['by']} {one['group']})" if one["by"] else ""
    a, b = 100 * one["before"], 100 * one["now"]
    about = f"week of {week}{where}: {what}"
    said = (
        f"{about}: {b:.1f} %, {a:.1f} % before; {b - a:+.1f} points "
        f"({100 * one['low']:+.1f} to {100 * one['high']:+.1f})"
    )
    kept = ("by", "group", "measure", "state", "next_state", "before", "now", "difference", "low", "high",
            "p_value_corrected")  # fmt: skip
    alarm = {"week": week, **{name: one[name] for name in kept}, "said": said}
    return not_told(alarm, about, least) if least else alarm
