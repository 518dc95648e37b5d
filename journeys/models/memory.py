"""The nodes of a chain, and where moves lead among them: by the state alone, or by those before it too."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.errors import LogError
from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.histories import ENTRY, UNKNOWN, extended, latest, slot
from journeys.kernels.records import FIRST_OUTCOME, LAPSED
from journeys.tally.tally import Tally

_BITS = 16


@dataclass(frozen=True)
class Nodes:
    """Positions of entry, states and outcomes in the arrays of a fit: entry is 0, then the states, then ends.

    Attributes
    ----------
    states : tuple of str
        In a chain of a higher order "basket after price page": the state a journey is in and those before it.
    outcomes : tuple of str
        The ends.
    last : tuple of str
        The state each of `states` is in, where its name says more; else empty.
    order : int
        How many of the last states say where a journey goes next.
    """

    states: tuple[str, ...]
    outcomes: tuple[str, ...]
    last: tuple[str, ...] = ()
    order: int = 1

    @property
    def labels(self) -> tuple[str, ...]:
        """Names of all nodes."""
        return ("entry", *self.states, *self.outcomes)

    @property
    def n_rows(self) -> int:
        """Entry and the states."""
        return 1 + len(self.states)

    @property
    def n_nodes(self) -> int:
        """Rows and outcomes."""
        return self.n_rows + len(self.outcomes)

    @property
    def last_states(self) -> tuple[str, ...]:
        """The state that a journey is in, for each of `states`."""
        return self.last or self.states

    def rows_of(self, name: str) -> IntArray:
        """Return the rows of a state: of the one of that name, or of all in which a journey is in it.

        Examples
        --------
        >>> nodes = Nodes(("basket after entry", "basket after price"), (), ("basket", "basket"), 2)
        >>> nodes.rows_of("basket").tolist(), nodes.rows_of("basket after price").tolist()
        ([1, 2], [2])
        """
        if name in self.states:
            return np.array([1 + self.states.index(name)])
        return np.array([row for row, last in enumerate(self.last_states, start=1) if last == name], dtype=np.int64)


@dataclass(frozen=True, eq=False)
class Placed:
    """Moves and entries of a tally among the nodes of a chain.

    Attributes
    ----------
    nodes : Nodes
        The nodes.
    kept : ndarray of bool, shape (n_moves,)
        Which moves have a known history.
    row, target : ndarray of int64, shape (n_kept,)
        Where the kept moves come from and lead to; -1 for an open stay.
    first : ndarray of int64, shape (n_entries,)
        Where the entries lead to.
    """

    nodes: Nodes
    kept: BoolArray
    row: IntArray
    target: IntArray
    first: IntArray


def placed(tally: Tally, order: int) -> Placed:
    """Return the nodes of the chain of some order, and where the moves of a tally lead among them.

    Parameters
    ----------
    tally : Tally
        Counted with at least that order.
    order : int
        How many of the last states make a node.

    Returns
    -------
    Placed

    Raises
    ------
    LogError
        If two nodes would have the same name.
    """
    lapsed = () if tally.rules.silence_us is None else ("lapsed",)
    outcomes = (*tally.rules.outcomes, *lapsed)
    moves, entries = tally.moves, tally.entries
    if order == 1:
        nodes = Nodes(tally.states, outcomes)
        place = _ends(tally, nodes)
        place[tally.first_state :] = 1 + np.arange(len(tally.states))
        return Placed(
            nodes, np.ones(len(moves["n"]), bool), place[moves["state"]], place[moves["next"]], place[entries["state"]]
        )
    n_slots = order - 1
    before = latest(moves["before"], n_slots)
    kept = np.ones(len(before), bool)
    for which in range(n_slots):
        kept &= slot(before, which) != UNKNOWN
    before, next_code = before[kept], moves["next"][kept].astype(np.int64)
    state, first_code = moves["state"][kept].astype(np.int64), entries["state"].astype(np.int64)
    # One whole number per node: the states before in the upper bits, the state itself in the lowest.
    here = before << _BITS | state
    there = extended(before, state, n_slots) << _BITS | next_code
    goes_on, begins = next_code >= tally.first_state, first_code >= tally.first_state
    known = np.unique(np.concatenate([here, there[goes_on], first_code[begins]]))
    known = known[np.lexsort((known, slot(known, 0)))]
    nodes = Nodes(
        tuple(_name(tally, number, n_slots) for number in known.tolist()),
        outcomes,
        tuple(tally.labels[code] for code in slot(known, 0).tolist()),
        order,
    )
    _refuse_twice(nodes)
    place, in_order = _ends(tally, nodes), np.argsort(known)

    def rows(number: IntArray) -> IntArray:
        # Outcomes are looked up in vain, and taken from their own list.
        if not len(known):
            return np.zeros_like(number)
        at = np.minimum(np.searchsorted(known, number, sorter=in_order), len(known) - 1)
        return 1 + in_order[at]

    return Placed(
        nodes,
        kept,
        rows(here),
        np.where(goes_on, rows(there), place[next_code]),
        np.where(begins, rows(first_code), place[first_code]),
    )


def _ends(tally: Tally, nodes: Nodes) -> IntArray:
    """Return the node of each outcome's code in the tally's tables; -1 where there is none, and for the states."""
    place = np.full(len(tally.labels), -1)
    n_outcomes = len(tally.rules.outcomes)
    place[LAPSED] = nodes.n_nodes - 1 if tally.rules.silence_us is not None else -1
    place[FIRST_OUTCOME : FIRST_OUTCOME + n_outcomes] = nodes.n_rows + np.arange(n_outcomes)
    return place


def _name(tally: Tally, number: int, n_slots: int) -> str:
    """Return the name of a node: the state, and those before it in the order in which they were passed."""
    codes = [(number >> (_BITS * which)) & ((1 << _BITS) - 1) for which in range(n_slots + 1)]
    passed = [tally.labels[code] for code in codes[:0:-1] if code != ENTRY]
    if ENTRY in codes[1:]:
        passed.insert(0, "entry")
    return f"{tally.labels[codes[0]]} after {', '.join(passed)}"


def _refuse_twice(nodes: Nodes) -> None:
    seen: set[str] = set()
    for name in nodes.labels:
        if name in seen:
            msg = f"two states of the chain would be called {name!r}; give their events other names with `states`"
            raise LogError(msg)
        seen.add(name)
