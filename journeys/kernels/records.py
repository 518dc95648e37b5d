"""What counting works on and gives: the rules as numbers, what is carried per customer, moves, entries, ends."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import MISSING, dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray as Bools
from journeys.kernels.arrays import IntArray as Ints
from journeys.kernels.bins import DAY_US
from journeys.kernels.grouping import Grouping

# The two numbers of a cell side by side, so that adding to them asks for one place in memory.
CELL = np.dtype([("n", np.uint32), ("rest", np.int64)])

# Codes of what a row or a move can lead to: these two, then the outcomes, then the states.
LAPSED = 0
OPEN = 1
FIRST_OUTCOME = 2


@dataclass(frozen=True)
class Reading:
    """The rules of reading as plain numbers.

    `n_outcomes` outcomes have the codes 2 to 1 + n_outcomes, the first `n_converted` of them are
    conversions, and states come after. Times are microseconds. `touches` and `values` tell whether what journeys touch,
    and what their events are worth, is kept; `order` by how many of the last states moves are told apart.
    """

    n_outcomes: int
    n_converted: int
    silence_us: int | None
    same_outcome_us: int
    merge_repeats: bool
    log_start_us: int
    as_of_us: int
    complete_history: bool
    busy_after: int = 1_000
    grouping: Grouping | None = None
    stages: NDArray[np.int32] | None = None
    touches: bool = False
    values: bool = False
    order: int = 1

    def mature_before(self, end_us: Ints) -> Ints:
        """Return before when a state must be entered to be seen for the silence until `end_us`: starts of days."""
        return (end_us - (self.silence_us or 0)) // DAY_US * DAY_US

    @property
    def first_state(self) -> int:
        """Code of the first state."""
        return FIRST_OUTCOME + self.n_outcomes


@dataclass
class Carried:
    """One record per customer seen: what the next row of that customer needs. Sorted by `key`.

    The one table that is changed in place: copying it for every block of rows would cost more than counting.
    `visit_start` is only kept where repeats merge; elsewhere each row is a visit of its own. `group`, of the latest
    journey, is kept where journeys are grouped, `seen` (the time of the latest row, counted or not) where rows before
    an opening state are left out, `stage` (the stage reached) and `stage_start` where stages are named. Where there are
    touchpoints, `touched` has a bit for each that the journey has touched, `first_touch` and `last_touch` the numbers
    of the first and the last (from 1, 0 for none); where events have values, `value` is the journey's and
    `total_value` the customer's. `before` is the history of the latest visit (`kernels.histories`).
    """

    key: NDArray[np.uint64]
    time: Ints
    journey_start: Ints
    code: NDArray[np.int32]
    first_code: NDArray[np.int32]
    steps: NDArray[np.int32]
    n_events: NDArray[np.int32]
    decided: NDArray[np.int32]
    converted: NDArray[np.int32]
    before: Ints
    sure: Bools
    story_over: Bools
    visit_start: Ints | None = None
    group: Ints | None = None
    seen: Ints | None = None
    stage: NDArray[np.int32] | None = None
    stage_start: Ints | None = None
    touched: NDArray[np.uint64] | None = None
    first_touch: NDArray[np.int32] | None = None
    last_touch: NDArray[np.int32] | None = None
    value: Ints | None = None
    total_value: Ints | None = None

    @classmethod
    def zeros(cls, n: int, also: Collection[str] = ()) -> Carried:
        """Return a table of `n` empty records, with the optional columns named."""
        wide = ("time", "journey_start", "before", "visit_start", "group", "seen", "stage_start")
        kinds: dict[str, Any] = {**dict.fromkeys((*wide, *_AMOUNTS), np.int64), "key": np.uint64, "touched": np.uint64}
        kinds |= {"sure": np.bool_, "story_over": np.bool_}
        names = [f.name for f in fields(cls) if f.default is MISSING or f.name in also]
        return cls(**{name: np.zeros(n, kinds.get(name, np.int32)) for name in names})

    @property
    def visit_began(self) -> Ints:
        """When the visit of each customer's last row began."""
        return self.time if self.visit_start is None else self.visit_start

    @property
    def latest(self) -> Ints:
        """When each customer's latest row was, counted or not."""
        return self.time if self.seen is None else self.seen

    @property
    def names(self) -> list[str]:
        """Columns that are kept."""
        return [f.name for f in fields(self) if getattr(self, f.name) is not None]

    def take(self, index: Ints | Bools | slice) -> Carried:
        """Return the records at `index`."""
        return Carried(**{name: getattr(self, name)[index] for name in self.names})

    def find(self, key: NDArray[np.uint64]) -> Ints:
        """Return the position of each key, -1 where it is not carried."""
        if not len(self.key):
            return np.full(len(key), -1)
        at = np.searchsorted(self.key, key)
        np.minimum(at, len(self.key) - 1, out=at)
        at[self.key[at] != key] = -1
        return at

    def put(self, new: Carried, at: Ints) -> Carried | None:
        """Put new records in place of those at `at`; return the ones with no place (`at` is -1), to be inserted.

        Journeys decided and converted, and total values, are what the new records add to the old ones.
        """
        fresh = None
        if (at < 0).any():
            fresh = new.take(at < 0)
            held = np.flatnonzero(at >= 0)
            at, new = at[held], new.take(held)
        for name in self.names:
            column, values = getattr(self, name), getattr(new, name)
            if name in _ADDED:
                some = np.flatnonzero(values)
                column[at[some]] += values[some]
            elif name != "key":
                column[at] = values
        return fresh

    def insert(self, fresh: list[Carried]) -> None:
        """Add records of new customers, sorted by key."""
        if not fresh:
            return
        where = np.searchsorted(self.key, np.concatenate([part.key for part in fresh]))
        for name in self.names:
            new = np.concatenate([getattr(part, name) for part in fresh])
            setattr(self, name, np.insert(getattr(self, name), where, new))


