"""Which nodes of a move graph can be reached, and how its states fall into classes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import BoolArray, IntArray

if TYPE_CHECKING:
    from scipy.sparse import csr_array


_SWEEPS = 12


@dataclass(frozen=True, eq=False)
class Classes:
    """Classes of states that can reach one another.

    Attributes
    ----------
    class_of : int array, shape (n,)
        Number of the class of each node, counted from 0.
    is_recurrent : bool array, shape (n,)
        True in classes that are never left; every outcome is one.
    period : int array, shape (n,)
        Greatest common divisor of the lengths of all round trips; 1 for an outcome,
        0 for a state to which no way leads back.
    dead_end : bool array, shape (n,)
        Recurrent states of a graph that has outcomes: none can be reached from them.
    """

    class_of: IntArray
    is_recurrent: BoolArray
    period: IntArray
    dead_end: BoolArray


def _graph(n: int, src: IntArray, dst: IntArray) -> csr_array:
    from scipy.sparse import csr_array

    return csr_array((np.ones(len(src)), (src, dst)), shape=(n, n))


def reachable_from(n: int, src: IntArray, dst: IntArray, starts: BoolArray) -> BoolArray:
    """Nodes that can be reached from any of the starts, the starts among them.

    Parameters
    ----------
    n : int
        Number of nodes.
    src, dst : int arrays, shape (n_moves,)
        Moves that have a positive probability.
    starts : bool array, shape (n,)
        Where to begin.

    Returns
    -------
    bool array, shape (n,)

    Examples
    --------
    >>> import numpy as np
    >>> reachable_from(4, np.array([0, 1, 3]), np.array([1, 2, 0]), np.arange(4) == 1).tolist()
    [False, True, True, False]
    """
    found = starts.copy()
    # most chains are shallow: a few sweeps over the moves find all, before a search would have been set up
    for _ in range(_SWEEPS):
        further = found.copy()
        further[dst[found[src]]] = True
        if (further == found).all():
            return found
        found = further
    return _searched(n, src, dst, found)


def _searched(n: int, src: IntArray, dst: IntArray, starts: BoolArray) -> BoolArray:
    """Do the same by one search, however deep the graph."""
    from scipy.sparse.csgraph import breadth_first_order

    # one more node leads to all starts, so that one search does
    first = np.flatnonzero(starts)
    graph = _graph(n + 1, np.concatenate([src, np.full(len(first), n)]), np.concatenate([dst, first]))
    found = np.zeros(n + 1, dtype=np.bool_)
    found[breadth_first_order(graph, n, directed=True, return_predecessors=False)] = True
    return found[:n]


def can_reach(n: int, src: IntArray, dst: IntArray, targets: BoolArray) -> BoolArray:
    """Nodes from which any of the targets can be reached, the targets among them.

    Parameters
    ----------
    n : int
        Number of nodes.
    src, dst : int arrays, shape (n_moves,)
        Moves that have a positive probability.
    targets : bool array, shape (n,)
        Where to end.

    Returns
    -------
    bool array, shape (n,)

    Examples
    --------
    >>> import numpy as np
    >>> can_reach(4, np.array([0, 1, 3]), np.array([1, 2, 0]), np.arange(4) == 1).tolist()
    [True, True, False, True]
    """
    return reachable_from(n, dst, src, targets)


def strong_classes(n: int, src: IntArray, dst: IntArray) -> IntArray:
    """Class of each node: two share one if each can be reached from the other.

    Parameters
    ----------
    n : int
        Number of nodes.
    src, dst : int arrays, shape (n_moves,)
        Moves that have a positive probability.

    Returns
    -------
    int array, shape (n,)
        Classes numbered by their lowest node.

    Examples
    --------
    >>> import numpy as np
    >>> strong_classes(4, np.array([0, 1, 1, 2]), np.array([1, 0, 2, 3])).tolist()
    [0, 0, 1, 2]
    """
    from scipy.sparse.csgraph import connected_components

    found = connected_components(_graph(n, src, dst), directed=True, connection="strong")[1]
    _, first, where = np.unique(found, return_index=True, return_inverse=True)
    rank = np.empty(len(first), dtype=np.int64)
    rank[np.argsort(first)] = np.arange(len(first))
    return rank[where]


def closed_classes(src: IntArray, dst: IntArray, class_of: IntArray) -> BoolArray:
    """Tell which classes no move leaves.

    Parameters
    ----------
    src, dst : int arrays, shape (n_moves,)
        Moves that have a positive probability.
    class_of : int array, shape (n,)
        From `strong_classes`.

    Returns
    -------
    bool array, shape (n_classes,)

    Examples
    --------
    >>> import numpy as np
    >>> closed_classes(np.array([0, 1, 1]), np.array([1, 0, 2]), np.array([0, 0, 1])).tolist()
    [False, True]
    """
    closed = np.ones(class_of.max(initial=-1) + 1, dtype=np.bool_)
    closed[class_of[src[class_of[src] != class_of[dst]]]] = False
    return closed


def class_periods(src: IntArray, dst: IntArray, class_of: IntArray) -> IntArray:
    """Period of each class.

    Parameters
    ----------
    src, dst : int arrays, shape (n_moves,)
        Moves that have a positive probability.
    class_of : int array, shape (n,)
        From `strong_classes`.

    Returns
    -------
    int array, shape (n_classes,)
        Greatest common divisor of the lengths of all round trips; 0 where there is none.

    Notes
    -----
    With ``level`` the fewest moves from one node of the class, the period is the greatest
    common divisor of ``level[i] + 1 - level[j]`` over the moves i -> j within the class.

    References
    ----------
    E. V. Denardo, Periods of connected networks and powers of nonnegative matrices,
    Mathematics of Operations Research 2 (1977) 20-24.

    Examples
    --------
    >>> import numpy as np
    >>> ring = np.array([0, 1, 2, 3]), np.array([1, 2, 3, 0])
    >>> class_periods(*ring, np.zeros(4, dtype=np.int64)).tolist()
    [4]
    """
    from scipy.sparse.csgraph import dijkstra

    n = len(class_of)
    classes, roots = np.unique(class_of, return_index=True)
    inside = class_of[src] == class_of[dst]
    i, j = src[inside], dst[inside]
    graph = _graph(n + 1, np.concatenate([i, np.full(len(roots), n)]), np.concatenate([j, roots]))
    level = dijkstra(graph, indices=np.array([n]), unweighted=True)[0, :n].astype(np.int64)
    periods = np.zeros(len(classes), dtype=np.int64)
    np.gcd.at(periods, class_of[i], np.abs(level[i] + 1 - level[j]))
    return periods


def classify(n: int, src: IntArray, dst: IntArray, is_outcome: BoolArray) -> Classes:
    """Classes, recurrence, periods and dead ends of a move graph.

    Parameters
    ----------
    n : int
        Number of nodes, states and outcomes.
    src, dst : int arrays, shape (n_moves,)
        Moves that have a positive probability; none may leave an outcome.
    is_outcome : bool array, shape (n,)
        Which nodes are outcomes.

    Returns
    -------
    Classes

    References
    ----------
    J. G. Kemeny and J. L. Snell, Finite Markov Chains, Van Nostrand 1960, chapter II.

    Examples
    --------
    State 0 moves to 1 or to the outcome 3; 1 and 2 go back and forth for ever.

    >>> import numpy as np
    >>> src, dst = np.array([0, 0, 1, 2]), np.array([1, 3, 2, 1])
    >>> found = classify(4, src, dst, np.arange(4) == 3)
    >>> found.class_of.tolist(), found.period.tolist(), found.dead_end.tolist()
    ([0, 1, 1, 2], [0, 2, 2, 1], [False, True, True, False])
    """
    class_of = strong_classes(n, src, dst)
    is_recurrent = closed_classes(src, dst, class_of)[class_of]
    period = np.where(is_outcome, 1, class_periods(src, dst, class_of)[class_of])
    return Classes(class_of, is_recurrent, period, is_recurrent & ~is_outcome & bool(is_outcome.any()))
