"""One reading of a log: a thread reads ahead, workers count the customers of their buckets, the rest is joined."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor, wait
from typing import Any, TypeVar

import numpy as np
import pyarrow as pa

from journeys.errors import LogError
from journeys.intake.groups import MOST_GROUPS
from journeys.intake.identity import bucket_major
from journeys.intake.look import Look
from journeys.intake.normalise import Normaliser
from journeys.intake.people import People
from journeys.intake.read import LogSource
from journeys.intake.rows import Rows
from journeys.intake.rules import JourneyRules
from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import dwell_edges, elapsed_edges
from journeys.kernels.records import Reading
from journeys.tally.accumulate import Columns
from journeys.tally.blocks import cut_between_ties
from journeys.tally.codes import StateCodes
from journeys.tally.counter import LeaveOut
from journeys.tally.groups import Group, named_groups
from journeys.tally.order import by_customer
from journeys.tally.rule_numbers import codes_of, cohorts_of, grouping_of, ungrouped
from journeys.tally.spans import Span
from journeys.tally.spill import BUCKETS_PER_PART, N_PARTS, Spill
from journeys.tally.tables import (
    KEYS,
    MOST_IN_SETS,
    N_BUCKETS,
    NARROW,
    more_of,
    sorted_by_key,
)
from journeys.tally.tally import Tally
from journeys.tally.touchpoints import Places, Touchpoints
from journeys.tally.weeks import Watch
from journeys.tally.worker import Block, Worker

T = TypeVar("T")


class Pass:
    """One reading of a log.

    Parameters
    ----------
    log : LogSource
        The log.
    rules : JourneyRules
        What a journey is.
    look : Look
        What a first look at the times told.
    span : Span
        From when to when the log is read.
    order : int
        How many states back moves are told apart by.
    n_workers : int
        Threads that count.
    compiled : bool
        Count in compiled loops.
    progress : bool
        Show a progress bar.
    people : People, optional
        How customer ids become keys.
    """

    goes_on = False
    watch: Watch | None = None

    def __init__(
        self,
        log: LogSource,
        rules: JourneyRules,
        look: Look,
        span: Span,
        *,
        order: int,
        n_workers: int,
        compiled: bool,
        progress: bool,
        people: People | None = None,
    ) -> None:
        self._order = order
        self._log, self._rules, self._look, self._span, self._progress = log, rules, look, span, progress
        named = (*rules.stages, *rules.opens, *rules.named_touchpoints)
        self._codes = StateCodes(rules.outcomes, tuple(dict.fromkeys(named)))
        self._touchpoints = Touchpoints(rules)
        cohort_starts, self._cohorts = cohorts_of(rules, span)
        grouping = grouping_of(rules, span, cohort_starts, goes_on=self.goes_on)
        # A watch over the weeks asks when things began, which only what is grouped says.
        told_apart = grouping if self.watch is None else grouping or ungrouped(rules, span)
        reading = Reading(
            n_outcomes=len(rules.outcomes), n_converted=len(rules.converted), silence_us=rules.silence_us,
            same_outcome_us=rules.same_outcome_us, merge_repeats=rules.repeats == "merge",
            log_start_us=span.log_start_us, as_of_us=span.as_of_us, complete_history=rules.complete_history,
            grouping=told_apart, stages=codes_of(rules.stages, self._codes),
            touches=bool(rules.touchpoints), values=rules.value is not None, order=order,
        )  # fmt: skip
        self._normaliser = Normaliser(
            rules, log_start_us=span.log_start_us, as_of_us=span.as_of_us, people=people
        )
        leave_out = LeaveOut(
            rules.time, rules.event, rules.duplicates == "drop", rules.after_outcome == "stop",
            codes_of(rules.opens, self._codes), rules.value,
        )
        edges = (
            dwell_edges(rules.silence_us, span.whole_days),
            elapsed_edges(rules.silence_us, span.whole_days, rules.horizons_us),
        )
        # Merged visits may last longer than the silence, and without one there is no longest stay at all.
        longest = None if rules.repeats == "merge" else rules.silence_us
        # A customer whose story ended before the log is known to the other road only.
        compiled = compiled and rules.ended_before is None
        cuts = [part * N_PARTS // n_workers for part in range(n_workers + 1)]
        self._workers = [
            Worker(
                range(first, last), reading, leave_out, edges, longest,
                grouped=grouping, goes_on=self.goes_on, watch=self.watch, compiled=compiled,
            )  # fmt: skip
            for first, last in zip(cuts, cuts[1:], strict=False)
        ]

    @property
    def normaliser(self) -> Normaliser:
        """What has turned the batches into rows, and counted them."""
        return self._normaliser

    def in_order(self) -> Tally:
        """Count while rows stream by; raises OutOfOrderError where a customer's rows come out of order."""
        firsts = bucket_major(np.array([worker.parts.start * BUCKETS_PER_PART for worker in self._workers], np.uint64))
        with ThreadPoolExecutor(len(self._workers)) as pool:
            for block in ahead(self._ordered()):
                cut = np.searchsorted(block.rows.key, firsts, sorter=block.order).tolist()
                parts = [slice(a, b) for a, b in zip(cut, [*cut[1:], len(block.order)], strict=True)]
                jobs = [pool.submit(w.add, block, part) for w, part in zip(self._workers, parts, strict=True)]
                wait(jobs)
                for job in jobs:
                    job.result()
            # The log is read: its room is for the tables now.
            pa.default_memory_pool().release_unused()
            final = self._final()
            tables = [job.result() for job in [pool.submit(worker.close, *final) for worker in self._workers]]
        return self._tally(tables)

    def sorted_by_customer(self) -> Tally:
        """Count after sorting the rows by customer in temporary files."""
        with Spill() as spill, ThreadPoolExecutor(len(self._workers)) as pool:
            for rows in ahead(self._rows()):
                spill.add(rows)
            code_of_event = self._codes.of_events(self._normaliser.targets)
            n_states = len(self._codes.states)
            known = (code_of_event, n_states, self._touchpoints.of_codes(self._codes))
            final = self._final()
            jobs = [pool.submit(worker.add_parts, spill, known, *final) for worker in self._workers]
            tables = [job.result() for job in jobs]
        return self._tally(tables)

    def _rows(self, log: LogSource | None = None) -> Iterator[Rows]:
        source = self._log if log is None else log
        batches = source.batches(self._rules.columns)
        for batch in _with_bar(batches, self._look.n_rows) if self._progress else batches:
            yield self._normaliser.rows(batch)

    def _ordered(self) -> Iterator[Block]:
        for rows in cut_between_ties(self._rows()):
            code_of_event = self._codes.of_events(self._normaliser.targets)
            touch_of_code = self._touchpoints.of_codes(self._codes)
            yield Block(rows, by_customer(rows.key), code_of_event, len(self._codes.states), touch_of_code)

    def _final(self) -> tuple[IntArray, Places]:
        """Return where codes and touchpoints stand in the end."""
        code = self._label_positions()
        return code, self._touchpoints.places(self._codes, code)

    def _label_positions(self) -> IntArray:
        """Return where each code's name stands among the labels of the tally, its states in alphabetical order."""
        fixed = len(self._codes.names) - len(self._codes.states)
        place = {name: fixed + i for i, name in enumerate(self._codes.seen)}
        # A named state that never turned up stands in no table.
        return np.array([*range(fixed), *(place.get(name, 0) for name in self._codes.states)])

    def _tally(self, parts: list[dict[str, Columns]]) -> Tally:
        self._look.check(self._normaliser.seen_us, self._rules.time)
        findings = sum((worker.findings for worker in self._workers), self._normaliser.findings)
        findings.add("later_than_now", self._rules.time, self._look.n_later_than_now)
        with ThreadPoolExecutor(len(self._workers)) as pool:
            # In threads, which also get the memory that the workers have let go of.
            joined = pool.map(lambda name: _side_by_side([part.pop(name) for part in parts]), KEYS)
            tables = dict(zip(KEYS, joined, strict=True))
        if len(self._touchpoints.names) > MOST_IN_SETS:
            tables["touch_sets"] = {column: values[:0] for column, values in tables["touch_sets"].items()}
        groups = self._name_groups(tables)
        customers = {"bucket": np.arange(N_BUCKETS)}
        for name in self._workers[0].sums.customers:
            # Each bucket is one worker's, so the others hold zeros.
            customers[name] = np.sum([worker.sums.customers[name] for worker in self._workers], axis=0)
        keyed: dict[str, Any] = tables
        return Tally(
            rules=self._rules, states=tuple(self._codes.seen), groups=groups, log_start_us=self._span.log_start_us,
            as_of_us=self._span.as_of_us, whole_days=self._span.whole_days, n_rows=self._normaliser.n_rows,
            customers=customers, record=findings, order=self._order, **keyed,
        )  # fmt: skip

    def _name_groups(self, tables: dict[str, Columns]) -> tuple[Group, ...]:
        """Return the groups in the order of their values, and put their places into the tables, sorted anew."""
        if not self._rules.by:
            # Buckets come first in the order of the other tables, which is that of the workers.
            further = [name for name in KEYS if more_of(name, grouped=False, order=self._order)]
            tables |= {name: sorted_by_key(name, tables[name]) for name in further}
            return ()
        packed = np.unique(np.concatenate([table["group"] for table in tables.values()]))
        combinations = self._normaliser.groups.combinations
        groups, place = named_groups(packed, self._rules, combinations, self._cohorts)
        if len(groups) > MOST_GROUPS:
            msg = (
                f"by: {len(groups):,} groups of journeys; wanted {MOST_GROUPS:,} at most: leave out a column, take "
                "longer cohorts, or count parts of the log apart"
            )
            raise LogError(msg)
        for name, table in tables.items():
            table["group"] = place[np.searchsorted(packed, table["group"])].astype(NARROW["group"])
            tables[name] = sorted_by_key(name, table)
        return groups


def _side_by_side(parts: list[Columns]) -> Columns:
    """Join tables of neighbouring buckets, letting go of each column as soon as it is copied."""
    return {column: np.concatenate([part.pop(column) for part in parts]) for column in list(parts[0])}


def _with_bar(batches: Iterator[pa.RecordBatch], n_rows: int) -> Iterator[pa.RecordBatch]:
    """Give batches on, showing how many of the rows have come."""
    from tqdm import tqdm

    with tqdm(total=n_rows, unit=" rows", unit_scale=True) as bar:
        for batch in batches:
            bar.update(batch.num_rows)
            yield batch


def ahead(items: Iterator[T]) -> Iterator[T]:
    """Give the items of an iterator, a thread making the next while this one is used."""
    end = object()
    with ThreadPoolExecutor(1) as pool:
        job = pool.submit(next, items, end)
        while (item := job.result()) is not end:
            job = pool.submit(next, items, end)
            yield item  # type: ignore[misc]
