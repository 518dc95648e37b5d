"""Moves with the states before them, of which nothing is cut off: what tests of the chain's memory count."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import IntArray
from journeys.kernels.histories import ENTRY, UNKNOWN, slot
from journeys.kernels.order_tests import Counts, Histories
from journeys.kernels.records import OPEN
from journeys.models.stays import live_buckets
from journeys.tally.accumulate import Columns
from journeys.tally.tally import Tally


def histories_of(tally: Tally) -> Histories:
    """Return the moves out of states that were seen for a whole silence, with what came before all known.

    Younger stays that have ended are left out: those that are over in time are the short ones.
    """
    rows = _mature(tally)
    known = rows["previous"] != UNKNOWN
    before = [rows["previous"].astype(np.int64)]
    for which in range(tally.order - 1):
        code = slot(rows["earlier"], which)
        known &= code != UNKNOWN
        before.append(code)
    states = np.stack([*before[::-1], rows["state"].astype(np.int64)], axis=1)[known]
    bucket = live_buckets(tally)[rows["bucket"][known]]
    return Histories(bucket, states, rows["next"][known].astype(np.int64), rows["n"][known].astype(np.float64))


def tables_by_part(tally: Tally, part_of_group: IntArray) -> Counts:
    """Return the moves out of each state by part of the journeys; groups of part -1 are left out.

    Parameters
    ----------
    tally : Tally
        Of grouped journeys.
    part_of_group : ndarray of int64, shape (n_groups,)
        Which part each group belongs to.

    Returns
    -------
    Counts
        Strata are states, numbered in the order of `tally.states`; rows the parts, columns codes of what is next.
    """
    rows = _mature(tally)
    part = part_of_group[rows["group"]]
    mine = part >= 0
    return Counts(
        bucket=live_buckets(tally)[rows["bucket"][mine]],
        stratum=rows["state"][mine].astype(np.int64) - tally.first_state,
        row=part[mine],
        column=rows["next"][mine].astype(np.int64),
        n=rows["n"][mine].astype(np.float64),
    )


def state_words(tally: Tally, code: int) -> str:
    """Return the name of a code among the states before a move."""
    return "entry" if code == ENTRY else tally.labels[code]


def _mature(tally: Tally) -> Columns:
    """Return the contexts of stays that were seen to their end; without a silence all of them or none."""
    table = tally.contexts
    mine = table["mature"].astype(bool)
    if tally.rules.silence_us is None and (tally.moves["next"] == OPEN).any():
        mine = np.zeros_like(mine)
    return {name: values[mine] for name, values in table.items()}
