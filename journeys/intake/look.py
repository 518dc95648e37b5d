"""First look at the time column alone: when the log begins and ends, and whether a clock was wrong."""

from __future__ import annotations

import time
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.checks import DAY_US, MAX_TIME_US, MIN_TIME_US, instant_text
from journeys.errors import LogError
from journeys.intake.read import LogSource
from journeys.intake.rules import JourneyRules
from journeys.intake.times import TimeReader

_FEW_ROWS = 0.001


@dataclass(frozen=True, slots=True)
class Look:
    """What the time column alone says.

    Attributes
    ----------
    first_us, last_us : int
        First and last usable time between the log's two dates, in microseconds since 1970 UTC.
    n_rows : int
        Rows read, usable or not.
    whole_days : bool
        The column holds dates without a time.
    n_later_than_now : int
        Rows dated in the future, `as_of` or not.
    noted : bool
        Files said so of their pieces; their rows were not looked at.
    """

    first_us: int
    last_us: int
    n_rows: int
    whole_days: bool
    n_later_than_now: int
    noted: bool = False

    def check(self, seen_us: tuple[int, int] | None, column: str) -> None:
        """Hold what files note of their pieces against the rows, once these have been read.

        Parameters
        ----------
        seen_us : tuple of (int, int), or None
            First and last usable time of all rows.
        column : str
            Column of times, for the message.

        Raises
        ------
        LogError
            If the notes are wrong.
        """
        if self.noted and seen_us != (self.first_us, self.last_us):
            msg = (
                f"column {column!r}: the smallest and largest times that the Parquet files note are not those of their "
                "rows; write the files again"
            )
            raise LogError(msg)


@dataclass(frozen=True, slots=True)
class _Days:
    """Rows per day that has any, with the exact first and last time of each day."""

    day: NDArray[np.int64]
    n: NDArray[np.int64]
    first: NDArray[np.int64]
    last: NDArray[np.int64]

    def __add__(self, other: _Days) -> _Days:
        day, place = np.unique(np.concatenate([self.day, other.day]), return_inverse=True)
        n = np.zeros(len(day), dtype=np.int64)
        np.add.at(n, place, np.concatenate([self.n, other.n]))
        first = np.full(len(day), np.iinfo(np.int64).max)
        np.minimum.at(first, place, np.concatenate([self.first, other.first]))
        last = np.full(len(day), np.iinfo(np.int64).min)
        np.maximum.at(last, place, np.concatenate([self.last, other.last]))
        return _Days(day, n, first, last)

    def part(self, begin: int, end: int) -> _Days:
        """Days from one position up to another."""
        piece = slice(begin, end)
        return _Days(self.day[piece], self.n[piece], self.first[piece], self.last[piece])


def first_look(source: LogSource, rules: JourneyRules, *, now_us: int | None = None) -> Look:
    """First and last time of a log, unless a clock was plainly wrong.

    Parameters
    ----------
    source : LogSource
    rules : JourneyRules
    now_us : int, optional
        What counts as the future; left out, the clock of this computer.

    Returns
    -------
    Look

    Raises
    ------
    LogError
        If there is no usable time, or fewer than 0.1 % of the rows lie beyond a hole longer than `silence`
        and than half the span of the rest, at an end whose date the rules do not give.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.read import open_log
    >>> frame = pd.DataFrame({"when": pd.to_datetime(["1970-01-01", "1970-01-03"], utc=True)})
    >>> look = first_look(open_log(frame, ["when"]), JourneyRules("who", "when", "what", silence="1d"))
    >>> look.last_us // DAY_US, look.n_rows, look.whole_days
    (2, 2, False)
    """
    now = time.time_ns() // 1_000 if now_us is None else now_us
    if (look := _look_at_ranges(source, rules, now)) is not None:
        return look
    return glance(source.batches([rules.time]), rules, now).look(rules, source.describe())


@dataclass(frozen=True, slots=True)
class Glance:
    """What the times of a part of a log say; those of all parts are added up before anything is concluded.

    Attributes
    ----------
    days : _Days
        Rows and first and last usable time of each day between the dates of the rules.
    n_rows, n_later_than_now : int
        As in `Look`.
    whole_days : bool or None
        The column holds dates; None where there was no time at all.
    """

    days: _Days
    n_rows: int
    n_later_than_now: int
    whole_days: bool | None

    def __add__(self, other: Glance) -> Glance:
        """Return what both parts say together."""
        return Glance(
            self.days + other.days,
            self.n_rows + other.n_rows,
            self.n_later_than_now + other.n_later_than_now,
            other.whole_days if self.whole_days is None else self.whole_days,
        )

    def look(self, rules: JourneyRules, where: str) -> Look:
        """Conclude, or raise what `first_look` raises.

        Parameters
        ----------
        rules : JourneyRules
        where : str
            What the log is, for the message.

        Returns
        -------
        Look

        Raises
        ------
        LogError
        """
        days, counts = self.days, (self.n_rows, bool(self.whole_days), self.n_later_than_now)
        if not len(days.day):
            if rules.log_start_us is not None and rules.as_of_us is not None:
                # A part of a log, or a day on which nothing happened: its span is known all the same.
                return Look(rules.log_start_us, rules.as_of_us, *counts)
            between = " between log_start and as_of" if rules.log_start or rules.as_of else ""
            raise LogError(f"column {rules.time!r} of {where} holds no usable time{between}")
        if fixes := _clock_faults(days, rules):
            raise LogError(f"column {rules.time!r}: " + "; ".join(fixes))
        return Look(int(days.first[0]), int(days.last[-1]), *counts)


