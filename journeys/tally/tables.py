"""The tables of a tally: the parts of their keys, what is summed, and how keys are packed and taken apart."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from journeys.tally.accumulate import Columns, More, in_order
from journeys.tally.keys import pack, unpack

N_BUCKETS = 200

# The parts of each table's key, in the order they are packed, and what is summed under it.
KEYS: dict[str, tuple[str, ...]] = {
    "moves": ("bucket", "state", "next", "bin", "busy"),
    "contexts": ("bucket", "state", "next", "previous", "mature"),
    "entries": ("bucket", "state", "-", "-", "sure"),
    "journeys": ("bucket", "state", "outcome", "bin", "sure"),
    "gaps": ("bucket", "outcome", "-", "bin", "back"),
    "stages": ("bucket", "stage", "next", "bin", "sure"),
    "touches": ("bucket", "state", "outcome", "bin", "sure"),
    "touch_sets": ("bucket", "-", "outcome", "bin", "sure"),
}
# Parts of a key that are not packed with the others; where journeys are grouped, "group" goes before them.
MORE: dict[str, tuple[str, ...]] = {"stages": ("bin_stage",), "touches": ("distinct",), "touch_sets": ("set",)}
# The same where moves are told apart by more than the state they leave: histories (`kernels.histories`), of the states
# before it, and of those before the previous one.
HISTORY = {"moves": "before", "contexts": "earlier"}
SUMS: dict[str, tuple[str, ...]] = {
    "moves": ("n", "dwell_high", "dwell_low"),
    "contexts": ("n",),
    "entries": ("n",),
    "journeys": ("n", "steps", "steps_squared", "elapsed_high", "elapsed_low"),
    "gaps": ("n", "away_high", "away_low"),
    "stages": ("n",),
    "touches": ("n", "first", "last"),
    "touch_sets": ("n",),
}
CUSTOMER_SUMS = ("people", "j", "jj", "jx", "x", "xx")
# Sums that there are only where the rules name a column of values, and the tables that have them.
VALUE = ("value_high", "value_low")
_VALUED = ("journeys", "touches", "touch_sets")
# Sets of touchpoints are counted for so many at most.
MOST_IN_SETS = 15
TABLES = (*KEYS, "customers")
CODED = ("state", "next", "outcome", "stage", "previous")
# What code 0, elsewhere a lapse, stands for in columns that hold states alone.
NO_STATE = {("stages", "stage"): "entry", ("touches", "state"): "none of them", ("contexts", "previous"): "entry"}
FLAGS = ("sure", "busy", "back", "mature")
# Parts of a key in the fewest bytes that hold them; everything else is int64.
NARROW: dict[str, type[np.generic]] = {
    "bucket": np.uint8, "state": np.uint16, "next": np.uint16, "outcome": np.uint16, "bin": np.int32,
    "sure": np.bool_, "busy": np.bool_, "back": np.bool_, "group": np.int32, "stage": np.uint16,
    "bin_stage": np.int32, "distinct": np.uint8, "set": np.uint16, "previous": np.uint16, "mature": np.bool_,
    "before": np.int64, "earlier": np.int64,
}  # fmt: skip


def sums_of(name: str, *, valued: bool) -> tuple[str, ...]:
    """Return what is summed in a table, with or without values."""
    return (*SUMS[name], *(VALUE if valued and name in _VALUED else ()))


def customer_sums(*, valued: bool) -> tuple[str, ...]:
    """Return the columns of the customers table beside the bucket; those called largest are merged by the largest."""
    return (*CUSTOMER_SUMS, "largest_events", *((*VALUE, "largest_value") if valued else ()))


def more_of(name: str, *, grouped: bool, order: int) -> tuple[str, ...]:
    """Return the further parts of a table's key in their order."""
    history = (HISTORY[name],) if order > 1 and name in HISTORY else ()
    return (*(("group",) if grouped else ()), *history, *MORE.get(name, ()))


def parts_of(name: str, *, grouped: bool, order: int) -> tuple[str, ...]:
    """Return the columns of a table's key in their order, the group first."""
    more = more_of(name, grouped=grouped, order=order)
    packed = tuple(part for part in KEYS[name] if part != "-")
    return (*more[:grouped], *packed, *more[grouped:])


def history_of(name: str, order: int) -> tuple[str, int] | None:
    """Return the column of a table that holds histories, and how many states they hold; None where there is none."""
    return (HISTORY[name], order - 1) if order > 1 and name in HISTORY else None


def split_key(name: str, key: np.ndarray, sums: Mapping[str, np.ndarray], more: More) -> Columns:
    """Return a table's columns with its packed key taken apart, each part in the fewest bytes that hold it."""
    packed = {part: column for part, column in zip(KEYS[name], unpack(key), strict=True) if part != "-"}
    others = [part for part in more if part != "group"]
    columns = (*(("group",) if "group" in more else ()), *packed, *others)
    parts = {part: (more[part] if part in more else packed[part]()).astype(NARROW[part]) for part in columns}
    return {**parts, **sums}


def join_key(name: str, table: Mapping[str, np.ndarray]) -> tuple[np.ndarray, More]:
    """Return the packed key of a table's rows, and the further parts of it."""
    nothing = np.zeros(len(table["n"]), np.int64)
    further = ("group", *HISTORY.values(), *MORE.get(name, ()))
    more = {part: table[part].astype(np.int64) for part in further if part in table}
    return pack(*(nothing if part == "-" else table[part] for part in KEYS[name])), more


def sorted_by_key(name: str, table: Columns) -> Columns:
    """Return a table in the order of its key."""
    order = in_order(*join_key(name, table))
    return {column: values[order] for column, values in table.items()}
