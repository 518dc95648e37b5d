"""Tables of whole-number sums under a packed key, kept sorted and compact while a log streams by."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

Columns = dict[str, NDArray[np.int64]]

_LIMB = 32
_LOW = (1 << _LIMB) - 1


def limbs(values: NDArray[np.int64], name: str) -> Columns:
    """Split whole numbers into two columns whose sums cannot overflow: value = high * 2**32 + low."""
    return {f"{name}_high": values >> _LIMB, f"{name}_low": values & _LOW}


def join_limbs(columns: Mapping[str, NDArray[np.int64]], name: str) -> NDArray[np.float64]:
    """Return the sums of a split column as floats."""
    return columns[f"{name}_high"].astype(np.float64) * (1 << _LIMB) + columns[f"{name}_low"]


def exact_limbs(columns: Mapping[str, NDArray[np.int64]], name: str) -> list[int]:
    """Return the sums of a split column as exact Python integers."""
    high, low = columns[f"{name}_high"].tolist(), columns[f"{name}_low"].tolist()
    return [(h << _LIMB) + b for h, b in zip(high, low, strict=True)]


def add_up(key: NDArray[np.int64], sums: Columns) -> tuple[NDArray[np.int64], Columns]:
    """Return the distinct keys in order and the sums under each; low limbs carried into the high ones."""
    if not len(key):
        return key, sums
    order = np.argsort(key, kind="stable")
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


class Accumulator:
    """A growing table of sums: blocks are added up as they come and merged when they pile up."""

    def __init__(self, names: tuple[str, ...]) -> None:
        self._names = names
        self._blocks: list[tuple[NDArray[np.int64], Columns]] = []
        self._waiting = 0
        self._settled = 0

    def add(self, key: NDArray[np.int64], sums: Columns) -> None:
        """Add one block of (key, sums)."""
        if not len(key):
            return
        self._blocks.append(add_up(key, sums))
        self._waiting += len(self._blocks[-1][0])
        if self._waiting > max(2 * self._settled, 1 << 20):
            self._merge()

    def result(self) -> tuple[NDArray[np.int64], Columns]:
        """Return the distinct keys in order and their sums."""
        self._merge()
        if not self._blocks:
            return np.empty(0, np.int64), {name: np.empty(0, np.int64) for name in self._names}
        return self._blocks[0]

    def _merge(self) -> None:
        if len(self._blocks) > 1:
            key = np.concatenate([block[0] for block in self._blocks])
            sums = {name: np.concatenate([block[1][name] for block in self._blocks]) for name in self._names}
            self._blocks = [add_up(key, sums)]
        self._settled = len(self._blocks[0][0]) if self._blocks else 0
        self._waiting = 0
