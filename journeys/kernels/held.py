"""Records of customers as the compiled loop keeps them: side by side in memory, with room for new ones behind."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.compiled import RECORD, insert
from journeys.kernels.records import Carried

# A table that has no room left is made longer by so much of what it holds.
_TO_SPARE = 1 / 4
# Records taken apart into columns at once, so that they stay in the processor's cache meanwhile.
_AT_ONCE = 1 << 12
# Records join the old ones once there are so many of them, beside the old: each of these has to move then.
_YOUNG = 1 / 4


class Table:
    """Records sorted by key, with room behind them.

    Attributes
    ----------
    n : int
        How many there are.
    key, record : ndarray of uint64, ndarray of RECORD
        Of which the first `n` count.
    """

    def __init__(self) -> None:
        self.n = 0
        self.key, self.record = np.empty(0, np.uint64), np.empty(0, RECORD)

    def make_room(self, n: int) -> None:
        """Make room for `n` records more."""
        if self.n + n > len(self.key):
            size = self.n + n + int(self.n * _TO_SPARE)
            self.key, self.record = _longer(self.key, self.n, size), _longer(self.record, self.n, size)

    def take_in(self, other: Table) -> None:
        """Take in the records of another table, which has none then."""
        self.make_room(other.n)
        insert(self.n, self.key, self.record, other.n, other.key, other.record)
        self.n, other.n = self.n + other.n, 0


class Held:
    """One record per customer seen.

    Attributes
    ----------
    old, young : Table
        Which of the two a customer is in does not matter; `young` is small, so that new customers can join it often.
    new : Table
        Customers first seen since `settle` was last called.
    """

    def __init__(self) -> None:
        self.old, self.young, self.new = Table(), Table(), Table()

    @classmethod
    def of(cls, carried: Carried) -> Held:
        """Return records to go on with."""
        held = cls()
        held.old.make_room(len(carried.key))
        held.old.n = len(carried.key)
        held.old.key[:] = carried.key
        for name in RECORD.names or ():
            # Without merging, each row is a visit of its own.
            column = getattr(carried, name)
            held.old.record[name] = carried.visit_began if column is None else column
        return held

    def settle(self) -> None:
        """Put the records of new customers among the others."""
        self.young.take_in(self.new)
        # The first blocks have many new customers, later ones few: their room is not kept.
        self.new = Table()
        if self.young.n > self.old.n * _YOUNG:
            self.old.take_in(self.young)

    def carried(self, also: list[str]) -> Carried:
        """Return the records of all; the columns are views, good until the next call of anything.

        Parameters
        ----------
        also : list of str
            Columns wanted beside those that there are always.

        Returns
        -------
        Carried
        """
        self.settle()
        self.old.take_in(self.young)
        n = self.old.n
        names = [name for name in RECORD.names or () if name != "visit_start" or name in also]
        columns: dict[str, Any] = {name: self.old.record[name][:n] for name in names}
        return Carried(key=self.old.key[:n], story_over=np.zeros(n, np.bool_), **columns)


def _longer(column: NDArray[Any], n: int, size: int) -> NDArray[Any]:
    """Return a column of another size that begins with the same `n` items."""
    longer = np.empty(size, column.dtype)
    longer[:n] = column[:n]
    return longer


def apart(records: Carried) -> Carried:
    """Return records with columns of their own where they are views of whole records."""
    n = len(records.key)
    columns = {name: getattr(records, name) for name in records.names}
    own = {name: np.empty(n, column.dtype) for name, column in columns.items() if not column.flags.contiguous}
    for begin in range(0, n, _AT_ONCE):
        some = slice(begin, begin + _AT_ONCE)
        for name, column in own.items():
            column[some] = columns[name][some]
    return Carried(**{**columns, **own})
