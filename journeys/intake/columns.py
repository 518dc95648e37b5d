"""Single columns of a log: event names as text, and rows that hold given values."""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.arrays import from_texts, indices_of, is_missing, is_text, numbers, plain, whole_numbers


def decoded(array: pa.Array) -> pa.Array:
    """Plain array that is no dictionary.

    Parameters
    ----------
    array : pyarrow.Array

    Returns
    -------
    pyarrow.Array
    """
    array = plain(array)
    return array.dictionary_decode() if pa.types.is_dictionary(array.type) else array


def texts_of(array: pa.Array, column: str) -> list[Any]:
    """Return the values of a plain array, bytes as text.

    Parameters
    ----------
    array : pyarrow.Array
        Not a dictionary.
    column : str
        Name of the column, for the message.

    Returns
    -------
    list

    Raises
    ------
    LogError
        If bytes called text are no UTF-8.
    """
    try:
        return [value.decode() if isinstance(value, bytes) else value for value in array.to_pylist()]
    except (OverflowError, ValueError):
        # Replacing what cannot be read would make one name of several.
        msg = f"column {column!r} holds values that are not UTF-8 text or not of its type {array.type}; write it again"
        raise LogError(msg) from None


def event_names(array: pa.Array, column: str) -> pa.DictionaryArray:
    """Event names as a dictionary of text; whole numbers are written out.

    Parameters
    ----------
    array : pyarrow.Array
    column : str
        Name of the column, for the message.

    Returns
    -------
    pyarrow.DictionaryArray

    Raises
    ------
    LogError
        If it holds neither text nor whole numbers.

    Examples
    --------
    >>> event_names(pa.array([12, 12, None]), "what").to_pylist()
    ['12', '12', None]
    """
    array = plain(array)
    if not pa.types.is_dictionary(array.type):
        array = array.dictionary_encode()
    names = array.dictionary
    if is_text(names.type):
        return array
    if pa.types.is_null(names.type):
        return pa.DictionaryArray.from_arrays(array.indices, names.cast(pa.string()))
    wanted = "wanted names of events: text, or whole numbers; cast it to text"
    missing = is_missing(names)
    values = whole_numbers(names, column, wanted)
    absent = np.zeros(len(values), dtype=bool) if missing is None else missing
    texts = [None if gone else str(value) for value, gone in zip(values.tolist(), absent.tolist(), strict=True)]
    return pa.DictionaryArray.from_arrays(array.indices, from_texts(texts))


def is_in(array: pa.Array, values: tuple[str | int | bool, ...], column: str) -> NDArray[np.bool_]:
    """Mark the rows that hold one of the values.

    Parameters
    ----------
    array : pyarrow.Array
    values : tuple
        All texts, all whole numbers, or all true and false.
    column : str
        Name of the column, for the message.

    Returns
    -------
    ndarray of bool, shape (n_rows,)

    Raises
    ------
    LogError
        If the column's values can never equal the ones given.

    Examples
    --------
    >>> is_in(pa.array(["a", None, "b"]), ("b",), "team").tolist()
    [False, False, True]
    """
    array = plain(array)
    if pa.types.is_dictionary(array.type):
        inside = is_in(array.dictionary, values, column)
        if not len(inside):
            return np.zeros(len(array), dtype=bool)
        return _present(array) & inside[indices_of(array)]
    if pa.types.is_null(array.type):
        return np.zeros(len(array), dtype=bool)
    given = pa.string() if isinstance(values[0], str) else pa.bool_() if isinstance(values[0], bool) else pa.int64()
    if is_text(array.type) and is_text(given):
        import pyarrow.compute as pc

        texts = from_texts([str(value) for value in values])
        return numbers(pc.is_in(array, value_set=texts.cast(array.type)))
    both_flags = pa.types.is_boolean(array.type) and pa.types.is_boolean(given)
    if both_flags or (_is_number(array.type) and pa.types.is_integer(given)):
        if pa.types.is_decimal(array.type):
            array = array.cast(pa.float64())
        inside = np.isin(numbers(array, missing=False if both_flags else 0), list(values))
        return _present(array) & inside
    raise LogError(
        f"exclude: column {column!r} is of type {array.type}, the values given are {given}; "
        "write them as the column has them: text in quotes, numbers and true/false without"
    )


def _present(array: pa.Array) -> NDArray[np.bool_]:
    """Mark what is not null."""
    return numbers(array.is_valid()).astype(bool)


def _is_number(kind: pa.DataType) -> bool:
    """Return whether the type is one of numbers."""
    return bool(pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind))
