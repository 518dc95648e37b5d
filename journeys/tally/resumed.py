"""A reading of a log that goes on where an earlier one left off: what was carried is loaded, what is new is added."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from itertools import chain
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.checks import MAX_TIME_US
from journeys.intake.findings import Findings
from journeys.intake.identity import bucket_of_major, from_bucket_major
from journeys.intake.look import Look
from journeys.intake.normalise import Normaliser
from journeys.intake.people import People
from journeys.intake.read import LogSource
from journeys.intake.rows import Rows, concat_rows
from journeys.intake.rules import JourneyRules
from journeys.kernels.arrays import BoolArray
from journeys.tally.accumulate import Columns, Keyed
from journeys.tally.groups import Group, named_groups
from journeys.tally.keys import unpack
from journeys.tally.passes import Pass, ahead
from journeys.tally.spans import Span
from journeys.tally.spill import N_PARTS, Spill
from journeys.tally.tables import N_BUCKETS
from journeys.tally.tally import Tally
from journeys.tally.weeks import NAME as WEEKS
from journeys.tally.weeks import Watch, joined, kept_weeks
from journeys.tally.worker import Kept

Load = Callable[[int], Kept | None]
Keep = Callable[[int, Kept], None]
_MOST_WORKERS = 8
WEEK_COLUMNS = ("bucket", "state", "next", "flag", "week", "group", "n")


class ResumedPass(Pass):
    """One reading of what has come in since the reading before, and the tally of all there has been.

    The customers are dealt out into `N_PARTS` parts by their keys, each counted by itself, so that only one part for
    each worker is in memory at a time.

    Parameters
    ----------
    log : LogSource
        What is new.
    rules : JourneyRules
        What a journey is.
    span : Span
        Start of the whole log, and up to when it is now read.
    learned : mapping or None
        What the reading before gave as `learned`; None: this is the first.
    compiled : bool
        Count in compiled loops.
    people : People, optional
        How customer ids become keys; default: by the key of the environment.
    watch : Watch, optional
        Count by week too.

    Attributes
    ----------
    weeks : Keyed or None
        Once counted: what happened by week, codes as the count has them.
    events_by_week : dict of str to dict of int to int
        How often each event came in each week, of the rows dealt out to be counted.
    buckets_by_week : dict of str to dict of int to int
        In which buckets of customers, a bit for each.
    """

    goes_on = True

    def __init__(
        self,
        log: LogSource,
        rules: JourneyRules,
        span: Span,
        learned: Mapping[str, Any] | None,
        *,
        compiled: bool,
        people: People | None = None,
        watch: Watch | None = None,
    ) -> None:
        self.watch, self._people = watch, People.here() if people is None else people
        self.weeks: Keyed | None = None
        self.events_by_week: dict[str, dict[int, int]] = {}
        self.buckets_by_week: dict[str, dict[int, int]] = {}
        look = Look(span.log_start_us, span.as_of_us, log.n_rows or 0, span.whole_days, 0)
        super().__init__(
            log, rules, look, span, order=1, n_workers=N_PARTS, compiled=compiled, progress=False,
            people=self._people,
        )
        # What is later than as_of waits for a later reading, so the normaliser is not to leave it out.
        self._normaliser = Normaliser(
            rules, log_start_us=span.log_start_us, as_of_us=MAX_TIME_US, people=self._people
        )
        self._counted_events = np.zeros(0, bool)
        if learned is not None:
            self._resume(learned)
        self._n_rows_before = self._normaliser.n_rows
        self._n_unreadable_before = self._normaliser.findings.n_unreadable
        self._late = Findings()
        self._found: list[Findings] = []
        self._waiting = np.zeros(0, np.int64)
        # What was known before the rows that are to be read anew.
        self._settled: tuple[dict[str, Any], Findings] | None = None

    def _resume(self, learned: Mapping[str, Any]) -> None:
        self._normaliser.resume(learned["rows"])
        self._counted_events = np.isin(self._normaliser.codes.names, learned["counted_events"])
        self._codes.resume(learned["states"], learned["seen"])
        self._touchpoints.names = list(learned["touchpoints"])

    def learned(self) -> dict[str, Any]:
        """Return the lists of names that codes point into, and the findings, as plain values that JSON can hold.

        What closing the log finds is not among the findings: the next reading closes it anew.
        """
        rows, late = self._settled or (self._normaliser.learned(), self._late)
        found = sum(self._found, Findings.from_dict(rows["findings"]) + late)
        names = rows["events"]
        return {
            "rows": rows | {"findings": found.to_dict()},
            "counted_events": [name for name, is_in in zip(names, self._all_counted(), strict=False) if is_in],
            "states": self._codes.states,
            "seen": self._codes.seen,
            "touchpoints": list(self._touchpoints.names),
        }

    @property
    def n_rows(self) -> int:
        """Rows read, here and before."""
        return self._normaliser.n_rows

    @property
    def n_new_rows(self) -> int:
        """Rows read here."""
        return self._normaliser.n_rows - self._n_rows_before

    @property
    def n_too_late(self) -> int:
        """Rows read here that came too late."""
        return self._late.n("too_late")

    @property
    def n_unreadable(self) -> int:
        """Rows read here without a readable customer, time or event."""
        return self._normaliser.findings.n_unreadable - self._n_unreadable_before

    @property
    def n_waiting(self) -> int:
        """Rows that wait, here or where they are read anew."""
        return len(self._waiting)

    def deal(
        self,
        spill: Spill,
        held: Rows | None,
        *,
        late_before_us: int | None,
        until_us: int,
        now_us: int,
        again: LogSource | None = None,
    ) -> Rows | None:
        """Deal out the rows that are to be counted, and return those that are to wait.

        Parameters
        ----------
        spill : Spill
            Where they go.
        held : Rows or None
            Rows that have waited, earlier in the log than all new ones.
        late_before_us : int or None
            New rows earlier than this come too late: left out and counted.
        until_us : int
            Rows up to this moment are counted, later ones wait.
        now_us : int
            Later rows lie in the future, which is a finding.
        again : LogSource, optional
            Rows that the next reading reads anew: they are in the tally as rows that wait, but not among what was
            learned, and are not returned.
        """
        waiting: list[Rows] = []
        new = (self._in_time(rows, late_before_us, now_us) for rows in ahead(self._rows()))
        for rows in chain([] if held is None else [held], new):
            ready = rows.time <= until_us
            counted = rows.take(ready)
            # Names of rows that wait are no states yet.
            self._all_counted()[np.unique(counted.event)] = True
            spill.add(counted)
            self._note_weeks(counted)
            if not ready.all():
                waiting.append(rows.take(~ready))
        rest = concat_rows(waiting) if waiting else None
        self._waiting = np.zeros(0, np.int64) if rest is None else rest.row
        if again is not None:
            self._settled = (self._normaliser.learned(), self._late + Findings())
            young = [self._in_time(rows, None, now_us) for rows in ahead(self._rows(again))]
            self._waiting = np.concatenate([self._waiting, *(rows.row for rows in young)])
        return rest

    def _note_weeks(self, rows: Rows) -> None:
        """Count events by week."""
        if self.watch is None or not len(rows):
            return
        week, n_weeks = self.watch.week_of(rows.time), len(self.watch.starts)
        place, bucket = rows.event.astype(np.int64) * n_weeks + week, bucket_of_major(rows.key)
        triples, n = np.unique(place * N_BUCKETS + bucket, return_counts=True)
        places, first = np.unique(triples // N_BUCKETS, return_index=True)
        for at, begin, end in zip(places.tolist(), first, [*first[1:], len(n)], strict=True):
            name, mine = self._normaliser.codes.names[at // n_weeks], at % n_weeks
            seen = np.zeros(N_BUCKETS, bool)
            seen[triples[begin:end] % N_BUCKETS] = True
            bits = int.from_bytes(np.packbits(seen, bitorder="little").tobytes(), "little")
            times, buckets = (of.setdefault(name, {}) for of in (self.events_by_week, self.buckets_by_week))
            times[mine] = times.get(mine, 0) + int(n[begin:end].sum())
            buckets[mine] = buckets.get(mine, 0) | bits

    def _in_time(self, rows: Rows, late_before_us: int | None, now_us: int) -> Rows:
        self._late.add("later_than_now", self._rules.time, rows.row[rows.time > now_us])
        if late_before_us is None:
            return rows
        late = rows.time < late_before_us
        self._late.add("too_late", self._rules.time, rows.row[late])
        return rows.take(~late) if late.any() else rows

    def count(self, spill: Spill, load: Load, keep: Keep) -> Tally:
        """Count the rows dealt out on top of what was kept, and return the tally of all there has been.

        Parameters
        ----------
        spill : Spill
            The rows.
        load : callable
            From the number of a part to what was kept of it, None where nothing was. Its records are changed. Called
            from several threads, as is the next.
        keep : callable
            Gets the number of a part that changed and what is to be kept of it, before the log is closed.
        """
        targets = [
            name if is_in else None
            for name, is_in in zip(self._normaliser.targets, self._all_counted(), strict=True)
        ]
        code_of_event = self._codes.of_events(targets)
        known = (code_of_event, len(self._codes.states), self._touchpoints.of_codes(self._codes))
        final = self._final()
        changed = spill.numbers
        nothing = self._workers[0].close(*final)

        weeks: list[Keyed] = []
        old: list[NDArray[np.uint64]] = []

        def count(number: int) -> tuple[Findings, dict[str, Columns]]:
            worker, kept = self._workers[number], load(number)
            if kept is None and number not in changed:
                return Findings(), {name: dict(table) for name, table in nothing.items()}
            worker.resume(self._fitted(kept), known[1])
            for rows in spill.parts(number, number + 1):
                worker.add_rows(rows, known)
            if number in changed:
                keep(number, worker.kept())
            old.append(self._own_old_ids(worker.customers))
            found, tables = worker.findings + Findings(), worker.close(*final)
            if self.watch is not None:
                weeks.append(worker.sums.result(WEEKS))
            return found, tables

        with ThreadPoolExecutor(min(os.cpu_count() or 1, _MOST_WORKERS)) as pool:
            done = list(pool.map(count, range(N_PARTS)))
        self._found = [found for found, _ in done]
        self.weeks = joined(weeks) if weeks else None
        tally = self._tally([tables for _, tables in done])
        waiting = Findings()
        waiting.add("after_as_of", self._rules.time, self._waiting)
        if self._people.links is not None:
            waiting = waiting + self._people.links.late(self._span.as_of_us, np.concatenate(old))
        return replace(tally, record=tally.record + self._late + waiting, id_key=self._people.fingerprint)

    def _own_old_ids(self, customers: NDArray[np.uint64]) -> NDArray[np.uint64]:
        """Return the old ids that were counted as people of their own, before it was known whose they are."""
        if self._people.links is None:
            return np.zeros(0, np.uint64)
        keys = from_bucket_major(customers)
        return keys[np.isin(keys, self._people.links.old)]

    def _fitted(self, kept: Kept | None) -> Kept | None:
        """Return what was kept of a part as this pass needs it: with or without groups and weeks."""
        if kept is None:
            return None
        tables = {name: table for name, table in kept.tables.items() if name != WEEKS or self.watch is not None}
        if self.watch is not None and WEEKS in tables:
            tables[WEEKS] = kept_weeks(tables[WEEKS], self.watch.first_kept)
        grouped = bool(self._rules.by) or self.watch is not None
        group = kept.carried.group
        if grouped and group is None:
            group = np.zeros(len(kept.carried.key), np.int64)
        return Kept(replace(kept.carried, group=group if grouped else None), tables)

    def named_weeks(self) -> tuple[dict[str, NDArray[Any]], list[str], tuple[Group, ...]]:
        """Return the table by week, the names that its codes stand for, and the groups that its group numbers do.

        Its columns are bucket, state, next, flag, week, group and n.
        """
        if self.weeks is None:
            return {name: np.zeros(0, np.int64) for name in WEEK_COLUMNS}, [], ()
        bucket, state, next_code, _, flag = (part() for part in unpack(self.weeks.key))
        packed, group = np.unique(self.weeks.more["group"], return_inverse=True)
        groups: tuple[Group, ...] = ((),)
        if self._rules.by:
            combinations = self._normaliser.groups.combinations
            groups, place = named_groups(packed, self._rules, combinations, self._cohorts)
            group = place[group]
        columns = (bucket, state, next_code, flag, self.weeks.more["week"], group, self.weeks.sums["n"])
        return dict(zip(WEEK_COLUMNS, columns, strict=True)), self._codes.names, groups

    def _all_counted(self) -> BoolArray:
        """Tell of each event known by now whether a row of it was ever counted."""
        n = len(self._normaliser.targets) - len(self._counted_events)
        self._counted_events = np.pad(self._counted_events, (0, n))
        return self._counted_events
