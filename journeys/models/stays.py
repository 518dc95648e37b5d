"""From the tables of a tally to the stays that the kernel estimates moves from."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray, sum_at
from journeys.kernels.bins import DAY_US, bin_bounds_days, bin_of, dwell_edges, elapsed_edges
from journeys.kernels.records import FIRST_OUTCOME, LAPSED, OPEN
from journeys.kernels.stays import BucketStays, Stays
from journeys.models.memory import Placed
from journeys.tally.accumulate import Columns, join_limbs
from journeys.tally.tally import Tally


def live_buckets(tally: Tally) -> IntArray:
    """Return, for each bucket, its place among the non-empty ones, -1 for an empty one."""
    live = tally.customers["people"] > 0
    return np.where(live, np.cumsum(live) - 1, -1)


def move_stays(tally: Tally, placed: Placed, *, censored: bool) -> tuple[Stays, BucketStays]:
    """Return the stays in entry and every state, in all and by bucket.

    Parameters
    ----------
    tally : Tally
        The counts.
    placed : Placed
        Where its moves lead among the nodes of the chain.
    censored : bool
        Keep open stays, right-censored at the end of the log; False leaves them out.

    Returns
    -------
    stays : Stays
        Row 0 is entry, from sure entries only; its moves take no time.
    by_bucket : BucketStays
        The same stays by non-empty bucket.
    """
    nodes, rules, row = placed.nodes, tally.rules, placed.row
    moves = tally.moves if placed.kept.all() else {name: part[placed.kept] for name, part in tally.moves.items()}
    edges = dwell_edges(rules.silence_us, tally.whole_days)
    bucket = live_buckets(tally)
    lapse_survives = rules.silence_us is not None and rules.repeats == "keep"
    n_bins = int(moves["bin"].max()) + 1 if len(moves["n"]) else 1
    if rules.silence_us is not None and lapse_survives:
        n_bins = int(bin_of(np.array([rules.silence_us]), edges)[0]) + 1
    lower, upper = bin_bounds_days(edges, n_bins)

    is_open = moves["next"] == OPEN
    survives = (moves["next"] == LAPSED) & lapse_survives
    ended = ~is_open & ~survives
    sure = tally.entries["sure"] == 1
    whose = np.concatenate([bucket[tally.entries["bucket"][sure]], bucket[moves["bucket"][ended]]])
    state = np.concatenate([np.zeros(int(sure.sum()), np.int64), row[ended]])
    target = np.concatenate([placed.first[sure], placed.target[ended]])
    at = np.concatenate([np.zeros(int(sure.sum()), np.int64), moves["bin"][ended]])
    n = np.concatenate([tally.entries["n"][sure], moves["n"][ended]]).astype(np.float64)
    dwell = join_limbs(moves, "dwell")[ended] / DAY_US
    total = np.concatenate([np.zeros(int(sure.sum())), dwell])
    key = (state * nodes.n_nodes + target) * n_bins + at
    cells, cell = np.unique(key, return_inverse=True)
    kept = is_open & censored
    stays = Stays(
        n_states=nodes.n_rows,
        n_targets=nodes.n_nodes,
        n_bins=n_bins,
        state=cells // n_bins // nodes.n_nodes,
        target=cells // n_bins % nodes.n_nodes,
        bin=cells % n_bins,
        n=sum_at(cell, n, len(cells)),
        total=sum_at(cell, total, len(cells)),
        lower=lower,
        upper=upper,
        open_state=row[kept],
        open_bin=moves["bin"][kept],
        open_n=moves["n"][kept].astype(np.float64),
        survivor_n=sum_at(row[survives], moves["n"][survives], nodes.n_rows),
        survivor_target=None if rules.silence_us is None else nodes.n_nodes - 1,
        survivor_dwell=float(upper[-1]),
    )
    by_bucket = BucketStays(
        n_buckets=int(bucket.max()) + 1,
        bucket=whose,
        cell=cell,
        n=n,
        total=total,
        open_bucket=bucket[moves["bucket"][kept]],
        open_state=stays.open_state,
        open_bin=stays.open_bin,
        open_n=stays.open_n,
        survivor_bucket=bucket[moves["bucket"][survives]],
        survivor_state=row[survives],
        survivor_n=moves["n"][survives].astype(np.float64),
    )
    return stays, by_bucket


def without_open(stays: Stays, by_bucket: BucketStays, rows: np.ndarray) -> tuple[Stays, BucketStays]:
    """Return the same stays with the open ones of some rows (a mask over rows) left out."""
    keep = ~rows[stays.open_state]
    mine = ~rows[by_bucket.open_state]
    return (
        replace(stays, open_state=stays.open_state[keep], open_bin=stays.open_bin[keep], open_n=stays.open_n[keep]),
        replace(
            by_bucket,
            open_bucket=by_bucket.open_bucket[mine],
            open_state=by_bucket.open_state[mine],
            open_bin=by_bucket.open_bin[mine],
            open_n=by_bucket.open_n[mine],
        ),
    )


def journey_stays(tally: Tally) -> tuple[Stays, BucketStays]:
    """Return whole journeys with a sure entry as stays in one state, ended by their outcome or still open.

    Returns
    -------
    stays : Stays
        One state; column c is the outcome with code c + 1 (lapsed is column 1, see `outcome_column`).
    by_bucket : BucketStays
        The same by non-empty bucket.
    """
    table = tally.journeys
    return _one_row(tally, table, "elapsed", outcome_column, table["sure"] == 1, table["outcome"] == OPEN)


def absence_stays(tally: Tally, outcome: int) -> tuple[Stays, BucketStays]:
    """Return absences as stays in one state, ended by coming back or still open.

    Parameters
    ----------
    tally : Tally
        The counts.
    outcome : int
        Code of how the journey before the absence ended: lapsed, or an outcome.

    Returns
    -------
    stays : Stays
        One state; column 1 is coming back. Times are since the customer's last event.
    by_bucket : BucketStays
        The same by non-empty bucket.
    """
    table = tally.gaps
    kind = table["outcome"] == outcome
    return _one_row(tally, table, "away", np.ones_like, kind, table["back"] == 0)


def _one_row(
    tally: Tally,
    table: Columns,
    total: str,
    column: Callable[[IntArray], IntArray],
    mine: BoolArray,
    is_open: BoolArray,
) -> tuple[Stays, BucketStays]:
    """Return some rows of a table binned by elapsed time as stays in one state.

    `total` names the sum of times, `column` turns the outcomes of ended stays into columns, `mine` picks the
    rows and `is_open` says which of them have not ended.
    """
    rules, bucket = tally.rules, live_buckets(tally)
    edges = elapsed_edges(rules.silence_us, tally.whole_days, rules.horizons_us)
    still, ended = mine & is_open, mine & ~is_open
    n_bins = int(table["bin"][mine].max()) + 1 if mine.any() else 1
    lower, upper = bin_bounds_days(edges, n_bins)
    target = column(table["outcome"][ended].astype(np.int64))
    cells, cell = np.unique(target * n_bins + table["bin"][ended], return_inverse=True)
    n: FloatArray = table["n"][ended].astype(np.float64)
    days = join_limbs(table, total)[ended] / DAY_US
    zeros, none = np.zeros(int(still.sum()), np.int64), np.zeros(0, np.int64)
    open_n: FloatArray = table["n"][still].astype(np.float64)
    stays = Stays(
        n_states=1,
        n_targets=FIRST_OUTCOME + len(rules.outcomes) + 1,
        n_bins=n_bins,
        state=np.zeros(len(cells), np.int64),
        target=cells // n_bins,
        bin=cells % n_bins,
        n=sum_at(cell, n, len(cells)),
        total=sum_at(cell, days, len(cells)),
        lower=lower,
        upper=upper,
        open_state=zeros,
        open_bin=table["bin"][still],
        open_n=open_n,
        survivor_n=np.zeros(1),
    )
    by_bucket = BucketStays(
        n_buckets=int(bucket.max()) + 1,
        bucket=bucket[table["bucket"][ended]],
        cell=cell,
        n=n,
        total=days,
        open_bucket=bucket[table["bucket"][still]],
        open_state=zeros,
        open_bin=stays.open_bin,
        open_n=open_n,
        survivor_bucket=none,
        survivor_state=none,
        survivor_n=np.zeros(0),
    )
    return stays, by_bucket


def outcome_column(code: IntArray) -> IntArray:
    """Return the column of `journey_stays` for an outcome's code (column 0 is the journey itself)."""
    return code.astype(np.int64) + 1
