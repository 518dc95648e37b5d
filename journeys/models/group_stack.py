"""All groups of a tally fitted in one go: their chains one after the other make one larger chain."""

from __future__ import annotations

import itertools
import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from journeys.errors import JourneysWarning
from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.histories import slot
from journeys.kernels.records import FIRST_OUTCOME, LAPSED
from journeys.models.fit import Influence, JourneyFit
from journeys.models.memory import Chain, Nodes, chain_of, ends_of
from journeys.models.model import JourneyModel, fault_of_part
from journeys.models.places import Places
from journeys.models.stack_stays import StackStays, own_node
from journeys.models.stays import placed_stays
from journeys.tally.groups import Group, gathered
from journeys.tally.parts import histories
from journeys.tally.spans import spans_of
from journeys.tally.tables import KEYS, N_BUCKETS
from journeys.tally.tally import Tally

# Cells of matrices that are fitted together: the influence of 200 buckets on each takes 5 kB.
_TOGETHER = 20_000


@dataclass(frozen=True, eq=False)
class GroupParts:
    """What the groups of a tally hold, seen from outside.

    Attributes
    ----------
    values : tuple of tuple
        Values of the columns grouped by, in order.
    group : int array, shape (n_groups of the tally,)
        Which of them a group of the tally belongs to.
    seen : bool array, shape (n_groups, n_codes)
        States that a group sees; codes that are no state count as seen.
    live : bool array, shape (n_groups, n_buckets)
        Buckets that hold any of its customers.
    why : tuple of str
        Why a group cannot carry a fit; empty where it can.
    chain : Chain
        Moves and entries of all groups by the states of the chain.
    """

    values: tuple[Group, ...]
    group: IntArray
    seen: BoolArray
    live: BoolArray
    why: tuple[str, ...]
    chain: Chain


def group_parts(tally: Tally, by: Sequence[str], order: int) -> GroupParts:
    """Return what the groups by some columns hold.

    Raises
    ------
    ValueError
        If a column is not one that journeys are grouped by.
    """
    found = gathered(tally.groups, tally.rules.by, by)
    group = np.empty(len(tally.groups), np.int64)
    for i, index in enumerate(found.values()):
        group[index] = i
    live = np.zeros((len(found), N_BUCKETS), bool)
    chain = chain_of(tally, order)
    for name in KEYS:
        table = getattr(tally, name)
        of = group[table["group"]]
        # in a period there are moves of journeys that began in the one before
        if name in ("journeys", "moves"):
            live.ravel()[of * N_BUCKETS + table["bucket"]] = True
    followed = np.zeros(len(found), np.int64)
    spans = spans_of(tally.rules, tally.groups, tally.span)
    np.maximum.at(followed, group, np.array([until - begin for begin, _, until in spans], np.int64))
    sure = np.zeros(len(found), bool)
    sure[group[tally.entries["group"][tally.entries["sure"] == 1]]] = True
    faults = [
        fault_of_part(tally, us / 86_400e6, sure=has) for us, has in zip(followed.tolist(), sure.tolist(), strict=True)
    ]
    why = tuple("" if fault is None else fault.briefly for fault in faults)
    return GroupParts(tuple(found), group, _seen(tally, chain, group, len(found)), live, why, chain)


def _seen(tally: Tally, chain: Chain, group: IntArray, n_groups: int) -> BoolArray:
    """Return which states each group sees: those of its part of the tally, or of a chain of a higher order."""
    seen = np.zeros((n_groups, tally.first_state + len(chain.states)), bool)
    tables = {name: getattr(tally, name) for name in KEYS} if chain.order == 1 else {}
    for table in (tables | {"moves": chain.moves, "entries": chain.entries}).values():
        of = group[table["group"]]
        for column in ("state", "next", "stage", "previous"):
            if column in table:
                seen.ravel()[of * seen.shape[1] + table[column]] = True
    if chain.order == 1:
        for column, n_slots, name in histories(tally):
            table = getattr(tally, name)
            for which in range(n_slots):
                seen.ravel()[group[table["group"]] * seen.shape[1] + slot(table[column], which)] = True
    seen[:, : tally.first_state] = True
    return seen


