"""Cutting a stream of rows where no tie can straddle the cut."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from journeys.intake.rows import Rows, concat_rows


def cut_between_ties(blocks: Iterator[Rows]) -> Iterator[Rows]:
    """Regroup blocks so that the rows at the end that the next block may tie with wait for it.

    Parameters
    ----------
    blocks : iterator of Rows
        In input order.

    Yields
    ------
    Rows
        The same rows in the same order. In a log in time order, rows of one moment stay together; in one
        grouped by customer, so do the rows of a customer unless they fill half a block.
    """
    waiting: list[Rows] = []
    for block in blocks:
        if not len(block.key):
            continue
        waiting.append(block)
        del block
        rows = concat_rows(waiting)
        cut = _last_safe_cut(rows)
        # A copy, so that the few rows that wait do not keep the whole block in memory.
        waiting = [rows.take(np.arange(cut, len(rows)))]
        if cut:
            rows = rows.take(slice(0, cut))
            yield rows
        del rows
    yield from waiting


def _last_safe_cut(rows: Rows) -> int:
    """Return the first position of the run of rows at the end that have to wait."""
    moment = _run_start(rows.time == rows.time[-1])
    customer = _run_start(rows.key == rows.key[-1])
    return min(moment, customer) if customer > len(rows.key) // 2 else moment


def _run_start(same: np.ndarray) -> int:
    """Return where the run of True at the end begins."""
    return len(same) - int(np.argmin(same[::-1])) if not same.all() else 0
