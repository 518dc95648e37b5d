"""How the stays in each state end, with stays still open right-censored.

Aalen-Johansen estimates on binned stays, for many states at once, and their exact
derivative by the stays of each bucket of customers.
"""

from __future__ import annotations

import numpy as np

from journeys.kernels.arrays import FloatArray, sum_at
from journeys.kernels.later_bins import LaterBins, divide, pull_of
from journeys.kernels.stays import BucketStays, StayFit, Stays

__all__ = ["BucketStays", "StayFit", "Stays", "cell_influence", "fit_stays", "move_influence"]


def second_moment(tau: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    """Mean square of a density linear on its bin, cut off at 0, whose mean is `tau`.

    Parameters
    ----------
    tau, lower, upper : float arrays that broadcast to one shape
        Mean dwell, and the edges of its bin.

    Returns
    -------
    float array

    Examples
    --------
    >>> second_moment(np.array([1.0]), np.array([0.0]), np.array([2.0])).round(4).tolist()
    [1.3333]
    """
    width = upper - lower
    shift = tau - (lower + upper) / 2
    within = np.abs(shift) <= width / 6
    # a steeper line than that meets zero inside the bin: what is left is a triangle
    leg = np.maximum(np.where(shift < 0, tau - lower, upper - tau), 0.0)
    variance = np.where(within, width**2 / 12 - shift**2, leg**2 / 2)
    return tau**2 + np.where(width > 0, np.maximum(variance, 0.0), 0.0)


def fit_stays(stays: Stays, open_weight: float = 0.5) -> StayFit:
    """Probability, mean dwell and mean squared dwell of every move.

    Parameters
    ----------
    stays : Stays
        Ended, open and surviving stays.
    open_weight : float, default 0.5
        Share of the open stays of a bin that are not at risk in it: 0.5 where ages are
        spread over the bin, 0 for bins of whole days.

    Returns
    -------
    StayFit
        Where `survivor_target` is None the row of a state sums to 1 less its
        `survival_end`; the caller decides what becomes of that.

    Notes
    -----
    With ``Y`` at risk, ``D`` ended: hazard ``D/Y``, survival the product of ``1 - hazard``,
    ``q = survival before * hazard``, ``P = sum q``, ``M = sum q tau``, ``M2 = sum q tau2``.

    References
    ----------
    P. K. Andersen, O. Borgan, R. D. Gill and N. Keiding, Statistical Models Based on
    Counting Processes, Springer 1993, section IV.4.

    Examples
    --------
    One state; of four stays two go to column 1, one is open, one outlives both bins.

    >>> import numpy as np
    >>> stays = Stays(1, 3, 2, state=np.array([0, 0]), target=np.array([1, 1]), bin=np.array([0, 1]),
    ...     n=np.array([1.0, 1.0]), total=np.array([0.5, 1.5]), lower=np.array([0.0, 1.0]),
    ...     upper=np.array([1.0, 2.0]), open_state=np.array([0]), open_bin=np.array([0]),
    ...     open_n=np.array([1.0]), survivor_n=np.array([1.0]), survivor_target=2, survivor_dwell=2.0)
    >>> fit = fit_stays(stays)
    >>> fit.at_risk.tolist()
    [[3.5, 2.0]]
    >>> fit.move_target.tolist(), fit.probability.round(4).tolist()
    ([1, 2], [0.6429, 0.3571])
    """
    m, k = stays.n_states, stays.n_bins
    place = stays.state * k + stays.bin
    ended = sum_at(place, stays.n, m * k).reshape(m, k)
    still = sum_at(stays.open_state * k + stays.open_bin, stays.open_n, m * k).reshape(m, k)
    # summed from the last bin back, so that a last bin left by all has a hazard of exactly 1
    leaving = np.concatenate([ended + still, stays.survivor_n[:, None]], axis=1)
    later = np.cumsum(leaving[:, :0:-1], axis=1)[:, ::-1]
    at_risk = later + ended + (1.0 - open_weight) * still
    hazard_all = divide(ended, at_risk)
    survival = np.cumprod(np.concatenate([np.ones((m, 1)), 1.0 - hazard_all], axis=1), axis=1)

    risk = at_risk.ravel()[place]
    hazard = divide(stays.n, risk)
    q = survival[:, :-1].ravel()[place] * hazard
    low, high = stays.lower[stays.bin], stays.upper[stays.bin]
    tau = np.where(stays.n > 0, divide(stays.total, stays.n), (low + high) / 2)
    tau2 = second_moment(tau, low, high)

    end = survival[:, -1].copy()
    left = np.where(leaving.sum(axis=1) > 0, end, 0.0)
    keeps = np.flatnonzero(left > 0) if stays.survivor_target is not None else np.zeros(0, np.int64)
    column = 0 if stays.survivor_target is None else stays.survivor_target
    keys = np.concatenate([stays.state * stays.n_targets + stays.target, keeps * stays.n_targets + column])
    moves, where = np.unique(keys, return_inverse=True)
    cell_move, survivor_move = where[: len(q)], np.full(m, -1, dtype=np.int64)
    survivor_move[keeps] = where[len(q) :]
    w = np.broadcast_to(stays.survivor_dwell, (m,))[keeps]

    def gather(per_cell: FloatArray, per_survivor: FloatArray) -> FloatArray:
        return sum_at(where, np.concatenate([per_cell, per_survivor]), len(moves))

    return StayFit(
        hazard=hazard, q=q, tau=tau, tau2=tau2,
        survival_before=survival[:, :-1].copy(), hazard_all=hazard_all, at_risk=at_risk, survival_end=end,
        move_state=moves // stays.n_targets, move_target=moves % stays.n_targets,
        probability=gather(q, left[keeps]),
        mean=gather(q * tau, w * left[keeps]),
        second=gather(q * tau2, w * w * left[keeps]),
        cell_move=cell_move, survivor_move=survivor_move, open_weight=open_weight,
    )


def _direct(fit: StayFit, stays: Stays) -> FloatArray:
    """Return what one more stay of a cell adds to its own probability, all else held."""
    place = stays.state * stays.n_bins + stays.bin
    return divide(fit.survival_before.ravel()[place], fit.at_risk.ravel()[place])


def move_influence(fit: StayFit, stays: Stays, buckets: BucketStays, n_moments: int = 3) -> tuple[FloatArray, ...]:
    """Influence of each bucket on every move.

    The derivative of `probability`, `mean` and `second` of each move by the number of
    stays of each kind (mean dwell of a cell held fixed), summed over a bucket's stays.

    Parameters
    ----------
    fit : StayFit
        From `fit_stays(stays)`.
    stays : Stays
        The stays of all buckets together.
    buckets : BucketStays
        The same stays by bucket.
    n_moments : int, default 3
        1 for the probability alone.

    Returns
    -------
    tuple of `n_moments` float arrays, each of shape (n_buckets, n_moves)
        For the probability, the mean and the second moment.

    References
    ----------
    B. Efron, The Jackknife, the Bootstrap and Other Resampling Plans, SIAM 1982,
    chapter 6 (infinitesimal jackknife).

    Examples
    --------
    Without censoring this is the linearised ratio: (stays of the move - P stays) / all stays.

    >>> import numpy as np
    >>> no, none = np.zeros(0, dtype=np.int64), np.zeros(0)
    >>> stays = Stays(1, 3, 1, state=np.array([0, 0]), target=np.array([1, 2]), bin=np.array([0, 0]),
    ...     n=np.array([3.0, 1.0]), total=np.array([0.0, 0.0]), lower=np.array([0.0]),
    ...     upper=np.array([0.0]), open_state=no, open_bin=no, open_n=none, survivor_n=np.zeros(1))
    >>> split = BucketStays(2, np.array([0, 1, 1]), np.array([0, 0, 1]), np.array([2.0, 1.0, 1.0]),
    ...     np.zeros(3), no, no, no, none, no, no, none)
    >>> move_influence(fit_stays(stays), stays, split)[0].tolist()
    [[0.125, -0.125], [-0.125, 0.125]]
    """
    g, n_moves = buckets.n_buckets, len(fit.probability)
    own = buckets.n * _direct(fit, stays)[buckets.cell]
    key = buckets.bucket * n_moves + fit.cell_move[buckets.cell]
    values = np.stack([np.ones_like(fit.tau), fit.tau, fit.tau2][:n_moments])
    result = np.stack([sum_at(key, own * v[buckets.cell], g * n_moves).reshape(g, n_moves) for v in values])
    later = LaterBins(fit, stays, buckets, values)
    for i, j in later.panels():
        result[:, :, later.move_at[i] : later.move_at[j]] -= later.of_rows(i, j)
    return tuple(result)


def cell_influence(
    fit: StayFit, stays: Stays, buckets: BucketStays, phi: FloatArray, phi_survivor: FloatArray
) -> FloatArray:
    """Influence of each bucket on the sum of a value table over the cells.

    The answer looked at is ``sum q phi + sum survival_end phi_survivor``.

    Parameters
    ----------
    fit, stays, buckets
        As for `move_influence`.
    phi : float array, shape (n_cells,) or (n_values, n_cells)
        Value of a stay that ends in the cell; several tables make several answers.
    phi_survivor : float array, shape (n_states,) or (n_values, n_states)
        Value of a stay that outlives the last bin.

    Returns
    -------
    float array, shape (n_buckets,) or (n_buckets, n_values)
        Derivative by the stays of each bucket, `phi` held fixed.

    Examples
    --------
    Four stays ended in two bins; the share of them that outlives the first.

    >>> import numpy as np
    >>> no, none = np.zeros(0, dtype=np.int64), np.zeros(0)
    >>> stays = Stays(1, 2, 2, state=np.array([0, 0]), target=np.array([1, 1]), bin=np.array([0, 1]),
    ...     n=np.array([1.0, 3.0]), total=np.array([1.0, 6.0]), lower=np.array([0.0, 1.0]),
    ...     upper=np.array([1.0, 2.0]), open_state=no, open_bin=no, open_n=none, survivor_n=np.zeros(1))
    >>> split = BucketStays(2, np.array([0, 1, 1]), np.array([0, 1, 1]), np.array([1.0, 1.0, 2.0]),
    ...     np.array([1.0, 2.0, 4.0]), no, no, no, none, no, no, none)
    >>> cell_influence(fit_stays(stays), stays, split, np.array([0.0, 1.0]), np.zeros(1)).tolist()
    [-0.1875, 0.1875]
    """
    from scipy.sparse import csr_array

    m, k, g, n_cells = stays.n_states, stays.n_bins, buckets.n_buckets, len(fit.q)
    tables, survivors = np.atleast_2d(phi).T, np.atleast_2d(phi_survivor).T
    n_values = tables.shape[1]
    # sparse products, so that many tables cost one pass over the cells; bins first for the sums along them
    gather = csr_array((fit.q, (stays.bin * m + stays.state, np.arange(n_cells))), shape=(k * m, n_cells))
    inflow = np.asarray(gather @ tables).reshape(k, m, n_values)
    tail = fit.survival_end[:, None] * survivors
    takes, pull, sofar = pull_of(inflow, tail, fit.hazard_all.T[:, :, None], fit.at_risk.T[:, :, None])

    pulled = _direct(fit, stays)[:, None] * tables
    pulled -= (takes + sofar).reshape(k * m, n_values)[stays.bin * m + stays.state]
    found = np.asarray(buckets.by_cell @ pulled[: buckets.by_cell.shape[1]])
    if len(buckets.open_n):
        bins, states = buckets.open_size
        pulls = fit.open_weight * pull[:bins, :states] - sofar[:bins, :states]
        found += buckets.open_by_place @ pulls.reshape(bins * states, n_values)
    if len(buckets.survivor_n):
        kept = csr_array((buckets.survivor_n, (buckets.survivor_bucket, buckets.survivor_state)), shape=(g, m))
        found -= kept @ sofar[-1]
    return found[:, 0] if np.ndim(phi) == 1 else found
