"""Arrow columns brought to a few plain forms: one text type, dictionaries taken apart, numpy arrays out.

Between Arrow and numpy the buffers themselves are handed over: `pyarrow.array`, `pyarrow.scalar` and `to_numpy`
import pandas when first called, which takes longer than counting a small log. `pyarrow.compute` takes a tenth of a
second: it is imported where it is used.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import LogError

_WHOLE_FLOATS = 2.0**53


def plain(array: pa.Array) -> pa.Array:
    """Array without the encodings that differ between frame libraries.

    Extension types become their storage, run-end encoding is undone, text of any kind becomes string or
    large_string, and the same for the values of a dictionary.

    Parameters
    ----------
    array : pyarrow.Array

    Returns
    -------
    pyarrow.Array

    Examples
    --------
    >>> plain(pa.array(["a"], pa.string_view())).type
    DataType(large_string)
    """
    if isinstance(array.type, pa.BaseExtensionType):
        array = array.storage
    if pa.types.is_run_end_encoded(array.type):
        import pyarrow.compute as pc

        array = pc.run_end_decode(array)
    if pa.types.is_dictionary(array.type):
        values = plain(array.dictionary)
        if values.type != array.type.value_type:
            return pa.DictionaryArray.from_arrays(array.indices, values)
        return array
    kind = array.type
    if pa.types.is_string_view(kind):
        return array.cast(pa.large_string())
    if pa.types.is_binary_view(kind) or pa.types.is_fixed_size_binary(kind):
        return array.cast(pa.large_binary())
    return array


def is_text(kind: pa.DataType) -> bool:
    """Return whether a plain array of this type holds text or bytes.

    Parameters
    ----------
    kind : pyarrow.DataType

    Returns
    -------
    bool
    """
    types = pa.types
    return bool(
        types.is_string(kind) or types.is_large_string(kind)
        or types.is_binary(kind) or types.is_large_binary(kind)
    )  # fmt: skip


def indices_of(array: pa.Array) -> NDArray[np.int64]:
    """Positions of a dictionary array in its dictionary; 0 where missing.

    Parameters
    ----------
    array : pyarrow.DictionaryArray

    Returns
    -------
    ndarray of int64, shape (n_rows,)
    """
    return numbers(array.indices).astype(np.int64)


def numbers(array: pa.Array, missing: Any = 0) -> NDArray[Any]:
    """Numpy values of an array of fixed-width type, without copying where nothing is missing.

    Parameters
    ----------
    array : pyarrow.Array
    missing : scalar
        What stands where the array has a null.

    Returns
    -------
    ndarray, shape (n_rows,)
    """
    values = _from_buffer(array)
    if array.null_count:
        values = values.copy()
        values[_nulls(array)] = missing
    return values


def from_numpy(values: NDArray[Any], kind: pa.DataType) -> pa.Array:
    """Array of whole numbers, or of the times they count, without nulls.

    Parameters
    ----------
    values : ndarray of int or bool, shape (n_rows,)
    kind : pyarrow.DataType
        A type of whole numbers, times, dates, or bool.

    Returns
    -------
    pyarrow.Array

    Examples
    --------
    >>> from_numpy(np.array([1]), pa.date32()).to_pylist()
    [datetime.date(1970, 1, 2)]
    """
    if pa.types.is_boolean(kind):
        data = np.packbits(np.asarray(values, dtype=bool), bitorder="little")
    else:
        unsigned = "u" if pa.types.is_unsigned_integer(kind) else ""
        data = np.ascontiguousarray(values, dtype=f"{unsigned}int{kind.bit_width}")
    return pa.Array.from_buffers(kind, len(values), [None, pa.py_buffer(data)])


def from_texts(texts: Sequence[str | None]) -> pa.StringArray:
    """Array of a few texts, null where there is none.

    Parameters
    ----------
    texts : sequence of str or None

    Returns
    -------
    pyarrow.StringArray

    Examples
    --------
    >>> from_texts(["visit", None, "é"]).to_pylist()
    ['visit', None, 'é']
    """
    parts = [(text or "").encode() for text in texts]
    ends = np.cumsum([0, *(len(part) for part in parts)]).astype(np.int32)
    there = np.packbits(np.array([text is not None for text in texts], dtype=bool), bitorder="little")
    return pa.StringArray.from_buffers(len(parts), *(pa.py_buffer(one) for one in (ends, b"".join(parts), there)))


def text_offsets(array: pa.Array) -> NDArray[Any]:
    """Byte at which each text begins, and at which the last one ends.

    Parameters
    ----------
    array : pyarrow.Array
        Plain text or bytes.

    Returns
    -------
    ndarray of int32 or int64, shape (n_rows + 1,)
        Those of a null mean nothing.

    Examples
    --------
    >>> text_offsets(from_texts(["visit", None, "é"])).tolist()
    [0, 5, 5, 7]
    """
    if not len(array):
        return np.zeros(1, dtype=np.int64)
    wide = pa.types.is_large_string(array.type) or pa.types.is_large_binary(array.type)
    offsets = np.frombuffer(array.buffers()[1], dtype=np.int64 if wide else np.int32)
    return offsets[array.offset : array.offset + len(array) + 1]


def is_missing(array: pa.Array) -> NDArray[np.bool_] | None:
    """Mark nulls, NaN and empty text.

    Parameters
    ----------
    array : pyarrow.Array
        Plain.

    Returns
    -------
    ndarray of bool, shape (n_rows,), or None
        None if nothing is missing.
    """
    if pa.types.is_null(array.type):
        return np.ones(len(array), dtype=bool) if len(array) else None
    if pa.types.is_dictionary(array.type):
        inner = is_missing(array.dictionary)
        missing = _nulls(array)
        if inner is not None and len(inner):
            missing |= inner[indices_of(array)]
    else:
        missing = _nulls(array)
        if is_text(array.type):
            offsets = text_offsets(array)
            missing |= offsets[1:] == offsets[:-1]
        elif pa.types.is_floating(array.type):
            missing |= np.isnan(numbers(array))
    return missing if missing.any() else None


def whole_numbers(array: pa.Array, column: str, wanted: str) -> NDArray[np.int64]:
    """Whole numbers of a column as int64, also where they came as floats because some are missing.

    Parameters
    ----------
    array : pyarrow.Array
        Plain; not a dictionary.
    column : str
    wanted : str
        What the column should hold and how to mend it, for the message.

    Returns
    -------
    ndarray of int64, shape (n_rows,)
        0 where missing.

    Raises
    ------
    LogError
        If the numbers are not whole or do not fit.
    """
    types, kind = pa.types, array.type
    if types.is_null(kind):
        return np.zeros(len(array), dtype=np.int64)
    if types.is_integer(kind):
        values = numbers(array)
        if types.is_uint64(kind) and len(values) and values.max() > np.iinfo(np.int64).max:
            raise LogError(f"column {column!r} holds whole numbers above 9223372036854775807; {wanted}")
        return values.astype(np.int64, copy=False)
    if types.is_floating(kind):
        floats = np.nan_to_num(numbers(array).astype(np.float64), nan=0.0)
        if (np.floor(floats) != floats).any() or (np.abs(floats) > _WHOLE_FLOATS).any():
            raise LogError(
                f"column {column!r} holds numbers with a fraction, or too large for {kind}; {wanted}"
            )
        return floats.astype(np.int64)
    if types.is_decimal(kind) and kind.scale == 0:
        try:
            return numbers(array.cast(pa.int64()))
        except pa.ArrowInvalid:
            raise LogError(f"column {column!r} holds whole numbers of over 18 digits; {wanted}") from None
    raise LogError(f"column {column!r} is of type {kind}; {wanted}")


def _nulls(array: pa.Array) -> NDArray[np.bool_]:
    """Mark nulls."""
    if array.null_count == 0:
        return np.zeros(len(array), dtype=bool)
    return _from_buffer(array.is_null())


def _from_buffer(array: pa.Array) -> NDArray[Any]:
    """Values of an array of fixed-width type; whatever stands there, where it has a null."""
    n, kind, buffer = len(array), np.dtype(array.type.to_pandas_dtype()), array.buffers()[1]
    if not n:
        return np.empty(0, dtype=kind)
    if kind != np.bool_:
        return np.frombuffer(buffer, dtype=kind, count=n, offset=array.offset * kind.itemsize)
    # Eight to a byte, the first one lowest.
    start, skip = divmod(array.offset, 8)
    packed = np.frombuffer(buffer, dtype=np.uint8, count=(skip + n + 7) // 8, offset=start)
    return np.unpackbits(packed, count=skip + n, bitorder="little")[skip:].view(np.bool_)
