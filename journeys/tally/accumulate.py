"""Tables of whole-number sums under a packed key, kept sorted and compact while a log streams by."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import FloatArray, IntArray

Columns = dict[str, NDArray[np.int64]]
Keyed = tuple[IntArray, Columns]

_LIMB = 32
_FEW = 1 << 19
_LOW = (1 << _LIMB) - 1


def limbs(values: IntArray, name: str) -> Columns:
    """Split whole numbers into two columns whose sums cannot overflow: value = high * 2**32 + low."""
    return {f"{name}_high": values >> _LIMB, f"{name}_low": values & _LOW}


def join_limbs(columns: Mapping[str, IntArray], name: str) -> FloatArray:
    """Return the sums of a split column as floats."""
    return columns[f"{name}_high"].astype(np.float64) * (1 << _LIMB) + columns[f"{name}_low"]


def exact_limbs(columns: Mapping[str, IntArray], name: str) -> list[int]:
    """Return the sums of a split column as exact Python integers."""
    high, low = columns[f"{name}_high"].tolist(), columns[f"{name}_low"].tolist()
    return [(h << _LIMB) + b for h, b in zip(high, low, strict=True)]


def product_limbs(n: IntArray, value: IntArray, rest: IntArray, name: str) -> Columns:
    """Return n * value + rest in two columns; n below 2**32, value and rest not negative."""
    low = n.astype(np.uint64) * (value & _LOW).astype(np.uint64)
    high = n * (value >> _LIMB) + (low >> np.uint64(_LIMB)).astype(np.int64) + (rest >> _LIMB)
    low_sum = (low & np.uint64(_LOW)).astype(np.int64) + (rest & _LOW)
    return {f"{name}_high": high + (low_sum >> _LIMB), f"{name}_low": low_sum & _LOW}


def add_up(key: IntArray, sums: Columns) -> Keyed:
    """Return the distinct keys in order and the sums under each; low limbs carried into the high ones.

    `sums` is used up, so that columns can be let go of one by one.
    """
    if not len(key):
        return key, sums
    if (key[1:] <= key[:-1]).any():
        order = np.argsort(key)
        key = key[order]
        first = np.ones(len(key), bool)
        first[1:] = key[1:] != key[:-1]
        start = np.flatnonzero(first)
        added = {name: np.add.reduceat(sums.pop(name)[order], start) for name in list(sums)}
        key = key[start]
    else:
        added = dict(sums)
    for name in added:
        if name.endswith("_low"):
            high = name.removesuffix("_low") + "_high"
            added[high] = added[high] + (added[name] >> _LIMB)
            added[name] = added[name] & _LOW
    return key, added


class Accumulator:
    """A growing table of sums: blocks wait in any order and are added up when they pile up."""

    def __init__(self, names: tuple[str, ...]) -> None:
        self._names = names
        self._blocks: list[Keyed] = []
        self._waiting = 0
        self._settled = 0

    def add(self, key: IntArray, sums: Columns) -> None:
        """Add one block."""
        if not len(key):
            return
        self._blocks.append((key, sums))
        self._waiting += len(key)
        if self._waiting > max(2 * self._settled, _FEW):
            self._settle()

    def result(self) -> Keyed:
        """Return the distinct keys in order and their sums, and let go of them."""
        self._settle()
        blocks, self._blocks = self._blocks, []
        return blocks[0] if blocks else (np.empty(0, np.int64), {name: np.empty(0, np.int64) for name in self._names})

    def _settle(self) -> None:
        if self._waiting:
            key = np.concatenate([key for key, _ in self._blocks])
            sums = {name: np.concatenate([sums.pop(name) for _, sums in self._blocks]) for name in self._names}
            self._blocks = [add_up(key, sums)]
            self._settled, self._waiting = len(self._blocks[0][0]), 0
