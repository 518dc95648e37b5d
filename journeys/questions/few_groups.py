"""Groups of journeys of which too few people are behind a number, or behind what is left beside it."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from journeys.intake.groups import Value
from journeys.kernels.arrays import BoolArray
from journeys.kernels.records import FIRST_OUTCOME, OPEN
from journeys.kernels.small_cells import Line, buckets_of, not_shown
from journeys.tally.groups import gathered
from journeys.tally.tables import N_BUCKETS
from journeys.tally.tally import Tally


class FewInGroups(NamedTuple):
    """Values of a column of which something is not shown.

    Attributes
    ----------
    size, conversion, undecided : sets
        How many journeys there are, whether and how soon they convert, how many are under way.
    within : set
        What share converts within a time by the log, which is counted on journeys whose start was seen.
    """

    size: frozenset[Value]
    conversion: frozenset[Value]
    undecided: frozenset[Value]
    within: frozenset[Value]


def few_in_groups(tally: Tally, column: str, least: int, *, every: bool) -> FewInGroups:
    """Return the groups of a column of which something is not shown.

    Parameters
    ----------
    tally : Tally
        Of journeys grouped by the column.
    column : str
        One of `rules.by`.
    least : int
        Fewer people than this are few.
    every : bool
        Conversion is shown of no group, as it is not of all together.
    """
    rules, table = tally.rules, tally.journeys
    parts = gathered(tally.groups, rules.by, (column,))
    values = [value for (value,) in parts]
    place = np.zeros(len(tally.groups), np.int64)
    for i, index in enumerate(parts.values()):
        place[index] = i
    cell, outcome = place[table["group"]], table["outcome"]
    codes = FIRST_OUTCOME + np.flatnonzero(np.isin(rules.outcomes, rules.converted))
    won, is_open = np.isin(outcome, codes), outcome == OPEN

    def seen(rows: BoolArray) -> BoolArray:
        return buckets_of(cell, table["bucket"], table["n"] * rows, (len(values), N_BUCKETS))

    def closed(hidden: BoolArray, *masks: BoolArray) -> BoolArray:
        """Add up over the groups, each of some journeys, until no total gives one away."""
        before = None
        while before is None or (hidden != before).any():
            before = hidden
            for mask in masks:
                hidden = not_shown(seen(mask), [Line(np.arange(len(values)))], least, hidden)
        return hidden

    none = np.zeros(len(values), bool)
    size = closed(none, np.ones(len(cell), bool))
    # of how many journeys the start was seen is not told by group, so that nothing can be subtracted
    n_sure = seen(table["sure"] == 1).sum(axis=1)
    conversion = closed(size | every, won, ~won)
    found = (size, conversion, closed(size, is_open, ~is_open), conversion | ((n_sure > 0) & (n_sure < least)))
    return FewInGroups(*(frozenset(v for v, one in zip(values, mask, strict=True) if one) for mask in found))
