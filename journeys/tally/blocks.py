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
    waiting: Rows | None = None
    for block in blocks:
        if not len(block):
            continue
        if waiting is not None:
            # Mostly nothing ties, and nothing is copied.
            cut = len(waiting) if _apart(waiting, block) else _last_safe_cut(waiting)
            if cut:
                yield waiting.take(slice(0, cut))
            if cut < len(waiting):
                block = concat_rows([waiting.take(slice(cut, None)), block])
        waiting = block
    if waiting is not None:
        yield waiting


def _apart(rows: Rows, later: Rows) -> bool:
    """Tell whether the next block begins with another moment and another customer."""
    return bool(rows.time[-1] != later.time[0] and rows.key[-1] != later.key[0])


def _last_safe_cut(rows: Rows) -> int:
    """Return the first position of the run of rows at the end that have to wait."""
    moment = _run_start(rows.time == rows.time[-1])
    customer = _run_start(rows.key == rows.key[-1])
    return min(moment, customer) if customer > len(rows.key) // 2 else moment


def _run_start(same: np.ndarray) -> int:
    """Return where the run of True at the end begins."""
    return len(same) - int(np.argmin(same[::-1])) if not same.all() else 0
