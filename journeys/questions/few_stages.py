"""Stages that too few people reached, or left in some way."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import BoolArray
from journeys.kernels.records import FIRST_OUTCOME, LAPSED
from journeys.kernels.small_cells import Line, buckets_of, not_shown
from journeys.models.stage_stays import NEXT, stage_rows
from journeys.models.stays import outcome_column
from journeys.questions.stage_rows import CONVERTED, ENTRY, UNDECIDED
from journeys.tally.tally import Tally


def few_stages(
    tally: Tally, outcomes: frozenset[str], least: int
) -> tuple[frozenset[str], frozenset[tuple[str, str]]]:
    """Return the stages of which nothing is shown, and the (stage, outcome) that are not.

    Parameters
    ----------
    tally : Tally
        Counted by rules that name stages.
    outcomes : set of str
        Those whose counts are not shown.
    least : int
        Fewer people than this are few.
    """
    rules, rows = tally.rules, stage_rows(tally)
    ends = [*rules.outcomes, "lapsed", UNDECIDED, "next"]
    codes = np.append(FIRST_OUTCOME + np.arange(len(rules.outcomes)), LAPSED)
    place = np.zeros(int(outcome_column(codes).max()) + 1, np.int64)
    place[outcome_column(codes)] = np.arange(len(codes))
    place[NEXT] = len(ends) - 1
    column = np.where(rows.is_open, len(ends) - 2, place[rows.column * ~rows.is_open])
    stages, width = (ENTRY, *rules.stages, CONVERTED), len(ends)
    n_cells = (rows.n_stages + 1) * width
    seen = buckets_of(rows.position * width + column, rows.bucket, rows.n, (n_cells, rows.n_buckets))
    grid = np.arange(n_cells).reshape(-1, width)
    down = [Line(np.append(grid[:, j], grid[-1, -1]) if name in rules.converted else grid[:, j], name not in outcomes)
            for j, name in enumerate(ends[:-1])]  # fmt: skip
    hidden = _closed(seen, grid, down, least)
    told = [stage for k, stage in enumerate(stages) if _unseen(seen, hidden, grid, k, least)]
    went = [(stages[k], ends[j]) for k, j in zip(*np.nonzero(hidden[grid]), strict=True)]
    return frozenset(told), frozenset(went)


def _closed(seen: BoolArray, grid: np.ndarray, down: list[Line], least: int) -> BoolArray:
    """Return the cells that are not shown; behind a stage that is not, none is."""
    lines = [*(Line(row) for row in grid), *down]
    # whoever goes on is the whole of the next stage, and is kept in sight as long as anything else will do
    rank = np.where(np.isin(np.arange(len(seen)), grid[:, -1]), 1, 0)
    hidden: BoolArray | None = None
    while True:
        found = not_shown(seen, lines, least, hidden, rank)
        more = found.copy()
        for k in range(1, len(grid)):
            more[grid[k]] |= _unseen(seen, more, grid, k, least)
        if hidden is not None and (more == hidden).all():
            return more
        hidden = more


def _unseen(seen: BoolArray, hidden: BoolArray, grid: np.ndarray, k: int, least: int) -> bool:
    """Tell whether nothing is shown of a stage."""
    if k == 0:
        return bool(0 < seen[grid[0]].any(axis=0).sum() < least)
    return bool(hidden[grid[k - 1, -1]])
