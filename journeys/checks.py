"""Checks of single arguments: each returns the canonical value or says what was wanted and how to mend it.

Times are int64-sized Python integers in microseconds, instants counted from 1970-01-01 UTC.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Sequence
from fractions import Fraction
from functools import lru_cache
from typing import TYPE_CHECKING, TypeVar

import numpy as np

if TYPE_CHECKING:
    import pandas as pd

Duration = str | dt.timedelta | np.timedelta64
Instant = str | dt.date | np.datetime64
T = TypeVar("T", bound=str)

SECOND_US = 1_000_000
DAY_US = 86_400 * SECOND_US
# The years 1 to 9999: what a date can be written as. Differences of two such instants fit easily in int64.
MIN_TIME_US = -62_135_596_800 * SECOND_US
MAX_TIME_US = 253_402_300_800 * SECOND_US - 1

_UNITS_US = {
    "us": 1, "µs": 1, "microsecond": 1, "ms": 1_000, "millisecond": 1_000,
    "s": SECOND_US, "sec": SECOND_US, "second": SECOND_US, "min": 60 * SECOND_US, "minute": 60 * SECOND_US,
    "h": 3_600 * SECOND_US, "hr": 3_600 * SECOND_US, "hour": 3_600 * SECOND_US,
    "d": DAY_US, "day": DAY_US, "w": 7 * DAY_US, "week": 7 * DAY_US,
}  # fmt: skip
_WRITTEN_UNITS = ("d", "h", "min", "s", "ms", "us")
_CALENDAR_UNITS = {"m", "mo", "mon", "month", "q", "quarter", "y", "yr", "year"}
_PART = re.compile(r"\s*(\d+(?:\.\d+)?)\s*([a-zµ]+)\s*,?")
_CLOCK = re.compile(r"\s*(\d+):([0-5]\d)(?::([0-5]\d(?:\.\d+)?))?")
_LONGEST_DURATION = 200
_NO_FIXED_LENGTH = 'months and years have no fixed length: give days, such as "30d"'
_DURATION_HELP = 'wanted a duration such as "30d", "12h", "90min" or a datetime.timedelta'


def confidence_level(value: float) -> float:
    """Confidence level, strictly between 0 and 1.

    Parameters
    ----------
    value : float
        The level as a share, not in percent.

    Returns
    -------
    float

    Raises
    ------
    TypeError
        If it is not a number.
    ValueError
        If it is not between 0 and 1.

    Examples
    --------
    >>> confidence_level(0.95)
    0.95
    >>> confidence_level(95)
    Traceback (most recent call last):
    ...
    ValueError: confidence_level: got 95; wanted a share between 0 and 1 (both left out), such as 0.95
    """
    wanted = "wanted a share between 0 and 1 (both left out), such as 0.95"
    if isinstance(value, bool | np.bool_) or not isinstance(value, int | float | np.integer | np.floating):
        raise TypeError(f"confidence_level: got {value!r}; {wanted}")
    if not 0 < value < 1:
        raise ValueError(f"confidence_level: got {value!r}; {wanted}")
    return float(value)


def whole(value: int, name: str, least: int) -> int:
    """Whole number of at least some size.

    Parameters
    ----------
    value : int
    name : str
        Name of the argument, for the message.
    least : int
        The smallest one allowed.

    Returns
    -------
    int

    Raises
    ------
    ValueError
        If it is something else.

    Examples
    --------
    >>> whole(2, "n_workers", 1)
    2
    """
    if isinstance(value, bool | np.bool_) or not isinstance(value, int | np.integer) or value < least:
        raise ValueError(f"{name}: got {value!r}; wanted a whole number from {least}")
    return int(value)


def rng(value: int | np.random.Generator | None, seed: int) -> np.random.Generator:
    """Source of chance: a generator as it is, or one started from a number (`seed` if None is given).

    Raises
    ------
    ValueError
        If it is something else, or a negative number.

    Examples
    --------
    >>> bool(rng(7, 0).random() == rng(None, 7).random())
    True
    """
    if value is None or isinstance(value, np.random.Generator):
        return np.random.default_rng(seed if value is None else value)
    if isinstance(value, bool | np.bool_) or not isinstance(value, int | np.integer) or value < 0:
        raise ValueError(f"rng: got {value!r}; wanted a whole number from 0, a numpy.random.Generator or None")
    return np.random.default_rng(int(value))


def one_of(value: T, choices: Sequence[T], name: str) -> T:
    """Return the value, if it is one of the choices.

    Parameters
    ----------
    value : str
    choices : sequence of str
    name : str
        Name of the argument, for the message.

    Returns
    -------
    str

    Raises
    ------
    ValueError
        If it is none of them.

    Examples
    --------
    >>> one_of("keep", ["keep", "drop"], "duplicates")
    'keep'
    """
    if not isinstance(value, str) or value not in choices:
        listed = ", ".join(repr(choice) for choice in choices)
        raise ValueError(f"{name}: got {value!r}; wanted one of {listed}")
    return value


def duration_us(value: Duration, name: str) -> int:
    """Length of time in microseconds.

    Parameters
    ----------
    value : str, datetime.timedelta, pandas.Timedelta or numpy.timedelta64
        Text such as "30d", "12h", "90min", "2 weeks", "1d 12h", "1 day 02:30:00" or ISO 8601
        "P1DT2H". A bare number has no unit and is refused; months and years have no fixed length.
    name : str
        Name of the argument, for the message.

    Returns
    -------
    int
        Microseconds, at least 1.

    Raises
    ------
    TypeError
        If it is a number or another type.
    ValueError
        If it cannot be read, is not positive, finer than a microsecond, or of no fixed length.

    Examples
    --------
    >>> duration_us("1.5h", "silence"), duration_us("2 weeks", "silence") // DAY_US
    (5400000000, 14)
    >>> duration_us("1 month", "silence")
    Traceback (most recent call last):
    ...
    ValueError: silence: got '1 month'; months and years have no fixed length: give days, such as "30d"
    """
    if isinstance(value, str):
        total = _text_us(value, name)
    elif isinstance(value, np.timedelta64):
        total = _delta_us(_read_timedelta(value, name), value, name)
    elif isinstance(value, dt.timedelta):
        total = _delta_us(value, value, name)
    else:
        raise TypeError(f"{name}: got {value!r}; {_DURATION_HELP}")
    if not 0 < total <= MAX_TIME_US - MIN_TIME_US:
        raise ValueError(f"{name}: got {value!r}; wanted a length above zero and below 9999 years")
    if total.denominator != 1:
        raise ValueError(f"{name}: got {value!r}; times are counted in whole microseconds")
    return int(total)


def duration_text(us: int) -> str:
    """Duration as text that `duration_us` reads back exactly, in the largest unit that divides it.

    Parameters
    ----------
    us : int
        Microseconds.

    Returns
    -------
    str

    Examples
    --------
    >>> duration_text(30 * DAY_US), duration_text(5_400 * SECOND_US)
    ('30d', '90min')
    """
    unit = next(unit for unit in _WRITTEN_UNITS if us % _UNITS_US[unit] == 0)
    return f"{us // _UNITS_US[unit]}{unit}"


def instant_us(value: Instant, name: str) -> int:
    """Instant in microseconds since 1970-01-01 UTC.

    Parameters
    ----------
    value : str, datetime.datetime, datetime.date, pandas.Timestamp or numpy.datetime64
        ISO 8601 text or an object; without a zone it is UTC; a date is its midnight.
    name : str
        Name of the argument, for the message.

    Returns
    -------
    int
        Microseconds, rounded down.

    Raises
    ------
    TypeError
        If it is a number or another type.
    ValueError
        If the text is not ISO 8601, the instant is missing, or in UTC not within the years 1 to 9999.

    Examples
    --------
    >>> instant_us("1970-01-02", "as_of") == DAY_US
    True
    >>> instant_us("1970-01-01T02:00:00+02:00", "as_of")
    0
    """
    wanted = 'wanted an instant such as "2025-06-30" or "2025-06-30T12:00:00Z" (no zone: UTC)'
    # Of all dates only the missing ones of pandas and numpy differ from themselves.
    if not isinstance(value, str | dt.date | np.datetime64) or value != value:
        raise TypeError(f"{name}: got {value!r}; {wanted}")
    try:
        if isinstance(value, str):
            moment: dt.date = dt.datetime.fromisoformat(value.strip())
        elif isinstance(value, np.datetime64):
            moment = dt.datetime.fromisoformat(str(value.astype("datetime64[us]")))
        else:
            moment = value
    except ValueError:
        raise ValueError(f"{name}: got {value!r}; {wanted}") from None
    if hasattr(moment, "to_pydatetime"):  # a pandas.Timestamp
        moment = moment.to_pydatetime(warn=False)
    if not isinstance(moment, dt.datetime):
        moment = dt.datetime.combine(moment, dt.time())
    offset = moment.utcoffset() or dt.timedelta()
    us = (moment.replace(tzinfo=None) - dt.datetime(1970, 1, 1) - offset) // dt.timedelta(microseconds=1)
    if not MIN_TIME_US <= us <= MAX_TIME_US:
        raise ValueError(f"{name}: got {value!r}, which in UTC is not within the years 1 to 9999; {wanted}")
    return us


def instant_text(us: int) -> str:
    """Instant as ISO 8601 text that `instant_us` reads back exactly; midnight as a bare date.

    Parameters
    ----------
    us : int
        Microseconds since 1970-01-01 UTC.

    Returns
    -------
    str

    Examples
    --------
    >>> instant_text(0), instant_text(1_500_000)
    ('1970-01-01', '1970-01-01T00:00:01.500000Z')
    """
    moment = dt.datetime(1970, 1, 1) + dt.timedelta(microseconds=us)
    return moment.date().isoformat() if us % DAY_US == 0 else moment.isoformat() + "Z"


@lru_cache(1024)
def _text_us(text: str, name: str) -> Fraction:
    """Read text part by part, exactly; only the ISO 8601 form ("P1DT2H") is left to pandas."""
    if len(text) > _LONGEST_DURATION:
        raise ValueError(f"{name}: got a text of {len(text):,} characters; {_DURATION_HELP}")
    lowered = text.strip().lower()
    if not re.search(r"[a-zµ:]", lowered):
        raise ValueError(f"{name}: got {text!r}, without a unit; {_DURATION_HELP}")
    if re.match(r"p[\dt]", lowered):
        # pandas would read the month of "P1M" as a minute.
        if re.search(r"[my]", lowered.partition("t")[0]):
            raise ValueError(f"{name}: got {text!r}; {_NO_FIXED_LENGTH}")
        return _delta_us(_read_timedelta(text.strip().upper(), name), text, name)
    total, end = Fraction(0), 0
    while end < len(lowered) and (part := _PART.match(lowered, end)):
        unit = part[2] if part[2] in _UNITS_US else part[2].removesuffix("s")
        if unit in _CALENDAR_UNITS:
            minutes = ', or "min" for minutes' if unit == "m" else ""
            raise ValueError(f"{name}: got {text!r}; {_NO_FIXED_LENGTH}{minutes}")
        if unit not in _UNITS_US:
            break
        total, end = total + Fraction(part[1]) * _UNITS_US[unit], part.end()
    if clock := _CLOCK.fullmatch(lowered, end):
        total += (int(clock[1]) * 3_600 + int(clock[2]) * 60 + Fraction(clock[3] or 0)) * SECOND_US
        end = len(lowered)
    if end < len(lowered):
        raise ValueError(f"{name}: got {text!r}; {_DURATION_HELP}")
    return total


def _read_timedelta(value: str | np.timedelta64, name: str) -> pd.Timedelta:
    """Let `pandas.Timedelta` read it, or give our own message."""
    import pandas as pd

    try:
        delta = pd.Timedelta(value)
    except (ValueError, OverflowError, TypeError):
        raise ValueError(f"{name}: got {value!r}; {_DURATION_HELP}") from None
    if not isinstance(delta, pd.Timedelta):
        raise ValueError(f"{name}: got {value!r}; {_DURATION_HELP}")
    return delta


def _delta_us(delta: dt.timedelta, value: object, name: str) -> Fraction:
    """Microseconds of a timedelta, with the nanoseconds that only pandas carries as a fraction."""
    whole = (delta.days * 86_400 + delta.seconds) * SECOND_US + delta.microseconds
    return whole + Fraction(getattr(delta, "nanoseconds", 0), 1_000)
