"""Groups of a tally: what their columns hold, and which of them a condition picks."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.checks import instant_text
from journeys.intake.group_checks import CAME_AFTER, COHORT, PERIOD
from journeys.intake.groups import Value
from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.grouping import NEW, unpacked

if TYPE_CHECKING:
    from journeys.intake.rules import JourneyRules

Group = tuple[Value, ...]
# Codes of outcomes: lapsed, open, then those of the rules.
_ENDS = ("lapsed", "open")


def period_names(splits_us: Sequence[int]) -> tuple[str, ...]:
    """Return the names of the periods between cuts.

    Examples
    --------
    >>> period_names([1_735_689_600_000_000])
    ('before 2025-01-01', 'from 2025-01-01')
    """
    cuts = [instant_text(us).removesuffix("T00:00:00Z") for us in splits_us]
    return (f"before {cuts[0]}", *(f"from {cut}" for cut in cuts)) if cuts else ("all",)


def named_groups(
    packed: IntArray,
    rules: JourneyRules,
    combinations: Sequence[Group],
    cohorts: Sequence[str],
) -> tuple[tuple[Group, ...], IntArray]:
    """Return the groups that packed numbers stand for, in the order of their values, and each number's place.

    Parameters
    ----------
    packed : ndarray of int64, shape (n_groups,)
        Distinct numbers of `kernels.grouping`.
    rules : JourneyRules
        Which columns a group has.
    combinations, cohorts : sequences
        Values of the group columns, and names of the cohorts, by their codes.

    Returns
    -------
    groups : tuple of tuple
        Values in the order of `rules.by`.
    place : ndarray of int64, shape (n_groups,)
    """
    by, after, cohort, period = unpacked(packed)
    came = {NEW: "new"} | {code + 1: name for code, name in enumerate((*_ENDS, *rules.outcomes))}
    periods = period_names(rules.splits_us)
    built_in: dict[str, list[Value]] = {
        CAME_AFTER: [came[code] for code in after.tolist()],
        COHORT: [cohorts[i] if i < len(cohorts) else "" for i in cohort.tolist()],
        PERIOD: [periods[i] for i in period.tolist()],
    }
    own = {name: i for i, name in enumerate(rules.group_columns)}
    rows = [
        tuple(
            combinations[code][own[name]] if name in own else built_in[name][i] for name in rules.by
        )
        for i, code in enumerate(by.tolist())
    ]
    order = sorted(range(len(rows)), key=lambda i: _sortable(rows[i]))
    place = np.empty(len(rows), np.int64)
    place[order] = np.arange(len(rows))
    return tuple(rows[i] for i in order), place


def merged_groups(
    mine: tuple[Group, ...], theirs: tuple[Group, ...]
) -> tuple[tuple[Group, ...], IntArray, IntArray]:
    """Return the groups of two tallies together, and where each one's own stand among them."""
    both = tuple(sorted({*mine, *theirs}, key=_sortable))
    place = {group: i for i, group in enumerate(both)}
    here, there = (np.array([place[group] for group in part], np.int64) for part in (mine, theirs))
    return both, here, there


def picked(groups: tuple[Group, ...], columns: Sequence[str], conditions: Mapping[str, Any]) -> BoolArray:
    """Tell which groups meet all conditions.

    Parameters
    ----------
    groups : tuple of tuple
        Values in the order of `columns`.
    columns : sequence of str
        Names of the group columns.
    conditions : mapping
        Column to a value, a list of values, or a pair (low, high), both included, None for no bound.

    Returns
    -------
    ndarray of bool, shape (n_groups,)

    Raises
    ------
    ValueError
        If a column is not one that journeys are grouped by, or a value never occurs there.
    TypeError
        If a bound cannot be compared with the column's values.

    Examples
    --------
    >>> picked((("BE", 1), ("NL", 2), ("NL", 5)), ["country", "size"], {"country": ["NL"], "size": (None, 4)}).tolist()
    [False, True, False]
    """
    keep = np.ones(len(groups), bool)
    for name, wanted in conditions.items():
        if name not in columns:
            there = ", ".join(map(repr, columns)) or "none: name them with `by` in the rules and count the log again"
            msg = f"{name!r} is no column that journeys are grouped by; there are {there}"
            raise ValueError(msg)
        values = [group[list(columns).index(name)] for group in groups]
        if isinstance(wanted, tuple):
            keep &= _in_range(values, wanted, name)
        else:
            keep &= _among(values, wanted, name)
    return keep


def gathered(groups: tuple[Group, ...], columns: Sequence[str], by: Sequence[str]) -> dict[Group, IntArray]:
    """Return, for each combination of values in some of the columns, which groups have it.

    Parameters
    ----------
    groups, columns
        As in `picked`.
    by : sequence of str
        Among the columns.

    Returns
    -------
    dict of tuple to ndarray of int64
        In the order of the values.

    Raises
    ------
    ValueError
        If a column is not among `columns`, or none is named.

    Examples
    --------
    >>> found = gathered((("BE", "a"), ("BE", "b"), ("NL", "a")), ["country", "plan"], ["country"])
    >>> {values: index.tolist() for values, index in found.items()}
    {('BE',): [0, 1], ('NL',): [2]}
    """
    unknown = [name for name in by if name not in columns]
    if unknown or not by:
        there = ", ".join(map(repr, columns)) or "none: name them with `by` in the rules and count the log again"
        msg = f"by: got {unknown[0] if unknown else by!r}; wanted columns that journeys are grouped by: {there}"
        raise ValueError(msg)
    place = [list(columns).index(name) for name in by]
    found: dict[Group, list[int]] = {}
    for i, group in enumerate(groups):
        found.setdefault(tuple(group[at] for at in place), []).append(i)
    return {values: np.array(found[values], np.int64) for values in sorted(found, key=_sortable)}


def runs(first: IntArray, last: IntArray) -> slice | IntArray:
    """Return the rows of several runs: a slice where they follow one another."""
    if (first[1:] == last[:-1]).all():
        return slice(int(first[0]), int(last[-1]))
    return np.concatenate([np.arange(a, b) for a, b in zip(first, last, strict=True)])


def _among(values: list[Value], wanted: Any, name: str) -> BoolArray:
    several = isinstance(wanted, Collection) and not isinstance(wanted, str)
    choices = list(wanted) if several else [wanted]
    strange = [one for one in choices if one not in values]
    if strange:
        there = sorted(set(values), key=lambda value: (type(value).__name__, value))
        shown = ", ".join(map(repr, there[:12])) + (f" and {len(there) - 12} more" if len(there) > 12 else "")
        msg = f"{name}: got {strange[0]!r}, which no journey has; there are {shown}"
        raise ValueError(msg)
    return np.array([value in choices for value in values], bool)


def _in_range(values: list[Value], bounds: tuple[Any, ...], name: str) -> BoolArray:
    if len(bounds) != 2:
        msg = f"{name}: got {bounds!r}; wanted a pair (low, high), or a list of values in square brackets"
        raise ValueError(msg)
    low, high = bounds
    try:
        # Values of another kind than the bounds ("not given") lie outside any range.
        kind = type(high if low is None else low)
        return np.array(
            [
                isinstance(value, kind) and (low is None or value >= low) and (high is None or value <= high)
                for value in values
            ],
            bool,
        )
    except TypeError:
        msg = f"{name}: got the range {bounds!r}; wanted two bounds of one kind, such as (18, 30)"
        raise TypeError(msg) from None


def _sortable(group: Group) -> tuple[tuple[str, Value], ...]:
    return tuple((type(value).__name__, value) for value in group)
