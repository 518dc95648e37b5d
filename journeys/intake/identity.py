"""Customer ids as 64-bit keys: the same id gives the same key however and wherever it is stored.

Whole numbers go through the finaliser of splitmix64, which no two numbers leave alike. Text goes by its UTF-8
bytes, eight at a time: each word, offset by its place, goes through the same finaliser, and so does their
sum together with the length. Such a key is no protection of the id: that takes a secret (`id_key`).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from journeys.errors import LogError
from journeys.intake.arrays import indices_of, is_missing, is_text, numbers, plain, text_offsets, whole_numbers
from journeys.intake.id_key import IdKey
from journeys.kernels import compiled

N_BUCKETS = 200
_GOLDEN = 0x9E3779B97F4A7C15
_FIRST, _SECOND = np.uint64(0xBF58476D1CE4E5B9), np.uint64(0x94D049BB133111EB)
_QUOTIENT, _REST = divmod(2**64, N_BUCKETS)
# Words of a text that are mixed for all rows at once; the rest of longer texts goes row by row.
_WORDS_AT_ONCE = 64
_BLOCK = 32_768
# From so many ids on, a compiled loop takes their keys, where there is one.
_FEW = 1_024
_TAIL_MASKS = np.array([(1 << 8 * n) - 1 for n in range(9)], dtype=np.uint64)
_FIX = (
    "give customers whole numbers that fit in int64, or text: column.astype(str), "
    "or CAST(column AS VARCHAR) in SQL"
)
KINDS = {"integer": "whole numbers", "text": "text"}


def mix(values: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Finaliser of splitmix64: a bijection of 64-bit words that scatters them.

    Parameters
    ----------
    values : ndarray of uint64, shape (n,)

    Returns
    -------
    ndarray of uint64, shape (n,)

    References
    ----------
    Steele, Lea and Flood (2014), Fast splittable pseudorandom number generators, OOPSLA; constants of
    variant 13 of D. Stafford.

    Examples
    --------
    >>> hex(mix(np.array([0x9E3779B97F4A7C15], dtype="u8"))[0])
    '0xe220a8397b1dcdaf'
    """
    if len(values) >= _FEW and compiled.is_built():
        return compiled.mixed(values)
    out = np.array(values, dtype=np.uint64)
    for start in range(0, len(out), _BLOCK):
        # Blocks stay in the processor's cache through all eight passes.
        block = out[start : start + _BLOCK]
        block ^= block >> np.uint64(30)
        block *= _FIRST
        block ^= block >> np.uint64(27)
        block *= _SECOND
        block ^= block >> np.uint64(31)
    return out


def customer_keys(
    array: pa.Array, kind: str | None = None, id_key: IdKey | None = None
) -> tuple[NDArray[np.uint64], str | None]:
    """64-bit keys of customer ids, and the kind of ids.

    Parameters
    ----------
    array : pyarrow.Array
        Whole numbers of any width (also as floats, if all are whole), or text or bytes in any encoding.
    kind : {"integer", "text"} or None
        Kind of the ids seen before; None if none were.
    id_key : IdKey, optional
        Hash each distinct id with this secret instead.

    Returns
    -------
    keys : ndarray of uint64, shape (n_rows,)
        Meaningless where the id is missing.
    kind : {"integer", "text"} or None
        None if every id so far is missing.

    Raises
    ------
    LogError
        If the ids are of another type, do not fit in int64, or change kind.

    Examples
    --------
    >>> keys, kind = customer_keys(pa.array([7, 8, 7]))
    >>> bool(keys[0] == keys[2]), bool(keys[0] == keys[1]), kind
    (True, False, 'integer')
    """
    array = plain(array)
    is_dictionary = pa.types.is_dictionary(array.type)
    values = array.dictionary if is_dictionary else array
    missing = is_missing(values)
    if pa.types.is_null(values.type) or (missing is not None and missing.all()) or not len(values):
        return np.zeros(len(array), dtype=np.uint64), kind
    now = "text" if is_text(values.type) else "integer"
    if kind is not None and now != kind:
        raise LogError(f"customer ids change from {KINDS[kind]} to {KINDS[now]} within the log; {_FIX}")
    if now == "text":
        keys = _text_keys(values) if id_key is None else id_key.of_texts(values)
    else:
        whole = whole_numbers(values, "customer id", _FIX)
        keys = mix(whole.view(np.uint64)) if id_key is None else id_key.of_numbers(whole)
    return (keys[indices_of(array)] if is_dictionary else keys), now


