"""Groups of journeys: values of columns as codes, and the calendar of cohorts."""

from __future__ import annotations

import datetime as dt
from calendar import monthrange
from collections.abc import Iterator, Mapping, Sequence
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.checks import DAY_US
from journeys.errors import LogError
from journeys.intake.arrays import indices_of, is_missing, is_text, plain
from journeys.intake.columns import texts_of

Value = str | int | bool

# More combinations of values than these are no groups to look at side by side (a judgement), and would not stay small.
MOST_GROUPS = 5_000
MOST_COHORTS = 1 << 16
NOT_GIVEN = "not given"
_SECOND_US = 1_000_000


class GroupCodes:
    """Growing list of the combinations of values in the group columns, each with its code.

    Parameters
    ----------
    columns : sequence of str
        Names of the columns, for messages.

    Attributes
    ----------
    combinations : list of tuple
        Values in order of first appearance; the code is the position.

    Examples
    --------
    >>> codes = GroupCodes(["country"])
    >>> codes.encode([pa.array(["NL", None, "NL"])]).tolist(), codes.combinations
    ([0, 1, 0], [('NL',), ('not given',)])
    """

    def __init__(self, columns: Sequence[str]) -> None:
        self.combinations: list[tuple[Value, ...]] = []
        self._columns = [_Values(name) for name in columns]
        self._code: dict[tuple[int, ...], int] = {}

    def encode(self, arrays: Sequence[pa.Array]) -> NDArray[np.int32]:
        """Return the codes of rows, new combinations being added at the end.

        Parameters
        ----------
        arrays : sequence of pyarrow.Array
            One per column, all of one length, at least one.

        Returns
        -------
        ndarray of int32, shape (n_rows,)

        Raises
        ------
        LogError
            If a column holds neither text, whole numbers, true/false nor dates, changes kind, or there are
            more combinations than `MOST_GROUPS`.
        """
        parts = [values.encode(array) for values, array in zip(self._columns, arrays, strict=True)]
        if not len(parts[0]):
            return np.zeros(0, np.int32)
        joined = parts[0]
        for values, part in zip(self._columns[1:], parts[1:], strict=True):
            # Numbered anew each time: the product of many columns' values would outgrow 64 bits.
            joined = np.unique(joined, return_inverse=True)[1] * len(values.names) + part
        _, first, which = np.unique(joined, return_index=True, return_inverse=True)
        order = np.argsort(first)
        codes = np.empty(len(first), np.int32)
        codes[order] = [self._of(tuple(int(part[row]) for part in parts)) for row in first[order]]
        return codes[which]

    def to_dict(self) -> dict[str, Any]:
        """Return the lists as plain values that JSON can hold.

        Returns
        -------
        dict
        """
        return {
            "columns": [{"kind": column.kind, "names": list(column.names)} for column in self._columns],
            "combinations": [list(values) for values in self._code],
        }

    def resume(self, stored: Mapping[str, Any]) -> None:
        """Go on with the lists that `to_dict` gave.

        Parameters
        ----------
        stored : mapping
        """
        for column, held in zip(self._columns, stored["columns"], strict=True):
            column.resume(held["kind"], held["names"])
        for values in stored["combinations"]:
            self._of(tuple(values))

    def _of(self, values: tuple[int, ...]) -> int:
        code = self._code.setdefault(values, len(self._code))
        if code == len(self.combinations):
            if code >= MOST_GROUPS:
                counts = ", ".join(f"{column.name} {len(column.names):,}" for column in self._columns)
                msg = (
                    f"by: more than {MOST_GROUPS:,} combinations of values (so far {counts}); wanted columns with few "
                    "values: leave one out, or gather rare values before"
                )
                raise LogError(msg)
            named = zip(self._columns, values, strict=True)
            self.combinations.append(tuple(column.names[value] for column, value in named))
        return code


