"""The stays of one group among those of many that were fitted in one go."""

from __future__ import annotations

from functools import cached_property

import numpy as np

from journeys.kernels.arrays import BoolArray, IntArray
from journeys.kernels.stays import BucketStays, FittedStays, StayFit, Stays


def own_node(node: IntArray, low: int, high: int, n_rows: int) -> IntArray:
    """Return the nodes of a group by itself from those of a chain of many groups.

    Parameters
    ----------
    node : int array
        Its own rows, or outcomes.
    low, high : int
        Its rows are those from `low` to before `high`.
    n_rows : int
        Rows of the whole chain; what comes after them are the outcomes.

    Examples
    --------
    >>> own_node(np.array([3, 4, 9]), 3, 5, 8).tolist()
    [0, 1, 3]
    """
    return np.where(node < n_rows, node - low, node - n_rows + high - low)


class StackStays:
    """The stays of many groups, to be taken apart again.

    Parameters
    ----------
    whole : FittedStays
        Of all groups.
    first : int array, shape (n_groups + 1,)
        The first row of each group, and the number of rows.
    move_state : int array, shape (n_moves,)
        Rows that the moves of the chain leave.
    """

    def __init__(self, whole: FittedStays, first: IntArray, move_state: IntArray) -> None:
        """Keep them."""
        self._whole, self._first, self._move_state = whole, first, move_state

    def part(self, i: int, live: BoolArray) -> FittedStays:
        """Return the stays of one group, as if it had been fitted by itself.

        Parameters
        ----------
        i : int
            Which group.
        live : bool array, shape (n_buckets,)
            Buckets that hold any of its customers.
        """
        whole, (low, high) = self._whole, self._first[i : i + 2].tolist()
        cells = slice(*np.searchsorted(whole.stays.state, [low, high]).tolist())
        moves = slice(*np.searchsorted(whole.found.move_state, [low, high]).tolist())
        # where the number of bins is not given, it is that of the group's longest stay
        dwell = np.broadcast_to(whole.stays.survivor_dwell, (self._first[-1],))[low]
        fixed = np.ndim(whole.stays.survivor_dwell) == 0
        n_bins = whole.stays.n_bins if fixed else int(np.searchsorted(whole.stays.upper, dwell)) + 1
        by_bucket = self._by_bucket(i, low, cells.start, live)
        stays = self._stays(low, high, cells, n_bins, float(dwell), by_bucket)
        found = self._found(low, high, cells, moves, n_bins)
        before = int(np.searchsorted(self._move_state, low))
        return FittedStays(stays, by_bucket, found, whole.move[moves] - before)

    def _by_bucket(self, i: int, low: int, first_cell: int, live: BoolArray) -> BucketStays:
        all_of, number = self._whole.by_bucket, np.cumsum(live) - 1
        ended, still, kept = (rows[bounds[i] : bounds[i + 1]] for rows, bounds in self._rows)
        return BucketStays(
            n_buckets=int(live.sum()),
            bucket=number[all_of.bucket[ended]],
            cell=all_of.cell[ended] - first_cell,
            n=all_of.n[ended],
            total=all_of.total[ended],
            open_bucket=number[all_of.open_bucket[still]],
            open_state=all_of.open_state[still] - low,
            open_bin=all_of.open_bin[still],
            open_n=all_of.open_n[still],
            survivor_bucket=number[all_of.survivor_bucket[kept]],
            survivor_state=all_of.survivor_state[kept] - low,
            survivor_n=all_of.survivor_n[kept],
        )

    @cached_property
    def _rows(self) -> list[tuple[IntArray, IntArray]]:
        """Ended, open and surviving stays in the order of the groups, and where each group begins."""
        of = self._whole.by_bucket
        found = []
        for state in (self._whole.stays.state[of.cell], of.open_state, of.survivor_state):
            group = np.searchsorted(self._first, state, side="right") - 1
            order = np.argsort(group, kind="stable")
            found.append((order, np.searchsorted(group[order], np.arange(len(self._first)))))
        return found

    def _stays(self, low: int, high: int, cells: slice, n_bins: int, dwell: float, by_bucket: BucketStays) -> Stays:
        whole = self._whole.stays
        n_outcomes = whole.n_targets - whole.n_states
        n_targets = high - low + n_outcomes
        return Stays(
            n_states=high - low,
            n_targets=n_targets,
            n_bins=n_bins,
            state=whole.state[cells] - low,
            target=own_node(whole.target[cells], low, high, whole.n_states),
            bin=whole.bin[cells],
            n=whole.n[cells],
            total=whole.total[cells],
            lower=whole.lower[:n_bins],
            upper=whole.upper[:n_bins],
            open_state=by_bucket.open_state,
            open_bin=by_bucket.open_bin,
            open_n=by_bucket.open_n,
            survivor_n=whole.survivor_n[low:high],
            survivor_target=None if whole.survivor_target is None else n_targets - 1,
            survivor_dwell=dwell,
        )

    def _found(self, low: int, high: int, cells: slice, moves: slice, n_bins: int) -> StayFit:
        whole, n_states = self._whole.found, self._whole.stays.n_states
        survivor_move = whole.survivor_move[low:high]
        return StayFit(
            hazard=whole.hazard[cells],
            q=whole.q[cells],
            tau=whole.tau[cells],
            tau2=whole.tau2[cells],
            survival_before=whole.survival_before[low:high, :n_bins],
            hazard_all=whole.hazard_all[low:high, :n_bins],
            at_risk=whole.at_risk[low:high, :n_bins],
            survival_end=whole.survival_end[low:high],
            move_state=whole.move_state[moves] - low,
            move_target=own_node(whole.move_target[moves], low, high, n_states),
            probability=whole.probability[moves],
            mean=whole.mean[moves],
            second=whole.second[moves],
            cell_move=whole.cell_move[cells] - moves.start,
            survivor_move=np.where(survivor_move >= 0, survivor_move - moves.start, -1),
            open_weight=whole.open_weight,
        )