def bucket_of(key64: NDArray[np.uint64]) -> NDArray[np.int16]:
    """Bucket of each customer, from 0 to 199: what uncertainty is judged by.

    Parameters
    ----------
    key64 : ndarray of uint64, shape (n,)
        As `customer_keys` gives them.

    Returns
    -------
    ndarray of int16, shape (n,)
    """
    return (key64 % np.uint64(N_BUCKETS)).astype(np.int16)


def bucket_major(key64: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Keys renumbered so that sorting by them puts buckets side by side; no two become one.

    Parameters
    ----------
    key64 : ndarray of uint64, shape (n,)

    Returns
    -------
    ndarray of uint64, shape (n,)

    Examples
    --------
    >>> keys = np.array([0, 1, 200, 2**64 - 1], dtype="u8")
    >>> bool((from_bucket_major(bucket_major(keys)) == keys).all())
    True
    """
    if len(key64) >= _FEW and compiled.is_built():
        return compiled.by_bucket(key64, FIRST_KEYS)
    out = np.empty_like(key64)
    for start in range(0, len(out), _BLOCK):
        block = key64[start : start + _BLOCK]
        # Division by a constant is fast in numpy, divmod is not.
        above = block // np.uint64(N_BUCKETS)
        out[start : start + _BLOCK] = _first_of(block - above * np.uint64(N_BUCKETS)) + above
    return out


def from_bucket_major(keys: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Undo `bucket_major`.

    Parameters
    ----------
    keys : ndarray of uint64, shape (n,)

    Returns
    -------
    ndarray of uint64, shape (n,)
    """
    bucket = bucket_of_major(keys).astype(np.uint64)
    return (keys - _first_of(bucket)) * np.uint64(N_BUCKETS) + bucket


def bucket_of_major(keys: NDArray[np.uint64]) -> NDArray[np.int16]:
    """Bucket of bucket-major keys.

    Parameters
    ----------
    keys : ndarray of uint64, shape (n,)

    Returns
    -------
    ndarray of int16, shape (n,)
    """
    return (np.searchsorted(FIRST_KEYS, keys, side="right") - 1).astype(np.int16)


def _first_of(bucket: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """First bucket-major key of each bucket; the first buckets hold one key more."""
    return bucket * np.uint64(_QUOTIENT) + np.minimum(bucket, np.uint64(_REST))


# The smallest bucket-major key of each bucket.
FIRST_KEYS = _first_of(np.arange(N_BUCKETS, dtype=np.uint64))


def _text_keys(array: pa.Array) -> NDArray[np.uint64]:
    """Keys of plain text or bytes, from the buffers themselves."""
    offsets, whole = text_offsets(array), array.buffers()[2]
    if len(array) >= _FEW and compiled.is_built() and whole is not None and whole.size >= offsets[-1]:
        return compiled.text_keys(offsets, np.frombuffer(whole, dtype=np.uint8))
    starts, lengths, data = _text_buffers(array)
    out = np.empty(len(lengths), dtype=np.uint64)
    for start in range(0, len(out), _BLOCK):
        rows = slice(start, start + _BLOCK)
        out[rows] = _block_keys(starts[rows], lengths[rows], data)
    return out


def _block_keys(
    starts: NDArray[np.int64], lengths: NDArray[np.int64], data: NDArray[np.uint8]
) -> NDArray[np.uint64]:
    """Keys of the texts that begin at the given offsets."""
    length = int(lengths[0]) if len(lengths) else 0
    if (lengths == length).all() and length % 8 == 0 and 0 < length <= 8 * _WORDS_AT_ONCE:
        return _even_keys(starts, length, data)
    total = np.zeros(len(lengths), dtype=np.uint64)
    words = (lengths + 7) // 8
    most = int(words.max(initial=0))
    for place in range(min(most, _WORDS_AT_ONCE)):
        active = None if (words > place).all() else np.flatnonzero(words > place)
        at, left = (starts, lengths) if active is None else (starts[active], lengths[active])
        piece = _mixed_words(data, at + 8 * place, left - 8 * place, place)
        if active is None:
            total += piece
        else:
            total[active] += piece
    for row in np.flatnonzero(words > _WORDS_AT_ONCE):
        for place in range(_WORDS_AT_ONCE, int(words[row]), _BLOCK):
            places = np.arange(place, min(place + _BLOCK, int(words[row])))
            piece = _mixed_words(data, starts[row] + 8 * places, lengths[row] - 8 * places, places)
            total[row : row + 1] += piece.sum(dtype=np.uint64, keepdims=True)
    # The length keeps "a" from "a\0"; the constant keeps the empty sum from being zero.
    total += mix(lengths.astype(np.uint64) ^ np.uint64(_GOLDEN))
    return mix(total)


def _even_keys(starts: NDArray[np.int64], length: int, data: NDArray[np.uint8]) -> NDArray[np.uint64]:
    """Keys of texts of one length in whole words: the same, read in passing."""
    first = int(starts[0])
    if (np.diff(starts) == length).all():
        words = data[first : first + len(starts) * length].view("<u8").reshape(len(starts), -1)
    else:
        view: NDArray[np.uint64] = np.ndarray((len(data) - 7,), dtype="<u8", buffer=data, strides=(1,))
        words = view[starts[:, None] + np.arange(0, length, 8)]
    total = np.full(len(starts), mix(np.array([length ^ _GOLDEN], dtype=np.uint64))[0])
    for place in range(words.shape[1]):
        total += mix(words[:, place] + np.uint64((place + 1) * _GOLDEN % 2**64))
    return mix(total)


def _mixed_words(
    data: NDArray[np.uint8], at: NDArray[Any], left: NDArray[Any], place: NDArray[np.int64] | int
) -> NDArray[np.uint64]:
    """Words of eight bytes at the given offsets, padded with zeros, mixed with their place in the text."""
    # A view with a stride of one byte reads a word from any offset without copying the buffer.
    view: NDArray[np.uint64] = np.ndarray((len(data) - 7,), dtype="<u8", buffer=data, strides=(1,))
    words = view[at].astype(np.uint64, copy=False)
    if left.min() < 8:
        words &= _TAIL_MASKS[np.minimum(left, 8)]
    words += (np.atleast_1d(np.asarray(place, dtype=np.uint64)) + np.uint64(1)) * np.uint64(_GOLDEN)
    return mix(words)


def _text_buffers(array: pa.Array) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.uint8]]:
    """Start and length of each text, and the bytes, with eight to spare at the end."""
    offsets, data_buffer = text_offsets(array), array.buffers()[2]
    starts: NDArray[np.int64] = offsets[:-1].astype(np.int64)
    lengths: NDArray[np.int64] = np.diff(offsets).astype(np.int64)
    if array.null_count:
        lengths[~numbers(array.is_valid())] = 0
    first, last = int(offsets[0]), int(offsets[-1])
    size = 0 if data_buffer is None else data_buffer.size
    if size >= last + 8:
        return starts, lengths, np.frombuffer(data_buffer, dtype=np.uint8)
    data = np.zeros(last - first + 8, dtype=np.uint8)
    if size:
        data[: last - first] = np.frombuffer(data_buffer, dtype=np.uint8)[first:last]
    return starts - first, lengths, data
