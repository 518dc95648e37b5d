"""What counting works on and gives: the rules as numbers, what is carried per customer, moves, entries, ends."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray as Bools
from journeys.kernels.arrays import IntArray as Ints

# Codes of what a row or a move can lead to: these two, then the outcomes, then the states.
LAPSED = 0
OPEN = 1
FIRST_OUTCOME = 2


@dataclass(frozen=True)
class Reading:
    """The rules of reading as plain numbers.

    `n_outcomes` outcomes have the codes 2 to 1 + n_outcomes, the first `n_converted` of them are
    conversions, and states come after. Times are microseconds.
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

    @property
    def first_state(self) -> int:
        """Code of the first state."""
        return FIRST_OUTCOME + self.n_outcomes


@dataclass(frozen=True)
class Carried:
    """One record per customer seen: what the next row of that customer needs. Sorted by `key`."""

    key: NDArray[np.uint64]
    time: Ints
    code: NDArray[np.int32]
    visit_start: Ints
    journey_start: Ints
    first_code: NDArray[np.int32]
    steps: Ints
    sure: Bools
    n_events: Ints
    decided: Ints
    converted: Ints
    story_over: Bools

    @classmethod
    def none(cls) -> Carried:
        """Return a table without customers."""
        kinds = {"key": np.uint64, "code": np.int32, "first_code": np.int32, "sure": bool, "story_over": bool}
        return cls(**{f.name: np.empty(0, kinds.get(f.name, np.int64)) for f in fields(cls)})

    def take(self, index: Ints | Bools) -> Carried:
        """Return the records at `index`."""
        return Carried(**{f.name: getattr(self, f.name)[index] for f in fields(self)})

    def find(self, key: NDArray[np.uint64]) -> Ints:
        """Return the position of each key, -1 where it is not carried."""
        if not len(self.key):
            return np.full(len(key), -1)
        at = np.minimum(np.searchsorted(self.key, key), len(self.key) - 1)
        return np.where(self.key[at] == key, at, -1)

    def updated(self, new: Carried, at: Ints) -> Carried:
        """Return the table with `new` in place of the records at `at`, and added where `at` is -1."""
        old, fresh = at >= 0, at < 0
        where = np.searchsorted(self.key, new.key[fresh])
        columns = {}
        for f in fields(self):
            column, values = getattr(self, f.name), getattr(new, f.name)
            if old.any():
                column = column.copy()
                column[at[old]] = values[old]
            columns[f.name] = np.insert(column, where, values[fresh]) if fresh.any() else column
        return Carried(**columns)


@dataclass(frozen=True)
class Moves:
    """One element per move: whose, from which state, to what, after how long (microseconds)."""

    key: NDArray[np.uint64]
    state: NDArray[np.int32]
    next_code: NDArray[np.int32]
    dwell: Ints
    busy: Bools


@dataclass(frozen=True)
class Entries:
    """One element per journey begun."""

    key: NDArray[np.uint64]
    state: NDArray[np.int32]
    sure: Bools


@dataclass(frozen=True)
class Ends:
    """One element per journey ended (or, at the end of the log, still open)."""

    key: NDArray[np.uint64]
    state: NDArray[np.int32]
    outcome: NDArray[np.int32]
    sure: Bools
    steps: Ints
    elapsed: Ints


@dataclass(frozen=True)
class Counted:
    """What one block of rows adds.

    `repeated`, `bare` and `again` are masks of rows: outcomes merged, outcomes with nothing before them, first
    rows of journeys begun after an outcome; `unsure_visits` is a count.
    """

    moves: tuple[Moves, ...]
    entries: Entries | None
    ends: tuple[Ends, ...]
    repeated: Bools
    bare: Bools
    again: Bools
    unsure_visits: int
