"""What counting works on and gives: the rules as numbers, what is carried per customer, moves, entries, ends."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

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


@dataclass
class Carried:
    """One record per customer seen: what the next row of that customer needs. Sorted by `key`.

    The one table that is changed in place: copying it for every block of rows would cost more than counting.
    """

    key: NDArray[np.uint64]
    time: Ints
    visit_start: Ints
    journey_start: Ints
    code: NDArray[np.int32]
    first_code: NDArray[np.int32]
    steps: NDArray[np.int32]
    n_events: NDArray[np.int32]
    decided: NDArray[np.int32]
    converted: NDArray[np.int32]
    sure: Bools
    story_over: Bools

    @classmethod
    def none(cls) -> Carried:
        """Return a table without customers."""
        return cls.zeros(0)

    @classmethod
    def zeros(cls, n: int) -> Carried:
        """Return a table of `n` empty records."""
        wide = {"key": np.uint64, "time": np.int64, "visit_start": np.int64, "journey_start": np.int64}
        flags = {"sure": np.bool_, "story_over": np.bool_}
        kinds: dict[str, Any] = wide | flags
        return cls(**{f.name: np.zeros(n, kinds.get(f.name, np.int32)) for f in fields(cls)})

    @classmethod
    def joined(cls, parts: list[Carried]) -> Carried:
        """Return several tables one after another."""
        if not parts:
            return cls.none()
        return cls(**{f.name: np.concatenate([getattr(part, f.name) for part in parts]) for f in fields(cls)})

    def take(self, index: Ints | Bools) -> Carried:
        """Return copies of the records at `index`."""
        return Carried(**{f.name: getattr(self, f.name)[index] for f in fields(self)})

    def find(self, key: NDArray[np.uint64]) -> Ints:
        """Return the position of each key, -1 where it is not carried."""
        if not len(self.key):
            return np.full(len(key), -1)
        at = np.searchsorted(self.key, key)
        np.minimum(at, len(self.key) - 1, out=at)
        at[self.key[at] != key] = -1
        return at

    def put(self, new: Carried, at: Ints) -> Carried:
        """Put new records in place of those at `at`; return the ones with no place (`at` is -1), to be inserted."""
        if (at >= 0).all():
            for f in fields(self):
                getattr(self, f.name)[at] = getattr(new, f.name)
            return Carried.none()
        old = np.flatnonzero(at >= 0)
        at = at[old]
        for f in fields(self):
            getattr(self, f.name)[at] = getattr(new, f.name)[old]
        fresh = np.ones(len(new.key), bool)
        fresh[old] = False
        return new.take(fresh)

    def insert(self, fresh: Carried) -> None:
        """Add records of new customers, sorted by key."""
        if not len(fresh.key):
            return
        where = np.searchsorted(self.key, fresh.key) + np.arange(len(fresh.key))
        size = len(self.key) + len(fresh.key)
        stays = np.ones(size, bool)
        stays[where] = False
        for f in fields(self):
            column = np.empty(size, getattr(self, f.name).dtype)
            column[where] = getattr(fresh, f.name)
            column[stays] = getattr(self, f.name)
            setattr(self, f.name, column)


@dataclass(frozen=True)
class Moves:
    """One element per move: whose bucket, from which state, to what, after how long (microseconds)."""

    bucket: NDArray[np.uint8]
    state: NDArray[np.int32]
    next_code: NDArray[np.int32]
    dwell: Ints
    busy: Bools | None = None


@dataclass(frozen=True)
class Entries:
    """One element per journey begun."""

    bucket: NDArray[np.uint8]
    state: NDArray[np.int32]
    sure: Bools


@dataclass(frozen=True)
class Ends:
    """One element per journey ended (or, at the end of the log, still open)."""

    bucket: NDArray[np.uint8]
    state: NDArray[np.int32]
    outcome: NDArray[np.int32]
    sure: Bools
    steps: Ints
    elapsed: Ints


@dataclass(frozen=True)
class Counted:
    """What one block of rows adds.

    `repeated`, `bare` and `again` are positions of rows: outcomes merged, outcomes with nothing before them,
    first rows of journeys begun after an outcome; `unsure_visits` is a count.
    """

    moves: tuple[Moves, ...]
    entries: Entries
    ends: tuple[Ends, ...]
    repeated: Ints
    bare: Ints
    again: Ints
    unsure_visits: int
