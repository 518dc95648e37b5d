"""A table with one row per customer and a time per stage, turned into an event log."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from journeys.errors import JourneysWarning, LogError, warn
from journeys.intake.arrays import from_numpy, from_texts, is_missing, is_text, numbers, plain
from journeys.intake.columns import decoded
from journeys.intake.read import open_log

SEQUENCE = "sequence"
_NANOSECONDS_PER_US = 1_000
_NO_TIMES = pa.timestamp("us", "UTC")


def from_wide(
    frame: Any,
    customer: str,
    times: Mapping[str, str],
    *,
    time: str = "time",
    event: str = "event",
    keep: str | Sequence[str] = (),
) -> pa.Table:
    """Return the event log of a table that has a row per customer and a column of times per stage.

    Parameters
    ----------
    frame : data frame, Arrow table, or whatever else the gate for logs takes
        pandas or polars frame, pyarrow table, anything with `__arrow_c_stream__`, the path of a file.
    customer : str
        Column with the id; it keeps its name. A customer may have several rows: each gives its own events.
    times : mapping of str to str
        State or outcome to the column with its time, in the order in which events of the same time follow one
        another.
    time, event : str
        What to call the columns of the log with the time and with the state.
    keep : str or sequence of str
        Columns to keep, such as the country; each event has its row's value.

    Returns
    -------
    pyarrow.Table
        A row per time that is there, in order of time: customer, time, event, `sequence` (the place in `times`,
        from 0) and the columns kept. To be read by rules with `sequence="sequence"`.

    Raises
    ------
    LogError
        (A ValueError.) If a column is not there, or holds no times; if some of the columns of times hold dates
        and others timestamps, or some timestamps with a zone and others without.
    ValueError
        If `times` is empty or names a column twice, or a column of the log would come twice.
    TypeError
        If an argument is of another type.

    Warns
    -----
    JourneysWarning
        If rows have no time at all: their customers have no event and are not in the log.

    Notes
    -----
    A missing time (null, NaT) is no event. A table like this has only one time per stage, often the latest or the
    first one: what happened in between is not in it, so steps and returns are too few.

    A history of statuses, a row per customer and status with the time from which it holds, needs no turning: it is
    an event log, with `time="valid_from"` and `event="status"` in the rules. Where a row is written whenever
    anything about a customer changes, so that the same status comes several times running, say
    `repeats="merge"`: the rows of one status are then one visit.

    Examples
    --------
    >>> import pandas as pd
    >>> day = pd.Timestamp("2025-01-01")
    >>> frame = pd.DataFrame({"member": ["a", "b"], "seen": [day, day], "joined_on": [day, pd.NaT], "age": [30, 41]})
    >>> log = from_wide(frame, "member", {"visit": "seen", "joined": "joined_on"}, keep="age")
    >>> log.drop(["time"]).to_pylist()[-1]
    {'member': 'a', 'event': 'joined', 'sequence': 1, 'age': 30}
    """
    kept = [keep] if isinstance(keep, str) else list(keep)
    _check(customer, times, (time, event), kept)
    wide = _read(frame, [customer, *times.values(), *kept], [customer, *kept])
    columns = [_times_of(wide, column) for column in times.values()]
    kind = _common(dict(zip(times.values(), columns, strict=True)))
    rows, stamps = [], []
    for column in columns:
        missing = is_missing(column)
        there = np.arange(len(column)) if missing is None else np.flatnonzero(~missing)
        rows.append(there)
        stamps.append(_cast(column.take(from_numpy(there, pa.int64())), kind))
    _warn_of_none(np.unique(np.concatenate(rows)), wide.num_rows)
    place = np.repeat(np.arange(len(rows)), [len(one) for one in rows])
    row = from_numpy(np.concatenate(rows), pa.int64())
    whose = {name: _whole(wide.column(name)).take(row) for name in (customer, *kept)}
    states = pa.DictionaryArray.from_arrays(from_numpy(place, pa.int32()), from_texts(list(times)))
    log = {
        customer: whose.pop(customer), time: pa.concat_arrays(stamps), event: states,
        SEQUENCE: from_numpy(place, pa.int64()), **whose,
    }  # fmt: skip
    table = pa.table(log)
    return table.take(pc.sort_indices(table, [(time, "ascending"), (SEQUENCE, "ascending")]))


def _check(customer: str, times: Mapping[str, str], new: tuple[str, str], kept: list[str]) -> None:
    """Check the arguments against each other."""
    if not isinstance(times, Mapping):
        msg = f'times: got {times!r}; wanted a mapping of states to columns, {{"visit": "first_visit", …}}'
        raise TypeError(msg)
    for name, value in (("customer", customer), ("time", new[0]), ("event", new[1])):
        _check_text(value, name)
    for state, column in times.items():
        _check_text(state, "times")
        _check_text(column, f"times[{state!r}]")
    for column in kept:
        _check_text(column, "keep")
    if not times:
        msg = 'times: got none; wanted at least one state and the column with its time, {"visit": "first_visit"}'
        raise ValueError(msg)
    read = [customer, *times.values()]
    if twice := [name for name in read if read.count(name) > 1]:
        msg = f"times: column {twice[0]!r} is named twice (the customer column counts); wanted a column per state"
        raise ValueError(msg)
    told = [customer, *new, SEQUENCE, *kept]
    if twice := [name for name in told if told.count(name) > 1]:
        msg = f"the log would have two columns called {twice[0]!r}; wanted other names: time=, event=, or rename it"
        raise ValueError(msg)


def _check_text(value: object, name: str) -> None:
    if not isinstance(value, str) or not value:
        msg = f"{name}: got {value!r}; wanted a name, text"
        raise TypeError(msg)


def _read(frame: Any, columns: list[str], ids: list[str]) -> pa.Table:
    """Return the columns of the frame, whatever it is."""
    wanted = list(dict.fromkeys(columns))
    batches = list(open_log(frame, wanted, ids=ids).batches(wanted))
    if not batches:
        return pa.table({name: pa.nulls(0) for name in wanted})
    try:
        return pa.concat_tables([pa.Table.from_batches([one]) for one in batches], promote_options="default")
    except (pa.ArrowInvalid, pa.ArrowTypeError):
        msg = "a column changes its type from one part of the frame to the next; make each column of one type"
        raise LogError(msg) from None


def _times_of(wide: pa.Table, column: str) -> pa.Array:
    """Return a column of times, checked to be one."""
    array = decoded(_whole(wide.column(column)))
    kind = array.type
    if pa.types.is_null(kind) or pa.types.is_timestamp(kind) or pa.types.is_date(kind):
        return array
    if is_text(kind):
        fix = "it holds text: turn it into times first, pandas.to_datetime(column)"
    else:
        fix = f"it is of type {kind}"
    msg = f"times: column {column!r} holds no times; {fix}"
    raise LogError(msg)


def _whole(column: pa.ChunkedArray) -> pa.Array:
    """Return a column in one piece."""
    joined = column.combine_chunks()
    return plain(joined if not isinstance(joined, pa.ChunkedArray) else pa.concat_arrays(joined.chunks))


def _common(columns: Mapping[str, pa.Array]) -> pa.DataType:
    """Return the type that holds the times of all columns, refused where they are of different kinds."""
    kinds = {name: column.type for name, column in columns.items() if not pa.types.is_null(column.type)}
    found = list(dict.fromkeys(kinds.values()))
    _check_alike("dates", "timestamps", {name: pa.types.is_date(kind) for name, kind in kinds.items()})
    if not found or len(found) == 1:
        return found[0] if found else _NO_TIMES
    if pa.types.is_date(found[0]):
        return pa.date32()
    zoned = {name: kind.tz is not None for name, kind in kinds.items()}
    _check_alike("timestamps with a zone", "timestamps without one", zoned)
    return pa.timestamp("us", "UTC" if found[0].tz is not None else None)


def _check_alike(one: str, other: str, is_one: Mapping[str, bool]) -> None:
    """Raise if some columns are of one kind and some of the other."""
    mine, others = ([name for name, found in is_one.items() if found is wanted] for wanted in (True, False))
    if mine and others:
        listed = ", ".join(map(repr, mine)), ", ".join(map(repr, others))
        msg = f"times: {one} in {listed[0]}, but {other} in {listed[1]}; wanted all alike: turn one kind into the other"
        raise LogError(msg)


def _cast(array: pa.Array, kind: pa.DataType) -> pa.Array:
    """Return times in another unit or zone; what is finer than a microsecond is cut off, downwards."""
    if array.type == kind:
        return array
    if pa.types.is_timestamp(array.type) and array.type.unit == "ns":
        return from_numpy(numbers(array.view(pa.int64())) // _NANOSECONDS_PER_US, kind)
    try:
        return array.cast(kind, safe=not pa.types.is_date(kind))
    except pa.ArrowInvalid:
        msg = "times: a column holds times far outside the years 1 to 9999; mend or blank them first"
        raise LogError(msg) from None


def _warn_of_none(seen: np.ndarray, n_rows: int) -> None:
    """Say how many rows have no event."""
    if len(seen) < n_rows:
        warn(
            f"{n_rows - len(seen):,} of {n_rows:,} rows have no time in any of the columns: without an event their "
            "customers are not in the log (leave those rows out first, or give everybody a time of entry)",
            JourneysWarning,
        )
