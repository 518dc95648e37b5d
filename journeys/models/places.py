"""Rows and columns of a chain, or of the chains of many groups one after the other."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import IntArray
from journeys.tally.accumulate import Columns


@dataclass(frozen=True, eq=False)
class Places:
    """Which rows and columns of a chain the codes in a tally's tables stand for.

    The chain is that of all journeys, or those of several groups one after the other: each group has rows of its
    own, entry first, and all have the outcomes in common.

    Attributes
    ----------
    own : int array, shape (n_groups, n_codes)
        Place of each code among a group's own nodes: entry is 0, then the states, the outcomes from `most_rows`
        on; -1 where there is none.
    first : int array, shape (n_groups + 1,)
        The first row of each group, and the number of rows.
    most_rows, n_outcomes : int
        The most rows that a group has, and the number of outcomes.
    group : int array, shape (n_groups of the tally,), or None
        Which of them a group of the tally belongs to, -1 for none; None where all journeys are one group.
    """

    own: IntArray
    first: IntArray
    most_rows: int
    n_outcomes: int
    group: IntArray | None = None

    @property
    def n_rows(self) -> int:
        """Rows of all groups."""
        return int(self.first[-1])

    @property
    def n_nodes(self) -> int:
        """Rows of all groups, and the outcomes."""
        return self.n_rows + self.n_outcomes

    @property
    def width(self) -> int:
        """Rows of the largest group, and the outcomes."""
        return self.most_rows + self.n_outcomes

    def table(self, table: Columns) -> tuple[Columns, IntArray]:
        """Return the rows of a table that belong to a group, and to which."""
        if self.group is None:
            return table, np.zeros(len(table["n"]), np.int64)
        group = self.group[table["group"]]
        mine = group >= 0
        if mine.all():
            return table, group
        return {name: values[mine] for name, values in table.items()}, group[mine]

    def own_node(self, group: IntArray, code: IntArray) -> IntArray:
        """Return the place of codes among their groups' own nodes."""
        own: IntArray = self.own.ravel()[group * self.own.shape[1] + code]
        return own

    def node(self, row: IntArray, own: IntArray) -> IntArray:
        """Return the node of the chain from its place among the own nodes of the group that a row belongs to."""
        first = np.repeat(self.first[:-1], np.diff(self.first))[row]
        return np.where(own < self.most_rows, first + own, self.n_rows + own - self.most_rows)
