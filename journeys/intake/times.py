"""Times of a log, of whatever type and zone, as whole microseconds since 1970 UTC."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.checks import DAY_US, MAX_TIME_US, MIN_TIME_US, SECOND_US
from journeys.errors import LogError
from journeys.intake.arrays import is_missing, is_text, numbers, plain

_PER_SECOND = {"s": 1, "ms": 1_000, "us": 1_000_000, "ns": 1_000_000_000}


@dataclass(frozen=True, slots=True)
class Times:
    """Times of one batch.

    Attributes
    ----------
    us : ndarray of int64, shape (n_rows,)
        Microseconds since 1970-01-01 UTC; meaningless where missing or out of range.
    missing : ndarray of bool, shape (n_rows,), or None
        None if none is.
    out_of_range : ndarray of bool, shape (n_rows,), or None
        Outside the years 1 to 9999; None if none is.
    sub_microsecond : ndarray of bool, shape (n_rows,), or None
        Cut to whole microseconds; None if none was.
    naive : bool
        Timestamps without a zone.
    """

    us: NDArray[np.int64]
    missing: NDArray[np.bool_] | None
    out_of_range: NDArray[np.bool_] | None
    sub_microsecond: NDArray[np.bool_] | None
    naive: bool

    def usable(self) -> NDArray[np.bool_]:
        """Mark times that are there and in range.

        Returns
        -------
        ndarray of bool, shape (n_rows,)
        """
        usable = np.ones(len(self.us), dtype=bool)
        for mask in (self.missing, self.out_of_range):
            if mask is not None:
                usable &= ~mask
        return usable


@dataclass(slots=True)
class TimeReader:
    """Reader of the time column over all batches, which must all hold timestamps or all hold dates.

    Attributes
    ----------
    column : str
        Name of the column.
    whole_days : bool or None
        Whether it holds dates; None before the first batch with any time.

    Examples
    --------
    >>> import datetime as dt
    >>> reader = TimeReader("happened")
    >>> reader.read(pa.array([dt.date(1970, 1, 2)])).us.tolist(), reader.whole_days
    ([86400000000], True)
    """

    column: str
    whole_days: bool | None = field(default=None)

    def read(self, array: pa.Array) -> Times:
        """Microseconds of one batch.

        Parameters
        ----------
        array : pyarrow.Array

        Returns
        -------
        Times

        Raises
        ------
        LogError
            If it holds neither timestamps nor dates, or changes between them.
        """
        array = plain(array)
        if pa.types.is_dictionary(array.type):
            array = array.dictionary_decode()
        missing = is_missing(array)
        if pa.types.is_null(array.type) or (missing is not None and missing.all()):
            return Times(np.zeros(len(array), dtype=np.int64), missing, None, None, False)
        is_date = pa.types.is_date(array.type)
        if not is_date and not pa.types.is_timestamp(array.type):
            raise LogError(_wrong_type(array.type, self.column))
        if self.whole_days not in (None, is_date):
            raise LogError(
                f"column {self.column!r} changes between dates and timestamps; write it as one of them"
            )
        self.whole_days = is_date
        if is_date:
            return _from_dates(array, missing)
        return _from_timestamps(array, missing)


def _from_dates(array: pa.Array, missing: NDArray[np.bool_] | None) -> Times:
    """Midnights of days; a date64 that holds a time of day is cut to its day."""
    if pa.types.is_date64(array.type):
        days = numbers(array.cast(pa.timestamp("ms")).cast(pa.int64())) // (DAY_US // 1_000)
    else:
        days = numbers(array.cast(pa.int32())).astype(np.int64)
    outside = (days < MIN_TIME_US // DAY_US) | (days > MAX_TIME_US // DAY_US)
    outside = _only_present(outside, missing)
    us = np.where(outside, 0, days) * DAY_US
    return Times(us, missing, outside if outside.any() else None, None, False)


def _from_timestamps(array: pa.Array, missing: NDArray[np.bool_] | None) -> Times:
    """Timestamps of any unit; a zone changes how they are shown, not what is stored."""
    per_second = _PER_SECOND[array.type.unit]
    raw = numbers(array.view(pa.int64()))
    naive = array.type.tz is None
    if per_second == 1_000_000_000:
        us = raw // 1_000
        finer = _only_present(us * 1_000 != raw, missing)
        return Times(us, missing, None, finer if finer.any() else None, naive)
    low, high = MIN_TIME_US * per_second // SECOND_US, MAX_TIME_US * per_second // SECOND_US
    if len(raw) and (raw.min() < low or raw.max() > high):
        outside = _only_present((raw < low) | (raw > high), missing)
        raw = np.where((raw < low) | (raw > high), 0, raw)
    else:
        outside = np.zeros(0, dtype=bool)
    us = raw if per_second == SECOND_US else raw * (SECOND_US // per_second)
    return Times(us, missing, outside if outside.any() else None, None, naive)


def _only_present(mask: NDArray[np.bool_], missing: NDArray[np.bool_] | None) -> NDArray[np.bool_]:
    """Mask without what is missing anyway."""
    return mask if missing is None else mask & ~missing


def _wrong_type(kind: pa.DataType, column: str) -> str:
    """Say what to do about a column that holds no times."""
    value = kind.value_type if pa.types.is_dictionary(kind) else kind
    if is_text(value):
        fix = "turn it into timestamps first: pandas.to_datetime(column), or CAST(column AS TIMESTAMP) in SQL"
        return f"column {column!r} holds text, not times; {fix}"
    if pa.types.is_integer(value) or pa.types.is_floating(value) or pa.types.is_decimal(value):
        return (
            f"column {column!r} holds numbers, not times; if they count seconds since 1970, turn them into "
            'timestamps first: pandas.to_datetime(column, unit="s") (unit="ms" for milliseconds)'
        )
    return f"column {column!r} is of type {kind}; wanted timestamps or dates"
