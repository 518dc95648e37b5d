"""From the table of stages of a tally to stays: on the way to a stage, and in a stage."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.bins import bin_bounds_days, elapsed_edges
from journeys.kernels.records import FIRST_OUTCOME, OPEN
from journeys.kernels.stays import BucketStays, Stays
from journeys.models.stays import live_buckets, outcome_column
from journeys.tally.tally import Tally

NEXT = 0  # the column of stays that ended in the next stage


@dataclass(frozen=True, eq=False)
class StageRows:
    """The table of stages of journeys with a sure entry, one element per row of it.

    Attributes
    ----------
    n_stages : int
        Stages of the rules.
    n_buckets, n_outcomes : int
        Buckets with a customer; outcomes of the rules.
    bucket : ndarray of int64
        Place among those buckets.
    position : ndarray of int64
        Where the journey stood: 0 in entry, k in the k-th stage.
    column : ndarray of int64
        What it left for: `NEXT`, for the last stage any converted outcome, or the column of an outcome as in
        `journey_stays`.
    is_open : ndarray of bool
        It has not left.
    since_entry, since_stage : ndarray of int64
        Bins of the time since the journey began, and since it reached the stage.
    n : ndarray
        How many.
    upper_edges : ndarray of int64 or None
        Of the bins, in microseconds; None for bins of whole days.
    """

    n_stages: int
    n_buckets: int
    n_outcomes: int
    bucket: IntArray
    position: IntArray
    column: IntArray
    is_open: BoolArray
    since_entry: IntArray
    since_stage: IntArray
    n: FloatArray
    upper_edges: IntArray | None

    def reached(self) -> FloatArray:
        """Return how many journeys were seen in entry, in each stage, and converted after the last one."""
        in_stage = sum_at(self.position, self.n, self.n_stages + 1)
        converted = self.n[(self.position == self.n_stages) & (self.column == NEXT) & ~self.is_open].sum()
        return np.append(in_stage, converted)

    def still_in(self) -> FloatArray:
        """Return how many of them are undecided there; none of the converted."""
        return np.append(sum_at(self.position, self.n * self.is_open, self.n_stages + 1), 0.0)

    def way_to(self, k: int) -> tuple[Stays, BucketStays]:
        """Return journeys from their entry until they reach the k-th stage, end, or are last seen short of it.

        Parameters
        ----------
        k : int
            From 1; one more than the stages is the conversion after the last of them.

        Returns
        -------
        stays : Stays
            One state; column `NEXT` is the stage, the others are those of `journey_stays`.
        by_bucket : BucketStays
            The same by non-empty bucket.
        """
        last_seen = (self.column != NEXT) | (self.position == k - 1)
        return self._stays((self.position < k) & last_seen, self.since_entry)

    def stay_in(self, k: int) -> tuple[Stays, BucketStays]:
        """Return journeys from when they reach the k-th stage (0: entry) until they leave it.

        Parameters
        ----------
        k : int
            From 0.

        Returns
        -------
        stays, by_bucket
            As from `way_to`, column `NEXT` being the next stage.
        """
        return self._stays(self.position == k, self.since_stage)

    def _stays(self, mine: BoolArray, bins: IntArray) -> tuple[Stays, BucketStays]:
        still, ended = mine & self.is_open, mine & ~self.is_open
        n_bins = int(bins[mine].max()) + 1 if mine.any() else 1
        lower, upper = bin_bounds_days(self.upper_edges, n_bins)
        cells, cell = np.unique(self.column[ended] * n_bins + bins[ended], return_inverse=True)
        # The table has no sums of time; the middle of a bin stands for them.
        days = self.n[ended] * ((lower + upper) / 2)[bins[ended]]
        zeros, none = np.zeros(int(still.sum()), np.int64), np.zeros(0, np.int64)
        stays = Stays(
            n_states=1,
            n_targets=FIRST_OUTCOME + self.n_outcomes + 1,
            n_bins=n_bins,
            state=np.zeros(len(cells), np.int64),
            target=cells // n_bins,
            bin=cells % n_bins,
            n=sum_at(cell, self.n[ended], len(cells)),
            total=sum_at(cell, days, len(cells)),
            lower=lower,
            upper=upper,
            open_state=zeros,
            open_bin=bins[still],
            open_n=self.n[still],
            survivor_n=np.zeros(1),
        )
        by_bucket = BucketStays(
            n_buckets=self.n_buckets,
            bucket=self.bucket[ended],
            cell=cell,
            n=self.n[ended],
            total=days,
            open_bucket=self.bucket[still],
            open_state=zeros,
            open_bin=stays.open_bin,
            open_n=stays.open_n,
            survivor_bucket=none,
            survivor_state=none,
            survivor_n=np.zeros(0),
        )
        return stays, by_bucket


def stage_rows(tally: Tally) -> StageRows:
    """Return the table of stages of a tally, of journeys with a sure entry.

    Parameters
    ----------
    tally : Tally
        Counted by rules that name stages.

    Returns
    -------
    StageRows
    """
    rules, table = tally.rules, tally.stages
    sure = table["sure"] == 1
    place = np.zeros(len(tally.labels), np.int64)  # entry has the code 0
    for k, name in enumerate(rules.stages, start=1):
        if name in tally.states:
            place[tally.first_state + tally.states.index(name)] = k
    bucket = live_buckets(tally)
    position, code = place[table["stage"][sure]], table["next"][sure].astype(np.int64)
    converted = (code >= FIRST_OUTCOME) & (code < FIRST_OUTCOME + len(rules.converted))
    forward = (code >= tally.first_state) | (converted & (position == len(rules.stages)))
    return StageRows(
        n_stages=len(rules.stages),
        n_buckets=int(bucket.max()) + 1,
        n_outcomes=len(rules.outcomes),
        bucket=bucket[table["bucket"][sure]],
        position=position,
        column=np.where(forward, NEXT, outcome_column(code)),
        is_open=code == OPEN,
        since_entry=table["bin"][sure].astype(np.int64),
        since_stage=table["bin_stage"][sure].astype(np.int64),
        n=table["n"][sure].astype(np.float64),
        upper_edges=elapsed_edges(rules.silence_us, tally.whole_days, rules.horizons_us),
    )
