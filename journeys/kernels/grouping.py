"""Which group a journey, and which period a move, belongs to: one whole number that packs all of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from journeys.kernels.arrays import BoolArray, IntArray

# What the customer was before the journey, as a number: new, or the code of how the journey before ended plus 1.
NEW = 0
_AFTER_BITS, _COHORT_BITS, _PERIOD_BITS = 17, 16, 10
MOST_PERIODS = 1 << _PERIOD_BITS


@dataclass(frozen=True)
class Grouping:
    """How journeys are grouped.

    Attributes
    ----------
    after : bool
        By what the customer was before.
    cohort_starts : ndarray of int64 or None
        Starts of the cohorts, rising, microseconds.
    splits : ndarray of int64, shape (n_periods - 1,)
        Cuts between periods, rising, microseconds.
    silence_us : int
        The silence, 0 where none is given.
    tick_us : int
        The finest step of time in the log: a microsecond, or a day where it holds dates.
    """

    after: bool
    cohort_starts: IntArray | None
    splits: IntArray
    silence_us: int
    tick_us: int

    def of_journeys(self, by: NDArray[np.int32] | None, before: NDArray[np.int32], begun: IntArray) -> IntArray:
        """Return the groups of journeys, their periods left out.

        Parameters
        ----------
        by : ndarray of int32 or None
            Code of the values in the group columns.
        before : ndarray of int32
            What the customer was before: `NEW`, or the code of how the journey before ended plus 1.
        begun : ndarray of int64
            When each began.

        Returns
        -------
        ndarray of int64
        """
        group = np.zeros(len(begun), np.int64) if by is None else by.astype(np.int64)
        group <<= _AFTER_BITS
        if self.after:
            group |= before
        group <<= _COHORT_BITS
        if self.cohort_starts is not None:
            group |= np.maximum(np.searchsorted(self.cohort_starts, begun, side="right") - 1, 0)
        return group << _PERIOD_BITS

    def in_periods(self, group: IntArray, since: IntArray, length: IntArray) -> tuple[IntArray, IntArray, BoolArray]:
        """Return groups with the period something began in, how long it was seen there, and whether a cut ended that.

        Parameters
        ----------
        group : ndarray of int64
            From `of_journeys`.
        since, length : ndarray of int64
            When it began and how long it lasted, microseconds.

        Returns
        -------
        group, length, cut : ndarray
            The last moment of a period is the tick before the cut, as `as_of` is the last moment of a log.
        """
        if not len(self.splits):
            return group, length, np.zeros(len(group), bool)
        period = np.searchsorted(self.splits, since, side="right")
        ends = np.append(self.splits - self.tick_us, np.iinfo(np.int64).max)[period]
        cut = since + length > ends
        return group | period, np.where(cut, ends - since, length), cut


def unpacked(group: IntArray) -> tuple[IntArray, IntArray, IntArray, IntArray]:
    """Return the code of the group columns, what came before, the cohort and the period of packed groups."""
    period = group & ((1 << _PERIOD_BITS) - 1)
    rest = group >> _PERIOD_BITS
    cohort = rest & ((1 << _COHORT_BITS) - 1)
    rest = rest >> _COHORT_BITS
    return rest >> _AFTER_BITS, rest & ((1 << _AFTER_BITS) - 1), cohort, period
