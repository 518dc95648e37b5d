"""Parts of a tally by group, and tallies added up: every table at once, codes brought to one list of names."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from journeys.errors import JourneysError
from journeys.intake.id_key import VARIABLE
from journeys.intake.rule_checks import ALL
from journeys.kernels.arrays import IntArray
from journeys.kernels.histories import recoded, slot
from journeys.tally.accumulate import Columns, add_up, carried_over
from journeys.tally.groups import merged_groups, runs
from journeys.tally.tables import CODED, KEYS, MOST_IN_SETS, NARROW, history_of, join_key, split_key
from journeys.tally.touchpoints import check_number, moved_bits

if TYPE_CHECKING:
    from journeys.tally.tally import Tally

T = TypeVar("T", bound="Tally")


def of_groups(tally: T, index: IntArray) -> T:
    """Return the part that some groups of journeys make up, without the states they never see.

    Parameters
    ----------
    tally : Tally
        Of grouped journeys.
    index : ndarray of int64
        Positions in `tally.groups`, rising.

    Returns
    -------
    Tally
        Of its customers only a lower bound is known.
    """
    # Of the column's own type, or every search would begin with a copy of the column.
    index = index.astype(NARROW["group"])
    tables = {name: _rows_of(getattr(tally, name), index) for name in KEYS}
    seen = np.zeros(len(tally.labels), bool)
    for name, column in ((name, column) for name in KEYS for column in CODED):
        if column in tables[name]:
            seen[tables[name][column]] = True
    for column, n_slots, name in histories(tally):
        for which in range(n_slots):
            seen[slot(tables[name][column], which)] = True
    seen[: tally.first_state] = True
    if not seen.all():
        tables = _renamed(tally, tables, np.cumsum(seen) - 1)
    customers = {name: np.zeros_like(values) for name, values in tally.customers.items()}
    customers["bucket"] = tally.customers["bucket"]
    # In a period there are moves of journeys that began in the one before.
    for name in ("journeys", "moves"):
        customers["people"][tables[name]["bucket"]] = 1
    states = tuple(name for name, kept in zip(tally.labels, seen.tolist(), strict=True) if kept)[tally.first_state :]
    groups = tuple(tally.groups[i] for i in index.tolist())
    changed: dict[str, Any] = tables
    return replace(tally, states=states, groups=groups, part=True, customers=customers, **changed)


def _rows_of(table: Columns, index: IntArray) -> Columns:
    """Return the rows of some groups, which stand together, since tables are in the order of the groups."""
    first, last = (np.searchsorted(table["group"], index, side=side) for side in ("left", "right"))
    rows = runs(first, last)
    part = {column: values[rows] for column, values in table.items()}
    part["group"] = np.searchsorted(index, part["group"]).astype(NARROW["group"])
    return part


def added(mine: T, theirs: Tally) -> T:
    """Return two tallies as one.

    Parameters
    ----------
    mine, theirs : Tally
        Of disjoint customers, read by the same rules over the same span.

    Returns
    -------
    Tally

    Raises
    ------
    JourneysError
        If rules, span, kind of times or the key of the ids differ, or there are too many states to count the touches
        of all.
    """
    kinds = _kinds_of_times(mine, theirs)
    _check_alike(mine, theirs, kinds)
    states = tuple(sorted({*mine.states, *theirs.states}))
    if mine.rules.touchpoints == ALL:
        check_number(states)
    groups, here_at, there_at = merged_groups(mine.groups, theirs.groups)
    here, there = _recoded(mine, states, here_at), _recoded(theirs, states, there_at)
    tables = {name: _sum(name, here[name], there[name]) for name in KEYS}
    people = {
        name: np.maximum(a, b) if name.startswith("largest_") else a + b
        for (name, a), b in zip(mine.customers.items(), theirs.customers.values(), strict=True)
    }
    people["bucket"] = mine.customers["bucket"]
    changed: dict[str, Any] = tables
    whole = replace(
        mine,
        states=states,
        whole_days=kinds[0],
        n_rows=mine.n_rows + theirs.n_rows,
        record=mine.record + theirs.record,
        customers=carried_over(people),
        groups=groups,
        **changed,
    )
    if len(whole.touchpoints) <= MOST_IN_SETS and _has_sets(mine) and _has_sets(theirs):
        return whole
    return replace(whole, touch_sets={name: values[:0] for name, values in whole.touch_sets.items()})


def _has_sets(tally: Tally) -> bool:
    """Tell whether every journey is counted under the set that it has touched: not where there were too many states."""
    touches = tally.touches
    n_journeys = touches["n"][touches["state"] == 0].sum() + touches["first"].sum()
    return bool(tally.touch_sets["n"].sum() == n_journeys)


def check_one_id_key(mine: Tally, theirs: Tally, what: str) -> None:
    """Raise if the ids of two tallies were hashed with different secrets: their buckets hold different people.

    Parameters
    ----------
    mine, theirs : Tally
    what : str
        What cannot be done with them, for the message.

    Raises
    ------
    JourneysError
    """
    if mine.id_key != theirs.id_key:
        msg = (
            f"tallies made under different {VARIABLE} cannot be {what} (fingerprints {mine.id_key or 'none'} and "
            f"{theirs.id_key or 'none'}): one customer is two people to them; count one of the logs again"
        )
        raise JourneysError(msg)


def _check_alike(mine: Tally, theirs: Tally, kinds: tuple[bool, bool]) -> None:
    check_one_id_key(mine, theirs, "added")
    for what, one, other in (
        ("rules", mine.rules, theirs.rules),
        ("orders", mine.order, theirs.order),
        ("parts of the groups", mine.part, theirs.part),
        ("as_of", mine.as_of, theirs.as_of),
        ("log_start", mine.log_start, theirs.log_start),
        ("kind of times (dates or moments)", *kinds),
    ):
        if one != other:
            msg = (
                f"tallies with different {what} cannot be added"
                + ("" if what == "rules" else f" ({one} and {other})")
                + "; give both parts the same rules with as_of and log_start set"
            )
            raise JourneysError(msg)


def _kinds_of_times(mine: Tally, theirs: Tally) -> tuple[bool, bool]:
    """Return whether each holds dates; one without a journey may have seen no time, and goes with the other."""
    known = [one.whole_days for one in (mine, theirs) if one.n_journeys]
    if len(known) == 2:
        return known[0], known[1]
    kind = known[0] if known else mine.whole_days or theirs.whole_days
    return kind, kind


def _recoded(tally: Tally, states: tuple[str, ...], group: IntArray) -> dict[str, Columns]:
    """Return the keyed tables with codes of the longer lists of states and groups."""
    new = np.arange(len(tally.labels))
    place = {name: tally.first_state + i for i, name in enumerate(states)}
    new[tally.first_state :] = [place[name] for name in tally.states]
    tables = _renamed(tally, {name: dict(getattr(tally, name)) for name in KEYS}, new)
    for table in tables.values():
        if "group" in table:
            table["group"] = group[table["group"]].astype(NARROW["group"])
    return tables


def _renamed(tally: Tally, tables: Mapping[str, Columns], new: IntArray) -> dict[str, Columns]:
    """Return tables with new positions among the labels; where all states are touchpoints, sets with them."""
    renamed = {
        name: table | {column: new[table[column]].astype(NARROW[column]) for column in CODED if column in table}
        for name, table in tables.items()
    }
    for column, n_slots, name in histories(tally):
        renamed[name][column] = recoded(renamed[name][column], new, n_slots)
    if tally.rules.touchpoints == ALL and len(tables["touch_sets"]["n"]):
        bits = new[tally.first_state :] - tally.first_state
        renamed["touch_sets"]["set"] = moved_bits(tables["touch_sets"]["set"], bits)
    return renamed


def histories(tally: Tally) -> list[tuple[str, int, str]]:
    """Return the columns that hold histories, how many states each holds, and their tables."""
    found = [(history_of(name, tally.order), name) for name in KEYS]
    return [(*history, name) for history, name in found if history is not None]


def _sum(name: str, mine: Columns, theirs: Columns) -> Columns:
    """Return two tables of one kind as one."""
    (key, more), (other_key, other_more) = join_key(name, mine), join_key(name, theirs)
    sums = {column: np.concatenate([mine[column], theirs[column]]) for column in mine if column not in NARROW}
    both = {part: np.concatenate([more[part], other_more[part]]) for part in more}
    return split_key(name, *add_up(np.concatenate([key, other_key]), sums, both))
