"""What events are worth: a column of numbers as whole millionths."""

from __future__ import annotations

import sys

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.arrays import from_numpy, is_missing, numbers, whole_numbers

MILLION = 1_000_000
# The largest that millionths of in an int64 leave room for.
MOST = 9_000_000_000_000
_WANTED = "wanted numbers: what each event is worth"

Mask = NDArray[np.bool_]


def millionths(array: pa.Array, column: str, kept: Mask | None = None) -> tuple[NDArray[np.int64], Mask | None]:
    """Millionths of a column of numbers, and where there is none.

    Whole numbers and decimals are exact to the millionth, others rounded to the nearest, ties to even.

    Parameters
    ----------
    array : pyarrow.Array
        Plain; not a dictionary.
    column : str
        Name of the column, for the message.
    kept : ndarray of bool, shape (n_rows,), optional
        Rows that count; others come out as 0, whatever they hold.

    Returns
    -------
    value : ndarray of int64, shape (n_rows,)
        0 where missing.
    missing : ndarray of bool, shape (n_rows,), or None
        Null, not a number or infinite; None if nothing is missing.

    Raises
    ------
    LogError
        If the column holds no numbers, or one beyond nine million million.

    Examples
    --------
    >>> value, missing = millionths(pa.array([19.99, None, -5.0]), "amount")
    >>> value.tolist(), missing.tolist()
    ([19990000, 0, -5000000], [False, True, False])
    """
    if kept is None:
        return _millionths(array, column)
    value = np.zeros(len(array), np.int64)
    value[kept], some = _millionths(array.filter(from_numpy(kept, pa.bool_())), column)
    if some is None:
        return value, None
    missing = np.zeros(len(array), bool)
    missing[kept] = some
    return value, missing


def _millionths(array: pa.Array, column: str) -> tuple[NDArray[np.int64], Mask | None]:
    types, kind = pa.types, array.type
    missing = is_missing(array)
    if types.is_null(kind):
        return np.zeros(len(array), np.int64), missing
    if types.is_integer(kind):
        whole = whole_numbers(array, column, _WANTED)
        _check_size((whole > MOST) | (whole < -MOST), column)
        return whole * MILLION, missing
    if types.is_floating(kind):
        floats = numbers(array, missing=np.nan).astype(np.float64)
        known = np.isfinite(floats)
        floats = np.where(known, floats, 0.0)
        _check_size(np.abs(floats) > MOST, column)
        # The whole part by itself, so that the fraction keeps all its digits.
        whole = np.trunc(floats)
        value = whole.astype(np.int64) * MILLION + np.rint((floats - whole) * MILLION).astype(np.int64)
        return value, None if known.all() else ~known
    if types.is_decimal(kind):
        return _of_decimals(array, column), missing
    raise LogError(f"column {column!r} is of type {kind}; {_WANTED}; cast it to numbers")


def _of_decimals(array: pa.Array, column: str) -> NDArray[np.int64]:
    """Millionths of decimals; 0 where null."""
    _check_size(np.abs(numbers(array.cast(pa.float64()))) > MOST, column)
    if array.type.scale > 6:
        import pyarrow.compute as pc

        # The widest decimals: others cannot be rounded, or have no room for a digit more.
        array = array.cast(pa.decimal256(76, min(array.type.scale, 60)), safe=False)
        array = pc.round(array, 6, round_mode="half_to_even")
    array = array.cast(pa.decimal128(19, 6))
    # A decimal is a whole number of sixteen bytes, of which these need the lower eight.
    halves = np.frombuffer(array.buffers()[1], np.int64, 2 * len(array), 16 * array.offset)
    value = halves[0 if sys.byteorder == "little" else 1 :: 2].copy()
    if array.null_count:
        value[~numbers(array.is_valid())] = 0
    return value


def _check_size(beyond: Mask, column: str) -> None:
    """Raise if a value is too large for its millionths to be counted."""
    if beyond.any():
        msg = (
            f"column {column!r} holds a value beyond {MOST:,}; wanted amounts of money: write them in a larger unit, "
            "or repair them where the log is written"
        )
        raise LogError(msg)
