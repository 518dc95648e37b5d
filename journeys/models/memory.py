"""The states of a chain: those of the tally alone, or each told apart by the states before it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.errors import LogError
from journeys.kernels.arrays import IntArray
from journeys.kernels.histories import ENTRY, UNKNOWN, extended, latest, slot
from journeys.tally.accumulate import Columns
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
class Chain:
    """Moves and entries of a tally by the states of a chain of some order.

    Attributes
    ----------
    states, last, order
        As in `Nodes`.
    moves, entries : dict of str to ndarray
        The tables of the tally, their states being codes of the states of the chain: those of the ends as in the tally,
        then those of `states`. Moves with an unknown history are left out.
    """

    states: tuple[str, ...]
    last: tuple[str, ...]
    order: int
    moves: Columns
    entries: Columns

    def nodes(self, tally: Tally) -> Nodes:
        """Return the nodes of the chain: its states and the outcomes, lapsed among them where a silence is given."""
        return Nodes(self.states, ends_of(tally), self.last, self.order)


def ends_of(tally: Tally) -> tuple[str, ...]:
    """Return the ways in which journeys end."""
    return (*tally.rules.outcomes, *(() if tally.rules.silence_us is None else ("lapsed",)))


def chain_of(tally: Tally, order: int) -> Chain:
    """Return moves and entries of a tally by the states of the chain of some order.

    Parameters
    ----------
    tally : Tally
        Counted with at least that order.
    order : int
        How many of the last states make a state of the chain.

    Raises
    ------
    LogError
        If two states would have the same name.
    """
    if order == 1:
        return Chain(tally.states, (), 1, tally.moves, tally.entries)
    n_slots, first_state = order - 1, tally.first_state
    before = latest(tally.moves["before"], n_slots)
    kept = np.ones(len(before), bool)
    for which in range(n_slots):
        kept &= slot(before, which) != UNKNOWN
    moves = {name: column[kept] for name, column in tally.moves.items() if name != "before"}
    before, state, to = before[kept], moves["state"].astype(np.int64), moves["next"].astype(np.int64)
    first = tally.entries["state"].astype(np.int64)
    # One whole number per state of the chain: the states before in the upper bits, the state itself in the lowest.
    here = before << _BITS | state
    there = extended(before, state, n_slots) << _BITS | to
    goes_on, begins = to >= first_state, first >= first_state
    known = np.unique(np.concatenate([here, there[goes_on], first[begins]]))
    known = known[np.lexsort((known, slot(known, 0)))]
    in_order = np.argsort(known)

    def code(number: IntArray) -> IntArray:
        # What is no state is looked up in vain, and keeps its own code.
        if not len(known):
            return number
        at = np.minimum(np.searchsorted(known, number, sorter=in_order), len(known) - 1)
        return first_state + in_order[at]

    moves |= {"state": code(here), "next": np.where(goes_on, code(there), to)}
    states = tuple(_name(tally, number, n_slots) for number in known.tolist())
    _refuse_twice(("entry", *states, *ends_of(tally)))
    last = tuple(tally.labels[one] for one in slot(known, 0).tolist())
    return Chain(states, last, order, moves, {**tally.entries, "state": np.where(begins, code(first), first)})


def _name(tally: Tally, number: int, n_slots: int) -> str:
    """Return the name of a node: the state, and those before it in the order in which they were passed."""
    codes = [(number >> (_BITS * which)) & ((1 << _BITS) - 1) for which in range(n_slots + 1)]
    passed = [tally.labels[code] for code in codes[:0:-1] if code != ENTRY]
    if ENTRY in codes[1:]:
        passed.insert(0, "entry")
    return f"{tally.labels[codes[0]]} after {', '.join(passed)}"


def _refuse_twice(names: tuple[str, ...]) -> None:
    seen: set[str] = set()
    for name in names:
        if name in seen:
            msg = f"two states of the chain would be called {name!r}; give their events other names with `states`"
            raise LogError(msg)
        seen.add(name)
