"""The key of a tally row packed into one whole number, so that one sort serves all its parts."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]
Whole = NDArray[np.integer[Any]] | NDArray[np.bool_]

_BIN_BITS, _CODE_BITS = 22, 16
MOST_CODES = 1 << _CODE_BITS
MOST_BINS = 1 << _BIN_BITS


def pack(bucket: Whole, first: Whole, second: Whole | int = 0, bins: Whole | int = 0, flag: Whole | int = 0) -> Ints:
    """Pack the parts of a key, the bucket in front."""
    key: Ints = bucket.astype(np.int64) << _CODE_BITS
    key |= first
    key <<= _CODE_BITS
    key |= second
    key <<= _BIN_BITS
    key |= bins
    key <<= 1
    key |= flag
    return key


def with_bins(key: Ints, bins: Ints) -> Ints:
    """Return keys that were packed without a bin, with one."""
    return key | (bins << 1)


def bucket_in(key: Ints) -> Ints:
    """Return the bucket of each packed key."""
    return key >> (2 * _CODE_BITS + _BIN_BITS + 1)


def unpack(key: Ints) -> tuple[Callable[[], Ints], ...]:
    """Return what takes a packed key apart: functions for bucket, two codes, bin and flag."""
    code = MOST_CODES - 1
    return (
        lambda: bucket_in(key),
        lambda: (key >> (_CODE_BITS + _BIN_BITS + 1)) & code,
        lambda: (key >> (_BIN_BITS + 1)) & code,
        lambda: (key >> 1) & (MOST_BINS - 1),
        lambda: key & 1,
    )
