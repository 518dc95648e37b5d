"""What the time column of a night's rows tells: up to when the ledger may count."""

from __future__ import annotations

from dataclasses import dataclass

from journeys.checks import DAY_US, MAX_TIME_US, MIN_TIME_US, instant_text
from journeys.errors import LogError
from journeys.intake.look import first_look
from journeys.intake.read import LogSource
from journeys.intake.rules import JourneyRules
from journeys.intake.times import TimeReader
from journeys.nightly.manifest import Manifest
from journeys.tally.spans import Span


@dataclass(frozen=True)
class Reach:
    """From when to when a night counts.

    Attributes
    ----------
    span : Span
        Of the whole log; its end may lie before its start as long as everything waits.
    late_before_us : int or None
        New rows earlier than this come too late.
    counted_before_us : int
        Rows from here on wait.
    newest_us : int
        Latest time seen that does not lie in the future.
    """

    span: Span
    late_before_us: int | None
    counted_before_us: int
    newest_us: int


def reach_of(
    log: LogSource, rules: JourneyRules, before: Manifest | None, lateness_us: int, now_us: int
) -> Reach:
    """Return from when to when a night counts.

    Rows dated later than now wait for their time: one wrong clock must not make every later row too late.

    Parameters
    ----------
    log : LogSource
        The new rows.
    rules : JourneyRules
        How they are read.
    before : Manifest or None
        What there is.
    lateness_us : int
        For how long the newest rows wait.
    now_us : int
        The present.

    Raises
    ------
    LogError
        If the log begins and there is no usable time, or a few rows lie long before all others.
    """
    first, newest, whole_days = _times(log, rules, now_us)
    log_start = _known_start(before, rules, first)
    learned = None if before is None else before.learned
    if learned is not None and learned["rows"]["whole_days"] is not None:
        whole_days = learned["rows"]["whole_days"]
    if before is not None and before.newest_us is not None:
        newest = before.newest_us if newest is None else max(newest, before.newest_us)
    if log_start is None:
        log_start = rules.log_start_us if rules.log_start_us is not None else _log_start(log, rules, first, now_us)
    newest = log_start if newest is None else newest
    tick = DAY_US if whole_days else 1
    until = newest - lateness_us
    if rules.as_of_us is not None:
        until = min(until, rules.as_of_us + tick)
    # Whole days are counted when they are over, and longer waited for rather than shorter.
    until -= until % tick
    late_before = None if before is None else before.counted_before_us
    if late_before is not None:
        until = max(until, late_before)
    return Reach(Span(log_start, until - tick, whole_days), late_before, until, newest)


def _known_start(before: Manifest | None, rules: JourneyRules, first: int | None) -> int | None:
    """Return the start of a log that has begun; as long as every row waits, an earlier one moves it."""
    if before is None or before.log_start_us is None or before.counted_before_us is None:
        return None
    if first is None or rules.log_start_us is not None or before.counted_before_us > before.log_start_us:
        return before.log_start_us
    return min(before.log_start_us, max(first, before.counted_before_us))


def _log_start(log: LogSource, rules: JourneyRules, first: int | None, now_us: int) -> int:
    """Return the first time of a log that begins, unless a clock was plainly wrong."""
    if first is None:
        msg = f"column {rules.time!r} of {log.describe()} holds no usable time up to now; wanted the log's first rows"
        raise LogError(msg)
    only_times = JourneyRules(
        rules.customer, rules.time, rules.event, silence=rules.silence, as_of=instant_text(min(now_us, MAX_TIME_US))
    )
    return first_look(log, only_times, now_us=now_us).first_us


def _times(log: LogSource, rules: JourneyRules, now_us: int) -> tuple[int | None, int | None, bool]:
    """Return the first and the newest usable time that does not lie in the future, and whether there are only dates."""
    reader = TimeReader(rules.time)
    ranges = log.ranges(rules.time)
    if ranges is not None and ranges.n:
        first, last = reader.read(ranges.first), reader.read(ranges.last)
        if (first.usable() & last.usable() & (last.us <= now_us)).all():
            return int(first.us.min()), int(last.us.max()), bool(reader.whole_days)
    least, most = MAX_TIME_US + 1, MIN_TIME_US - 1
    for batch in log.batches([rules.time]):
        times = reader.read(batch.column(0))
        us = times.us[times.usable()]
        us = us[us <= now_us]
        least, most = min(least, int(us.min(initial=least))), max(most, int(us.max(initial=most)))
    return (None, None, bool(reader.whole_days)) if most < least else (least, most, bool(reader.whole_days))

