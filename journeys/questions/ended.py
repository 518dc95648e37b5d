"""Sums over whole journeys that have ended, weighted so that those still open do not pull them to the short ones."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray, sum_at
from journeys.kernels.intervals import variance_from_buckets
from journeys.kernels.sojourn import cell_influence, fit_stays
from journeys.kernels.stays import BucketStays, StayFit, Stays
from journeys.models.stays import journey_stays, live_buckets, outcome_column
from journeys.tally.accumulate import Columns
from journeys.tally.tally import Tally

# What is 0 or 1 but for rounding.
_ROUNDING = 1e-9


@dataclass(frozen=True, eq=False)
class Sums:
    """Weighted sums, per journey that begins, with what each bucket of customers does to them.

    Attributes
    ----------
    value : ndarray, shape (n,)
    influence : ndarray, shape (n_buckets, n)
    """

    value: FloatArray
    influence: FloatArray

    def over(self, other: Sums) -> Sums:
        """Return the ratios to one sum; no numbers where that is 0."""
        if other.value[0] == 0:
            return Sums(np.full_like(self.value, np.nan), np.full_like(self.influence, np.nan))
        ratio = self.value / other.value[0]
        return Sums(ratio, (self.influence - other.influence * ratio) / other.value[0])

    def added(self) -> Sums:
        """Return the sum of them all."""
        return Sums(self.value.sum(keepdims=True), self.influence.sum(axis=1, keepdims=True))

    def spread(self) -> tuple[FloatArray, FloatArray]:
        """Return standard errors and degrees of freedom, NaN where there is no number."""
        variance, df = variance_from_buckets(np.nan_to_num(self.influence))
        there = np.isfinite(self.value)
        return np.where(there, np.sqrt(variance), np.nan), np.where(there, df, np.nan)

    def share_spread(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return shares, standard errors and degrees of freedom, free of rounding at 0 and 1."""
        std_error, df = self.spread()
        close = np.minimum(np.abs(self.value), np.abs(1.0 - self.value)) < _ROUNDING
        return np.where(close, np.rint(self.value), self.value), np.where(close, 0.0, std_error), df


@dataclass(frozen=True, eq=False)
class Ended:
    """Whole journeys with a sure entry, by outcome and elapsed time.

    A journey that ended in a bin of time stands for ``S(before) / at risk`` of all: the jump of the Aalen-Johansen
    estimate of its outcome, shared out among those that made it.
    """

    tally: Tally
    stays: Stays
    by_bucket: BucketStays
    found: StayFit

    @property
    def left(self) -> float:
        """Share not decided by the time to which journeys were followed."""
        return float(self.found.survival_end[0])

    @property
    def n_begun(self) -> float:
        """How many journeys began."""
        return float(self.stays.n.sum() + self.stays.open_n.sum())

    @cached_property
    def _bucket(self) -> IntArray:
        return live_buckets(self.tally)

    def n_journeys(self, outcomes: IntArray) -> float:
        """Return how many have ended in some outcomes (codes)."""
        return float(self.stays.n[np.isin(self.stays.target, outcome_column(outcomes))].sum())

    def share(self, outcomes: IntArray) -> Sums:
        """Return the share that ends in some outcomes (codes), as one sum."""
        rows = rows_ended(self.tally.journeys, outcomes)
        return self.sums(rows, np.zeros(len(rows["n"]), np.int64), rows["n"].astype(np.float64), 1)

    def sums(self, rows: Columns, column: IntArray, amount: FloatArray, n_columns: int) -> Sums:
        """Return weighted sums of amounts that ended journeys have brought.

        Parameters
        ----------
        rows : mapping of str to ndarray
            Rows of a table of ended journeys: their bucket, outcome and bin of elapsed time.
        column : ndarray of int, shape (n_rows,)
            The sum that each row belongs to.
        amount : ndarray, shape (n_rows,)
            What it adds.
        n_columns : int
            How many sums there are.

        Returns
        -------
        Sums
        """
        stays, n_buckets = self.stays, self.by_bucket.n_buckets
        n_cells = len(stays.n)
        key = outcome_column(rows["outcome"]) * stays.n_bins + rows["bin"]
        cell = np.searchsorted(stays.target * stays.n_bins + stays.bin, key)
        weight = self.found.q / stays.n
        per_cell = sum_at(cell * n_columns + column, amount, n_cells * n_columns).reshape(n_cells, n_columns)
        mean = per_cell / stays.n[:, None]
        influence = cell_influence(self.found, stays, self.by_bucket, mean.T, np.zeros((n_columns, 1)))
        # what a bucket's own journeys brought more, or less, than others that ended so in the same bin
        own = self._bucket[rows["bucket"]] * n_columns + column
        brought = sum_at(own, amount * weight[cell], n_buckets * n_columns).reshape(n_buckets, n_columns)
        counted = sum_at(self.by_bucket.bucket * n_cells + self.by_bucket.cell, self.by_bucket.n, n_buckets * n_cells)
        brought -= (counted.reshape(n_buckets, n_cells) * weight) @ mean
        return Sums(weight @ per_cell, influence + brought)


def ended(tally: Tally) -> Ended:
    """Return the whole journeys of a tally with a sure entry.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill, N. Keiding, Statistical Models Based on Counting Processes, Springer 1993,
    section IV.4.
    """
    stays, by_bucket = journey_stays(tally)
    return Ended(tally, stays, by_bucket, fit_stays(stays, 0.0 if tally.whole_days else 0.5))


def rows_ended(table: Columns, outcomes: IntArray, last_bin: int | None = None) -> Columns:
    """Return the rows of a table of journeys with a sure entry that ended in some outcomes (codes), up to a bin."""
    mine = (table["sure"] == 1) & np.isin(table["outcome"], outcomes)
    if last_bin is not None:
        mine &= table["bin"] <= last_bin
    return {name: values[mine] for name, values in table.items()}
