"""What a stay takes from those that end in later bins: the indirect part of its influence on every move."""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import FloatArray, IntArray, sum_at
from journeys.kernels.stays import BucketStays, StayFit, Stays

_VERY_FEW = 2_000  # so few stays are summed one by one: a sparse product takes longer to set up
_PANEL = 1 << 17  # numbers of one kind worked on together
_FEW = 8  # below one filled place in so many, a sparse product is the quicker one


def divide(top: FloatArray, below: FloatArray) -> FloatArray:
    """Return the quotient, with 0 where the lower number is 0."""
    return np.divide(top, below, out=np.zeros(np.broadcast(top, below).shape), where=below != 0)


def pull_of(
    inflow: FloatArray, tail: FloatArray, hazard: FloatArray, at_risk: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the weights of the indirect influence, along the first axis (bins).

    Returns what an end in the bin takes from later bins, the pull of being at risk in
    the bin, and that pull summed up to and with the bin.
    """
    after = tail + np.cumsum(inflow[::-1], axis=0)[::-1] - inflow
    # nothing is left to take where all at risk end in the bin
    takes = divide(after, at_risk * (1.0 - hazard))
    pull = divide(inflow, at_risk) - hazard * takes
    return takes, pull, np.cumsum(pull, axis=0)


class LaterBins:
    """What the stays of each bucket take from the moves of later bins, for some rows at a time.

    Parameters
    ----------
    fit, stays, buckets
        As for `journeys.kernels.sojourn.move_influence`.
    values : float array, shape (n_values, n_cells)
        What an end in a cell counts for: 1, its dwell, or that squared.

    Attributes
    ----------
    move_at : int array, shape (n_states + 1,)
        The first move of each row, and the number of moves.
    """

    def __init__(self, fit: StayFit, stays: Stays, buckets: BucketStays, values: FloatArray) -> None:
        """Put cells and stays in the order of the rows."""
        m = stays.n_states
        self.fit, self.stays, self.buckets, self.values = fit, stays, buckets, values
        self.ended_state = stays.state[buckets.cell]
        self.cells = _by_state(stays.state, m)
        self.ended, self.still, self.kept = (
            _by_state(state, m) for state in (self.ended_state, buckets.open_state, buckets.survivor_state)
        )
        self.move_at = np.searchsorted(fit.move_state, np.arange(m + 1))
        self.widths = np.diff(self.move_at)

    def panels(self) -> list[tuple[int, int]]:
        """Return runs of rows to be worked on together: as many as stay small, those with many stays alone."""
        k, g = self.stays.n_bins, self.buckets.n_buckets
        size = len(self.values) * k * self.widths
        alone = np.diff(self.ended[1]) * _FEW >= g * k
        found, first, held = [], 0, 0
        for i, (more, own) in enumerate(zip(size.tolist(), alone.tolist(), strict=True)):
            if i > first and (own or alone[i - 1] or held + more > _PANEL):
                found.append((first, i))
                first, held = i, 0
            held += more
        return [(i, j) for i, j in (*found, (first, len(size))) if size[i:j].any()]

    def of_rows(self, i: int, j: int) -> FloatArray:
        """Return it for the moves of rows i to j - 1, shape (n_values, n_buckets, n_moves of these rows)."""
        fit, of, g, width = self.fit, self.buckets, self.buckets.n_buckets, int(self.widths[i:j].max())
        risk, hazard = (x[i:j].T[:, :, None, None] for x in (fit.at_risk, fit.hazard_all))
        takes, pull, sofar = pull_of(self._inflow(i, j, width), self._tail(i, j, width), hazard, risk)
        e, o, s = (order[at[i] : at[j]] for order, at in (self.ended, self.still, self.kept))
        place = (self.ended_state[e] - i) * g + of.bucket[e]
        block = self._crossed(place, self.stays.bin[of.cell[e]], of.n[e], takes + sofar)
        if len(o):
            place = (of.open_state[o] - i) * g + of.open_bucket[o]
            block += self._crossed(place, of.open_bin[o], of.open_n[o], sofar - fit.open_weight * pull)
        if len(s):
            place = (of.survivor_state[s] - i) * g + of.survivor_bucket[s]
            block += sum_at(place, of.survivor_n[s], (j - i) * g).reshape(j - i, g, 1, 1) * sofar[-1][:, None]
        has = np.arange(width) < self.widths[i:j, None]
        return block.transpose(2, 1, 0, 3)[:, :, has]

    def _inflow(self, i: int, j: int, width: int) -> FloatArray:
        """Sum what ends in each bin by move, shape (n_bins, n_rows, n_values, width)."""
        fit, k, rows = self.fit, self.stays.n_bins, j - i
        c = self.cells[0][self.cells[1][i] : self.cells[1][j]]
        state = self.stays.state[c]
        at = (self.stays.bin[c] * rows + state - i) * width + fit.cell_move[c] - self.move_at[state]
        sums = [sum_at(at, fit.q[c] * v[c], k * rows * width).reshape(k, rows, width) for v in self.values]
        return np.stack(sums, axis=2)

    def _tail(self, i: int, j: int, width: int) -> FloatArray:
        """Return what outlives the last bin by move, shape (n_rows, n_values, width)."""
        tail = np.zeros((j - i, len(self.values), width))
        ends = i + np.flatnonzero(self.fit.survivor_move[i:j] >= 0)
        dwell = np.broadcast_to(self.stays.survivor_dwell, self.fit.survival_end.shape)[ends, None]
        left = self.fit.survival_end[ends, None] * dwell ** np.arange(len(self.values))
        tail[ends - i, :, self.fit.survivor_move[ends] - self.move_at[ends]] = left
        return tail

    def _crossed(self, place: IntArray, at: IntArray, n: FloatArray, weights: FloatArray) -> FloatArray:
        """Multiply counts, at row and bucket and in bins, by the weights of the bins of each row."""
        k, rows, n_values, width = weights.shape
        g = self.buckets.n_buckets
        flat = weights.reshape(k * rows, n_values * width)
        return _crossed(place, at * rows + place // g, n, flat, rows * g).reshape(rows, g, n_values, width)


def _crossed(bucket: IntArray, at: IntArray, n: FloatArray, weights: FloatArray, g: int) -> FloatArray:
    """Multiply counts (bucket x bin) by weights (bin x value), shape (g, n_values)."""
    k, values = weights.shape
    if len(n) < _VERY_FEW:
        place = bucket[:, None] * values + np.arange(values)
        return sum_at(place.ravel(), (n[:, None] * weights[at]).ravel(), g * values).reshape(g, values)
    if len(n) * _FEW < g * k:
        from scipy.sparse import coo_array

        # by coordinates: to put them in order first would take longer than the product
        counts = coo_array((n, (bucket, at)), shape=(g, k))
        return np.asarray(counts @ weights, dtype=np.float64)
    return sum_at(bucket * k + at, n, g * k).reshape(g, k) @ weights


def _by_state(state: IntArray, n_states: int) -> tuple[IntArray, IntArray]:
    """Order that sorts by state, and where each state begins in it."""
    order = np.argsort(state, kind="stable")
    return order, np.searchsorted(state[order], np.arange(n_states + 1))
