"""Stays in states, what is estimated from them, and the same stays by bucket of customers."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray, sum_at

if TYPE_CHECKING:
    from scipy.sparse import csr_array

# A matrix has a place for each bucket and cell where not many more are empty than filled, and that many at most.
_FEW, _MOST_PLACES = 4, 8_000_000


@dataclass(frozen=True, eq=False)
class Stays:
    """Binned stays of many states, in coordinates.

    Attributes
    ----------
    n_states, n_targets, n_bins : int
        Rows, columns (states first, then outcomes) and dwell bins.
    state, target, bin : int arrays, shape (n_cells,)
        Where the ended stays are; no (state, target, bin) comes twice.
    n, total : float arrays, shape (n_cells,)
        Ended stays of a cell, and their summed dwell in days.
    lower, upper : float arrays, shape (n_bins,)
        Edges of the bins in days.
    open_state, open_bin, open_n : arrays, shape (n_open,)
        Stays still open, by the bin of their age.
    survivor_n : float array, shape (n_states,)
        Stays that lapsed at the end of the last bin.
    survivor_target : int or None
        Column to which what survives the last bin goes; None: to no column.
    survivor_dwell : float, or float array of shape (n_states,)
        Dwell of such a stay in days, the same for all states or state by state.
    """

    n_states: int
    n_targets: int
    n_bins: int
    state: IntArray
    target: IntArray
    bin: IntArray
    n: FloatArray
    total: FloatArray
    lower: FloatArray
    upper: FloatArray
    open_state: IntArray
    open_bin: IntArray
    open_n: FloatArray
    survivor_n: FloatArray
    survivor_target: int | None = None
    survivor_dwell: float | FloatArray = 0.0


@dataclass(frozen=True, eq=False)
class StayFit:
    """Estimates from `fit_stays`.

    Attributes
    ----------
    hazard, q, tau, tau2 : float arrays, shape (n_cells,)
        Hazard of the cell in its bin, probability of the cell, mean dwell (days) and
        mean squared dwell (days squared) in it.
    survival_before, hazard_all, at_risk : float arrays, shape (n_states, n_bins)
        Share of stays that outlive the bins before, hazard of any end, stays at risk.
    survival_end : float array, shape (n_states,)
        Share of stays that outlive the last bin; 1 in a state with no stays.
    move_state, move_target : int arrays, shape (n_moves,)
        The moves that occur, sorted by (state, target).
    probability, mean, second : float arrays, shape (n_moves,)
        Probability of the move; dwell and squared dwell, each times the probability.
    cell_move : int array, shape (n_cells,)
        The move each cell belongs to.
    survivor_move : int array, shape (n_states,)
        The move that takes what survives the last bin; -1 where there is none.
    open_weight : float
        Share of a bin's open stays that are not at risk in it.
    """

    hazard: FloatArray
    q: FloatArray
    tau: FloatArray
    tau2: FloatArray
    survival_before: FloatArray
    hazard_all: FloatArray
    at_risk: FloatArray
    survival_end: FloatArray
    move_state: IntArray
    move_target: IntArray
    probability: FloatArray
    mean: FloatArray
    second: FloatArray
    cell_move: IntArray
    survivor_move: IntArray
    open_weight: float


@dataclass(frozen=True, eq=False)
class BucketStays:
    """The stays of a `Stays`, split by bucket of customers.

    Attributes
    ----------
    n_buckets : int
        Number of buckets.
    bucket, cell, n, total : arrays, shape (n_ended,)
        Ended stays: bucket, index into the cells of the `Stays`, number of stays, summed dwell in days.
    open_bucket, open_state, open_bin, open_n : arrays, shape (n_open,)
        Open stays.
    survivor_bucket, survivor_state, survivor_n : arrays, shape (n_survivors,)
        Stays that lapsed at the end of the last bin.
    """

    n_buckets: int
    bucket: IntArray
    cell: IntArray
    n: FloatArray
    total: FloatArray
    open_bucket: IntArray
    open_state: IntArray
    open_bin: IntArray
    open_n: FloatArray
    survivor_bucket: IntArray
    survivor_state: IntArray
    survivor_n: FloatArray

    @cached_property
    def by_cell(self) -> FloatArray | csr_array:
        """Numbers of ended stays, shape (n_buckets, last cell that occurs + 1); kept, since sorting takes its time."""
        return _counted(self.bucket, self.cell, self.n, (self.n_buckets, int(self.cell.max(initial=-1)) + 1))

    @cached_property
    def open_size(self) -> tuple[int, int]:
        """The last bin and the last state of an open stay, each + 1."""
        return int(self.open_bin.max(initial=-1)) + 1, int(self.open_state.max(initial=-1)) + 1

    @cached_property
    def open_by_place(self) -> FloatArray | csr_array:
        """Numbers of open stays by bin and state, shape (n_buckets, product of `open_size`); kept."""
        bins, states = self.open_size
        place = self.open_bin.astype(np.int64) * states + self.open_state
        return _counted(self.open_bucket, place, self.open_n, (self.n_buckets, bins * states))


def _counted(bucket: IntArray, place: IntArray, n: FloatArray, shape: tuple[int, int]) -> FloatArray | csr_array:
    """Return counts as a matrix.

    Where nearly every place is filled and all have room, one with a place for each is multiplied quicker.
    """
    from scipy.sparse import csr_array

    size = shape[0] * shape[1]
    if size <= min(_FEW * len(n), _MOST_PLACES):
        return sum_at(bucket * shape[1] + place, n, size).reshape(shape)
    return csr_array((n, (bucket, place)), shape=shape)


@dataclass(frozen=True, eq=False)
class FittedStays:
    """What a chain was fitted to, and what was estimated from it cell by cell.

    Attributes
    ----------
    stays : Stays
        The stays of all customers together.
    by_bucket : BucketStays
        The same stays by bucket of customers.
    found : StayFit
        The estimates; its moves are numbered as in `StayFit`.
    move : int array, shape (n_moves of `found`,)
        Place of each of those moves among the moves of the chain, which may hold more (dead ends).
    """

    stays: Stays
    by_bucket: BucketStays
    found: StayFit
    move: IntArray
