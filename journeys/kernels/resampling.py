"""The bootstrap over buckets of customers: moves estimated again from every resample, and passages through them.

Arrays over moves carry the resamples in the last axis, so that sums over stays are sparse products.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray
from journeys.kernels.many_passages import Draws, dense_passages, looped_passages
from journeys.kernels.return_walks import Walk
from journeys.kernels.sojourn import second_moment
from journeys.kernels.stays import FittedStays

if TYPE_CHECKING:
    from scipy.sparse import csr_array

_DENSE = 500  # most states of which full matrices are made
_FLOATS = 2**23  # most floats of one kind held at a time, about
_AT_ONCE = 64  # most resamples in a batch: then what some states take stays close to the processor
_TOGETHER = 8192  # cells and bins of states that are worked on together
_WORKERS = 2  # batches worked on at a time; what comes out does not depend on it


def bucket_weights(n_buckets: int, n_resamples: int, rng: np.random.Generator) -> FloatArray:
    """How often each bucket is drawn when as many as there are are drawn with replacement.

    Parameters
    ----------
    n_buckets, n_resamples : int
    rng : numpy.random.Generator

    Returns
    -------
    float array, shape (n_resamples, n_buckets)
        Whole numbers; each row sums to `n_buckets`.

    Examples
    --------
    >>> bucket_weights(4, 2, np.random.default_rng(1)).sum(axis=1).tolist()
    [4.0, 4.0]
    """
    return rng.multinomial(n_buckets, np.full(n_buckets, 1.0 / n_buckets), n_resamples).astype(np.float64)


@dataclass(frozen=True, eq=False)
class Refits:
    """Moves estimated from some resamples, arrays of shape (n_moves, n_resamples) in the moves of a `Refitter`."""

    probability: FloatArray
    mean: FloatArray
    second: FloatArray


class _Rows:
    """The stays of a few neighbouring states, laid out so that a batch of resamples is a handful of products."""

    def __init__(
        self, fitted: FittedStays, low: int, high: int, move: IntArray, moves: slice, *, steps: bool
    ) -> None:
        """Take the stays of the states from `low` to before `high`; `move` is the move of each cell."""
        from scipy.sparse import csr_array

        stays, split = fitted.stays, fitted.by_bucket
        self.states, self.moves, self._stays = slice(low, high), moves, stays
        self._open_weight, self._shape = fitted.found.open_weight, (high - low, stays.n_bins)
        rows, k, g = (high - low) * stays.n_bins, stays.n_bins, split.n_buckets
        cells = np.flatnonzero((stays.state >= low) & (stays.state < high))
        ended = np.flatnonzero((stays.state[split.cell] >= low) & (stays.state[split.cell] < high))
        still = np.flatnonzero((split.open_state >= low) & (split.open_state < high))
        kept = np.flatnonzero((split.survivor_state >= low) & (split.survivor_state < high))
        local = np.searchsorted(cells, split.cell[ended])
        place = (stays.state[cells] - low) * k + stays.bin[cells]

        def by_bucket(values: FloatArray, row: IntArray, bucket: IntArray, n_rows: int) -> csr_array:
            return csr_array((values, (row, bucket)), shape=(n_rows, g))

        whose = split.bucket[ended]
        at_open = (split.open_state[still] - low) * k + split.open_bin[still]
        self._ended = by_bucket(split.n[ended], place[local], whose, rows)
        self._open = by_bucket(split.open_n[still], at_open, split.open_bucket[still], rows)
        survivors = split.survivor_state[kept] - low
        self._survived = by_bucket(split.survivor_n[kept], survivors, split.survivor_bucket[kept], high - low)
        # cells of several buckets come first: only there does a resample change the mean dwell of the cell
        single = np.bincount(local, minlength=len(cells)) < 2
        order = np.argsort(single, kind="stable")
        rank = np.empty(len(cells), np.int64)
        rank[order] = np.arange(len(cells))
        self._n = by_bucket(split.n[ended], rank[local], whose, len(cells))
        self._place, self._steps = place[order], steps
        to = move[cells][order] - moves.start
        size = (moves.stop - moves.start, len(cells))
        self._to_moves = csr_array((np.ones(len(cells)), (to, np.arange(len(cells)))), shape=size)
        if not steps:
            self._total = by_bucket(split.total[ended], rank[local], whose, len(cells))
            bins = stays.bin[cells][order]
            self._lay_out_squares(stays.lower[bins], stays.upper[bins], int((~single).sum()))

    def _lay_out_squares(self, low: FloatArray, high: FloatArray, several: int) -> None:
        """Split the squared dwell of each cell (see `second_moment`) into what adds up over buckets, and the rest.

        About the middle c of a bin of width w the mean square of n stays of total t is
        n (w^2 / 12 - c^2) + 2 c t, and where |t - c n| is over n w / 6, 3/2 of the square of the excess over n more.
        """
        from scipy.sparse import csr_array, diags_array, vstack

        middle, width = (low + high) / 2, high - low
        n, total = (np.asarray(x[several:].sum(axis=1)) for x in (self._n, self._total))
        alone = np.divide(total, n, out=middle[several:].copy(), where=n > 0)
        single = diags_array(second_moment(alone, low[several:], high[several:])) @ self._n[several:]
        c, w = middle[:several], width[:several]
        linear = diags_array(w**2 / 12 - c**2) @ self._n[:several] + diags_array(2 * c) @ self._total[:several]
        self._square = csr_array(vstack([linear, single]))
        self._off_middle = csr_array(self._total[:several] - diags_array(c) @ self._n[:several])
        self._sixth = (w / 6)[:, None]

    def refit(self, w: FloatArray) -> tuple[list[FloatArray], FloatArray]:
        """Probability, and in days mean and second moment, of each move; and the share that survives all bins."""
        direct, left = self._hazards(w)
        own = direct[self._place]
        n = self._n @ w
        found = []
        for sums in [n] if self._steps else [self._squares(w, n), self._total @ w, n]:
            sums *= own
            found.append(np.asarray(self._to_moves @ sums, dtype=np.float64))
        return found[::-1], left

    def _squares(self, w: FloatArray, n: FloatArray) -> FloatArray:
        """Sum the squared dwell of each cell in each resample."""
        square = self._square @ w
        several = len(self._sixth)
        n, excess = n[:several], self._off_middle @ w
        np.abs(excess, out=excess)
        excess -= self._sixth * n
        np.maximum(excess, 0.0, out=excess)
        excess *= excess
        np.divide(excess, n, out=excess, where=n > 0)
        excess *= 1.5
        square[:several] += excess
        return np.asarray(square, dtype=np.float64)

    def _hazards(self, w: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Probability that one stay adds to its cell, (n_states * n_bins, n), and the share that survives all bins."""
        m, k = self._shape
        ended, still = ((x @ w).reshape(m, k, -1) for x in (self._ended, self._open))
        survivors = self._survived @ w
        at_risk, survival = np.empty(ended.shape), np.ones((m, k + 1, w.shape[1]))
        for _ in range(2):
            later = ended + still
            later[:, -1] += survivors
            np.cumsum(later[:, ::-1], axis=1, out=later[:, ::-1])
            np.subtract(later, self._open_weight * still, out=at_risk)
            # sums of whole and half numbers are exact; where nobody is at risk nobody ended
            np.maximum(at_risk, 0.25, out=at_risk)
            np.subtract(1.0, ended / at_risk, out=survival[:, 1:])
            np.cumprod(survival, axis=1, out=survival)
            if self._stays.survivor_target is not None:
                break
            unended = (survival[:, -1] > 1e-12) & (still.sum(axis=1) > 0)
            if not unended.any():
                break
            still = np.where(unended[:, None], 0.0, still)
            survival[:, 0] = 1.0
        left = np.where(later[:, 0] > 0, survival[:, -1], 0.0)
        np.divide(survival[:, :-1], at_risk, out=at_risk)
        return at_risk.reshape(m * k, -1), left