class _Values:
    """Values of one column in order of first appearance."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.names: list[Value] = []
        self._code: dict[Value, int] = {}
        self.kind: str | None = None

    def resume(self, kind: str | None, names: Sequence[Value]) -> None:
        """Go on with a list of values of a kind."""
        self.kind = kind
        for name in names:
            self._of(name)

    def encode(self, array: pa.Array) -> NDArray[np.int64]:
        """Return the codes of the rows' values."""
        array = plain(array)
        if not pa.types.is_dictionary(array.type):
            array = array.dictionary_encode()
        self._check(array.dictionary.type)
        values = [self._value(value) for value in texts_of(array.dictionary, self.name)]
        index = indices_of(array)
        missing = is_missing(array)
        used = np.unique(index if missing is None else index[~missing])
        codes = np.zeros(max(len(values), 1), np.int64)
        codes[used] = [self._of(values[i]) for i in used.tolist()]
        rows: NDArray[np.int64] = codes[index]
        if missing is not None and missing.any():
            rows[missing] = self._of(NOT_GIVEN)
        return rows

    def _of(self, value: Value) -> int:
        code = self._code.setdefault(value, len(self._code))
        if code == len(self.names):
            if code >= MOST_GROUPS:
                msg = (
                    f"by: column {self.name!r} holds more than {MOST_GROUPS:,} different values; wanted one with few: "
                    "gather rare values before, or leave it out"
                )
                raise LogError(msg)
            self.names.append(value)
        return code

    def _check(self, kind: pa.DataType) -> None:
        if pa.types.is_null(kind):
            return
        names = {
            "text": is_text(kind),
            "whole numbers": pa.types.is_integer(kind),
            "true and false": pa.types.is_boolean(kind),
            "dates": pa.types.is_date(kind),
        }
        held = next((name for name, is_it in names.items() if is_it), None)
        if held is None:
            msg = (
                f"by: column {self.name!r} is of type {kind}; wanted text, whole numbers, true/false or dates: "
                "round or cut it into classes before"
            )
            raise LogError(msg)
        if self.kind not in (None, held):
            msg = f"by: column {self.name!r} changes between {self.kind} and {held}; write it as one of them"
            raise LogError(msg)
        self.kind = held

    @staticmethod
    def _value(value: object) -> Value:
        if isinstance(value, bool | int):
            return value
        return value.isoformat() if isinstance(value, dt.date) else str(value or "")


def cohort_calendar(
    cohort: str, timezone: str, log_start_us: int, as_of_us: int
) -> tuple[NDArray[np.int64], tuple[str, ...]]:
    """Return starts and names of the cohorts of a log.

    Parameters
    ----------
    cohort : {"day", "week", "month"}
    timezone : str
        Where their days begin.
    log_start_us, as_of_us : int
        Microseconds since 1970 UTC.

    Returns
    -------
    starts : ndarray of int64, shape (n_cohorts,)
        Microseconds UTC, rising, the first one not after `log_start_us`.
    names : tuple of str
        The first day of each, or the month.

    Raises
    ------
    LogError
        If the log spans more cohorts than can be told apart.

    Examples
    --------
    >>> starts, names = cohort_calendar("week", "UTC", 4 * 86_400_000_000, 15 * 86_400_000_000)
    >>> names, (starts // 86_400_000_000).tolist()
    (('1970-01-05', '1970-01-12'), [4, 11])
    """
    if (as_of_us - log_start_us) // DAY_US >= MOST_COHORTS * {"day": 1, "week": 7, "month": 28}[cohort]:
        msg = f"the log spans more than {MOST_COHORTS:,} cohorts of a {cohort}; set log_start and as_of to its span"
        raise LogError(msg)
    starts, names = [], []
    for day in _first_days(cohort, _local_day(log_start_us, timezone)):
        # On the first days of the calendar a midnight may lie before it: the log begins at its start.
        start = log_start_us if day == dt.date.min else _midnight_us(day, timezone)
        if start > as_of_us:
            break
        starts.append(start)
        names.append(day.isoformat()[:7] if cohort == "month" else day.isoformat())
    return np.array(starts, np.int64), tuple(names)


def _first_days(cohort: str, day: dt.date) -> Iterator[dt.date]:
    """Give the first days of cohorts, from the one that holds `day` on."""
    # The calendar ends with the year 9999, and the cohorts with it. Its first day is a Monday and the first of a month.
    step = 7 if cohort == "week" else 1
    if cohort == "week":
        day -= dt.timedelta(days=day.weekday())
    elif cohort == "month":
        day = day.replace(day=1)
    while True:
        yield day
        if cohort == "month":
            step = monthrange(day.year, day.month)[1]
        if (dt.date.max - day).days < step:
            return
        day += dt.timedelta(days=step)


def _local_day(us: int, timezone: str) -> dt.date:
    """Return the day an instant lies in, the calendar's own first or last where the zone leads out of it."""
    instant = dt.datetime(1970, 1, 1, tzinfo=dt.UTC) + dt.timedelta(microseconds=us)
    try:
        return instant.astimezone(ZoneInfo(timezone)).date()
    except OverflowError:
        return dt.date.min if us < 0 else dt.date.max


def _midnight_us(day: dt.date, timezone: str) -> int:
    instant = dt.datetime(day.year, day.month, day.day)
    offset = instant.replace(tzinfo=ZoneInfo(timezone)).utcoffset() or dt.timedelta()
    return (instant - dt.datetime(1970, 1, 1) - offset) // dt.timedelta(seconds=1) * _SECOND_US
