"""Which cells of tables are not shown, so that none of few people can be read or worked out from the others."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from journeys.kernels.arrays import BoolArray, IntArray


class Line(NamedTuple):
    """Cells that add up to a total, which readers know.

    Attributes
    ----------
    cells : ndarray of int
        Positions.
    total_known : bool
        False: the total is itself not shown, so that one cell not shown is enough to keep it so.
    """

    cells: IntArray
    total_known: bool = True


def buckets_of(cell: IntArray, bucket: IntArray, n: np.ndarray, shape: tuple[int, int]) -> BoolArray:
    """Return in which buckets of customers each cell was seen, shape (n_cells, n_buckets)."""
    seen = np.zeros(shape, bool)
    mine = n > 0
    seen[cell[mine], bucket[mine]] = True
    return seen


def is_few(seen: BoolArray, least: int) -> bool:
    """Tell whether cells taken together were seen, and in fewer buckets than wanted."""
    return bool(0 < np.atleast_2d(seen).any(axis=0).sum() < least)


def not_shown(
    seen: BoolArray, lines: Sequence[Line], least: int, hidden: BoolArray | None = None, rank: IntArray | None = None
) -> BoolArray:
    """Return which cells are not shown.

    Parameters
    ----------
    seen : ndarray of bool, shape (n_cells, n_buckets)
        In which buckets of customers each was seen: their number is a lower bound of its people.
    lines : sequence of Line
        What adds up to what. A cell can stand in several.
    least : int
        A cell of fewer people, but not of none, is not shown.
    hidden : ndarray of bool, shape (n_cells,), optional
        What is not shown for other reasons.
    rank : ndarray of int, shape (n_cells,), optional
        Cells of a lower rank are the first to go along; among equals the smallest.

    Returns
    -------
    ndarray of bool, shape (n_cells,)
        Where a line has one alone that is not shown, or such that are of too few people together, the next smallest
        goes along: else a subtraction would tell what they are. Cells of nobody are shown.

    Notes
    -----
    Known in official statistics as primary and secondary suppression of cells.

    Examples
    --------
    >>> seen = np.arange(12) < np.array([[12], [3], [8], [0]])
    >>> not_shown(seen, [Line(np.arange(4))], 5).tolist()
    [False, True, True, False]
    """
    people = seen.sum(axis=1)
    found: BoolArray = (people > 0) & (people < least)
    if hidden is not None:
        found |= hidden
    order = np.lexsort((people, np.zeros(len(people), np.int64) if rank is None else rank))
    place = np.empty(len(order), np.int64)
    place[order] = np.arange(len(order))
    held = [line._replace(cells=line.cells[people[line.cells] > 0]) for line in lines]
    changed = True
    while changed:
        changed = False
        for line in held:
            if line.total_known and not found[line.cells].any():
                continue
            more = _beside(line, seen, found, place, least)
            found[more] = True
            changed |= bool(more)
    return found


def _beside(line: Line, seen: BoolArray, found: BoolArray, place: IntArray, least: int) -> list[int]:
    """Return which further cells of a line go along."""
    mine = line.cells[found[line.cells]]
    together, n = seen[mine].any(axis=0), len(mine)
    rest = line.cells[~found[line.cells]]
    more = []
    for cell in rest[np.argsort(place[rest])].tolist():
        if n >= 1 and not line.total_known or n >= 2 and together.sum() >= least:
            break
        more.append(cell)
        together, n = together | seen[cell], n + 1
    return more
