"""Batches of a log turned into `Rows`: what cannot be used is left out and counted."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.checks import DAY_US
from journeys.errors import LogError
from journeys.intake.arrays import indices_of, is_missing, numbers, plain, whole_numbers
from journeys.intake.columns import decoded, event_names, is_in, texts_of
from journeys.intake.findings import Findings
from journeys.intake.groups import GroupCodes
from journeys.intake.identity import bucket_major
from journeys.intake.people import People
from journeys.intake.rows import EventCodes, Rows
from journeys.intake.rule_checks import RESERVED
from journeys.intake.rules import JourneyRules
from journeys.intake.times import TimeReader, Times
from journeys.intake.values import millionths

Mask = NDArray[np.bool_]
_UNNUMBERED = np.iinfo(np.int64).max


class Normaliser:
    """Turns the batches of one pass over a log, in order, into blocks of kept rows.

    A row is counted under the first reason that leaves it out: excluded, missing customer, time, event,
    time out of range, before the log's start, after `as_of`, event dropped by the rules.

    Parameters
    ----------
    rules : JourneyRules
    log_start_us, as_of_us : int, optional
        First and last instant to keep, both included; left out, those of the rules, if any.
    people : People, optional
        How customer ids become keys; left out, with the key of the environment, if it is set.

    Attributes
    ----------
    findings : Findings
        What was found so far.
    codes : EventCodes
        Events seen so far.
    targets : list of str or None
        State or outcome of each event code; None where dropped.
    groups : GroupCodes
        Values seen so far in the group columns.
    n_rows, n_kept : int
        Rows read, rows kept.
    seen_us : tuple of (int, int), or None
        First and last usable time so far, of rows left out too.

    Examples
    --------
    >>> rules = JourneyRules("who", "when", "what", silence="30d")
    >>> when = pa.array([0, None, 5], pa.timestamp("us", "UTC"))
    >>> batch = pa.record_batch({"who": [1, 1, 2], "when": when, "what": ["visit"] * 3})
    >>> normaliser = Normaliser(rules)
    >>> normaliser.rows(batch).row.tolist(), normaliser.findings
    ([0, 2], Findings(missing_time 1))
    """

    def __init__(
        self,
        rules: JourneyRules,
        *,
        log_start_us: int | None = None,
        as_of_us: int | None = None,
        people: People | None = None,
    ) -> None:
        self.rules = rules
        self._people = People.here() if people is None else people
        self.codes = EventCodes()
        self.targets: list[str | None] = []
        self.groups = GroupCodes(rules.group_columns)
        self.n_rows = 0
        self.n_kept = 0
        self.seen_us: tuple[int, int] | None = None
        self._log_start_us = rules.log_start_us if log_start_us is None else log_start_us
        self._as_of_us = rules.as_of_us if as_of_us is None else as_of_us
        self._times = TimeReader(rules.time)
        self._found = Findings()
        self._customer_kind: str | None = None
        self._all_midnight = True

    @property
    def whole_days(self) -> bool:
        """Whether the log holds dates without a time."""
        return bool(self._times.whole_days)

    @property
    def all_midnight(self) -> bool:
        """Whether the times of all rows kept so far are midnights."""
        return self._all_midnight

    @property
    def findings(self) -> Findings:
        """What was found so far, among it whether every time is a midnight."""
        extra = Findings()
        if self.n_kept > 1 and self._all_midnight and not self.whole_days:
            extra.add("midnight_times", self.rules.time, self.n_kept)
        return self._found + extra

    def rows(self, batch: pa.RecordBatch) -> Rows:
        """Kept rows of the next batch.

        Parameters
        ----------
        batch : pyarrow.RecordBatch
            With the columns of the rules.

        Returns
        -------
        Rows

        Raises
        ------
        LogError
            If a column is of a type that cannot be read, changes kind, holds a value too large, or an event has
            a reserved name.
        """
        rules, first = self.rules, self.n_rows
        self.n_rows += batch.num_rows
        kept = _Kept(batch.num_rows, first, self._found)
        for column, values in rules.exclude.items():
            kept.drop("excluded", column, is_in(batch.column(column), values, column))
        customer = plain(batch.column(rules.customer))
        kept.drop("missing_customer", rules.customer, is_missing(customer))
        key64, self._customer_kind, relinked = self._people.keys(customer, self._customer_kind)
        times = self._times.read(batch.column(rules.time))
        kept.drop("missing_time", rules.time, times.missing)
        event = event_names(batch.column(rules.event), rules.event)
        kept.drop("missing_event", rules.event, is_missing(event))
        self._drop_times(kept, times, self._see(times))
        events = self._codes(event, kept)
        sequence = self._sequence(batch, kept)
        ended = self._ended(batch, kept)
        self._note_times(kept, times)
        kept.note("relinked", rules.customer, relinked)
        by = None
        if rules.group_columns:
            by = self.groups.encode([batch.column(column) for column in rules.group_columns])
        value = self._value(batch, kept)
        number = np.arange(first, first + batch.num_rows, dtype=np.int64)
        rows = kept.of(Rows(bucket_major(key64), times.us, events, number, sequence, ended, by, value))
        self.n_kept += len(rows)
        self._all_midnight = self._all_midnight and not (rows.time % DAY_US).any()
        return rows

    def learned(self) -> dict[str, Any]:
        """Return what later batches are to be read with, as plain values that JSON can hold.

        Returns
        -------
        dict
        """
        return {
            "n_rows": self.n_rows, "n_kept": self.n_kept, "all_midnight": self._all_midnight,
            "customer_kind": self._customer_kind, "whole_days": self._times.whole_days,
            "events": list(self.codes.names), "groups": self.groups.to_dict(), "findings": self._found.to_dict(),
        }  # fmt: skip

    def resume(self, learned: Mapping[str, Any]) -> None:
        """Go on where another reading of the same log left off.

        Parameters
        ----------
        learned : mapping
            What `learned` gave there.

        Raises
        ------
        LogError
            If the rules now give an event a reserved name.
        """
        self.n_rows, self.n_kept = learned["n_rows"], learned["n_kept"]
        self._all_midnight, self._customer_kind = learned["all_midnight"], learned["customer_kind"]
        self._times.whole_days = learned["whole_days"]
        self.codes = EventCodes(list(learned["events"]))
        self.targets = [self._target(name) for name in self.codes.names]
        self.groups.resume(learned["groups"])
        self._found = Findings.from_dict(learned["findings"])

    def _see(self, times: Times) -> tuple[int, int] | None:
        """Note the first and the last time; return those of the batch."""
        plain = times.missing is None and times.out_of_range is None
        us = times.us if plain else times.us[times.usable()]
        if not len(us):
            return None
        ends = int(us.min()), int(us.max())
        before = self.seen_us or ends
        self.seen_us = min(before[0], ends[0]), max(before[1], ends[1])
        return ends

    def _drop_times(self, kept: _Kept, times: Times, ends: tuple[int, int] | None) -> None:
        """Leave out what lies outside the calendar or outside the log's two dates."""
        column = self.rules.time
        kept.drop("out_of_range_time", column, times.out_of_range)
        if ends is None:
            return
        if self._log_start_us is not None and ends[0] < self._log_start_us:
            kept.drop("before_log_start", column, times.us < self._log_start_us)
        if self._as_of_us is not None and ends[1] > self._as_of_us:
            kept.drop("after_as_of", column, times.us > self._as_of_us)

    def _note_times(self, kept: _Kept, times: Times) -> None:
        """Count oddities of the times of kept rows."""
        column = self.rules.time
        if times.naive:
            self._found.add("naive_times", column, kept.n)
        kept.note("sub_microsecond", column, times.sub_microsecond)

    def _codes(self, event: pa.DictionaryArray, kept: _Kept) -> NDArray[np.int32]:
        """Codes of the events, those of rows left out being 0; drops what the rules drop."""
        names = texts_of(event.dictionary, self.rules.event)
        index = numbers(event.indices) if event.indices.type == pa.int32() else indices_of(event)
        if not names:
            return np.zeros(len(index), dtype=np.int32)
        codes = self.codes.known(names)
        if codes is None:
            # Only names that rows have are given a code.
            used = np.bincount(index if kept.mask is None else index[kept.mask], minlength=len(names)) > 0
            positions = np.flatnonzero(used)
            codes = np.zeros(len(names), dtype=np.int32)
            codes[positions] = self.codes.encode([names[i] for i in positions])
        for name in self.codes.names[len(self.targets) :]:
            self.targets.append(self._target(name))
        # Mostly a file has the names in the order in which they turned up. What lies outside is not taken as it stands.
        same = index.dtype == np.int32 and bool((codes == np.arange(len(codes))).all())
        same = same and index.min(initial=0) >= 0 and index.max(initial=0) < len(codes)
        events = np.asarray(index if same else codes[index], np.int32)
        dropped = np.array([target is None for target in self.targets], dtype=bool)
        if dropped.any():
            kept.drop("unmapped_event", self.rules.event, dropped[events])
        return events

    def _target(self, name: str) -> str | None:
        """State or outcome of an event; refused where that is a name the package keeps for itself."""
        target = self.rules.target(name)
        if target in RESERVED:
            column = self.rules.event
            raise LogError(
                f"column {column!r} holds an event called {target!r}, which means something else here; "
                f'give it another in the rules: states = {{"{target}" = "{_OTHER_NAMES[target]}"}}'
            )
        return target

    def _sequence(self, batch: pa.RecordBatch, kept: _Kept) -> NDArray[np.int64] | None:
        """Sequence numbers; a missing one sorts last."""
        column = self.rules.sequence
        if column is None:
            return None
        array = decoded(batch.column(column))
        numbered = whole_numbers(array, column, "wanted whole numbers that order rows of the same time")
        missing = is_missing(array)
        kept.note("missing_sequence", column, missing)
        return numbered if missing is None else np.where(missing, _UNNUMBERED, numbered)

    def _ended(self, batch: pa.RecordBatch, kept: _Kept) -> Mask | None:
        """Read the ended_before column: true or false, or 1 and 0."""
        column = self.rules.ended_before
        if column is None:
            return None
        array = decoded(batch.column(column))
        wanted = "wanted true and false (or 1 and 0): whether the customer had ended before the log begins"
        missing = is_missing(array)
        kept.note("missing_ended_before", column, missing)
        if pa.types.is_boolean(array.type):
            return np.asarray(numbers(array, missing=False), dtype=bool)
        values = whole_numbers(array, column, wanted)
        if not np.isin(values, (0, 1)).all():
            raise LogError(f"column {column!r} holds other numbers than 0 and 1; {wanted}")
        return np.asarray(values == 1)


    def _value(self, batch: pa.RecordBatch, kept: _Kept) -> NDArray[np.int64] | None:
        """Worth of the kept rows in millionths; a missing one is 0."""
        column = self.rules.value
        if column is None:
            return None
        value, missing = millionths(decoded(batch.column(column)), column, kept.mask)
        kept.note("missing_value", column, missing)
        return value


