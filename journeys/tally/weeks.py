"""Journeys by the week they began in, and stays by the week they were entered in: for noticing that something changed.

Kept beside the tables of a tally while a log goes on: who converts, and where stays lead, within a given time.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from journeys.intake.groups import cohort_calendar
from journeys.intake.rules import JourneyRules
from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import DAY_US
from journeys.kernels.grouping import Grouping
from journeys.kernels.records import (
    FIRST_OUTCOME,
    OPEN,
    Closed,
    Counted,
    Ends,
    Entries,
    Gaps,
    Moves,
    Passed,
    Reading,
)
from journeys.tally.accumulate import Accumulator, Keyed, add_up
from journeys.tally.keys import pack
from journeys.tally.spans import Span
from journeys.tally.sums import Sums

NAME = "weeks"
# Flags of a row's key: what a stay led to, or whether a journey converted.
STAY, JOURNEY = 0, 1
_PARTS = ("group", "week")

Records = TypeVar("Records", Ends, Entries, Gaps, Passed)


@dataclass(frozen=True)
class Watch:
    """What is counted by week.

    Attributes
    ----------
    starts : ndarray of int64
        Starts of the weeks from the log's first on, microseconds; one more than have begun, as the end of the last.
    names : tuple of str
        Their first days.
    within_us : int
        Time within which journeys are to convert and stays to be left.
    n_converted : int
        How many outcomes are conversions.
    first_kept : int
        Weeks before this one are let go of.
    """

    starts: IntArray
    names: tuple[str, ...]
    within_us: int
    n_converted: int
    first_kept: int = 0

    @classmethod
    def of(cls, rules: JourneyRules, span: Span, within_us: int, first_kept: int) -> Watch:
        """Return the watch over a log that is read up to the end of a span."""
        timezone = "UTC" if span.whole_days else rules.timezone
        # Eight days on, another week has begun in any zone.
        starts, names = cohort_calendar("week", timezone, span.log_start_us, span.as_of_us + 8 * DAY_US)
        return cls(starts, names, within_us, len(rules.converted), first_kept)

    def week_of(self, times_us: IntArray) -> IntArray:
        """Return the week that each time lies in; the first one also for times before it."""
        return np.maximum(np.searchsorted(self.starts, times_us, side="right") - 1, 0)


class WatchedSums(Sums):
    """Sums of a tally, and beside them what happened in each week.

    Parameters
    ----------
    reading, edges, longest_us, buckets, grouped, goes_on
        As in `Sums`.
    watch : Watch
        What is counted by week. The records added must say when things began and to which group they belong.
    """

    def __init__(
        self,
        reading: Reading,
        edges: tuple[IntArray | None, IntArray | None],
        longest_us: int | None,
        buckets: range,
        *,
        grouped: Grouping | None,
        goes_on: bool,
        watch: Watch,
    ) -> None:
        super().__init__(reading, edges, longest_us, buckets, grouped=grouped, goes_on=goes_on)
        self._watch, self._ungrouped = watch, grouped is None
        self._tables[NAME] = Accumulator(("n",), _PARTS)

    def add(self, counted: Counted, n_states: int) -> None:
        """Add what a block of rows gave."""
        for moves in counted.moves:
            self._add_stays(moves)
        for ends in counted.ends:
            self._add_journeys(ends)
        super().add(_ungrouped(counted) if self._ungrouped else counted, n_states)

    def close(self, closed: Closed, n_states: int) -> None:
        """Add what the end of the log gave."""
        self._add_stays(closed.moves)
        self._add_journeys(closed.ends)
        super().close(_closed_ungrouped(closed) if self._ungrouped else closed, n_states)

    def _add_stays(self, moves: Moves) -> None:
        """Add where stays led, open where that took longer than is watched."""
        next_code = np.where(moves.dwell <= self._watch.within_us, moves.next_code, np.int32(OPEN))
        self._add_rows(moves, pack(moves.bucket, moves.state, next_code, flag=STAY))

    def _add_journeys(self, ends: Ends) -> None:
        """Add whether journeys whose start was seen converted in time."""
        sure = ends.sure.astype(bool)
        won = (ends.outcome >= FIRST_OUTCOME) & (ends.outcome < FIRST_OUTCOME + self._watch.n_converted)
        won &= ends.elapsed <= self._watch.within_us
        key = pack(ends.bucket, np.zeros(len(won), np.int64), won.astype(np.int64), flag=JOURNEY)
        self._add_rows(ends, key, sure)

    def _add_rows(self, records: Moves | Ends, key: IntArray, keep: NDArray[np.bool_] | None = None) -> None:
        if records.since is None or records.group is None:
            msg = "a watch over the weeks needs records that say when and in which group things began"
            raise ValueError(msg)
        week = self._watch.week_of(records.since)
        kept = week >= self._watch.first_kept
        kept = kept if keep is None else kept & keep
        more = {"group": records.group[kept], "week": week[kept]}
        self._tables[NAME].add(key[kept], {"n": np.ones(int(kept.sum()), np.int64)}, None, more)


def kept_weeks(table: Keyed, first_kept: int) -> Keyed:
    """Return the rows of weeks that are not let go of."""
    kept = table.more["week"] >= first_kept
    return Keyed(
        table.key[kept],
        {name: column[kept] for name, column in table.sums.items()},
        {name: column[kept] for name, column in table.more.items()},
    )


def joined(tables: list[Keyed]) -> Keyed:
    """Return tables of different customers as one, the sums under equal keys added up."""
    key = np.concatenate([table.key for table in tables])
    more = {name: np.concatenate([table.more[name] for table in tables]) for name in _PARTS}
    return add_up(key, {"n": np.concatenate([table.sums["n"] for table in tables])}, more)


def _without(records: Records) -> Records:
    return replace(records, since=None, group=None)


def _ungrouped(counted: Counted) -> Counted:
    """Return what a block gave as it would be without groups."""
    return replace(
        counted,
        moves=tuple(replace(moves, group=None) for moves in counted.moves),
        ends=tuple(_without(ends) for ends in counted.ends),
        passed=tuple(_without(passed) for passed in counted.passed),
        entries=_without(counted.entries),
        gaps=_without(counted.gaps),
    )


def _closed_ungrouped(closed: Closed) -> Closed:
    return replace(
        closed,
        moves=replace(closed.moves, group=None),
        ends=_without(closed.ends),
        gaps=_without(closed.gaps),
        passed=None if closed.passed is None else _without(closed.passed),
    )
