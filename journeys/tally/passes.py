"""One reading of a log: a thread reads ahead, workers count the customers of their buckets, the rest is joined."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor, wait
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.findings import Findings
from journeys.intake.group_checks import CAME_AFTER
from journeys.intake.groups import MOST_GROUPS, cohort_calendar
from journeys.intake.identity import bucket_major
from journeys.intake.look import Look
from journeys.intake.normalise import Normaliser
from journeys.intake.read import LogSource
from journeys.intake.rows import Rows
from journeys.intake.rules import JourneyRules
from journeys.kernels.arrays import IntArray
from journeys.kernels.bins import DAY_US, dwell_edges, elapsed_edges
from journeys.kernels.grouping import MOST_PERIODS, Grouping
from journeys.kernels.histories import recoded
from journeys.kernels.records import Reading
from journeys.tally.accumulate import Columns, Keyed
from journeys.tally.blocks import cut_between_ties
from journeys.tally.codes import StateCodes
from journeys.tally.counter import Counter, LeaveOut
from journeys.tally.groups import Group, named_groups
from journeys.tally.order import by_customer
from journeys.tally.spans import Span
from journeys.tally.spill import BUCKETS_PER_PART, N_PARTS, Spill
from journeys.tally.sums import Sums
from journeys.tally.tables import (
    CODED,
    KEYS,
    MOST_IN_SETS,
    N_BUCKETS,
    NARROW,
    history_of,
    more_of,
    sorted_by_key,
    split_key,
)
from journeys.tally.tally import Tally
from journeys.tally.touchpoints import Places, Touchpoints

T = TypeVar("T")


@dataclass(frozen=True)
class _Block:
    """Rows with their order by customer and the codes of their events."""

    rows: Rows
    order: IntArray
    code_of_event: NDArray[np.int32]
    n_states: int
    touch_of_code: NDArray[np.int8] | None


class _Worker:
    """Counts the customers of some neighbouring buckets."""

    def __init__(
        self, parts: range, reading: Reading, leave_out: LeaveOut, span: Span, rules: JourneyRules, *, compiled: bool
    ) -> None:
        self.parts, self._compiled = parts, compiled
        self.findings = Findings()
        self._reading, self._leave_out = reading, leave_out
        buckets = range(parts.start * BUCKETS_PER_PART, parts.stop * BUCKETS_PER_PART)
        # Merged visits may last longer than the silence, and without one there is no longest stay at all.
        longest = None if rules.repeats == "merge" else rules.silence_us
        edges = (
            dwell_edges(rules.silence_us, span.whole_days),
            elapsed_edges(rules.silence_us, span.whole_days, rules.horizons_us),
        )
        self.sums = Sums(reading, edges, longest, buckets)
        self._counter = self._new_counter()

    def add(self, block: _Block, part: slice) -> None:
        """Count one part of a block in order."""
        self._counter.add(
            block.rows, block.order[part], block.code_of_event, block.n_states, block.touch_of_code
        )

    def close(self, code: IntArray, places: Places) -> dict[str, Columns]:
        """Close the log and return the tables, codes replaced by `code`."""
        self._counter.close()
        return self._tables(code, places)

    def add_parts(
        self,
        spill: Spill,
        known: tuple[NDArray[np.int32], int, NDArray[np.int8] | None],
        code: IntArray,
        places: Places,
    ) -> dict[str, Columns]:
        """Count the parts of a spilled log that are this worker's, one after another, and return the tables."""
        for rows in spill.parts(self.parts.start, self.parts.stop):
            counter = self._new_counter()
            counter.add(rows, by_customer(rows.key), *known)
            counter.close()
        return self._tables(code, places)

    def _tables(self, code: IntArray, places: Places) -> dict[str, Columns]:
        order = self._reading.order
        return {name: _labelled(name, self.sums.result(name), code, places, order) for name in KEYS}

    def _new_counter(self) -> Counter:
        return Counter(self._reading, self._leave_out, self.sums, self.findings, compiled=self._compiled)


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
    """

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
    ) -> None:
        self._order = order
        self._log, self._rules, self._look, self._span, self._progress = log, rules, look, span, progress
        named = (*rules.stages, *rules.opens, *rules.named_touchpoints)
        self._codes = StateCodes(rules.outcomes, tuple(dict.fromkeys(named)))
        self._touchpoints = Touchpoints(rules)
        cohort_starts, self._cohorts = _cohorts(rules, span)
        reading = Reading(
            n_outcomes=len(rules.outcomes), n_converted=len(rules.converted), silence_us=rules.silence_us,
            same_outcome_us=rules.same_outcome_us, merge_repeats=rules.repeats == "merge",
            log_start_us=span.log_start_us, as_of_us=span.as_of_us, complete_history=rules.complete_history,
            grouping=_grouping(rules, span, cohort_starts), stages=_codes_of(rules.stages, self._codes),
            touches=bool(rules.touchpoints), values=rules.value is not None, order=order,
        )  # fmt: skip
        self._normaliser = Normaliser(rules, log_start_us=span.log_start_us, as_of_us=span.as_of_us)
        leave_out = LeaveOut(
            rules.time, rules.event, rules.duplicates == "drop", rules.after_outcome == "stop",
            _codes_of(rules.opens, self._codes), rules.value,
        )
        cuts = [part * N_PARTS // n_workers for part in range(n_workers + 1)]
        self._workers = [
            _Worker(range(first, last), reading, leave_out, span, rules, compiled=compiled)
            for first, last in zip(cuts, cuts[1:], strict=False)
        ]

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

    def _rows(self) -> Iterator[Rows]:
        from tqdm import tqdm

        with tqdm(total=self._look.n_rows, unit=" rows", unit_scale=True, disable=not self._progress) as bar:
            for batch in self._log.batches(self._rules.columns):
                bar.update(batch.num_rows)
                yield self._normaliser.rows(batch)

    def _ordered(self) -> Iterator[_Block]:
        for rows in cut_between_ties(self._rows()):
            code_of_event = self._codes.of_events(self._normaliser.targets)
            touch_of_code = self._touchpoints.of_codes(self._codes)
            yield _Block(rows, by_customer(rows.key), code_of_event, len(self._codes.states), touch_of_code)

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
        tables = {name: _side_by_side([part.pop(name) for part in parts]) for name in KEYS}
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


def _cohorts(rules: JourneyRules, span: Span) -> tuple[IntArray | None, tuple[str, ...]]:
    """Return starts and names of the cohorts; dates are the same days everywhere."""
    if rules.cohort is None:
        return None, ()
    timezone = "UTC" if span.whole_days else rules.timezone
    return cohort_calendar(rules.cohort, timezone, span.log_start_us, span.as_of_us)


def _grouping(rules: JourneyRules, span: Span, cohort_starts: IntArray | None) -> Grouping | None:
    if not rules.by:
        return None
    splits = np.array(rules.splits_us, np.int64)
    if len(splits) >= MOST_PERIODS:
        msg = f"split_at: got {len(splits):,} cuts; wanted fewer than {MOST_PERIODS:,}"
        raise LogError(msg)
    if span.whole_days and (splits % DAY_US).any():
        msg = f"split_at: got {rules.split_at}, but the log holds dates; wanted cuts at whole days"
        raise LogError(msg)
    outside = (splits <= span.log_start_us) | (splits > span.as_of_us)
    if outside.any():
        msg = f"split_at: {rules.split_at[int(np.argmax(outside))]} does not lie inside the log; wanted cuts within it"
        raise LogError(msg)
    return Grouping(
        CAME_AFTER in rules.by, cohort_starts, splits, rules.silence_us or 0, DAY_US if span.whole_days else 1
    )


def _codes_of(states: tuple[str, ...], codes: StateCodes) -> NDArray[np.int32] | None:
    return np.array([codes.code(name) for name in states], np.int32) if states else None


def _labelled(name: str, keyed: Keyed, code: IntArray, places: Places, order: int) -> Columns:
    """Take the keys of a table apart, codes replaced by the positions of their names among the labels."""
    table = split_key(name, *keyed)
    if "group" in keyed.more:
        # Still packed numbers, which need more room than places among the groups.
        table["group"] = keyed.more["group"]
    if name in ("touches", "touch_sets"):
        # Their outcomes need no new codes: those of the outcomes are fixed.
        return places.placed(name, table)
    if (code[1:] > code[:-1]).all():
        return table
    for column in CODED:
        if column in table:
            table[column] = code[table[column]].astype(NARROW[column])
    if (histories := history_of(name, order)) is not None:
        column, n_slots = histories
        table[column] = recoded(table[column], code, n_slots)
    return sorted_by_key(name, table)


def _side_by_side(parts: list[Columns]) -> Columns:
    """Join tables of neighbouring buckets, letting go of each column as soon as it is copied."""
    return {column: np.concatenate([part.pop(column) for part in parts]) for column in list(parts[0])}


def ahead(items: Iterator[T]) -> Iterator[T]:
    """Give the items of an iterator, a thread making the next while this one is used."""
    end = object()
    with ThreadPoolExecutor(1) as pool:
        job = pool.submit(next, items, end)
        while (item := job.result()) is not end:
            job = pool.submit(next, items, end)
            yield item  # type: ignore[misc]
