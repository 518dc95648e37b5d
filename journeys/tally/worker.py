"""Counting the customers of some neighbouring buckets, and the tables that come of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from journeys.intake.findings import Findings
from journeys.intake.rows import Rows
from journeys.kernels.arrays import IntArray
from journeys.kernels.grouping import Grouping
from journeys.kernels.histories import recoded
from journeys.kernels.records import Carried, Reading
from journeys.tally.accumulate import Columns, Keyed
from journeys.tally.contexts import without_days
from journeys.tally.counter import Counter, LeaveOut
from journeys.tally.order import by_customer
from journeys.tally.spill import BUCKETS_PER_PART, Spill
from journeys.tally.sums import Sums
from journeys.tally.tables import CODED, KEYS, NARROW, history_of, sorted_by_key, split_key
from journeys.tally.touchpoints import Places
from journeys.tally.weeks import Watch, WatchedSums

# Bins of dwell and of elapsed time.
Edges = tuple[IntArray | None, IntArray | None]
# Codes of the raw events, how many states there are, numbers of the touchpoints by code.
Known = tuple[NDArray[np.int32], int, NDArray[np.int8] | None]


@dataclass(frozen=True)
class Block:
    """Rows with their order by customer and the codes of their events."""

    rows: Rows
    order: IntArray
    code_of_event: NDArray[np.int32]
    n_states: int
    touch_of_code: NDArray[np.int8] | None


@dataclass(frozen=True)
class Kept:
    """What a count of some customers leaves for a later one to begin with: a record each, and sums under packed keys.

    Codes in both are those of the count, so that its lists of names have to be kept too.
    """

    carried: Carried
    tables: dict[str, Keyed]


class Worker:
    """Counts the customers of some neighbouring buckets."""

    def __init__(
        self,
        parts: range,
        reading: Reading,
        leave_out: LeaveOut,
        edges: Edges,
        longest_us: int | None,
        *,
        grouped: Grouping | None,
        goes_on: bool,
        watch: Watch | None,
        compiled: bool,
    ) -> None:
        self.parts, self._compiled = parts, compiled
        self.findings = Findings()
        self._reading, self._leave_out = reading, leave_out
        buckets = range(parts.start * BUCKETS_PER_PART, parts.stop * BUCKETS_PER_PART)
        if watch is None:
            self.sums = Sums(reading, edges, longest_us, buckets, grouped=grouped, goes_on=goes_on)
        else:
            self.sums = WatchedSums(reading, edges, longest_us, buckets, grouped=grouped, goes_on=goes_on, watch=watch)
        self._counter = self._new_counter()

    def add(self, block: Block, part: slice) -> None:
        """Count one part of a block in order."""
        self._counter.add(
            block.rows, block.order[part], block.code_of_event, block.n_states, block.touch_of_code
        )

    def add_rows(self, rows: Rows, known: Known) -> None:
        """Count rows, all there are of their customers by now."""
        self._counter.add(rows, by_customer(rows.key), *known)

    def resume(self, kept: Kept | None, n_states: int) -> None:
        """Begin with what an earlier count of these customers left."""
        self._counter.resume(None if kept is None else kept.carried, n_states)
        if kept is not None:
            self.sums.resume(kept.tables)

    @property
    def customers(self) -> NDArray[np.uint64]:
        """Keys of the customers seen."""
        return self._counter.carried.key

    def kept(self) -> Kept:
        """Return what a later count is to begin with; the records are those at hand, not a copy."""
        tables = {name: self.sums.result(name) for name in self.sums.names}
        self.sums.resume(tables)
        return Kept(self._counter.carried, tables)

    def close(self, code: IntArray, places: Places) -> dict[str, Columns]:
        """Close the log and return the tables, codes replaced by `code`."""
        self._counter.close()
        return self._tables(code, places)

    def add_parts(
        self,
        spill: Spill,
        known: Known,
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


def _labelled(name: str, keyed: Keyed, code: IntArray, places: Places, order: int) -> Columns:
    """Take the keys of a table apart, codes replaced by the positions of their names among the labels."""
    keyed = without_days(keyed)
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
