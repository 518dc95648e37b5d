"""A slow, obvious second reading of the rules: one customer at a time, one event at a time, plain Python.

Nothing here is shared with the package. Times are whole microseconds. A reader can hold each step against
the rules it is named for; the tests hold the package against the outcome.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from types import SimpleNamespace
from typing import Any

HOUR_US = 3_600_000_000
DAY_US = 24 * HOUR_US

# The arguments of `read_log` under their own names.
Rules = SimpleNamespace
# (customer, time, event, sequence, ended before the log, further columns), in input order; the value of an event is
# the further column that the rules name for it.
LogRow = tuple[Any, Any, Any, Any, Any, dict[str, Any]]


@dataclass
class SlowTally:
    """The tables of counts and exact sums, keyed by plain tuples; where journeys are grouped, the group comes last."""

    moves: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    contexts: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    entries: dict[tuple[Any, ...], int] = field(default_factory=dict)
    journeys: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    gaps: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    stages: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    touches: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    touch_sets: dict[tuple[Any, ...], tuple[int, ...]] = field(default_factory=dict)
    customers: dict[int, tuple[int, ...]] = field(default_factory=dict)
    findings: dict[str, int] = field(default_factory=dict)


@dataclass
class Row:
    """One row that was not left out. ``name`` is the state or outcome after mapping."""

    customer: Any
    time: int
    event: str
    name: str
    sequence: Any
    ended: bool
    place: int
    columns: dict[str, Any]
    value: int = 0


@dataclass
class Journey:
    """A journey that is running, and the visit it is in."""

    entry_state: str
    start: int
    sure: bool
    visits: int
    visit_state: str
    visit_start: int
    group: dict[str, Any]
    n_stages: int = 0
    stage_start: int = 0
    touched: list[str] = field(default_factory=list)
    value: int = 0
    passed: list[str] = field(default_factory=list)


def read_log(
    rows: Sequence[LogRow],
    *,
    converted: Sequence[str],
    churned: Sequence[str],
    silence_us: int | None,
    after_outcome: str = "reopen",
    same_outcome_us: int = HOUR_US,
    states: Mapping[str, str | None] | None = None,
    unmapped: str = "keep",
    repeats: str = "keep",
    duplicates: str = "keep",
    exclude: Mapping[str, Sequence[Any]] | None = None,
    as_of_us: int,
    log_start_us: int,
    complete_history: bool = False,
    opens: Sequence[str] = (),
    by: Sequence[str] = (),
    cohort_of: Callable[[int], str] | None = None,
    splits_us: Sequence[int] = (),
    stages: Sequence[str] = (),
    touchpoints: Sequence[str] | str = (),
    value: str | None = None,
    whole_days: bool = False,
    bucket_of: Callable[[Any], int],
    dwell_bin: Callable[[int], int],
    elapsed_bin: Callable[[int], int],
    busy_after: int = 1000,
    memory: int = 1,
) -> SlowTally:
    """Return the tally of a log; with ``whole_days`` a bin is the number of days.

    With a ``memory`` above 1 the moves are told apart by the ``memory - 1`` states before the one they leave.
    """
    rules = Rules(**locals())
    rules.outcomes = {*converted, *churned}
    rules.exclude = exclude or {}
    rules.asks_for_touches = bool(touchpoints)
    if whole_days:
        rules.dwell_bin = rules.elapsed_bin = days_of
    if touchpoints == "all":
        rules.touchpoints = states_that_occur(rows, rules)
    tally = SlowTally()
    by_customer: dict[Any, list[Row]] = {}
    for place, raw in enumerate(rows):
        reason = reason_to_leave_out(raw, rules)
        if reason is not None:
            found(tally, reason)
            continue
        customer, time, event, sequence, ended, columns = raw
        name = mapped(event, rules)
        assert name is not None
        row = Row(customer, time, event, name, sequence, bool(ended), place, columns)
        if value is not None:
            row.value = worth(columns[value], tally)
        by_customer.setdefault(customer, []).append(row)
    for customer_rows in by_customer.values():
        history = put_in_order(customer_rows)
        history = without_duplicates(history, rules, tally)
        history = without_ended_before(history, tally)
        history = without_after_outcome(history, rules, tally)
        history = from_openers(history, rules, tally)
        if history:
            CustomerReader(history, rules, tally).read()
    return tally


def states_that_occur(rows: Sequence[LogRow], rules: Rules) -> list[str]:
    """Return the states of the rows that stay, in alphabetical order."""
    names = {mapped(raw[2], rules) for raw in rows if reason_to_leave_out(raw, rules) is None}
    return sorted(name for name in names if name is not None and name not in rules.outcomes)


def worth(amount: Any, tally: SlowTally) -> int:
    """Return the millionths of an amount, of a missing one 0."""
    if amount is None or amount != amount or amount in (float("inf"), -float("inf")):
        found(tally, "missing_value")
        return 0
    return round(Fraction(amount) * 1_000_000)


def days_of(microseconds: int) -> int:
    """Return the bin of a log of dates."""
    return microseconds // DAY_US


def is_missing(value: Any) -> bool:
    """Say whether a cell holds nothing: null, NaN or NaT (unequal to themselves), or empty text."""
    if value is None or value == "":
        return True
    return bool(value != value)


def found(tally: SlowTally, code: str, n: int = 1) -> None:
    """Count a finding."""
    if n:
        tally.findings[code] = tally.findings.get(code, 0) + n


def add(table: dict[Any, tuple[int, ...]], key: Any, *amounts: int) -> None:
    """Add amounts to a row of a table."""
    before = table.get(key, (0,) * len(amounts))
    table[key] = tuple(old + new for old, new in zip(before, amounts, strict=True))


def reason_to_leave_out(raw: LogRow, rules: Rules) -> str | None:
    """Return the first reason for leaving a row out, None for a row that stays."""
    customer, time, event, _, _, columns = raw
    if any(columns[column] in values for column, values in rules.exclude.items()):
        return "excluded"
    if is_missing(customer):
        return "missing_customer"
    if is_missing(time):
        return "missing_time"
    if is_missing(event):
        return "missing_event"
    if time < rules.log_start_us:
        return "before_log_start"
    if time > rules.as_of_us:
        return "after_as_of"
    if mapped(event, rules) is None:
        return "unmapped_event"
    return None


def mapped(event: str, rules: Rules) -> str | None:
    """Return the state or outcome an event counts as, None for an event that is dropped.

    An event that already carries the name of an outcome, or of a state that others are mapped to, needs no
    mapping. One mapped to None is dropped like an unmapped one.
    """
    if rules.states is None:
        return event
    states: Mapping[str, str | None] = rules.states
    if event in states:
        return states[event]
    named = event in rules.outcomes or event in states.values()
    if named or rules.unmapped == "keep":
        return event
    if rules.unmapped == "drop":
        return None
    return str(rules.unmapped)


def put_in_order(history: list[Row]) -> list[Row]:
    """Return one customer's rows by time, then sequence (a missing one comes last), then input order."""

    def position(row: Row) -> tuple[Any, ...]:
        has_none = row.sequence is None
        return row.time, has_none, 0 if has_none else row.sequence, row.place

    return sorted(history, key=position)