_AMOUNTS = ("value", "total_value")
_ADDED = ("decided", "converted", "total_value")


@dataclass(frozen=True)
class Moves:
    """One element per move: whose bucket, from which state, to what, after how long (microseconds).

    Then the history of the state, when it was entered, and whether the customer was busy. Where journeys are grouped,
    also the journey's group; for what follows, also when it began.
    """

    bucket: NDArray[np.uint8]
    state: NDArray[np.int32]
    next_code: NDArray[np.int32]
    dwell: Ints
    before: Ints
    since: Ints
    busy: Bools | None = None
    group: Ints | None = None


@dataclass(frozen=True)
class Cells:
    """A table with a cell for every move there can be; empty for a chain too large to have one.

    Attributes
    ----------
    cells : ndarray of CELL
        Counts, and sums of dwell less the lower edge of its bin, by bucket, state, next and bin.
    contexts : ndarray of uint32
        Counts by bucket, state, next, state before and whether entered before `mature_before`.
    lower, upper : ndarray of int64, shape (n_bins,)
        Edges of the bins.
    first_bucket, n_states : int
        The bucket that comes first, and for how many states there is room.
    whole_days : bool
        Bin d holds the dwell of exactly d days.
    """

    cells: NDArray[np.void]
    contexts: NDArray[np.uint32]
    lower: Ints
    upper: Ints
    first_bucket: int
    n_states: int
    whole_days: bool
    mature_before: int


@dataclass(frozen=True)
class Entries:
    """One element per journey begun."""

    bucket: NDArray[np.uint8]
    state: NDArray[np.int32]
    sure: Bools
    since: Ints | None = None
    group: Ints | None = None


@dataclass(frozen=True)
class Ends:
    """One element per journey ended (or, at the end of the log, still open); the last four as in `Carried`."""

    bucket: NDArray[np.uint8]
    state: NDArray[np.int32]
    outcome: NDArray[np.int32]
    sure: Bools
    steps: Ints
    elapsed: Ints
    since: Ints | None = None
    group: Ints | None = None
    touched: NDArray[np.uint64] | None = None
    first_touch: NDArray[np.int32] | None = None
    last_touch: NDArray[np.int32] | None = None
    value: Ints | None = None


@dataclass(frozen=True)
class Gaps:
    """One element per absence: how the journey before it ended, how long since the last event, whether it is over."""

    bucket: NDArray[np.uint8]
    outcome: NDArray[np.int32]
    away: Ints
    back: bool
    since: Ints | None = None
    group: Ints | None = None


@dataclass(frozen=True)
class Passed:
    """One element per stage left: its state (0 before the first stage), and for which stage, outcome or open."""

    bucket: NDArray[np.uint8]
    stage: NDArray[np.int32]
    next_code: NDArray[np.int32]
    sure: Bools
    since_entry: Ints
    since_stage: Ints
    since: Ints | None = None
    group: Ints | None = None


@dataclass(frozen=True)
class Closed:
    """What the end of the log adds; `unsure_visits` counts stays left out."""

    moves: Moves
    ends: Ends
    gaps: Gaps
    unsure_visits: int
    passed: Passed | None = None


@dataclass(frozen=True)
class Counted:
    """What one block of rows adds.

    `repeated`, `bare` and `again` are positions of rows: outcomes merged, outcomes with nothing before them,
    first rows of journeys begun after an outcome; `unsure_visits` is a count.
    """

    moves: tuple[Moves, ...]
    entries: Entries
    ends: tuple[Ends, ...]
    gaps: Gaps
    repeated: Ints
    bare: Ints
    again: Ints
    unsure_visits: int
    passed: tuple[Passed, ...] = ()