@dataclass(frozen=True, eq=False)
class Stack:
    """Fits of several groups as one chain, whose rows are those of each group in turn; they share the outcomes.

    Attributes
    ----------
    fit : JourneyFit
        The chain. Its rows go by their number, not by the name of the state; the influence is that of all
        buckets, with zeros for those that a group does not have.
    groups : int array, shape (n,)
        Which groups, as positions in `GroupParts.values`.
    first : int array, shape (n + 1,)
        The first row of each group, which is its entry, and the number of rows.
    states, last : tuple of tuple of str
        Names of the states of each group, and which state a journey is in there (as in `Nodes`).
    order : int
        Of the chains.
    live : bool array, shape (n, n_buckets)
        Buckets that hold any customer of the group.
    """

    fit: JourneyFit
    groups: IntArray
    first: IntArray
    states: tuple[tuple[str, ...], ...]
    last: tuple[tuple[str, ...], ...]
    order: int
    live: BoolArray

    @property
    def row_group(self) -> IntArray:
        """Which group each row belongs to, as a position among those of the stack."""
        return np.repeat(np.arange(len(self.groups)), np.diff(self.first))

    def part(self, i: int, tally: Tally) -> JourneyFit:
        """Return the fit of one group by itself.

        Parameters
        ----------
        i : int
            Position of the group in the stack.
        tally : Tally
            The part of the tally that it makes up.
        """
        whole, nodes = self.fit, Nodes(self.states[i], self.fit.outcomes, self.last[i], self.order)
        low, high = int(self.first[i]), int(self.first[i + 1])
        a, b = np.searchsorted(whole.move_state, [low, high])
        if whole.influence is None:
            raise TypeError
        pulls = (whole.influence.probability, whole.influence.mean, whole.influence.second)
        live = self.live[i]
        return JourneyFit(
            nodes=nodes,
            converted=whole.converted,
            move_state=whole.move_state[a:b] - low,
            move_target=own_node(whole.move_target[a:b], low, high, whole.nodes.n_rows),
            n_moves=whole.n_moves[a:b],
            probability=whole.probability[a:b],
            mean=whole.mean[a:b],
            second=whole.second[a:b],
            row_flags={nodes.labels[row - low]: text for row, text in self._flags[i]},
            open_moves=whole.open_moves,
            tally=tally,
            influence=Influence(*(pull[live, a:b] for pull in pulls)),
            fitted_stays=self._stays.part(i, live),
        )

    @cached_property
    def _stays(self) -> StackStays:
        if self.fit.fitted_stays is None:
            raise TypeError
        return StackStays(self.fit.fitted_stays, self.first, self.fit.move_state)

    @cached_property
    def _flags(self) -> list[list[tuple[int, str]]]:
        """What to know of rows, by group."""
        found: list[list[tuple[int, str]]] = [[] for _ in self.groups]
        place, of = {label: row for row, label in enumerate(self.fit.nodes.labels)}, self.row_group.tolist()
        for label, text in self.fit.row_flags.items():
            found[of[place[label]]].append((place[label], text))
        return found


def stacks(tally: Tally, parts: GroupParts, model: JourneyModel, *, n_moments: int = 3) -> Iterator[Stack]:
    """Fit all groups that can carry a fit, as many in one go as keep memory modest.

    Parameters
    ----------
    tally : Tally
        Of grouped journeys.
    parts : GroupParts
        Its groups.
    model : JourneyModel
        How to fit.
    n_moments : int, default 3
        1 where only probabilities will be asked for: what each bucket pulls at times is then left NaN.

    Yields
    ------
    Stack
        What would be a warning of a single fit is only told by its row flags.
    """
    rows = 1 + parts.seen[:, tally.first_state :].sum(axis=1)
    able = np.flatnonzero(np.array([not text for text in parts.why]))
    n_outcomes = len(tally.rules.outcomes) + (tally.rules.silence_us is not None)
    cells = np.cumsum(rows[able] * (rows[able] + n_outcomes))
    for some in np.split(able, np.flatnonzero(np.diff(cells // _TOGETHER)) + 1):
        if len(some):
            yield _stack(tally, parts, model, some, n_moments)


def _stack(tally: Tally, parts: GroupParts, model: JourneyModel, some: IntArray, n_moments: int) -> Stack:
    """Fit some groups in one go."""
    place = np.full(len(parts.values), -1)
    place[some] = np.arange(len(some))
    mine, chain = parts.seen[some, tally.first_state :], parts.chain
    names = (chain.states, chain.last)
    states, last = (tuple(tuple(itertools.compress(some_names, row)) for row in mine) for some_names in names)
    places = _places(tally, parts.seen[some], place[parts.group])
    nodes = Nodes(tuple(map(str, range(1, places.n_rows))), ends_of(tally))
    stays, by_bucket = placed_stays(tally, chain, places, np.arange(N_BUCKETS), censored=model.open_moves == "censored")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", JourneysWarning)
        fit = model.fit_stays(tally, nodes, stays, by_bucket, n_moments=n_moments)
    return Stack(replace(fit, tally=None), some, places.first, states, last, chain.order, parts.live[some])


def _places(tally: Tally, seen: BoolArray, group: IntArray) -> Places:
    """Return where the codes of the tally stand in the chain of some groups."""
    rows = 1 + seen[:, tally.first_state :].sum(axis=1)
    most, n_named = int(rows.max()), len(tally.rules.outcomes)
    own = np.where(seen, np.cumsum(seen, axis=1) - tally.first_state, -1)
    own[:, FIRST_OUTCOME : tally.first_state] = most + np.arange(n_named)
    own[:, :FIRST_OUTCOME] = -1
    lapses = tally.rules.silence_us is not None
    if lapses:
        own[:, LAPSED] = most + n_named
    return Places(own, np.concatenate([[0], np.cumsum(rows)]), most, n_named + lapses, group)