def without_duplicates(history: list[Row], rules: Rules, tally: SlowTally) -> list[Row]:
    """Count rows equal in customer, time, event as recorded, sequence and value; drop the later ones if asked."""
    seen = set()
    first_ones = []
    for row in history:
        cells = (row.customer, row.time, row.event, row.sequence, row.value)
        if cells in seen:
            found(tally, "duplicate")
        else:
            seen.add(cells)
            first_ones.append(row)
    return first_ones if rules.duplicates == "drop" else history


def without_ended_before(history: list[Row], tally: SlowTally) -> list[Row]:
    """Leave out a customer whose first row says that the story had ended before the log."""
    if history[0].ended:
        found(tally, "ended_before", len(history))
        return []
    return history


def without_after_outcome(history: list[Row], rules: Rules, tally: SlowTally) -> list[Row]:
    """With ``after_outcome="stop"`` leave out what follows the first outcome."""
    if rules.after_outcome != "stop":
        return history
    for position, row in enumerate(history):
        if row.name in rules.outcomes:
            found(tally, "after_outcome", len(history) - position - 1)
            return history[: position + 1]
    return history


def from_openers(history: list[Row], rules: Rules, tally: SlowTally) -> list[Row]:
    """Leave out rows that would begin a journey but may not, unless the journey may have begun before the log."""
    if not rules.opens:
        return history
    kept: list[Row] = []
    for row in history:
        new = not kept
        silent = not new and rules.silence_us is not None and row.time - kept[-1].time > rules.silence_us
        begins = new or silent or kept[-1].name in rules.outcomes
        unsure = new and not is_sure(row, rules)
        if begins and not unsure and row.name not in rules.opens and row.name not in rules.outcomes:
            found(tally, "before_opener")
        else:
            kept.append(row)
    return kept