class Refitter:
    """Estimates the moves of a chain again from resampled buckets.

    Parameters
    ----------
    fitted : FittedStays
        The stays behind the chain.
    state, target : int arrays, shape (n_chain_moves,)
        The moves of the chain, those added for dead ends included.
    n_nodes : int
        States and outcomes.
    steps : bool, default False
        Count moves: probability, mean and second moment are one. Else dwell in days.

    Attributes
    ----------
    state, target : int arrays, shape (n_moves,)
        The moves of the chain, and those that only a resample may hold: a lapse where all were seen to leave
        otherwise. Sorted by state, then target.

    Notes
    -----
    Where nothing takes what survives the last bin (no silence), open stays of a state are left out of a resample
    in which the longest one there is open, as they are of a fit.
    """

    def __init__(
        self, fitted: FittedStays, state: IntArray, target: IntArray, n_nodes: int, *, steps: bool = False
    ) -> None:
        """Lay out the stays of each bucket as sparse matrices, some states at a time."""
        stays, self._steps = fitted.stays, steps
        self.n_buckets, self._survivor_dwell = fitted.by_bucket.n_buckets, stays.survivor_dwell
        chain = state * n_nodes + target
        lapsing = np.zeros(0, np.int64)
        if stays.survivor_target is not None:
            lapsing = np.unique(np.concatenate([stays.state, stays.open_state, np.flatnonzero(stays.survivor_n > 0)]))
        lapses = lapsing * n_nodes + (stays.survivor_target or 0)
        keys = np.unique(np.concatenate([chain, lapses]))
        self.state, self.target = keys // n_nodes, keys % n_nodes
        self._lapsing, self._lapse_move = lapsing, np.searchsorted(keys, lapses)
        added = np.setdiff1d(np.arange(len(chain)), fitted.move)
        self._never_left = np.searchsorted(keys, chain[added])
        move = np.searchsorted(keys, chain[fitted.move])[fitted.found.cell_move]
        first = np.searchsorted(self.state, np.arange(stays.n_states + 1))
        work = np.cumsum(np.bincount(stays.state, minlength=stays.n_states) + stays.n_bins)
        _, begins = np.unique(work // _TOGETHER, return_index=True)
        ends = [*begins[1:].tolist(), stays.n_states]
        self._rows = [
            _Rows(fitted, low, high, move, slice(int(first[low]), int(first[high])), steps=steps)
            for low, high in zip(begins.tolist(), ends, strict=True)
        ]

    def refit(self, weights: FloatArray) -> Refits:
        """Probability, mean and second moment of every move from each resample (see `fit_stays`).

        Parameters
        ----------
        weights : float array, shape (n_resamples, n_buckets)
            Whole numbers.

        Returns
        -------
        Refits
        """
        w = np.ascontiguousarray(weights.T)
        found = [np.empty((len(self.state), w.shape[1])) for _ in range(1 if self._steps else 3)]
        left = np.empty((self._rows[-1].states.stop, w.shape[1]))
        for rows in self._rows:
            parts, left[rows.states] = rows.refit(w)
            for whole, part in zip(found, parts, strict=True):
                whole[rows.moves] = part
        for power, whole in enumerate(found):
            whole[self._lapse_move] += left[self._lapsing] * self._survivor_dwell**power
        found[0][self._never_left] = 1.0
        return Refits(*(found * 3 if self._steps else found))

    def draws(self, weights: FloatArray, walks: Sequence[Walk]) -> list[Draws]:
        """Answers of some walks from every resample, in batches that keep memory modest.

        Parameters
        ----------
        weights : float array, shape (n_resamples, n_buckets)
            From `bucket_weights`.
        walks : sequence of Walk
            Of the moves of this `Refitter`.

        Returns
        -------
        list of Draws
            One for each walk.
        """
        n_states = max(walk.n_states for walk in walks)
        dense = n_states**2 if n_states <= _DENSE else 0
        batch = int(np.clip(_FLOATS // (2 * dense + 10 * len(self.state)), 1, _AT_ONCE))

        def answers(first: int) -> list[Draws]:
            moves = self.refit(weights[first : first + batch])
            roads = [dense_passages if walk.n_states <= _DENSE else looped_passages for walk in walks]
            return [
                road(walk, moves.probability, moves.mean, moves.second) for road, walk in zip(roads, walks, strict=True)
            ]

        with ThreadPoolExecutor(_WORKERS) as pool:
            parts = list(zip(*pool.map(answers, range(0, len(weights), batch)), strict=True))
        names = ("probability", "certain", "mean_given", "sd_given")
        return [Draws(*(np.concatenate([getattr(one, name) for one in part]) for name in names)) for part in parts]
