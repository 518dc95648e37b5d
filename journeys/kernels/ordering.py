"""In which order and in which blocks the states of a large chain are taken out, and how much that will fill."""

from __future__ import annotations

import heapq
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import IntArray

if TYPE_CHECKING:
    from scipy.sparse import csr_array

_TOGETHER = 64  # states taken out in one block
_EASY = 10_000_000  # entries up to which no better order is looked for
_PEELED = 32  # neighbours up to which a state is taken out by itself before the others are ordered


@dataclass(frozen=True, eq=False)
class Block:
    """States `start` to `stop` of an order, and the later states that they meet when they are taken out."""

    start: int
    stop: int
    rest: IntArray


@dataclass(frozen=True, eq=False)
class Plan:
    """An order of elimination.

    Attributes
    ----------
    order : int array, shape (n,)
        The states in the order in which they are taken out.
    blocks : list of Block
        The same order cut in blocks; numbers are places in the order.
    """

    order: IntArray
    blocks: list[Block]

    @property
    def entries(self) -> int:
        """Numbers that the factors will hold, known before any of them is computed."""
        return sum((b.stop - b.start) * (b.stop - b.start + 2 * len(b.rest)) for b in self.blocks)


def all_at_once(n: int) -> Plan:
    """Take all states out in one block, as in a full matrix.

    Parameters
    ----------
    n : int
        Number of states.

    Returns
    -------
    Plan

    Examples
    --------
    >>> all_at_once(3).entries
    9
    """
    blocks = [Block(0, n, np.zeros(0, dtype=np.int64))] if n else []
    return Plan(np.arange(n), blocks)


def plan(n: int, row: IntArray, column: IntArray) -> Plan:
    """Find an order that keeps what elimination fills small.

    Parameters
    ----------
    n : int
        Number of states.
    row, column : int arrays, shape (n_moves,)
        Moves between them.

    Returns
    -------
    Plan
        Its `entries` tell what the factors will take.

    Notes
    -----
    The order of Cuthill and McKee, reversed, keeps chains whose moves stay among neighbours in a band. Where
    that would fill much, states with few neighbours are first taken out one by one, the fewest first, and only
    what is left is put in that order. Nothing is filled outside the front of states already met, so `entries` is
    an upper bound on the numbers that differ from zero, and exactly what is kept.

    References
    ----------
    A. George and J. W. Liu, Computer Solution of Large Sparse Positive Definite Systems, Prentice-Hall 1981,
    chapters 4 and 5.

    Examples
    --------
    A walk on a line of 1,000 states.

    >>> at = np.arange(999)
    >>> found = plan(1000, np.r_[at, at + 1], np.r_[at + 1, at])
    >>> found.entries < 70 * 1000
    True
    """
    graph = _neighbours(n, row, column)
    in_band = Plan(*_band(graph))
    if in_band.entries <= _EASY:
        return in_band
    peeled = _peel_first(graph)
    return min(in_band, peeled, key=lambda one: one.entries)


def _neighbours(n: int, row: IntArray, column: IntArray) -> csr_array:
    """Graph of moves in either direction, without those of a state to itself."""
    from scipy.sparse import csr_array

    off = row != column
    one_way = csr_array((np.ones(int(off.sum())), (row[off], column[off])), shape=(n, n))
    return csr_array(one_way + one_way.T)


def _band(graph: csr_array) -> tuple[IntArray, list[Block]]:
    """Reverse Cuthill-McKee order with the few states that nearly all others meet put last."""
    from scipy.sparse.csgraph import reverse_cuthill_mckee

    n = graph.shape[0]
    degree = np.diff(graph.indptr)
    hub = degree > max(16.0, 10.0 * np.sqrt(n))
    plain = np.flatnonzero(~hub)
    inner = graph if len(plain) == n else graph[plain][:, plain]
    order = np.concatenate([plain[reverse_cuthill_mckee(inner, symmetric_mode=True)], np.flatnonzero(hub)])
    place = np.empty(n, dtype=np.int64)
    place[order] = np.arange(n)
    # the earliest state that each one meets: from there on it stands in the front
    first = np.arange(n)
    of = np.repeat(np.arange(n), degree)
    np.minimum.at(first, place[of], place[graph.indices])
    blocks, stop = [], 0
    while stop < n:
        # a wide front is moved on in wide steps, or it would be copied too often
        start, width = stop, int((first[stop:] < stop).sum())
        stop = min(start + max(_TOGETHER, width // 2), n)
        blocks.append(Block(start, stop, stop + np.flatnonzero(first[stop:] < stop)))
    return order.astype(np.int64), blocks


def _peel_first(graph: csr_array) -> Plan:
    """Take out states with few neighbours one by one, the fewest first; then the others, in a band."""
    n = graph.shape[0]
    near = [set(one.tolist()) for one in np.split(graph.indices, graph.indptr[1:-1])]
    left = np.ones(n, dtype=np.bool_)
    queue = [(len(near[i]), i) for i in range(n) if len(near[i]) <= _PEELED]
    heapq.heapify(queue)
    peeled: list[tuple[int, list[int]]] = []
    while queue:
        size, i = heapq.heappop(queue)
        if not left[i] or size != len(near[i]):
            continue
        left[i] = False
        mine = near[i]
        peeled.append((i, list(mine)))
        for j in mine:
            # what it met now meet each other
            near[j] |= mine
            near[j] -= {i, j}
            if len(near[j]) <= _PEELED:
                heapq.heappush(queue, (len(near[j]), j))
        near[i] = set()
    return _then_band(left, near, peeled)


def _then_band(left: np.ndarray, near: list[set[int]], peeled: list[tuple[int, list[int]]]) -> Plan:
    core = np.flatnonzero(left)
    inside = np.full(len(left), -1, dtype=np.int64)
    inside[core] = np.arange(len(core))
    row = np.repeat(np.arange(len(core)), [len(near[i]) for i in core])
    column = inside[np.fromiter((j for i in core for j in near[i]), np.int64, len(row))]
    order, blocks = _band(_neighbours(len(core), row, column)) if len(core) else (core, [])
    order = np.concatenate([np.array([i for i, _ in peeled], dtype=np.int64), core[order]])
    place = np.empty(len(left), dtype=np.int64)
    place[order] = np.arange(len(left))
    before = len(peeled)
    alone = [
        Block(at, at + 1, np.sort(place[np.array(met, dtype=np.int64)])) for at, (_, met) in enumerate(peeled)
    ]
    return Plan(order, alone + [Block(b.start + before, b.stop + before, b.rest + before) for b in blocks])


def parents(blocks: list[Block]) -> IntArray:
    """Block that takes over what each block leaves behind: the one with the first state that it met.

    Parameters
    ----------
    blocks : list of Block
        In the order of elimination.

    Returns
    -------
    int array, shape (n_blocks,)
        -1 where nothing is left behind.

    Examples
    --------
    >>> parents([Block(0, 2, np.array([3])), Block(2, 3, np.array([3])), Block(3, 4, np.array([]))]).tolist()
    [2, 2, -1]
    """
    starts = np.array([b.start for b in blocks])
    met = np.array([b.rest[0] if len(b.rest) else -1 for b in blocks], dtype=np.int64)
    return np.where(met < 0, -1, np.searchsorted(starts, met, side="right") - 1)