def is_sure(row: Row, rules: Rules) -> bool:
    """Say whether a customer's first row surely begins a journey."""
    late = rules.silence_us is not None and row.time >= rules.log_start_us + rules.silence_us
    return bool(rules.complete_history or late)


class CustomerReader:
    """Reads one customer's ordered rows into the tally."""

    def __init__(self, history: list[Row], rules: Rules, tally: SlowTally) -> None:
        self.history = history
        self.rules = rules
        self.tally = tally
        self.bucket = rules.bucket_of(history[0].customer)
        self.journey: Journey | None = None
        self.group: dict[str, Any] = {}
        self.n_decided = 0
        self.n_converted = 0
        self.total_value = 0

    def read(self) -> None:
        """Read every row, then what can be said at ``as_of``."""
        for position in range(len(self.history)):
            self.read_row(position)
        self.read_end()
        self.count_customer()

    def is_outcome(self, row: Row) -> bool:
        """Say whether a row is a converted or churned outcome."""
        return bool(row.name in self.rules.outcomes)

    def read_row(self, position: int) -> None:
        """Read one row. ``position`` is also the number of this customer's kept rows before it."""
        row = self.history[position]
        if position == 0:
            self.start_journey(row, came_after="new")
            return
        prev = self.history[position - 1]
        gap = row.time - prev.time

        repeats_outcome = self.is_outcome(row) and row.name == prev.name and gap <= self.rules.same_outcome_us
        if repeats_outcome:
            found(self.tally, "repeated_outcome")
            return

        if self.is_outcome(prev):
            self.absence(prev.name, prev.time, row.time, back=True)
            self.start_journey(row, came_after=prev.name)
            return

        silent = self.rules.silence_us is not None and gap > self.rules.silence_us
        if silent:
            self.lapse(prev, n_rows_before=position)
            self.absence("lapsed", prev.time, row.time, back=True)
            self.start_journey(row, came_after="lapsed")
            return

        self.go_on(row, prev, n_rows_before=position)

    def start_journey(self, row: Row, *, came_after: str) -> None:
        """Open a journey at a row, and end it at once where the row is an outcome."""
        sure = came_after != "new" or is_sure(row, self.rules)
        group = {name: row.columns.get(name) or "not given" for name in self.rules.by}
        if "cohort" in group:
            group["cohort"] = self.rules.cohort_of(row.time)
        if "came_after" in group:
            group["came_after"] = came_after
        key: tuple[Any, ...] = (self.bucket, row.name, sure)
        self.group = group
        key = self.grouped(key, row.time)
        self.tally.entries[key] = self.tally.entries.get(key, 0) + 1
        self.journey = Journey(row.name, row.time, sure, 0, row.name, row.time, group, 0, row.time)
        self.journey.passed = ["entry" if sure else "unknown"] * self.rules.memory
        self.touch(row)
        if self.is_outcome(row):
            found(self.tally, "outcome_without_states")
            self.end_journey(row.name, row.time)
        else:
            self.journey.visits = 1
            self.look_at_stage(row)

    def touch(self, row: Row) -> None:
        """Note what an event of the running journey touches, and what it is worth."""
        assert self.journey is not None
        self.total_value += row.value
        self.journey.value += row.value
        if row.name in self.rules.touchpoints:
            self.journey.touched.append(row.name)

    def look_at_stage(self, row: Row) -> None:
        """Count the stage before as passed where the row is the next stage."""
        assert self.journey is not None
        reached = self.journey.n_stages
        if reached < len(self.rules.stages) and row.name == self.rules.stages[reached]:
            self.leave_stage(row.name, row.time)
            self.journey.n_stages += 1
            self.journey.stage_start = row.time

    def leave_stage(self, to: str, at: int) -> None:
        """Count the stage that the journey stands in as left for the next one or the end."""
        journey = self.journey
        assert journey is not None
        if not self.rules.stages:
            return
        _, until, to = self.seen(journey.start, at, to)
        if until < journey.stage_start:
            return
        stage = self.rules.stages[journey.n_stages - 1] if journey.n_stages else "entry"
        since_entry = self.rules.elapsed_bin(until - journey.start)
        since_stage = self.rules.elapsed_bin(until - journey.stage_start)
        self.add(self.tally.stages, (self.bucket, stage, to, since_entry, journey.sure, since_stage), journey.start, 1)

    def period(self, time: int) -> int:
        """Return the number of cuts up to a moment."""
        return sum(split <= time for split in self.rules.splits_us)

    def seen(self, since: int, until: int, to: str) -> tuple[int, int, str]:
        """Return how far something begun at `since` is seen in its period, and what it led to there."""
        period = self.period(since)
        if period < len(self.rules.splits_us):
            last = self.rules.splits_us[period] - (DAY_US if self.rules.whole_days else 1)
            if until > last:
                return since, last, "open"
        return since, until, to

    def add(self, table: dict[Any, tuple[int, ...]], key: tuple[Any, ...], since: int, *amounts: int) -> None:
        """Add amounts to a row of a table, under the group of the latest journey and the period."""
        add(table, self.grouped(key, since), *amounts)

    def grouped(self, key: tuple[Any, ...], since: int) -> tuple[Any, ...]:
        """Return a key with the group of the latest journey and the period of a moment, where there are groups."""
        if not self.rules.by:
            return key
        group = [self.group[name] for name in self.rules.by if name != "period"]
        return (*key, (*group, self.period(since)))

    def go_on(self, row: Row, prev: Row, *, n_rows_before: int) -> None:
        """Go on with the running journey: the same visit, a move to a state, or a move to an outcome."""
        assert self.journey is not None
        self.touch(row)
        if self.rules.repeats == "merge" and row.name == prev.name:
            return
        self.move(row.name, row.time, n_rows_before)
        if self.is_outcome(row):
            self.end_journey(row.name, row.time)
        else:
            self.journey.visits += 1
            self.journey.passed.append(self.journey.visit_state)
            self.journey.visit_state = row.name
            self.journey.visit_start = row.time
            self.look_at_stage(row)

    def lapse(self, last: Row, *, n_rows_before: int) -> None:
        """End the running journey one silence after its last event."""
        assert self.rules.silence_us is not None
        at = last.time + self.rules.silence_us
        self.move("lapsed", at, n_rows_before)
        self.end_journey("lapsed", at)

    def read_end(self) -> None:
        """At ``as_of`` a journey still running has lapsed, or is open."""
        last = self.history[-1]
        away = self.rules.as_of_us - last.time
        if self.is_outcome(last):
            if self.rules.after_outcome == "reopen":
                self.absence(last.name, last.time, self.rules.as_of_us, back=False)
            return
        n_rows = len(self.history)
        if self.rules.silence_us is not None and away >= self.rules.silence_us:
            self.lapse(last, n_rows_before=n_rows)
            self.absence("lapsed", last.time, self.rules.as_of_us, back=False)
        else:
            self.move("open", self.rules.as_of_us, n_rows)
            self.end_journey("open", self.rules.as_of_us)

    def absence(self, after: str, since: int, until: int, *, back: bool) -> None:
        """Count how long a customer was away after the last event of a journey that had ended."""
        _, until, to = self.seen(since, until, "back" if back else "open")
        away = until - since
        if after == "lapsed" and away < self.rules.silence_us:
            return  # the period ended before the silence did
        self.add(self.tally.gaps, (self.bucket, after, self.rules.elapsed_bin(away), to == "back"), since, 1, away)

    def move(self, to: str, at: int, n_rows_before: int) -> None:
        """Count a move out of the present visit, its dwell reckoned from the visit's start."""
        assert self.journey is not None
        first_visit = self.journey.visits == 1
        if self.rules.repeats == "merge" and first_visit and not self.journey.sure:
            # The visit may have begun before the log: how long it lasted is not known.
            found(self.tally, "first_visit_of_unsure_journey")
            return
        since, at, to = self.seen(self.journey.visit_start, at, to)
        dwell = at - since
        busy = n_rows_before >= self.rules.busy_after
        passed = tuple(self.journey.passed[: -self.rules.memory - 1 : -1])
        key = (self.bucket, self.journey.visit_state, to, self.rules.dwell_bin(dwell), busy, *passed[:-1])
        self.add(self.tally.moves, key, since, 1, dwell)
        if to != "open":
            key = (self.bucket, self.journey.visit_state, to, self.is_mature(since), *passed)
            self.add(self.tally.contexts, key, since, 1)

    def is_mature(self, since: int) -> bool:
        """Say whether the day that holds a moment was over one silence before the end of the log, or of the period."""
        ends = [*self.rules.splits_us, self.rules.as_of_us]
        return since // DAY_US < (ends[self.period(since)] - (self.rules.silence_us or 0)) // DAY_US

    def end_journey(self, outcome: str, at: int) -> None:
        """Count the journey with its steps and elapsed time; an open one is counted as far as it got."""
        journey = self.journey
        assert journey is not None
        self.leave_stage(outcome, at)
        _, until, seen = self.seen(journey.start, at, outcome)
        elapsed = until - journey.start
        steps = journey.visits if outcome == "open" else journey.visits + 1
        value = [journey.value] if self.rules.value is not None else []
        if seen != outcome or until != at:
            # Cut at the end of a period, where the steps and the value so far are not known.
            steps, value = 0, [0 for _ in value]
        else:
            self.count_touches(outcome, elapsed, value)
        key = (self.bucket, journey.entry_state, seen, self.rules.elapsed_bin(elapsed), journey.sure)
        self.add(self.tally.journeys, key, journey.start, 1, steps, steps * steps, elapsed, *value)
        if outcome != "open":
            self.n_decided += 1
        if outcome in self.rules.converted:
            self.n_converted += 1
        self.journey = None

    def count_touches(self, outcome: str, elapsed: int, value: list[int]) -> None:
        """Count the journey under each touchpoint that it has touched, or under none, and under the set of them."""
        journey = self.journey
        assert journey is not None
        if not self.rules.asks_for_touches:
            return
        bins, touched = self.rules.elapsed_bin(elapsed), journey.touched
        distinct = len(set(touched))
        for name in set(touched) or {"none of them"}:
            first, last = (int(bool(touched) and touched[end] == name) for end in (0, -1))
            key = (self.bucket, name, outcome, bins, journey.sure, distinct)
            self.add(self.tally.touches, key, journey.start, 1, first, last, *value)
        if len(self.rules.touchpoints) <= 15:
            bits = sum(2**i for i, name in enumerate(self.rules.touchpoints) if name in touched)
            self.add(self.tally.touch_sets, (self.bucket, outcome, bins, journey.sure, bits), journey.start, 1, *value)

    def count_customer(self) -> None:
        """Add the customer to the sums of its bucket; event count and value are merged by their largest."""
        j, x = self.n_decided, self.n_converted
        new = (1, j, j * j, j * x, x, x * x, len(self.history))
        if self.rules.value is not None:
            new = (*new, self.total_value, self.total_value)
        before = self.tally.customers.get(self.bucket, (0,) * len(new))
        self.tally.customers[self.bucket] = tuple(
            max(old, more) if place in (6, 8) else old + more
            for place, (old, more) in enumerate(zip(before, new, strict=True))
        )
