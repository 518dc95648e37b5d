"""Touchpoints that too few people of those who convert have passed, or have not passed."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import BoolArray
from journeys.kernels.records import FIRST_OUTCOME
from journeys.kernels.small_cells import Line, buckets_of, is_few, not_shown
from journeys.questions.credit import NONE_OF_THEM
from journeys.tally.tables import N_BUCKETS
from journeys.tally.tally import Tally

# Rules of credit, and the sum that tells whose share is theirs.
_SUMS = {"even": "n", "first": "first", "last": "last"}


def few_touches(tally: Tally, least: int) -> tuple[frozenset[str], frozenset[tuple[str, str]]]:
    """Return the touchpoints of which passing is not shown, and the (touchpoint, rule) of which credit is not.

    Parameters
    ----------
    tally : Tally
        Counted by rules that name touchpoints.
    least : int
        Fewer people than this are few.
    """
    table, names = tally.touches, (NONE_OF_THEM, *tally.touchpoints)
    place = np.zeros(len(tally.labels), np.int64)
    for i, name in enumerate(names[1:], start=1):
        place[tally.labels.index(name)] = i
    cell = place[table["state"]]
    won = np.isin(table["outcome"], _converted(tally))

    def seen(column: str) -> BoolArray:
        return buckets_of(cell, table["bucket"], table[column] * won, (len(names), N_BUCKETS))

    passed = not_shown(seen("n"), [], least) | _few_without(tally, cell, won, len(names), least)
    every = Line(np.arange(len(names)))
    # where none of them was touched nobody is the first or the last, and the share is that of the even split
    none = np.arange(len(names))[:, None] == 0
    hidden = {
        rule: not_shown(np.where(none, seen("n"), seen(column)), [every], least) for rule, column in _SUMS.items()
    }
    return (
        frozenset(name for name, one in zip(names, passed, strict=True) if one),
        frozenset((names[i], rule) for rule, mask in hidden.items() for i in np.flatnonzero(mask)),
    )


def _converted(tally: Tally) -> np.ndarray:
    rules = tally.rules
    return FIRST_OUTCOME + np.flatnonzero(np.isin(rules.outcomes, rules.converted))


def _few_without(tally: Tally, cell: np.ndarray, won: BoolArray, n_names: int, least: int) -> BoolArray:
    """Tell which touchpoints few of those who convert have not passed; by journeys where sets were not counted."""
    sets, found = tally.touch_sets, np.zeros(n_names, bool)
    if len(sets["n"]):
        mine = np.isin(sets["outcome"], _converted(tally)) & (sets["n"] > 0)
        for i in range(1, n_names):
            without = mine & ((sets["set"] >> (i - 1)) & 1 == 0)
            found[i] = is_few(np.bincount(sets["bucket"][without], minlength=N_BUCKETS) > 0, least)
        return found
    table = tally.touches
    n = np.where(won, table["n"], 0)
    whole = (n / np.maximum(table["distinct"], 1)).sum()
    without_it = np.rint(whole - np.bincount(cell, n, n_names))
    few: BoolArray = (without_it > 0) & (without_it < least)
    return few
