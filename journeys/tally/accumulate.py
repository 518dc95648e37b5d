"""Tables of whole-number sums under a packed key, kept sorted and compact while a log streams by."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import FloatArray, IntArray

Columns = dict[str, NDArray[np.int64]]
Keyed = tuple[IntArray, Columns]

_LIMB = 32
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
    """Return the distinct keys in order and the sums under each; low limbs carried into the high ones."""
    if not len(key):
        return key, sums
    order = np.argsort(key)
    key = key[order]
    first = np.ones(len(key), bool)
    first[1:] = key[1:] != key[:-1]
    start = np.flatnonzero(first)
    added = {name: np.add.reduceat(column[order], start) for name, column in sums.items()}
    for name in added:
        if name.endswith("_low"):
            high = name.removesuffix("_low") + "_high"
            added[high] = added[high] + (added[name] >> _LIMB)
            added[name] = added[name] & _LOW
    return key[start], added


def add_up_counts(key: IntArray) -> Keyed:
    """Return the distinct keys in order and how often each came."""
    distinct, n = np.unique(key, return_counts=True)
    return distinct, {"n": n.astype(np.int64, copy=False)}


class Accumulator:
    """A growing table of sums: blocks, each sorted and added up, merged when they pile up."""

    def __init__(self, names: tuple[str, ...]) -> None:
        self._names = names
        self._blocks: list[Keyed] = []
        self._waiting = 0
        self._settled = 0

    def add(self, keyed: Keyed) -> None:
        """Add one block: distinct keys in order, and their sums."""
        if not len(keyed[0]):
            return
        self._blocks.append(keyed)
        self._waiting += len(keyed[0])
        if self._waiting > max(2 * self._settled, 1 << 20):
            self._merge()

    def result(self) -> Keyed:
        """Return the distinct keys in order and their sums."""
        self._merge()
        if not self._blocks:
            return np.empty(0, np.int64), {name: np.empty(0, np.int64) for name in self._names}
        return self._blocks[0]

    def _merge(self) -> None:
        if len(self._blocks) > 1:
            self._blocks = [merged(self._blocks, self._names)]
        self._settled = len(self._blocks[0][0]) if self._blocks else 0
        self._waiting = 0


def merged(blocks: list[Keyed], names: tuple[str, ...]) -> Keyed:
    """Return several blocks added up as one; side by side where their keys do not overlap."""
    blocks = sorted((block for block in blocks if len(block[0])), key=lambda block: int(block[0][0]))
    if len(blocks) == 1:
        return blocks[0]
    key = np.concatenate([block[0] for block in blocks]) if blocks else np.empty(0, np.int64)
    sums = {name: np.concatenate([block[1][name] for block in blocks] or [key]) for name in names}
    apart = all(one[0][-1] < two[0][0] for one, two in zip(blocks, blocks[1:], strict=False))
    return (key, sums) if apart else add_up(key, sums)