def glance(batches: Iterable[pa.RecordBatch], rules: JourneyRules, now_us: int) -> Glance:
    """Add up the times of a part of a log.

    Parameters
    ----------
    batches : iterable of pyarrow.RecordBatch
        With the time column alone.
    rules : JourneyRules
    now_us : int
        What counts as the future.

    Returns
    -------
    Glance

    Raises
    ------
    LogError
        If the column holds no times.
    """
    reader, n_rows, n_later = TimeReader(rules.time), 0, 0
    empty = np.empty(0, dtype=np.int64)
    days = _Days(empty, empty, empty, empty)
    for batch in batches:
        n_rows += batch.num_rows
        times = reader.read(batch.column(0))
        us = times.us[times.usable()]
        n_later += int(np.count_nonzero(us > now_us))
        us = _between(us, rules)
        if len(us):
            days += _per_day(us)
    return Glance(days, n_rows, n_later, reader.whole_days)


def _look_at_ranges(source: LogSource, rules: JourneyRules, now: int) -> Look | None:
    """Look at what the files note of their pieces; None where that does not settle everything."""
    ranges = source.ranges(rules.time)
    silence = rules.silence_us or 0
    # A hole of the kind looked for cannot hide in a piece that is no longer than the silence.
    if ranges is None or not ranges.n or silence < DAY_US:
        return None
    reader = TimeReader(rules.time)
    first, last = reader.read(ranges.first), reader.read(ranges.last)
    lowest = MIN_TIME_US if rules.log_start_us is None else rules.log_start_us
    highest = MAX_TIME_US if rules.as_of_us is None else rules.as_of_us
    settled = first.usable() & last.usable() & (first.us >= lowest) & (last.us <= min(highest, now))
    if not (settled & (last.us - first.us <= silence)).all():
        return None
    days = _apart(first.us, last.us, np.array(ranges.n))
    if fixes := _clock_faults(days, rules):
        raise LogError(f"column {rules.time!r}: " + "; ".join(fixes))
    return Look(int(days.first[0]), int(days.last[-1]), ranges.n_rows, bool(reader.whole_days), 0, noted=True)


def _apart(first: NDArray[np.int64], last: NDArray[np.int64], n: NDArray[np.int64]) -> _Days:
    """Pieces put in order, those that overlap made one."""
    order = np.argsort(first)
    first, n = first[order], n[order]
    reach = np.maximum.accumulate(last[order])
    begin = np.flatnonzero(np.concatenate([[True], first[1:] > reach[:-1]]))
    end = np.append(begin[1:], len(first)) - 1
    return _Days(np.arange(len(begin)), np.add.reduceat(n, begin), first[begin], reach[end])


def _between(us: NDArray[np.int64], rules: JourneyRules) -> NDArray[np.int64]:
    """Keep the times between the log's two dates, as far as the rules give them."""
    if rules.log_start_us is not None:
        us = us[us >= rules.log_start_us]
    if rules.as_of_us is not None:
        us = us[us <= rules.as_of_us]
    return us


def _per_day(us: NDArray[np.int64]) -> _Days:
    """Rows per day of one batch; runs of a day are gathered first, since logs mostly come in order."""
    day = us // DAY_US
    begin = np.flatnonzero(np.diff(day, prepend=day[0] - 1))
    empty = np.empty(0, dtype=np.int64)
    runs = _Days(
        day[begin],
        np.diff(begin, append=len(us)),
        np.minimum.reduceat(us, begin),
        np.maximum.reduceat(us, begin),
    )
    return runs + _Days(empty, empty, empty, empty)


def _clock_faults(days: _Days, rules: JourneyRules) -> list[str]:
    """Say which dates to set where a few rows lie far beyond the rest; both ends are looked at in turn."""
    total, fixes, rest = int(days.n.sum()), [], days
    while True:
        early = None if rules.log_start else _early_hole(rest, total, rules.silence_us or 0)
        if early is not None:
            n = int(rest.n[:early].sum())
            rest = rest.part(early, len(rest.day))
            fixes.append(
                f"{n} of {total} rows lie long before all others, as a wrong clock would put them: "
                f'set log_start="{instant_text(int(rest.first[0]))}" to leave them out, '
                f'or log_start="{instant_text(int(days.first[0]))}" if they are right'
            )
        late = None if rules.as_of else _late_hole(rest, total, rules.silence_us or 0)
        if late is not None:
            n = int(rest.n[late:].sum())
            rest = rest.part(0, late)
            fixes.append(
                f"{n} of {total} rows lie long after all others, as a wrong clock would put them: "
                f'set as_of="{instant_text(int(rest.last[-1]))}" to leave them out, '
                f'or as_of="{instant_text(int(days.last[-1]))}" if they are right'
            )
        if early is None and late is None:
            return fixes


def _late_hole(days: _Days, total: int, silence_us: int) -> int | None:
    """Position of the first day beyond such a hole, or None."""
    holes = days.first[1:] - days.last[:-1]
    beyond = np.cumsum(days.n[::-1])[::-1][1:]
    span = days.last[:-1] - days.first[0]
    found = np.flatnonzero((beyond < _FEW_ROWS * total) & (holes > silence_us) & (2 * holes > span))
    return int(found[0]) + 1 if len(found) else None


def _early_hole(days: _Days, total: int, silence_us: int) -> int | None:
    """Position of the last first day after such a hole, or None."""
    holes = days.first[1:] - days.last[:-1]
    beyond = np.cumsum(days.n)[:-1]
    span = days.last[-1] - days.first[1:]
    found = np.flatnonzero((beyond < _FEW_ROWS * total) & (holes > silence_us) & (2 * holes > span))
    return int(found[-1]) + 1 if len(found) else None