_OTHER_NAMES = {"entry": "entered", "lapsed": "went quiet", "open": "opened", "unknown": "not known"}


class _Kept:
    """Rows of a batch not yet left out, and the counting of those that are."""

    def __init__(self, n_rows: int, first: int, findings: Findings) -> None:
        self.mask: Mask | None = None  # None: all of them
        self.n = n_rows
        self._first, self._findings = first, findings

    def _still(self, mask: Mask | None) -> Mask | None:
        """Part of the mask that is among the kept rows; None if empty."""
        if mask is None or not mask.any():
            return None
        still: Mask = mask if self.mask is None else mask & self.mask
        return still if bool(still.any()) else None

    def drop(self, code: str, column: str, mask: Mask | None) -> None:
        """Leave out the marked rows and count them."""
        still = self._still(mask)
        if still is None:
            return
        self._findings.add(code, column, np.flatnonzero(still) + self._first)
        self.mask = ~still if self.mask is None else self.mask & ~still
        self.n = int(np.count_nonzero(self.mask))

    def note(self, code: str, column: str, mask: Mask | None) -> None:
        """Count the marked rows and keep them."""
        still = self._still(mask)
        if still is not None:
            self._findings.add(code, column, np.flatnonzero(still) + self._first)

    def of(self, rows: Rows) -> Rows:
        """Kept ones among the rows of the batch."""
        return rows if self.mask is None else rows.take(self.mask)
