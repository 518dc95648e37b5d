"""The one streamed pass over a log: source in, tally out."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from journeys.errors import LogError
from journeys.intake.findings import Findings
from journeys.intake.look import Look, first_look
from journeys.intake.normalise import Normaliser
from journeys.intake.read import LogSource, open_log
from journeys.intake.rows import Rows
from journeys.intake.rules import JourneyRules
from journeys.kernels.bins import DAY_US, dwell_edges, elapsed_edges
from journeys.kernels.records import FIRST_OUTCOME, Reading
from journeys.tally.blocks import cut_between_ties
from journeys.tally.counter import Counter, OutOfOrderError, StateCodes, Sums
from journeys.tally.keys import MOST_BINS
from journeys.tally.spill import Spill
from journeys.tally.tally import N_BUCKETS, Tally, join_key, split_key


def count_log(source: Any, rules: JourneyRules, *, progress: bool = False) -> Tally:
    """Return the tally of an event log, in one streamed pass.

    Parameters
    ----------
    source : path, list of paths, DataFrame, Arrow table or reader, iterator of record batches
        The log: Parquet, CSV or Arrow IPC files, folders of them, pandas frames, anything with
        ``__arrow_c_stream__``. Only the columns that the rules name are read.
    rules : JourneyRules
        What a journey is.
    progress : bool
        Show a progress bar on stderr.

    Returns
    -------
    Tally
        Counts and sums; the log itself is not kept.

    Raises
    ------
    LogError
        If columns are missing, times cannot be read, nothing is left to count, or a few rows lie far
        outside the rest (a wrong clock).
    RulesError
        If the rules do not fit the log.

    Notes
    -----
    Memory grows with the customers, not with the rows. Rows of a customer may come in any order: where they
    are out of time order the log is spilled by customer to temporary files, and the answer is the same.

    Examples
    --------
    >>> import pandas as pd
    >>> from journeys.intake.rules import JourneyRules
    >>> log = pd.DataFrame({
    ...     "member": [1, 1, 2], "event": ["visit", "joined", "visit"],
    ...     "happened": pd.to_datetime(["2025-01-01", "2025-01-02", "2025-03-01"], utc=True),
    ... })
    >>> rules = JourneyRules(customer="member", time="happened", event="event", converted=["joined"],
    ...                      silence="30d", complete_history=True)
    >>> count_log(log, rules).n_journeys
    2
    """
    log = open_log(source, rules.columns, text=(rules.event,))
    if log.one_shot:
        with log.spooled() as kept:
            return _count(kept, rules, progress)
    return _count(log, rules, progress)


def _count(log: LogSource, rules: JourneyRules, progress: bool) -> Tally:
    look = first_look(log, rules)
    log_start = look.first_us if rules.log_start_us is None else rules.log_start_us
    as_of = look.last_us if rules.as_of_us is None else rules.as_of_us
    if log_start > as_of:
        msg = (
            f"log_start ({np.datetime64(log_start, 'us')}) is after as_of ({np.datetime64(as_of, 'us')}); "
            "set log_start and as_of to the span of the log"
        )
        raise LogError(msg)
    if look.whole_days and (as_of - log_start) // DAY_US >= MOST_BINS:
        msg = f"the log spans more than {MOST_BINS:,} days; set log_start and as_of to the span of the log"
        raise LogError(msg)
    pass_ = _Pass(log, rules, look, log_start, as_of, progress)
    try:
        return pass_.in_order()
    except OutOfOrderError:
        return _Pass(log, rules, look, log_start, as_of, progress).sorted_by_customer()


class _Pass:
    """One reading of the log."""

    def __init__(
        self,
        log: LogSource,
        rules: JourneyRules,
        look: Look,
        log_start_us: int,
        as_of_us: int,
        progress: bool,
    ) -> None:
        self._log, self._rules, self._look, self._progress = log, rules, look, progress
        self._reading = Reading(
            n_outcomes=len(rules.outcomes),
            n_converted=len(rules.converted),
            silence_us=rules.silence_us,
            same_outcome_us=rules.same_outcome_us,
            merge_repeats=rules.repeats == "merge",
            log_start_us=log_start_us,
            as_of_us=as_of_us,
            complete_history=rules.complete_history,
        )
        self._findings = Findings()
        self._normaliser = Normaliser(rules, log_start_us=log_start_us, as_of_us=as_of_us)
        self._codes = StateCodes(rules.outcomes)
        self._sums = Sums(
            dwell_edges(rules.silence_us, look.whole_days),
            elapsed_edges(rules.silence_us, look.whole_days, rules.horizons_us),
        )

    def in_order(self) -> Tally:
        """Count while rows stream by; raises OutOfOrderError where that is not possible."""
        counter = self._counter()
        for rows in cut_between_ties(self._blocks()):
            counter.add(rows, self._normaliser.targets)
        counter.close()
        return self._tally()

    def sorted_by_customer(self) -> Tally:
        """Count after sorting the rows by customer in temporary files."""
        with Spill() as spill:
            for rows in self._blocks():
                spill.add(rows)
            for rows in spill.parts():
                counter = self._counter()
                counter.add(rows, self._normaliser.targets)
                counter.close()
        return self._tally()

    def _counter(self) -> Counter:
        return Counter(
            self._reading,
            self._codes,
            self._sums,
            self._findings,
            columns=(self._rules.time, self._rules.event),
            drop_duplicates=self._rules.duplicates == "drop",
            stop_at_outcome=self._rules.after_outcome == "stop",
        )

    def _blocks(self) -> Iterator[Rows]:
        from tqdm import tqdm

        with tqdm(total=self._look.n_rows, unit=" rows", unit_scale=True, disable=not self._progress) as bar:
            for batch in self._log.batches(self._rules.columns):
                yield self._normaliser.rows(batch)
                bar.update(batch.num_rows)

    def _tally(self) -> Tally:
        rules, look = self._rules, self._look
        findings = self._normaliser.findings + self._findings
        findings.add("later_than_now", rules.time, look.n_later_than_now)
        first_state = FIRST_OUTCOME + len(rules.outcomes)
        states = self._codes.names[first_state:]
        seen = sorted(states)
        code = np.arange(first_state + len(states))
        place = {name: first_state + i for i, name in enumerate(seen)}
        code[first_state:] = [place[name] for name in states]
        tables = {}
        for name, growing in self._sums.tables.items():
            table = split_key(name, *growing.result())
            for column in ("state", "next", "outcome"):
                if column in table:
                    table[column] = code[table[column]]
            key = join_key(name, table)
            order = np.argsort(key, kind="stable")
            tables[name] = {column: values[order] for column, values in table.items()}
        return Tally(
            rules,
            tuple(seen),
            self._reading.log_start_us,
            self._reading.as_of_us,
            look.whole_days,
            self._normaliser.n_rows,
            tables["moves"],
            tables["entries"],
            tables["journeys"],
            {"bucket": np.arange(N_BUCKETS), **self._sums.customers},
            findings,
        )
